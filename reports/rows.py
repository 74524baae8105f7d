"""What a measured point is to a table or a picture: its drive, detuning, offset and level's law.

Arithmetic of the sweep axis only (conventions in ``fit.difference``); estimates are taken as
the records give them.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from fit.bracket import own_place_hz
from fit.records import Episode, LockingRegion, Measurement, RegionLevel
from reports.records import PointResult, SweepRun
from rig.angles import wrap_angle_rad


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Row:
    """One usable point: its index in the run, its measurement, drive and detuning."""

    index: int
    point: PointResult
    measurement: Measurement
    drive_hz: float | None
    detuning_hz: float | None

    @property
    def state(self) -> str:
        """State of the record."""
        return self.measurement.decision.state


def usable_rows(run: SweepRun) -> list[Row]:
    """Return all points that have a measurement, in the order of the run."""
    centres = {level: centre_at(run.region, level) for level in levels_of(run)}
    return [
        _row(run, index, point, point.measurement, centres[point.level])
        for index, point in enumerate(run.points)
        if point.measurement is not None
    ]


def _row(
    run: SweepRun,
    index: int,
    point: PointResult,
    measurement: Measurement,
    centre_hz: float | None,
) -> Row:
    drive_hz = _drive_hz(run, point, measurement)
    return Row(
        index=index,
        point=point,
        measurement=measurement,
        drive_hz=drive_hz,
        detuning_hz=_detuning_hz(measurement, drive_hz, centre_hz),
    )


def _drive_hz(run: SweepRun, point: PointResult, measurement: Measurement) -> float | None:
    """Return the measured reference frequency of a one-way pair, else the stated one."""
    if run.plan.coupling == "mutual":
        return None
    measured = measurement.reference.frequency_hz.value
    return measured if measured is not None else point.drive_hz


def _detuning_hz(
    measurement: Measurement, drive_hz: float | None, centre_hz: float | None
) -> float | None:
    """Return m (centre - drive) where both are known, else what the record says well enough."""
    if centre_hz is not None and drive_hz is not None:
        return measurement.order.m * (centre_hz - drive_hz)
    return own_place_hz(measurement.adler)


def centre_at(region: LockingRegion | None, level: float) -> float | None:
    """Return the drive frequency of zero detuning at a level, None where it is not known.

    The middle of the level's edges, over its directions; the centre of the whole region where
    the level is not closed on both sides.
    """
    if region is None:
        return None
    middles = [
        (entry.lower_hz.value + entry.upper_hz.value) / 2.0
        for entry in region.levels
        if entry.level == level
        and entry.lower_hz.value is not None
        and entry.upper_hz.value is not None
    ]
    return sum(middles) / len(middles) if middles else region.centre_hz.value


def edge_entry(region: LockingRegion | None, level: float, direction: str) -> RegionLevel | None:
    """Return the first interval of a level in a direction, in any direction when that lacks."""
    entries = [entry for entry in region.levels if entry.level == level] if region else []
    same = [entry for entry in entries if entry.direction == direction]
    return next(iter(same or entries), None)


def levels_of(run: SweepRun) -> list[float]:
    """Return the levels of the run's points, lowest first."""
    return sorted({point.level for point in run.points})


def directions_of(run: SweepRun) -> list[str]:
    """Return the sweep directions present, in the order up, down, none."""
    present = {point.direction for point in run.points}
    return [way for way in ("up", "down", "none") if way in present]


def shown_levels(levels: list[float], limit: int) -> list[float]:
    """Return at most ``limit`` levels, spread evenly from the lowest to the highest."""
    if len(levels) <= limit:
        return levels
    places = (round(place * (len(levels) - 1) / (limit - 1)) for place in range(limit))
    return [levels[place] for place in places]


def rows_at(rows: list[Row], level: float) -> Iterator[Row]:
    """Yield the rows of one level."""
    return (row for row in rows if row.point.level == level)


def longest_episode(measurement: Measurement) -> Episode | None:
    """Return the longest locked stretch of a record."""
    return max(measurement.episodes, key=lambda one: one.stop_s - one.start_s, default=None)


def near_rad(angle_rad: float, centre_rad: float) -> float:
    """Return the angle moved by whole turns to within half a turn of a centre."""
    return centre_rad + wrap_angle_rad(angle_rad - centre_rad)
