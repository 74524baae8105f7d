"""Angles: wrapping, conversions, and averages on the circle."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from rig.angles import (
    TURN_RAD,
    circular_mean_rad,
    circular_spread_rad,
    deg_from_rad,
    hz_from_rad_s,
    mean_vector,
    rad_from_deg,
    rad_from_turns,
    rad_s_from_hz,
    resultant_length,
    turns_from_rad,
    wrap_angle_rad,
    wrap_rad,
)

ANGLES = st.floats(-1e6, 1e6)


@given(ANGLES)
def test_a_wrapped_angle_lies_in_one_turn_and_means_the_same(angle_rad):
    """Half open: half a turn has one name, not two."""
    wrapped = wrap_angle_rad(angle_rad)
    assert -math.pi < wrapped <= math.pi
    # Rounding of the angle itself, at most 1e6 times 1.1e-16, and of the turn.
    turns = (angle_rad - wrapped) / TURN_RAD
    assert turns == pytest.approx(round(turns), abs=1e-9)
    assert wrap_angle_rad(wrapped) == pytest.approx(wrapped, abs=1e-15)


@given(st.lists(ANGLES, min_size=1, max_size=20))
def test_arrays_wrap_as_single_angles_do(angles_rad):
    """Two functions, one rule."""
    one_by_one = [wrap_angle_rad(angle) for angle in angles_rad]
    np.testing.assert_array_equal(wrap_rad(np.array(angles_rad)), one_by_one)


@pytest.mark.parametrize(
    ("angle_rad", "wrapped_rad"),
    [
        (0.0, 0.0),
        (math.pi, math.pi),
        (-math.pi, math.pi),
        (3 * math.pi, math.pi),
        (math.nextafter(math.pi, 4.0), math.pi),
        (-3.1415926, -3.1415926),
        (1.5 * math.pi, -0.5 * math.pi),
        (-7.0, 2 * math.pi - 7.0),
    ],
)
def test_ends_of_the_turn(angle_rad, wrapped_rad):
    """The next number above pi once came back as -pi, outside the promised interval."""
    assert wrap_angle_rad(angle_rad) == pytest.approx(wrapped_rad, abs=1e-15)
    assert float(wrap_rad(np.array(angle_rad))) == pytest.approx(wrapped_rad, abs=1e-15)


def test_a_missing_angle_stays_missing():
    """Holes in a record are NaN and must not turn into an angle."""
    wrapped = wrap_rad(np.array([math.nan, 7.0]))
    assert math.isnan(wrapped[0])
    assert wrapped[1] == pytest.approx(7.0 - TURN_RAD)
    assert math.isnan(wrap_angle_rad(math.nan))


def test_conversions_have_their_fixed_points():
    """A factor of 2 pi in the wrong place is the oldest error of the trade."""
    assert rad_from_turns(0.25) == pytest.approx(math.pi / 2, rel=1e-15)
    assert turns_from_rad(math.pi) == pytest.approx(0.5, rel=1e-15)
    assert rad_from_deg(180.0) == pytest.approx(math.pi, rel=1e-15)
    assert deg_from_rad(math.pi / 3) == pytest.approx(60.0, rel=1e-14)
    assert rad_s_from_hz(50.0) == pytest.approx(314.1592653589793, rel=1e-15)
    assert hz_from_rad_s(TURN_RAD) == pytest.approx(1.0, rel=1e-15)


@given(st.floats(-1e9, 1e9))
def test_conversions_undo_each_other(value):
    """There and back costs rounding and nothing else."""
    for there, back in (
        (rad_from_turns, turns_from_rad),
        (rad_from_deg, deg_from_rad),
        (rad_s_from_hz, hz_from_rad_s),
    ):
        assert back(there(value)) == pytest.approx(value, rel=1e-14, abs=1e-300)


@given(st.floats(-3.0, 3.0), st.integers(-1000, 1000), st.floats(0.0, 1.5))
def test_the_mean_of_two_angles_lies_between_them(centre_rad, turns, half_rad):
    """Whatever turns either has made."""
    pair = np.array([centre_rad - half_rad, centre_rad + half_rad + turns * TURN_RAD])
    assert abs(wrap_angle_rad(circular_mean_rad(pair) - centre_rad)) < 1e-9
    assert resultant_length(pair) == pytest.approx(math.cos(half_rad), abs=1e-9)


def test_angles_either_side_of_half_a_turn_average_there():
    """An arithmetic mean of 179 and -179 degrees is 0: the wrong side of the machine."""
    mean = circular_mean_rad(np.radians([179.0, -179.0, 180.0]))
    assert abs(mean) == pytest.approx(math.pi, abs=1e-12)


def test_resultant_length_runs_from_zero_to_one():
    """Equal angles give 1 and never more by rounding; evenly spread ones give 0."""
    equal = np.full(1001, 0.7)
    assert resultant_length(equal) <= 1.0
    assert resultant_length(equal) == pytest.approx(1.0, abs=1e-12)
    even = np.arange(12) * TURN_RAD / 12
    assert resultant_length(even) == pytest.approx(0.0, abs=1e-12)
    assert abs(mean_vector(equal)) == pytest.approx(1.0, abs=1e-12)


def test_spread_of_narrow_angles_is_their_deviation(rng):
    """For small angles the circle is a line."""
    angles_rad = 2.9 + 0.05 * rng.standard_normal(20_000)
    # The circle's curvature adds s^2/4 of it, 0.06 %.
    assert circular_spread_rad(angles_rad) == pytest.approx(np.std(angles_rad), rel=1e-3)


def test_spread_of_even_angles_is_large_but_finite():
    """A report must be able to print it."""
    even = np.arange(4) * TURN_RAD / 4
    assert 5.0 < circular_spread_rad(even) < 50.0
    assert circular_spread_rad(np.array([0.0, math.pi])) > 5.0


def test_the_mean_of_nothing_is_refused():
    """A silent NaN would travel far before anyone asked."""
    with pytest.raises(ValueError, match="mean of no angles: at least 1 needed, got 0"):
        circular_mean_rad(np.array([]))
