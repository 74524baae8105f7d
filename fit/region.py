"""The locking region of a sweep: edges per level and direction from all points together.

Edges are drive frequencies, centre -+ coupling / m (see ``fit.difference`` for signs). They
come from the joint likelihood (``fit.joint``, ``fit.region_fit``) of all points of one level
and direction: locked, intermittent and drifting points each count. The edge is where
|detuning| = coupling, the noise-free one; the detuning at which slips reach a stated rate is
another quantity. Bracketing (``fit.bracket``) and beat rates alone (``fit.beatlaw``) stand
beside it as checks only.

For a mutual pair there is no drive: the axis is the free detuning n f_driven - m f_reference
in Hz, and the edges are centre -+ coupling on it.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from fit.beatlaw import beat_edges
from fit.bracket import axis_hz, bracket_runs, is_placed, slip_shift
from fit.difference import Order
from fit.hysteresis import SweepMotion, edge_hysteresis
from fit.joint import CENTRE, COUPLING, DISTANCE, LOG_D, LOG_R, OFFSET
from fit.laws import coupling_law, pooled
from fit.records import Direction, LockingRegion, RegionLevel, RegionPoint
from fit.region_edges import AxisEdge, Side, axis_edge, local_edge
from fit.region_fit import (
    MATERIAL,
    SweepFit,
    axis_rad_s,
    fit_sweep,
    offset_slope,
    shared_noise,
)
from fit.region_holes import split_at_holes
from fit.region_model import allow_for_averaging
from fit.region_notes import sweep_notes
from rig.angles import TURN_RAD, hz_from_rad_s, wrap_angle_rad
from rig.arrays import median
from rig.quantities import Quantity, undetermined

STATES = "last locked and first unlocked point: single records contradict the phase equation"
SIDES: tuple[Side, Side] = ("lower", "upper")
MIN_POINTS = 5  # fewer distinct drive frequencies leave the slope of psi0 ambiguous
SURE_COUPLING = 3.0
JOINT = "joint likelihood of all points"
OUTER = "joint likelihood of the points near and outside the edges"
VARYING = ", coupling varying with detuning"
NEAR = "likelihood of the points near the edge: the phase equation does not hold over the sweep"


@dataclass(frozen=True, slots=True, kw_only=True)
class RegionRules:
    """How the region is mapped: ``order``, ``min_points`` of a group, motion of the drive."""

    order: Order
    min_points: int = MIN_POINTS
    motion: SweepMotion | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class _Part:
    """Points of one interval of the region, and why they are not fitted (empty: they are)."""

    points: tuple[RegionPoint, ...]
    usable: tuple[RegionPoint, ...]
    interval: int
    reason: str


def fit_region(points: Sequence[RegionPoint], rules: RegionRules) -> LockingRegion:
    """Return the locking region from all points of a sweep.

    Parameters
    ----------
    points : sequence of RegionPoint, in any order (they are sorted by key)
    rules : RegionRules

    Returns
    -------
    LockingRegion; levels rising, direction up before down
    """
    parts = _parts(sorted(points, key=lambda point: point.key), rules)
    chosen = [part for part in parts if not part.reason]
    sweep = fit_sweep([part.usable for part in chosen], rules.order.m) if chosen else None
    levels: list[RegionLevel] = []
    number = 0
    for part in parts:
        if part.reason or sweep is None:
            levels.append(_unmapped(part, part.reason))
            continue
        levels.append(_mapped(part, sweep, number, rules.order.m))
        number += 1
    hysteresis = tuple(edge_hysteresis(levels, rules.motion))
    levels = [allow_for_averaging(level, rules.order.m) for level in levels]
    law = coupling_law(levels)
    centre, slope = _centre(levels)
    tests = (*(sweep.tests if sweep else ()), *((law.proportional,) if law.proportional else ()))
    return LockingRegion(
        levels=tuple(levels),
        coupling_per_level=law.kappa,
        level_power=law.power,
        centre_hz=centre,
        centre_slope_hz=slope,
        hysteresis=hysteresis,
        adler_holds=sweep.holds if sweep else None,
        tests=tests,
        notes=(*(sweep_notes(sweep) if sweep else ()), *law.notes),
    )


def _groups(points: Sequence[RegionPoint]) -> list[tuple[float, Direction]]:
    """Return (level, direction) pairs, levels rising, up before down."""
    rank = {"up": 0, "down": 1, "none": 2}
    pairs = {(point.level, point.direction) for point in points}
    return sorted(pairs, key=lambda pair: (pair[0], rank[pair[1]]))


def _parts(points: Sequence[RegionPoint], rules: RegionRules) -> list[_Part]:
    """Return the intervals of every level and direction."""
    found: list[_Part] = []
    for level, direction in _groups(points):
        mine = tuple(p for p in points if (p.level, p.direction) == (level, direction))
        usable = [p for p in mine if is_placed(p) and _samples(p) >= 2]
        distinct = len({axis_hz(point) for point in usable})
        if distinct < rules.min_points:
            reason = f"{distinct} usable drive frequencies; at least {rules.min_points} needed"
            found.append(_Part(points=mine, usable=tuple(usable), interval=1, reason=reason))
            continue
        pieces = split_at_holes(usable, rules.order.m, rules.min_points)
        for interval, piece in enumerate(pieces, start=1):
            own = mine if len(pieces) == 1 else tuple(piece)
            found.append(_Part(points=own, usable=tuple(piece), interval=interval, reason=""))
    return found


def _samples(point: RegionPoint) -> int:
    return max((part.size for part in point.series.segments), default=0)


def _mapped(part: _Part, sweep: SweepFit, number: int, order_m: int) -> RegionLevel:
    """Return one interval of the region from its joint fit."""
    fit = sweep.fit
    if all(point.state == "locked" for point in part.usable):
        return _all_locked(part)
    if not fit.converged[number]:
        return _unmapped(part, "the joint likelihood did not settle on these points")
    if not _couples(sweep, number):
        return _unmapped(part, "the coupling is not told from zero: the points show no region")
    edges = {side: _best_edge(part, sweep, number, side, order_m) for side in ("lower", "upper")}
    quantile = sweep.spread.quantile
    lower, upper = (_axis_quantity(edges[side], part, order_m, quantile) for side in SIDES)
    if part.points[0].drive_hz is None:
        lower, upper = upper, lower
    runs = bracket_runs(part.points)
    method = _method(sweep, edges["lower"], edges["upper"])
    lower, upper = _closed(lower, upper, [axis_hz(point) for point in part.usable])
    beats = _beat_quantities(part, sweep, number, order_m)
    first = part.points[0]
    covariance = fit.covariance[number]
    coupling_u = sweep.widen * math.sqrt(max(float(covariance[COUPLING, COUPLING]), 0.0))
    return RegionLevel(
        level=first.level,
        amplitude=first.amplitude,
        direction=first.direction,
        interval=part.interval,
        lower_hz=lower,
        upper_hz=upper,
        width_hz=_width(sweep, number, lower, upper, _scale(part, order_m)),
        coupling_hz=Quantity(
            value=hz_from_rad_s(float(fit.theta[number, COUPLING])),
            u=hz_from_rad_s(coupling_u),
            unit="Hz",
        ),
        offset_rad=Quantity(
            value=wrap_angle_rad(float(fit.theta[number, OFFSET])),
            u=math.sqrt(max(float(covariance[OFFSET, OFFSET]), 0.0)),
            unit="rad",
        ),
        method=method,
        bracket_lower_hz=_bracket_edge(part, "lower"),
        bracket_upper_hz=_bracket_edge(part, "upper"),
        beat_lower_hz=beats[0],
        beat_upper_hz=beats[1],
        notes=_level_notes(part, sweep, number, len(runs)),
        noise_rad2_s=shared_noise(sweep, number),
        offset_slope_rad_hz=offset_slope(sweep, number),
    )


def _all_locked(part: _Part) -> RegionLevel:
    """Return a level whose points are all locked: open on both sides, its coupling unknown.

    Such points show relaxation rates and angles. The first are the most easily wrong of all
    (whatever smooths psi lowers them), the second leave coupling and delay to one another.
    """
    reason = "every point is locked: open on this side; take points beyond the edges"
    drives = [axis_hz(point) for point in part.usable]
    return replace(
        _unmapped(part, reason),
        lower_hz=undetermined("Hz", reason, high=min(drives)),
        upper_hz=undetermined("Hz", reason, low=max(drives)),
    )


def _couples(sweep: SweepFit, number: int) -> bool:
    """Say whether the coupling is sure: its angle is only known from 3 standard errors on."""
    u = math.sqrt(max(float(sweep.fit.covariance[number, COUPLING, COUPLING]), 0.0))
    return float(sweep.fit.theta[number, COUPLING]) > SURE_COUPLING * u


def _best_edge(part: _Part, sweep: SweepFit, number: int, side: Side, order_m: int) -> AxisEdge:
    """Return an edge from all points; from the near ones where the phase equation fails.

    Where single records contradict it altogether (inertia), only their states count. Where
    near points do not give the edge, the joint one is kept with an allowance for the equation:
    rectangular, of the part of the coupling at which it counts as failed.
    """
    joint = axis_edge(sweep.fit, number, side, sweep.widen)
    if sweep.holds is not False:
        return joint
    seen = _bracket_axis(part, sweep, number, side, order_m) if sweep.failed else None
    if seen is not None:
        return seen
    centre = float(sweep.fit.theta[number, CENTRE])
    # Noise makes points near an edge slip, so a bracket errs inward only.
    guesses = [joint.value_rad_s, _bracket_rad_s(part, side, order_m)]
    known = [guess for guess in guesses if guess is not None]
    farthest = max(known, key=lambda guess: abs(guess - centre))
    near = local_edge(sweep.data, sweep.fit, number, side, farthest)
    model = MATERIAL * abs(joint.value_rad_s - centre) / math.sqrt(3.0)
    wide = AxisEdge(value_rad_s=joint.value_rad_s, u_rad_s=math.hypot(joint.u_rad_s, model))
    return near if near is not None and near.u_rad_s < 2.0 * wide.u_rad_s else wide


def _bracket_axis(
    part: _Part, sweep: SweepFit, number: int, side: Side, order_m: int
) -> AxisEdge | None:
    """Return an edge from the states, with what slips may have moved it; None when open."""
    place = _bracket_rad_s(part, side, order_m)
    if place is None:
        return None
    quantity = _bracket_edge(part, _named(part, side))
    cell = (quantity.u or 0.0) / abs(_scale(part, order_m))
    coupling, noise = sweep.fit.theta[number, COUPLING], math.exp(sweep.fit.theta[number, LOG_D])
    length_s = median([point.series.duration_s for point in part.usable])
    slips = coupling * slip_shift(noise / coupling, coupling * length_s) / math.sqrt(3.0)
    return AxisEdge(value_rad_s=place, u_rad_s=math.hypot(cell, slips), states=True)


def _named(part: _Part, side: Side) -> Side:
    """Return the side as it is called on the axis: the other one for a mutual pair."""
    return SIDES[1 - SIDES.index(side)] if part.points[0].drive_hz is None else side


def _bracket_rad_s(part: _Part, side: Side, order_m: int) -> float | None:
    """Return the middle of the bracket on the axis of the fit, None when it is open."""
    middle = _bracket_edge(part, _named(part, side)).value
    return None if middle is None else middle / _scale(part, order_m)


def _method(sweep: SweepFit, lower: AxisEdge, upper: AxisEdge) -> str:
    base = OUTER if sweep.outer else JOINT
    if sweep.released:
        base += VARYING
    if sweep.holds is not False:
        return base
    if lower.states or upper.states:
        return STATES
    if lower.local and upper.local:
        return NEAR
    one = "; one edge from the points near it" if lower.local or upper.local else ""
    return f"{base}, with 5 % for the phase equation, which does not hold{one}"


def _scale(part: _Part, order_m: int) -> float:
    """Return hertz on the axis per rad/s of detuning; negative for a free detuning."""
    if part.points[0].drive_hz is None:
        return -1.0 / TURN_RAD
    return 1.0 / (TURN_RAD * order_m)


def _axis_quantity(edge: AxisEdge, part: _Part, order_m: int, quantile: float) -> Quantity:
    """Return an edge in Hz with its 95 % interval."""
    scale = _scale(part, order_m)
    value, u = edge.value_rad_s * scale, edge.u_rad_s * abs(scale)
    return Quantity(
        value=value,
        u=u,
        unit="Hz",
        low=value - quantile * u,
        high=value + quantile * u,
        level=0.95,
    )


def _closed(lower: Quantity, upper: Quantity, drives: Sequence[float]) -> tuple[Quantity, Quantity]:
    """Return the edges, each refused where no point was taken beyond it."""
    low, high = min(drives, default=math.nan), max(drives, default=math.nan)
    return _within(lower, low, high), _within(upper, low, high)


def _within(edge: Quantity, low: float, high: float) -> Quantity:
    """Return an edge that lies between the outermost points, else what bounds it."""
    if edge.value is None or low <= edge.value <= high:
        return edge
    if edge.value < low:
        reason = f"open on this side: the edge lies beyond the lowest point, {low:.6g} Hz"
        return undetermined("Hz", reason, high=max(low, edge.high or low))
    reason = f"open on this side: the edge lies beyond the highest point, {high:.6g} Hz"
    return undetermined("Hz", reason, low=min(high, edge.low or high))


def _width(
    sweep: SweepFit, number: int, lower: Quantity, upper: Quantity, scale: float
) -> Quantity:
    """Return upper minus lower with the correlation of the two, unless an edge is open."""
    for side, edge in (("lower", lower), ("upper", upper)):
        if edge.value is None:
            return undetermined("Hz", f"{side} edge: {edge.reason}")
    width = (upper.value or 0.0) - (lower.value or 0.0)
    if sweep.holds is False or sweep.released:
        return Quantity(value=width, u=math.hypot(lower.u or 0.0, upper.u or 0.0), unit="Hz")
    variance = float(sweep.fit.covariance[number, COUPLING, COUPLING])
    u = 2.0 * abs(scale) * sweep.widen * math.sqrt(max(variance, 0.0))
    return Quantity(value=width, u=u, unit="Hz")


def _bracket_edge(part: _Part, side: Side) -> Quantity:
    runs = bracket_runs(part.points)
    if not runs:
        locked = any(point.state == "locked" for point in part.points)
        reason = "locked points have no place on the axis" if locked else "no locked point"
        return undetermined("Hz", reason)
    return runs[0].lower_hz if side == "lower" else runs[-1].upper_hz


def _beat_quantities(
    part: _Part, sweep: SweepFit, number: int, order_m: int
) -> tuple[Quantity, Quantity]:
    """Return the edges that the mean beat rates alone give."""
    theta = sweep.fit.theta[number]
    drive = np.array([axis_rad_s(point, order_m) for point in part.usable])
    start = (float(theta[CENTRE]), float(theta[COUPLING]))
    found = beat_edges(part.usable, drive, start, math.exp(float(theta[LOG_D])))
    if found is None:
        missing = undetermined("Hz", "too few unlocked points with a mean rate")
        return missing, missing
    scale = _scale(part, order_m)
    lower, upper = (
        Quantity(value=float(value) * scale, u=float(u) * abs(scale), unit="Hz")
        for value, u in zip(*found, strict=True)
    )
    return (lower, upper) if scale > 0 else (upper, lower)


def _level_notes(part: _Part, sweep: SweepFit, number: int, runs: int) -> tuple[str, ...]:
    """Return what a reader must know beside the edges of one level."""
    theta = sweep.fit.theta[number]
    noise, spread = math.exp(float(theta[LOG_D])), math.exp(0.5 * float(theta[LOG_R]))
    notes = [f"shared noise {noise:.3g} rad2/s, measurement noise {spread:.3g} rad"]
    if sweep.outer:
        notes.append("points well inside the region are left out of the edges: see the tests")
    if sweep.released:
        notes.append(
            "the coupling varies with detuning: "
            f"{100.0 * float(theta[DISTANCE]):+.2g} % of the distance beyond the edge"
        )
    if runs > 1:
        notes.append(
            f"locked points form {runs} runs; the likelihood of all points does not call for "
            "a hole: see the states of the points"
        )
    if not any(point.state == "locked" for point in part.points):
        notes.append("no point is locked throughout; the edges are where |detuning| = coupling")
    if part.points[0].drive_hz is None:
        notes.append("mutual pair: the axis is the free detuning n f_driven - m f_reference")
    left = len(part.points) - len(part.usable)
    if left:
        notes.append(f"{left} points without samples or place on the axis are left out")
    return tuple(notes)


def _unmapped(part: _Part, reason: str) -> RegionLevel:
    """Return a level that the points do not determine, with the bracket beside it."""
    point = part.points[0]
    missing = undetermined("Hz", reason)
    return RegionLevel(
        level=point.level,
        amplitude=point.amplitude,
        direction=point.direction,
        interval=part.interval,
        lower_hz=missing,
        upper_hz=missing,
        width_hz=missing,
        coupling_hz=missing,
        offset_rad=undetermined("rad", reason),
        method="not mapped",
        bracket_lower_hz=_bracket_edge(part, "lower"),
        bracket_upper_hz=_bracket_edge(part, "upper"),
    )


def _centre(levels: Sequence[RegionLevel]) -> tuple[Quantity, Quantity]:
    """Return the pooled centre and its slope with the amplitude squared, both in Hz."""
    rows = []
    for level in levels:
        low, high = level.lower_hz, level.upper_hz
        if low.value is None or high.value is None or level.interval > 1:
            continue
        # The centre's own variance is not kept apart; edges of one fit are nearly
        # independent outside the region, so a half of their quadratic sum serves.
        rows.append((level.amplitude, (low.value + high.value) / 2.0, _half(low, high)))
    return pooled(rows)


def _half(low: Quantity, high: Quantity) -> float:
    return float(np.hypot(low.u or 0.0, high.u or 0.0)) / 2.0
