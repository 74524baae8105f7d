"""What a phase band takes off the increments of a diffusing phase, by theory and by simulation."""

from __future__ import annotations

import math

import numpy as np
import pytest

from rig.phases.taps import half_length, lost_time, low_pass_taps


def walk_moves(taps, step, rng):
    """Variance of moves over a step of filtered random walks, and covariance of neighbours."""
    variances, covariances = [], []
    for _ in range(60):
        shocks = rng.standard_normal(80_000)
        # Filtering commutes with summing: the walk of filtered shocks is the filtered walk.
        filtered = np.cumsum(np.convolve(shocks, taps, mode="valid"))
        moves = np.diff(filtered[::step])
        variances.append(np.mean(moves**2))
        covariances.append(np.mean(moves[1:] * moves[:-1]))
    return np.mean(variances), np.mean(covariances), np.std(covariances) / math.sqrt(60)


def test_an_ideal_low_pass_misses_its_band_over_pi_squared():
    """c = 1/(pi^2 B) for the ideal filter; a steep one comes near."""
    taps = low_pass_taps(0.05, half_length(0.0005, 60.0), 60.0)
    assert lost_time(taps) == pytest.approx(1.0 / (math.pi**2 * 0.05), rel=0.01)


def test_a_moving_mean_misses_a_third_of_its_length():
    """r is a triangle, the integral of |s| r(s) a third of its half-width."""
    assert lost_time(np.full(400, 1.0 / 400)) == pytest.approx(400 / 3.0, rel=0.005)


def test_increments_of_a_filtered_walk_miss_that_time(rng):
    """Variance step - c and neighbour covariance c/2, per unit variance of a shock (2 D = 1)."""
    half = 0.04
    taps = low_pass_taps(half * 1.075, half_length(0.15 * half, 80.0), 80.0)
    step = round(2.0 / half)
    variance, covariance, error = walk_moves(taps, step, rng)
    lost = lost_time(taps)
    # 60 runs of 1,590 moves: 0.5 % of the step; the ripple of the filter adds 0.2 %.
    assert step - variance == pytest.approx(lost, abs=0.008 * step)
    assert covariance == pytest.approx(0.5 * lost, abs=4.0 * error + 0.002 * step)
    # Without the correction the move would be 5 % short.
    assert lost > 0.04 * step
