"""Limits: read or refused in one line, and judged on the worst that they apply to."""

from __future__ import annotations

import math
import re
from dataclasses import replace
from pathlib import Path

import pytest

from fit.difference import Order
from fit.records import StateDecision
from reports.limited import LIMITED, SELECTORS
from reports.limits import (
    OVERALL_RULE,
    check_limits,
    judge_limits,
    overall_verdict,
    read_limits,
)
from rig.errors import LimitError
from rig.quantities import Quantity, undetermined
from rig.sweepfile import FreeRunEntry

FILE = "rig/sweep.toml"
WIDTH = {"name": "width", "quantity": "locking_width_hz", "lower": 0.5}


def read(**table):
    """The limit of one table."""
    return read_limits([table], FILE)[0]


def judge(run, **table):
    """The verdict on one limit of a run."""
    limits = read_limits([{"name": "x"} | table], FILE)
    return judge_limits(
        limits, region=run.region, points=run.points, free_runs=run.free_runs, plan=run.plan
    )[0]


def sample_table(name):
    """A table that asks something of a quantity."""
    spec = LIMITED[name]
    table = {"name": name, "quantity": name}
    if spec.words:
        return table | {"wanted": "1:1" if spec.words == ("n:m",) else spec.words[0]}
    if name.startswith("free_stability"):
        table["averaging_s"] = 1.0
    return table | {"lower": -1.0, "upper": 1.0}


# ---- reading -----------------------------------------------------------------------------


@pytest.mark.parametrize("name", LIMITED)
def test_every_quantity_can_be_limited_and_judged(made, name):
    """A row of the table that nothing can reach would be a promise not kept."""
    verdict = judge(made.make_run(), **sample_table(name))
    assert verdict.verdict in ("pass", "fail", "undecided")
    assert verdict.reason
    assert verdict.limit.quantity == name


@pytest.mark.parametrize(
    ("name", "unit", "written", "kept"),
    [
        ("locking_width_hz", "mHz", 500.0, 0.5),
        ("locking_width_hz", "kHz", 0.5, 500.0),
        ("slip_rate_hz", "1/s", 0.1, 0.1),
        ("slip_rate_hz", "1/min", 6.0, 0.1),
        ("pull_in_s", "ms", 200.0, 0.2),
        ("phase_jitter_rad", "deg", 10.0, math.radians(10)),
        ("locked_fraction", "%", 99.0, 0.99),
        ("free_drift_driven_hz_s", "Hz/min", 0.6, 0.01),
    ],
)
def test_a_limit_is_kept_in_the_unit_of_its_quantity(name, unit, written, kept):
    """Limit, value and JSON speak one unit; people may write another."""
    limit = read(name="x", quantity=name, unit=unit, upper=written)
    assert limit.upper == pytest.approx(kept, rel=1e-15)
    assert limit.unit == LIMITED[name].unit


def test_a_guard_width_is_converted_with_its_limit():
    """A guard band in millihertz on a limit in millihertz."""
    limit = read(**WIDTH, unit="mHz", rule="guard-width", guard_width=20)
    assert limit.guard_width == pytest.approx(0.02)


def test_the_default_rule_is_the_guard_band():
    """No rule is silent, and the default is the careful one."""
    assert read(**WIDTH).rule == "guard"


def test_selectors_are_kept():
    """Level, direction, drive range and file say which points a limit applies to."""
    limit = read(
        name="x", quantity="slip_rate_hz", upper=0.1, level=1, direction="up", drive_hz=[24, 26]
    )
    assert (limit.level, limit.direction) == (1.0, "up")
    assert (limit.drive_from_hz, limit.drive_to_hz) == (24.0, 26.0)


