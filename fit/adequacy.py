"""Does the phase equation describe a record? Tests of what it leaves out, each of 1 % size.

Every test asks for one departure. The innovations of the fitted filter are white when the
equation holds; harmonics, wander and a dependence on amplitude show as their regression on
what such a term would add (``fit.drift_trace``), inertia as a gain in likelihood
(``fit.inertia``). A lag of one sample is left out of the whiteness test and time constants
below a quarter of the sampling step count as none, because the band of the phases smooths
psi over about one step.

Size and power are those of simulated records (tests/recovery/test_adequacy_power.py).
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy.special import chdtri

from fit.adler_fit import AdlerSettings, fit_records
from fit.coupling_function import fit_harmonics
from fit.drift_trace import DriftTrace, trace_records
from fit.inertia import InertiaFit, find_inertia
from fit.records import AdequacyTest, AdlerEstimate, PsiSeries
from rig.angles import hz_from_rad_s, rad_s_from_hz
from rig.arrays import FloatArray
from rig.phases.track import PhaseTrack
from rig.quantities import Quantity, undetermined

SIZE = 0.01  # chance that one test fires on a record that obeys the equation
HARMONICS = 3
LAGS = 20
LEAST_SAMPLES = 64
# At the boundary 5.41 would be the 1 % point; the short search asks for a little more.
INERTIA_THRESHOLD = 6.63
# 1 % point of the Cramer-von Mises law of the squared bridge (5 %: 0.461).
WANDER_THRESHOLD = 0.743
# Noncentrality at which a chi-square test of two degrees of freedom and 1 % reaches 80 %.
FOUND_80 = 13.88
WANDER_BATCHES = 12
# What is left of a column after the plain terms, as a share, below which it says nothing new.
NEWNESS = 1e-4
R_FLOOR = 1e-3  # measurement noise taken where the record does not show it, in 2 D h


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Case:
    """What the tests of one record need: trace, plain fit, inertia fit, richer fits.

    ``plain`` (n, 3) are the standardised columns of (dw, a, b) and ``residual`` (n,) the
    standardised innovations without what those explain.
    """

    series: PsiSeries
    theta: FloatArray
    trace: DriftTrace
    plain: FloatArray
    residual: FloatArray
    inertia: InertiaFit | None

    @property
    def coupling_hz(self) -> float:
        """Coupling of the plain fit, Hz."""
        return hz_from_rad_s(math.hypot(self.theta[1], self.theta[2]))


def examine_estimates(
    series: Sequence[PsiSeries],
    estimates: Sequence[AdlerEstimate],
    *,
    amplitudes: Sequence[Sequence[FloatArray] | None] | None = None,
) -> list[AdlerEstimate]:
    """Return the estimates with their adequacy tests and what follows from them.

    Parameters
    ----------
    series : sequence of PsiSeries
    estimates : sequence of AdlerEstimate, as many
    amplitudes : sequence of (one array a segment) or None, optional
        Squared amplitude of the driven oscillator over its mean, less 1, at the samples of
        each record; where given, dependence of the frequency on it is tested too.

    Returns
    -------
    list of AdlerEstimate
        ``adequate`` is False where a test fired, True where none did and the record
        determines the coupling, None where nothing could be tested or a steady lock shows
        too little.
    """
    points = _points(series, estimates)
    kept = [row for row, point in enumerate(points) if point is not None]
    known = _known(
        [series[k] for k in kept], [None if amplitudes is None else amplitudes[k] for k in kept]
    )
    chosen = [point for point in points if point is not None]
    own = [series[k] for k in kept]
    traces = trace_records(own, chosen, harmonics=HARMONICS, known=known) if kept else []
    inertia = find_inertia(own, chosen) if kept else []
    examined = list(estimates)
    for place, row in enumerate(kept):
        case = _case(own[place], chosen[place], traces[place], inertia[place])
        if case is not None:
            examined[row] = _marked(estimates[row], _tested(case))
    return examined


def squared_amplitudes(track: PhaseTrack, series: PsiSeries) -> tuple[FloatArray, ...] | None:
    """Return the squared amplitude over its mean, less 1, at the samples of a series.

    Parameters
    ----------
    track : PhaseTrack
    series : PsiSeries made from the track

    Returns
    -------
    tuple of arrays, one a segment, or None where the track has no amplitude
    """
    times = [
        start_s + np.arange(part.size) * series.step_s
        for part, start_s in zip(series.segments, series.start_s, strict=True)
    ]
    usable = track.valid & np.isfinite(track.amplitude)
    mean = float(np.mean(track.amplitude[usable] ** 2)) if np.any(usable) else 0.0
    if not mean > 0.0:
        return None
    at_s, squared = track.time_s[usable], track.amplitude[usable] ** 2 / mean
    return tuple(np.interp(time_s, at_s, squared) - 1.0 for time_s in times)


def _points(
    series: Sequence[PsiSeries], estimates: Sequence[AdlerEstimate]
) -> list[FloatArray | None]:
    """Return (dw, a, b, ln D, ln R) of each record, None where no fit exists."""
    points: list[FloatArray | None] = [
        None if one.method == "none" else _point_of(record, one)
        for record, one in zip(series, estimates, strict=True)
    ]
    again = [
        row for row, one in enumerate(estimates) if one.method != "none" and points[row] is None
    ]
    if again:
        plain = AdlerSettings(intervals=False)
        fits = fit_records([series[k] for k in again], [None] * len(again), plain)
        for row, fit in zip(again, fits, strict=True):
            points[row] = fit.theta if fit.converged else None
    return points


def _point_of(record: PsiSeries, estimate: AdlerEstimate) -> FloatArray | None:
    """Return the parameters that an estimate states, None where it states too few.

    A steady lock states relaxation rate and rest angle: the equation with the detuning at
    zero that relaxes at this rate to this angle moves just like it.
    """
    diffusion = estimate.noise_rad2_s.value
    if not diffusion:
        return None
    detuning, coupling, offset = (
        estimate.detuning_hz.value,
        estimate.coupling_hz.value,
        estimate.offset_rad.value,
    )
    if detuning is None or coupling is None or offset is None:
        detuning, coupling = 0.0, estimate.relaxation_rate_hz.value
        offset = dict(estimate.checks).get("rest angle", undetermined("rad", "none")).value
    if coupling is None or offset is None:
        return None
    least = R_FLOOR * 2.0 * diffusion * record.step_s
    noise = max((estimate.measurement_noise_rad.value or 0.0) ** 2, least)
    rate = rad_s_from_hz(coupling)
    return np.array(
        [
            rad_s_from_hz(detuning),
            rate * math.sin(offset),
            -rate * math.cos(offset),
            math.log(diffusion),
            math.log(noise),
        ]
    )


def _known(
    series: Sequence[PsiSeries], amplitudes: Sequence[Sequence[FloatArray] | None]
) -> list[list[FloatArray]] | None:
    """Return the known drifts of the traces: the squared amplitude, zeros where not given."""
    if all(one is None for one in amplitudes):
        return None
    return [
        [
            np.zeros((part.size, 1)) if own is None else np.asarray(own[place])[:, None]
            for place, part in enumerate(record.segments)
        ]
        for record, own in zip(series, amplitudes, strict=True)
    ]


def _case(
    series: PsiSeries, theta: FloatArray, trace: DriftTrace, inertia: InertiaFit | None
) -> Case | None:
    """Return what the tests need, None for records too short to test."""
    if trace.innovation.size < LEAST_SAMPLES:
        return None
    root = np.sqrt(trace.variance)
    v = trace.innovation / root
    # The noise of the plain fit is rescaled to what this filter finds.
    v = v / math.sqrt(float(v @ v) / v.size)
    plain = trace.columns[:, :3] / root[:, None]
    return Case(
        series=series,
        theta=theta,
        trace=trace,
        plain=plain,
        residual=_without(v, plain),
        inertia=inertia,
    )


def _without(values: FloatArray, plain: FloatArray) -> FloatArray:
    """Return values (n,) or (n, k) with their projection on the plain columns taken off."""
    basis, _ = np.linalg.qr(plain / np.maximum(np.sqrt(np.sum(plain**2, axis=0)), 1e-300))
    return np.asarray(values - basis @ (basis.T @ values))


def _tested(case: Case) -> tuple[AdequacyTest, ...]:
    """Return the tests of one record, fired ones with the effect of the richer model."""
    tests = [(name, test(case)) for name, test in ADEQUACY.items()]
    return tuple(replace(test, name=name) for name, test in tests if test is not None)


def _marked(estimate: AdlerEstimate, tests: tuple[AdequacyTest, ...]) -> AdlerEstimate:
    """Return the estimate with its tests and the judgement that follows."""
    fired = [test for test in tests if test.fired]
    whole = estimate.coupling_hz.value is not None
    notes = tuple(f"not adequate: {test.name}: {test.meaning}" for test in fired)
    if not fired and not whole:
        notes = ("adequacy: a steady lock shows inertia and whiteness only, no harmonics",)
    return replace(
        estimate,
        adequate=False if fired else (True if whole else None),
        tests=estimate.tests + tests,
        notes=estimate.notes + notes,
    )


def _whiteness(case: Case) -> AdequacyTest | None:
    """Ljung-Box test of the innovations at lags 2 to 21.

    Power: 30 to 100 % for time constants above the sampling step, under 10 % for harmonics.
    """
    r = case.residual
    lags = np.arange(2, 2 + min(LAGS, r.size // 6))
    power = float(r @ r)
    correlation = np.array([float(r[lag:] @ r[:-lag]) for lag in lags]) / power
    statistic = r.size * (r.size + 2.0) * float(np.sum(correlation**2 / (r.size - lags)))
    threshold = float(chdtri(lags.size, SIZE))
    worst = lags[int(np.argmax(np.abs(correlation)))]
    return AdequacyTest(
        name="",
        statistic=statistic,
        threshold=threshold,
        fired=statistic > threshold,
        size=SIZE,
        meaning=(
            f"innovations {'are not' if statistic > threshold else 'are'} white over {lags.size} "
            f"lags; largest correlation at {worst * case.series.step_s:.3g} s"
        ),
    )


def _harmonic(case: Case, order: int) -> AdequacyTest | None:
    """Score test of a harmonic of the coupling function, two degrees of freedom.

    Power: 60 % at the amplitude where the information promises 80 %, 95 % at 1.5 times it.
    """
    root = np.sqrt(case.trace.variance)
    columns = case.trace.columns[:, 2 * order - 1 : 2 * order + 1] / root[:, None]
    left = _without(columns, case.plain)
    share = np.sqrt(np.sum(left**2, axis=0) / np.maximum(np.sum(columns**2, axis=0), 1e-300))
    if not np.all(share > NEWNESS):
        return None
    information = left.T @ left
    if np.linalg.cond(information) > 1e8:
        return None
    score = left.T @ case.residual
    covariance = np.asarray(np.linalg.inv(information), dtype=float)
    found = hz_from_rad_s(math.sqrt(FOUND_80 * 0.5 * float(np.trace(covariance))))
    if found > case.coupling_hz:
        # Only a harmonic above the coupling itself would show: nothing can be said.
        return None
    statistic = float(score @ covariance @ score)
    threshold = float(chdtri(2.0, SIZE))
    fired = statistic > threshold
    pair, covariance = (
        _richer(case, order, covariance @ score, covariance)
        if fired
        else (
            covariance @ score,
            covariance,
        )
    )
    effect = _amplitude(pair, covariance)
    word = "second" if order == 2 else "third"
    meaning = f"a {word} harmonic of {found:.3g} Hz would be found in 4 of 5 such records"
    if fired:
        meaning = f"the coupling function has a {word} harmonic of {effect.value:.3g} Hz"
    return AdequacyTest(
        name="",
        statistic=statistic,
        threshold=threshold,
        fired=fired,
        size=SIZE,
        effect=effect,
        meaning=meaning,
    )


def _richer(
    case: Case, order: int, pair: FloatArray, covariance: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return (a_k, b_k) and their covariance from the fit with harmonics up to this one."""
    fitted = fit_harmonics([case.series], [case.theta], order)[0]
    if fitted is None:
        return pair, covariance
    place = slice(2 * order - 1, 2 * order + 1)
    return fitted.theta[place], fitted.covariance[place, place]


