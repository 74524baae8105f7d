"""A picture that can be drawn on its own or on a page of paper, and the strokes they share.

Places are given in inches, so type and margins keep their size whatever the canvas. Figures
are bare ``Figure`` objects; the state-keeping interface of the drawing library is not used.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.figure import Figure, SubFigure
from matplotlib.lines import Line2D
from matplotlib.ticker import FuncFormatter, LogLocator, MaxNLocator, NullLocator

from reports.look import Mark, drawing_style
from reports.records import SweepRun
from reports.typeface import picture_text
from rig.arrays import FloatArray
from rig.quantities import Quantity

Canvas = Figure | SubFigure
Draw = Callable[[Canvas], None]
_RIGHT_IN = 0.15
RASTER_FROM = 1000  # more marks than these make a picture too heavy to mail
COVERAGE_95 = 2.0  # half-width in standard uncertainties of the bars, as k of the tables


@dataclass(frozen=True, slots=True, kw_only=True)
class Picture:
    """A picture as size in inches and a function that draws it on a canvas of that size."""

    width_in: float
    height_in: float
    draw: Draw

    def figure(self) -> Figure:
        """Return the picture drawn on a figure of its own."""
        with drawing_style():
            figure = Figure(figsize=(self.width_in, self.height_in), dpi=100)
            self.draw(figure)
        return figure


def canvas_size_in(canvas: Canvas) -> tuple[float, float]:
    """Return width and height of a canvas in inches."""
    box, dpi = canvas.bbox, canvas.dpi
    return box.width / dpi, box.height / dpi


def round_ticks(most: int) -> MaxNLocator:
    """Return a tick finder for at most ``most`` intervals at round numbers."""
    return MaxNLocator(most, steps=[1, 2, 2.5, 5, 10])


def add_panel(canvas: Canvas, place_in: tuple[float, float, float, float]) -> Axes:
    """Return axes at (left, bottom, right margin, top margin) inches of the canvas."""
    left, bottom, right, top = place_in
    width, height = canvas_size_in(canvas)
    axes = canvas.add_axes(
        (
            left / width,
            bottom / height,
            (width - left - right) / width,
            (height - bottom - top) / height,
        )
    )
    axes.xaxis.set_major_locator(round_ticks(7))
    axes.yaxis.set_major_locator(round_ticks(5))
    return axes


def stack_panels(
    canvas: Canvas,
    count: int,
    *,
    left: float = 0.75,
    bottom: float = 0.5,
    top: float = 0.55,
    gap: float = 0.32,
) -> list[Axes]:
    """Return axes one below the other on one horizontal scale, labelled at the last only."""
    width, height = canvas_size_in(canvas)
    each = (height - bottom - top - gap * (count - 1)) / count
    panels = []
    for row in range(count):
        above = top + row * (each + gap)
        panels.append(add_panel(canvas, (left, height - above - each, _RIGHT_IN, above)))
    for axes in panels:  # labels in one line, whatever the length of the tick labels
        axes.yaxis.set_label_coords(-(left - 0.27) / (width - left - _RIGHT_IN), 0.5)
    for axes in panels[:-1]:
        axes.sharex(panels[-1])
        axes.tick_params(labelbottom=False)
    return panels


def add_key(canvas: Canvas, handles: Sequence[Artist], *, columns: int = 4) -> None:
    """Put the key above the panels, at the top left corner, where there is never data."""
    if handles:
        canvas.legend(
            handles=list(handles),
            loc="upper left",
            bbox_to_anchor=(0.0, 1.0),
            ncol=columns,
            borderaxespad=0.2,
            columnspacing=1.4,
            handletextpad=0.5,
        )


def mark_handle(mark: Mark, label: str | None = None) -> Line2D:
    """Return the key entry of a mark."""
    return Line2D([], [], label=label or mark.label, **mark.style())


def line_handle(label: str, colour: str, style: Any = "-", width: float = 1.2) -> Line2D:
    """Return the key entry of a line."""
    return Line2D([], [], label=label, color=colour, linestyle=style, linewidth=width)


def half_widths(value: Quantity) -> tuple[float, float]:
    """Return how far the 95 % interval reaches below and above a value (0 where unknown)."""
    if value.value is None:
        return 0.0, 0.0
    if value.low is not None and value.high is not None:
        return max(value.value - value.low, 0.0), max(value.high - value.value, 0.0)
    spread = COVERAGE_95 * (value.u or 0.0)
    return spread, spread


def draw_values(
    axes: Axes,
    mark: Mark,
    values: Sequence[tuple[float, Quantity]],
    *,
    size_pt: float = 4.5,
) -> None:
    """Draw (place, value) pairs with their 95 % bars as one artist, whatever their number."""
    known = [(place, value) for place, value in values if value.value is not None]
    if not known:
        return
    bars = np.array([half_widths(value) for _place, value in known]).T
    axes.errorbar(
        [place for place, _value in known],
        [value.value or 0.0 for _place, value in known],
        yerr=bars,
        elinewidth=0.9,
        zorder=3,
        rasterized=len(known) > RASTER_FROM,
        **(mark.style() | {"markersize": size_pt}),
    )


def envelope(
    x: FloatArray, y: FloatArray, columns: int
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return (x, lowest, highest) of y in at most ``columns`` stretches of equal count.

    A dense line drawn whole costs seconds and hides its own shape; two values a column show
    the same ink. Stretches without a finite value give NaN, so gaps stay gaps.
    """
    count = min(columns, x.size)
    edges = np.linspace(0, x.size, count + 1).astype(int)
    rows = [_extremes(y[start:stop]) for start, stop in pairwise(edges)]
    centres = [float(np.mean(x[start:stop])) for start, stop in pairwise(edges)]
    low_high = np.array(rows, dtype=float).reshape(-1, 2)
    return np.array(centres), low_high[:, 0], low_high[:, 1]


def _extremes(part: FloatArray) -> tuple[float, float]:
    kept = part[np.isfinite(part)]
    return (float(kept.min()), float(kept.max())) if kept.size else (np.nan, np.nan)


def plain_log_ticks(axes: Axes, *, which: str) -> None:
    """Write the ticks of a logarithmic axis as plain numbers at 1, 2 and 5 of each decade."""
    axis = axes.xaxis if which == "x" else axes.yaxis
    axis.set_major_locator(LogLocator(subs=(1.0, 2.0, 5.0)))
    axis.set_minor_locator(NullLocator())
    axis.set_major_formatter(FuncFormatter(lambda value, _place: f"{value:.3g}"))


def level_label(run: SweepRun) -> str:
    """Return the label of a level axis with its unit."""
    name, unit = picture_text(run.plan.level.name, 40), picture_text(run.plan.level.unit, 12)
    return f"{name} ({unit})" if unit else name


def level_name(run: SweepRun, level: float) -> str:
    """Return a level with the name and unit of its axis."""
    name, unit = picture_text(run.plan.level.name, 40), picture_text(run.plan.level.unit, 12)
    return f"{name} {level:g} {unit}".rstrip()