REFUSALS = [
    ({"colour": 1}, "limit 'width': unknown key 'colour'. Known keys: name, quantity"),
    ({"uper": 1}, "unknown key 'uper'. Did you mean 'upper'?"),
    ({"quantity": "locking_widht_hz"}, "Did you mean 'locking_width_hz'? Known: locking_width_hz,"),
    ({"quantity": None}, "key 'quantity' must be a text, got None"),
    ({"quantity": 3}, "key 'quantity' must be a text, got 3"),
    ({"name": ""}, "limit '': key 'name' must be a text"),
    ({"name": 5}, "limit 1: key 'name' must be a text, got 5"),
    ({"unit": "furlong"}, "unit 'furlong' is not known here. Known: Hz, mHz, kHz, MHz, 1/s"),
    ({"unit": "deg"}, "unit 'deg' is not known here"),
    ({"lower": "0.5"}, "key 'lower' must be a number, got '0.5'"),
    ({"lower": True}, "key 'lower' must be a number, got True"),
    ({"lower": math.nan}, "key 'lower' must be finite, got nan"),
    ({"lower": math.inf}, "key 'lower' must be finite, got inf"),
    ({"lower": 1e308, "unit": "MHz"}, "key 'lower' is too large"),
    ({"lower": None}, "it needs lower, upper, or both"),
    ({"upper": 0.4}, "lower must not be above upper, got 0.5 and 0.4"),
    ({"wanted": "locked"}, "key 'wanted' goes with words only"),
    ({"direction": "sideways"}, "direction 'sideways' is not known. Known: up, down, none."),
    ({"drive_hz": [1, 2]}, "key 'drive_hz' does not pick a 'locking_width_hz'. Selectors: level"),
    ({"rule": "gurad"}, "rule 'gurad' is not known. Did you mean 'guard'? Known: simple, guard"),
    ({"rule": "risk"}, "rule 'risk' needs key 'risk' above 0 and below 0.5, got None"),
    ({"rule": "risk", "risk": 0.5}, "above 0 and below 0.5, got 0.5"),
    ({"rule": "risk", "risk": 0.0}, "above 0 and below 0.5, got 0.0"),
    ({"rule": "guard-width"}, "needs key 'guard_width' at or above 0, got None"),
    ({"rule": "guard-width", "guard_width": -1}, "at or above 0, got -1.0"),
    ({"guard_width": 0.1}, "key 'guard_width' goes with rule 'guard-width', got 'guard'"),
    ({"risk": 0.1}, "key 'risk' goes with rule 'risk', got 'guard'"),
    ({"averaging_s": 1}, "key 'averaging_s' does not go with 'locking_width_hz'"),
]


@pytest.mark.parametrize(("change", "words"), REFUSALS, ids=[words for _, words in REFUSALS])
def test_a_limit_that_cannot_be_judged_is_refused(change, words):
    """One line: file, limit, key, value, and what is known."""
    table = {key: value for key, value in (WIDTH | change).items() if value is not None}
    if change.get("quantity", "") is None:
        table.pop("quantity", None)
    with pytest.raises(LimitError, match=re.escape(words)) as caught:
        read_limits([table], FILE)
    assert str(caught.value).startswith("rig/sweep.toml: limit ")
    assert "\n" not in str(caught.value)


OTHER_REFUSALS = [
    ({"quantity": "phase_offset_rad", "upper": 10, "unit": "deg"}, "needs both lower and upper"),
    ({"quantity": "phase_offset_rad", "lower": 5, "upper": 5, "unit": "deg"}, "less than a turn"),
    (
        {"quantity": "phase_offset_rad", "lower": -180, "upper": 180, "unit": "deg"},
        "less than a turn, got -180 and 180",
    ),
    ({"quantity": "lock_style"}, "key 'wanted' is missing. Known words: in-phase, anti-phase"),
    ({"quantity": "lock_style", "wanted": "inphase"}, "Did you mean 'in-phase'?"),
    ({"quantity": "lock_style", "wanted": "offset", "lower": 1}, "does not go with a word"),
    ({"quantity": "state", "wanted": "locked", "unit": "Hz"}, "key 'unit' does not go"),
    ({"quantity": "state", "wanted": "locked", "rule": "guard-width"}, "does not go with a word"),
    ({"quantity": "order", "wanted": "3"}, "must be a locking order n:m, such as 1:3"),
    ({"quantity": "order", "wanted": "0:1"}, "must be a locking order"),
    ({"quantity": "order", "wanted": "٣:1"}, "must be a locking order"),
    ({"quantity": "centre_hz", "lower": 1, "level": 1}, "none: it belongs to the whole sweep"),
    ({"quantity": "slip_rate_hz", "upper": 1, "drive_hz": 25}, None),
    ({"quantity": "slip_rate_hz", "upper": 1, "drive_hz": [26, 24]}, "must be [low, high] in Hz"),
    ({"quantity": "slip_rate_hz", "upper": 1, "drive_hz": "25"}, "must be [low, high] in Hz"),
    ({"quantity": "slip_rate_hz", "upper": 1, "drive_hz": [1, True]}, "must be [low, high]"),
    ({"quantity": "free_stability_driven", "upper": 1}, "'averaging_s' must be above 0 s"),
]


