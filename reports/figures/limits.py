"""Picture of the limits: each value with its expanded uncertainty, its limits and guard bands."""

from __future__ import annotations

import textwrap
from collections.abc import Sequence

from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.patches import Patch
from matplotlib.ticker import MaxNLocator

from reports.figures.canvas import (
    Canvas,
    Picture,
    add_key,
    add_panel,
    canvas_size_in,
    line_handle,
    mark_handle,
)
from reports.look import (
    BLACK,
    DIRECTION_WORDS,
    FAINT,
    GREY,
    SMALL_PT,
    VERDICT_COLOURS,
    VERDICT_MARKS,
    VERDICT_SHAPES,
    WIDTH_IN,
)
from reports.numbers import unit_text
from reports.paper_units import paper_verdict
from reports.records import Limit, SweepRun, Verdict
from reports.typeface import picture_text

ROWS_MOST = 12  # more rows than these make a second picture
_NAME_CHARS = 30
_ROW_IN = 0.56
_TOP_IN = 0.58


def drawn_verdicts(run: SweepRun) -> list[Verdict]:
    """Return the verdicts on numbers that were determined; words have no bar."""
    return [
        verdict
        for verdict in map(paper_verdict, run.verdicts)
        if verdict.value.value is not None and verdict.text_value is None
    ]


def limits_picture(run: SweepRun) -> Picture:
    """Return one row a limit (the first twelve), each with a scale of its own unit."""
    return bars_picture(drawn_verdicts(run)[:ROWS_MOST])


def bars_picture(verdicts: Sequence[Verdict]) -> Picture:
    """Return the bars of the given verdicts, one below the other."""

    def draw(canvas: Canvas) -> None:
        _, height = canvas_size_in(canvas)
        for place, verdict in enumerate(verdicts):
            top = _TOP_IN + place * _ROW_IN
            axes = add_panel(canvas, (2.0, height - top - 0.24, 0.95, top))
            _draw_row(axes, verdict)
        add_key(canvas, _key(verdicts), columns=3)

    height = _TOP_IN + _ROW_IN * max(len(verdicts), 1)
    return Picture(width_in=WIDTH_IN, height_in=height, draw=draw)


def _draw_row(axes: Axes, verdict: Verdict) -> None:
    axes.set_ylim(-1, 1)
    axes.set_yticks([])
    axes.grid(False)
    axes.spines["left"].set_visible(False)
    _draw_limits(axes, verdict)
    value, spread = verdict.value.value or 0.0, verdict.expanded_u or 0.0
    mark = VERDICT_MARKS[verdict.verdict]
    axes.errorbar(
        [value],
        [0],
        xerr=[[spread], [spread]],
        elinewidth=1.6,
        capsize=3.5,
        zorder=4,
        **(mark.style() | {"markersize": 6.0}),
    )
    axes.xaxis.set_major_locator(MaxNLocator(5))
    _set_scale(axes, verdict)
    _write_names(axes, verdict)


def _draw_limits(axes: Axes, verdict: Verdict) -> None:
    """Draw limits as lines, the forbidden side grey, the undecided guard bands hatched."""
    width = guard_width(verdict)
    for limit, side in ((verdict.limit.lower, -1.0), (verdict.limit.upper, 1.0)):
        if limit is None:
            continue
        axes.axvline(limit, color=BLACK, linewidth=1.6, zorder=3)
        if not verdict.limit.circular:
            axes.axvspan(limit, limit + side * _far(verdict), color=FAINT, linewidth=0, zorder=0)
        if width:
            axes.axvspan(
                limit - width,
                limit + width,
                facecolor="none",
                edgecolor=GREY,
                hatch="////",
                linewidth=0,
                zorder=1,
            )


def guard_width(verdict: Verdict) -> float:
    """Return the width of the guard band inside a limit, 0 where the rule has none."""
    limit = verdict.limit
    if limit.rule == "guard":
        return verdict.expanded_u or 0.0
    if limit.rule == "guard-width":
        return limit.guard_width or 0.0
    return 0.0


def _far(verdict: Verdict) -> float:
    low, high = _reach(verdict)
    return 4.0 * (high - low)


def _reach(verdict: Verdict) -> tuple[float, float]:
    """Return the span that value, uncertainty, limits and guard bands need."""
    value, spread, guard = (
        verdict.value.value or 0.0,
        verdict.expanded_u or 0.0,
        guard_width(verdict),
    )
    places = [value - spread, value + spread]
    for limit in (verdict.limit.lower, verdict.limit.upper):
        if limit is not None:
            places += [limit - guard, limit + guard]
    low, high = min(places), max(places)
    room = 0.12 * (high - low) or 0.1 * abs(value) or 1.0
    return low - room, high + room


def _set_scale(axes: Axes, verdict: Verdict) -> None:
    axes.set_xlim(*_reach(verdict))


def _write_names(axes: Axes, verdict: Verdict) -> None:
    unit = unit_text(verdict.value.unit)
    name = picture_text(name_of(verdict.limit), _NAME_CHARS * 2 - 8)
    lines = textwrap.wrap(f"{name} ({unit})" if unit else name, _NAME_CHARS)
    where = textwrap.shorten(picture_text(_where(verdict.limit)), _NAME_CHARS, placeholder="…")
    rows = [(line, BLACK) for line in lines] + ([(where, GREY)] if where else [])
    for place, (line, colour) in enumerate(rows):
        height = 0.5 + 0.56 * ((len(rows) - 1) / 2 - place)
        axes.text(
            -0.03,
            height,
            line,
            transform=axes.transAxes,
            ha="right",
            va="center",
            fontsize=SMALL_PT,
            color=colour,
        )
    axes.text(
        1.03,
        0.5,
        f"{VERDICT_SHAPES[verdict.verdict]} {verdict.verdict}",
        transform=axes.transAxes,
        ha="left",
        va="center",
        color=VERDICT_COLOURS[verdict.verdict],
        fontweight="bold",
    )


def _where(limit: Limit) -> str:
    level = "" if limit.level is None else f"level {limit.level:g}"
    way = DIRECTION_WORDS.get(limit.direction or "", "")
    return ", ".join(part for part in (level, way) if part)


def name_of(limit: Limit) -> str:
    """Return the limit's own name, or that of its quantity."""
    return limit.name or limit.quantity


def _key(verdicts: Sequence[Verdict]) -> list[Artist]:
    words = {verdict.verdict for verdict in verdicts}
    handles: list[Artist] = [
        mark_handle(VERDICT_MARKS[word], f"{word}, with U")
        for word in VERDICT_MARKS
        if word in words
    ]
    handles.append(line_handle("limit", BLACK, "-", 1.6))
    handles.append(Patch(facecolor=FAINT, label="outside the limit"))
    if any(guard_width(verdict) for verdict in verdicts):
        handles.append(
            Patch(
                facecolor="white",
                edgecolor=GREY,
                hatch="////",
                linewidth=0,
                label="guard band, undecided",
            )
        )
    return handles
