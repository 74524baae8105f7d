"""Titles and captions of the pictures; each caption is one sentence that states what is seen."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

from fit.records import RegionLevel
from reports.content_model import Block, FigureRef, Gallery
from reports.figures.coupling import coupling_row, curve_of, share_inside
from reports.figures.limits import ROWS_MOST, drawn_verdicts
from reports.figures.steps import locked_orders, step_rows
from reports.figures.timing import pull_in_rows, stable_runs
from reports.figures.variable import style_counts, variable_rows
from reports.gallery import CARDS_MOST, card_key, gallery_rows, typical_row, worst_row
from reports.look import DIRECTION_WORDS
from reports.numbers import one_line, plain_number, quantity_text, with_unit
from reports.records import SweepRun, Verdict
from reports.residuals import phase_residuals, rate_residuals
from reports.rows import Row, longest_episode, usable_rows
from rig.angles import deg_from_rad


@dataclass(frozen=True, slots=True, kw_only=True)
class Sketch:
    """A picture before it is placed: title, whether there is anything to draw, its caption."""

    title: str
    drawable: Callable[[SweepRun], bool]
    caption: Callable[[SweepRun], str]


def figure_block(run: SweepRun, key: str) -> list[Block]:
    """Return the reference to a picture, nothing where the run has nothing to draw in it."""
    sketch = SKETCHES[key]
    if not sketch.drawable(run):
        return []
    return [FigureRef(key=key, title=sketch.title, caption=sketch.caption(run))]


def gallery_block(run: SweepRun) -> list[Block]:
    """Return the small pictures of single records in their order of urgency."""
    figures = tuple(
        FigureRef(key=card_key(row), title=row.point.names, caption=_card_caption(run, row))
        for row in gallery_rows(run)
    )
    return [Gallery(figures=figures)] if figures else []


def gallery_remark(run: SweepRun) -> str:
    """Return how many records are drawn and where the others are."""
    usable, drawn = len(usable_rows(run)), len(gallery_rows(run))
    order = "Undecided and intermittent records come first, then those nearest an edge."
    if usable <= drawn:
        return f"All {usable} usable records are drawn. {order}"
    return (
        f"{drawn} of {usable} usable records are drawn (at most {CARDS_MOST}). {order} The results "
        "of every record are stored beside this report, one file a capture, in points/."
    )


def _card_caption(run: SweepRun, row: Row) -> str:
    parts = [row.state]
    if row.drive_hz is not None:
        parts.append(f"{row.drive_hz:.7g} Hz")
    axis = run.plan.level
    named = "" if axis.unit else f"{axis.name} "  # the unit names the level well enough here
    parts.append(with_unit(f"{named}{row.point.level:g}", axis.unit))
    if row.point.direction != "none":
        parts.append(DIRECTION_WORDS[row.point.direction])
    slips = len(row.measurement.slips)
    parts.append("no slip" if not slips else "1 slip" if slips == 1 else f"{slips} slips")
    return ", ".join(parts)


def _closed(run: SweepRun) -> list[RegionLevel]:
    levels = run.region.levels if run.region else ()
    return [entry for entry in levels if entry.width_hz.value is not None]


def _region_caption(run: SweepRun) -> str:
    closed = sorted(_closed(run), key=lambda entry: (entry.level, entry.direction))
    rows = usable_rows(run)
    locked = sum(row.state == "locked" for row in rows)
    if not closed:
        return f"{locked} of {len(rows)} records are locked; no level is closed on both sides."
    first, last = closed[0], closed[-1]
    text = (
        f"{locked} of {len(rows)} records are locked; the locking range is "
        f"{quantity_text(first.width_hz)} wide at {_level(run, first)}"
    )
    if last.level != first.level:
        text += f" and {quantity_text(last.width_hz)} at {_level(run, last)}"
    return text + "."


def _level(run: SweepRun, entry: RegionLevel) -> str:
    level = with_unit(f"{run.plan.level.name} {entry.level:g}", run.plan.level.unit)
    return level if entry.direction == "none" else f"{level} ({DIRECTION_WORDS[entry.direction]})"


def _staircase_caption(run: SweepRun) -> str:
    rows = usable_rows(run)
    still = sum(row.state == "locked" for row in rows)
    drifting = sum(row.state == "drifting" for row in rows)
    return (
        f"The mean rate of ψ is zero in the {still} locked records and leaves zero beyond the "
        f"edges as the beat law says ({drifting} drifting records); bars 95 %."
    )


def _offset_caption(run: SweepRun) -> str:
    locked = [row for row in usable_rows(run) if row.state == "locked"]
    count = len(locked)
    return (
        f"The locked phase of {count} records turns from one edge of the range to the other and "
        "is compared with the arcsine law of the fitted coupling and offset; bars 95 %."
    )


def _residual_caption(run: SweepRun) -> str:
    parts = []
    for name, found in (
        ("mean rates", rate_residuals(run)),
        ("locked phases", phase_residuals(run)),
    ):
        inside = sum(abs(one.value) <= 2.0 for one in found)
        if found:
            expected = round(0.954 * len(found))
            parts.append(f"{inside} of {len(found)} {name} (about {expected} expected)")
    return (
        f"Within ±2 u of record and fitted law together lie {' and '.join(parts)}; a slope, or "
        "many more outside, is a departure from the phase equation."
    )


def _hysteresis_caption(run: SweepRun) -> str:
    entries = run.region.hysteresis if run.region else ()
    tested = [entry for entry in entries if entry.p_value is not None]
    small = sum(entry.p_value is not None and entry.p_value < 0.01 for entry in tested)
    return (
        f"{small} of {len(tested)} edges differ between drive up and drive down at the 1 % level "
        "of the test; bars 95 %."
    )


def _pull_in_caption(run: SweepRun) -> str:
    rows = pull_in_rows(run)
    longest = max(rows, key=lambda row: row.measurement.pull_in_s.value or 0.0)
    return (
        f"The longest of {len(rows)} pull-in times is "
        f"{quantity_text(longest.measurement.pull_in_s)} ({longest.point.names}); bars 95 %."
    )


def _variable_caption(run: SweepRun) -> str:
    rows = variable_rows(run)
    counts = style_counts(rows)
    styles = ", ".join(f"{counts[style]} {style}" for style in ("in-phase", "anti-phase", "offset"))
    name = one_line(run.plan.variable.name) if run.plan.variable else ""
    return (
        f"Phase, mean rate and coupling of {len(rows)} records against {name}; styles of their "
        f"longest locked stretches: {styles}; bars 95 %."
    )


def _steps_caption(run: SweepRun) -> str:
    rows = step_rows(run)
    orders = [f"{n}:{m}" for n, m in locked_orders(rows)]
    return (
        f"The frequency ratio of {len(rows)} records stands still where the pair is locked at "
        f"{', '.join(orders) or 'no order'}."
    )


def _limits_caption(run: SweepRun) -> str:
    words = [verdict.verdict for verdict in run.verdicts]
    counts = ", ".join(f"{words.count(word)} {word}" for word in ("pass", "fail", "undecided"))
    shown = len(drawn_verdicts(run))
    cut = f"; the first {ROWS_MOST} are drawn" if shown > ROWS_MOST else ""
    missing = len(words) - shown
    bare = f"; {missing} without a number not drawn" if missing else ""
    return f"Each value with its expanded uncertainty against its limits: {counts}{bare}{cut}."


def _record_caption(row: Row | None, lead: str) -> str:
    if row is None:
        return lead
    measurement = row.measurement
    episode = longest_episode(measurement)
    spread = f"{deg_from_rad(episode.spread_rad):.2g}° spread" if episode else "no locked stretch"
    share = f"{100 * measurement.decision.locked_fraction:.3g} %"
    return (
        f"{lead} {row.point.names}, {row.state}: locked {share} of {measurement.duration_s:g} s, "
        f"{len(measurement.slips)} slips, {spread}."
    )


def _stability_caption(run: SweepRun) -> str:
    free_runs = stable_runs(run)
    last = [free.allan[-1] for free in free_runs]
    worst = max(last, key=lambda row: row[1])
    return (
        f"Frequency stability of {len(free_runs)} free-running captures; at the longest averaging "
        f"time the largest deviation is {plain_number(worst[1], 2)} at {worst[0]:g} s."
    )


def _has_detuning(run: SweepRun) -> bool:
    return any(row.detuning_hz is not None for row in usable_rows(run))


def _has_locked_phase(run: SweepRun) -> bool:
    return any(row.detuning_hz is not None and row.state == "locked" for row in usable_rows(run))


def _has_residuals(run: SweepRun) -> bool:
    return bool(rate_residuals(run) or phase_residuals(run))


def _has_hysteresis(run: SweepRun) -> bool:
    entries = run.region.hysteresis if run.region else ()
    return any(entry.value_hz.value is not None for entry in entries)


def _coupling_caption(run: SweepRun) -> str:
    row = coupling_row(run)
    curve = curve_of(run, row) if row is not None else None
    if row is None or curve is None:
        return "No record shows its coupling function."
    inside = share_inside(row, curve)
    return (
        f"{row.point.names}, whose phase goes round nearest an edge: the fitted sine lies inside "
        f"the 95 % band of the curve without a model over {100 * inside:.0f} % of a turn."
    )


SKETCHES: dict[str, Sketch] = {
    "limits": Sketch(
        title="Limits", drawable=lambda run: bool(drawn_verdicts(run)), caption=_limits_caption
    ),
    "region": Sketch(
        title="Locking region",
        drawable=lambda run: bool(usable_rows(run)),
        caption=_region_caption,
    ),
    "staircase": Sketch(
        title="Mean rate against detuning", drawable=_has_detuning, caption=_staircase_caption
    ),
    "offset": Sketch(
        title="Phase offset across the range", drawable=_has_locked_phase, caption=_offset_caption
    ),
    "residuals": Sketch(title="Residuals", drawable=_has_residuals, caption=_residual_caption),
    "coupling": Sketch(
        title="Coupling function of one record",
        drawable=lambda run: (
            (row := coupling_row(run)) is not None and curve_of(run, row) is not None
        ),
        caption=_coupling_caption,
    ),
    "hysteresis": Sketch(
        title="Hysteresis of the edges", drawable=_has_hysteresis, caption=_hysteresis_caption
    ),
    "pull-in": Sketch(
        title="Pull-in time",
        drawable=lambda run: bool(pull_in_rows(run)),
        caption=_pull_in_caption,
    ),
    "variable": Sketch(
        title="Against the sweep variable",
        drawable=lambda run: bool(variable_rows(run)),
        caption=_variable_caption,
    ),
    "steps": Sketch(
        title="Steps of n:m locking",
        drawable=lambda run: bool(step_rows(run)),
        caption=_steps_caption,
    ),
    "worst": Sketch(
        title="The record that held lock worst",
        drawable=lambda run: worst_row(run) is not None,
        caption=lambda run: _record_caption(worst_row(run), "Most slips, then largest spread:"),
    ),
    "typical": Sketch(
        title="A typical locked record",
        drawable=lambda run: typical_row(run) is not None,
        caption=lambda run: _record_caption(typical_row(run), "Median spread:"),
    ),
    "stability": Sketch(
        title="Stability alone",
        drawable=lambda run: bool(stable_runs(run)),
        caption=_stability_caption,
    ),
}


def drawn_cards(run: SweepRun) -> dict[int, str]:
    """Return the key of the small picture of each point that has one, by the point's index."""
    return {row.index: card_key(row) for row in gallery_rows(run)}


def verdict_counts(verdicts: Sequence[Verdict]) -> str:
    """Return how many limits came out each way, naming those that did not pass."""
    parts = []
    for word in ("fail", "undecided", "pass"):
        names = [one.limit.name or one.limit.quantity for one in verdicts if one.verdict == word]
        if names:
            told = "" if word == "pass" else f" ({', '.join(map(one_line, names))})"
            parts.append(f"{len(names)} {word}{told}")
    return ", ".join(parts)
