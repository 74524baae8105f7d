"""Allan deviations: plain witnesses, noise types, confidence."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.allan import (
    DEVIATIONS,
    NOISE_NAMES,
    describe_noise,
    equivalent_freedom,
    noise_exponent,
    stability_table,
)
from rig.errors import FitError


def power_law(rng, alpha, count):
    """Return time errors whose fractional frequency has the spectral density f^alpha."""
    size = 1 << (2 * count - 1).bit_length()
    f = np.fft.rfftfreq(size)
    f[0] = f[1]
    white = rng.standard_normal(f.size) + 1j * rng.standard_normal(f.size)
    fractional = np.fft.irfft(white * f ** (alpha / 2.0), size)[:count]
    return np.concatenate([[0.0], np.cumsum(fractional)])


@pytest.mark.parametrize("factor", [1, 3, 10])
def test_overlapping_and_modified_agree_with_their_definitions(rng, factor):
    """The slow way: frequency averages formed one by one."""
    x = np.cumsum(rng.standard_normal(200))
    pairs = [
        ((x[i + 2 * factor] - x[i + factor]) - (x[i + factor] - x[i])) / factor
        for i in range(x.size - 2 * factor)
    ]
    slow = math.sqrt(0.5 * np.mean(np.square(pairs)))
    assert DEVIATIONS["overlapping"](x, 1.0, factor) == pytest.approx(slow, rel=1e-12)
    means = [np.mean(pairs[k : k + factor]) for k in range(len(pairs) - factor + 1)]
    slow = math.sqrt(0.5 * np.mean(np.square(means)))
    assert DEVIATIONS["modified"](x, 1.0, factor) == pytest.approx(slow, rel=1e-12)


@pytest.mark.parametrize("name", sorted(DEVIATIONS))
def test_frequency_offset_and_scale_do_what_they_must(rng, name):
    """A constant frequency changes nothing; doubled errors double the deviation."""
    x = np.cumsum(rng.standard_normal(300))
    plain = DEVIATIONS[name](x, 0.5, 4)
    assert DEVIATIONS[name](x + 3.0 * np.arange(300), 0.5, 4) == pytest.approx(plain, rel=1e-9)
    assert DEVIATIONS[name](2.0 * x, 0.5, 4) == pytest.approx(2.0 * plain, rel=1e-12)


@pytest.mark.parametrize("alpha", sorted(NOISE_NAMES))
def test_noise_types_are_told_apart(alpha):
    """Synthetic noise of each type is named as such at the shortest averaging time."""
    rng = np.random.default_rng(alpha + 10)
    found = [noise_exponent(power_law(rng, alpha, 2000), 1) for _ in range(20)]
    assert np.mean([one == alpha for one in found]) >= 0.8


@pytest.mark.parametrize("alpha", [0, -1, -2])
def test_degrees_of_freedom_match_the_spread_of_the_variance(alpha):
    """Relative variance of an Allan variance is 2 / freedom."""
    rng = np.random.default_rng(30 - alpha)
    for factor in (1, 8):
        values = [
            DEVIATIONS["overlapping"](power_law(rng, alpha, 255), 1.0, factor) ** 2
            for _ in range(400)
        ]
        freedom = 2.0 * np.mean(values) ** 2 / np.var(values)
        # 400 draws give the freedom to about 10 %; the formulas are good to some 20 %.
        assert equivalent_freedom(alpha, 256, factor) == pytest.approx(freedom, rel=0.4)


def test_table_stops_where_too_little_is_left(rng):
    """Averaging times reach a quarter of the record; a short record has no table."""
    rows = stability_table(np.cumsum(rng.standard_normal(100)), 0.1)
    assert rows[-1].averaging_s <= 100 * 0.1 / 4.0
    assert all(row.low < row.deviation < row.high for row in rows)
    assert stability_table(np.arange(10.0), 0.1) == ()
    assert describe_noise((), 10) == "not determined"


@pytest.mark.parametrize("factor", [0, 60])
def test_factors_beyond_the_record_are_refused(factor):
    """The message says how many samples are needed."""
    with pytest.raises(FitError, match="samples"):
        DEVIATIONS["overlapping"](np.zeros(100), 1.0, factor)


def test_unknown_noise_is_refused_with_the_known_ones():
    """No silent fallback to another type."""
    with pytest.raises(FitError, match="-2, -1, 0, 1, 2"):
        equivalent_freedom(3, 100, 1)
