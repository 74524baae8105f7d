"""The joint likelihood against slow and obvious versions of itself."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from fit.joint import (
    ASYMMETRY,
    CENTRE,
    COUPLING,
    DISTANCE,
    LOG_D,
    LOG_R,
    OFFSET,
    WIDTH,
    fit_joint,
    record_parameters,
)
from fit.region_fit import climb_groups, held_columns, lay_groups


@pytest.fixture(scope="module")
def groups(sweeps):
    """Two small sweeps at different levels."""
    rng = np.random.default_rng(11)
    return [
        sweeps.sweep(rng, points=7, length_s=40.0),
        sweeps.sweep(rng, points=7, length_s=40.0, coupling=0.5, level=0.5),
    ]


@pytest.fixture(scope="module")
def fitted(groups):
    """Data and joint fit of the two sweeps."""
    data = lay_groups(groups, 1)
    return data, climb_groups(data, groups, 1)


def slow_loglik(psi, step_s, theta):
    """Log-likelihood of one record by a plain scalar filter with fine Euler steps."""
    detuning, a, b, diffusion, noise = *theta[:3], math.exp(theta[3]), math.exp(theta[4])
    mean, variance, total, parts = float(psi[0]), noise, 0.0, 400
    for value in psi[1:]:
        for _ in range(parts):
            damp = math.exp(-0.5 * variance)
            push = detuning + damp * (a * math.cos(mean) + b * math.sin(mean))
            pull = 2.0 * damp * (b * math.cos(mean) - a * math.sin(mean)) * variance
            mean += push * step_s / parts
            variance += (pull + 2.0 * diffusion) * step_s / parts
        spread = variance + noise
        total -= 0.5 * (math.log(2.0 * math.pi * spread) + (value - mean) ** 2 / spread)
        gain = variance / spread
        mean += gain * (value - mean)
        variance *= 1.0 - gain
    return total


def test_the_sum_over_records_is_that_of_a_plain_filter(groups, fitted):
    """A second algorithm for the one number that everything is built on."""
    data, fit = fitted
    parameters, _ = record_parameters(data, fit.theta, fit.delta_rad_s)
    first = groups[0][:2]
    slow = [
        slow_loglik(one.series.segments[0], one.series.step_s, row)
        for one, row in zip(first, parameters, strict=False)
    ]
    # 400 Euler steps a sample are good to a few thousandths of the log-likelihood.
    assert fit.records.loglik[:2] == pytest.approx(slow, abs=0.05)


def test_derivatives_by_shared_parameters_are_those_of_differences(fitted):
    """A wrong chain rule would bend edges without any other sign."""
    data, fit = fitted
    theta = fit.theta.copy()
    theta[:, ASYMMETRY], theta[:, DISTANCE] = 0.03, -0.02
    _, jacobian = record_parameters(data, theta, fit.delta_rad_s)
    for column in range(WIDTH):
        moved = [theta.copy(), theta.copy()]
        moved[0][:, column] -= 1e-6
        moved[1][:, column] += 1e-6
        low, high = (record_parameters(data, one, fit.delta_rad_s)[0] for one in moved)
        assert jacobian[:, :, column] == pytest.approx((high - low) / 2e-6, abs=1e-7)


def test_a_group_does_not_depend_on_its_neighbours(groups, fitted):
    """The same bytes alone and in company: results must not depend on how work is split."""
    data, fit = fitted
    held = held_columns(groups)
    both = fit_joint(data, fit.theta, held)
    alone = fit_joint(data.of_groups(np.array([1])), fit.theta[1:], held[1:])
    assert alone.theta.tobytes() == both.theta[1:].tobytes()


def test_the_maximum_is_one(fitted):
    """Moving any free parameter by half a standard error costs likelihood."""
    data, fit = fitted
    held = np.ones((2, WIDTH), dtype=bool)
    for column in (CENTRE, COUPLING, OFFSET, LOG_D):
        for side in (-0.5, 0.5):
            moved = fit.theta.copy()
            moved[:, column] += side * np.sqrt(fit.covariance[:, column, column])
            assert np.all(fit_joint(data, moved, held).loglik < fit.loglik)


def test_a_start_half_a_turn_away_ends_at_the_same_curve(groups, fitted):
    """K < 0 with psi0 turned by pi is the same equation and must be told as K > 0."""
    data, fit = fitted
    start = fit.theta.copy()
    start[:, COUPLING] *= -1.0
    start[:, OFFSET] += math.pi
    again = fit_joint(data, start, held_columns(groups))
    assert again.theta[:, COUPLING] == pytest.approx(fit.theta[:, COUPLING], rel=1e-6)
    assert np.all(again.theta[:, COUPLING] > 0)


def test_single_detunings_take_up_what_they_are_allowed(groups):
    """Points whose drive is known to 0.05 rad/s only widen the edges by about that."""
    moved = [[replace(one, drive_u_hz=0.05 / math.tau) for one in group] for group in groups]
    data = lay_groups(moved, 1)
    exact = climb_groups(lay_groups(groups, 1), groups, 1)
    loose = climb_groups(data, moved, 1)
    assert loose.converged.all()
    ratio = loose.covariance[:, CENTRE, CENTRE] / exact.covariance[:, CENTRE, CENTRE]
    assert np.all(ratio > 1.1)
    assert np.all(np.abs(loose.delta_rad_s) < 4 * 0.05)


def test_noise_free_phases_do_not_run_away(sweeps):
    """Without measurement noise ln R has no maximum; the fit must still settle."""
    group = sweeps.sweep(np.random.default_rng(3), points=7, length_s=60.0, sigma=0.0)
    fit = climb_groups(lay_groups([group], 1), [group], 1)
    assert fit.converged.all()
    assert np.isfinite(fit.theta[:, [LOG_D, LOG_R]]).all()


def test_a_recorder_too_quiet_to_be_seen_does_not_hold_the_climb_up(sweeps):
    """ln R then asks for endless steps; cutting the whole step to suit took 61 rounds for 4."""
    group = sweeps.sweep(np.random.default_rng(3), points=11, length_s=60.0, sigma=5e-4)
    fit = climb_groups(lay_groups([group], 1), [group], 1)
    assert fit.converged.all()
    assert fit.evaluations < 20
