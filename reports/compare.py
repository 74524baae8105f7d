"""Two runs side by side: before and after a repair, a unit against a reference.

Values are paired by what they belong to: level and direction, or drive, level and direction
of a capture. The difference of a pair has the uncertainties of both added as squares; its
p-value is that of the two-sided normal test against no difference. Among many pairs some
differ by chance, so a difference counts as significant only after Holm's correction over all
pairs of the comparison.

The uncertainties are those of the estimates. Systematic parts that both runs share (the same
sensors, the same recorder) cancel in a difference and are left out; where the set-up was
changed between the runs they must be added by hand.

References
----------
Holm 1979, Scandinavian Journal of Statistics 6, 65-70 (recalled).
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, Literal

from reports.limited import LIMITED
from reports.numbers import json_quantity, one_line, paper_text, plain_number, probability_text
from reports.records import Limit, SweepRun
from reports.selection import Candidate, RunParts, drive_of, level_name
from rig.angles import wrap_angle_rad
from rig.quantities import Quantity, undetermined
from rig.sweepfile.records import SweepPlan

COMPARISON_SCHEMA = "lockspan.comparison/1.0"
SIGNIFICANCE = 0.05  # probability that any pair is called different when none is

Outcome = Literal["differs", "no difference seen", "cannot be compared"]

COMPARED = (
    "locking_width_hz",
    "lower_edge_hz",
    "upper_edge_hz",
    "coupling_hz",
    "phase_offset_centre_rad",
    "centre_hz",
    "coupling_per_level",
    "level_power",
    "hysteresis_lower_hz",
    "hysteresis_upper_hz",
    "free_frequency_driven_hz",
    "free_frequency_reference_hz",
    "mean_rate_hz",
    "phase_offset_rad",
    "phase_jitter_rad",
    "pull_in_s",
    "amplitude_driven",
)
# Frequencies of the axis mean the drive for a one-way pair, the free detuning for a mutual one.
ON_THE_AXIS = ("lower_edge_hz", "upper_edge_hz", "centre_hz")
OF_THE_LEVEL = ("coupling_per_level", "level_power")
# What belongs to one oscillator alone, whatever the order of the pair.
OF_ONE = ("free_frequency_driven_hz", "free_frequency_reference_hz", "amplitude_driven")


@dataclass(frozen=True, slots=True, kw_only=True)
class Row:
    """One pair of values: what, where, both values, difference (second less first), test."""

    quantity: str
    where: str
    first: Quantity
    second: Quantity
    difference: Quantity
    p_value: float | None
    outcome: Outcome = "cannot be compared"


@dataclass(frozen=True, slots=True, kw_only=True)
class Change:
    """A word that is not the same in both runs: a verdict, or the state of a capture."""

    subject: str
    first: str
    second: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Comparison:
    """Everything two runs have in common, and what has changed."""

    rows: tuple[Row, ...]
    changes: tuple[Change, ...]
    unpaired: tuple[str, ...]


def compare_folders(first: Path, second: Path) -> tuple[str, dict[str, Any]]:
    """Return two stored runs side by side, as text and as JSON holds it.

    Parameters
    ----------
    first, second : paths of folders of sweeps

    Raises
    ------
    LockspanError
        If a folder does not hold a run that can be read.
    """
    from reports.runs import load_run  # brings in the whole measuring chain

    runs = load_run(first)[1], load_run(second)[1]
    comparison = compare_runs(*runs)
    return comparison_text(comparison, str(first), str(second)), comparison_json(comparison)


def compare_runs(first: SweepRun, second: SweepRun) -> Comparison:
    """Return two runs side by side with the significance of each difference.

    Parameters
    ----------
    first, second : SweepRun; a difference is the second less the first
    """
    rows: list[Row] = []
    unpaired: list[str] = []
    for name in COMPARED:
        before, after = _values(name, first), _values(name, second)
        unlike = _unlike(name, first.plan, second.plan)
        for key, value in before.items():
            if key in after:
                rows.append(_row(name, key, (value, after[key]), unlike))
        unpaired += [f"{name}, {key}: first run only" for key in before if key not in after]
        unpaired += [f"{name}, {key}: second run only" for key in after if key not in before]
    return Comparison(
        rows=_with_outcomes(rows),
        changes=(*_verdict_changes(first, second), *_state_changes(first, second)),
        unpaired=tuple(unpaired),
    )


def holm_rejects(p_values: Sequence[float], size: float = SIGNIFICANCE) -> list[bool]:
    """Return which hypotheses Holm's step-down procedure rejects.

    The i-th smallest of m p-values is compared with size / (m - i + 1); the first that is not
    below ends the search.

    Parameters
    ----------
    p_values : sequence of float in [0, 1]
    size : float, probability of any false rejection
    """
    order = sorted(range(len(p_values)), key=lambda index: p_values[index])
    rejected = [False] * len(p_values)
    for rank, index in enumerate(order):
        if p_values[index] > size / (len(p_values) - rank):
            break
        rejected[index] = True
    return rejected


def comparison_text(comparison: Comparison, first: str, second: str) -> str:
    """Return a comparison for the terminal: what differs first, then the rest of the region.

    Parameters
    ----------
    comparison : Comparison
    first, second : str, names of the two runs
    """
    differing = [row for row in comparison.rows if row.outcome == "differs"]
    lines = [f"first:  {first}", f"second: {second}", ""]
    lines += [f"{one.subject}: {one.first} -> {one.second}" for one in comparison.changes]
    lines += [_row_text(row) for row in differing]
    lines += [_row_text(row) for row in comparison.rows if _is_shown(row)]
    lines.append("")
    lines.append(
        f"{len(comparison.rows)} pairs, {len(differing)} differ significantly "
        f"({plain_number(SIGNIFICANCE * 100)} % for all together, Holm); "
        f"{len(comparison.unpaired)} values without a partner"
    )
    lines.append("uncertainties are those of the estimates; shared systematic parts are left out")
    return "\n".join(lines)


def comparison_json(comparison: Comparison) -> dict[str, Any]:
    """Return a comparison as JSON holds it."""
    return {
        "schema": COMPARISON_SCHEMA,
        "significance": SIGNIFICANCE,
        "rows": [
            {
                "quantity": row.quantity,
                "where": row.where,
                "first": json_quantity(row.first),
                "second": json_quantity(row.second),
                "difference": json_quantity(row.difference),
                "p_value": row.p_value,
                "outcome": row.outcome,
            }
            for row in comparison.rows
        ],
        "changes": [
            {"subject": one.subject, "first": one.first, "second": one.second}
            for one in comparison.changes
        ],
        "unpaired": list(comparison.unpaired),
    }


def _is_shown(row: Row) -> bool:
    """Whether a row without significant difference is listed: captures are only counted."""
    return row.outcome != "differs" and LIMITED[row.quantity].scope != "point"


def _row_text(row: Row) -> str:
    told = f"{row.quantity}, {row.where}: {paper_text(row.first)} -> {paper_text(row.second)}"
    if row.difference.value is None:
        return f"{told}; {row.outcome}{_why_not(row)}"
    change = paper_text(row.difference)
    return f"{told}; change {change}, p {probability_text(row.p_value)}, {row.outcome}"


def _why_not(row: Row) -> str:
    """Return the reason of a pair that cannot be compared where its values do not show it."""
    if row.first.value is None or row.second.value is None or not row.difference.reason:
        return ""
    return f": {one_line(row.difference.reason)}"


# ---- pairing ---------------------------------------------------------------------------------


def _values(name: str, run: SweepRun) -> dict[str, Quantity]:
    """Return the values of a quantity under the name of what they belong to."""
    parts = RunParts(points=run.points, region=run.region, free_runs=run.free_runs, plan=run.plan)
    everything = Limit(name="", quantity=name, unit="")
    seen: dict[str, int] = {}
    found: dict[str, Quantity] = {}
    for candidate in LIMITED[name].pick(parts, everything).candidates:
        key = _key(name, candidate, parts)
        seen[key] = seen.get(key, 0) + 1
        # repeats are paired in the order in which they stand in the table
        found[key if seen[key] == 1 else f"{key}, no. {seen[key]}"] = candidate.value
    return found


def _key(name: str, candidate: Candidate, parts: RunParts) -> str:
    """Return what a candidate is paired by; files are named otherwise in another campaign."""
    if LIMITED[name].scope == "capture":
        return "alone"
    point = candidate.point
    if point is None:
        return candidate.where
    drive_hz = drive_of(point)
    drive = "" if drive_hz is None else f"drive {plain_number(drive_hz, 10)} Hz, "
    return f"{drive}{level_name(point.level, point.direction, parts.plan)}"


def _unlike(name: str, first: SweepPlan, second: SweepPlan) -> str:
    """Return why a quantity means another thing in the two runs, or nothing."""
    if name not in OF_ONE and first.order != second.order:
        return f"orders differ: {_order_text(first)} and {_order_text(second)}"
    if name in ON_THE_AXIS and first.coupling != second.coupling:
        return f"axes differ: one pair is {first.coupling}, the other {second.coupling}"
    units = [(plan.level.kind, plan.level.unit) for plan in (first, second)]
    if name in OF_THE_LEVEL and units[0] != units[1]:
        words = [" in ".join(part for part in unit if part) for unit in units]
        return f"levels differ: {words[0]} and {words[1]}"
    return ""


def _order_text(plan: SweepPlan) -> str:
    return "found for each capture" if plan.order is None else f"{plan.order[0]}:{plan.order[1]}"


def _row(name: str, where: str, pair: tuple[Quantity, Quantity], unlike: str) -> Row:
    first, second = pair
    difference = (
        undetermined(first.unit, unlike)
        if unlike
        else _difference(first, second, circular=LIMITED[name].circular)
    )
    return Row(
        quantity=name,
        where=where,
        first=first,
        second=second,
        difference=difference,
        p_value=_p_value(difference),
    )


def _difference(first: Quantity, second: Quantity, *, circular: bool) -> Quantity:
    for which, one in (("first", first), ("second", second)):
        if one.value is None:
            return undetermined(one.unit, f"{which} run: {one_line(one.reason or 'unknown')}")
    assert first.value is not None
    assert second.value is not None
    if first.unit != second.unit:
        return undetermined(first.unit, f"units differ: '{first.unit}' and '{second.unit}'")
    change = second.value - first.value
    if circular:
        change = wrap_angle_rad(change)
    if first.u is None or second.u is None:
        return Quantity(value=change, u=None, unit=first.unit)
    return Quantity(value=change, u=math.hypot(first.u, second.u), unit=first.unit)


def _p_value(difference: Quantity) -> float | None:
    """Return the probability of so large a difference where there is none."""
    if difference.value is None or not difference.u:
        return None
    return math.erfc(abs(difference.value) / difference.u / math.sqrt(2.0))


def _with_outcomes(rows: Sequence[Row]) -> tuple[Row, ...]:
    tested = [row.p_value for row in rows if row.p_value is not None]
    rejected = iter(holm_rejects(tested))
    return tuple(replace(row, outcome=_outcome(row, rejected)) for row in rows)


def _outcome(row: Row, rejected: Iterator[bool]) -> Outcome:
    if row.p_value is None:
        return "cannot be compared"
    return "differs" if next(rejected) else "no difference seen"


def _verdict_changes(first: SweepRun, second: SweepRun) -> list[Change]:
    before = {verdict.limit.name: verdict.verdict for verdict in first.verdicts}
    after = {verdict.limit.name: verdict.verdict for verdict in second.verdicts}
    changes = [
        Change(subject=f"limit '{one_line(name)}'", first=before[name], second=after[name])
        for name in before
        if name in after
    ]
    changes.append(Change(subject="overall verdict", first=first.verdict, second=second.verdict))
    return [one for one in changes if one.first != one.second]


def _state_changes(first: SweepRun, second: SweepRun) -> list[Change]:
    before, after = _states(first), _states(second)
    return [
        Change(subject=f"state, {key}", first=word, second=after[key])
        for key, word in before.items()
        if key in after and after[key] != word
    ]


def _states(run: SweepRun) -> dict[str, str]:
    """Return the state of every setting; of repeats at one setting, the first."""
    parts = RunParts(points=run.points, region=run.region, free_runs=run.free_runs, plan=run.plan)
    found: dict[str, str] = {}
    everything = Limit(name="", quantity="state", unit="")
    for candidate in LIMITED["state"].pick(parts, everything).candidates:
        found.setdefault(_key("state", candidate, parts), candidate.words or "not measured")
    return found
