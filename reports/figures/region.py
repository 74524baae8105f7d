"""Pictures of the locking region: drive frequency against level, and hysteresis of the edges."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

import numpy as np
from matplotlib.artist import Artist
from matplotlib.axes import Axes

from fit.laws import amplitude_of_level
from fit.records import Hysteresis, LockingRegion, RegionLevel
from reports.figures.canvas import (
    RASTER_FROM,
    Canvas,
    Picture,
    add_key,
    add_panel,
    half_widths,
    level_label,
    level_name,
    line_handle,
    mark_handle,
    stack_panels,
)
from reports.look import BLACK, DIRECTION_WORDS, GREY, SKY, STATE_MARKS, WIDTH_IN, Mark
from reports.records import SweepRun
from reports.rows import Row, directions_of, usable_rows
from rig.arrays import FloatArray
from rig.quantities import Quantity

TICKS_MOST = 7  # up to so many levels each has its own tick
_OPEN = Mark(label="open on this side", colour=BLACK, shape="d", filled=False)


def region_picture(run: SweepRun) -> Picture:
    """Return the locking region: points by state, edges with uncertainty, fitted edge lines.

    One panel a sweep direction, so that rising and falling sweeps are never mixed.
    """
    ways = directions_of(run)

    def draw(canvas: Canvas) -> None:
        panels = stack_panels(canvas, len(ways), top=0.88)
        rows = usable_rows(run)
        for axes, way in zip(panels, ways, strict=True):
            _draw_direction(axes, run, [row for row in rows if row.point.direction == way], way)
        panels[-1].set_xlabel(_axis_label(run))
        add_key(canvas, _key(run, rows), columns=3)

    return Picture(width_in=WIDTH_IN, height_in=1.4 + 1.75 * len(ways), draw=draw)


def _axis_label(run: SweepRun) -> str:
    mutual = run.plan.coupling == "mutual"
    return "reference minus driven, both alone (Hz)" if mutual else "drive frequency (Hz)"


def _draw_direction(axes: Axes, run: SweepRun, rows: Sequence[Row], way: str) -> None:
    axes.set_title(DIRECTION_WORDS[way])
    axes.set_ylabel(level_label(run))
    if run.region is not None:
        entries = [entry for entry in run.region.levels if entry.direction == way]
        _draw_area(axes, entries)
        _draw_law(axes, run, run.region)
    _draw_points(axes, run, rows)
    if run.region is not None:
        for entry in entries:
            _draw_edges(axes, entry)
    levels = sorted({point.level for point in run.points})
    if len(levels) <= TICKS_MOST:
        axes.set_yticks(levels, [f"{level:g}" for level in levels])
    axes.margins(x=0.04, y=0.14)


def _draw_points(axes: Axes, run: SweepRun, rows: Iterable[Row]) -> None:
    rows = list(rows)
    for state, mark in STATE_MARKS.items():
        places = [(_across(run, row), row.point.level) for row in rows if row.state == state]
        known = [(x, y) for x, y in places if x is not None]
        if known:
            style = mark.style() | {"markersize": 4.2}
            heavy = len(known) > RASTER_FROM
            axes.plot(*zip(*known, strict=True), **style, zorder=3, rasterized=heavy)


def _across(run: SweepRun, row: Row) -> float | None:
    """Return the place of a point: its drive, for a mutual pair its detuning with a minus."""
    if run.plan.coupling != "mutual":
        return row.drive_hz
    return None if row.detuning_hz is None else -row.detuning_hz


def _draw_area(axes: Axes, entries: Sequence[RegionLevel]) -> None:
    """Shade between the edges of neighbouring levels, one interval at a time."""
    for interval in sorted({entry.interval for entry in entries}):
        closed = [
            (entry.level, entry.lower_hz.value, entry.upper_hz.value)
            for entry in sorted(entries, key=lambda one: one.level)
            if entry.interval == interval
            and entry.lower_hz.value is not None
            and entry.upper_hz.value is not None
        ]
        if len(closed) > 1:
            level, lower, upper = np.array(closed, dtype=float).T
            axes.fill_betweenx(level, lower, upper, color=SKY, alpha=0.25, linewidth=0, zorder=1)


def _draw_law(axes: Axes, run: SweepRun, region: LockingRegion) -> None:
    """Draw the edge lines of coupling in proportion to the amplitude: centre -+ kappa a / m."""
    kappa, centre = region.coupling_per_level, region.centre_hz
    if kappa.value is None or centre.value is None or not region.levels:
        return
    levels = _fine_levels(run, [entry.level for entry in region.levels])
    kind = run.plan.level.kind
    amplitude = np.array([amplitude_of_level(float(level), kind) for level in levels])
    half = kappa.value * amplitude / (run.plan.order[1] if run.plan.order else 1)
    for sign in (-1.0, 1.0):
        axes.plot(centre.value + sign * half, levels, color=BLACK, linewidth=0.8, zorder=2)


def _fine_levels(run: SweepRun, levels: Sequence[float]) -> FloatArray:
    """Return levels for a smooth line, down to the tip of the region where there is one."""
    low, high = min(levels), max(levels)
    if run.plan.level.kind != "decibel":
        low = 1e-3 * high
    return np.linspace(low, high, 80)


def _draw_edges(axes: Axes, entry: RegionLevel) -> None:
    for edge, bracket in (
        (entry.lower_hz, entry.bracket_lower_hz),
        (entry.upper_hz, entry.bracket_upper_hz),
    ):
        _draw_bracket(axes, bracket, entry.level)
        if edge.value is not None:
            below, above = half_widths(edge)
            axes.errorbar(
                edge.value,
                entry.level,
                xerr=[[below], [above]],
                color=BLACK,
                capsize=2.5,
                marker="|",
                markersize=10,
                markeredgewidth=1.0,
                elinewidth=1.4,
                zorder=4,
            )
        else:
            _draw_open(axes, edge, entry.level)


def _draw_bracket(axes: Axes, bracket: Quantity, level: float) -> None:
    """Draw the span between the last locked and the first unlocked point, as a check."""
    if bracket.value is not None:
        below, above = half_widths(bracket)
        axes.plot(
            [bracket.value - below, bracket.value + above],
            [level, level],
            color=GREY,
            linewidth=5.0,
            alpha=0.35,
            solid_capstyle="butt",
            zorder=1,
        )


def _draw_open(axes: Axes, edge: Quantity, level: float) -> None:
    bound = edge.high if edge.high is not None else edge.low
    if bound is not None:
        axes.plot([bound], [level], **(_OPEN.style() | {"markersize": 8.0}), zorder=4)


def _key(run: SweepRun, rows: Sequence[Row]) -> list[Artist]:
    present = {row.state for row in rows}
    handles: list[Artist] = [
        mark_handle(mark) for state, mark in STATE_MARKS.items() if state in present
    ]
    if run.region is None or not run.region.levels:
        return handles
    handles.append(line_handle("edge with 95 % interval", BLACK, "-", 1.6))
    handles.append(line_handle("coupling in proportion to amplitude", BLACK, "-", 0.8))
    if any(entry.bracket_lower_hz.value is not None for entry in run.region.levels):
        handles.append(line_handle("last locked to first unlocked", "#BBBBBB", "-", 5.0))
    edges = [edge for entry in run.region.levels for edge in (entry.lower_hz, entry.upper_hz)]
    if any(edge.value is None for edge in edges):
        handles.append(mark_handle(_OPEN))
    return handles


def hysteresis_picture(run: SweepRun) -> Picture:
    """Return the difference of each edge between the sweep directions, with 95 % intervals."""
    entries = _determined(run)

    def draw(canvas: Canvas) -> None:
        axes = add_panel(canvas, (2.1, 0.5, 0.15, 0.2))
        axes.axvline(0.0, color=BLACK, linewidth=0.9)
        for place, entry in enumerate(reversed(entries)):
            _draw_difference(axes, entry, place)
        axes.set_yticks(range(len(entries)), [_edge_name(run, one) for one in reversed(entries)])
        axes.set_ylim(-0.6, len(entries) - 0.4)
        axes.set_xlabel("edge, drive up minus drive down (Hz), bars 95 %")

    return Picture(width_in=WIDTH_IN, height_in=0.9 + 0.26 * max(len(entries), 2), draw=draw)


def _determined(run: SweepRun) -> list[Hysteresis]:
    entries = run.region.hysteresis if run.region else ()
    return [entry for entry in entries if entry.value_hz.value is not None]


def _edge_name(run: SweepRun, entry: Hysteresis) -> str:
    return f"{entry.edge} edge, {level_name(run, entry.level)}"


def _draw_difference(axes: Axes, entry: Hysteresis, place: int) -> None:
    below, above = half_widths(entry.value_hz)
    axes.errorbar(
        entry.value_hz.value or 0.0,
        place,
        xerr=[[below], [above]],
        color=STATE_MARKS["locked"].colour,
        marker="o" if entry.edge == "lower" else "s",
        markersize=5,
        capsize=3.0,
        elinewidth=1.3,
    )
