"""Pictures across the detuning: the staircase of mean rates, the locked phase, the residuals."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.ticker import MultipleLocator

from fit.records import RegionLevel
from reports.figures.canvas import (
    COVERAGE_95,
    RASTER_FROM,
    Canvas,
    Picture,
    add_key,
    draw_values,
    level_name,
    line_handle,
    mark_handle,
    stack_panels,
)
from reports.laws import arcsine_law_rad, beat_law_hz, noisy_rate_law_hz
from reports.look import BAND, BLACK, DIRECTION_MARKS, WIDTH_IN
from reports.records import SweepRun
from reports.residuals import Residual, phase_residuals, rate_residuals
from reports.rows import (
    Row,
    directions_of,
    edge_entry,
    levels_of,
    longest_episode,
    near_rad,
    rows_at,
    shown_levels,
    usable_rows,
)
from rig.angles import deg_from_rad
from rig.arrays import FloatArray
from rig.quantities import Quantity

PANELS_MOST = 4  # more than four levels on one picture would be too flat to read
_CURVE_POINTS = 241
LAW_STYLES = ("-", ":", "-.")  # rising, falling, set one by one; told apart in grey print


def staircase_picture(run: SweepRun) -> Picture:
    """Return the mean rate of psi against detuning, one panel a level, with the beat law."""

    def draw(canvas: Canvas) -> None:
        noisy = _draw_levels(canvas, run, _draw_rates, "mean rate (Hz)")
        handles = [*_direction_key(run), *_law_key(run, "beat law")]
        if noisy:
            handles.append(line_handle("beat law with noise", BLACK, "--", 0.9))
        add_key(canvas, handles, columns=3)

    return _level_stack(run, draw)


def offset_picture(run: SweepRun) -> Picture:
    """Return the locked phase against detuning, one panel a level, with the arcsine law."""

    def draw(canvas: Canvas) -> None:
        _draw_levels(canvas, run, _draw_offsets, "phase offset (°)")
        add_key(canvas, [*_direction_key(run), *_law_key(run, "arcsine law")], columns=4)

    return _level_stack(run, draw)


def _level_stack(run: SweepRun, draw: Callable[[Canvas], None]) -> Picture:
    count = len(shown_levels(levels_of(run), PANELS_MOST))
    return Picture(width_in=WIDTH_IN, height_in=0.95 + 1.2 * max(count, 1.3), draw=draw)


def _direction_key(run: SweepRun) -> list[Artist]:
    return [mark_handle(DIRECTION_MARKS[way]) for way in directions_of(run)]


def _law_key(run: SweepRun, name: str) -> list[Artist]:
    ways = directions_of(run)
    return [
        line_handle(
            name if len(ways) == 1 else f"{name}, {DIRECTION_MARKS[way].label}",
            DIRECTION_MARKS[way].colour,
            style,
        )
        for way, style in zip(ways, LAW_STYLES, strict=False)
    ]


def _draw_levels(
    canvas: Canvas,
    run: SweepRun,
    draw_panel: Callable[[Axes, SweepRun, list[Row], float], bool],
    label: str,
) -> bool:
    """Draw one panel a level, highest above; return whether any panel drew its second law."""
    levels = shown_levels(levels_of(run), PANELS_MOST)[::-1]
    panels = stack_panels(canvas, len(levels), top=0.72)
    rows = [row for row in usable_rows(run) if row.detuning_hz is not None]
    second = False
    for axes, level in zip(panels, levels, strict=True):
        axes.set_title(level_name(run, level))
        second |= draw_panel(axes, run, list(rows_at(rows, level)), level)
    panels[len(panels) // 2].set_ylabel(label)
    panels[-1].set_xlabel("detuning (Hz)")
    return second


def _curve_hz(rows: Sequence[Row]) -> FloatArray:
    places = [row.detuning_hz for row in rows if row.detuning_hz is not None] or [-1.0, 1.0]
    return np.linspace(min(places), max(places), _CURVE_POINTS)


def _couplings(run: SweepRun, level: float) -> list[tuple[str, Quantity, RegionLevel]]:
    """Return (direction, coupling, interval) of a level, once for each direction present."""
    found = []
    for way in directions_of(run):
        entry = edge_entry(run.region, level, way)
        if entry is not None and entry.coupling_hz.value:
            found.append((way, entry.coupling_hz, entry))
    return found


def _draw_rates(axes: Axes, run: SweepRun, rows: list[Row], level: float) -> bool:
    across = _curve_hz(rows)
    laws, noise = _couplings(run, level), _typical_noise(rows)
    for (way, coupling, _entry), style in zip(laws, LAW_STYLES, strict=False):
        law = beat_law_hz(across, coupling.value or 0.0)
        axes.plot(across, law, color=DIRECTION_MARKS[way].colour, linestyle=style, zorder=2)
    if laws and noise is not None:
        smooth = noisy_rate_law_hz(across, laws[0][1].value or 0.0, noise)
        axes.plot(across, smooth, color=BLACK, linestyle="--", linewidth=0.9, zorder=2)
    _draw_points(axes, rows, lambda row: row.measurement.mean_rate_hz)
    return noise is not None and bool(laws)


def _typical_noise(rows: Sequence[Row]) -> float | None:
    """Return the median noise strength of the records that could determine it, rad2/s."""
    found = [row.measurement.adler.noise_rad2_s.value for row in rows]
    known = sorted(value for value in found if value is not None and value > 0)
    return known[len(known) // 2] if known else None


def _draw_points(axes: Axes, rows: Sequence[Row], value_of: Callable[[Row], Quantity]) -> None:
    """Draw one value of each row against its detuning, by the mark of its sweep direction."""
    for way, mark in DIRECTION_MARKS.items():
        values = [
            (row.detuning_hz, value_of(row))
            for row in rows
            if row.point.direction == way and row.detuning_hz is not None
        ]
        draw_values(axes, mark, values)


def _draw_offsets(axes: Axes, run: SweepRun, rows: list[Row], level: float) -> bool:
    centre_rad = _centre_rad(run, rows, level)
    for (way, coupling, entry), style in zip(_couplings(run, level), LAW_STYLES, strict=False):
        half_hz, offset = coupling.value or 1.0, entry.offset_rad.value
        if offset is not None:
            # Evenly spaced in the angle, so that the steep ends are drawn to the edge.
            across = half_hz * np.sin(np.linspace(-np.pi / 2, np.pi / 2, _CURVE_POINTS))
            law = arcsine_law_rad(across, half_hz, near_rad(offset, centre_rad))
            slope = entry.offset_slope_rad_hz
            law = law + across * (slope.value or 0.0 if slope is not None else 0.0)
            colour = DIRECTION_MARKS[way].colour
            axes.plot(across, np.degrees(law), color=colour, linestyle=style, zorder=2)
    _draw_points(axes, rows, lambda row: locked_phase_deg(row, centre_rad))
    axes.yaxis.set_major_locator(MultipleLocator(45.0))
    return False


def _centre_rad(run: SweepRun, rows: Sequence[Row], level: float) -> float:
    """Return the angle around which phases of a level are drawn: its fitted offset if known."""
    for _way, _coupling, entry in _couplings(run, level):
        offset = entry.offset_rad
        if offset.value is not None:
            return near_rad(offset.value, 0.0)
    episodes = [longest_episode(row.measurement) for row in rows]
    return next((one.offset_rad for one in episodes if one is not None), 0.0)


def locked_phase_deg(row: Row, centre_rad: float) -> Quantity:
    """Return the mean phase of the longest episode, degrees, within half a turn of a centre."""
    episode = longest_episode(row.measurement)
    if episode is None or row.state not in ("locked", "intermittent"):
        return Quantity(value=None, u=None, unit="°", reason="no locked stretch")
    value = deg_from_rad(near_rad(episode.offset_rad, centre_rad))
    return Quantity(value=value, u=deg_from_rad(episode.offset_u_rad), unit="°")


def residual_picture(run: SweepRun) -> Picture:
    """Return measured minus law in standard uncertainties, for mean rates and locked phases.

    The detuning is divided by the coupling of the point's level, so that all levels share
    one axis with the edges at -1 and +1.
    """

    def draw(canvas: Canvas) -> None:
        panels = stack_panels(canvas, 2)
        for axes, title, residuals in (
            (panels[0], "mean rate of drifting records", rate_residuals(run)),
            (panels[1], "phase of locked records", phase_residuals(run)),
        ):
            axes.set_title(title)
            _draw_residuals(axes, residuals)
        panels[1].set_xlabel("detuning / coupling")
        panels[1].set_ylabel("(measured − law) / u")
        add_key(canvas, [*_direction_key(run), line_handle("±2 u", BAND, "-", 6.0)], columns=5)

    return Picture(width_in=WIDTH_IN, height_in=3.7, draw=draw)


def _draw_residuals(axes: Axes, residuals: Sequence[Residual]) -> None:
    axes.axhspan(-COVERAGE_95, COVERAGE_95, color=BAND, linewidth=0, zorder=0)
    axes.axhline(0.0, color=BLACK, linewidth=0.9)
    for way, mark in DIRECTION_MARKS.items():
        places = [(one.across, one.value) for one in residuals if one.direction == way]
        if places:
            style = mark.style() | {"markersize": 4.0}
            heavy = len(places) > RASTER_FROM
            axes.plot(*zip(*places, strict=True), **style, zorder=3, rasterized=heavy)
