"""Limits that want a word: locking order, lock style, state of a capture."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace

from fit.episodes import EpisodeRules
from reports.decision import Judgement, judge_quantity
from reports.records import Limit, VerdictWord
from reports.selection import Candidate, RunParts
from rig.angles import rad_from_deg
from rig.quantities import Quantity


def judge_word(candidate: Candidate, limit: Limit, parts: RunParts) -> Judgement:
    """Return the verdict on a candidate whose limit wants a word.

    Parameters
    ----------
    candidate : Candidate with its words
    limit : Limit with ``wanted``
    parts : RunParts, for the stated half-width of the styles
    """
    if candidate.words is None:
        return _plain("undecided", candidate.value.reason or "it could not be measured")
    return WORD_JUDGES[limit.quantity](candidate, limit, parts)


def style_half_width_rad(parts: RunParts) -> float:
    """Return the half-width of what is called in-phase or anti-phase, rad."""
    stated = parts.plan.measure.style_deg
    return rad_from_deg(EpisodeRules().style_deg if stated is None else stated)


def _judge_state(candidate: Candidate, limit: Limit, parts: RunParts) -> Judgement:
    if candidate.words == limit.wanted:
        return _plain("pass", f"the state is {candidate.words}")
    if candidate.words == "undecided":
        return _plain("undecided", candidate.value.reason or "the state is undecided")
    return _plain("fail", f"the state is {candidate.words}")


def _judge_order(candidate: Candidate, limit: Limit, parts: RunParts) -> Judgement:
    """Judge "n:m state": the order is reached where the pair is locked at it throughout."""
    order, _, state = (candidate.words or "").partition(" ")
    if state == "undecided":
        return _plain("undecided", candidate.value.reason or "the state is undecided")
    if order == limit.wanted and state == "locked":
        return _plain("pass", f"locked at {order}")
    return _plain("fail", f"{state} at {order}")


def _judge_style(candidate: Candidate, limit: Limit, parts: RunParts) -> Judgement:
    """Judge a style by the angle behind it: in-phase and anti-phase are arcs about 0 and 180."""
    measured = candidate.point.measurement if candidate.point is not None else None
    order = parts.order if measured is None else measured.order
    if (order.n, order.m) != (1, 1):
        word: VerdictWord = "pass" if limit.wanted == "offset" else "fail"
        return _plain(word, f"at order {order.n}:{order.m} every style is offset")
    half = style_half_width_rad(parts)
    judged = {
        style: _judge_arc(candidate.value, limit, middle, half)
        for style, middle in (("in-phase", 0.0), ("anti-phase", math.pi))
    }
    if limit.wanted in judged:
        return judged[limit.wanted]
    return _neither(judged["in-phase"], judged["anti-phase"])


def _judge_arc(value: Quantity, limit: Limit, middle_rad: float, half_rad: float) -> Judgement:
    arc = replace(
        limit, unit="rad", lower=middle_rad - half_rad, upper=middle_rad + half_rad, circular=True
    )
    return judge_quantity(value, arc)


def _neither(in_phase: Judgement, anti_phase: Judgement) -> Judgement:
    """Judge "offset": it is met where the angle is neither in phase nor in anti-phase."""
    words = {in_phase.word, anti_phase.word}
    probability = None
    if in_phase.probability_met is not None and anti_phase.probability_met is not None:
        probability = max(1.0 - in_phase.probability_met - anti_phase.probability_met, 0.0)
    word: VerdictWord = "undecided"
    if words == {"fail"}:
        word, reason = "pass", "the angle is neither in phase nor in anti-phase"
    elif "pass" in words:
        word, reason = "fail", "the angle is in phase or in anti-phase"
    else:
        reason = "the angle lies too near to the end of in-phase or anti-phase"
    return replace(in_phase, word=word, reason=reason, probability_met=probability)


def _plain(word: VerdictWord, reason: str) -> Judgement:
    return Judgement(word=word, reason=reason, probability_met=None, expanded_u=None)


WORD_JUDGES: dict[str, Callable[[Candidate, Limit, RunParts], Judgement]] = {
    "order": _judge_order,
    "lock_style": _judge_style,
    "state": _judge_state,
}
