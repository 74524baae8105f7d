"""Allan deviations of the two data sets of NIST Special Publication 1065."""

from __future__ import annotations

import numpy as np
import pytest

from fit.allan import DEVIATIONS

NINE = [892.0, 809.0, 823.0, 798.0, 671.0, 644.0, 883.0, 903.0, 677.0]


def time_errors(fractional):
    """Return the time error whose slope is the given fractional frequency, step 1 s."""
    return np.concatenate([[0.0], np.cumsum(fractional)])


def thousand():
    """Return the 1000 values of the congruential generator of the publication."""
    value, values = 1234567890, []
    for _ in range(1000):
        values.append(value / 2147483647.0)
        value = 16807 * value % 2147483647
    return np.array(values)


@pytest.mark.parametrize(
    ("name", "factor", "printed"),
    [
        ("allan", 1, 91.22945),
        ("allan", 2, 115.8082),
        ("overlapping", 1, 91.22945),
        ("overlapping", 2, 85.95287),
        ("modified", 1, 91.22945),
        ("modified", 2, 74.78849),
    ],
)
def test_nine_values_of_the_monograph(name, factor, printed):
    """The smallest published set: each figure to its printed digits."""
    # Source: Riley 2008, NIST Special Publication 1065, section 12.1 (from NBS Monograph 140).
    # Read: via the tests of a public library that quote pages 107 and 108.
    # Printed: 91.22945, 115.8082 (Allan); 85.95287 (overlapping); 74.78849 (modified).
    # Converted: fractional frequencies summed to time errors, step 1.
    # Tolerance: half a unit of the last of seven printed digits.
    found = DEVIATIONS[name](time_errors(NINE), 1.0, factor)
    assert found == pytest.approx(printed, rel=6e-7)


@pytest.mark.parametrize(
    ("name", "printed"),
    [
        ("allan", (0.2922319, 0.09965736, 0.03897804)),
        ("overlapping", (0.2922319, 0.09159953, 0.03241343)),
        ("modified", (0.2922319, 0.06172376, 0.02170921)),
    ],
)
def test_thousand_values_of_the_publication(name, printed):
    """White frequency noise by a stated generator, averaging times 1, 10 and 100."""
    # Source: Riley 2008, NIST Special Publication 1065, section 12.2, tables 31 and 32.
    # Read: via the tests of a public library that quote page 108.
    # Printed: seven digits at 1, 10, 100 (see the parameters).
    # Converted: fractional frequencies summed to time errors, step 1.
    # Tolerance: half a unit of the last printed digit.
    values = time_errors(thousand())
    found = [DEVIATIONS[name](values, 1.0, factor) for factor in (1, 10, 100)]
    assert found == pytest.approx(printed, rel=6e-7)


def test_generator_gives_the_printed_start():
    """A wrong generator would make the other test meaningless."""
    # Source: Riley 2008, NIST Special Publication 1065, section 12.2.
    # Read: via the tests of a public library; statistics recalled.
    # Printed: next integers 395529916, 1209410747, 633705974; mean 0.4897745.
    # Converted: divided by 2147483647.
    # Tolerance: exact integers; half a unit of the last printed digit of the mean.
    values = thousand()
    assert np.rint(values[1:4] * 2147483647.0).tolist() == [395529916, 1209410747, 633705974]
    assert values.mean() == pytest.approx(0.4897745, abs=5e-8)
