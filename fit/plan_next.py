"""The next points of a running campaign: where, at which level and direction, how long.

First the coarse pass is completed: a level with fewer than 11 drive frequencies, or with an
edge that is open, gets points that span the region. Only then come refinement points, at 0.9
to 1.3 couplings from the centre on either side of a level whose edges are not yet good
enough; of these the one is taken next that shrinks the variance of the edges most per time
at the rig. Points far from the edges are never proposed: they tell less, and placing by
variance alone runs to the ends of the range.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from fit.bracket import axis_hz
from fit.planning import (
    COARSE_POINTS,
    SPAN,
    Expected,
    edge_u_hz,
    point_information,
    spread_points,
)
from fit.records import Direction, LockingRegion, RegionLevel, RegionPoint
from rig.angles import rad_s_from_hz
from rig.arrays import FloatArray, median
from rig.errors import FitError

NEAR, FAR, PLACES = 0.9, 1.3, 9
LENGTHS = (1.0, 2.0, 4.0)  # of a refinement point, in lengths of the points so far
MOST_POINTS = 40


@dataclass(frozen=True, slots=True, kw_only=True)
class NextGoal:
    """``edge_u_hz`` wanted for every edge, ``settle_s`` between points, ``most_points``."""

    edge_u_hz: float
    settle_s: float = 0.0
    most_points: int = MOST_POINTS
    order_m: int = 1

    def __post_init__(self) -> None:
        if not self.edge_u_hz > 0:
            raise FitError(f"plan: wanted uncertainty must be above 0 Hz, got {self.edge_u_hz:g}")
        if not self.settle_s >= 0:
            raise FitError(f"plan: settling must be at least 0 s, got {self.settle_s:g}")
        if self.most_points < 1:
            raise FitError(f"plan: at least 1 point must be allowed, got {self.most_points}")


@dataclass(frozen=True, slots=True, kw_only=True)
class NextPoint:
    """One proposed point; ``edge_u_hz`` is what its level promises once it is measured."""

    drive_hz: float
    level: float
    direction: Direction
    duration_s: float
    why: str
    edge_u_hz: float | None = None


@dataclass(slots=True, kw_only=True, eq=False)
class _Level:
    """A mapped level with the information of its points, scaled to its stated errors."""

    entry: RegionLevel
    expected: Expected
    centre_hz: float
    usual_s: float
    information: FloatArray
    factor: float
    offered: FloatArray  # information per second at each of the offsets, (k, 4, 4)


def next_points(
    points: Sequence[RegionPoint], region: LockingRegion, goal: NextGoal
) -> list[NextPoint]:
    """Return the next points of a campaign, most useful first; empty when the goal is met.

    Parameters
    ----------
    points : sequence of RegionPoint measured so far
    region : LockingRegion fitted to them
    goal : NextGoal

    Returns
    -------
    list of NextPoint

    Raises
    ------
    FitError
        If the points have no drive frequency: a mutual pair is not steered by one.
    """
    if any(point.drive_hz is None for point in points):
        raise FitError("plan: the points of a mutual pair have no drive frequency to choose")
    found: list[NextPoint] = []
    levels: list[_Level] = []
    for entry in region.levels:
        mine = [p for p in points if (p.level, p.direction) == (entry.level, entry.direction)]
        coarse = _coarse(entry, mine)
        found.extend(coarse)
        if not coarse:
            level = _level(entry, mine, goal)
            if level is not None:
                levels.append(level)
    found = found[: goal.most_points]
    while len(found) < goal.most_points:
        best = _best(levels, goal)
        if best is None:
            break
        found.append(best)
    return found


def _coarse(entry: RegionLevel, points: Sequence[RegionPoint]) -> list[NextPoint]:
    """Return what the coarse pass of one level still lacks."""
    if entry.interval > 1:
        return []
    places = sorted({axis_hz(point) for point in points})
    usual_s = _usual_s(points)
    low, high = places[0], places[-1]
    span = max(high - low, 1e-9 * abs(high))
    lower_open, upper_open = entry.lower_hz.value is None, entry.upper_hz.value is None
    if lower_open and upper_open and not any(p.state == "locked" for p in points):
        lower_open = upper_open = False  # nothing locked: look between, not beyond
    wanted_low = low - 0.5 * span if lower_open and _locked_at(points, low) else low
    wanted_high = high + 0.5 * span if upper_open and _locked_at(points, high) else high
    missing = COARSE_POINTS - len(places)
    if (wanted_low, wanted_high) != (low, high):
        missing = max(missing, 2)
    if entry.lower_hz.value is None and entry.upper_hz.value is None:
        missing = max(missing, 3)
    if missing <= 0:
        return []
    return [
        NextPoint(
            drive_hz=hz,
            level=entry.level,
            direction=entry.direction,
            duration_s=usual_s,
            why="coarse pass: the region must be spanned before it is refined",
        )
        for hz in spread_points(wanted_low, wanted_high, places, missing)
    ]


def _locked_at(points: Sequence[RegionPoint], place_hz: float) -> bool:
    return any(point.state == "locked" for point in points if axis_hz(point) == place_hz)


def _usual_s(points: Sequence[RegionPoint]) -> float:
    lengths = [point.series.duration_s for point in points if point.series.duration_s > 0]
    return median(lengths) if lengths else 1.0


def _usual_noise(points: Sequence[RegionPoint]) -> float | None:
    known = [p.adler.noise_rad2_s.value for p in points if p.adler.noise_rad2_s.value]
    return median(known) if known else None


def _level(entry: RegionLevel, points: Sequence[RegionPoint], goal: NextGoal) -> _Level | None:
    """Return a mapped level with the information of its points."""
    lower, upper = entry.lower_hz, entry.upper_hz
    noise = entry.noise_rad2_s.value if entry.noise_rad2_s else _usual_noise(points)
    coupling = entry.coupling_hz.value
    if lower.value is None or upper.value is None or not noise or not coupling:
        return None
    expected = Expected(coupling_hz=coupling, noise_rad2_s=noise, order_m=goal.order_m)
    centre = (lower.value + upper.value) / 2.0
    placed = [point for point in points if point.series.duration_s > 0]
    detuning = np.array([rad_s_from_hz(goal.order_m * (centre - axis_hz(p))) for p in placed])
    lengths = np.array([point.series.duration_s for point in placed])
    information = point_information(expected, detuning, lengths).sum(axis=0)
    promised = max(edge_u_hz(information, goal.order_m))
    stated = max(lower.u or 0.0, upper.u or 0.0)
    # What the fit states, wander and all, is believed over what the formula promises.
    factor = stated / promised if math.isfinite(promised) and stated > 0 else 1.0
    return _Level(
        entry=entry,
        expected=expected,
        centre_hz=centre,
        usual_s=_usual_s(placed),
        information=information,
        factor=factor,
        offered=point_information(expected, -np.array(_offsets()) * expected.coupling_rad_s, 1.0),
    )


def _best(levels: Sequence[_Level], goal: NextGoal) -> NextPoint | None:
    """Return the refinement point that gains most per second, and count it as measured."""
    choice: tuple[float, _Level, float, float, FloatArray] | None = None
    for level in levels:
        now = _edges(level, level.information, goal)
        if max(now) <= goal.edge_u_hz:
            continue
        for offset, offered in zip(_offsets(), level.offered, strict=True):
            for length in LENGTHS:
                duration = length * level.usual_s
                added = offered * duration
                then = _edges(level, level.information + added, goal)
                gain = now[0] ** 2 + now[1] ** 2 - then[0] ** 2 - then[1] ** 2
                rate = gain / (duration + goal.settle_s)
                if choice is None or rate > choice[0] * (1.0 + 1e-9):
                    choice = (rate, level, offset, duration, added)
    if choice is None:
        return None
    _, level, offset, duration, added = choice
    level.information = level.information + added
    return NextPoint(
        drive_hz=level.centre_hz + offset * level.expected.coupling_hz / goal.order_m,
        level=level.entry.level,
        direction=level.entry.direction,
        duration_s=duration,
        why=f"refinement at {offset:+.2f} couplings from the centre",
        edge_u_hz=max(_edges(level, level.information, goal)),
    )


def _offsets() -> list[float]:
    one_side = np.linspace(NEAR, FAR, PLACES)
    return [float(sign * place) for place in one_side for sign in (-1.0, 1.0)]


def _edges(level: _Level, information: FloatArray, goal: NextGoal) -> tuple[float, float]:
    lower, upper = edge_u_hz(information, goal.order_m)
    return lower * level.factor, upper * level.factor


def reach_hz(entry: RegionLevel) -> tuple[float, float] | None:
    """Return the drive frequencies between which refinement points lie, None when not mapped.

    Parameters
    ----------
    entry : RegionLevel
    """
    if entry.lower_hz.value is None or entry.upper_hz.value is None:
        return None
    centre = (entry.lower_hz.value + entry.upper_hz.value) / 2.0
    half = min(FAR, SPAN) * (entry.upper_hz.value - entry.lower_hz.value) / 2.0
    return centre - half, centre + half