@pytest.mark.parametrize(("table", "words"), OTHER_REFUSALS)
def test_angles_words_and_selectors_are_checked(table, words):
    """Each kind of quantity has its own way of being asked for."""
    if words is None:
        assert read(name="x", **table).drive_to_hz == 25.0
        return
    with pytest.raises(LimitError, match=re.escape(words)):
        read(name="x", **table)


def test_two_limits_of_one_name_are_refused():
    """A verdict is found by the name of its limit."""
    with pytest.raises(LimitError, match="limits 1 and 2 are both named 'width'"):
        read_limits([WIDTH, WIDTH], FILE)


@pytest.mark.parametrize(
    ("table", "words"),
    [
        (WIDTH | {"level": 2.0}, "no point has level 2.0. Use one of: 0.5, 1"),
        (WIDTH | {"direction": "none"}, "no point has direction 'none'. Use one of: down, up"),
        (
            {"name": "f", "quantity": "slip_rate_hz", "upper": 1, "file": "x.wav"},
            "no point has file 'x.wav'. Use one of: captures/up_0.5_24.6.wav",
        ),
        (
            {"name": "f", "quantity": "free_noise_driven_rad2_s", "upper": 1, "file": "x.wav"},
            "Use one of: alone.wav",
        ),
    ],
)
def test_a_limit_that_no_row_answers_to_is_refused_before_measuring(made, table, words):
    """Found in the first second, not after a night of measuring."""
    plan = made.make_plan(free_running=(FreeRunEntry(file="alone.wav", role="driven"),))
    with pytest.raises(LimitError, match=re.escape(words)):
        check_limits(read_limits([table], FILE), plan)


def test_limits_that_rows_answer_to_pass_the_check(made):
    """The check refuses only what cannot be answered."""
    check_limits(read_limits([WIDTH | {"level": 1, "direction": "up"}], FILE), made.make_plan())


# ---- judging -----------------------------------------------------------------------------


def test_the_worst_level_decides_and_is_named(made):
    """A limit on all levels holds for the narrowest."""
    verdict = judge(made.make_run(), quantity="locking_width_hz", lower=0.5)
    assert verdict.verdict == "fail"
    assert verdict.value.value == pytest.approx(0.3)
    assert verdict.reason.startswith("worst of 4, level 0.5 A, up: ")


@pytest.mark.parametrize(("level", "word"), [(0.5, "fail"), (1.0, "pass")])
def test_a_level_selector_picks_its_level(made, level, word):
    """The same limit at another level is another question."""
    verdict = judge(made.make_run(), quantity="locking_width_hz", lower=0.5, level=level)
    assert verdict.verdict == word
    assert verdict.reason.startswith("worst of 2")


def test_a_level_and_direction_together_leave_one_value(made):
    """Up and down are judged apart."""
    verdict = judge(
        made.make_run(), quantity="upper_edge_hz", upper=25.45, level=1.0, direction="down"
    )
    assert verdict.reason.startswith("level 1 A, down: ")


