"""Picture of the steps of n:m locking: frequency ratio against drive over a wide range."""

from __future__ import annotations

from collections.abc import Sequence

from matplotlib.axes import Axes

from reports.figures.canvas import (
    RASTER_FROM,
    Canvas,
    Picture,
    add_key,
    add_panel,
    mark_handle,
)
from reports.look import GREY, SMALL_PT, STATE_MARKS, WIDTH_IN
from reports.records import SweepRun
from reports.rows import Row, usable_rows


def step_rows(run: SweepRun) -> list[tuple[float, float, Row]]:
    """Return (drive, driven / reference frequency, row) of a run of several locking orders."""
    rows = usable_rows(run)
    if len({(row.measurement.order.n, row.measurement.order.m) for row in rows}) < 2:
        return []
    placed = ((row.drive_hz, _ratio(row), row) for row in rows)
    return [(x, ratio, row) for x, ratio, row in placed if x is not None and ratio is not None]


def _ratio(row: Row) -> float | None:
    driven = row.measurement.driven.frequency_hz.value
    reference = row.measurement.reference.frequency_hz.value
    return driven / reference if driven is not None and reference else None


def locked_orders(rows: Sequence[tuple[float, float, Row]]) -> list[tuple[int, int]]:
    """Return the orders (n, m) at which some record is locked, rising by their ratio m / n."""
    orders = {
        (row.measurement.order.n, row.measurement.order.m)
        for _drive, _ratio_, row in rows
        if row.state == "locked"
    }
    return sorted(orders, key=lambda order: order[1] / order[0])


def steps_picture(run: SweepRun) -> Picture:
    """Return the frequency ratio of each record; on a step it stands still at m / n."""
    rows = step_rows(run)

    def draw(canvas: Canvas) -> None:
        axes = add_panel(canvas, (0.75, 0.5, 0.5, 0.4))
        _draw_orders(axes, locked_orders(rows))
        present = [state for state in STATE_MARKS if any(row.state == state for *_, row in rows)]
        for state in present:
            places = [(x, ratio) for x, ratio, row in rows if row.state == state]
            style = STATE_MARKS[state].style() | {"markersize": 4.2}
            heavy = len(places) > RASTER_FROM
            axes.plot(*zip(*places, strict=True), **style, zorder=3, rasterized=heavy)
        axes.set_xlabel("drive frequency (Hz)")
        axes.set_ylabel("driven / reference frequency (1)")
        add_key(canvas, [mark_handle(STATE_MARKS[state]) for state in present], columns=4)

    return Picture(width_in=WIDTH_IN, height_in=3.2, draw=draw)


def _draw_orders(axes: Axes, orders: Sequence[tuple[int, int]]) -> None:
    for n, m in orders:
        axes.axhline(m / n, color=GREY, linewidth=0.8, zorder=1)
        axes.text(
            1.01, m / n, f"{n}:{m}", transform=axes.get_yaxis_transform(), va="center",
            fontsize=SMALL_PT,
        )  # fmt: skip