def _amplitude(pair: FloatArray, covariance: FloatArray) -> Quantity:
    """Return the amplitude hypot(a, b) in Hz with its standard error."""
    size = max(math.hypot(pair[0], pair[1]), 1e-300)
    slope = pair / size
    u = hz_from_rad_s(math.sqrt(float(slope @ covariance @ slope)))
    value = hz_from_rad_s(size)
    low, high = max(value - 1.96 * u, 0.0), value + 1.96 * u
    return Quantity(value=value, u=u, unit="Hz", low=low, high=high, level=0.95)


def _inertia(case: Case) -> AdequacyTest | None:
    """Likelihood ratio of a time constant above a quarter of the sampling step.

    Power: above 90 % for time constants from one step on where the measurement noise is
    below the diffusion of one step; a third of that where it is three times as large.
    """
    found = case.inertia
    if found is None:
        return None
    fired = found.rise > INERTIA_THRESHOLD
    effect, meaning = None, "no time constant above a quarter of the sampling step"
    if fired:
        coupling_hz = hz_from_rad_s(found.coupling_rad_s)
        meaning = (
            f"psi follows with a time constant of {found.tau_s:.3g} s; with it the coupling is "
            f"{coupling_hz:.4g} Hz instead of {case.coupling_hz:.4g} Hz"
        )
        effect = Quantity(
            value=found.tau_s,
            u=found.tau_s * found.log_u,
            unit="s",
            low=found.tau_s * math.exp(-1.96 * min(found.log_u, 50.0)),
            high=found.tau_s * math.exp(1.96 * min(found.log_u, 50.0)),
            level=0.95,
        )
    return AdequacyTest(
        name="",
        statistic=found.rise,
        threshold=INERTIA_THRESHOLD,
        fired=fired,
        size=SIZE,
        effect=effect,
        meaning=meaning,
    )


