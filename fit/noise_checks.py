"""Estimates held against what their own equation predicts: rate, slips, spread.

The laws are those of ``fit.noise_physics``. A disagreement beyond 3.5 standard errors, with
the record or with an independent estimate (``fit.two_number``), becomes a note.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

from fit.adequacy_tests import WHITENESS
from fit.difference import RELIABLE_SLIPS_DB
from fit.lanes import MOST_LOST
from fit.noise_physics import (
    effective_diffusion_rad2_s,
    mean_rate_rad_s,
    resultant_length,
    slip_rates,
)
from fit.records import AdlerEstimate, Measurement, PsiSeries
from rig.angles import hz_from_rad_s, rad_s_from_hz
from rig.quantities import Quantity, undetermined

AGREE = 3.5  # standard errors between record and prediction from which a note is made
# Measurement noise, as a share of what D adds in one step, from which coloured innovations
# may be made of it. The amplitude noise of an oscillator itself stays below.
HIDING_SHARE = 0.1
# Variance of an angle spread evenly over a turn: how far the ends of a record may lie off.
EVEN_VARIANCE = math.pi**2 / 3.0


@dataclass(frozen=True, slots=True, kw_only=True)
class _Pair:
    """Fitted pair in rad/s, rad^2/s, and the record's length."""

    detuning: float
    coupling: float
    diffusion: float
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
        predicted", "resultant length predicted", and inside the locking region "slips
        forward predicted" and "slips backward predicted". Estimates of detuning or coupling
        by other means that the checks hold already are compared with the fit.
    """
    pair = _pair_of(series, estimate)
    if pair is None or not series.duration_s > 0.0:
        return estimate
    checks, notes = _predicted(series, pair)
    return replace(
        estimate,
        checks=estimate.checks + tuple(checks),
        notes=estimate.notes + tuple(notes + _disagreements(estimate)),
    )


def checked_estimate(measurement: Measurement, estimate: AdlerEstimate) -> AdlerEstimate:
    """Return the estimate of a capture, cross-checked; without a noise that it cannot show.

    Parameters
    ----------
    measurement : Measurement, with its series and both channels
    estimate : AdlerEstimate, with its adequacy tests
    """
    ratios = [part.snr_db for part in (measurement.reference, measurement.driven)]
    least_db = min((ratio for ratio in ratios if ratio is not None), default=math.inf)
    judged = without_hidden_noise(measurement.series, estimate, snr_db=least_db)
    return with_checks(measurement.series, judged)


def without_hidden_noise(
    series: PsiSeries, estimate: AdlerEstimate, *, snr_db: float
) -> AdlerEstimate:
    """Return the estimate without its noise strength where the capture cannot show it.

    Parameters
    ----------
    series : PsiSeries
    estimate : AdlerEstimate, with its adequacy tests
    snr_db : float
        The lower signal-to-noise ratio of the two channels in their bands.

    Notes
    -----
    D is hidden below 10 dB, where noise makes slips of its own; where the stretches between
    gaps are so short that psi is sampled well inside the smearing time of its band; and where
    the innovations are not white while the phases state a noise above a tenth of what D adds
    in one step.
    """
    found = estimate.noise_rad2_s
    reason = "" if found.value is None else _hiding(series, estimate, snr_db)
    if not reason:
        return estimate
    return replace(estimate, noise_rad2_s=undetermined(found.unit, reason))


def _hiding(series: PsiSeries, estimate: AdlerEstimate, snr_db: float) -> str:
    """Return what hides D in a capture, empty where nothing does."""
    if snr_db < RELIABLE_SLIPS_DB:
        return (
            f"signal-to-noise ratio {snr_db:.1f} dB in the band, below {RELIABLE_SLIPS_DB:g} dB: "
            "noise makes slips of its own"
        )
    if series.lost_s > MOST_LOST * series.step_s:
        return (
            f"the record, or what lies between its gaps, is too short: psi had to be taken every "
            f"{series.step_s:.3g} s, within the smearing of its band"
        )
    added = 2.0 * (estimate.noise_rad2_s.value or 0.0) * series.step_s
    white = not any(test.fired and test.name == WHITENESS for test in estimate.tests)
    if not white and (series.noise_start_rad2 or 0.0) > HIDING_SHARE * added:
        return "the innovations are not white: measurement noise is mixed up with the diffusion"
    return ""


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


def _disagreements(estimate: AdlerEstimate) -> list[str]:
    """Return a note for each independent estimate that does not agree with the fit."""
    fitted = {"detuning": estimate.detuning_hz.value, "coupling": estimate.coupling_hz.value}
    notes = []
    for name, found in estimate.checks:
        other = fitted.get(name.split(" by ")[0]) if " by " in name else None
        if other is None or found.value is None or not found.u:
            continue
        away = abs(found.value - other) / found.u
        if away > AGREE:
            notes.append(
                f"{name} is {found.value:.4g} Hz, {away:.1f} of its standard errors from the fit"
            )
    return notes
