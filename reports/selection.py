"""Which points, levels or captures a limit applies to, and what each of them is called."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

from fit.difference import Order
from fit.records import FreeRun, LockingRegion, RegionLevel
from reports.numbers import plain_number, with_unit
from reports.records import Limit, PointResult
from rig.quantities import Quantity
from rig.sweepfile import SweepPlan

LEVEL_TOLERANCE = 1e-9  # a level written twice in one file reads back equal; allow for rounding


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RunParts:
    """What limits are judged on: the measured points, the region, and the plan."""

    points: tuple[PointResult, ...]
    region: LockingRegion | None
    free_runs: tuple[FreeRun, ...]
    plan: SweepPlan

    @property
    def order(self) -> Order:
        """Locking order of the sweep: as planned, else as found in the first measured point."""
        if self.plan.order is not None:
            return Order(n=self.plan.order[0], m=self.plan.order[1])
        measured = (point.measurement for point in self.points)
        return next((one.order for one in measured if one is not None), Order())


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Candidate:
    """One value that a limit applies to: where it was found, and the value.

    ``words`` is its value in words where the limit wants a word; ``point`` the row it comes
    from, None for values of a whole level or run.
    """

    where: str
    value: Quantity
    words: str | None = None
    point: PointResult | None = None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Picked:
    """The values a limit applies to, and what was left out of them."""

    candidates: tuple[Candidate, ...] = ()
    note: str = ""


def same_level(one: float, other: float) -> bool:
    """Return whether two levels are the same but for rounding."""
    return math.isclose(one, other, rel_tol=LEVEL_TOLERANCE, abs_tol=0.0)


def chosen_points(parts: RunParts, limit: Limit) -> list[PointResult]:
    """Return the rows of the sweep that a limit applies to, in their order."""
    return [point for point in parts.points if _is_chosen(point, limit)]


def _is_chosen(point: PointResult, limit: Limit) -> bool:
    if limit.level is not None and not same_level(point.level, limit.level):
        return False
    if limit.direction is not None and point.direction != limit.direction:
        return False
    if limit.file is not None and point.file != limit.file:
        return False
    if limit.drive_from_hz is None and limit.drive_to_hz is None:
        return True
    drive_hz = drive_of(point)
    if drive_hz is None:
        return False
    low = -math.inf if limit.drive_from_hz is None else limit.drive_from_hz
    high = math.inf if limit.drive_to_hz is None else limit.drive_to_hz
    return low <= drive_hz <= high


def drive_of(point: PointResult) -> float | None:
    """Return the drive frequency of a row: as stated, else as measured."""
    if point.drive_hz is not None or point.measurement is None:
        return point.drive_hz
    return point.measurement.reference.frequency_hz.value


def chosen_levels(parts: RunParts, limit: Limit) -> Iterator[list[RegionLevel]]:
    """Yield the intervals of each level and direction that a limit applies to, lowest first."""
    found: dict[tuple[float, str], list[RegionLevel]] = {}
    for entry in parts.region.levels if parts.region is not None else ():
        if limit.level is not None and not same_level(entry.level, limit.level):
            continue
        if limit.direction is not None and entry.direction != limit.direction:
            continue
        found.setdefault((entry.level, entry.direction), []).append(entry)
    for entries in found.values():
        yield sorted(entries, key=lambda entry: entry.interval)


def level_name(level: float, direction: str, plan: SweepPlan) -> str:
    """Return what a level of a sweep is called: "level 1 A, up"."""
    name = f"level {with_unit(plain_number(level), plan.level.unit)}"
    return name if direction == "none" else f"{name}, {direction}"


def point_name(point: PointResult, plan: SweepPlan) -> str:
    """Return what a row is called: its file with drive, level and direction."""
    drive_hz = drive_of(point)
    drive = "" if drive_hz is None else f"drive {plain_number(drive_hz, 8)} Hz, "
    return f"{point.names} ({drive}{level_name(point.level, point.direction, plan)})"
