"""Quantiles that came out wrong far in a tail; each names the symptom."""

from __future__ import annotations

import pytest
from scipy import special

from fit.quantiles import chi_square_above


@pytest.mark.parametrize("freedom", [5000.0, 9542.66, 1e4])
@pytest.mark.parametrize("tail", [1e-18, 1.66e-14, 1e-13, 1 - 1e-15])
def test_a_chi_square_of_many_degrees_has_its_far_tails(freedom: float, tail: float) -> None:
    """Used to be four times too large, or 1e-40: steps went to and fro past the root."""
    wanted = 2.0 * special.gammainccinv(freedom / 2.0, tail)
    # Either side computes with a tail rounded to 1e-16, which moves a quantile by far less.
    assert chi_square_above(freedom, tail) == pytest.approx(wanted, rel=1e-8)
