"""Budgets: every source once, combined as the GUM says, and what is missing named."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from reports.budget import (
    SOURCES,
    Facts,
    GainSource,
    PhaseSource,
    Repeats,
    combined_u,
    make_budget,
    own_u,
    rectangular_u,
)
from reports.facts import group_by_setting, half_range_hz, pooled_repeats
from reports.limited import LIMITED
from reports.limits import judge_limits, read_limits
from reports.selection import Candidate, RunParts
from rig.quantities import Quantity, undetermined


def hertz(value, u, **more):
    """A frequency."""
    return Quantity(value=value, u=u, unit="Hz", **more)


def judge(run, **table):
    """The verdict on one limit of a run."""
    limits = read_limits([{"name": "x"} | table], "s.toml")
    return judge_limits(
        limits, region=run.region, points=run.points, free_runs=run.free_runs, plan=run.plan
    )[0]


def line(verdict, source):
    """The budget line of a source."""
    return next(one for one in verdict.budget if one.source.startswith(source))


FULL = Facts(
    phases=(
        PhaseSource(name="skew", channel="a", u_rad=0.01, distribution="normal", sensitivity=1.0),
        PhaseSource(
            name="sensor phase", channel="b", u_rad=0.02, distribution="normal", sensitivity=-3.0
        ),
    ),
    gains=(GainSource(channel="a", u_rel=0.01),),
    gains_within=False,
    clock_rel=20e-6,
    drift_hz=0.003,
    drift_weight=2.0,
    reference_u_hz=0.001,
    repeats=Repeats(scatter=0.02, count=3, freedom=2),
)


@pytest.mark.parametrize("kind", SOURCES)
def test_the_combined_uncertainty_is_the_root_of_the_summed_squares(kind):
    """The lines a reader sees must give the U that the verdict used."""
    budget = make_budget(kind, hertz(25.0, 0.01), FULL)
    total = math.sqrt(sum(one.contribution**2 for one in budget.lines))
    assert budget.value.u == pytest.approx(total, rel=1e-12)
    assert budget.lines[0].source == "statistical"


@pytest.mark.parametrize("kind", SOURCES)
def test_every_contribution_is_sensitivity_times_uncertainty(kind):
    """The columns of a GUM table belong together."""
    for one in make_budget(kind, hertz(25.0, 0.01), FULL).lines:
        assert one.contribution == pytest.approx(abs(one.sensitivity) * one.u, rel=1e-12)


@pytest.mark.parametrize("kind", SOURCES)
def test_what_is_not_known_is_said_to_be_left_out(kind):
    """Silence would read as zero."""
    bare = make_budget(kind, hertz(25.0, 0.01), Facts())
    assert [one.source for one in bare.lines] == ["statistical"]
    assert bare.left_out


def test_sources_that_an_estimate_holds_already_count_once():
    """An episode's offset includes the sensors; adding them again would double them."""
    within = replace(FULL, phases_within=True, repeats=None)
    held = math.hypot(0.01, 3 * 0.02)
    value = Quantity(value=0.3, u=math.hypot(0.005, held), unit="rad")
    budget = make_budget("phase", value, within)
    assert budget.lines[0].contribution == pytest.approx(0.005)
    assert budget.value.u == pytest.approx(value.u)


def test_the_statistical_part_is_never_negative():
    """Rounding may leave the stated uncertainty just below what it holds."""
    within = replace(FULL, phases_within=True)
    assert own_u(Quantity(value=0.3, u=0.001, unit="rad"), within) == 0.0


def test_an_interval_that_is_not_symmetric_is_widened_on_both_sides():
    """Drift moves either end; the longer side stays the longer."""
    value = hertz(0.3, 0.02, low=0.28, high=0.40, level=0.95)
    budget = make_budget("width", value, Facts(drift_hz=0.1))
    grown = rectangular_u(0.1)
    assert budget.value.high - 0.3 == pytest.approx(
        1.959964 * math.hypot(0.1 / 1.959964, grown), rel=1e-6
    )
    assert 0.3 - budget.value.low == pytest.approx(
        1.959964 * math.hypot(0.02 / 1.959964, grown), rel=1e-6
    )


def test_a_value_without_number_has_no_budget():
    """Nothing can be added to what is not known."""
    budget = make_budget("edge", undetermined("Hz", "open"), FULL)
    assert (budget.lines, budget.value.value) == ((), None)


