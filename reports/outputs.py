"""What a run leaves behind: the report and its machine-readable companions, and a summary."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

from reports.content import build_content
from reports.exports import points_csv, sweep_json
from reports.folder import OUTPUT_FILES
from reports.junit import junit_xml
from reports.page import render_page
from reports.paper import render_paper
from reports.records import SweepRun
from reports.store import json_text, write_atomic
from reports.summaries import sweep_text

EXIT_DONE, EXIT_FAILED, EXIT_UNDECIDED, EXIT_PARTIAL = 0, 1, 4, 5


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RunOutcome:
    """A finished run with the text for the terminal and the exit code."""

    run: SweepRun
    text: str
    exit_code: int


def conclude(run: SweepRun, folder: Path) -> RunOutcome:
    """Write every output of a run and return its summary and exit code."""
    write_outputs(run, folder)
    return RunOutcome(run=run, text=sweep_text(run, folder), exit_code=run_exit_code(run))


def write_outputs(run: SweepRun, folder: Path) -> None:
    """Write results.json, points.csv, junit.xml, report.html and report.pdf.

    Everything is rendered before the first file is written, so that a fault in one of them
    leaves the old set whole.
    """
    content = build_content(run)
    rendered = {
        "results.json": json_text(sweep_json(run), indent=1).encode("utf-8"),
        "points.csv": points_csv(run).encode("utf-8"),
        "junit.xml": junit_xml(run).encode("utf-8"),
        "report.html": render_page(content, run).encode("utf-8"),
        "report.pdf": render_paper(content, run),
    }
    for name in OUTPUT_FILES:
        write_atomic(folder / name, rendered[name])


def run_exit_code(run: SweepRun) -> int:
    """Return the exit code of a judged run: failed limit, failed captures, undecided, done."""
    if run.verdict == "fail":
        return EXIT_FAILED
    if any(point.status in ("invalid", "crashed") for point in run.points):
        return EXIT_PARTIAL
    if run.verdict == "undecided" and run.verdicts:
        return EXIT_UNDECIDED
    return EXIT_DONE