def _wander(case: Case) -> AdequacyTest | None:
    """Squared bridge of the scores of the detuning: locally best against a random walk.

    Power: 80 % where the random walk moves the detuning by six of its standard errors.

    References
    ----------
    Nyblom 1989, J. Am. Stat. Assoc. 84, 223 (recalled); its law with one parameter is that
    of Cramer and von Mises.
    """
    column = _without(case.plain[:, 0], case.plain[:, 1:])
    information = float(column @ column)
    if not information > NEWNESS**2 * float(case.plain[:, 0] @ case.plain[:, 0]):
        return None
    bridge = np.cumsum(column * case.residual)
    # Time runs by information, so that stretches that tell nothing do not count.
    statistic = float(np.sum(column**2 * bridge**2)) / information**2
    fired = statistic > WANDER_THRESHOLD
    effect = _walk_hz(column, case.residual)
    meaning = "the detuning is the same throughout the record"
    if fired:
        meaning = (
            f"the detuning wanders: about {effect.value or 0.0:.3g} Hz over the record as a "
            "random walk"
        )
    return AdequacyTest(
        name="",
        statistic=statistic,
        threshold=WANDER_THRESHOLD,
        fired=fired,
        size=SIZE,
        effect=effect if fired else None,
        meaning=meaning,
    )