def test_a_hole_in_the_region_is_told(made):
    """Width of the widest interval, outermost edges, and the hole in the reason."""
    region = made.make_region()
    extra = replace(
        region.levels[2],
        interval=2,
        width_hz=made.q(0.1, 0.01, "Hz"),
        upper_hz=made.q(25.9, 0.01, "Hz"),
    )
    run = made.make_run(region=replace(region, levels=(*region.levels, extra)))
    width = judge(run, quantity="locking_width_hz", lower=0.5, level=1.0, direction="up")
    edge = judge(run, quantity="upper_edge_hz", upper=25.8, level=1.0, direction="up")
    assert (width.value.value, edge.value.value) == (pytest.approx(0.6), 25.9)
    assert "the region has 1 hole" in width.reason


def test_the_worst_point_decides_and_its_file_is_named(made):
    """One noisy capture must not hide behind the quiet ones."""
    run = made.make_run()
    noisy = replace(run.points[9].measurement, jitter_rad=made.q(0.4, 0.01, "rad"))
    points = list(run.points)
    points[9] = replace(points[9], measurement=noisy)
    verdict = judge(
        replace(run, points=tuple(points)), quantity="phase_jitter_rad", upper=10, unit="deg"
    )
    assert verdict.verdict == "fail"
    assert points[9].file in verdict.reason


def test_points_without_an_episode_are_left_out_and_told(made):
    """A drifting capture has no phase offset; that is no fault of the limit."""
    verdict = judge(made.make_run(), quantity="phase_jitter_rad", upper=10, unit="deg")
    assert verdict.verdict == "pass"
    assert "12 of 28 points hold no locked episode" in verdict.reason


def test_a_range_of_drive_frequencies_picks_its_points(made):
    """Slips are forbidden inside the range, not outside."""
    inside = judge(
        made.make_run(), quantity="slip_rate_hz", upper=0.3, level=1.0, drive_hz=[24.85, 25.35]
    )
    everywhere = judge(made.make_run(), quantity="slip_rate_hz", upper=0.3, level=1.0)
    assert inside.reason.startswith("worst of 10")
    assert everywhere.reason.startswith("worst of 14")


def test_a_file_selector_picks_one_capture(made):
    """A limit on one capture by name."""
    file = made.make_run().points[0].file
    verdict = judge(made.make_run(), quantity="mean_rate_hz", lower=0.1, file=file)
    assert verdict.reason.startswith(file)


def test_a_capture_that_could_not_be_measured_leaves_the_limit_undecided(made):
    """A pass on what is left would claim what was not seen."""
    run = made.make_run()
    lost = replace(run.points[3], measurement=None, status="invalid", message="cut off\nat 3 s")
    run = replace(run, points=(*run.points[:3], lost, *run.points[4:]))
    verdict = judge(run, quantity="mean_rate_hz", lower=-9, upper=9)
    assert verdict.verdict == "undecided"
    assert "could not be measured: cut off at 3 s" in verdict.reason


def test_a_fail_outweighs_an_undecided_point(made):
    """What is proved to fail fails, whatever else is unknown."""
    run = made.make_run()
    lost = replace(run.points[3], measurement=None, status="crashed", message="crashed")
    run = replace(run, points=(*run.points[:3], lost, *run.points[4:]))
    assert judge(run, quantity="mean_rate_hz", upper=0.1).verdict == "fail"


def test_nothing_to_judge_is_undecided_with_its_reason(made):
    """A limit is never met by the absence of data."""
    run = made.make_run(region=None, free_runs=(), points=())
    cases = {
        "locking_width_hz": "the sweep gave no locking region",
        "centre_hz": "the sweep gave no locking region",
        "hysteresis_hz": "no level was swept both up and down",
        "slip_rate_hz": "no point of the sweep matches",
        "free_frequency_driven_hz": "no free-running capture of the driven oscillator matches",
    }
    for name, reason in cases.items():
        verdict = judge(run, quantity=name, lower=0)
        assert (verdict.verdict, verdict.reason) == ("undecided", reason)


