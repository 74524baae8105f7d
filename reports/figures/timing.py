"""Pictures in time: how long the lock took to come, and how steady an oscillator is alone."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib.artist import Artist
from matplotlib.axes import Axes

from fit.records import FreeRun
from reports.figures.canvas import (
    Canvas,
    Picture,
    add_key,
    add_panel,
    draw_values,
    level_name,
    mark_handle,
    plain_log_ticks,
)
from reports.look import LEVEL_MARKS, WIDTH_IN
from reports.records import SweepRun
from reports.rows import Row, levels_of, rows_at, shown_levels, usable_rows
from reports.typeface import picture_text


def pull_in_rows(run: SweepRun) -> list[Row]:
    """Return the rows whose pull-in time was determined and that have a detuning."""
    return [
        row
        for row in usable_rows(run)
        if row.measurement.pull_in_s.value is not None and row.detuning_hz is not None
    ]


def pull_in_picture(run: SweepRun) -> Picture:
    """Return the pull-in time against detuning, one shape a level."""
    rows = pull_in_rows(run)

    def draw(canvas: Canvas) -> None:
        axes = add_panel(canvas, (0.75, 0.5, 0.15, 0.4))
        handles: list[Artist] = []
        levels = shown_levels(levels_of(run), len(LEVEL_MARKS))
        for mark, level in zip(LEVEL_MARKS, levels, strict=False):
            values = [
                (row.detuning_hz or 0.0, row.measurement.pull_in_s) for row in rows_at(rows, level)
            ]
            draw_values(axes, mark, values)
            handles.append(mark_handle(mark, level_name(run, level)))
        axes.set_ylim(bottom=0.0)
        axes.set_xlabel("detuning (Hz)")
        axes.set_ylabel("pull-in time (s)")
        add_key(canvas, handles, columns=4)

    return Picture(width_in=WIDTH_IN, height_in=2.6, draw=draw)


def stable_runs(run: SweepRun) -> list[FreeRun]:
    """Return the free-running captures that carry a stability table, at most six."""
    return [free for free in run.free_runs if len(free.allan) > 1][: len(LEVEL_MARKS)]


def stability_picture(run: SweepRun) -> Picture:
    """Return the Allan deviation of the free-running captures against averaging time."""
    free_runs = stable_runs(run)

    def draw(canvas: Canvas) -> None:
        axes = add_panel(canvas, (0.85, 0.5, 0.15, 0.2 + 0.2 * ((len(free_runs) + 1) // 2)))
        axes.set_xscale("log")
        axes.set_yscale("log")
        handles = [_draw_stability(axes, free, place) for place, free in enumerate(free_runs)]
        plain_log_ticks(axes, which="x")
        plain_log_ticks(axes, which="y")
        axes.set_xlabel("averaging time (s)")
        axes.set_ylabel("Allan deviation (1)")
        add_key(canvas, handles, columns=2)

    return Picture(width_in=WIDTH_IN, height_in=2.9, draw=draw)


def _draw_stability(axes: Axes, free: FreeRun, place: int) -> Artist:
    mark = LEVEL_MARKS[place]
    tau, deviation, low, high = np.array(_finite(free.allan), dtype=float).T
    axes.errorbar(
        tau,
        deviation,
        yerr=[np.maximum(deviation - low, 0), np.maximum(high - deviation, 0)],
        elinewidth=0.9,
        **(mark.style() | {"linestyle": "-", "linewidth": 0.8}),
    )
    return mark_handle(mark, picture_text(f"{free.role} {free.file}", 44))


def _finite(
    table: Sequence[tuple[float, float, float, float]],
) -> list[tuple[float, float, float, float]]:
    return [row for row in table if all(np.isfinite(row)) and row[0] > 0 and row[1] > 0]