def test_a_value_without_uncertainty_says_that_its_statistical_part_is_missing():
    """The other lines alone would look like a whole budget."""
    budget = make_budget("edge", hertz(25.0, None), FULL)
    assert budget.value.u is None
    assert budget.left_out[0] == "statistical: the estimator states no uncertainty"


def test_scatter_of_repeats_counts_beyond_what_the_estimates_explain():
    """Repeats scatter by the statistical part anyway."""
    inside = make_budget(
        "plain", hertz(1.0, 0.03), Facts(repeats=Repeats(scatter=0.02, count=4, freedom=3))
    )
    beyond = make_budget(
        "plain", hertz(1.0, 0.03), Facts(repeats=Repeats(scatter=0.05, count=4, freedom=3))
    )
    assert inside.value.u == pytest.approx(0.03)
    assert beyond.value.u == pytest.approx(0.05)


def test_correlated_contributions_add_with_their_sign():
    """Two contributions of one source: r = 1 adds, r = -1 takes off."""
    assert combined_u([3.0, 4.0]) == 5.0
    assert combined_u([3.0, 4.0], {(0, 1): 1.0}) == 7.0
    assert combined_u([3.0, 4.0], {(0, 1): -1.0}) == 1.0
    with pytest.raises(ValueError, match="must lie in -1"):
        combined_u([3.0, 4.0], {(0, 1): 1.1})


def test_a_rectangular_distribution_agrees_with_drawing_from_it(rng):
    """Half width over root three, against a seeded draw (0.3 % is 4 standard errors)."""
    drawn = rng.uniform(-2.0, 2.0, 400_000).std()
    assert rectangular_u(2.0) == pytest.approx(drawn, rel=0.003)


def test_an_edge_budget_holds_clock_reference_and_drift(made):
    """20 ppm of 25 Hz is 0.5 mHz: more than the statistics of a long sweep."""
    run = made.make_run()
    run = replace(run, plan=replace(run.plan, measure=replace(run.plan.measure, clock_u_ppm=20.0)))
    verdict = judge(run, quantity="upper_edge_hz", upper=26, level=1.0, direction="up")
    assert line(verdict, "clock").contribution == pytest.approx(25.4 * 20e-6)
    assert line(verdict, "reference frequency").contribution == pytest.approx(0.0005)
    assert line(verdict, "drift").contribution == pytest.approx(0.001 / math.sqrt(3))
    assert verdict.value.u > 0.004
    assert verdict.expanded_u == pytest.approx(2 * verdict.value.u)


def test_a_phase_budget_weighs_the_channels_by_the_locking_order(made):
    """psi = n phi_driven - m phi_reference: at 1:3 the reference sensor counts three times."""
    run = made.make_run()
    run = replace(run, plan=replace(run.plan, order=None))
    point = made.make_point(25.0)
    measured = replace(point.measurement, order=replace(point.measurement.order, m=3))
    run = replace(run, points=(replace(point, measurement=measured),))
    verdict = judge(run, quantity="phase_offset_rad", lower=-90, upper=90, unit="deg")
    assert line(verdict, "sensor phase, channel 'rotor'").sensitivity == 1.0
    assert line(verdict, "sensor phase, channel 'drive'").sensitivity == -3.0


def test_an_episode_offset_holds_its_sensors_and_a_fitted_offset_does_not(made):
    """The same sensors: taken out of one statistical line, added to the other."""
    run = made.make_run()
    held = 2 * (0.004**2 + 0.0002**2)
    episode = judge(run, quantity="phase_offset_rad", lower=-179, upper=179, unit="deg")
    fitted = judge(run, quantity="phase_offset_centre_rad", lower=-179, upper=179, unit="deg")
    assert episode.value.u == pytest.approx(0.01)
    assert line(episode, "statistical").u == pytest.approx(math.sqrt(0.01**2 - held))
    assert fitted.value.u == pytest.approx(math.sqrt(0.008**2 + held))


def test_the_sensitivity_of_a_sensor_is_taken_out_of_its_amplitude(made):
    """The amplitude's u holds it already."""
    verdict = judge(made.make_run(), quantity="amplitude_driven", lower=9)
    assert line(verdict, "sensitivity").contribution == pytest.approx(9.81 * 0.01)
    assert verdict.value.u == pytest.approx(0.12)


