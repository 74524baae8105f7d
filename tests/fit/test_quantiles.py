"""Quantiles of chi-square, gamma, Student and normal against a witness library and tables."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import special

from fit.bessel import scaled_bessel
from fit.quantiles import chi_square_above, gamma_above, normal_above, student_above

FREEDOMS = (0.5, 0.75, 1.0, 1.5, 2.0, 3.0, 4.7, 9.0, 20.0, 33.3, 257.3, 999.0, 1001.0, 9999.0,
            10001.0, 1e5, 1e6, 2e12)  # fmt: skip
TAILS = (0.99999, 0.99, 0.975, 0.9, 0.5, 0.3, 0.05, 0.025, 0.01, 1e-3, 1e-6)
# The witness itself is good to about 1e-13; thresholds are used to three digits.
CLOSE = 2e-12


@pytest.mark.parametrize("freedom", FREEDOMS)
def test_chi_square_quantiles_are_those_of_the_witness(freedom: float) -> None:
    """Intervals of variances and sizes of tests rest on them."""
    for tail in TAILS:
        wanted = float(special.chdtri(freedom, tail))
        assert chi_square_above(freedom, tail) == pytest.approx(wanted, rel=CLOSE)


@pytest.mark.parametrize("freedom", FREEDOMS)
def test_student_quantiles_are_those_of_the_witness(freedom: float) -> None:
    """Every interval that widens with few degrees of freedom rests on them."""
    for tail in (one for one in TAILS if one < 0.5):
        wanted = -float(special.stdtrit(freedom, tail))
        assert student_above(freedom, tail) == pytest.approx(wanted, rel=CLOSE)


@pytest.mark.parametrize("shape", [1, 2, 7, 50, 4999, 5001, 100_000])
def test_gamma_quantiles_are_those_of_the_witness(shape: int) -> None:
    """The exact interval of a count of slips rests on them."""
    for tail in TAILS:
        wanted = float(special.gammainccinv(shape, tail))
        assert gamma_above(shape, tail) == pytest.approx(wanted, rel=CLOSE)


def test_normal_quantiles_are_those_of_the_witness() -> None:
    """The expansions at many degrees of freedom start from them."""
    for tail in (*TAILS, 1e-12, 1e-300):
        wanted = -float(special.ndtri(tail))
        assert normal_above(tail) == pytest.approx(wanted, rel=1e-14, abs=1e-15)


def test_quantiles_turn_back_into_their_tails() -> None:
    """The witness' tails, not its quantiles: a shared error of inversion would not show above."""
    for freedom in (0.5, 3.0, 41.5, 800.0):
        for tail in (0.9, 0.3, 0.025, 1e-4):
            found = special.chdtrc(freedom, chi_square_above(freedom, tail))
            assert found == pytest.approx(tail, rel=1e-11)
        for tail in (0.3, 0.025, 1e-4):
            found = special.stdtr(freedom, -student_above(freedom, tail))
            assert found == pytest.approx(tail, rel=1e-11)


def test_scaled_bessel_function_is_that_of_the_witness() -> None:
    """The mean rate of a noisy pair is an integral over it; both branches and their seam."""
    x = np.concatenate([[0.0], np.geomspace(1e-8, 1e12, 20_000), np.linspace(450.0, 550.0, 1001)])
    # Rounding of the product of a large and a small exponential.
    np.testing.assert_allclose(scaled_bessel(x), special.i0e(x), rtol=2e-15)
    small = x[x < 400.0]
    np.testing.assert_allclose(scaled_bessel(small), special.i0e(small), rtol=2e-15)
