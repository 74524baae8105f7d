"""Tests of what the phase equation leaves out, each of 1 % size; one table.

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
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from fit.coupling_function import fit_harmonics
from fit.drift_trace import DriftTrace
from fit.inertia import InertiaFit
from fit.quantiles import chi_square_above
from fit.records import AdequacyTest, PsiSeries
from rig.angles import hz_from_rad_s
from rig.arrays import FloatArray
from rig.quantities import Quantity

SIZE = 0.01  # chance that one test fires on a record that obeys the equation
HARMONICS = 3
WHITENESS = "whiteness of innovations"
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


def make_case(
    series: PsiSeries, theta: FloatArray, trace: DriftTrace, inertia: InertiaFit | None
) -> Case | None:
    """Return what the tests need, None for records too short to test.

    Parameters
    ----------
    series : PsiSeries
    theta : array, shape (5,), (dw, a, b, ln D, ln R)
    trace : DriftTrace at these parameters, three harmonics
    inertia : InertiaFit, optional
    """
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


def _whiteness(case: Case) -> AdequacyTest | None:
    """Ljung-Box test of the innovations at lags 2 to 21.

    Power: 60 % for a time constant of one step, 30 to 75 % for strong wander, none for
    harmonics.
    """
    r = case.residual
    lags = np.arange(2, 2 + min(LAGS, r.size // 6))
    power = float(r @ r)
    correlation = np.array([float(r[lag:] @ r[:-lag]) for lag in lags]) / power
    statistic = r.size * (r.size + 2.0) * float(np.sum(correlation**2 / (r.size - lags)))
    threshold = chi_square_above(lags.size, SIZE)
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

    Power: 55 % at the amplitude 6.5 sqrt(D/T), 93 % at 1.5 times it (drifting pairs).
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
    threshold = chi_square_above(2.0, SIZE)
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

    Power at 500 samples: 99 % for a time constant of one step where the measurement noise
    lies well below the diffusion of one step; where it is above, 40 % at two steps and 75 %
    at three.
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

    Power: 30 % where the random walk moves the detuning by nine of its standard errors, 60 %
    at twenty-six; a steady drift of ten is found.

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
    threshold = chi_square_above(1.0, SIZE)
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
    WHITENESS: _whiteness,
    "second harmonic": lambda case: _harmonic(case, 2),
    "third harmonic": lambda case: _harmonic(case, 3),
    "inertia": _inertia,
    "wander of the detuning": _wander,
    "amplitude dependence": _amplitude_dependence,
}
