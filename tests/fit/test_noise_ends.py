"""The interval of D: its ends on the likelihood, and what a gate does to those it lets through."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.noise_ends import NOISE_GATE, cut_deviates, cut_median, errors_beyond_gate


def test_far_from_its_gate_an_interval_is_the_plain_one():
    """A gate that plays no part must not widen anything."""
    np.testing.assert_allclose(cut_deviates(np.array([5.5, np.inf])), 1.959964, atol=1e-5)
    assert cut_median(6.0) < 1e-6


def test_intervals_of_values_beyond_a_gate_hold_the_truth_as_often_as_they_say(rng):
    """Only the lucky are given where the truth lies below the gate: they must say so."""
    for truth in (-2.0, -0.5, 0.0, 1.0, 4.0):
        x = truth + rng.standard_normal(400_000)
        x = x[x > 0.0][:4000]
        low = x - cut_deviates(x)[:, 0]
        # The lower end alone is moved: it fails in 2.5 %; 4,000 values tell that to 0.25 %.
        # A truth two errors below the gate is cut by the bound on the deviate.
        assert np.mean(low > truth) < 0.035
        assert truth < -1.0 or np.mean(low > truth) > 0.015


def test_the_median_of_a_cut_value_is_unbiased(rng):
    """Half of the values given lie above, half below what the cut law makes of them."""
    x = 0.3 + rng.standard_normal(40_000)
    x = x[x > 0.0][:2000]
    middle = np.array([value - cut_median(value) for value in x.tolist()])
    # 2,000 values: the share is known to 1.1 %.
    assert np.mean(middle > 0.3) == pytest.approx(0.5, abs=0.045)


def test_a_gate_that_the_number_of_samples_decides_counts_as_far():
    """Where the error of ln D does not grow towards small D, luck has no part in what is given."""
    steady = np.array([[0.3, 0.3, 0.3], [0.3, 0.5, 0.9]])
    beyond = errors_beyond_gate(steady, 0.6, np.array([False, False]))
    assert beyond[0] == math.inf
    # Half a step of 0.6 to the gate, at errors between 0.3 and 0.4.
    assert beyond[1] == pytest.approx(0.3 / 0.35, rel=0.01)
    near = errors_beyond_gate(np.full((1, 3), 0.99 * NOISE_GATE), 0.6, np.array([True]))
    assert near[0] < 1.0
