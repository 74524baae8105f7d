"""From the likelihood fit of one record to quantities, or to reasons why there are none.

What a record determines is decided in ``fit.identify``. Inside the package rates are rad/s;
here they become hertz.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace

import numpy as np

from fit.identify import (
    LEAST_SLIPS,
    LOCKED_THRESHOLD,
    Identified,
    RecordFacts,
    RecordFit,
    facts_of,
    is_identified,
    unusable,
)
from fit.intervals import DIFFUSION_FLOOR, MEAN_PARAMETERS, student_threshold
from fit.likelihood import at_floor
from fit.noise_ends import NOISE_GATE, cut_median
from fit.quantiles import chi_square_above
from fit.records import AdlerEstimate, Baseline, PsiSeries
from fit.two_number import two_number_check
from fit.wander import Wander, find_wander
from rig.angles import hz_from_rad_s, wrap_angle_rad
from rig.arrays import FloatArray
from rig.quantities import Quantity, undetermined

__all__ = ["record_estimate", "refused_estimate", "unusable"]

# The offset is given from 6 standard errors of the coupling on: nearer to zero, those records
# whose coupling came out large by chance would be let through with too narrow an angle.
OFFSET_FACTOR = 9.4
# The tails of coupling over error are longer than lognormal by about this.
LUCK_SPREAD = 1.3
# A noise strength is given when its relative standard error is below this: 2.5 errors from 0.
NOISE_SEEN_GATE = 0.4
NORMAL_975 = 1.959964


def record_estimate(
    record: PsiSeries,
    fit: RecordFit,
    baseline: Baseline | None,
    *,
    trajectory: bool = False,
) -> AdlerEstimate:
    """Return the estimate of one record from its fit.

    Parameters
    ----------
    record : PsiSeries
    fit : RecordFit
    baseline : Baseline, optional
    trajectory : bool
        Add the least-squares fit of the noise-free curve as a cross-check.

    Returns
    -------
    AdlerEstimate
    """
    facts = facts_of(record)
    known = is_identified(record, fit, baseline)
    wander = find_wander(record, fit.theta) if known.all else None
    notes = list(_notes(facts, fit, known, baseline))
    if wander is not None and wander.fired:
        notes.append(_wander_note(wander))
    mean = _detuning(fit, known)
    return AdlerEstimate(
        detuning_hz=_nominal(mean, wander, baseline),
        coupling_hz=_coupling(fit, known, baseline),
        offset_rad=_offset(fit, known),
        noise_rad2_s=_diffusion(record, fit),
        measurement_noise_rad=_measurement_noise(fit),
        relaxation_rate_hz=_relaxation(fit),
        detuning_mean_hz=_record_mean(mean, fit, wander),
        method="likelihood, assumed-density filter"
        + (", free-running baseline as prior" if baseline is not None else ""),
        notes=tuple(notes),
        checks=(*_checks(fit, known), *_other_estimates(record, fit, known, trajectory)),
    )


def _from_ends(
    fit: RecordFit, name: str, value: float, unit: str, measure: Callable[[FloatArray], float]
) -> Quantity | None:
    """Return the quantity with its likelihood-ratio interval, None when an end is open.

    u is half the interval over the normal 97.5 % point: the error that the interval implies.
    """
    if (name, -1.0) not in fit.ends or (name, 1.0) not in fit.ends:
        return None
    low, high = measure(fit.ends[name, -1.0]), measure(fit.ends[name, 1.0])
    if not low <= value <= high:
        return None
    u = (high - low) / (2.0 * NORMAL_975)
    return Quantity(value=value, u=u, unit=unit, low=low, high=high, level=0.95)


def _plain(value: float, u: float, unit: str, threshold: float) -> Quantity:
    """Return value and standard error with the interval they give at the threshold."""
    wide = math.sqrt(threshold) * u
    return Quantity(
        value=value,
        u=wide / NORMAL_975,
        unit=unit,
        low=value - wide,
        high=value + wide,
        level=0.95,
    )


def _detuning(fit: RecordFit, known: Identified) -> Quantity:
    """Return the detuning under white noise, Hz."""
    if not known.detuning:
        return undetermined("Hz", known.reason)
    value = hz_from_rad_s(float(fit.theta[0]))
    found = _from_ends(fit, "detuning", value, "Hz", lambda end: hz_from_rad_s(float(end[0])))
    return found or _plain(
        value, hz_from_rad_s(fit.detuning_u_rad_s), "Hz", fit.thresholds["detuning"]
    )


def _coupling(fit: RecordFit, known: Identified, baseline: Baseline | None) -> Quantity:
    """Return the coupling, Hz, or what bounds it."""
    value = hz_from_rad_s(fit.coupling_rad_s)

    def measure(end: FloatArray) -> float:
        return hz_from_rad_s(math.hypot(end[1], end[2]))

    if known.all:
        found = _from_ends(fit, "coupling", value, "Hz", measure)
        found = found or _plain(
            value, hz_from_rad_s(fit.coupling_u_rad_s), "Hz", fit.thresholds["coupling"]
        )
        reaches_zero = fit.may_be_free() or (found.low is not None and found.low < 0.0)
        return replace(found, low=0.0) if reaches_zero else found
    high = measure(fit.ends["coupling", 1.0]) if ("coupling", 1.0) in fit.ends else None
    low = None
    locked = fit.relaxation_rad_s is not None
    if locked and baseline is not None and baseline.detuning_hz.value is not None:
        low = abs(baseline.detuning_hz.value)
    reason = known.reason
    if low is not None:
        reason += "; locked, so the coupling is at least the free-running detuning"
    return undetermined("Hz", reason, low=low, high=high)


def _offset(fit: RecordFit, known: Identified) -> Quantity:
    """Return psi0, rad; its interval may reach beyond (-pi, pi]."""
    if not known.all:
        return undetermined("rad", known.reason)
    drifting = fit.relaxation_rad_s is None
    if drifting and fit.may_be_free(OFFSET_FACTOR):
        return undetermined("rad", "the coupling is too near zero to have an offset")
    value = fit.offset_rad

    def measure(end: FloatArray) -> float:
        return value + wrap_angle_rad(math.atan2(end[1], -end[2]) - value)

    u = fit.u_of(np.array([0.0, -fit.theta[2], fit.theta[1], 0.0, 0.0]) / fit.size_rad_s**2)
    found = _from_ends(fit, "offset", value, "rad", measure) or _plain(
        value, u, "rad", fit.thresholds["offset"]
    )
    if drifting:
        found = _widened_by(found, _selection_factor(fit))
    return _at_most_a_turn(found)


def _at_most_a_turn(found: Quantity) -> Quantity:
    """Return an angle whose interval is no longer than a whole turn about its value."""
    if found.value is None or found.low is None or found.high is None:
        return found
    low, high = max(found.low, found.value - math.pi), min(found.high, found.value + math.pi)
    return replace(found, low=low, high=high)


def _selection_factor(fit: RecordFit) -> float:
    """Return how much wider the interval of the offset must be near zero coupling.

    Records whose coupling came out large, or whose noise came out small, by chance are those
    that give an offset at all. The coupling over its error is taken as lognormal and known
    only to lie beyond the gate; its median-unbiased value tells how wide the angle really is.
    """
    threshold = fit.thresholds["coupling"]
    apart = fit.coupling_rad_s / max(fit.coupling_u_rad_s, 1e-300)
    # What Student's t adds to the normal threshold is 2.9 over its degrees of freedom.
    freedom_share = max(threshold / NORMAL_975**2 - 1.0, 0.0) / 2.9
    spread = LUCK_SPREAD * math.sqrt(1.0 / apart**2 + 0.5 * freedom_share)
    gate = math.sqrt(OFFSET_FACTOR * threshold)
    luck = cut_median(math.log(max(apart / gate, 1.0)) / spread)
    return math.exp(min(spread * luck, 5.0))


def _noise_threshold(fit: RecordFit, column: int) -> float:
    """Return the squared Student quantile at what the given noise strength is worth."""
    freedom = 2.0 / max(float(fit.covariance[column, column]), 1e-9)
    return float(student_threshold(np.array([freedom]))[0])


def _scale_quantity(value: float, log_u: float, unit: str) -> Quantity:
    """Return a variance whose logarithm has the given standard error.

    Such a variance is worth nu = 2/log_u^2 samples, of which the mean parameters take three;
    the interval is that of nu times value over a chi-square variable.
    """
    samples = 2.0 / max(log_u, 1e-6) ** 2
    freedom = max(samples - MEAN_PARAMETERS, 0.75 * samples)
    low, high = (samples * value / chi_square_above(freedom, tail) for tail in (0.025, 0.975))
    # Near the gate those strengths are given that came out high by chance: the lower end goes
    # down to that of a lognormal law, a third wider.
    if log_u > 0.5 * NOISE_SEEN_GATE:
        student = math.sqrt(float(student_threshold(np.array([freedom]))[0]))
        low = min(low, value * math.exp(-1.33 * student * log_u))
    return Quantity(value=value, u=value * log_u, unit=unit, low=low, high=high, level=0.95)


def _positive(value: float, log_u: float, unit: str, threshold: float) -> Quantity:
    """Return a positive quantity whose logarithm has the given standard error."""
    wide = math.exp(math.sqrt(threshold) * log_u)
    return Quantity(
        value=value, u=value * log_u, unit=unit, low=value / wide, high=value * wide, level=0.95
    )


def _diffusion_low(record: PsiSeries, fit: RecordFit) -> float:
    """Return by how much ln D lies too low on the mean.

    An R that cannot be negative is at its floor in half of the records that have none. There
    it lies 0.8 of its standard error too high on the mean (the half-normal law) and D as much
    too low. The mean parameters of a drifting pair take their degrees of freedom from D.
    """
    covariance, low = fit.covariance, 0.0
    variance = float(covariance[3, 3])
    if at_floor(fit.theta[None], np.array([record.step_s]))[0, 4]:
        by_sensor = float(covariance[3, 4]) ** 2 / float(covariance[4, 4])
        variance -= 0.8 * by_sensor
        low = 0.8 * math.sqrt(by_sensor)
    if fit.relaxation_rad_s is None:
        low += min(0.5 * MEAN_PARAMETERS * variance, 0.1)
    return low


def _diffusion(record: PsiSeries, fit: RecordFit) -> Quantity:
    """Return D, rad^2/s, its mean error taken off, or why there is none."""
    value, log_u = math.exp(fit.theta[3]), math.sqrt(float(fit.covariance[3, 3]))
    floor = 2.0 * value * record.step_s < DIFFUSION_FLOOR * math.exp(fit.theta[4])
    if not fit.converged or floor or log_u >= NOISE_GATE:
        return undetermined(
            "rad^2/s", "the measurement noise of psi hides its diffusion; record longer or quieter"
        )
    high = fit.noise_ends.get(1.0)
    if high is None:
        found = _scale_quantity(value, log_u, "rad^2/s")
    else:
        low = min(fit.noise_ends.get(-1.0, 0.0), value)
        found = Quantity(
            value=value, u=value * log_u, unit="rad^2/s", low=low, high=max(high, value), level=0.95
        )
    middle = value * math.exp(_diffusion_low(record, fit))
    return replace(found, value=min(middle, max(found.high or value, value)))


def _measurement_noise(fit: RecordFit) -> Quantity:
    """Return the standard deviation of the measurement noise of psi, rad, or its bound."""
    value, log_u = math.exp(0.5 * fit.theta[4]), math.sqrt(float(fit.covariance[4, 4]))
    if fit.converged and log_u < NOISE_SEEN_GATE:
        return _positive(value, 0.5 * log_u, "rad", _noise_threshold(fit, 4))
    return undetermined("rad", "too small beside the diffusion of psi within one sample")


def _relaxation(fit: RecordFit) -> Quantity:
    """Return sqrt(K^2 - dw^2), Hz, inside the locking region."""
    rate = fit.relaxation_rad_s
    if rate is None:
        return undetermined("Hz", "the pair drifts: it has no relaxation rate")
    slope = np.array([-fit.theta[0], fit.theta[1], fit.theta[2], 0.0, 0.0]) / rate
    log_u = fit.u_of(slope) / rate
    if not fit.converged or not log_u < 0.5:
        return undetermined("Hz", "the motion around the rest angle is too short or too small")
    threshold = max(_noise_threshold(fit, 3), LOCKED_THRESHOLD)
    return _positive(hz_from_rad_s(rate), log_u, "Hz", threshold)


def _nominal(mean: Quantity, wander: Wander | None, baseline: Baseline | None) -> Quantity:
    """Return the detuning with the wander that another record would show.

    Wander within the record shows in it; wander from record to record only in free-running
    captures. Those pull the value towards themselves by a share 1 - own: of record and
    captures each is off the nominal detuning by a wander of its own.
    """
    found = _widened(mean, hz_from_rad_s(wander.spread_rad_s) if wander else 0.0)
    known = baseline.detuning_hz.u if baseline is not None else None
    if baseline is None or not known or mean.u is None or not mean.u < known:
        return found
    own, wandering = 1.0 - (mean.u / known) ** 2, baseline.wander_hz**2
    by_record = own**2 * (wandering + mean.u**2 / own)
    by_captures = (1.0 - own) ** 2 * max(known**2 - wandering, 0.0)
    return _widened(found, math.sqrt(max(by_record + by_captures - mean.u**2, 0.0)))


def _record_mean(mean: Quantity, fit: RecordFit, wander: Wander | None) -> Quantity:
    """Return the detuning of this record's mean, its error widened to the batch means."""
    if wander is None or not wander.fired:
        return mean
    model = 2.0 * math.exp(fit.theta[3])
    excess = wander.mean_u_rad_s**2 * (1.0 - 1.0 / wander.ratio)
    return _widened(mean, hz_from_rad_s(math.sqrt(max(excess, 0.0)))) if model else mean


