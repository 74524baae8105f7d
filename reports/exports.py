"""What programs read: results of a capture and of a sweep as JSON, the points as CSV.

Field names are fixed (schemas in ``reports/schema/``); fields may be added within a version,
never renamed. Frequencies in Hz, times in s, angles in rad. A quantity is always an object
with value, u, unit and reason; there is no NaN.
"""

from __future__ import annotations

from importlib.resources import files
from typing import Any

from fit.records import FreeRun, Hysteresis, LockingRegion, RegionLevel
from reports.limits import OVERALL_RULE
from reports.numbers import json_quantity
from reports.pointstable import points_csv
from reports.record_json import MEASUREMENT_SCHEMA, finite_or_none, json_test, measurement_json
from reports.records import BudgetLine, Limit, PointResult, Provenance, SweepRun, Verdict

__all__ = [
    "MEASUREMENT_SCHEMA",
    "SCHEMA_FILES",
    "SWEEP_SCHEMA",
    "measurement_json",
    "points_csv",
    "schema_text",
    "sweep_json",
]

SWEEP_SCHEMA = "lockspan.sweep/1.0"
SCHEMA_FILES = {
    MEASUREMENT_SCHEMA: "lockspan.measurement-1.0.json",
    SWEEP_SCHEMA: "lockspan.sweep-1.0.json",
}


def schema_text(name: str) -> str:
    """Return the JSON Schema (draft 2020-12) of a result by its schema name.

    Raises
    ------
    KeyError
        If no result has this schema name.
    """
    return files("reports").joinpath("schema", SCHEMA_FILES[name]).read_text(encoding="utf-8")


def sweep_json(run: SweepRun) -> dict[str, Any]:
    """Return a whole run as results.json holds it.

    Parameters
    ----------
    run : SweepRun
    """
    plan = run.plan
    return {
        "schema": SWEEP_SCHEMA,
        "item": dict(plan.item),
        "lab": dict(plan.lab),
        "coupling": plan.coupling,
        "order": None if plan.order is None else {"n": plan.order[0], "m": plan.order[1]},
        "level_name": plan.level.name,
        "level_unit": plan.level.unit,
        "level_kind": plan.level.kind,
        "points": [_point_json(point) for point in run.points],
        "free_running": [_free_run_json(free) for free in run.free_runs],
        "region": None if run.region is None else _region_json(run.region),
        "limits": [_limit_json(verdict) for verdict in run.verdicts],
        "verdict": run.verdict,
        "verdict_rule": OVERALL_RULE,
        "provenance": _provenance_json(run.provenance, plan.text_sha256),
        "notes": [*plan.notes, *run.notes],
    }


def _point_json(point: PointResult) -> dict[str, Any]:
    """Return one row: its measurement where there is one, and the row's own fields."""
    measured = (
        {} if point.measurement is None else measurement_json(point.measurement, point.sha256)
    )
    second = (
        {"driven_file": point.driven_file, "driven_sha256": point.driven_sha256}
        if point.driven_file
        else {}
    )
    return (
        measured
        | second
        | {
            "file": point.file,
            "sha256": point.sha256,
            "drive_hz": point.drive_hz,
            "level": point.level,
            "direction": point.direction,
            "status": point.status,
            "message": point.message,
            "extras": dict(point.extras),
        }
    )


def _free_run_json(free: FreeRun) -> dict[str, Any]:
    return {
        "role": free.role,
        "file": free.file,
        "duration_s": free.duration_s,
        "frequency_hz": json_quantity(free.frequency_hz),
        "drift_hz_s": json_quantity(free.drift_hz_s),
        "noise_rad2_s": json_quantity(free.noise_rad2_s),
        "noise_type": free.noise_type,
        "stability": [
            {
                "averaging_s": tau,
                "allan_deviation": finite_or_none(value),
                "low": finite_or_none(low),
                "high": finite_or_none(high),
            }
            for tau, value, low, high in free.allan
        ],
        "notes": list(free.notes),
    }


