"""What a plan promises, against simulation, and the order of a campaign."""

from __future__ import annotations

import math
import re

import numpy as np
import pytest

from fit.difference import Order
from fit.plan_next import NextGoal, next_points
from fit.planning import (
    Expected,
    PlanSettings,
    at_level,
    edge_u_hz,
    plan_edges,
    point_information,
    record_length_s,
    spread_points,
)
from fit.region import RegionRules, fit_region
from rig.errors import FitError

TURN = 2.0 * math.pi
PAIR = Expected(coupling_hz=1.0 / TURN, noise_rad2_s=0.03, measurement_noise_rad=0.05)


def test_the_promise_for_edges_is_what_the_fit_of_a_simulated_sweep_states(sweeps):
    """A plan that promises more than the campaign gives is worse than none: within 15 %."""
    drives = np.linspace(-1.6, 1.6, 15)
    promised = edge_u_hz(point_information(PAIR, 0.07 - drives, 100.0).sum(axis=0), 1)
    stated = []
    for seed in range(6):
        points = sweeps.sweep(np.random.default_rng(seed))
        level = fit_region(points, RegionRules(order=Order())).levels[0]
        stated += [level.lower_hz.u, level.upper_hz.u]
    # Six seeded sweeps; single u vary by about 15 %.
    assert np.median(stated) == pytest.approx(max(promised), rel=0.15)


def test_a_pass_keeps_its_promise_with_the_least_time():
    """The length is just what the uncertainty needs; with settling more points cost more."""
    plan = plan_edges(PAIR, 0.002 / TURN, PlanSettings(settle_s=30.0))
    assert plan.edge_u_hz == pytest.approx(0.002 / TURN, rel=1e-3)
    assert len(plan.offsets_hz) == 11
    assert plan.total_s == pytest.approx(11 * (plan.duration_s + 30.0))


def test_uncertainty_falls_with_the_root_of_the_time():
    """Four times the length halves the error, at fixed points."""
    one, four = (
        plan_edges(PAIR, 1.0, PlanSettings(points=21, duration_s=length)).edge_u_hz
        for length in (100.0, 400.0)
    )
    assert one / four == pytest.approx(2.0, rel=1e-6)


def test_wander_between_points_asks_for_more_points_and_not_for_more_time():
    """No length helps against a detuning that moves between points."""
    wandering = Expected(coupling_hz=1.0 / TURN, noise_rad2_s=0.03, wander_hz=0.02 / TURN)
    plan = plan_edges(wandering, 0.006 / TURN)
    assert len(plan.offsets_hz) > 11
    with pytest.raises(FitError, match="wander"):
        plan_edges(wandering, 0.0001 / TURN)


def test_a_steady_lock_asks_for_far_longer_than_a_drifting_record():
    """What a record cannot tell comes out as a length beyond reach."""
    drifting = record_length_s(PAIR, 1.5 / TURN, "coupling", 0.02 / TURN)
    locked = record_length_s(PAIR, 0.3 / TURN, "coupling", 0.02 / TURN)
    assert 50 < drifting < 1000
    assert locked > 50 * drifting


def test_a_higher_level_needs_less_time_for_the_same_relative_edge():
    """Coupling grows with amplitude; the errors of a point do not."""
    strong = at_level(PAIR, 2.0)
    assert strong.coupling_hz == pytest.approx(2 * PAIR.coupling_hz)
    length = plan_edges(strong, 0.01 * strong.coupling_hz).duration_s
    assert length < plan_edges(PAIR, 0.01 * PAIR.coupling_hz).duration_s


@pytest.mark.parametrize(
    ("call", "text"),
    [
        (lambda: Expected(coupling_hz=0.0, noise_rad2_s=1.0), "coupling_hz must be above 0"),
        (lambda: PlanSettings(points=5), "at least 11 points, got 5"),
        (lambda: PlanSettings(span=0.9), "above 1 coupling, got 0.9"),
        (lambda: plan_edges(PAIR, 0.0), "must be above 0 Hz, got 0"),
        (lambda: record_length_s(PAIR, 0.0, "speed", 1.0), "not one of detuning, coupling"),
        (lambda: NextGoal(edge_u_hz=-1.0), "must be above 0 Hz, got -1"),
    ],
)
def test_plans_that_mean_nothing_are_refused(call, text):
    """One line with the rule and the value."""
    with pytest.raises(FitError, match=re.escape(text)):
        call()


def test_new_places_halve_the_widest_gaps():
    """Ends first, then the middle of what is widest."""
    assert spread_points(0.0, 8.0, [0.0, 4.0], 3) == [8.0, 2.0, 6.0]


@pytest.fixture(scope="module")
def coarse(sweeps):
    """An even pass of 11 points and its region."""
    points = sweeps.sweep(np.random.default_rng(9), points=11)
    return points, fit_region(points, RegionRules(order=Order()))


def test_refinement_stays_near_the_edges_and_on_both_sides(coarse):
    """0.9 to 1.3 couplings from the centre, never the ends of the range."""
    points, region = coarse
    found = next_points(points, region, NextGoal(edge_u_hz=1e-6, most_points=6))
    level = region.levels[0]
    centre = (level.lower_hz.value + level.upper_hz.value) / 2
    places = [(one.drive_hz - centre) / level.coupling_hz.value for one in found]
    assert len(found) == 6
    assert all(0.89 < abs(place) < 1.31 for place in places)
    assert {place > 0 for place in places} == {True, False}
    promised = [one.edge_u_hz for one in found]
    assert promised == sorted(promised, reverse=True)


def test_a_goal_that_is_met_asks_for_nothing(coarse):
    """Stop when the edges are good enough."""
    points, region = coarse
    assert next_points(points, region, NextGoal(edge_u_hz=1.0)) == []


def test_the_coarse_pass_comes_before_refinement(coarse):
    """Seven points and an open side: span the region first."""
    points, _ = coarse
    some = points[:8]
    found = next_points(
        some, fit_region(some, RegionRules(order=Order())), NextGoal(edge_u_hz=1e-6)
    )
    assert found
    assert all("coarse pass" in one.why for one in found)


def test_a_mutual_pair_has_no_drive_to_choose(sweeps, coarse):
    """Its points are set by trimming an oscillator, not by a drive frequency."""
    point = sweeps.point("a", 0.0, np.zeros(5), drive_hz=None, detuning_hz=0.1)
    with pytest.raises(FitError, match="no drive frequency"):
        next_points([point], coarse[1], NextGoal(edge_u_hz=0.1))
