"""The locking region of a sweep: edges per level and direction from all points together.

Edges are drive frequencies, centre -+ coupling / m (see ``fit.difference`` for signs). They
come from the joint likelihood (``fit.joint``) of all points of one level and direction:
locked, intermittent and drifting points each count. Bracketing (``fit.bracket``) stands
beside it as a plausibility check only.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np

from fit.bracket import Bracket, bracket_runs
from fit.difference import Order
from fit.joint import COUPLING, LOG_D, LOG_R, OFFSET, SharedFit, fit_shared, group_points
from fit.laws import coupling_law, pooled
from fit.records import Direction, Hysteresis, LockingRegion, RegionLevel, RegionPoint
from rig.angles import TURN_RAD, hz_from_rad_s, rad_s_from_hz, wrap_angle_rad
from rig.arrays import FloatArray
from rig.quantities import Quantity, undetermined

MIN_POINTS = 5  # fewer distinct drive frequencies leave the slope of psi0 ambiguous
NORMAL_95 = 1.959963984540054  # two-sided 95 % quantile of the normal distribution
JOINT = "joint likelihood of all points"


@dataclass(frozen=True, slots=True, kw_only=True)
class RegionRules:
    """How the region is mapped: ``order`` of the locking, and ``min_points`` per group."""

    order: Order
    min_points: int = MIN_POINTS


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
    ordered = sorted(points, key=lambda point: point.key)
    levels: list[RegionLevel] = []
    for level, direction in _groups(ordered):
        chosen = [p for p in ordered if (p.level, p.direction) == (level, direction)]
        levels.extend(_map_level(chosen, rules))
    per_level, power = coupling_law(levels)
    centre, slope = _centre(levels)
    return LockingRegion(
        levels=tuple(levels),
        coupling_per_level=per_level,
        level_power=power,
        centre_hz=centre,
        centre_slope_hz=slope,
        hysteresis=tuple(_hysteresis(levels)),
        adler_holds=None,
    )


def _groups(points: Sequence[RegionPoint]) -> list[tuple[float, Direction]]:
    """Return (level, direction) pairs, levels rising, up before down."""
    rank = {"up": 0, "down": 1, "none": 2}
    pairs = {(point.level, point.direction) for point in points}
    return sorted(pairs, key=lambda pair: (pair[0], rank[pair[1]]))


def _map_level(points: Sequence[RegionPoint], rules: RegionRules) -> list[RegionLevel]:
    """Return the intervals of one level and direction."""
    runs = bracket_runs(points)
    usable = [point for point in points if point.series.segments]
    distinct = {point.drive_hz for point in usable}
    if len(distinct) < rules.min_points:
        reason = f"{len(distinct)} usable drive frequencies; at least {rules.min_points} needed"
        return [_unmapped(points[0], runs, reason)]
    group = group_points(usable, rules.order.m)
    fit = fit_shared(group, _starts(usable, runs, rules.order.m))
    if fit is None or not fit.converged:
        reason = "the joint likelihood did not settle on these points"
        return [_unmapped(points[0], runs, reason)]
    return [_mapped(usable, fit, runs, rules.order.m)]


def _starts(
    points: Sequence[RegionPoint], runs: Sequence[Bracket], order_m: int
) -> list[FloatArray]:
    """Return starting points: centre and K from single records or the bracket, slopes tried."""
    centre, coupling = _rough_region(points, runs, order_m)
    offsets = [p.adler.offset_rad.value for p in points if p.adler.offset_rad.value is not None]
    offset = float(np.angle(np.mean(np.exp(1j * np.array(offsets))))) if offsets else 0.0
    noise = [p.adler.noise_rad2_s.value for p in points if p.adler.noise_rad2_s.value]
    log_d = math.log(float(np.median(noise))) if noise else math.log(0.01 * coupling)
    measured = [p.adler.measurement_noise_rad.value for p in points]
    known = [value for value in measured if value]
    log_r = 2.0 * math.log(float(np.median(known))) if known else math.log(1e-4)
    return [
        np.array([centre, coupling, offset + turn, slope / coupling, log_d, log_r])
        for turn in (0.0, math.pi)
        for slope in (0.0,)
    ]


def _rough_region(
    points: Sequence[RegionPoint], runs: Sequence[Bracket], order_m: int
) -> tuple[float, float]:
    """Return (2 pi m centre, K) in rad/s from single records, else from the bracket."""
    centres, couplings = [], []
    for point in points:
        detuning, coupling = point.adler.detuning_hz.value, point.adler.coupling_hz.value
        if detuning is None or coupling is None or point.drive_hz is None:
            continue
        centres.append(rad_s_from_hz(detuning + order_m * point.drive_hz))
        couplings.append(rad_s_from_hz(coupling))
    if len(centres) >= 2:
        return float(np.median(centres)), float(np.median(couplings))
    drives = np.array([point.drive_hz or 0.0 for point in points]) * order_m
    low, high = float(drives.min()), float(drives.max())
    if runs:
        low, high = order_m * runs[0].first_locked_hz, order_m * runs[-1].last_locked_hz
    spacing = float(np.ptp(drives)) / max(drives.size - 1, 1)
    half = max((high - low) / 2.0, spacing)
    return rad_s_from_hz((low + high) / 2.0), rad_s_from_hz(half)


def _mapped(
    points: Sequence[RegionPoint], fit: SharedFit, runs: Sequence[Bracket], order_m: int
) -> RegionLevel:
    """Return one level of the region from its joint fit."""
    scale = 1.0 / (TURN_RAD * order_m)
    lower = _edge(fit, -1.0, scale)
    upper = _edge(fit, +1.0, scale)
    coupling = Quantity(
        value=hz_from_rad_s(float(fit.theta[COUPLING])),
        u=hz_from_rad_s(math.sqrt(max(float(fit.covariance[COUPLING, COUPLING]), 0.0))),
        unit="Hz",
    )
    first = points[0]
    drives = [point.drive_hz for point in points if point.drive_hz is not None]
    lower, upper = _closed(lower, upper, drives)
    return RegionLevel(
        level=first.level,
        amplitude=first.amplitude,
        direction=first.direction,
        interval=1,
        lower_hz=lower,
        upper_hz=upper,
        width_hz=_width(coupling, order_m, lower, upper),
        coupling_hz=coupling,
        offset_rad=Quantity(
            value=wrap_angle_rad(float(fit.theta[OFFSET])),
            u=math.sqrt(max(float(fit.covariance[OFFSET, OFFSET]), 0.0)),
            unit="rad",
        ),
        method=JOINT,
        bracket_lower_hz=_bracket_edge(runs, "lower"),
        bracket_upper_hz=_bracket_edge(runs, "upper"),
        notes=_level_notes(fit, runs),
    )


def _edge(fit: SharedFit, side: float, scale: float) -> Quantity:
    """Return the drive frequency where |detuning| = K on one side, with its interval."""
    weights = np.zeros(fit.theta.size)
    weights[0], weights[COUPLING] = 1.0, side
    value = float(weights @ fit.theta) * scale
    u = math.sqrt(max(float(weights @ fit.covariance @ weights), 0.0)) * scale
    return Quantity(
        value=value,
        u=u,
        unit="Hz",
        low=value - NORMAL_95 * u,
        high=value + NORMAL_95 * u,
        level=0.95,
    )


def _closed(lower: Quantity, upper: Quantity, drives: Sequence[float]) -> tuple[Quantity, Quantity]:
    """Return the edges, each refused where no point was taken beyond it."""
    low, high = min(drives, default=math.nan), max(drives, default=math.nan)
    if lower.value is not None and lower.value < low:
        lower = undetermined(
            "Hz", f"open on this side: the lowest drive was {low:.6g} Hz", high=lower.high
        )
    if upper.value is not None and upper.value > high:
        upper = undetermined(
            "Hz", f"open on this side: the highest drive was {high:.6g} Hz", low=upper.low
        )
    return lower, upper


def _width(coupling: Quantity, order_m: int, lower: Quantity, upper: Quantity) -> Quantity:
    """Return 2 coupling / m, unless an edge is open."""
    for side, edge in (("lower", lower), ("upper", upper)):
        if edge.value is None:
            return undetermined("Hz", f"{side} edge: {edge.reason}")
    factor = 2.0 / order_m
    return Quantity(
        value=factor * (coupling.value or 0.0), u=factor * (coupling.u or 0.0), unit="Hz"
    )


def _bracket_edge(runs: Sequence[Bracket], side: Literal["lower", "upper"]) -> Quantity:
    if not runs:
        return undetermined("Hz", "no locked point")
    return runs[0].lower_hz if side == "lower" else runs[-1].upper_hz


def _level_notes(fit: SharedFit, runs: Sequence[Bracket]) -> tuple[str, ...]:
    """Return what a reader must know beside the edges of one level."""
    noise = math.exp(float(fit.theta[LOG_D]))
    spread = math.exp(0.5 * float(fit.theta[LOG_R]))
    notes = [f"shared noise {noise:.3g} rad2/s, measurement noise {spread:.3g} rad"]
    if len(runs) > 1:
        notes.append(f"locked points form {len(runs)} runs: see the states of the points")
    if not runs:
        notes.append("no point is locked throughout; the edges are where |detuning| = coupling")
    return tuple(notes)


def _unmapped(point: RegionPoint, runs: Sequence[Bracket], reason: str) -> RegionLevel:
    """Return a level that the points do not determine, with the bracket beside it."""
    missing = undetermined("Hz", reason)
    return RegionLevel(
        level=point.level,
        amplitude=point.amplitude,
        direction=point.direction,
        interval=1,
        lower_hz=missing,
        upper_hz=missing,
        width_hz=missing,
        coupling_hz=missing,
        offset_rad=undetermined("rad", reason),
        method="not mapped",
        bracket_lower_hz=_bracket_edge(runs, "lower"),
        bracket_upper_hz=_bracket_edge(runs, "upper"),
    )


def _centre(levels: Sequence[RegionLevel]) -> tuple[Quantity, Quantity]:
    """Return the pooled centre and its slope with the amplitude squared, both in Hz."""
    rows = []
    for level in levels:
        low, high = level.lower_hz, level.upper_hz
        if low.value is None or high.value is None:
            continue
        # The centre's own variance is not kept apart; edges of one fit are nearly
        # independent outside the region, so a half of their quadratic sum serves.
        rows.append((level.amplitude, (low.value + high.value) / 2.0, _half(low, high)))
    return pooled(rows)


def _half(low: Quantity, high: Quantity) -> float:
    return math.hypot(low.u or 0.0, high.u or 0.0) / 2.0


def _hysteresis(levels: Sequence[RegionLevel]) -> list[Hysteresis]:
    """Return up minus down of each edge at each level measured both ways."""
    found: list[Hysteresis] = []
    for up in levels:
        for down in levels:
            if (up.level, up.interval) != (down.level, down.interval):
                continue
            if (up.direction, down.direction) != ("up", "down"):
                continue
            found.append(_difference(up.level, "lower", up.lower_hz, down.lower_hz))
            found.append(_difference(up.level, "upper", up.upper_hz, down.upper_hz))
    return found


def _difference(
    level: float, edge: Literal["lower", "upper"], up: Quantity, down: Quantity
) -> Hysteresis:
    """Return one edge's difference with its two-sided normal test against zero."""
    if up.value is None or down.value is None:
        missing = undetermined("Hz", f"the {edge} edge is not known in both directions")
        return Hysteresis(level=level, edge=edge, value_hz=missing)
    u = math.hypot(up.u or 0.0, down.u or 0.0)
    value = up.value - down.value
    p = math.erfc(abs(value) / u / math.sqrt(2.0)) if u > 0 else None
    return Hysteresis(
        level=level, edge=edge, value_hz=Quantity(value=value, u=u, unit="Hz"), p_value=p
    )