def _widened(mean: Quantity, extra_u_hz: float) -> Quantity:
    """Return the quantity with another standard uncertainty added in quadrature."""
    if mean.u is None or not mean.u > 0.0:
        return mean
    return _widened_by(mean, math.hypot(mean.u, extra_u_hz) / mean.u)


def _widened_by(found: Quantity, ratio: float) -> Quantity:
    """Return the quantity with error and interval wider by a ratio."""
    if found.value is None or found.u is None or ratio == 1.0:
        return found
    low = None if found.low is None else found.value - ratio * (found.value - found.low)
    high = None if found.high is None else found.value + ratio * (found.high - found.value)
    return replace(found, u=ratio * found.u, low=low, high=high)


def _wander_note(wander: Wander) -> str:
    return (
        "the detuning wanders within the record: its batch variance is "
        f"{wander.ratio:.3g} times that of white noise (limit {wander.threshold:.3g}); errors "
        "are widened, and repeats or free-running captures tell the nominal detuning"
    )


def _notes(
    facts: RecordFacts, fit: RecordFit, known: Identified, baseline: Baseline | None
) -> list[str]:
    """Return what a reader must know beside the numbers."""
    notes = []
    if known.all and fit.may_be_free():
        notes.append("the coupling is not told apart from zero")
    if known.all and baseline is None:
        notes.append(
            "the detuning is the mean over this record: slow wander of the free frequencies, "
            "which one record hardly shows, is not in its error without free-running captures"
        )
    if known.all and math.exp(fit.theta[3]) > fit.coupling_rad_s:
        notes.append("noise stronger than the coupling: the filter is then approximate")
    log_u = math.sqrt(float(fit.covariance[3, 3]))
    few = abs(facts.turns) < 3.0 and facts.slips < LEAST_SLIPS
    if known.all and (log_u > 0.3 or few):
        notes.append("short record: intervals use Student's t in place of the normal law")
    if baseline is not None and baseline.noise_rad2_s.value:
        apart = abs(float(fit.theta[3]) - math.log(baseline.noise_rad2_s.value))
        if apart > math.log(2.0):
            notes.append("noise differs by more than a factor 2 from the free-running captures")
    return notes


