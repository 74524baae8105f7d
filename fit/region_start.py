"""Starting points of the joint fit of a region: from single records, and from the states.

Two independent roads, because each fails where the other works: records that give their own
detuning and coupling fix all of it at once, but steady locks give neither; the bracket of
locked points needs no estimate, but shrinks under noise. The slope of psi0 over detuning is
searched on a grid: with evenly spaced drives it is only known up to a whole turn per spacing,
and the smallest slope that fits is taken (a delay shorter than one turn per spacing).
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from fit.bracket import Bracket
from fit.joint import CENTRE, COUPLING, LOG_D, LOG_R, OFFSET, SLOPE, WIDTH
from fit.records import RegionPoint
from rig.angles import rad_s_from_hz
from rig.arrays import FloatArray, distinct, median

SLOPES = 81  # grid of the slope over one turn per spacing, odd so that zero is on it
AS_GOOD = 0.97  # a smaller slope with this part of the best agreement is preferred
LEAST_RECORDS = 5  # records with an estimate of their own that make a start


def starts_of(
    points: Sequence[RegionPoint],
    drive_rad_s: FloatArray,
    runs: Sequence[Bracket],
    order_m: int,
    *,
    thorough: bool = False,
) -> FloatArray:
    """Return starting points (k, 8) for the joint fit of one group.

    Parameters
    ----------
    points : sequence of RegionPoint
    drive_rad_s : array, rad/s, 2 pi m drive_hz of each (see ``fit.joint``)
    runs : sequence of Bracket
        Locked runs of these points on the axis of ``drive_rad_s``, divided by 2 pi order_m.
    order_m : int
    thorough : bool
        Both roads even where single records make a safe start.
    """
    noise = _noise(points)
    own = _from_records(points, drive_rad_s)
    rough = [] if own is None else [own]
    if own is None or thorough:
        rough.append(_from_bracket(drive_rad_s, runs, order_m))
    out = []
    for centre, coupling in rough:
        offset, slope = _offset_and_slope(points, drive_rad_s, centre, coupling)
        for turn in (0.0, math.pi):
            start = np.zeros(WIDTH)
            start[[CENTRE, COUPLING]] = centre, coupling
            start[[OFFSET, SLOPE]] = offset + turn, slope
            start[LOG_D] = noise[0] if noise[0] is not None else math.log(0.01 * coupling)
            start[LOG_R] = noise[1]
            out.append(start)
            if own is not None and len(out) == 1:
                break  # offsets of drifting records leave no doubt by half a turn
    return np.array(out)


def _noise(points: Sequence[RegionPoint]) -> tuple[float | None, float]:
    """Return (ln D or None, ln R) from the single records."""
    strengths = [p.adler.noise_rad2_s.value for p in points if p.adler.noise_rad2_s.value]
    spreads = [p.adler.measurement_noise_rad.value for p in points]
    known = [value for value in spreads if value]
    log_d = math.log(median(strengths)) if strengths else None
    return log_d, 2.0 * math.log(median(known)) if known else math.log(1e-4)


def _from_records(
    points: Sequence[RegionPoint], drive_rad_s: FloatArray
) -> tuple[float, float] | None:
    """Return (centre, K) as medians over records that give both."""
    rows = [
        (rad_s_from_hz(p.adler.detuning_hz.value) + drive, rad_s_from_hz(p.adler.coupling_hz.value))
        for p, drive in zip(points, drive_rad_s, strict=True)
        if p.adler.detuning_hz.value is not None and p.adler.coupling_hz.value
    ]
    if len(rows) < LEAST_RECORDS:
        return None
    centre, coupling = np.median(np.array(rows), axis=0)
    return float(centre), float(coupling)


def _from_bracket(
    drive_rad_s: FloatArray, runs: Sequence[Bracket], order_m: int
) -> tuple[float, float]:
    """Return (centre, K) from the longest locked run, or from the span of the drives."""
    low, high = float(drive_rad_s.min()), float(drive_rad_s.max())
    spacing = (high - low) / max(distinct(drive_rad_s).size - 1, 1)
    if not runs:
        return (low + high) / 2.0, max((high - low) / 4.0, spacing)
    run = max(runs, key=lambda one: one.last_locked_hz - one.first_locked_hz)
    first, last = sorted(
        rad_s_from_hz(order_m * hz) for hz in (run.first_locked_hz, run.last_locked_hz)
    )
    return (first + last) / 2.0, (last - first + spacing) / 2.0


def _offset_and_slope(
    points: Sequence[RegionPoint], drive_rad_s: FloatArray, centre: float, coupling: float
) -> tuple[float, float]:
    """Return psi0 at zero detuning and its slope, from offsets of records and rest angles."""
    rows = [
        (centre - drive, angle)
        for point, drive in zip(points, drive_rad_s, strict=True)
        if (angle := _offset_of(point, (centre - drive) / coupling)) is not None
    ]
    if not rows:
        return 0.0, 0.0
    detuning, angle = np.array(rows).T
    spacing = _spacing(drive_rad_s)
    slopes = np.linspace(-math.pi, math.pi, SLOPES) / spacing if spacing else np.zeros(1)
    vectors = np.mean(np.exp(1j * (angle - slopes[:, None] * detuning)), axis=1)
    good = np.abs(vectors) >= AS_GOOD * np.max(np.abs(vectors))
    best = int(np.argmin(np.where(good, np.abs(slopes), np.inf)))
    return float(np.angle(vectors[best])), float(slopes[best])


def _offset_of(point: RegionPoint, ratio: float) -> float | None:
    """Return psi0 as one record shows it: its own estimate, or the rest angle less asin."""
    if point.adler.offset_rad.value is not None:
        return point.adler.offset_rad.value
    if point.state != "locked" or not point.series.segments:
        return None
    mean = sum(complex(np.sum(np.exp(1j * part))) for part in point.series.segments)
    return float(np.angle(mean)) - math.asin(min(max(ratio, -1.0), 1.0))


def _spacing(drive_rad_s: FloatArray) -> float:
    """Return the usual distance between neighbouring drives, 0 when there is only one."""
    gaps = np.diff(distinct(drive_rad_s))
    gaps = gaps[gaps > 1e-6 * max(float(np.ptp(drive_rad_s)), 1e-300)]
    return median(gaps) if gaps.size else 0.0
