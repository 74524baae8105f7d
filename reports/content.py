"""What a report says, free of any format: sections, tables, captions, statements.

The order is that of a reader: the verdict with its limits and the region first, then what was
tested and how, then every number behind it, then how to check it again. Renderers are
``reports.page`` (HTML) and ``reports.paper`` (PDF); standing texts are in
``reports.content_method``, the particulars in ``reports.content_fields``.
"""

from __future__ import annotations

from reports.content_fields import (
    NOT_STATED,
    channel_table,
    instrument_blocks,
    issue_date,
    item_fields,
    lab_fields,
    signatures,
    stated,
)
from reports.content_figures import (
    drawn_cards,
    figure_block,
    gallery_block,
    gallery_remark,
    verdict_counts,
)
from reports.content_limits import budget_table, limit_table, verdict_reasons
from reports.content_method import (
    cautions,
    decision_blocks,
    definition_fields,
    method_blocks,
    statements,
)
from reports.content_model import (
    Block,
    Bullets,
    Paragraph,
    ReportContent,
    Section,
    Table,
    VerdictLine,
)
from reports.content_points import (
    bad_points,
    estimates_table,
    free_table,
    inputs_table,
    named_rows,
    points_table,
    rows_remark,
    stability_table,
)
from reports.content_region import (
    adler_sentence,
    bracket_table,
    hysteresis_table,
    law_table,
    region_notes,
    region_table,
    tests_table,
)
from reports.figures.timing import stable_runs
from reports.numbers import one_line
from reports.records import SweepRun
from reports.rows import usable_rows

DEFAULT_TITLE = "Report of a locking test"
END = "End of the report."
EDGES_BY_DIRECTION = (
    "With the drive going up, the lower edge is met from outside (pull-in) and the upper edge from "
    "inside (hold-in); with the drive going down it is the other way round."
)


def build_content(run: SweepRun) -> ReportContent:
    """Return everything the report of a run says.

    Parameters
    ----------
    run : SweepRun, finished and judged

    Returns
    -------
    ReportContent, equal for equal runs
    """
    title = stated(run.plan.lab, "title")
    return ReportContent(
        title=DEFAULT_TITLE if title == NOT_STATED else title,
        subtitle=stated(run.plan.item, "description"),
        report_id=stated(run.plan.lab, "report_id"),
        revision=stated(run.plan.lab, "revision"),
        date_text=issue_date(run),
        verdict=run.verdict,
        sections=tuple(
            Section(key=key, title=heading, blocks=tuple(blocks))
            for key, heading, blocks in _sections(run)
            if blocks
        ),
    )


def _sections(run: SweepRun) -> list[tuple[str, str, list[Block]]]:
    return [
        ("verdict", "Verdict", _verdict(run)),
        ("particulars", "Item, laboratory, customer", _particulars(run)),
        ("cautions", "Cautions", cautions()),
        ("method", "Method", _method(run)),
        ("decision", "Decision rules", _decision(run)),
        ("definitions", "Words used", [definition_fields()]),
        ("region", "Locking range", _region(run)),
        ("points", "Points across the detuning", _points(run)),
        ("records", "Records", _records(run)),
        ("alone", "Each oscillator alone", _alone(run)),
        ("uncertainty", "Uncertainty", _uncertainty(run)),
        ("left-out", "What was left out", _left_out(run)),
        ("statements", "Statements and signatures", [statements(), signatures(run)]),
        ("provenance", "How to check this again", _provenance(run)),
    ]


def _verdict(run: SweepRun) -> list[Block]:
    blocks: list[Block] = [VerdictLine(word=run.verdict, sentence=_verdict_sentence(run))]
    if run.verdicts:
        blocks += [limit_table(run), verdict_reasons(run)]
    if run.region is not None:
        blocks.append(Paragraph(text=adler_sentence(run.region)))
    if run.verdicts:
        blocks += figure_block(run, "limits")
    return [*blocks, *figure_block(run, "region")]


def _verdict_sentence(run: SweepRun) -> str:
    usable = len(usable_rows(run))
    base = f"{usable} of {len(run.points)} captures gave a measurement."
    if not run.verdicts:
        return f"No limit was stated, so none was judged. {base}"
    limits = "1 limit" if len(run.verdicts) == 1 else f"{len(run.verdicts)} limits"
    return f"{limits} judged: {verdict_counts(run.verdicts)}. {base}"


def _particulars(run: SweepRun) -> list[Block]:
    return [item_fields(run), lab_fields(run), *instrument_blocks(run), channel_table(run)]


def _method(run: SweepRun) -> list[Block]:
    blocks = method_blocks(run)
    deviations = stated(run.plan.lab, "deviations")
    conditions = stated(run.plan.lab, "environment")
    return [
        *blocks,
        Paragraph(text=f"Conditions during the work: {_closed(conditions)}"),
        Paragraph(text=f"Deviations, additions and exclusions: {_closed(deviations)}"),
    ]


def _closed(text: str) -> str:
    return text if text.endswith((".", "!", "?")) else f"{text}."


