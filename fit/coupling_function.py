"""The coupling function without a model: dpsi/dt against psi as a Fourier series with bands.

    f(psi) = dw + sum_k (a_k cos k psi + b_k sin k psi), k = 1 to M,

by maximum likelihood with the filter of ``fit.drift_trace``; M by the Bayesian information
criterion. The bands hold for all phases at once.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from fit.adler_fit import AdlerSettings, fit_records
from fit.adler_record import unusable
from fit.drift_trace import DriftTrace, trace_records
from fit.records import PsiSeries
from rig.angles import TURN_RAD
from rig.arrays import FloatArray, frozen_view, quantile
from rig.errors import FitError

POINTS = 181  # phases at which the function is given
HIGHEST = 5  # harmonics tried
ROUNDS = 6  # scoring steps at each number of harmonics
DRAWS = 2000  # draws behind the simultaneous bands
LEAST_TURNS = 1.5  # psi must have been everywhere


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class HarmonicFit:
    """Drift coefficients (dw, a_1, b_1, ...), their covariance, and the log-likelihood.

    ``theta`` continues with ln D and ln R; rates in rad/s.
    """

    theta: FloatArray
    covariance: FloatArray
    loglik: float
    samples: int

    @property
    def harmonics(self) -> int:
        """Number of harmonics fitted."""
        return (self.theta.size - 3) // 2

    @property
    def criterion(self) -> float:
        """Bayesian information criterion: smaller is better."""
        return -2.0 * self.loglik + self.theta.size * math.log(max(self.samples, 2))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CouplingFunction:
    """dpsi/dt in rad/s over one turn of psi, with simultaneous bands.

    ``order`` harmonics were kept; ``criteria`` are the criteria of 1, 2, ... harmonics. The
    bands cover the whole curve with probability ``level``.
    """

    phase_rad: FloatArray
    value_rad_s: FloatArray
    low_rad_s: FloatArray
    high_rad_s: FloatArray
    order: int
    criteria: tuple[float, ...]
    level: float

    def __post_init__(self) -> None:
        for name in ("phase_rad", "value_rad_s", "low_rad_s", "high_rad_s"):
            object.__setattr__(self, name, frozen_view(getattr(self, name)))


def coupling_function(
    series: PsiSeries,
    *,
    rng: np.random.Generator,
    highest: int = HIGHEST,
    level: float = 0.95,
) -> CouplingFunction:
    """Return dpsi/dt over psi with simultaneous bands, harmonics chosen by the record.

    Parameters
    ----------
    series : PsiSeries
        A record in which psi goes round at least 1.5 times.
    rng : numpy.random.Generator
        For the draws behind the bands.
    highest : int
        Most harmonics tried, at least 1.
    level : float
        Coverage of the bands, between 0 and 1.

    Returns
    -------
    CouplingFunction

    Raises
    ------
    FitError
        If the record is too short, does not go round, or cannot be followed at its step.

    Notes
    -----
    The bands take the harmonics as chosen for known; in simulation they cover 93 to 98 %.
    """
    reason = unusable(series, AdlerSettings().least_samples)
    turns = sum(float(np.ptp(part)) for part in series.segments if part.size) / TURN_RAD
    if reason or turns < LEAST_TURNS:
        raise FitError(
            f"coupling function: {reason or f'psi covers {turns:.2f} turns'}; psi must go round "
            f"at least {LEAST_TURNS:g} times"
        )
    start = fit_records([series], [None], AdlerSettings(intervals=False))[0].theta
    fits: list[HarmonicFit] = []
    for harmonics in range(1, highest + 1):
        fitted = fit_harmonics([series], [start], harmonics)[0]
        if fitted is None:
            break
        fits.append(fitted)
        start = fitted.theta
    if not fits:
        raise FitError(
            "coupling function: the fit cannot follow psi at its sampling step; sample faster"
        )
    best = min(fits, key=lambda fitted: fitted.criterion)
    return _with_bands(best, tuple(one.criterion for one in fits), rng, level)


def _with_bands(
    best: HarmonicFit, criteria: tuple[float, ...], rng: np.random.Generator, level: float
) -> CouplingFunction:
    """Return the function of a fit; the band is as wide as the largest of the drawn errors."""
    phase_rad = np.linspace(0.0, TURN_RAD, POINTS)
    design = fourier_columns(phase_rad, best.harmonics)
    value = design @ best.theta[:-2]
    values, vectors = np.linalg.eigh(best.covariance)
    half = vectors * np.sqrt(np.maximum(values, 0.0))
    u = np.sqrt(np.sum((design @ half) ** 2, axis=1))
    draws = design @ half @ rng.standard_normal((half.shape[1], DRAWS))
    largest = np.max(np.abs(draws) / np.maximum(u, 1e-300)[:, None], axis=0)
    factor = quantile(largest, level)
    return CouplingFunction(
        phase_rad=phase_rad,
        value_rad_s=value,
        low_rad_s=value - factor * u,
        high_rad_s=value + factor * u,
        order=best.harmonics,
        criteria=criteria,
        level=level,
    )


def fourier_columns(phase_rad: FloatArray, harmonics: int) -> FloatArray:
    """Return the columns (1, cos psi, sin psi, cos 2 psi, ...), shape (n, 1 + 2 M)."""
    orders = np.arange(1, harmonics + 1) * np.asarray(phase_rad)[:, None]
    columns = np.empty((orders.shape[0], 1 + 2 * harmonics))
    columns[:, 0] = 1.0
    columns[:, 1::2], columns[:, 2::2] = np.cos(orders), np.sin(orders)
    return columns


def fit_harmonics(
    series: Sequence[PsiSeries], theta: Sequence[FloatArray], harmonics: int
) -> list[HarmonicFit | None]:
    """Return the fit of a drift with M harmonics to each record.

    Scoring steps of the drift coefficients by weighted regression of the innovations; both
    noises are scaled by the mean square of the standardised innovations.

    Parameters
    ----------
    series : sequence of PsiSeries
    theta : sequence of arrays
        (dw, a_1, b_1, ..., ln D, ln R) to start from, at most M harmonics.
    harmonics : int, at least 1

    Returns
    -------
    list of HarmonicFit or None
        None where psi cannot be followed at the step of the record.
    """
    points = [_padded(point, harmonics) for point in theta]
    best: list[HarmonicFit | None] = [None] * len(series)
    for _ in range(ROUNDS):
        traces = trace_records(series, points, harmonics=harmonics)
        for row, trace in enumerate(traces):
            found = _judged(points[row], trace)
            kept = best[row]
            if found is not None and (kept is None or found[0].loglik > kept.loglik):
                best[row] = kept = found[0]
                points[row] = _advanced(found[0], found[1])
            elif kept is not None:
                # Too far: come back halfway to the best point.
                points[row] = 0.5 * (points[row] + kept.theta)
    return best


def _padded(point: FloatArray, harmonics: int) -> FloatArray:
    """Return the point with zeros for the harmonics it lacks."""
    drift = np.zeros(1 + 2 * harmonics)
    drift[: point.size - 2] = point[:-2]
    return np.concatenate([drift, point[-2:]])


def _judged(point: FloatArray, trace: DriftTrace) -> tuple[HarmonicFit, FloatArray] | None:
    """Return the fit at a point and the step from it, None where psi cannot be followed."""
    if trace.innovation.size <= point.size:
        return None
    root = np.sqrt(trace.variance)
    v, columns = trace.innovation / root, trace.columns / root[:, None]
    scale = float(v @ v) / v.size
    size = np.maximum(np.sqrt(np.sum(columns**2, axis=0)), 1e-300)
    inverse = np.linalg.pinv((columns / size).T @ (columns / size), hermitian=True, rcond=1e-10)
    covariance = inverse / np.outer(size, size)
    fitted = HarmonicFit(
        theta=point,
        covariance=scale * covariance,
        loglik=-0.5 * float(np.sum(np.log(2.0 * np.pi * scale * trace.variance)) + v.size),
        samples=v.size,
    )
    return fitted, np.asarray(covariance @ (columns.T @ v))


def _advanced(fitted: HarmonicFit, step: FloatArray) -> FloatArray:
    """Return the next point; no step is longer than the drift itself."""
    drift = fitted.theta[:-2]
    longest = max(float(np.sum(np.abs(drift))), 1e-12)
    step = step * min(1.0, longest / max(float(np.max(np.abs(step))), 1e-300))
    return np.concatenate([drift + step, fitted.theta[-2:]])
