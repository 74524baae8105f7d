"""Up minus down of an edge: names, test, what the motion of the drive is allowed."""

from __future__ import annotations

import re

import pytest

from fit.hysteresis import SweepMotion, edge_hysteresis
from fit.records import RegionLevel
from rig.errors import FitError
from rig.quantities import undetermined


@pytest.fixture
def pair(sweeps):
    """Make an up and a down level from (lower, upper) edges, each with u = 0.01 Hz."""

    def make(up, down):
        none = undetermined("Hz", "not of interest")

        def level(direction, edges):
            lower, upper = (none if one is None else sweeps.known(one, 0.01) for one in edges)
            return RegionLevel(
                level=1.0,
                amplitude=1.0,
                direction=direction,
                interval=1,
                lower_hz=lower,
                upper_hz=upper,
                width_hz=none,
                coupling_hz=sweeps.known(1.0, 0.01),
                offset_rad=none,
                method="",
                bracket_lower_hz=none,
                bracket_upper_hz=none,
            )

        return [level("up", up), level("down", down)]

    return make


def test_edges_are_named_after_gain_and_loss_of_lock(pair):
    """Sweeping up, lock is gained at the lower edge (pull-in) and lost at the upper (hold-in)."""
    lower, upper = edge_hysteresis(pair((9.0, 11.0), (9.0, 11.0)))
    assert lower.note.startswith("up: pull-in edge")
    assert upper.note.startswith("up: hold-in edge")
    assert lower.p_value == pytest.approx(1.0)


def test_lock_held_longer_than_gained_is_hysteresis(pair):
    """Both differences are positive and sure."""
    lower, upper = edge_hysteresis(pair((9.1, 11.1), (9.0, 11.0)))
    for one in (lower, upper):
        assert one.value_hz.value == pytest.approx(0.1)
        assert one.p_value < 0.01
        assert "lock is held further" in one.note


def test_the_wrong_sign_points_to_drift(pair):
    """Lock gained further out than it is held cannot be hysteresis."""
    lower, _ = edge_hysteresis(pair((8.9, 11.0), (9.0, 11.0)))
    assert "drift" in lower.note


def test_a_step_of_the_sweep_is_allowed_for(pair):
    """A difference no larger than the drive moved in between is not hysteresis."""
    lower, _ = edge_hysteresis(pair((9.1, 11.1), (9.0, 11.0)), SweepMotion(step_hz=0.1))
    assert lower.p_value == pytest.approx(1.0)
    assert "allowed for the motion" in lower.note


def test_an_open_edge_has_no_hysteresis(pair):
    """One direction without the edge: no value, and the reason."""
    lower, _ = edge_hysteresis(pair((None, 11.0), (9.0, 11.0)))
    assert lower.value_hz.value is None
    assert lower.p_value is None


def test_motion_that_means_nothing_is_refused():
    """A negative rate is a slip of the pen."""
    with pytest.raises(FitError, match=re.escape("at least 0")):
        SweepMotion(rate_hz_s=-1.0)
