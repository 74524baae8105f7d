"""Decision rules on asymmetric intervals, angles, bounds and bare values."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from reports.decision import (
    Belief,
    Tolerance,
    belief_of,
    judge_quantity,
    probability_met,
    rule_text,
)
from reports.records import Limit
from rig.quantities import Quantity, undetermined


def limit(**changes):
    """A limit in Hz with the default rule."""
    return Limit(**({"name": "w", "quantity": "locking_width_hz", "unit": "Hz"} | changes))


def arc(lower_deg, upper_deg, **changes):
    """A limit on an angle, its ends in degrees."""
    ends = {"lower": math.radians(lower_deg), "upper": math.radians(upper_deg)}
    return limit(unit="rad", circular=True, **ends, **changes)


def angle(value_deg, u_deg):
    """An angle with its standard uncertainty."""
    return Quantity(value=math.radians(value_deg), u=math.radians(u_deg), unit="rad")


def hertz(value, u, **more):
    """A frequency."""
    return Quantity(value=value, u=u, unit="Hz", **more)


@pytest.mark.parametrize(
    ("value", "word"), [(9.999, "pass"), (10.0, "pass"), (10.0001, "fail"), (99.0, "fail")]
)
def test_simple_acceptance_has_no_undecided_zone(value, word):
    """Shared risk: the value alone decides."""
    assert judge_quantity(hertz(value, 5.0), limit(upper=10.0, rule="simple")).word == word


@given(st.floats(-50, 50), st.floats(0.001, 20), st.floats(-30, 30), st.floats(0, 40))
def test_a_guarded_verdict_never_contradicts_the_probability(value, u, lower, width):
    """With k = 2 a pass means at least 95.4 % and a fail at most 2.3 %."""
    judged = judge_quantity(hertz(value, u), limit(lower=lower, upper=lower + width))
    if judged.word == "pass":
        assert judged.probability_met >= 0.954
    if judged.word == "fail":
        assert judged.probability_met <= 0.0228


@given(st.floats(-50, 50), st.floats(0.001, 20), st.floats(0.001, 0.499))
def test_the_risk_rule_is_the_probability_itself(value, u, risk):
    """Pass and fail each carry at most the stated risk."""
    judged = judge_quantity(hertz(value, u), limit(upper=10.0, rule="risk", risk=risk))
    met = stats.norm(value, u).cdf(10.0)
    expected = "pass" if met >= 1 - risk else "fail" if met <= risk else "undecided"
    if min(abs(met - risk), abs(met - 1 + risk)) > 1e-9:
        assert judged.word == expected


def test_limits_closer_than_twice_the_guard_band_say_that_nothing_can_pass():
    """The remedy is a better measurement, and the reader must know."""
    judged = judge_quantity(hertz(10.0, 1.0), limit(lower=9.0, upper=11.0))
    assert judged.word == "undecided"
    assert "no value can pass" in judged.reason


def test_an_asymmetric_interval_is_judged_by_its_own_side():
    """A likelihood-ratio interval that reaches far upwards cannot pass an upper limit."""
    value = hertz(0.3, 0.02, low=0.28, high=0.40, level=0.95)
    assert judge_quantity(value, limit(upper=0.36)).word == "undecided"
    assert judge_quantity(value, limit(lower=0.27)).word == "pass"
    assert belief_of(value).up == pytest.approx(0.1 / 1.959964, rel=1e-6)


def test_an_interval_that_is_nearly_symmetric_leaves_the_standard_uncertainty_in_force():
    """Two numbers for one thing would confuse; only a real difference counts."""
    assert belief_of(hertz(0.3, 0.02, low=0.261, high=0.339, level=0.95)).up == 0.02


def test_no_slip_seen_is_bounded_from_above_only():
    """Zero slips in T seconds: the rate is between zero and its bound, never below zero."""
    none = Quantity(value=0.0, u=None, unit="Hz", low=0.0, high=0.05, level=0.95)
    assert judge_quantity(none, limit(upper=0.06)).word == "pass"
    assert judge_quantity(none, limit(upper=0.04)).word == "undecided"
    assert judge_quantity(none, limit(lower=0.0)).probability_met == 1.0
    assert judge_quantity(none, limit(upper=0.05)).probability_met == pytest.approx(0.95)


def test_a_value_bounded_from_below_only_mirrors_it():
    """A locked fraction of one is bounded from below."""
    full = Quantity(value=1.0, u=None, unit="1", low=0.9, high=1.0, level=0.95)
    assert judge_quantity(full, limit(lower=0.85)).word == "pass"
    assert judge_quantity(full, limit(lower=0.9)).probability_met == pytest.approx(0.95)
    assert judge_quantity(full, limit(upper=1.0)).probability_met == 1.0


@pytest.mark.parametrize(
    ("value_deg", "word"),
    [
        (180.0, "pass"),
        (-179.0, "pass"),
        (170.0, "pass"),
        (158.0, "undecided"),
        (-162.0, "undecided"),
        (150.0, "fail"),
        (-150.0, "fail"),
        (0.0, "fail"),
        (180.0 + 3600.0, "pass"),
    ],
)
def test_an_arc_may_hold_180_degrees(value_deg, word):
    """Anti-phase: 160 to -160 deg, run through 180 deg."""
    for lower, upper in ((160, -160), (160, 200), (-200, -160)):
        assert judge_quantity(angle(value_deg, 1.5), arc(lower, upper)).word == word


def test_an_angle_known_only_roughly_cannot_fail_by_wrapping():
    """An uncertainty of half a turn reaches the arc from either side."""
    assert judge_quantity(angle(120, 60), arc(-30, 30)).word == "undecided"
    assert judge_quantity(angle(170, 65), arc(-30, 30)).word == "fail"
    assert judge_quantity(angle(180, 80), arc(-30, 30)).word == "undecided"


@pytest.mark.parametrize("u_deg", [5.0, 60.0, 300.0, 719.0, 3000.0])
def test_the_probability_on_the_circle_is_that_of_the_wrapped_normal(u_deg):
    """Against many wrapped turns added up; very wide distributions are even on the circle."""
    value, half, u = 40.0, 30.0, u_deg
    exact = sum(
        stats.norm.cdf(half + 360 * k, value, u) - stats.norm.cdf(-half + 360 * k, value, u)
        for k in range(-200, 201)
    )
    judged = judge_quantity(angle(value, u), arc(-half, half, rule="simple"))
    assert judged.probability_met == pytest.approx(exact, abs=1e-6)


@given(st.floats(-720, 720), st.floats(0.1, 90), st.floats(-180, 180), st.floats(1, 350))
def test_turning_angle_and_arc_together_changes_nothing(value, u, lower, width):
    """No direction on the circle is special, 180 deg least of all."""
    first = judge_quantity(angle(value, u), arc(lower, lower + width))
    second = judge_quantity(angle(value + 77, u), arc(lower + 77, lower + width + 77))
    assert first.probability_met == pytest.approx(second.probability_met, abs=1e-9)


@pytest.mark.parametrize(
    ("low", "high", "ends", "word"),
    [
        (0.6, None, {"upper": 0.5}, "fail"),
        (0.6, None, {"lower": 0.5}, "pass"),
        (0.6, None, {"lower": 0.5, "upper": 0.9}, "undecided"),
        (None, 0.4, {"lower": 0.5}, "fail"),
        (None, 0.4, {"upper": 0.5}, "pass"),
        (0.55, 0.6, {"lower": 0.5, "upper": 0.9}, "pass"),
        (None, None, {"lower": 0.5}, "undecided"),
    ],
)
def test_bounds_may_decide_where_no_value_can_be_determined(low, high, ends, word):
    """A steadily locked record gives no coupling but a least one; that can be enough."""
    judged = judge_quantity(undetermined("Hz", "steady lock", low=low, high=high), limit(**ends))
    assert judged.word == word
    assert judged.reason.startswith("steady lock")
    assert judged.probability_met is None


def test_a_bound_at_95_per_cent_does_not_decide_a_stricter_risk():
    """The bound itself is wrong in up to 5 % of cases."""
    value = undetermined("Hz", "steady lock", low=0.6)
    assert judge_quantity(value, limit(lower=0.5, rule="risk", risk=0.01)).word == "undecided"
    assert judge_quantity(value, limit(lower=0.5, rule="risk", risk=0.1)).word == "pass"


def test_a_bound_must_clear_a_stated_guard_band_too():
    """The guard band was agreed; a missing value does not remove it."""
    value = undetermined("Hz", "steady lock", low=0.6)
    assert (
        judge_quantity(value, limit(lower=0.5, rule="guard-width", guard_width=0.2)).word
        == "undecided"
    )


def test_bounds_of_an_angle_are_judged_on_the_circle():
    """An interval across 180 deg is one interval."""
    bounds = undetermined("rad", "drifts", low=math.radians(170), high=math.radians(190))
    one = undetermined("rad", "drifts", low=math.radians(170))
    assert judge_quantity(bounds, arc(160, -160)).word == "pass"
    assert judge_quantity(bounds, arc(-30, 30)).word == "fail"
    assert judge_quantity(one, arc(160, -160)).word == "undecided"


def test_a_value_without_uncertainty_is_judged_by_simple_acceptance_only():
    """A guard band of unknown width is no guard band."""
    bare = hertz(0.6, None)
    assert judge_quantity(bare, limit(lower=0.5)).word == "undecided"
    judged = judge_quantity(bare, limit(lower=0.5, rule="simple"))
    assert (judged.word, judged.expanded_u) == ("pass", None)


def test_an_exact_value_is_decided_at_the_limit_itself():
    """A counted number has no uncertainty; on the limit it conforms."""
    assert judge_quantity(hertz(0.5, 0.0), limit(lower=0.5)).word == "pass"
    assert judge_quantity(hertz(0.5, 0.0), limit(lower=0.5)).probability_met == 1.0


def test_expanded_uncertainty_is_k_times_u():
    """U and k stand beside every verdict."""
    assert judge_quantity(hertz(0.6, 0.02), limit(lower=0.5)).expanded_u == 0.04


@pytest.mark.parametrize(
    ("changes", "text"),
    [
        ({}, "guard band w = U (k = 2)"),
        ({"rule": "simple"}, "simple acceptance"),
        ({"rule": "guard-width", "guard_width": 0.01}, "guard band w = 0.01 Hz"),
        ({"rule": "risk", "risk": 0.025}, "specific risk at most 2.5 %"),
    ],
)
def test_every_rule_is_told_in_words(changes, text):
    """ISO/IEC 17025, 7.8.6: no decision rule is silent."""
    assert rule_text(limit(lower=0.5, **changes)) == text


def test_probability_without_limits_is_one():
    """Nothing is asked, so nothing can be missed."""
    assert probability_met(Belief(value=1.0, down=1.0, up=1.0), Tolerance()) == 1.0
