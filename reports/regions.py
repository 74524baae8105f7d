"""From the rows of a sweep to the points of its locking region, and to the region."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Sequence

from fit.bracket import own_place_hz
from fit.difference import Order
from fit.laws import amplitude_of_level
from fit.records import Direction, LockingRegion, Measurement, RegionPoint
from fit.region import RegionRules, fit_region
from reports.records import PointResult
from rig.sweepfile import SweepPlan

# A generator's display and the recorder's clock seldom agree better than this.
CLOCK_SPREAD = 2e-4
_DIRECTIONS: dict[str, Direction] = {"up": "up", "down": "down", "none": "none"}


def map_region(plan: SweepPlan, rows: Sequence[PointResult]) -> LockingRegion | None:
    """Return the locking region of a sweep, or None when no row can take part in it."""
    if not any(row.measurement is not None for row in rows):
        return None
    order, points = region_points(plan, rows)
    return fit_region(points, RegionRules(order=order)) if points else None


def region_points(plan: SweepPlan, rows: Sequence[PointResult]) -> tuple[Order, list[RegionPoint]]:
    """Return the order most rows were measured at, and the points measured at it.

    Parameters
    ----------
    plan : SweepPlan
    rows : sequence of PointResult, at least one with a measurement
    """
    measured = [(row, row.measurement) for row in rows if row.measurement is not None]
    order = _common_order([measurement for _, measurement in measured])
    points = [
        _region_point(plan, index, row, measurement)
        for index, (row, measurement) in enumerate(measured)
        if (measurement.order.n, measurement.order.m) == (order.n, order.m)
    ]
    return order, points


def _common_order(measurements: Sequence[Measurement]) -> Order:
    """Return the order most rows were measured at; the smaller one of equals."""
    counts = Counter((m.order.n, m.order.m) for m in measurements)
    n, m = min(counts, key=lambda pair: (-counts[pair], pair))
    return Order(n=n, m=m)


def _region_point(
    plan: SweepPlan, index: int, row: PointResult, measurement: Measurement
) -> RegionPoint:
    """Return one row as the region estimator needs it."""
    one_way = plan.coupling == "one-way"
    drive = measurement.reference.frequency_hz if one_way else None
    return RegionPoint(
        key=f"{index:06d}",
        drive_hz=drive.value if drive is not None else None,
        drive_u_hz=(drive.u or 0.0) if drive is not None else 0.0,
        detuning_hz=None if one_way else own_place_hz(measurement.adler),
        level=row.level,
        amplitude=amplitude_of_level(row.level, plan.level.kind),
        direction=_DIRECTIONS[row.direction],
        state=measurement.decision.state,
        mean_rate_hz=measurement.mean_rate_hz.value,
        mean_rate_u_hz=measurement.mean_rate_hz.u,
        adler=measurement.adler,
        series=measurement.series,
    )


def drive_mismatch(row: PointResult) -> str | None:
    """Return one line when the stated drive frequency is not the one in the capture."""
    if row.measurement is None or row.drive_hz is None:
        return None
    measured = row.measurement.reference.frequency_hz
    if measured.value is None:
        return None
    allowed_hz = math.hypot(3.0 * (measured.u or 0.0), CLOCK_SPREAD * row.drive_hz)
    away_hz = measured.value - row.drive_hz
    if abs(away_hz) <= allowed_hz:
        return None
    return (
        f"{row.file}: drive_hz states {row.drive_hz:.6g} Hz, the reference runs at "
        f"{measured.value:.6g} Hz; the measured one is used"
    )
