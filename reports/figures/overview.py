"""The picture of one capture looked at: levels over time and spectrum of each channel."""

from __future__ import annotations

import math
from collections.abc import Sequence
from pathlib import PurePath
from typing import Any, Literal

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from reports.figures.canvas import Canvas, Picture, add_panel, canvas_size_in
from reports.inspection import Inspection, duration_text
from reports.look import BAND, BLACK, BLUE, GREY, SMALL_PT, VERDICT_COLOURS, VERMILION, WIDTH_IN
from reports.numbers import plain_number
from reports.typeface import picture_text
from rig.arrays import FloatArray
from rig.captures import Capture
from rig.health import NamedLine, SignalHealth, named_lines
from rig.health.level_steps import group_levels
from rig.health.subject import channel_title
from rig.spectrum import Spectrum

ROW_IN = 1.75  # height of the two panels of a channel
TOP_IN, BOTTOM_IN, GAP_IN = 0.98, 0.5, 0.5
PANELS_MOST = 8  # channels drawn; the rest is named in the last line
COLUMNS = 700  # bins drawn of a spectrum, two values each: more than its panel has dots
LABELS_MOST = 4  # lines named in a spectrum; more would cover each other
CLOSE_RATIO = 1.25  # of two frequencies whose letters would overlap
SPANS_MOST = 100  # gaps shaded; more would merge
DECADES = 13.0  # of density shown below its top: the floor of 24 bits lies 12 below
SLOWEST_SHARE = 0.02  # of the own frequency: what is slower is drift, and not drawn
HEADROOM = 0.62  # share of the height up to the highest line; above stand the names
CAPTION = (
    "left: lowest to highest value (shaded), mean ± rms (lines), hatched where samples are "
    "lost\nright: density of power, the strongest lines lettered"
)


def draw_overview(capture: Capture, inspection: Inspection) -> Figure:
    """Return the overview of a capture: levels and spectrum of each channel, faults marked.

    Parameters
    ----------
    capture : Capture
    inspection : Inspection of the same capture; the samples are not read again
    """
    return overview_picture(inspection).figure()


def overview_picture(inspection: Inspection) -> Picture:
    """Return the overview as a picture of the page's width, one row a channel."""
    shown = inspection.channels[:PANELS_MOST]

    def draw(canvas: Canvas) -> None:
        _head(canvas, inspection, len(shown))
        for row, channel in enumerate(shown):
            _draw_row(canvas, channel, TOP_IN + row * (ROW_IN + GAP_IN), row == len(shown) - 1)

    height = TOP_IN + BOTTOM_IN + len(shown) * ROW_IN + (len(shown) - 1) * GAP_IN
    return Picture(width_in=WIDTH_IN, height_in=height, draw=draw)


def _head(canvas: Canvas, inspection: Inspection, shown: int) -> None:
    left_out = len(inspection.channels) - shown
    more = f", {left_out} more channels not drawn" if left_out else ""
    facts = (
        f"{inspection.format}, {plain_number(inspection.rate_hz, 8)} Hz, "
        f"{duration_text(inspection.duration_s)}, {len(inspection.channels)} channels{more}"
    )
    _write(canvas, 0.1, 0.2, PurePath(inspection.path).name, weight="bold")
    _write(canvas, 0.1, 0.37, facts)
    for row, line in enumerate(CAPTION.split("\n")):
        _write(canvas, 0.1, 0.54 + 0.14 * row, line, fontsize=SMALL_PT, color=GREY)


def _write(canvas: Canvas, left: float, down: float, text: str, **style: Any) -> None:
    """Write one line at a place in inches from the top left corner of the canvas."""
    width, height = canvas_size_in(canvas)
    canvas.text(left / width, 1.0 - down / height, picture_text(text), **style)


def _draw_row(canvas: Canvas, channel: SignalHealth, top: float, is_last: bool) -> None:
    _, height = canvas_size_in(canvas)
    bottom = height - top - ROW_IN
    _write(canvas, 0.1, top - 0.08, _row_title(channel), fontsize=SMALL_PT, color=_tone(channel))
    levels = add_panel(canvas, (0.62, bottom, WIDTH_IN - 2.75, top))
    _draw_levels(levels, channel)
    spectrum = add_panel(canvas, (3.4, bottom, 0.12, top))
    _draw_spectrum(spectrum, channel)
    if is_last:
        levels.set_xlabel("time (s)")
        spectrum.set_xlabel("frequency (Hz)")


def _row_title(channel: SignalHealth) -> str:
    """Return channel number and name, and by name what is wrong with it."""
    title = channel_title(channel.column, channel.channel)
    for severity in ("fault", "warning"):
        names = [fault.name for fault in channel.faults if fault.severity == severity]
        title += f" – {severity}: {', '.join(names)}" if names else ""
    return title


def _tone(channel: SignalHealth) -> str:
    is_bad = any(fault.severity == "fault" for fault in channel.faults)
    return VERDICT_COLOURS["fail"] if is_bad else BLACK


