"""Decision rules: from a value, its uncertainty and a limit to pass, fail or undecided.

What is known of the value is taken as a normal distribution about it (JCGM 106:2012, 6.4);
where the estimator gave an interval that is not symmetric, each side has its own standard
deviation, read off that side of the interval, and half of the probability (all of it where
the interval has one side only). Rules:

- ``simple``: pass inside the limits, fail outside; nothing is undecided;
- ``guard``: w = U = k u; pass where the value clears the limit by w, fail where it lies
  beyond the limit by more than w, undecided between;
- ``guard-width``: the same with a stated w;
- ``risk``: pass where the probability of a wrong pass is at most the stated risk, fail where
  that of a wrong fail is, undecided between.

Angles are judged on the circle: the limits are the ends of an arc that is run through from
lower to upper, so it may hold +-180 deg.

References
----------
JCGM 106:2012, sections 7 and 8; ILAC-G8:09/2019, section 4.2 (a guard band w = U keeps the
probability of a wrong pass below 2.5 %).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from statistics import NormalDist

from reports.numbers import bounds_text, one_line, percent_text, plain_number, with_unit
from reports.records import Limit, VerdictWord
from rig.angles import TURN_RAD, wrap_angle_rad
from rig.quantities import Quantity

COVERAGE_FACTOR = 2.0  # k = 2, about 95 % for a normal distribution (GUM 6.3.3)
DEFAULT_LEVEL = 0.95  # coverage of an interval that states none
ASYMMETRY = 0.05  # sides that differ by more than this share are judged apart
_WIDE_RAD = 4 * math.pi  # an angle known no better than this is spread evenly on the circle


@dataclass(frozen=True, slots=True, kw_only=True)
class Belief:
    """What is known of a value: best estimate and standard deviation to either side."""

    value: float
    down: float
    up: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Tolerance:
    """The limits of a value, either of them open; ``period`` makes them an arc.

    With a period the frame is turned so that the arc is symmetric about zero.
    """

    lower: float | None = None
    upper: float | None = None
    period: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Judgement:
    """A value judged against one limit; ``margin`` is its distance inside the nearer end."""

    word: VerdictWord
    reason: str
    probability_met: float | None
    expanded_u: float | None
    margin: float = math.inf


def judge_quantity(
    quantity: Quantity, limit: Limit, coverage_factor: float = COVERAGE_FACTOR
) -> Judgement:
    """Return the verdict on one quantity under the rule of a limit.

    Parameters
    ----------
    quantity : Quantity, in the unit of the limit
    limit : Limit
    coverage_factor : float, k of the expanded uncertainty U = k u

    Notes
    -----
    A value that cannot be determined is undecided with its reason, unless the bounds that
    are known settle it. A value without uncertainty is judged under simple acceptance only.
    """
    if quantity.value is None:
        return _judge_bounds(quantity, limit)
    belief = belief_of(quantity)
    if belief is None:
        return _judge_bare(quantity.value, limit)
    tolerance, belief = _framed(limit, belief)
    probability = probability_met(belief, tolerance)
    word, reason = RULES[limit.rule](belief, tolerance, limit, coverage_factor)
    expanded = coverage_factor * max(belief.down, belief.up)
    return Judgement(
        word=word,
        reason=reason,
        probability_met=probability,
        expanded_u=expanded,
        margin=_margin(belief.value, tolerance),
    )


def belief_of(quantity: Quantity) -> Belief | None:
    """Return what is known of a value, or None where no uncertainty was stated.

    Parameters
    ----------
    quantity : Quantity with a value

    Notes
    -----
    The interval counts where its sides differ by more than 5 % or no u was given. An end that
    coincides with the value makes the interval one-sided (a count of zero slips is bounded
    from above only).
    """
    assert quantity.value is not None
    sides = _sides(quantity)
    if sides is not None:
        down, up = sides
        if quantity.u is None or abs(up - down) > ASYMMETRY * (up + down):
            return Belief(value=quantity.value, down=down, up=up)
    if quantity.u is None:
        return None
    return Belief(value=quantity.value, down=quantity.u, up=quantity.u)


def probability_met(belief: Belief, tolerance: Tolerance) -> float:
    """Return the probability that the true value lies within the limits (JCGM 106, 7.2-7.4).

    Phi((upper - value) / u) - Phi((lower - value) / u), Phi the standard normal
    distribution; on a circle summed over all turns.

    Parameters
    ----------
    belief : Belief
    tolerance : Tolerance

    Returns
    -------
    float in [0, 1]
    """
    if tolerance.period is None:
        return _between(belief, tolerance.lower, tolerance.upper, 0.0)
    assert tolerance.lower is not None
    assert tolerance.upper is not None
    if max(belief.down, belief.up) > _WIDE_RAD:
        return (tolerance.upper - tolerance.lower) / tolerance.period
    turns = range(-12, 13)  # 3 standard deviations of the widest distribution that gets here
    total = sum(
        _between(belief, tolerance.lower, tolerance.upper, k * tolerance.period) for k in turns
    )
    return min(total, 1.0)


def rule_text(limit: Limit, coverage_factor: float = COVERAGE_FACTOR) -> str:
    """Return the decision rule of a limit in words."""
    match limit.rule:
        case "simple":
            return "simple acceptance"
        case "guard":
            return f"guard band w = U (k = {coverage_factor:g})"
        case "guard-width":
            width = with_unit(plain_number(limit.guard_width), limit.unit)
            return f"guard band w = {width}"
        case "risk":
            return f"specific risk at most {percent_text(limit.risk or 0.0)}"


# ---- the rules -----------------------------------------------------------------------------


def _simple(
    belief: Belief, tolerance: Tolerance, limit: Limit, factor: float
) -> tuple[VerdictWord, str]:
    lower, upper = _open_ends(tolerance)
    if lower <= belief.value <= upper:
        return "pass", "the value lies within the limit"
    return "fail", "the value lies beyond the limit"


def _guard(
    belief: Belief, tolerance: Tolerance, limit: Limit, factor: float
) -> tuple[VerdictWord, str]:
    return _guarded(belief.value, factor * belief.down, factor * belief.up, tolerance, "U")


def _guard_width(
    belief: Belief, tolerance: Tolerance, limit: Limit, factor: float
) -> tuple[VerdictWord, str]:
    width = limit.guard_width or 0.0
    return _guarded(belief.value, width, width, tolerance, "the stated guard band")


def _risk(
    belief: Belief, tolerance: Tolerance, limit: Limit, factor: float
) -> tuple[VerdictWord, str]:
    risk = limit.risk or 0.0
    met = probability_met(belief, tolerance)
    if met >= 1.0 - risk:
        return "pass", f"the risk of a wrong pass is at most {percent_text(risk)}"
    if met <= risk:
        return "fail", f"the risk of a wrong fail is at most {percent_text(risk)}"
    return "undecided", f"either verdict would carry a risk above {percent_text(risk)}"


Rule = Callable[[Belief, Tolerance, Limit, float], tuple[VerdictWord, str]]

RULES: dict[str, Rule] = {
    "simple": _simple,
    "guard": _guard,
    "guard-width": _guard_width,
    "risk": _risk,
}


def _guarded(
    value: float, down: float, up: float, tolerance: Tolerance, name: str
) -> tuple[VerdictWord, str]:
    """Judge the span value - down ... value + up: wholly inside, wholly outside, or between."""
    lower, upper = _open_ends(tolerance)
    if lower + down <= value <= upper - up:
        return "pass", f"the value clears the limit by {name} or more"
    if _outside(value - down, value + up, (lower, upper), tolerance.period):
        return "fail", f"the value lies beyond the limit by more than {name}"
    if upper - lower < down + up:
        return "undecided", f"the limits lie closer together than twice {name}: no value can pass"
    return "undecided", f"the value lies within {name} of the limit"


def _outside(low: float, high: float, ends: tuple[float, float], period: float | None) -> bool:
    """Whether the span low ... high has no point in common with the limits or their repeats."""
    lower, upper = ends
    if period is None:
        return low > upper or high < lower
    return (low > upper and high < lower + period) or (high < lower and low > upper - period)


# ---- values that are not numbers with an uncertainty ------------------------------------


def _judge_bounds(quantity: Quantity, limit: Limit) -> Judgement:
    """Judge a quantity without a value by the bounds that are known of it."""
    reason = one_line(quantity.reason or "no reason recorded")
    word = _bounds_word(quantity, limit)
    if word != "undecided":
        reason = f"{reason}; decided by its bounds, {bounds_text(quantity)}"
    return Judgement(word=word, reason=reason, probability_met=None, expanded_u=None)


def _bounds_word(quantity: Quantity, limit: Limit) -> VerdictWord:
    level = DEFAULT_LEVEL if quantity.level is None else quantity.level
    if limit.rule == "risk" and 1.0 - level > (limit.risk or 0.0):
        return "undecided"  # a bound at 95 % leaves a risk of up to 5 %
    margin = (limit.guard_width or 0.0) if limit.rule == "guard-width" else 0.0
    low = -math.inf if quantity.low is None else quantity.low - margin
    high = math.inf if quantity.high is None else quantity.high + margin
    if limit.circular:
        return _arc_word(low, high, limit)
    lower, upper = _open_ends(Tolerance(lower=limit.lower, upper=limit.upper))
    if lower <= low and high <= upper:
        return "pass"
    return "fail" if low > upper or high < lower else "undecided"


def _arc_word(low: float, high: float, limit: Limit) -> VerdictWord:
    if not math.isfinite(high - low):
        return "undecided"  # one bound says nothing on a circle
    half = (high - low) / 2
    middle = Belief(value=(low + high) / 2, down=half, up=half)
    tolerance, turned = _framed(limit, middle)
    return _guarded(turned.value, half, half, tolerance, "the bounds")[0]


def _judge_bare(value: float, limit: Limit) -> Judgement:
    """Judge a value without uncertainty: only simple acceptance can."""
    tolerance, belief = _framed(limit, Belief(value=value, down=0.0, up=0.0))
    if limit.rule == "simple":
        word, reason = _simple(belief, tolerance, limit, 0.0)
        reason = f"{reason}; no uncertainty is known"
    else:
        word, reason = "undecided", "no uncertainty is known, which the decision rule needs"
    return Judgement(word=word, reason=reason, probability_met=None, expanded_u=None)


# ---- helpers -------------------------------------------------------------------------------


def _framed(limit: Limit, belief: Belief) -> tuple[Tolerance, Belief]:
    """Return limits and belief in one frame; an arc is turned so that zero is its middle."""
    if not limit.circular:
        return Tolerance(lower=limit.lower, upper=limit.upper), belief
    assert limit.lower is not None
    assert limit.upper is not None
    half = arc_width_rad(limit.lower, limit.upper) / 2
    turned = wrap_angle_rad(belief.value - limit.lower - half)
    return (
        Tolerance(lower=-half, upper=half, period=TURN_RAD),
        Belief(value=turned, down=belief.down, up=belief.up),
    )


def arc_width_rad(lower_rad: float, upper_rad: float) -> float:
    """Return the width of the arc run through from lower to upper, rad, in [0, 2 pi)."""
    return (upper_rad - lower_rad) % TURN_RAD


def _margin(value: float, tolerance: Tolerance) -> float:
    lower, upper = _open_ends(tolerance)
    return min(value - lower, upper - value)


def _open_ends(tolerance: Tolerance) -> tuple[float, float]:
    lower = -math.inf if tolerance.lower is None else tolerance.lower
    upper = math.inf if tolerance.upper is None else tolerance.upper
    return lower, upper


def _sides(quantity: Quantity) -> tuple[float, float] | None:
    """Return the standard deviations to either side that an interval stands for."""
    value, low, high = quantity.value, quantity.low, quantity.high
    if value is None or low is None or high is None or not low <= value <= high:
        return None
    level = DEFAULT_LEVEL if quantity.level is None else quantity.level
    if not 0.0 < level < 1.0:
        return None
    factor = NormalDist().inv_cdf((1.0 + level) / 2.0)
    return (value - low) / factor, (high - value) / factor


def _between(belief: Belief, lower: float | None, upper: float | None, shift: float) -> float:
    above = 1.0 if upper is None else _below(belief, upper + shift)
    below = 0.0 if lower is None else _below(belief, lower + shift, closed=False)
    return max(above - below, 0.0)


def _below(belief: Belief, point: float, closed: bool = True) -> float:
    """Return the probability that the value is at most (``closed``) or below a point."""
    distance = point - belief.value
    if belief.down == belief.up == 0.0:
        return float(distance >= 0 if closed else distance > 0)
    spread = belief.up if distance > 0 else belief.down
    if spread == 0.0:
        return float(distance > 0)
    tail = 0.5 * math.erfc(-distance / spread / math.sqrt(2.0))
    if belief.down == 0.0:  # all of the probability lies above the value
        return 2.0 * tail - 1.0
    return 2.0 * tail if belief.up == 0.0 else tail
