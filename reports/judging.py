"""From measured rows to a judged run: region, verdicts, and what a reader must be told."""

from __future__ import annotations

from collections.abc import Sequence

from fit.records import FreeRun
from reports.limits import judge_limits, overall_verdict, read_limits
from reports.records import PointResult, Provenance, SweepRun
from reports.regions import drive_mismatch, map_region
from rig.sweepfile import SweepPlan


def judge_run(
    plan: SweepPlan,
    points: tuple[PointResult, ...],
    free_runs: tuple[FreeRun, ...],
    provenance: Provenance,
    notes: Sequence[str],
) -> SweepRun:
    """Return the run with its region mapped and its limits judged.

    Raises
    ------
    LimitError
        If a limit of the sweep file is stated so that no verdict can follow.
    """
    limits = read_limits(plan.limits, plan.path)
    region = map_region(plan, points)
    verdicts = judge_limits(limits, region=region, points=points, free_runs=free_runs, plan=plan)
    kept = [note for note in notes if not note.endswith("the measured one is used")]
    mismatches = [line for row in points if (line := drive_mismatch(row)) is not None]
    return SweepRun(
        plan=plan,
        points=points,
        free_runs=free_runs,
        region=region,
        verdicts=verdicts,
        verdict=overall_verdict(verdicts),
        provenance=provenance,
        notes=tuple(kept + mismatches),
    )
