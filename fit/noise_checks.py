"""Estimates held against what their own equation predicts: rate, slips, spread, two numbers.

The laws are those of ``fit.noise_physics``; the two-number inversion finds detuning and
coupling anew from the mean rate and the resultant length alone, sharing nothing with the
likelihood. A disagreement beyond the stated number of standard errors becomes a note.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from fit.noise_physics import (
    effective_diffusion_rad2_s,
    invert_rate_and_length,
    mean_rate_rad_s,
    resultant_length,
    slip_rates,
)
from fit.records import AdlerEstimate, PsiSeries
from rig.angles import TURN_RAD, hz_from_rad_s, rad_s_from_hz
from rig.arrays import FloatArray
from rig.quantities import Quantity

AGREE = 3.5  # standard errors between record and prediction from which a note is made
LEAST_BEATS = 5.0
BATCHES = 10
# Variance of an angle spread evenly over a turn: how far the ends of a record may lie off.
EVEN_VARIANCE = math.pi**2 / 3.0


@dataclass(frozen=True, slots=True, kw_only=True)
class _Pair:
    """Fitted pair in rad/s, rad^2/s, and the record's length."""

    detuning: float
    coupling: float
    diffusion: float
    noise_rad: float
    duration_s: float


def with_checks(series: PsiSeries, estimate: AdlerEstimate) -> AdlerEstimate:
    """Return the estimate with its cross-checks and a note for each that disagrees.

    Parameters
    ----------
    series : PsiSeries
    estimate : AdlerEstimate

    Returns
    -------
    AdlerEstimate
        Unchanged where detuning, coupling or noise is not determined. Checks added: "mean
        rate predicted" (its u is that of a record of this length), "effective diffusion
        predicted", "resultant length predicted", "slips forward predicted" and "slips
        backward predicted" inside the locking region, and "detuning by rate and length" and
        "coupling by rate and length" for pairs that drift.
    """
    pair = _pair_of(series, estimate)
    if pair is None or not series.duration_s > 0.0:
        return estimate
    checks, notes = _predicted(series, pair)
    inverted, more = _inverted(series, pair)
    return replace(
        estimate,
        checks=estimate.checks + tuple(checks + inverted),
        notes=estimate.notes + tuple(notes + more),
    )


def _pair_of(series: PsiSeries, estimate: AdlerEstimate) -> _Pair | None:
    """Return the fitted pair, None where the record does not determine it."""
    detuning, coupling = estimate.detuning_hz.value, estimate.coupling_hz.value
    diffusion = estimate.noise_rad2_s.value
    if detuning is None or coupling is None or not diffusion or not coupling > 0.0:
        return None
    return _Pair(
        detuning=rad_s_from_hz(detuning),
        coupling=rad_s_from_hz(coupling),
        diffusion=diffusion,
        noise_rad=estimate.measurement_noise_rad.value or 0.0,
        duration_s=series.duration_s,
    )


def _predicted(series: PsiSeries, pair: _Pair) -> tuple[list[tuple[str, Quantity]], list[str]]:
    """Return what the equation predicts for this record, and where the record differs."""
    law = (pair.detuning, pair.coupling, pair.diffusion)
    spread, length = effective_diffusion_rad2_s(*law), resultant_length(*law)
    ends = 2.0 * EVEN_VARIANCE * length**2 / pair.duration_s**2
    rate = mean_rate_rad_s(*law)
    u = math.sqrt(2.0 * spread / pair.duration_s + ends)
    checks = [
        ("mean rate predicted", _plain(hz_from_rad_s(rate), hz_from_rad_s(u), "Hz")),
        ("effective diffusion predicted", Quantity(value=spread, u=None, unit="rad2/s")),
        ("resultant length predicted", Quantity(value=length, u=None, unit="1")),
    ]
    if abs(pair.detuning) < pair.coupling:
        slips = slip_rates(*law)
        for word, value in (("forward", slips.forward_hz), ("backward", slips.backward_hz)):
            seen_u = math.sqrt(value / pair.duration_s)
            checks.append((f"slips {word} predicted", _plain(value, seen_u, "Hz")))
    moved = math.fsum(part[-1] - part[0] for part in series.segments if part.size)
    seen = moved / pair.duration_s
    away = abs(seen - rate) / u
    notes = []
    if away > AGREE:
        notes.append(
            f"mean rate {hz_from_rad_s(seen):.4g} Hz lies {away:.1f} standard errors from the "
            f"{hz_from_rad_s(rate):.4g} Hz that the fitted equation predicts"
        )
    return checks, notes


