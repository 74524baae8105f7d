"""What programs read: results of a capture and of a sweep as JSON, the points as CSV.

Field names are fixed (schemas in ``reports/schema/``); fields may be added within a version,
never renamed. Frequencies in Hz, times in s, angles in rad. A quantity is always an object
with value, u, unit and reason; there is no NaN.
"""

from __future__ import annotations

import math
from importlib.resources import files
from typing import Any

from fit.records import (
    AdequacyTest,
    AdlerEstimate,
    Episode,
    FreeRun,
    Hysteresis,
    LockingRegion,
    Measurement,
    RegionLevel,
    RoleSummary,
    SyncIndex,
)
from reports.limits import OVERALL_RULE
from reports.numbers import json_quantity
from reports.pointstable import points_csv
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

MEASUREMENT_SCHEMA = "lockspan.measurement/1.0"
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


def measurement_json(measurement: Measurement, sha256: str) -> dict[str, Any]:
    """Return the measurement of one capture as JSON holds it.

    Parameters
    ----------
    measurement : Measurement
    sha256 : str, digest of the capture, "" when it has none (a stream)
    """
    decision = measurement.decision
    return {
        "schema": MEASUREMENT_SCHEMA,
        "capture": _capture_json(measurement, sha256),
        "reference": _role_json(measurement.reference),
        "driven": _role_json(measurement.driven),
        "order": {
            "n": measurement.order.n,
            "m": measurement.order.m,
            "source": measurement.order.source,
        },
        "order_candidates": [
            {"n": n, "m": m, "score": _finite(score)}
            for n, m, score in measurement.order_candidates
        ],
        "state": decision.state,
        "state_reason": decision.reason,
        "state_notes": list(decision.notes),
        "locked_fraction": _finite(decision.locked_fraction),
        "hold_s": _finite(decision.hold_s),
        "episodes": [_episode_json(part) for part in measurement.episodes],
        "slips": [{"time_s": slip.time_s, "turns": slip.turns} for slip in measurement.slips],
        "mean_rate_hz": json_quantity(measurement.mean_rate_hz),
        "slip_rate_hz": json_quantity(measurement.slip_rate_hz),
        "jitter_rad": json_quantity(measurement.jitter_rad),
        "pull_in_s": json_quantity(measurement.pull_in_s),
        "adler": _adler_json(measurement.adler),
        "indices": [_index_json(index) for index in measurement.indices],
        "notes": list(measurement.notes),
    }


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


# ---- JSON of the parts -----------------------------------------------------------------------


def _capture_json(measurement: Measurement, sha256: str) -> dict[str, Any]:
    return {
        "path": measurement.path,
        "sha256": sha256,
        "format": measurement.format,
        "rate_hz": measurement.rate_hz,
        "duration_s": measurement.duration_s,
        "notes": list(measurement.capture_notes),
    }


def _episode_json(part: Episode) -> dict[str, Any]:
    return {
        "start_s": part.start_s,
        "stop_s": part.stop_s,
        "offset_rad": part.offset_rad,
        "offset_u_rad": part.offset_u_rad,
        "spread_rad": part.spread_rad,
        "style": part.style,
    }


def _index_json(index: SyncIndex) -> dict[str, Any]:
    return {
        "name": index.name,
        "value": _finite(index.value),
        "expected_free": _finite(index.expected_free),
        "p_value": _finite(index.p_value),
        "note": index.note,
    }


def _role_json(role: RoleSummary) -> dict[str, Any]:
    return {
        "channel": role.channel,
        "unit": role.unit,
        "frequency_hz": json_quantity(role.frequency_hz),
        "amplitude": json_quantity(role.amplitude),
        "snr_db": _finite(role.snr_db),
        "method": role.method,
        "notes": list(role.notes),
        "corrections": [
            {"name": name, "phase_rad": phase, "u_rad": u, "distribution": shape}
            for name, phase, u, shape in role.components
        ],
    }


def _adler_json(adler: AdlerEstimate) -> dict[str, Any]:
    return {
        "detuning_hz": json_quantity(adler.detuning_hz),
        "detuning_mean_hz": json_quantity(adler.detuning_mean_hz),
        "coupling_hz": json_quantity(adler.coupling_hz),
        "offset_rad": json_quantity(adler.offset_rad),
        "noise_rad2_s": json_quantity(adler.noise_rad2_s),
        "measurement_noise_rad": json_quantity(adler.measurement_noise_rad),
        "relaxation_rate_hz": json_quantity(adler.relaxation_rate_hz),
        "adequate": adler.adequate,
        "method": adler.method,
        "notes": list(adler.notes),
        "checks": [{"name": name, "value": json_quantity(value)} for name, value in adler.checks],
        "tests": [_test_json(test) for test in adler.tests],
    }


def _test_json(test: AdequacyTest) -> dict[str, Any]:
    return {
        "name": test.name,
        "statistic": _finite(test.statistic),
        "threshold": _finite(test.threshold),
        "fired": test.fired,
        "size": _finite(test.size),
        "effect": None if test.effect is None else json_quantity(test.effect),
        "meaning": test.meaning,
    }


def _point_json(point: PointResult) -> dict[str, Any]:
    """Return one row: its measurement where there is one, and the row's own fields."""
    measured = (
        {} if point.measurement is None else measurement_json(point.measurement, point.sha256)
    )
    return measured | {
        "file": point.file,
        "sha256": point.sha256,
        "drive_hz": point.drive_hz,
        "level": point.level,
        "direction": point.direction,
        "status": point.status,
        "message": point.message,
        "extras": dict(point.extras),
    }


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
            {"averaging_s": tau, "allan_deviation": _finite(value), "low": _finite(low),
             "high": _finite(high)}
            for tau, value, low, high in free.allan
        ],
        "notes": list(free.notes),
    }  # fmt: skip


def _region_json(region: LockingRegion) -> dict[str, Any]:
    return {
        "levels": [_level_json(level) for level in region.levels],
        "coupling_per_level": json_quantity(region.coupling_per_level),
        "level_power": json_quantity(region.level_power),
        "centre_hz": json_quantity(region.centre_hz),
        "centre_slope_hz": json_quantity(region.centre_slope_hz),
        "hysteresis": [_hysteresis_json(entry) for entry in region.hysteresis],
        "adler_holds": region.adler_holds,
        "tests": [_test_json(test) for test in region.tests],
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
        "p_value": _finite(entry.p_value),
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


def _finite(number: float | None) -> float | None:
    return number if number is not None and math.isfinite(number) else None
