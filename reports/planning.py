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
    SPAN,
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
    "simulated campaigns (bench/plan_region.md): 11 even points and 8 near the edges gave edges "
    "at least as good as 21 even points; no larger saving is claimed"
)


@dataclass(frozen=True, slots=True)
class PlanGoal:
    """What is wanted: quantity, its standard uncertainty, points, settling, order n:m."""

    want: str
    within: float
    points: int | None = None
    settle_s: float = 0.0
    order: tuple[int, int] | None = (1, 1)


@dataclass(frozen=True, slots=True, kw_only=True)
class PlanWords:
    """What is expected before a campaign, and the goal."""

    goal: PlanGoal
    coupling_hz: float | None = None
    noise_rad2_s: float | None = None
    frequency_hz: float | None = None
    detuning_hz: float | None = None
    jitter_rad: float = 0.0
    wander_hz: float = 0.0
    level: float | None = None
    duration_s: float | None = None
    span: float = SPAN


# Of any number stated: no rig is slower or faster, and powers of it stay within a float.
SMALLEST, LARGEST = 1e-15, 1e12

# Name on the command line -> (field, what it is).
NAMES = {
    "coupling": ("coupling_hz", "expected coupling in Hz at this level"),
    "noise": ("noise_rad2_s", "expected noise of psi in rad2/s"),
    "frequency": ("frequency_hz", "frequency of the driven oscillator alone in Hz"),
    "detuning": ("detuning_hz", "detuning of a single record in Hz"),
    "jitter": ("jitter_rad", "measurement noise of one phase sample in rad"),
    "wander": ("wander_hz", "spread of the free frequency between points in Hz"),
    "level": ("level", "level that the coupling is for, printed"),
    "duration": ("duration_s", "seconds at each point"),
    "span": ("span", "reach of a pass to each side in couplings"),
}


def plan_from(words: Sequence[str], goal: PlanGoal) -> tuple[str, dict[str, Any]]:
    """Return text and JSON value of a plan: of a stored run, or of NAME=VALUE expectations.

    Parameters
    ----------
    words : sequence of str
        One folder, or NAME=VALUE words (see ``NAMES``).
    goal : PlanGoal

    Raises
    ------
    UsageError
        If a word is neither, or the goal does not fit.
    LockspanError
        If the run cannot be read.
    """
    if (math.isfinite(goal.within) and 0.0 < goal.within < SMALLEST) or goal.within > LARGEST:
        raise UsageError(
            f"--within: must lie between {SMALLEST:g} and {LARGEST:g}, got {goal.within:g}"
        )
    if len(words) == 1 and "=" not in words[0]:
        return plan_during(Path(words[0]), goal)
    return plan_before(PlanWords(goal=goal, **dict(_pair(word) for word in words)))


def _pair(word: str) -> tuple[str, float]:
    """Return (field, number) of one NAME=VALUE word."""
    name, _, text = word.partition("=")
    if name not in NAMES:
        raise UsageError(f"plan: '{word}' is not NAME=VALUE; names are {', '.join(NAMES)}")
    try:
        value = float(text)
    except ValueError:
        raise UsageError(f"plan: {name}={text}: not a number ({NAMES[name][1]})") from None
    if not math.isfinite(value):
        raise UsageError(f"plan: {name}={text}: must be finite ({NAMES[name][1]})")
    if value != 0.0 and not SMALLEST <= abs(value) <= LARGEST:
        raise UsageError(
            f"plan: {name}={text}: must lie between {SMALLEST:g} and {LARGEST:g} in size "
            f"({NAMES[name][1]})"
        )
    return NAMES[name][0], value


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
        raise UsageError("plan: give coupling=HZ and noise=RAD2/S, or the folder of a run")
    expected = Expected(
        coupling_hz=words.coupling_hz,
        noise_rad2_s=words.noise_rad2_s,
        measurement_noise_rad=words.jitter_rad,
        wander_hz=words.wander_hz,
        order_m=_order(words)[1],
    )
    if words.goal.want == "edge":
        return _edges_text(words, expected)
    if words.goal.want not in WANTED:
        raise UsageError(f"--want: '{words.goal.want}' is not one of edge, {', '.join(WANTED)}")
    return _record_text(words, expected, next(name for name in WANTED if name == words.goal.want))


def _order(words: PlanWords) -> tuple[int, int]:
    """Return (n, m); an order that is to be found cannot be planned for."""
    if words.goal.order is None:
        raise UsageError("--order: a plan needs the order n:m itself, got 'find'")
    return words.goal.order


def _head(words: PlanWords) -> list[str]:
    level = "" if words.level is None else f" at level {words.level:g}"
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
        settle_s=words.goal.settle_s,
        span=words.span,
        points=words.goal.points,
        duration_s=words.duration_s,
    )
    plan = plan_edges(expected, words.goal.within, settings)
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
        raise UsageError(f"plan: --want {wanted} needs detuning=HZ of the record")
    length = record_length_s(expected, detuning, wanted, words.goal.within)
    unit = "rad" if wanted == "offset" else "Hz"
    inside = abs(detuning) < expected.coupling_hz
    goal = f"{wanted} to {plain_number(words.goal.within)} {unit} (standard uncertainty)"
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
        "within": words.goal.within,
        "unit": unit,
        "duration_s": _number(length),
    }
    return "\n".join(lines), value


def _number(value: float) -> float | None:
    return value if math.isfinite(value) else None


def plan_during(folder: Path, wanted: PlanGoal) -> tuple[str, dict[str, Any]]:
    """Return text and JSON value of the next points of a campaign from its stored run.

    Parameters
    ----------
    folder : Path
        Folder that `lockspan sweep` wrote.
    wanted : PlanGoal
        Of edges; its points are the most that are listed.

    Raises
    ------
    UsageError
        If anything but edges is wanted.
    LockspanError
        If the run cannot be read or has no region.
    """
    if wanted.want != "edge":
        raise UsageError(f"--want: the next points of a run are for its edges, got {wanted.want}")
    _, run = load_run(folder)
    if run.region is None:
        raise LockspanError(f"{folder}: no locking region in this run. Measure more points first.")
    order, points = region_points(run.plan, run.points)
    goal = NextGoal(
        edge_u_hz=wanted.within,
        settle_s=wanted.settle_s,
        most_points=wanted.points or MOST_POINTS,
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