def test_what_cannot_be_determined_is_undecided_with_the_records_reason(made):
    """The reader learns what to do, not only that something is missing."""
    region = made.make_region()
    levels = tuple(
        replace(level, width_hz=undetermined("Hz", "upper edge: open on this side"))
        for level in region.levels
    )
    verdict = judge(
        made.make_run(region=replace(region, levels=levels)),
        quantity="locking_width_hz",
        lower=0.5,
    )
    assert verdict.verdict == "undecided"
    assert "upper edge: open on this side" in verdict.reason


def test_an_edge_bounded_from_one_side_can_still_decide(made):
    """The range reaches beyond the last point: enough for a limit inside it."""
    region = made.make_region()
    bound = undetermined("Hz", "open on this side", low=25.6)
    levels = tuple(replace(level, upper_hz=bound) for level in region.levels)
    verdict = judge(
        made.make_run(region=replace(region, levels=levels)), quantity="upper_edge_hz", lower=25.3
    )
    assert verdict.verdict == "pass"
    assert "decided by its bounds, above 25.6 Hz (95 %)" in verdict.reason


def test_a_quantity_in_the_unit_of_its_sensor_must_be_limited_in_that_unit(made):
    """Volts are no metres per second squared; guessing would be worse than asking."""
    right = judge(made.make_run(), quantity="amplitude_driven", unit="m/s2", lower=9)
    wrong = judge(made.make_run(), quantity="amplitude_driven", unit="V", lower=9)
    open_unit = judge(made.make_run(), quantity="amplitude_driven", lower=9)
    assert (right.verdict, wrong.verdict, open_unit.verdict) == ("pass", "undecided", "pass")
    assert "measured in 'm/s2', the limit is in 'V'" in wrong.reason
    assert open_unit.limit.unit == "m/s2"


def test_slips_a_second_are_the_same_as_hertz(made):
    """Two names of one unit do not make a limit undecided."""
    verdict = judge(made.make_run(), quantity="slip_rate_hz", unit="1/s", upper=5.0)
    assert (verdict.verdict, verdict.value.unit) == ("pass", "Hz")


def test_records_that_start_locked_do_not_spoil_a_pull_in_limit(made):
    """They show no pull-in; those that do are judged."""
    run = made.make_run()
    silent = undetermined("s", "the record starts locked")
    points = list(run.points)
    first_locked = next(k for k, p in enumerate(points) if p.measurement.episodes)
    points[first_locked] = replace(
        points[first_locked],
        measurement=replace(points[first_locked].measurement, pull_in_s=silent),
    )
    some = judge(replace(run, points=tuple(points)), quantity="pull_in_s", upper=1.0)
    assert some.verdict == "pass"
    assert "1 of 16 locked points show no pull-in" in some.reason
    for k, point in enumerate(points):
        points[k] = replace(point, measurement=replace(point.measurement, pull_in_s=silent))
    none = judge(replace(run, points=tuple(points)), quantity="pull_in_s", upper=1.0)
    assert none.verdict == "undecided"


def test_the_longest_locked_time_of_a_drifting_record_is_zero(made):
    """ "Holds lock for 30 s" must fail on a pair that never locks."""
    verdict = judge(made.make_run(), quantity="hold_time_s", lower=30)
    assert (verdict.verdict, verdict.value.value) == ("fail", 0.0)
    assert verdict.value.u == pytest.approx(0.5 * math.sqrt(2 / 3))
    assert any(text.startswith("ends of the locked episodes") for text in verdict.left_out)


def test_an_undecided_record_leaves_hold_time_and_locked_share_undecided(made):
    """Not seen is not the same as zero."""
    unknown = made.make_measurement(
        decision=StateDecision(state="undecided", reason="too short", locked_fraction=0, hold_s=2),
        episodes=(),
    )
    run = made.make_run(points=(replace(made.make_point(25.0), measurement=unknown),))
    for name in ("hold_time_s", "locked_fraction"):
        verdict = judge(run, quantity=name, lower=0.5)
        assert (verdict.verdict, "too short" in verdict.reason) == ("undecided", True)


