"""What `lockspan plan` says: before a campaign from expectations, during one from its folder.

All numbers come from ``fit.planning`` and ``fit.plan_next``; here they are put into words and
into JSON (schema lockspan.plan/1.0).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from fit.plan_next import MOST_POINTS, NextGoal, NextPoint, next_points
from fit.planning import (
    WANTED,
    EdgePlan,
    Expected,
    PlanSettings,
    Wanted,
    plan_edges,
    record_length_s,
)
from reports.numbers import plain_number
from reports.options import UsageError
from reports.regions import region_points
from reports.runs import load_run
from rig.errors import LockspanError

SCHEMA = "lockspan.plan/1.0"
CYCLES_NOTE = 0.01  # coupling over frequency above which single records stray from the sweep
# Printed with every plan that refines: what the project's own simulation shows, no more.
SAVING = (
    "Simulated sweeps (bench/plan_region.md): a coarse pass of 11 points and 8 points near the "
    "edges come to the uncertainty of 21 even points; refining saves about a tenth of the "
    "points, never more."
)


@dataclass(frozen=True, slots=True, kw_only=True)
class PlanWords:
    """The words of the command line of a plan before a campaign."""

    want: str
    within: float
    coupling_hz: float | None
    noise_rad2_s: float | None
    frequency_hz: float | None = None
    detuning_hz: float | None = None
    jitter_rad: float = 0.0
    wander_hz: float = 0.0
    level: str = ""
    points: int | None = None
    duration_s: float | None = None
    settle_s: float = 0.0
    span: float = 1.5
    order: tuple[int, int] | None = (1, 1)


def plan_before(words: PlanWords) -> tuple[str, dict[str, Any]]:
    """Return text and JSON value of a plan made from what is expected.

    Parameters
    ----------
    words : PlanWords

    Raises
    ------
    UsageError
        If coupling or noise is missing, or ``want`` is unknown.
    FitError
        If a number is out of range.
    """
    if words.coupling_hz is None or words.noise_rad2_s is None:
        raise UsageError("plan: give --coupling and --noise, or the folder of a run")
    expected = Expected(
        coupling_hz=words.coupling_hz,
        noise_rad2_s=words.noise_rad2_s,
        measurement_noise_rad=words.jitter_rad,
        wander_hz=words.wander_hz,
        order_m=_order(words)[1],
    )
    if words.want == "edge":
        return _edges_text(words, expected)
    if words.want not in WANTED:
        raise UsageError(f"--want: '{words.want}' is not one of edge, {', '.join(WANTED)}")
    return _record_text(words, expected, next(name for name in WANTED if name == words.want))


def _order(words: PlanWords) -> tuple[int, int]:
    """Return (n, m); an order that is to be found cannot be planned for."""
    if words.order is None:
        raise UsageError("--order: a plan needs the order n:m itself, got 'find'")
    return words.order


def _head(words: PlanWords) -> list[str]:
    level = f" at level {words.level}" if words.level else ""
    lines = [
        f"expected{level}: coupling {plain_number(words.coupling_hz)} Hz, "
        f"noise {plain_number(words.noise_rad2_s)} rad2/s"
    ]
    frequency, coupling = words.frequency_hz, words.coupling_hz or 0.0
    if frequency and coupling > CYCLES_NOTE * frequency:
        lines.append(
            f"note: the coupling is {coupling / frequency:.1%} of the frequency; from 1 % on "
            "single records may stray from the edges: take points close to them"
        )
    return lines


def _edges_text(words: PlanWords, expected: Expected) -> tuple[str, dict[str, Any]]:
    """Return the plan of a pass over the region."""
    settings = PlanSettings(
        settle_s=words.settle_s,
        span=words.span,
        points=words.points,
        duration_s=words.duration_s,
    )
    plan = plan_edges(expected, words.within, settings)
    lines = [
        *_head(words),
        f"pass: {len(plan.offsets_hz)} points of {plain_number(plan.duration_s, 3)} s, evenly over "
        f"{plain_number(plan.offsets_hz[0])} to {plain_number(plan.offsets_hz[-1])} Hz about "
        "the centre",
        f"promised standard uncertainty of each edge: {plain_number(plan.edge_u_hz, 3)} Hz",
        f"time at the rig: {plain_number(plan.total_s / 60.0, 3)} min a level and direction",
        *_drive_lines(words, plan),
        *plan.notes,
        "take free-running captures before and after, and run plan again on the folder then",
    ]
    value = {
        "schema": SCHEMA,
        "kind": "edges",
        "drive_hz": _drives(words, plan),
        "offsets_hz": list(plan.offsets_hz),
        "duration_s": plan.duration_s,
        "edge_u_hz": _number(plan.edge_u_hz),
        "total_s": plan.total_s,
        "notes": list(plan.notes),
    }
    return "\n".join(lines), value


def _drives(words: PlanWords, plan: EdgePlan) -> list[float] | None:
    """Return drive frequencies where the centre is known: n f_free / m."""
    if words.frequency_hz is None:
        return None
    n, m = _order(words)
    centre = n * words.frequency_hz / m
    return [centre + offset for offset in plan.offsets_hz]


def _drive_lines(words: PlanWords, plan: EdgePlan) -> list[str]:
    drives = _drives(words, plan)
    if drives is None:
        return []
    return ["drive, Hz: " + ", ".join(plain_number(hz, 7) for hz in drives)]


def _record_text(
    words: PlanWords, expected: Expected, wanted: Wanted
) -> tuple[str, dict[str, Any]]:
    """Return the plan of a single record."""
    detuning = words.detuning_hz
    if detuning is None:
        raise UsageError(f"plan: --want {wanted} needs --detuning of the record")
    length = record_length_s(expected, detuning, wanted, words.within)
    unit = "rad" if wanted == "offset" else "Hz"
    inside = abs(detuning) < expected.coupling_hz
    goal = f"{wanted} to {plain_number(words.within)} {unit} (standard uncertainty)"
    if math.isfinite(length):
        lines = [*_head(words), f"{goal}: record {plain_number(length, 3)} s"]
    else:
        lines = [*_head(words), f"{goal}: no record of this kind determines it"]
    if inside:
        lines.append(
            "the pair is locked there: a steady lock shows detuning and coupling only through "
            "slips; free-running captures, or a detuning outside the edges, need far less time"
        )
    value = {
        "schema": SCHEMA,
        "kind": "record",
        "wanted": wanted,
        "within": words.within,
        "unit": unit,
        "duration_s": _number(length),
    }
    return "\n".join(lines), value


def _number(value: float) -> float | None:
    return value if math.isfinite(value) else None


def plan_during(
    folder: Path, within_hz: float, *, settle_s: float = 0.0, most_points: int | None = None
) -> tuple[str, dict[str, Any]]:
    """Return text and JSON value of the next points of a campaign from its stored run.

    Parameters
    ----------
    folder : Path
        Folder that `lockspan sweep` wrote.
    within_hz : float, Hz, wanted standard uncertainty of every edge
    settle_s : float, s, lost between two points
    most_points : int, optional

    Raises
    ------
    LockspanError
        If the run cannot be read or has no region.
    """
    _, run = load_run(folder)
    if run.region is None:
        raise LockspanError(f"{folder}: no locking region in this run. Measure more points first.")
    order, points = region_points(run.plan, run.points)
    goal = NextGoal(
        edge_u_hz=within_hz,
        settle_s=settle_s,
        most_points=MOST_POINTS if most_points is None else most_points,
        order_m=order.m,
    )
    found = next_points(points, run.region, goal)
    value = {
        "schema": SCHEMA,
        "kind": "next",
        "edge_u_hz": goal.edge_u_hz,
        "points": [_point_json(point) for point in found],
    }
    return "\n".join(_next_lines(found, goal)), value


def _next_lines(found: Sequence[NextPoint], goal: NextGoal) -> list[str]:
    if not found:
        return [f"nothing to add: every edge is known to {plain_number(goal.edge_u_hz)} Hz"]
    total_s = sum(point.duration_s + goal.settle_s for point in found)
    lines = [
        f"{len(found)} points, {plain_number(total_s / 60.0, 3)} min at the rig, for edges to "
        f"{plain_number(goal.edge_u_hz)} Hz (standard uncertainty)"
    ]
    lines.extend(_point_line(point) for point in found)
    if any(point.edge_u_hz is not None for point in found):
        lines.append(SAVING)
    if len(found) == goal.most_points:
        lines.append("the list is cut at the most points allowed; measure these and plan again")
    return lines


def _point_line(point: NextPoint) -> str:
    promised = ""
    if point.edge_u_hz is not None:
        promised = f" -> edges to {plain_number(point.edge_u_hz, 3)} Hz"
    return (
        f"  level {point.level:g} {point.direction}: drive {plain_number(point.drive_hz, 7)} Hz "
        f"for {plain_number(point.duration_s, 3)} s ({point.why}){promised}"
    )


def _point_json(point: NextPoint) -> dict[str, Any]:
    return {
        "drive_hz": point.drive_hz,
        "level": point.level,
        "direction": point.direction,
        "duration_s": point.duration_s,
        "why": point.why,
        "edge_u_hz": point.edge_u_hz,
    }