def _decision(run: SweepRun) -> list[Block]:
    return decision_blocks(run)


def _region(run: SweepRun) -> list[Block]:
    region = run.region
    if region is None:
        return [Paragraph(text="The points of this run do not give a locking range.")]
    blocks: list[Block] = [Paragraph(text=adler_sentence(region), tone="lead")]
    blocks.append(region_table(run))
    if {"up", "down"} <= {entry.direction for entry in region.levels}:
        blocks.append(Paragraph(text=EDGES_BY_DIRECTION))
    blocks.append(law_table(run))
    if region.hysteresis:
        blocks += [hysteresis_table(run), *figure_block(run, "hysteresis")]
    if region.tests:
        blocks.append(tests_table(run))
    blocks.append(bracket_table(run))
    return [*blocks, *_notes(region_notes(run))]


def _points(run: SweepRun) -> list[Block]:
    pictures = [
        block
        for key in ("variable", "steps", "staircase", "pull-in", "offset", "residuals", "coupling")
        for block in figure_block(run, key)
    ]
    if not usable_rows(run):
        return []
    remark = rows_remark(run)
    told: list[Block] = [Paragraph(text=remark)] if remark else []
    return [*pictures, *told, points_table(run, drawn_cards(run)), estimates_table(run)]


def _records(run: SweepRun) -> list[Block]:
    if not usable_rows(run):
        return []
    return [
        *figure_block(run, "worst"),
        *figure_block(run, "typical"),
        Paragraph(text=gallery_remark(run)),
        *gallery_block(run),
    ]


def _alone(run: SweepRun) -> list[Block]:
    if not run.free_runs:
        return [Paragraph(text="No free-running capture was stated.")]
    tables = [stability_table(free) for free in stable_runs(run)]
    notes = [f"{free.file or free.role}: {note}" for free in run.free_runs for note in free.notes]
    return [free_table(run), *figure_block(run, "stability"), *tables, *_notes(notes)]


def _uncertainty(run: SweepRun) -> list[Block]:
    unit = run.plan.level.unit
    budgets: list[Block] = [budget_table(one, unit) for one in run.verdicts if one.budget]
    left_out = dict.fromkeys(text for one in run.verdicts for text in one.left_out)
    lead = Paragraph(
        text="Standard uncertainties hold the noise of the records with its correlation in time; "
        "the budgets add sensors, clock, drift and repeatability, combined as in the Guide to the "
        "expression of uncertainty in measurement (JCGM 100:2008)."
    )
    blocks: list[Block] = [lead, *budgets]
    if left_out:
        blocks += [Paragraph(text="Not included:"), Bullets(items=tuple(map(one_line, left_out)))]
    return blocks


def _left_out(run: SweepRun) -> list[Block]:
    blocks: list[Block] = []
    if any(point.measurement is None for point in run.points):
        blocks.append(bad_points(run))
    else:
        blocks.append(Paragraph(text="Every capture gave a measurement."))
    return [*blocks, *_notes([*run.notes, *run.plan.notes]), *_record_notes(run)]


def _record_notes(run: SweepRun) -> list[Block]:
    """Return what was noted about single records, each note once with the captures it concerns."""
    concerned: dict[str, list[str]] = {}
    for row in usable_rows(run):
        measurement = row.measurement
        for note in (*measurement.capture_notes, *measurement.notes, *measurement.decision.notes):
            concerned.setdefault(one_line(note), []).append(row.point.names)
    pairs = [(note, _some(files)) for note, files in concerned.items()]
    if not pairs:
        return []
    return [named_rows("Notes on records", ("Note", "Captures"), pairs)]


def _some(files: list[str]) -> str:
    shown = ", ".join(dict.fromkeys(files[:3]))
    return shown if len(files) <= 3 else f"{shown} and {len(files) - 3} more"


def _notes(notes: list[str]) -> list[Block]:
    texts = tuple(dict.fromkeys(one_line(note) for note in notes))
    return [Bullets(items=texts, tone="note")] if texts else []


def _provenance(run: SweepRun) -> list[Block]:
    made = run.provenance
    program = [("lockspan", made.version), *made.packages, ("seed", str(made.seed))]
    blocks: list[Block] = [
        Paragraph(
            text="The same inputs, settings and versions give the same report, byte for byte. The "
            "command 'lockspan verify' on the folder of this run recomputes the digests below "
            "and judges again."
        ),
        named_rows("Program and packages", ("Name", "Version"), program),
    ]
    settings = [
        (name, "not set" if value == "null" else value)
        for name, value in made.settings
        if value != run.plan.text_sha256
    ]
    if settings:
        blocks.append(named_rows("Settings", ("Name", "Value"), settings))
    digest = run.plan.text_sha256 or NOT_STATED
    blocks.append(Paragraph(text=f"Sweep file {run.plan.path}, SHA-256 {digest}."))
    table: Table = inputs_table(run)
    return [*blocks, *([table] if table.rows else []), Paragraph(text=END, tone="lead")]
