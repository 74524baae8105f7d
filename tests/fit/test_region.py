"""The locking region of simulated sweeps whose truth is in the integrated equation."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from fit.difference import Order
from fit.records import PsiSeries
from fit.region import JOINT, RegionRules, fit_region

TURN = 2.0 * math.pi
RULES = RegionRules(order=Order())
CENTRE = 0.07


def check_edge(edge, truth_rad_s, factor=4.0):
    """The edge lies within a few of its own standard errors of the truth."""
    assert edge.value is not None, edge.reason
    assert edge.value * TURN == pytest.approx(truth_rad_s, abs=factor * edge.u * TURN)


@pytest.fixture(scope="module")
def campaign(sweeps):
    """Two levels, up and down."""
    rng = np.random.default_rng(20)
    found = []
    for level in (0.5, 1.0):
        for direction in ("up", "down"):
            found += sweeps.sweep(rng, coupling=level, level=level, direction=direction)
    return found


@pytest.fixture(scope="module")
def region(campaign):
    """The region of the campaign."""
    return fit_region(campaign, RULES)


def test_edges_of_every_level_and_direction_are_found(region):
    """The deliverable: noise-free edges within 4 u, and u small against the region."""
    assert [(one.level, one.direction) for one in region.levels] == [
        (0.5, "up"),
        (0.5, "down"),
        (1.0, "up"),
        (1.0, "down"),
    ]
    for one in region.levels:
        check_edge(one.lower_hz, CENTRE - one.level)
        check_edge(one.upper_hz, CENTRE + one.level)
        assert one.lower_hz.u * TURN < 0.05
        assert one.method == JOINT


def test_intervals_and_widths_agree_with_values_and_errors(region):
    """low and high are 1.96 u (Student's t with wander) about the value; the width fits."""
    for one in region.levels:
        half = (one.upper_hz.high - one.upper_hz.low) / 2
        assert 1.95 * one.upper_hz.u < half < 2.1 * one.upper_hz.u
        assert one.width_hz.value == pytest.approx(one.upper_hz.value - one.lower_hz.value)


def test_a_sweep_that_obeys_the_phase_equation_is_said_to(region):
    """The tests of the phase equation hold their size: none fires on this seeded sweep."""
    assert region.adler_holds is True
    assert not any(test.fired for test in region.tests)
    assert {test.name for test in region.tests} >= {
        "coupling equal on the two sides",
        "coupling equal near and far",
        "couplings of single records about the shared one",
        "detuning from point to point",
    }


def test_the_law_over_levels_is_recovered(region):
    """Coupling proportional to amplitude, kappa 1 rad/s, centre the same at all levels."""
    assert region.level_power.value == pytest.approx(1.0, abs=3 * region.level_power.u)
    kappa = region.coupling_per_level
    assert kappa.value * TURN == pytest.approx(1.0, abs=4 * kappa.u * TURN)
    assert region.centre_hz.value * TURN == pytest.approx(CENTRE, abs=4 * region.centre_hz.u * TURN)


def test_no_hysteresis_is_called_where_there_is_none(region):
    """Up and down of a first-order pair differ by chance only."""
    assert len(region.hysteresis) == 4
    assert all(one.p_value > 0.01 for one in region.hysteresis)


def test_beat_rates_alone_agree_with_the_joint_likelihood(region):
    """A check that shares little with the likelihood stands beside every edge."""
    for one in region.levels:
        for edge, beat in ((one.lower_hz, one.beat_lower_hz), (one.upper_hz, one.beat_upper_hz)):
            assert beat.value == pytest.approx(edge.value, abs=4 * math.hypot(edge.u, beat.u))


def test_the_order_of_the_points_does_not_matter(campaign, region):
    """The same bytes whatever order the captures were measured in."""
    again = fit_region(campaign[::-1], RULES)
    assert [one.lower_hz for one in again.levels] == [one.lower_hz for one in region.levels]


def test_a_side_without_points_beyond_is_open(campaign):
    """An edge that no point passed is bounded, never given."""
    inside = [p for p in campaign if p.level == 1.0 and p.drive_hz * TURN < 0.6]
    upper = fit_region(inside, RULES).levels[0].upper_hz
    assert upper.value is None
    assert "open on this side" in upper.reason
    assert upper.low is not None
    assert upper.low * TURN <= CENTRE + 1.0


def test_a_region_beside_the_points_has_no_edges(sweeps):
    """Points on one side only, all drifting: nothing is put where nobody looked."""
    points = sweeps.sweep(np.random.default_rng(13), points=25, reach=2.5)
    beside = [p for p in points if p.drive_hz * TURN > 1.4]
    level = fit_region(beside, RULES).levels[0]
    assert level.lower_hz.value is None
    assert level.upper_hz.value is None
    assert level.width_hz.value is None


def test_two_free_oscillators_have_no_region(sweeps):
    """Without coupling there is no edge to print, however well the fit settles."""
    points = sweeps.sweep(np.random.default_rng(14), pull=lambda psi: 0.0 * psi, points=9)
    level = fit_region(points, RULES).levels[0]
    assert level.lower_hz.value is None
    assert level.coupling_hz.value is None


def test_too_few_points_give_the_bracket_only(campaign):
    """Four drive frequencies leave the slope of psi0 ambiguous: no edge is printed."""
    some = [p for p in campaign if (p.level, p.direction) == (1.0, "up")][::4]
    level = fit_region(some, RULES).levels[0]
    assert level.method == "not mapped"
    assert level.lower_hz.value is None
    assert "4 usable drive frequencies" in level.lower_hz.reason
    assert level.bracket_lower_hz.value is not None


def test_points_without_samples_are_left_out_and_said(campaign):
    """A capture that gave no phase must not stop the region."""
    some = [p for p in campaign if (p.level, p.direction) == (1.0, "up")]
    empty = PsiSeries(step_s=0.2, segments=(), start_s=())
    some[3] = replace(some[3], series=empty, state="undecided")
    level = fit_region(some, RULES).levels[0]
    check_edge(level.lower_hz, CENTRE - 1.0)
    assert any("1 points without samples" in note for note in level.notes)


def test_wander_between_points_is_found_and_widens_the_edges(sweeps, region):
    """A free frequency that moves from capture to capture must show in the uncertainty."""
    rng = np.random.default_rng(4)
    found = fit_region(sweeps.sweep(rng, wander=0.08, points=21), RULES)
    assert any("wanders" in note for note in found.notes)
    level = found.levels[0]
    assert level.lower_hz.u > 1.3 * region.levels[2].lower_hz.u
    check_edge(level.lower_hz, CENTRE - 1.0)
    check_edge(level.upper_hz, CENTRE + 1.0)


def test_repeated_points_tell_how_well_they_agree(sweeps):
    """Repeatability is stated beside the noise that explains it."""
    rng = np.random.default_rng(12)
    first, second = (sweeps.sweep(rng, points=9, wander=0.1) for _ in range(2))
    again = [replace(point, key="r" + point.key) for point in second]
    (note,) = [n for n in fit_region([*first, *again], RULES).notes if "repeated points" in n]
    assert note.startswith("18 repeated points agree in detuning to")


def test_edges_at_order_m_lie_at_centre_and_coupling_over_m(sweeps):
    """Detuning is m (centre - drive): half the drive axis at m = 2."""
    points = sweeps.sweep(np.random.default_rng(5))
    half = [replace(point, drive_hz=point.drive_hz / 2) for point in points]
    level = fit_region(half, RegionRules(order=Order(n=1, m=2))).levels[0]
    check_edge(level.lower_hz, (CENTRE - 1.0) / 2)
    check_edge(level.upper_hz, (CENTRE + 1.0) / 2)


def test_edges_allow_for_what_averaging_leaves_out(sweeps):
    """K^2 / w0, rectangular: at a real drive frequency the equation itself has an error."""
    points = sweeps.sweep(np.random.default_rng(5))
    shifted = [replace(point, drive_hz=point.drive_hz + 5.0) for point in points]
    plain = fit_region(points, RULES).levels[0]
    level = fit_region(shifted, RULES).levels[0]
    extra = (1.0 / TURN) ** 2 / 5.0 / math.sqrt(3.0)
    assert level.upper_hz.u == pytest.approx(math.hypot(plain.upper_hz.u, extra), rel=0.02)
    assert any("relative order" in note for note in level.notes)


def test_a_mutual_pair_is_mapped_over_its_free_detuning(sweeps):
    """Without a drive the edges stand on the axis n f_driven - m f_reference."""
    points = sweeps.sweep(np.random.default_rng(6), centre=0.0)
    mutual = [replace(p, drive_hz=None, detuning_hz=-p.drive_hz) for p in points]
    level = fit_region(mutual, RULES).levels[0]
    check_edge(level.lower_hz, -1.0)
    check_edge(level.upper_hz, 1.0)
    assert any("mutual pair" in note for note in level.notes)


def test_a_mutual_pair_with_its_own_detunings_only_is_centred_on_zero(sweeps):
    """A record's own detuning is no second knowledge: it is free, and the edges are +-K."""
    points = sweeps.sweep(np.random.default_rng(6), centre=0.0)
    mutual = [
        replace(
            p,
            drive_hz=None,
            detuning_hz=-p.drive_hz,
            adler=replace(p.adler, detuning_hz=sweeps.known(-p.drive_hz, 0.01)),
        )
        for p in points
    ]
    level = fit_region(mutual, RULES).levels[0]
    assert level.lower_hz.value == pytest.approx(-level.upper_hz.value, rel=1e-6)
    check_edge(level.upper_hz, 1.0)


def test_a_hole_gives_two_intervals(sweeps):
    """Two regions with drifting points between are told apart, each with its own edges."""
    rng = np.random.default_rng(7)
    first, second = (sweeps.sweep(rng, points=9, reach=1.5, length_s=60.0) for _ in range(2))
    far = [
        replace(point, key="z" + point.key, drive_hz=point.drive_hz + 3.2 / TURN)
        for point in second
    ]
    levels = fit_region([*first, *far], RULES).levels
    assert [one.interval for one in levels] == [1, 2]
    check_edge(levels[0].upper_hz, CENTRE + 1.0)
    check_edge(levels[1].lower_hz, 3.2 + CENTRE - 1.0)


def strong_pull(psi):
    """Sine with a second harmonic: no phase equation of one sine."""
    return -np.sin(psi) - 0.2 * np.sin(2 * psi)


def test_a_pair_that_is_not_adler_is_said_to_be_none(sweeps):
    """The edges are the saddle-node ones within their honestly larger errors."""
    points = sweeps.sweep(
        np.random.default_rng(8), pull=strong_pull, points=21, reach=2.0, length_s=200
    )
    found = fit_region(points, RULES)
    assert found.adler_holds is False
    assert any(test.fired and test.meaning for test in found.tests)
    half = float(np.max(-strong_pull(np.linspace(-math.pi, math.pi, 100001))))
    level = found.levels[0]
    assert level.method != JOINT
    for edge, truth in ((level.lower_hz, CENTRE - half), (level.upper_hz, CENTRE + half)):
        check_edge(edge, truth, factor=3.0)
        assert 0.01 * half < edge.u * TURN < 0.1 * half


def heavy_sweep(sweeps, rng, drives, direction):
    """Points of 4 psi'' + psi' = -drive - sin psi swept: each starts where one ended."""
    parts, dt, samples = 16, 0.2 / 16, 401
    psi, rate, found = 0.0, -float(drives[0]), []
    for number, drive in enumerate(drives):
        seen = np.empty(samples)
        kicks = math.sqrt(2 * 0.003 / dt) * rng.standard_normal((samples, parts))
        for index in range(samples):
            seen[index] = psi
            for kick in kicks[index]:
                rate += dt * (-drive - math.sin(psi) + kick - rate) / 4.0
                psi += dt * rate
        seen += 0.05 * rng.standard_normal(samples)
        key = f"{direction}{number:03d}"
        found.append(sweeps.point(key, float(drive), seen, direction=direction))
    return found


def test_inertia_shows_as_hysteresis_and_not_as_adler(sweeps):
    """Lock held to |detuning| = 1 but gained at 0.597 only (inertia 4): both edges differ."""
    rng, drives = np.random.default_rng(3), np.linspace(-1.4, 1.4, 15)
    points = heavy_sweep(sweeps, rng, drives, "up")
    points += heavy_sweep(sweeps, rng, drives[::-1], "down")
    found = fit_region(points, RULES)
    assert found.adler_holds is False
    assert all(one.p_value < 0.01 and one.value_hz.value > 0 for one in found.hysteresis)
    up, down = found.levels
    for edge, truth in ((up.lower_hz, -0.597), (down.upper_hz, 0.597), (up.upper_hz, 1.0)):
        check_edge(edge, truth, factor=2.5)
