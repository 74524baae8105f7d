"""What the terminal shows of a run: plain lines, aligned."""

from __future__ import annotations

from pathlib import Path

from reports.content_limits import limit_text, verdict_value
from reports.numbers import one_line, quantity_text
from reports.paper_units import paper_verdict
from reports.records import SweepRun, Verdict
from rig.quantities import Quantity

_LABEL = 18
BAD_MOST = 20  # a screenful; the files hold them all


def sweep_text(run: SweepRun, folder: Path) -> str:
    """Return the summary of a run: region, limits, verdict, and where the report is."""
    lines = [*_region_lines(run), *_limit_lines(run), *_bad_lines(run)]
    lines += [f"verdict: {run.verdict}" if run.verdicts else "verdict: no limits stated"]
    lines += [f"report:  {folder / 'report.html'}", f"         {folder / 'report.pdf'}"]
    return "\n".join(lines) + "\n"


def _region_lines(run: SweepRun) -> list[str]:
    """Return one line per level and direction."""
    if run.region is None:
        return ["locking region: cannot be mapped from these captures"]
    unit = run.plan.level.unit
    lines = ["locking range (± is one standard uncertainty, k = 1)"]
    for level in run.region.levels:
        way = "" if level.direction == "none" else level.direction
        name = f"  {level.level:g} {unit} {way}".ljust(_LABEL)
        lines.append(name + range_text(level.lower_hz, level.upper_hz, level.width_hz))
    return lines


def range_text(lower: Quantity, upper: Quantity, width: Quantity) -> str:
    """Return edges and width on one line; a reason that all three share is given once."""
    texts = [quantity_text(part) for part in (lower, upper, width)]
    if len(set(texts)) == 1 and width.value is None:
        return texts[0]
    return f"{texts[0]} to {texts[1]}, width {texts[2]}"


def _limit_lines(run: SweepRun) -> list[str]:
    lines = ["limits (± is the expanded uncertainty U)"] if run.verdicts else []
    for verdict in map(paper_verdict, run.verdicts):
        limit = verdict.limit
        name = one_line(limit.name or limit.quantity)
        wanted = (
            "wanted: " + one_line(limit.wanted) if limit.wanted else "limit: " + limit_text(limit)
        )
        lines.append(f"  {verdict.verdict:<10}{name}: {_value_text(verdict)}; {wanted}")
        if verdict.verdict != "pass":
            lines.append(f"  {'':<10}{one_line(verdict.reason)}")
    return lines


def _value_text(verdict: Verdict) -> str:
    """Return the judged value with U and k, or the whole reason why there is none."""
    if verdict.text_value is None and verdict.value.value is None:
        return quantity_text(verdict.value)
    factor = f" (k = {verdict.coverage_factor:g})" if verdict.expanded_u else ""
    return verdict_value(verdict) + factor


def _bad_lines(run: SweepRun) -> list[str]:
    """Return a line for each capture that could not be analysed, and their count first."""
    bad = [point for point in run.points if point.status in ("invalid", "crashed")]
    notes = [f"note: {one_line(note)}" for note in run.notes]
    if not bad:
        return notes
    head = f"{len(bad)} of {len(run.points)} captures not analysed"
    told = [f"  {one_line(point.message)}" for point in bad[:BAD_MOST]]
    if len(bad) > BAD_MOST:
        told.append(f"  and {len(bad) - BAD_MOST} more: results.json and points.csv have them all")
    return [head, *told, *notes]
