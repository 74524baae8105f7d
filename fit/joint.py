"""Joint likelihood of all points at one level and direction of a sweep.

Every point is a record of psi; points share the centre c, the coupling K, the offset psi0
with its slope over detuning (a cable or filter delay turns psi0 as the drive moves), and the
noise. Point r has detuning x_r = 2 pi m (centre_hz - drive_hz); its filter likelihood
(``fit.likelihood``) is summed over points, and score and information are carried from
(dw, a, b, ln D, ln R) of each record to the shared parameters by the chain rule.

Shared parameters, columns of ``SharedFit.theta``: centre 2 pi m centre_hz and K in rad/s,
psi0 in rad at zero detuning, its slope in s (rad per rad/s), ln D, ln R.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from fit.likelihood import LaneBatch, damped_step, lane_likelihood, make_lanes
from fit.records import RegionPoint
from rig.angles import rad_s_from_hz
from rig.arrays import FloatArray, IntArray

CENTRE, COUPLING, OFFSET, SLOPE, LOG_D, LOG_R = range(6)
WIDTH = 6
ITERATIONS = 60
DECREMENT = 1e-4  # squared step in standard errors at which the fit has settled
# Where rounding of the sums stops the climb first, a tenth of a standard error will do.
ROUNDED_DECREMENT = 1e-2
_LOG_STEP = 2.0  # longest single step of ln D and ln R
# A variance below this share of what one step of the other noise adds has no influence.
NEGLIGIBLE = 1e-3
_DAMPING_START, _DAMPING_TOP = 1e-3, 1e4


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PointGroup:
    """Points of one level and direction, cut into lanes; ``drive_rad_s`` is 2 pi m drive."""

    batch: LaneBatch
    owner: IntArray
    drive_rad_s: FloatArray


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SharedFit:
    """Maximum of a joint likelihood: theta (6,), covariance (6, 6), log-likelihood."""

    theta: FloatArray
    covariance: FloatArray
    loglik: float
    converged: bool


def group_points(points: Sequence[RegionPoint], order_m: int) -> PointGroup:
    """Return the lanes of some points that share a level and a direction.

    Parameters
    ----------
    points : sequence of RegionPoint, each with a drive frequency or a detuning
    order_m : int, m of the locking order n:m

    Notes
    -----
    For a mutual pair there is no drive: the detuning from free-running captures takes its
    place with the opposite sign, so that the centre comes out as an error of that detuning.
    """
    batch, owner = make_lanes([point.series for point in points])
    drive = [rad_s_from_hz(_drive_hz(point, order_m)) for point in points]
    return PointGroup(batch=batch, owner=owner, drive_rad_s=np.array(drive, dtype=float))


def _drive_hz(point: RegionPoint, order_m: int) -> float:
    if point.drive_hz is not None:
        return order_m * point.drive_hz
    return -(point.detuning_hz or 0.0)


def joint_likelihood(group: PointGroup, theta: FloatArray) -> tuple[float, FloatArray, FloatArray]:
    """Return log-likelihood, score (6,) and expected information (6, 6) of shared parameters."""
    detuning = theta[CENTRE] - group.drive_rad_s
    offset = theta[OFFSET] + theta[SLOPE] * detuning
    a, b = theta[COUPLING] * np.sin(offset), -theta[COUPLING] * np.cos(offset)
    count = detuning.size
    records = np.column_stack(
        [detuning, a, b, np.full(count, theta[LOG_D]), np.full(count, theta[LOG_R])]
    )
    lanes = lane_likelihood(group.batch, records[group.owner])
    jacobian = _jacobian(theta, detuning, offset)[group.owner]
    score = np.einsum("rij,ri->j", jacobian, lanes.score)
    information = np.einsum("rij,rik,rkl->jl", jacobian, lanes.information, jacobian)
    return float(lanes.loglik.sum()), score, information


def _jacobian(theta: FloatArray, detuning: FloatArray, offset: FloatArray) -> FloatArray:
    """Return d(dw, a, b, ln D, ln R) / d(shared parameters) of each record, (M, 5, 6)."""
    sine, cosine = np.sin(offset), np.cos(offset)
    out = np.zeros((detuning.size, 5, WIDTH))
    out[:, 0, CENTRE] = 1.0
    for row, by_coupling, by_offset in (
        (1, sine, theta[COUPLING] * cosine),
        (2, -cosine, theta[COUPLING] * sine),
    ):
        out[:, row, COUPLING] = by_coupling
        out[:, row, OFFSET] = by_offset
        out[:, row, SLOPE] = by_offset * detuning
        out[:, row, CENTRE] = by_offset * theta[SLOPE]
    out[:, 3, LOG_D] = 1.0
    out[:, 4, LOG_R] = 1.0
    return out


def fit_shared(group: PointGroup, starts: Sequence[FloatArray]) -> SharedFit | None:
    """Return the best maximum of the joint likelihood over some starts, or None.

    Parameters
    ----------
    group : PointGroup
    starts : sequence of arrays (6,)

    Returns
    -------
    SharedFit, or None when no start has a finite likelihood
    """
    fits = [fit for start in starts if (fit := _climb(group, start)) is not None]
    return max(fits, key=lambda fit: fit.loglik) if fits else None


def _climb(group: PointGroup, start: FloatArray) -> SharedFit | None:
    """Damped Fisher scoring from one start."""
    theta = start.copy()
    loglik, score, information = joint_likelihood(group, theta)
    if not math.isfinite(loglik):
        return None
    damping, converged = _DAMPING_START, False
    held: tuple[int, ...] = ()
    for _ in range(ITERATIONS):
        held = _without_influence(group, theta, score)
        plain = _step(score, information, 0.0, held)
        left = abs(float(plain @ score))
        stuck = damping > _DAMPING_TOP
        converged = left < (ROUNDED_DECREMENT if stuck else DECREMENT)
        if converged or stuck:
            break
        trial = theta + _shortened(_step(score, information, damping, held))
        found = joint_likelihood(group, trial)
        if found[0] > loglik:
            theta, (loglik, score, information) = trial, found
            damping = max(damping * 0.1, 1e-9)
        else:
            damping *= 10.0
    theta = _folded(theta)
    return SharedFit(
        theta=theta,
        covariance=_covariance(information, held),
        loglik=loglik,
        converged=converged,
    )


def _without_influence(group: PointGroup, theta: FloatArray, score: FloatArray) -> tuple[int, ...]:
    """Return the noise columns that run to zero: they are held where they are."""
    step_s = float(np.median(group.batch.step_s))
    gathered = math.log(2.0 * step_s) + theta[LOG_D]
    held = []
    if theta[LOG_R] < gathered + math.log(NEGLIGIBLE) and score[LOG_R] < 0:
        held.append(LOG_R)
    if gathered < theta[LOG_R] + math.log(NEGLIGIBLE) and score[LOG_D] < 0:
        held.append(LOG_D)
    return tuple(held)


def _covariance(information: FloatArray, held: tuple[int, ...]) -> FloatArray:
    """Return the inverse of the information over the columns that were not held."""
    free = [column for column in range(WIDTH) if column not in held]
    scale = 1.0 / np.sqrt(np.maximum(np.diag(information)[free], np.finfo(float).tiny))
    inner = information[np.ix_(free, free)] * np.outer(scale, scale)
    out = np.zeros((WIDTH, WIDTH))
    out[np.ix_(free, free)] = np.linalg.pinv(inner, hermitian=True) * np.outer(scale, scale)
    return out


def _step(
    score: FloatArray, information: FloatArray, damping: float, held: tuple[int, ...]
) -> FloatArray:
    mask = np.zeros((1, WIDTH), dtype=bool)
    mask[0, list(held)] = True
    step = damped_step(score[None], information[None], np.array([damping]), mask)
    return np.asarray(step[0])


def _shortened(step: FloatArray) -> FloatArray:
    """Return the step cut so that no logarithm moves by more than 2."""
    largest = float(np.max(np.abs(step[LOG_D:])))
    return step * min(1.0, _LOG_STEP / max(largest, 1e-300))


def _folded(theta: FloatArray) -> FloatArray:
    """Return the same curve with K >= 0: a negative coupling is an offset turned by pi."""
    if theta[COUPLING] >= 0.0:
        return theta
    folded = theta.copy()
    folded[COUPLING] = -folded[COUPLING]
    folded[OFFSET] += math.pi
    return folded
