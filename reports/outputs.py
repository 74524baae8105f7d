"""What a run leaves behind: the report and its machine-readable companions, and a summary."""

from __future__ import annotations

import os
from concurrent.futures.process import BrokenProcessPool
from dataclasses import dataclass
from pathlib import Path

from reports.content import build_content
from reports.content_model import ReportContent
from reports.executors import spawn_pool
from reports.exports import points_csv, sweep_json
from reports.folder import OUTPUT_FILES
from reports.junit import junit_xml
from reports.page import render_page
from reports.paper import render_paper
from reports.records import SweepRun
from reports.store import json_text, write_atomic
from reports.summaries import sweep_text

FEWEST_BESIDE = 20  # pictures of a report from which a second process has its start repaid
EXIT_DONE, EXIT_FAILED, EXIT_UNDECIDED, EXIT_PARTIAL = 0, 1, 4, 5


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RunOutcome:
    """A finished run with the text for the terminal and the exit code."""

    run: SweepRun
    text: str
    exit_code: int


def conclude(run: SweepRun, folder: Path, workers: int | None = None) -> RunOutcome:
    """Write every output of a run and return its summary and exit code.

    Parameters
    ----------
    run : SweepRun
    folder : path
    workers : int or None, processes wanted; None takes as many as there are cores
    """
    write_outputs(run, folder, workers)
    return RunOutcome(run=run, text=sweep_text(run, folder), exit_code=run_exit_code(run))


def write_outputs(run: SweepRun, folder: Path, workers: int | None = None) -> None:
    """Write results.json, points.csv, junit.xml, report.html and report.pdf.

    Everything is rendered before the first file is written, so that a fault in one of them
    leaves the old set whole.
    """
    content = build_content(run)
    page, paper = _rendered(content, run, workers or os.cpu_count() or 1)
    rendered = {
        "results.json": json_text(sweep_json(run), indent=1).encode("utf-8"),
        "points.csv": points_csv(run).encode("utf-8"),
        "junit.xml": junit_xml(run).encode("utf-8"),
        "report.html": page.encode("utf-8"),
        "report.pdf": paper,
    }
    for name in OUTPUT_FILES:
        write_atomic(folder / name, rendered[name])


def _rendered(content: ReportContent, run: SweepRun, workers: int) -> tuple[str, bytes]:
    """Return page and paper; the page is drawn in a process beside the paper where it pays."""
    if workers < 2 or len(content.figure_keys()) < FEWEST_BESIDE:
        return render_page(content, run), render_paper(content, run)
    pool = spawn_pool(1)
    try:
        page = pool.submit(render_page, content, run)
        paper = render_paper(content, run)
        return page.result(), paper
    except BrokenProcessPool:
        # Killed from outside, for memory perhaps: what it did is done here.
        return render_page(content, run), render_paper(content, run)
    finally:
        pool.shutdown(wait=False, cancel_futures=True)


def run_exit_code(run: SweepRun) -> int:
    """Return the exit code of a judged run: failed limit, failed captures, undecided, done."""
    if run.verdict == "fail":
        return EXIT_FAILED
    if any(point.status in ("invalid", "crashed") for point in run.points):
        return EXIT_PARTIAL
    if run.verdict == "undecided" and run.verdicts:
        return EXIT_UNDECIDED
    return EXIT_DONE
