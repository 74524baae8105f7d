"""Likelihood of one ramped record: maps from shared parameters to lanes, and the climb.

See ``fit.ramp`` for the equations and what is made of the fit.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from fit.likelihood import LaneBatch, damped_step, lane_likelihood, make_lanes
from fit.records import PsiSeries
from rig.arrays import BoolArray, FloatArray
from rig.errors import FitError

CENTRE, COUPLING, OFFSET, SLOPE, LOG_D, LOG_R, RATE = range(7)
WIDTH = 7
LANE_SAMPLES = 100  # psi0 and a ramped level are held over a lane
ITERATIONS, DECREMENT = 80, 1e-4
_LIMITS = (0.5, 0.5, 1.0, math.inf, 2.0, 2.0, math.inf)  # longest steps; first two in K

LaneMap = Callable[[LaneBatch, FloatArray], tuple[FloatArray, FloatArray]]


@dataclass(frozen=True, slots=True, kw_only=True)
class LevelRamp:
    """Drive amplitude start + rate_per_s * t at a fixed drive frequency; it stays above 0."""

    start: float
    rate_per_s: float

    def __post_init__(self) -> None:
        if not self.rate_per_s:
            raise FitError("level ramp: rate_per_s must differ from 0, got 0")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RampFit:
    """Maximum of a ramp likelihood: theta (7,), covariance (7, 7), log-likelihood."""

    theta: FloatArray
    covariance: FloatArray
    loglik: float


def frequency_map(start_rad_s: float) -> LaneMap:
    """Return the map from theta to lane parameters for a ramped drive frequency.

    Parameters
    ----------
    start_rad_s : float, 2 pi m drive_hz at time 0
    """

    def apply(batch: LaneBatch, theta: FloatArray) -> tuple[FloatArray, FloatArray]:
        middle_s = batch.start_s + 0.5 * (batch.count - 1) * batch.step_s
        detuning = theta[CENTRE] - start_rad_s + theta[RATE] * batch.start_s
        centred = theta[CENTRE] - start_rad_s + theta[RATE] * middle_s
        offset = theta[OFFSET] + theta[SLOPE] * centred
        rows, jacobian = _lane_rows(theta, offset, np.ones(offset.size))
        rows[:, 0], rows[:, 5] = detuning, theta[RATE]
        jacobian[:, 0, CENTRE], jacobian[:, 0, RATE], jacobian[:, 5, RATE] = 1.0, batch.start_s, 1.0
        turned = jacobian[:, 1:3, OFFSET]
        jacobian[:, 1:3, SLOPE] = turned * centred[:, None]
        jacobian[:, 1:3, CENTRE] = turned * theta[SLOPE]
        jacobian[:, 1:3, RATE] = turned * (theta[SLOPE] * middle_s)[:, None]
        return rows, jacobian

    return apply


def level_map(ramp: LevelRamp) -> LaneMap:
    """Return the map from theta to lane parameters for a ramped level.

    Parameters
    ----------
    ramp : LevelRamp
    """

    def apply(batch: LaneBatch, theta: FloatArray) -> tuple[FloatArray, FloatArray]:
        middle_s = batch.start_s + 0.5 * (batch.count - 1) * batch.step_s
        amplitude = ramp.start + ramp.rate_per_s * middle_s
        offset = np.full(amplitude.size, theta[OFFSET])
        rows, jacobian = _lane_rows(theta, offset, amplitude)
        rows[:, 0] = theta[CENTRE]
        jacobian[:, 0, CENTRE] = 1.0
        return rows, jacobian

    return apply


def _lane_rows(
    theta: FloatArray, offset: FloatArray, amplitude: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return rows (L, 6) with a, b, ln D, ln R filled, and their derivatives (L, 6, 7)."""
    sine, cosine = amplitude * np.sin(offset), amplitude * np.cos(offset)
    rows = np.zeros((offset.size, 6))
    jacobian = np.zeros((offset.size, 6, WIDTH))
    rows[:, 1], rows[:, 2] = theta[COUPLING] * sine, -theta[COUPLING] * cosine
    rows[:, 3], rows[:, 4] = theta[LOG_D], theta[LOG_R]
    jacobian[:, 1, COUPLING], jacobian[:, 2, COUPLING] = sine, -cosine
    jacobian[:, 1, OFFSET] = theta[COUPLING] * cosine
    jacobian[:, 2, OFFSET] = theta[COUPLING] * sine
    jacobian[:, 3, LOG_D] = 1.0
    jacobian[:, 4, LOG_R] = 1.0
    return rows, jacobian


