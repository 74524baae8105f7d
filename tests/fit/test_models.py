"""Closed form of the phase equation against integration, itself, and its own symmetries."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from fit.models import (
    PhaseEquation,
    beat_rate_rad_s,
    pull_in_time_s,
    relaxation_rate_rad_s,
    rest_angle_rad,
    trajectory,
    trajectory_slopes,
)
from rig.errors import FitError

PAIRS = [
    (1.25, 1.0, 0.3, 1.0),
    (-1.25, 1.0, 0.3, 1.0),
    (0.6, 1.0, -0.4, 2.0),
    (-0.6, 1.0, 0.0, -2.0),
    (1.0, 1.0, 0.0, 0.3),
    (1.0 + 1e-9, 1.0, 0.0, 0.3),
    (1.0 - 1e-9, 1.0, 0.0, 0.3),
    (3.0, 0.0, 1.0, 2.0),
    (0.0, 1.0, 0.0, 3.0),
    (0.0, 0.0, 0.0, 1.0),
    (-3.0, 1.0, 2.0, -9.0),
]


def pair(dw: float, k: float, psi0: float = 0.0) -> PhaseEquation:
    """Short form of the record."""
    return PhaseEquation(detuning_rad_s=dw, coupling_rad_s=k, offset_rad=psi0)


@pytest.mark.parametrize(("dw", "k", "psi0", "start"), PAIRS)
def test_closed_form_equals_step_by_step_integration(dw, k, psi0, start):
    """One formula must serve drifting, critical and locked pairs, or fits jump at the edge."""
    time_s = np.linspace(0.0, 60.0, 61)
    slow = solve_ivp(
        lambda _, y: dw - k * np.sin(y - psi0),
        (0.0, 60.0),
        [start],
        method="DOP853",
        t_eval=time_s,
        rtol=1e-12,
        atol=1e-12,
    ).y[0]
    # 1e-8 rad: the integrator's own error over 60 time units.
    np.testing.assert_allclose(trajectory(pair(dw, k, psi0), start, time_s), slow, atol=1e-8)


@pytest.mark.parametrize(("dw", "k", "psi0", "start"), PAIRS)
def test_slopes_equal_differences_of_the_trajectory(dw, k, psi0, start):
    """Wrong derivatives would give wrong standard errors without any other sign."""
    time_s, h = np.linspace(-3.0, 20.0, 47), 1e-6
    slopes = trajectory_slopes(pair(dw, k, psi0), start, time_s)
    ends = [
        (pair(dw + h, k, psi0), pair(dw - h, k, psi0), start, start),
        (pair(dw, k + h, psi0), pair(dw, k, psi0), start, start),
        (pair(dw, k, psi0 + h), pair(dw, k, psi0 - h), start, start),
        (pair(dw, k, psi0), pair(dw, k, psi0), start + h, start - h),
    ]
    for column, (above, below, high, low) in enumerate(ends):
        width = h if column == 1 else 2.0 * h
        rough = (trajectory(above, high, time_s) - trajectory(below, low, time_s)) / width
        # One-sided by the coupling (it may be 0): error of order h times the curvature.
        scale = 1.0 + np.max(np.abs(rough))
        np.testing.assert_allclose(slopes[:, column], rough, atol=2e-4 * scale)


@pytest.mark.parametrize(("dw", "k"), [(1.25, 1.0), (0.3, 1.0), (1.0, 1.0), (-7.0, 2.0)])
def test_two_legs_equal_one(dw, k):
    """The flow has no memory: going on from where the first leg ended changes nothing."""
    equation = pair(dw, k, 0.4)
    middle = trajectory(equation, 1.0, np.array([3.7]))[0]
    two = trajectory(equation, middle, np.array([5.1]))[0]
    assert two == pytest.approx(trajectory(equation, 1.0, np.array([8.8]))[0], abs=1e-10)


def test_swapping_the_oscillators_mirrors_the_trajectory():
    """psi changes sign with the roles: detuning, offset and start change theirs."""
    time_s = np.linspace(0.0, 30.0, 100)
    forward = trajectory(pair(1.3, 1.0, 0.4), 0.9, time_s)
    mirrored = trajectory(pair(-1.3, 1.0, -0.4), -0.9, time_s)
    np.testing.assert_allclose(mirrored, -forward, atol=1e-12)


def test_long_locked_records_do_not_overflow():
    """exp(K t) of a day at 1 rad/s is beyond any float; the formula scales it out."""
    psi = trajectory(pair(0.6, 1.0), 2.0, np.array([1e3, 1e6, 1e9]))
    np.testing.assert_allclose(psi, math.asin(0.6), atol=1e-12)
    assert np.all(np.isfinite(trajectory_slopes(pair(0.6, 1.0), 2.0, np.array([1e6]))))


def test_turns_are_counted_without_samples_between():
    """A single late time must come out unwrapped: 1e6 beats of the 3-4-5 pair."""
    beat_s = 2.0 * math.pi / 0.75
    psi = trajectory(pair(1.25, 1.0), 0.2, np.array([1e6 * beat_s]))[0]
    # Rounding of the time (1e-16 relative) shifts the phase by 1e-9 of 6e6 rad.
    assert psi == pytest.approx(0.2 + 2e6 * math.pi, abs=1e-7)


@pytest.mark.parametrize("start", [2.6, 3.0, -2.9, -1.0, 0.2, 1.5])
@pytest.mark.parametrize("dw", [0.6, -0.6, 0.0])
def test_pull_in_time_is_when_the_trajectory_arrives(start, dw):
    """Starts on either side of the unstable point, and beyond it, take the right way round."""
    equation = pair(dw, 1.0, 0.1)
    end_s = pull_in_time_s(equation, start, 0.01)
    left = trajectory(equation, start, np.array([end_s]))[0] - rest_angle_rad(equation)
    assert abs(math.remainder(left, math.tau)) == pytest.approx(0.01, abs=1e-9)


def test_within_the_angle_already_takes_no_time():
    """A pair that starts at rest must not be given a negative time."""
    assert pull_in_time_s(pair(0.6, 1.0), math.asin(0.6) + 0.005, 0.01) == 0.0


def test_rates_vanish_outside_their_region():
    """A locked pair has no beat and a drifting one no relaxation."""
    assert beat_rate_rad_s(pair(0.5, 1.0)) == 0.0
    assert relaxation_rate_rad_s(pair(2.0, 1.0)) == 0.0
    assert beat_rate_rad_s(pair(-1.25, 1.0)) == -0.75


@pytest.mark.parametrize(
    ("action", "text"),
    [
        (lambda: pair(math.nan, 1.0), "detuning_rad_s must be finite"),
        (lambda: pair(1.0, -0.1), "coupling must be at least 0"),
        (lambda: rest_angle_rad(pair(2.0, 1.0)), "the pair drifts"),
        (lambda: pull_in_time_s(pair(2.0, 1.0), 0.0, 0.1), "the pair drifts"),
        (lambda: pull_in_time_s(pair(0.5, 1.0), 0.0, 0.0), "angle above 0"),
        (lambda: pull_in_time_s(pair(1.0, 1.0), 0.0, 0.1), "inside the edge"),
    ],
)
def test_what_has_no_answer_is_refused(action, text):
    """A number for the rest angle of a drifting pair would be read as a lock."""
    with pytest.raises(FitError, match=text):
        action()
