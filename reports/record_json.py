"""What programs read of one capture: its measurement as JSON; see ``reports.exports``."""

from __future__ import annotations

import math
from typing import Any

from fit.records import (
    AdequacyTest,
    AdlerEstimate,
    Episode,
    Measurement,
    RoleSummary,
    SyncIndex,
)
from reports.numbers import json_quantity

MEASUREMENT_SCHEMA = "lockspan.measurement/1.0"


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
            {"n": n, "m": m, "score": finite_or_none(score)}
            for n, m, score in measurement.order_candidates
        ],
        "state": decision.state,
        "state_reason": decision.reason,
        "state_notes": list(decision.notes),
        "locked_fraction": finite_or_none(decision.locked_fraction),
        "hold_s": finite_or_none(decision.hold_s),
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
        "value": finite_or_none(index.value),
        "expected_free": finite_or_none(index.expected_free),
        "p_value": finite_or_none(index.p_value),
        "note": index.note,
    }


def _role_json(role: RoleSummary) -> dict[str, Any]:
    return {
        "channel": role.channel,
        "unit": role.unit,
        "frequency_hz": json_quantity(role.frequency_hz),
        "amplitude": json_quantity(role.amplitude),
        "snr_db": finite_or_none(role.snr_db),
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
        "tests": [json_test(test) for test in adler.tests],
    }


def json_test(test: AdequacyTest) -> dict[str, Any]:
    """Return an adequacy test as JSON holds it."""
    return {
        "name": test.name,
        "statistic": finite_or_none(test.statistic),
        "threshold": finite_or_none(test.threshold),
        "fired": test.fired,
        "size": finite_or_none(test.size),
        "effect": None if test.effect is None else json_quantity(test.effect),
        "meaning": test.meaning,
    }


def finite_or_none(number: float | None) -> float | None:
    """Return a number, None where it is not finite: JSON has no sign for it."""
    return number if number is not None and math.isfinite(number) else None
