"""Angles, reserve, half widths and pull-in: units, errors, refusals."""

from __future__ import annotations

import math

import pytest
from scipy.integrate import quad

from fit.circuit import (
    adler_half_width_hz,
    angle_margin,
    drive_half_width_hz,
    loaded_quality,
    lock_angle,
    pendulum_shift_hz,
    pull_in_time_s,
    strong_beat_rate,
    strong_edge_angle_rad,
    strong_half_width_hz,
    strong_injection_rate,
    torque_reserve,
)
from fit.difference import Order
from rig.errors import FitError
from rig.quantities import Quantity, undetermined


def hz(value, u=0.0):
    """Return a quantity in hertz."""
    return Quantity(value=value, u=u, unit="Hz")


def test_angle_margin_and_reserve_of_a_three_four_five_pair():
    """Detuning 0.6 of the coupling: 36.87 degrees, 53.13 left, 40 % of the torque left."""
    assert lock_angle(hz(0.6), hz(1.0)).value == pytest.approx(math.radians(36.8698976), abs=1e-8)
    assert angle_margin(hz(-0.6), hz(1.0)).value == pytest.approx(
        math.radians(53.1301024), abs=1e-8
    )
    assert torque_reserve(hz(-0.6), hz(1.0)).value == pytest.approx(0.4)


def test_errors_are_carried_and_grow_towards_the_edge():
    """d asin(x) = dx / sqrt(1 - x^2)."""
    angle = lock_angle(hz(0.6, 0.008), hz(1.0, 0.01))
    ratio_u = math.hypot(0.008, 0.6 * 0.01)
    assert angle.u == pytest.approx(ratio_u / 0.8)
    assert torque_reserve(hz(0.6, 0.008), hz(1.0, 0.01)).u == pytest.approx(ratio_u)


def test_outside_the_region_there_is_no_angle_and_a_negative_reserve():
    """The words of the trade for "not locked"."""
    assert lock_angle(hz(1.2), hz(1.0)).value is None
    assert angle_margin(hz(1.2), hz(1.0)).value is None
    assert torque_reserve(hz(1.2), hz(1.0)).value == pytest.approx(-0.2)


@pytest.mark.parametrize("make", [lock_angle, angle_margin, torque_reserve])
def test_missing_numbers_stay_missing(make):
    """A reason travels on; a coupling of zero gives no ratio."""
    assert "coupling" in make(hz(0.1), undetermined("Hz", "steady lock")).reason
    assert "detuning" in make(undetermined("Hz", "steady lock"), hz(1.0)).reason
    assert make(hz(0.1), hz(0.0)).value is None


def test_half_width_in_drive_frequency_is_that_of_detuning_over_m():
    """At 2:3 the drive moves the detuning three times as fast."""
    wide = Quantity(value=3.0, u=0.3, unit="Hz", low=2.4, high=3.6, level=0.95)
    found = drive_half_width_hz(wide, Order(n=2, m=3))
    assert (found.value, found.u, found.low, found.high) == pytest.approx((1.0, 0.1, 0.8, 1.2))
    assert drive_half_width_hz(undetermined("Hz", "none"), Order()).value is None


@pytest.mark.parametrize(
    ("detuning", "start", "stop"),
    [
        (1.25, 0.2, 9.0),
        (1.25, -3.0, 1.0),
        (-1.25, 3.0, -8.0),
        (1.0, 0.2, 1.2),
        (1.0, 2.0, 7.0),
        (-1.0, -0.2, -1.2),
        (0.6, -1.0, 0.5),
        (0.6, -7.28, -5.78),
        (0.6, 2.6, 6.5),
        (-0.3, 1.0, 0.0),
    ],
)
def test_pull_in_time_is_the_integral_of_one_over_the_rate(detuning, start, stop):
    """Inside, at and outside the edge, both ways, over more than a turn."""
    expected = quad(lambda psi: 1.0 / (detuning - math.sin(psi)), start, stop, limit=200)[0]
    found = pull_in_time_s(detuning / math.tau, 1.0 / math.tau, start, stop)
    assert found == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize(
    ("detuning", "start", "stop"),
    [(1.25, 1.0, 0.0), (-1.25, 0.0, 1.0), (0.6, 0.0, 2.0), (0.6, 0.5, 0.0), (1.0, 1.0, 3.0)],
)
def test_angles_that_are_never_reached_are_refused(detuning, start, stop):
    """Against the drift, or across a rest angle."""
    with pytest.raises(FitError, match="never goes"):
        pull_in_time_s(detuning / math.tau, 1.0 / math.tau, start, stop)


def test_no_way_takes_no_time():
    """Start equals stop."""
    assert pull_in_time_s(0.1, 1.0, 0.3, 0.3) == 0.0


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda: adler_half_width_hz(0.0, 10.0, 0.1), "frequency"),
        (lambda: adler_half_width_hz(1e6, math.nan, 0.1), "Q"),
        (lambda: strong_half_width_hz(1e6, 10.0, 1.0), "ratio must be above 0 and below 1"),
        (lambda: strong_injection_rate(0.0, 1.0, 1.0, 1.5), "ratio"),
        (lambda: strong_beat_rate(0.5, 1.0, 0.3), "above the half width"),
        (lambda: strong_edge_angle_rad(1.2), "ratio"),
        (lambda: pull_in_time_s(0.1, 0.0, 0.0, 1.0), "coupling"),
        (lambda: pendulum_shift_hz(1.0, 4.0), "amplitude"),
    ],
)
def test_values_outside_their_range_are_refused(call, words):
    """The line names the value and its rule."""
    with pytest.raises(FitError, match=words):
        call()


def test_q_without_usable_numbers_is_missing_with_its_reason():
    """Ratios above one, no coupling, no amplitudes at the tank."""
    ratio = Quantity(value=0.2, u=0.01, unit="1")
    assert "tank" in loaded_quality(1e6, hz(10.0), None).reason
    assert "coupling" in loaded_quality(1e6, undetermined("Hz", "no sweep"), ratio).reason
    assert "(0, 1)" in loaded_quality(1e6, hz(10.0), Quantity(value=2.0, u=0.0, unit="1")).reason