def _draw_levels(axes: Axes, channel: SignalHealth) -> None:
    slots = channel.survey.slots
    length_s = slots.frames / channel.rate_hz
    starts = np.arange(slots.mean.size + 1, dtype=np.float64) * length_s
    axes.stairs(slots.highest, starts, baseline=slots.lowest, fill=True, color=BAND, label="range")
    mean, rms, group_s = group_levels(slots, channel.rate_hz, channel.frequency_hz or math.inf)
    edges = np.arange(mean.size + 1) * group_s
    if mean.size > 1 and edges[-1] > channel.survey.frame_count / channel.rate_hz:
        # The last slot is filled in part: the rms of a part of a cycle is none.
        mean, rms, edges = mean[:-1], rms[:-1], edges[:-1]
    for bound in (mean + rms, mean - rms):
        axes.stairs(bound, edges, baseline=None, color=BLUE, linewidth=0.8)
    axes.set_xlim(0.0, channel.survey.frame_count / channel.rate_hz)
    axes.set_ylabel(f"level ({channel.unit})" if channel.unit else "level")
    _mark_spans(axes, channel)
    _mark_rails(axes, channel, starts)


def _mark_spans(axes: Axes, channel: SignalHealth) -> None:
    """Hatch gaps and standstills; a short one keeps a visible width."""
    least_s = 0.004 * channel.survey.frame_count / channel.rate_hz
    for fault in channel.faults:
        for span in fault.spans[:SPANS_MOST]:
            start, stop = span.start / channel.rate_hz, span.stop / channel.rate_hz
            axes.axvspan(
                start,
                max(stop, start + least_s),
                facecolor="none",
                edgecolor=VERMILION,
                hatch="////",
                linewidth=0.6,
            )


def _mark_rails(axes: Axes, channel: SignalHealth, starts: FloatArray) -> None:
    """Mark at the rim the slots in which samples stand at the rail."""
    if not any(fault.name == "clipped" for fault in channel.faults):
        return
    slots = channel.survey.slots
    centres = (starts[:-1] + starts[1:]) / 2
    ends = ((slots.highest, channel.survey.top, 1.0), (slots.lowest, channel.survey.bottom, 0.0))
    for level, extreme, rim in ends:
        at_rail = centres[level == extreme.value]
        axes.plot(
            at_rail,
            np.full(at_rail.size, rim),
            transform=axes.get_xaxis_transform(),
            linestyle="none",
            marker="|",
            markersize=3.5,
            markeredgewidth=0.6,
            color=VERMILION,
            clip_on=False,
        )


def _draw_spectrum(axes: Axes, channel: SignalHealth) -> None:
    lines = channel.lines
    if lines is None:
        axes.text(0.5, 0.5, "no oscillation", transform=axes.transAxes, ha="center", color=GREY)
        axes.set_xticks([])
        axes.set_yticks([])
        return
    slowest = round(SLOWEST_SHARE * lines.own.frequency_hz / lines.coarse.resolution_hz)
    shown = slice(max(1, slowest), None)
    frequency_hz, density = lines.coarse.frequency_hz[shown], lines.coarse.density[shown]
    centre_hz, low, high = _by_octave(frequency_hz, density)
    axes.fill_between(centre_hz, low, high, color=BLUE, linewidth=0.6, step="mid")
    axes.set_xscale("log")
    axes.set_yscale("log")
    top = float(density.max())
    least = max(float(low[low > 0].min()), top * 10.0**-DECADES) / 2.0
    axes.set_ylim(least, least * (top / least) ** (1.0 / HEADROOM))
    axes.set_xlim(frequency_hz[0], frequency_hz[-1])
    axes.set_ylabel(f"density ({channel.unit or 'unit'}²/Hz)")
    named = named_lines(lines, channel.crosstalk)[:LABELS_MOST]
    for place, part in enumerate(named):
        _label_line(axes, lines.coarse, part, place, _side(part, named))


def _side(part: NamedLine, shown: Sequence[NamedLine]) -> Literal["left", "center", "right"]:
    """Return which end of its letter stands at a line, so that close ones part."""
    hz = part.line.frequency_hz
    ratios = [other.line.frequency_hz / hz for other in shown if other is not part]
    if any(1.0 < ratio < CLOSE_RATIO for ratio in ratios):
        return "right"
    return "left" if any(1.0 < 1.0 / ratio < CLOSE_RATIO for ratio in ratios) else "center"


def _by_octave(
    frequency_hz: FloatArray, density: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return (frequency, lowest, highest) in columns of equal width on a log axis."""
    edges = np.geomspace(frequency_hz[0], frequency_hz[-1] * (1 + 1e-9), COLUMNS + 1)
    starts = np.unique(np.searchsorted(frequency_hz, edges[:-1]))
    starts = starts[starts < frequency_hz.size]
    low = np.minimum.reduceat(density, starts)
    high = np.maximum.reduceat(density, starts)
    return frequency_hz[starts], low, high


def _label_line(
    axes: Axes,
    spectrum: Spectrum,
    part: NamedLine,
    place: int,
    side: Literal["left", "center", "right"],
) -> None:
    """Put a letter above a line, and frequency and kind beside that letter above all lines."""
    hz, letter = part.line.frequency_hz, "abcdefgh"[place]
    peak = float(spectrum.density[round(hz / spectrum.resolution_hz)])
    style: dict[str, Any] = {"fontsize": SMALL_PT, "weight": "bold"}
    axes.annotate(letter, (hz, peak), (0, 1.5), textcoords="offset points", ha=side, **style)
    down = 0.99 - 0.085 * place
    axes.text(0.02, down, letter, transform=axes.transAxes, va="top", **style)
    axes.text(
        0.07,
        down,
        f"{plain_number(hz, 5)} Hz, {part.label}",
        transform=axes.transAxes,
        va="top",
        fontsize=SMALL_PT,
    )