def test_the_centre_offset_is_taken_from_the_free_running_captures(made):
    """Centre of the range less the free frequency of the driven, n/m times."""
    verdict = judge(made.make_run(), quantity="centre_offset_hz", lower=-0.01, upper=0.01)
    assert verdict.value.value == pytest.approx(0.0, abs=1e-9)
    alone = judge(made.make_run(free_runs=()), quantity="centre_offset_hz", upper=0.01)
    assert "no free-running capture" in alone.reason


def test_amplitudes_of_different_units_have_no_ratio(made):
    """A ratio of volts to accelerations is no ratio of amplitudes."""
    role = replace(made.make_role("drive", 25.0), unit="V")
    point = replace(made.make_point(25.0), measurement=made.make_measurement(reference=role))
    verdict = judge(made.make_run(points=(point,)), quantity="amplitude_ratio", upper=2)
    assert "the channels differ in unit: 'm/s2' and 'V'" in verdict.reason


def test_stability_is_judged_at_the_averaging_time_asked_for(made):
    """An Allan deviation means nothing without its averaging time."""
    found = judge(made.make_run(), quantity="free_stability_driven", upper=2e-3, averaging_s=1.2)
    far = judge(made.make_run(), quantity="free_stability_driven", upper=2e-3, averaging_s=100)
    assert (found.verdict, found.value.value) == ("pass", 1e-3)
    assert "the nearest averaging time is 10 s" in far.reason


def test_a_phase_offset_near_180_degrees_is_judged_on_the_circle(made):
    """-179 deg lies within 170 ... 190 deg."""
    near = made.make_measurement(episodes=made._episodes("locked", math.radians(-179)))
    run = made.make_run(points=(replace(made.make_point(25.0), measurement=near),))
    verdict = judge(run, quantity="phase_offset_rad", lower=170, upper=190, unit="deg")
    assert verdict.verdict == "pass"


# ---- words -------------------------------------------------------------------------------


def styled(made, angle_deg, u_deg=1.0, order=(1, 1)):
    """A run of one locked point with a phase offset."""
    measured = made.make_measurement(
        episodes=tuple(
            replace(part, offset_u_rad=math.radians(u_deg))
            for part in made._episodes("locked", math.radians(angle_deg))
        ),
        order=Order(n=order[0], m=order[1]),
    )
    return made.make_run(points=(replace(made.make_point(25.0), measurement=measured),))


@pytest.mark.parametrize(
    ("angle_deg", "wanted", "word"),
    [
        (5, "in-phase", "pass"),
        (5, "anti-phase", "fail"),
        (5, "offset", "fail"),
        (178, "anti-phase", "pass"),
        (-178, "anti-phase", "pass"),
        (90, "offset", "pass"),
        (90, "in-phase", "fail"),
        (29, "in-phase", "undecided"),
        (31, "in-phase", "undecided"),
        (29, "offset", "undecided"),
        (40, "in-phase", "fail"),
    ],
)
def test_a_style_is_judged_by_the_angle_behind_it(made, angle_deg, wanted, word):
    """Near the end of the 30 deg the word alone would flip; the uncertainty says undecided."""
    verdict = judge(styled(made, angle_deg), quantity="lock_style", wanted=wanted)
    assert verdict.verdict == word
    assert verdict.text_value is not None
    assert verdict.value.unit == "rad"


def test_the_stated_half_width_of_the_styles_counts(made):
    """A campaign may call 10 deg the end of in-phase."""
    run = styled(made, 20)
    tight = replace(run, plan=replace(run.plan, measure=replace(run.plan.measure, style_deg=10.0)))
    assert judge(run, quantity="lock_style", wanted="in-phase").verdict == "pass"
    assert judge(tight, quantity="lock_style", wanted="in-phase").verdict == "fail"