def _plain(value: float, u: float, unit: str) -> Quantity:
    """Return value and standard error with the normal 95 % interval."""
    low, high = value - 1.96 * u, value + 1.96 * u
    return Quantity(value=value, u=u, unit=unit, low=low, high=high, level=0.95)


def _inverted(series: PsiSeries, pair: _Pair) -> tuple[list[tuple[str, Quantity]], list[str]]:
    """Return detuning and coupling from mean rate and resultant length of whole beats."""
    longest = max(series.segments, key=lambda part: part.size)
    batches = _whole_beats(longest, series.step_s)
    if batches is None or not abs(pair.detuning) > pair.coupling:
        return [], []
    damping = math.exp(0.5 * min(pair.noise_rad, 1.0) ** 2)
    whole = _numbers(batches, damping)
    found = invert_rate_and_length(*whole, pair.diffusion)
    if found is None:
        return [], []
    left = np.array([_numbers(np.delete(batches, k, axis=0), damping) for k in range(len(batches))])
    share = (len(batches) - 1.0) / len(batches)
    covariance = share * (left - left.mean(axis=0)).T @ (left - left.mean(axis=0))
    slope = np.zeros((2, 2))
    for column, step in enumerate((1e-4 * whole[0], 1e-4 * whole[1])):
        moved = list(whole)
        moved[column] += step
        ahead = invert_rate_and_length(moved[0], moved[1], pair.diffusion)
        if ahead is None:
            return [], []
        slope[:, column] = (np.array(ahead) - np.array(found)) / step
    u = np.sqrt(np.maximum(np.diag(slope @ covariance @ slope.T), 0.0))
    fitted = (pair.detuning, pair.coupling)
    checks, notes = [], []
    for name, value, error, other in zip(("detuning", "coupling"), found, u, fitted, strict=True):
        quantity = _plain(hz_from_rad_s(value), hz_from_rad_s(float(error)), "Hz")
        checks.append((f"{name} by rate and length", quantity))
        if abs(value - other) > AGREE * float(error) > 0.0:
            notes.append(
                f"{name} from mean rate and resultant length alone is {hz_from_rad_s(value):.4g} "
                f"Hz, {abs(value - other) / float(error):.1f} standard errors off"
            )
    return checks, notes


def _whole_beats(psi_rad: FloatArray, step_s: float) -> FloatArray | None:
    """Return (turn in rad, time in s, sum cos, sum sin) of batches of whole beats, (B, 4)."""
    if psi_rad.size < 2:
        return None
    sign = 1.0 if psi_rad[-1] >= psi_rad[0] else -1.0
    turns = sign * (psi_rad - psi_rad[0]) / TURN_RAD
    beats = math.floor(turns[-1])
    if beats < LEAST_BEATS:
        return None
    count = min(BATCHES, beats)
    goals = np.floor(np.arange(count + 1) * beats / count)
    # The last passage of each goal: noise may cross it several times.
    highest = np.minimum.accumulate(turns[::-1])[::-1]
    at = np.searchsorted(highest, goals)
    sums = np.concatenate(
        [[[0.0], [0.0]], np.cumsum([np.cos(psi_rad), np.sin(psi_rad)], axis=1)], axis=1
    )
    rows = [
        (
            sign * TURN_RAD * (goals[k + 1] - goals[k]),
            (at[k + 1] - at[k]) * step_s,
            sums[0, at[k + 1]] - sums[0, at[k]],
            sums[1, at[k + 1]] - sums[1, at[k]],
        )
        for k in range(count)
        if at[k + 1] > at[k]
    ]
    return np.array(rows) * np.array([1.0, 1.0, step_s, step_s]) if len(rows) > 2 else None


def _numbers(batches: FloatArray, damping: float) -> tuple[float, float]:
    """Return (mean rate, resultant length) of batches."""
    turn, time_s, cosine, sine = batches.sum(axis=0)
    length = damping * math.hypot(cosine, sine) / time_s
    return turn / time_s, min(max(length, 1e-6), 1.0 - 1e-6)
