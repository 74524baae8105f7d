"""The points of a run as a plain table for spreadsheets and scripts."""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

from fit.records import Measurement
from reports.records import PointResult, SweepRun
from rig.quantities import Quantity


def points_csv(run: SweepRun) -> str:
    """Return the points of a run as a comma-separated table, one row a point.

    Every quantity takes two columns, value and standard uncertainty; a quantity that could
    not be determined leaves both empty. Where two recorders took the pairs, the second file and
    its digest follow. Free columns of the table of points come last, under
    their own names with "extra." before them. A text that a spreadsheet would take for a
    formula gets an apostrophe in front; results.json holds it unchanged.
    """
    stream = io.StringIO()
    writer = csv.writer(stream, lineterminator="\n")
    names = list(dict.fromkeys(name for point in run.points for name, _ in point.extras))
    files = ("driven_file", "driven_sha256") if any(p.driven_file for p in run.points) else ()
    writer.writerow([*_csv_heads(), *files, *(_safe(f"extra.{name}") for name in names)])
    for point in run.points:
        extras = dict(point.extras)
        cells = [_cell(column.get(point)) for column in _COLUMNS]
        cells += [
            cell for quantity in _QUANTITIES.values() for cell in _pair(point.measurement, quantity)
        ]
        cells += [_safe(getattr(point, name)) for name in files]
        writer.writerow([*cells, *(_safe(extras.get(name, "")) for name in names)])
    return stream.getvalue()


@dataclass(frozen=True, slots=True, kw_only=True)
class _Column:
    """One column of the table: its heading and how a row gives it."""

    head: str
    get: Callable[[PointResult], object]


def _of(get: Callable[[Measurement], object]) -> Callable[[PointResult], object]:
    return lambda point: None if point.measurement is None else get(point.measurement)


_COLUMNS: Sequence[_Column] = (
    _Column(head="file", get=lambda point: point.file),
    _Column(head="drive_hz", get=lambda point: point.drive_hz),
    _Column(head="level", get=lambda point: point.level),
    _Column(head="direction", get=lambda point: point.direction),
    _Column(head="status", get=lambda point: point.status),
    _Column(head="message", get=lambda point: point.message),
    _Column(head="sha256", get=lambda point: point.sha256),
    _Column(head="order", get=_of(lambda one: f"{one.order.n}:{one.order.m}")),
    _Column(head="state", get=_of(lambda one: one.decision.state)),
    _Column(head="locked_fraction", get=_of(lambda one: one.decision.locked_fraction)),
    _Column(head="episodes", get=_of(lambda one: len(one.episodes))),
    _Column(head="slips", get=_of(lambda one: len(one.slips))),
    _Column(head="style", get=_of(lambda one: "; ".join(part.style for part in one.episodes))),
    _Column(head="duration_s", get=_of(lambda one: one.duration_s)),
    _Column(head="adequate", get=_of(lambda one: one.adler.adequate)),
)

_QUANTITIES: dict[str, Callable[[Measurement], Quantity | None]] = {
    "mean_rate_hz": lambda one: one.mean_rate_hz,
    "episode_offset_rad": lambda one: _longest_offset(one),
    "detuning_hz": lambda one: one.adler.detuning_hz,
    "coupling_hz": lambda one: one.adler.coupling_hz,
    "offset_rad": lambda one: one.adler.offset_rad,
    "noise_rad2_s": lambda one: one.adler.noise_rad2_s,
    "jitter_rad": lambda one: one.jitter_rad,
    "pull_in_s": lambda one: one.pull_in_s,
    "slip_rate_hz": lambda one: one.slip_rate_hz,
    "reference_hz": lambda one: one.reference.frequency_hz,
    "driven_hz": lambda one: one.driven.frequency_hz,
    "reference_amplitude": lambda one: one.reference.amplitude,
    "driven_amplitude": lambda one: one.driven.amplitude,
}


def _longest_offset(one: Measurement) -> Quantity | None:
    if not one.episodes:
        return None
    longest = max(one.episodes, key=lambda part: part.stop_s - part.start_s)
    return Quantity(value=longest.offset_rad, u=longest.offset_u_rad, unit="rad")


def _csv_heads() -> list[str]:
    heads = [column.head for column in _COLUMNS]
    for name in _QUANTITIES:
        heads += [name, f"u_{name}"]
    return heads


def _pair(
    measurement: Measurement | None, get: Callable[[Measurement], Quantity | None]
) -> tuple[str, str]:
    quantity = None if measurement is None else get(measurement)
    if quantity is None or quantity.value is None:
        return "", ""
    return _cell(quantity.value), _cell(quantity.u)


def _cell(value: object) -> str:
    if value is None or (isinstance(value, float) and not math.isfinite(value)):
        return ""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, float):
        return repr(float(value))
    return _safe(str(value))


def _safe(text: str) -> str:
    """Return a text that no spreadsheet takes for a formula and that fits on one line."""
    text = " ".join(text.split())
    # bytes of a file name that are no text cannot be written as UTF-8
    text = text.encode("utf-8", "backslashreplace").decode("utf-8")
    return f"'{text}" if text[:1] in ("=", "+", "@", "-") and not _is_number(text) else text


def _is_number(text: str) -> bool:
    try:
        return math.isfinite(float(text))
    except ValueError:
        return False