def test_orders_other_than_one_to_one_are_always_offset(made):
    """In phase has no meaning between one beat and three."""
    run = styled(made, 0, order=(1, 3))
    assert judge(run, quantity="lock_style", wanted="offset").verdict == "pass"
    assert judge(run, quantity="lock_style", wanted="in-phase").verdict == "fail"


@pytest.mark.parametrize(
    ("state", "order", "wanted", "word"),
    [
        ("locked", (1, 3), "1:3", "pass"),
        ("locked", (1, 1), "1:3", "fail"),
        ("drifting", (1, 3), "1:3", "fail"),
        ("intermittent", (1, 3), "1:3", "fail"),
        ("undecided", (1, 3), "1:3", "undecided"),
    ],
)
def test_an_order_is_reached_where_the_pair_is_locked_at_it(made, state, order, wanted, word):
    """Measured at 1:3 is not locked at 1:3."""
    measured = made.make_measurement(
        decision=StateDecision(state=state, reason="as told", locked_fraction=0.5, hold_s=2),
        order=Order(n=order[0], m=order[1]),
    )
    run = made.make_run(points=(replace(made.make_point(25.0), measurement=measured),))
    verdict = judge(run, quantity="order", wanted=wanted)
    assert verdict.verdict == word
    assert judge(run, quantity="state", wanted="locked").verdict == (
        "pass" if state == "locked" else "undecided" if state == "undecided" else "fail"
    )


def test_a_word_of_a_capture_that_could_not_be_measured_is_undecided(made):
    """No record, no word."""
    lost = replace(made.make_point(25.0), measurement=None, status="invalid", message="silent")
    for quantity, wanted in (("state", "locked"), ("order", "1:1"), ("lock_style", "in-phase")):
        verdict = judge(made.make_run(points=(lost,)), quantity=quantity, wanted=wanted)
        assert (verdict.verdict, "silent" in verdict.reason) == ("undecided", True)


# ---- overall -----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("words", "overall"),
    [
        (("pass", "pass"), "pass"),
        (("pass", "undecided"), "undecided"),
        (("fail", "undecided"), "fail"),
        (("fail", "pass"), "fail"),
        ((), "undecided"),
    ],
)
def test_the_overall_verdict_follows_its_stated_rule(made, words, overall):
    """One fail fails; nothing stated is not passed."""
    verdicts = [made.make_verdict(word, name=str(k)) for k, word in enumerate(words)]
    assert overall_verdict(verdicts) == overall
    assert "fails when any limit fails" in OVERALL_RULE


def test_judging_twice_gives_the_same_verdicts(made):
    """A report written later must not differ."""
    limits = read_limits([sample_table(name) for name in LIMITED], FILE)
    run = made.make_run()
    first, second = (
        judge_limits(
            limits, region=run.region, points=run.points, free_runs=run.free_runs, plan=run.plan
        )
        for _ in range(2)
    )
    assert first == second


def test_every_scope_has_its_selectors():
    """A new kind of quantity must say what picks it."""
    assert {spec.scope for spec in LIMITED.values()} == set(SELECTORS)


def test_a_value_without_uncertainty_is_never_passed_under_a_guard_band(made):
    """Its U would be unknown."""
    measured = made.make_measurement(mean_rate_hz=Quantity(value=0.0, u=None, unit="Hz"))
    run = made.make_run(points=(replace(made.make_point(25.0), measurement=measured),))
    assert judge(run, quantity="mean_rate_hz", lower=-1, upper=1).verdict == "undecided"
    simple = judge(run, quantity="mean_rate_hz", lower=-1, upper=1, rule="simple")
    assert simple.verdict == "pass"
    assert "statistical: the estimator states no uncertainty" in simple.left_out


@pytest.mark.parametrize("name", LIMITED)
def test_every_quantity_stands_in_the_guide(name):
    """What cannot be looked up is not there for a user."""
    guide = (Path(__file__).parents[2] / "docs" / "limits.md").read_text(encoding="utf-8")
    assert f"| `{name}` | " in guide