def _walk_hz(column: FloatArray, residual: FloatArray) -> Quantity:
    """Return the standard change of the detuning over the record, as a random walk.

    From batches of equal information: about its mean over the record a random walk that
    reaches s has the variance s^2/6. The batches are worth some three degrees of freedom.
    """
    total = np.cumsum(column**2)
    edges = np.searchsorted(total, total[-1] * np.arange(1, WANDER_BATCHES) / WANDER_BATCHES)
    weights = np.array([float(np.sum(part**2)) for part in np.split(column, edges)])
    sums = np.array([float(np.sum(part)) for part in np.split(column * residual, edges)])
    usable = weights > 0.0
    values = sums[usable] / weights[usable]
    excess = float(np.var(values, ddof=1) - np.mean(1.0 / weights[usable]))
    value = hz_from_rad_s(math.sqrt(6.0 * max(excess, 0.0)))
    return Quantity(value=value, u=0.41 * value, unit="Hz")


def _amplitude_dependence(case: Case) -> AdequacyTest | None:
    """Score test of a detuning that moves with the squared amplitude, one degree of freedom.

    A pendulum swings slower by the share theta^2/16 of its rate at amplitude theta.
    """
    if case.trace.known.shape[1] == 0 or not np.any(case.trace.known):
        return None
    column = _without(case.trace.known[:, 0] / np.sqrt(case.trace.variance), case.plain)
    information = float(column @ column)
    whole = float(np.sum(case.trace.known[:, 0] ** 2 / case.trace.variance))
    if not information > NEWNESS * whole:
        return None
    slope = float(column @ case.residual) / information
    statistic = slope**2 * information
    threshold = float(chdtri(1.0, SIZE))
    effect = Quantity(
        value=hz_from_rad_s(slope), u=hz_from_rad_s(1.0 / math.sqrt(information)), unit="Hz"
    )
    return AdequacyTest(
        name="",
        statistic=statistic,
        threshold=threshold,
        fired=statistic > threshold,
        size=SIZE,
        effect=effect,
        meaning="change of the detuning by a squared amplitude twice its mean",
    )


ADEQUACY: dict[str, Callable[[Case], AdequacyTest | None]] = {
    "whiteness of innovations": _whiteness,
    "second harmonic": lambda case: _harmonic(case, 2),
    "third harmonic": lambda case: _harmonic(case, 3),
    "inertia": _inertia,
    "wander of the detuning": _wander,
    "amplitude dependence": _amplitude_dependence,
}
