"""Pictures of single records: psi against time with locked stretches shaded and slips marked."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.patches import Patch

from fit.records import Measurement
from reports.figures.canvas import (
    Canvas,
    Picture,
    add_key,
    add_panel,
    canvas_size_in,
    envelope,
    mark_handle,
    round_ticks,
)
from reports.look import BAND, BLUE, CARD_WIDTH_IN, SMALL_PT, VERMILION, WIDTH_IN, Mark
from rig.angles import TURN_RAD
from rig.arrays import FloatArray

_SLIP = Mark(label="slip of whole turns", colour=VERMILION, shape="|", filled=True)
_COLUMNS_PER_IN = 90  # two values a column: about one column a printed dot of line width
SLIPS_MOST = 200  # marks beyond this count would merge into a bar


def draw_record(measurement: Measurement) -> Figure:
    """Return psi of one record as a figure of its own, for a single measurement."""
    return record_picture(measurement).figure()


def record_picture(measurement: Measurement) -> Picture:
    """Return psi of one record in turns against time, at the width of the page."""

    def draw(canvas: Canvas) -> None:
        axes = add_panel(canvas, (0.75, 0.5, 0.15, 0.4))
        _draw_record(axes, canvas, measurement)
        axes.set_xlabel("time (s)")
        axes.set_ylabel("phase difference (turns)")
        add_key(canvas, _key(measurement), columns=4)

    return Picture(width_in=WIDTH_IN, height_in=2.5, draw=draw)


def card_picture(measurement: Measurement) -> Picture:
    """Return the small picture of one record for the gallery of all records."""

    def draw(canvas: Canvas) -> None:
        axes = add_panel(canvas, (0.55, 0.42, 0.12, 0.08))
        _draw_record(axes, canvas, measurement)
        axes.xaxis.set_major_locator(round_ticks(4))
        axes.yaxis.set_major_locator(round_ticks(4))
        axes.set_xlabel("time (s)", fontsize=SMALL_PT, labelpad=1.5)
        axes.set_ylabel("turns", fontsize=SMALL_PT, labelpad=1.5)

    return Picture(width_in=CARD_WIDTH_IN, height_in=1.5, draw=draw)


def _draw_record(axes: Axes, canvas: Canvas, measurement: Measurement) -> None:
    turns = _turns(measurement)
    for episode in measurement.episodes:
        axes.axvspan(episode.start_s, episode.stop_s, color=BAND, linewidth=0, zorder=0)
    columns = int(canvas_size_in(canvas)[0] * _COLUMNS_PER_IN)
    time_s, low, high = envelope(measurement.trace_s, turns, columns)
    if turns.size > columns:
        axes.fill_between(time_s, low, high, color=BLUE, linewidth=0.7, zorder=2)
    else:
        axes.plot(measurement.trace_s, turns, color=BLUE, linewidth=0.9, zorder=2)
    _draw_slips(axes, measurement)
    _settle_scale(axes, turns)


def _turns(measurement: Measurement) -> FloatArray:
    """Return psi in turns, its first valid value brought into one turn around 0."""
    turns = np.asarray(measurement.trace_psi_rad, dtype=float) / TURN_RAD
    valid = turns[np.isfinite(turns)]
    return turns - round(float(valid[0])) if valid.size else turns


def _draw_slips(axes: Axes, measurement: Measurement) -> None:
    times = [slip.time_s for slip in measurement.slips[:SLIPS_MOST]]
    if times:
        # Marks stand at the lower rim, out of the way of the line.
        axes.plot(
            times,
            np.zeros(len(times)),
            transform=axes.get_xaxis_transform(),
            clip_on=False,
            **(_SLIP.style() | {"markersize": 6.0}),
            zorder=4,
        )


def _settle_scale(axes: Axes, turns: FloatArray) -> None:
    """Keep at least a quarter of a turn in view, so that a calm record looks calm."""
    valid = turns[np.isfinite(turns)]
    if not valid.size:
        return
    low, high = float(valid.min()), float(valid.max())
    half = max(0.54 * (high - low), 0.125)
    axes.set_ylim((low + high) / 2 - half, (low + high) / 2 + half)


def _key(measurement: Measurement) -> Sequence[Artist]:
    handles: list[Artist] = []
    if measurement.episodes:
        handles.append(Patch(facecolor=BAND, label="locked stretch"))
    if measurement.slips:
        handles.append(mark_handle(_SLIP))
    return handles