def _checks(fit: RecordFit, known: Identified) -> list[tuple[str, Quantity]]:
    """Return the angle at rest and the margin to the edge."""
    checks = []
    rate = fit.relaxation_rad_s
    if rate is not None and fit.converged:
        rest = fit.offset_rad + math.asin(float(fit.theta[0]) / fit.coupling_rad_s)
        slope = np.array([1.0, math.cos(rest), math.sin(rest), 0.0, 0.0]) / rate
        angle = wrap_angle_rad(rest)
        u = fit.u_of(slope)
        if u < 1.0:
            checks.append(("rest angle", _plain(angle, u, "rad", _noise_threshold(fit, 3))))
    if known.all:
        sign = math.copysign(1.0, float(fit.theta[0]))
        slope = np.array([-sign, *(fit.theta[1:3] / fit.size_rad_s), 0.0, 0.0])
        margin = hz_from_rad_s(fit.coupling_rad_s - abs(float(fit.theta[0])))
        u = hz_from_rad_s(fit.u_of(slope))
        checks.append(("margin", _plain(margin, u, "Hz", fit.thresholds["coupling"])))
    return checks


def _other_estimates(
    record: PsiSeries, fit: RecordFit, known: Identified, trajectory: bool
) -> list[tuple[str, Quantity]]:
    """Return estimates that share little with the likelihood, of a record that determines all."""
    if not known.all:
        return []
    found: list[tuple[str, Quantity]] = []
    if fit.relaxation_rad_s is None:
        noise, seen = math.exp(fit.theta[3]), math.exp(0.5 * fit.theta[4])
        found.extend(two_number_check(record, noise, seen))
    if trajectory:
        # lmfit takes a second to load and is wanted for this check alone.
        from fit.lmfit_models import trajectory_check

        found.extend(trajectory_check(record))
    return found


def refused_estimate(reason: str, baseline: Baseline | None = None) -> AdlerEstimate:
    """Return the estimate of a record that cannot be fitted: every quantity with the reason."""
    low = None
    if baseline is not None and baseline.detuning_hz.value is not None and "move" in reason:
        low = abs(baseline.detuning_hz.value)
    return AdlerEstimate(
        detuning_hz=undetermined("Hz", reason),
        coupling_hz=undetermined("Hz", reason, low=low),
        offset_rad=undetermined("rad", reason),
        noise_rad2_s=undetermined("rad^2/s", reason),
        measurement_noise_rad=undetermined("rad", reason),
        relaxation_rate_hz=undetermined("Hz", reason),
        detuning_mean_hz=undetermined("Hz", reason),
        method="none",
    )
