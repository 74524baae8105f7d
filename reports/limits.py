"""Limits of a sweep file: read and refused here, and judged on what was measured.

Keys of a [[limit]] table: name, quantity, unit, lower, upper (or wanted, for words), the
selectors level, direction, drive_hz = [low, high] and file, averaging_s for stability, and
rule with guard_width or risk. Numbers are brought to the unit that the quantity is kept in
(its name ends with it), so that a limit, its value and the JSON speak one unit.

Every limit is judged on all that it applies to, and the worst decides. Whether the whole run
passes follows from one stated rule, ``OVERALL_RULE``.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

from fit.records import FreeRun, LockingRegion
from reports.budget import Budget, Facts, make_budget
from reports.decision import COVERAGE_FACTOR, Judgement, judge_quantity
from reports.facts import gather_facts
from reports.limited import LIMITED
from reports.limitfile import check_limits, read_limits
from reports.records import Limit, PointResult, Verdict, VerdictWord
from reports.selection import Candidate, Picked, RunParts
from reports.units import unit_factor
from reports.words import judge_word
from rig.quantities import Quantity, undetermined
from rig.sweepfile import SweepPlan

__all__ = [
    "OVERALL_RULE",
    "check_limits",
    "judge_limits",
    "overall_verdict",
    "read_limits",
]

OVERALL_RULE = (
    "The item fails when any limit fails; otherwise it is undecided when any limit is "
    "undecided or no limit is stated; otherwise it passes."
)

_SEVERITY: dict[VerdictWord, int] = {"pass": 0, "undecided": 1, "fail": 2}


def judge_limits(
    limits: Sequence[Limit],
    *,
    region: LockingRegion | None,
    points: tuple[PointResult, ...],
    free_runs: tuple[FreeRun, ...],
    plan: SweepPlan,
) -> tuple[Verdict, ...]:
    """Return one verdict for each limit, in their order.

    Parameters
    ----------
    limits : sequence of Limit, as ``read_limits`` gives them
    region : LockingRegion or None
    points : tuple of PointResult, every row of the sweep
    free_runs : tuple of FreeRun
    plan : SweepPlan
    """
    parts = RunParts(points=points, region=region, free_runs=free_runs, plan=plan)
    return tuple(_judge(limit, parts) for limit in limits)


def overall_verdict(verdicts: Sequence[Verdict]) -> VerdictWord:
    """Return the verdict on a whole run by ``OVERALL_RULE``."""
    words = {verdict.verdict for verdict in verdicts}
    if "fail" in words:
        return "fail"
    return "pass" if words == {"pass"} else "undecided"


def _judge(limit: Limit, parts: RunParts) -> Verdict:
    spec = LIMITED[limit.quantity]
    picked = spec.pick(parts, limit)
    if not picked.candidates:
        return _nothing(limit, picked.note)
    facts = gather_facts(limit.quantity, spec, picked.candidates, parts)
    judged = [_judge_one(limit, one, facts(one), parts) for one in picked.candidates]
    return _verdict(limit, picked, min(judged, key=_how_good))


Outcome = tuple[Candidate, Budget, Judgement]


def _judge_one(limit: Limit, candidate: Candidate, facts: Facts, parts: RunParts) -> Outcome:
    """Return the judgement on one candidate with the budget of its value."""
    spec = LIMITED[limit.quantity]
    budget = make_budget(spec.kind, _in_unit(candidate.value, limit.unit), facts)
    if spec.words:
        known = replace(candidate, value=budget.value)
        return candidate, budget, judge_word(known, limit, parts)
    return candidate, budget, judge_quantity(budget.value, limit)


def _in_unit(value: Quantity, unit: str) -> Quantity:
    """Return a value under the unit of its limit; a value in another unit cannot be judged."""
    if value.value is None or not unit or value.unit == unit:
        return value
    if unit_factor(value.unit, unit) == 1.0:  # 1/s and Hz are one unit under two names
        return replace(value, unit=unit)
    return undetermined(unit, f"measured in '{value.unit}', the limit is in '{unit}'")


def _how_good(outcome: Outcome) -> tuple[int, float, float]:
    """Return a key that is least for the worst outcome."""
    judgement = outcome[2]
    met = 2.0 if judgement.probability_met is None else judgement.probability_met
    return -_SEVERITY[judgement.word], met, judgement.margin


def _verdict(limit: Limit, picked: Picked, worst: Outcome) -> Verdict:
    candidate, budget, judgement = worst
    return Verdict(
        # a limit in the sensor's own unit takes over the unit that was measured
        limit=limit if limit.unit or limit.wanted else replace(limit, unit=budget.value.unit),
        value=budget.value,
        expanded_u=judgement.expanded_u,
        coverage_factor=COVERAGE_FACTOR,
        probability_met=judgement.probability_met,
        verdict=judgement.word,
        reason=_reason(picked, candidate, judgement),
        budget=budget.lines,
        left_out=budget.left_out,
        text_value=candidate.words,
    )


def _reason(picked: Picked, candidate: Candidate, judgement: Judgement) -> str:
    count = len(picked.candidates)
    place = candidate.where if count == 1 else f"worst of {count}, {candidate.where}"
    told = f"{place}: {judgement.reason}"
    return f"{told}; {picked.note}" if picked.note else told


def _nothing(limit: Limit, note: str) -> Verdict:
    """Return the verdict on a limit that nothing measured answers to."""
    reason = note or "nothing was measured that the limit applies to"
    return Verdict(
        limit=limit,
        value=undetermined(limit.unit, reason),
        expanded_u=None,
        coverage_factor=COVERAGE_FACTOR,
        probability_met=None,
        verdict="undecided",
        reason=reason,
    )