def best_ramp_fit(
    series: PsiSeries, mapped: LaneMap, starts: list[FloatArray], held: tuple[int, ...]
) -> RampFit | None:
    """Return the best settled maximum over the starts, None when none settles.

    Parameters
    ----------
    series : PsiSeries
    mapped : callable
        From (lanes, theta) to lane parameters (L, 6) and their derivatives (L, 6, 7).
    starts : list of arrays (7,)
    held : tuple of int
        Columns kept at their start.
    """
    batch, _ = make_lanes([series], LANE_SAMPLES)
    fits = [fit for start in starts if (fit := _climb(batch, mapped, start, held)) is not None]
    return max(fits, key=lambda fit: fit.loglik) if fits else None


def _evaluate(
    batch: LaneBatch, mapped: LaneMap, theta: FloatArray
) -> tuple[float, FloatArray, FloatArray]:
    rows, jacobian = mapped(batch, theta)
    found = lane_likelihood(batch, rows)
    score = np.einsum("lij,li->j", jacobian, found.score)
    information = np.einsum("lij,lik,lkm->jm", jacobian, found.information, jacobian)
    return float(found.loglik.sum()), score, information


def _climb(
    batch: LaneBatch, mapped: LaneMap, start: FloatArray, held: tuple[int, ...]
) -> RampFit | None:
    """Damped Fisher scoring from one start; None when it does not settle."""
    theta = start.copy()
    fixed = np.zeros((1, WIDTH), dtype=bool)
    fixed[0, list(held)] = True
    loglik, score, information = _evaluate(batch, mapped, theta)
    damping = 1e-3
    for _ in range(ITERATIONS):
        if not math.isfinite(loglik) or damping > 1e6:
            return None
        plain = damped_step(score[None], information[None], np.zeros(1), fixed)[0]
        if abs(float(plain @ score)) < (DECREMENT if damping < 1.0 else 100 * DECREMENT):
            return RampFit(
                theta=_folded(theta), covariance=_inverse(information, fixed[0]), loglik=loglik
            )
        step = damped_step(score[None], information[None], np.array([damping]), fixed)[0]
        trial = theta + _shortened(step, theta)
        found = _evaluate(batch, mapped, trial)
        if found[0] > loglik:
            theta, (loglik, score, information) = trial, found
            damping = max(0.1 * damping, 1e-9)
        else:
            damping *= 10.0
    return None


def _shortened(step: FloatArray, theta: FloatArray) -> FloatArray:
    limits = np.array(_LIMITS)
    limits[:2] *= max(abs(float(theta[COUPLING])), 1e-12)
    return step * min(1.0, float(np.min(limits / np.maximum(np.abs(step), 1e-300))))


def _inverse(information: FloatArray, fixed: BoolArray) -> FloatArray:
    """Return the inverse over the free columns that have influence, zero elsewhere."""
    free = np.flatnonzero(~fixed & (np.diag(information) > 0.0))
    scale = 1.0 / np.sqrt(np.diag(information)[free])
    inner = information[np.ix_(free, free)] * np.outer(scale, scale)
    out = np.zeros_like(information)
    out[np.ix_(free, free)] = np.linalg.pinv(inner, hermitian=True) * np.outer(scale, scale)
    return out


def _folded(theta: FloatArray) -> FloatArray:
    """Return the same curve with K >= 0."""
    if theta[COUPLING] >= 0.0:
        return theta
    out = theta.copy()
    out[COUPLING] *= -1.0
    out[OFFSET] += math.pi
    return out
