"""Ends of likelihood-ratio intervals: at the threshold, and the extreme there."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.adler_fit import AdlerSettings, fit_records
from fit.intervals import TARGETS, coupling_rad_s, offset_rad, student_threshold, target_slopes
from fit.likelihood import ScoringRules, fit_lanes, make_lanes, record_likelihood
from fit.records import PsiSeries


@pytest.fixture(scope="module")
def fitted():
    """One drifting record with its fit and all ends."""
    rng = np.random.default_rng(5)
    psi, seen = 0.0, np.empty(500)
    for index in range(seen.size):
        seen[index] = psi
        for _ in range(20):
            shock = math.sqrt(2.0 * 0.03 * 0.01) * rng.standard_normal()
            psi += 0.01 * (1.5 - math.sin(psi - 0.7)) + shock
    seen += 0.1 * rng.standard_normal(seen.size)
    record = PsiSeries(step_s=0.2, segments=(seen,), start_s=(0.0,))
    return record, fit_records([record], [None], AdlerSettings())[0]


@pytest.mark.parametrize("side", [-1.0, 1.0])
@pytest.mark.parametrize("name", sorted(TARGETS))
def test_each_end_lies_at_its_threshold(fitted, name, side):
    """The interval is where the likelihood has fallen by half the threshold."""
    record, fit = fitted
    batch, owner = make_lanes([record], 64)
    top = fit_lanes(batch, owner, fit.theta[None]).loglik[0]
    end = record_likelihood(batch, owner, fit.ends[name, side][None]).loglik[0]
    # 0.02 is the tolerance of the search, the lanes may be cut elsewhere.
    assert top - end == pytest.approx(0.5 * fit.thresholds[name], abs=0.1)


@pytest.mark.parametrize("side", [-1.0, 1.0])
def test_the_end_of_the_detuning_equals_a_profile(fitted, side):
    """With dw held at the end, no other parameters may reach a higher likelihood."""
    record, fit = fitted
    end = fit.ends["detuning", side]
    batch, owner = make_lanes([record], 64)
    free = fit_lanes(batch, owner, fit.theta[None])
    held = fit_lanes(batch, owner, end[None], rules=ScoringRules(held=(0,)))
    fall = free.loglik[0] - held.loglik[0]
    assert fall == pytest.approx(0.5 * fit.thresholds["detuning"], abs=0.15)


def test_slopes_equal_differences():
    """A wrong gradient would send the search to the wrong place without a word."""
    theta = np.array([[1.5, 0.6, -0.8, -3.5, -4.6]])
    for name, value in (("coupling", coupling_rad_s), ("offset", offset_rad)):
        slope = target_slopes(theta, (name,))[0]
        for column in range(5):
            step = np.zeros((1, 5))
            step[0, column] = 1e-6
            rough = (value(theta + step) - value(theta - step))[0] / 2e-6
            assert slope[column] == pytest.approx(rough, abs=1e-8)


def test_the_threshold_is_the_normal_one_for_long_records_and_bounded_for_short_ones():
    """3.84 with everything known; never beyond Student's at five degrees of freedom."""
    thresholds = student_threshold(np.array([1e9, 20.0, 5.0, 0.1]))
    np.testing.assert_allclose(thresholds, [3.8415, 4.3512, 6.6079, 6.6079], atol=1e-3)