def _region_json(region: LockingRegion) -> dict[str, Any]:
    return {
        "levels": [_level_json(level) for level in region.levels],
        "coupling_per_level": json_quantity(region.coupling_per_level),
        "level_power": json_quantity(region.level_power),
        "centre_hz": json_quantity(region.centre_hz),
        "centre_slope_hz": json_quantity(region.centre_slope_hz),
        "hysteresis": [_hysteresis_json(entry) for entry in region.hysteresis],
        "adler_holds": region.adler_holds,
        "tests": [json_test(test) for test in region.tests],
        "notes": list(region.notes),
    }


def _level_json(level: RegionLevel) -> dict[str, Any]:
    more = ("beat_lower_hz", "beat_upper_hz", "noise_rad2_s", "offset_slope_rad_hz")
    known = {name: getattr(level, name) for name in more}
    return {
        **{name: json_quantity(value) for name, value in known.items() if value is not None},
        "level": level.level,
        "amplitude": level.amplitude,
        "direction": level.direction,
        "interval": level.interval,
        "lower_hz": json_quantity(level.lower_hz),
        "upper_hz": json_quantity(level.upper_hz),
        "width_hz": json_quantity(level.width_hz),
        "coupling_hz": json_quantity(level.coupling_hz),
        "offset_rad": json_quantity(level.offset_rad),
        "method": level.method,
        "bracket_lower_hz": json_quantity(level.bracket_lower_hz),
        "bracket_upper_hz": json_quantity(level.bracket_upper_hz),
        "notes": list(level.notes),
    }


def _hysteresis_json(entry: Hysteresis) -> dict[str, Any]:
    return {
        "level": entry.level,
        "edge": entry.edge,
        "value_hz": json_quantity(entry.value_hz),
        "p_value": finite_or_none(entry.p_value),
        "note": entry.note,
    }


def _limit_json(verdict: Verdict) -> dict[str, Any]:
    return {
        **_limit_fields(verdict.limit),
        "value": json_quantity(verdict.value),
        "text_value": verdict.text_value,
        "expanded_u": verdict.expanded_u,
        "coverage_factor": verdict.coverage_factor,
        "probability_met": verdict.probability_met,
        "verdict": verdict.verdict,
        "reason": verdict.reason,
        "budget": [_budget_json(line) for line in verdict.budget],
        "left_out": list(verdict.left_out),
    }


def _limit_fields(limit: Limit) -> dict[str, Any]:
    return {
        "name": limit.name,
        "quantity": limit.quantity,
        "lower": limit.lower,
        "upper": limit.upper,
        "wanted": limit.wanted,
        "unit": limit.unit,
        "circular": limit.circular,
        "rule": limit.rule,
        "guard_width": limit.guard_width,
        "risk": limit.risk,
        "level": limit.level,
        "direction": limit.direction,
        "drive_from_hz": limit.drive_from_hz,
        "drive_to_hz": limit.drive_to_hz,
        "file": limit.file,
        "averaging_s": limit.averaging_s,
    }


def _budget_json(line: BudgetLine) -> dict[str, Any]:
    return {
        "source": line.source,
        "u": line.u,
        "unit": line.unit,
        "distribution": line.distribution,
        "sensitivity": line.sensitivity,
        "contribution": line.contribution,
        "note": line.note,
    }


def _provenance_json(provenance: Provenance, sweep_sha256: str) -> dict[str, Any]:
    return {
        "version": provenance.version,
        "date": provenance.date_text,
        "packages": dict(provenance.packages),
        "sweep_sha256": sweep_sha256,
        "inputs": [
            {"file": one.file, "sha256": one.sha256, "size_bytes": one.size_bytes}
            for one in provenance.inputs
        ],
        "settings": dict(provenance.settings),
        "seed": provenance.seed,
    }