def test_the_expanded_uncertainty_of_a_verdict_follows_from_its_budget(made):
    """For every quantity: U = k times the combined lines."""
    tables = [
        {"name": name, "quantity": name, "lower": -3.0, "upper": 3.0}
        | ({"averaging_s": 1.0} if name.startswith("free_stability") else {})
        for name, spec in LIMITED.items()
        if not spec.words
    ]
    run = made.make_run()
    verdicts = judge_limits(
        read_limits(tables, "s.toml"),
        region=run.region,
        points=run.points,
        free_runs=run.free_runs,
        plan=run.plan,
    )
    for verdict in verdicts:
        if verdict.expanded_u is not None:
            total = combined_u([one.contribution for one in verdict.budget])
            assert verdict.expanded_u == pytest.approx(2 * total, rel=1e-9)


@pytest.mark.parametrize(("holds", "word"), [(False, "reject"), (None, "could not be tested")])
def test_a_doubtful_phase_equation_is_left_out_by_name(made, holds, word):
    """The error of the model is not in the statistics."""
    run = made.make_run(region=replace(made.make_region(), adler_holds=holds))
    verdict = judge(run, quantity="locking_width_hz", lower=0.5)
    assert any(word in text for text in verdict.left_out)


def test_no_free_running_captures_leave_the_drift_out_by_name(made):
    """One capture alone says nothing of the drift during a sweep."""
    run = made.make_run(free_runs=made.make_free_runs()[:1])
    verdict = judge(run, quantity="centre_hz", upper=26)
    assert "drift during the sweep: fewer than two free-running captures of the driven" in (
        verdict.left_out
    )


def candidates(made, values, drives):
    """Candidates at drive settings, one file each."""
    return [
        Candidate(
            where="",
            value=Quantity(value=value, u=0.01, unit="Hz"),
            point=replace(made.make_point(drive), file=f"{k}.wav"),
        )
        for k, (value, drive) in enumerate(zip(values, drives, strict=True))
    ]


def test_repeats_are_pooled_over_their_settings(made):
    """Two pairs of repeats give one scatter with two degrees of freedom."""
    found = group_by_setting(candidates(made, [1.0, 1.2, 5.0, 5.6, 9.0], [25, 25, 26, 26, 27]))
    pooled = pooled_repeats(found)
    assert pooled.scatter == pytest.approx(
        math.sqrt((np.var([1.0, 1.2], ddof=1) + np.var([5.0, 5.6], ddof=1)) / 2)
    )
    assert (pooled.count, pooled.freedom) == (4, 2)


def test_the_own_setting_counts_where_it_was_repeated(made):
    """Scatter at the worst point says most about the worst point."""
    rates = (0.0, 0.4, 0.0, 0.0)
    drives = (25.0, 25.0, 25.2, 25.2)
    points = tuple(
        replace(
            made.make_point(drive),
            file=f"{k}.wav",
            measurement=made.make_measurement(mean_rate_hz=made.q(rate, 0.001, "Hz")),
        )
        for k, (rate, drive) in enumerate(zip(rates, drives, strict=True))
    )
    verdict = judge(made.make_run(points=points), quantity="mean_rate_hz", upper=1.0)
    assert verdict.reason.startswith("worst of 4, 1.wav")
    assert "scatter of 2 values" in line(verdict, "repeatability").note
    assert line(verdict, "repeatability").u == pytest.approx(0.4 / math.sqrt(2), rel=1e-4)


def test_values_taken_once_each_have_no_repeats(made):
    """No repeat, no repeatability."""
    assert pooled_repeats(group_by_setting(candidates(made, [1.0, 1.2], [25, 26]))) is None


def test_angles_repeat_on_the_circle(made):
    """179 and -179 deg are 2 deg apart."""
    found = candidates(made, [math.radians(179), math.radians(-179)], [25, 25])
    scatter = pooled_repeats(group_by_setting(found), circular=True).scatter
    assert math.degrees(scatter) == pytest.approx(math.sqrt(2), rel=1e-9)


def test_the_drift_is_half_the_range_of_the_free_frequency(made):
    """25.099 and 25.101 Hz: 1 mHz either side."""
    run = made.make_run()
    parts = RunParts(points=run.points, region=None, free_runs=run.free_runs, plan=run.plan)
    assert half_range_hz(parts, "driven") == pytest.approx(0.001, rel=1e-9)
    assert half_range_hz(parts, "reference") is None
