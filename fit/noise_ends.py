"""Likelihood-ratio interval of the phase noise D, with the measurement noise R free down to zero.

ln D is profiled over dw, a, b and R >= 0. Two things make the ratio hold its level where
standard errors do not:

- R is moved as itself, not as its logarithm: with the bound R >= 0 kept, the ratio covers
  95-96 % whether the record has measurement noise or none (a normal law of ln D covers 94 to
  99.7 %, for with R at its bound the error of D is that of a record whose R is known).
- The mean parameters take part of the noise with them. The likelihood is tilted by half the
  logarithm of their information (Cox and Reid 1987), which gives back what they took.

D is given where its error is small, that is, where it came out large enough; records just past
that gate are those with luck. Their ends are those of a normal law cut off at the gate
(``cut_deviates``), so that the intervals of those given hold the truth as often as they say.

References
----------
Cox and Reid 1987, J. R. Statist. Soc. B 49, 1-39 (recalled).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from fit.intervals import LOG_RISE
from fit.lanes import repeat_lanes
from fit.likelihood import (
    LOG_DIFFUSION_FLOOR,
    LOG_NOISE_FLOOR,
    LaneBatch,
    LanePrior,
    LaneResult,
    damped_step,
    record_likelihood,
)
from rig.arrays import BoolArray, FloatArray, IntArray

# A noise strength is given when its relative standard error is below this: 2.5 errors from 0.
NOISE_GATE = 0.4
# How far below the estimate (in ln D) the growth of the error towards the gate is looked at.
GATE_REACH = 0.6
# Below this standard error of ln D neither the gate nor R's share of the tilt matters.
WELL_KNOWN = 0.12
# Relative scatter of the error itself from record to record, and of R where it counts as told.
GATE_BLUR = 0.04
NOISE_TOLD = 0.5
SEARCH_STEPS = 14
LOG_STEP = 1.5
# From this step on steps are shortened: expected information may overshoot the true curvature.
RELAXED_FROM = 4
LOGLIK_TOLERANCE = 0.03
LAST_TOLERANCE = 0.15
# An end further than this many deviates is open.
LARGEST_DEVIATE = 6.0
TAIL = 0.025
NORMAL_975 = 1.959964
# From this many errors beyond the gate on it no longer matters.
FREE_OF_GATE = 5.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class NoiseSearch:
    """What the ends of D are searched from.

    ``theta`` (M, 5) at the maximum, ``step_s`` (M,), ``deviates`` (M, 2) below and above in
    standard normal units, ``tilt`` (M, 2) of the log-likelihood by ln D and ln R.
    """

    theta: FloatArray
    step_s: FloatArray
    deviates: FloatArray
    tilt: FloatArray


def cut_deviates(above: FloatArray) -> FloatArray:
    """Return how far the ends lie from a value that was given only beyond a gate, (M, 2).

    Parameters
    ----------
    above : array, shape (M,)
        Standard errors by which the value lies beyond the gate; infinity where no gate acts.

    Notes
    -----
    x is normal about the truth and seen only when above c. The lower end is the truth for which
    an x so high or higher has a chance of 2.5 % among those seen: 1.96 errors far from the
    gate, without limit at it. The upper end could come nearer and is left where it is, for
    some pass the gate by other luck than that of D.
    """
    return np.array([_cut_pair(float(one)) for one in above]).reshape(-1, 2)


def _cut_pair(above: float) -> tuple[float, float]:
    """Return the deviates of one value, below and above."""
    if above > FREE_OF_GATE:
        return NORMAL_975, NORMAL_975
    low = _root(lambda z: _beyond(z) - TAIL * _beyond(z - above), 0.0, LARGEST_DEVIATE)
    return low, NORMAL_975


def _beyond(z: float) -> float:
    """Return the chance that a standard normal variable exceeds z."""
    return 0.5 * math.erfc(z / math.sqrt(2.0))


def _root(falling: Callable[[float], float], low: float, high: float) -> float:
    """Return where a falling function passes zero, or the end that is nearer to it."""
    for _ in range(40):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if falling(middle) > 0.0 else (low, middle)
    return 0.5 * (low + high)


def cut_median(above: float) -> float:
    """Return how far the median-unbiased truth lies below a value given only beyond a gate.

    Parameters
    ----------
    above : float
        Standard errors by which the value lies beyond the gate.
    """
    return _root(lambda z: _beyond(z) - 0.5 * _beyond(z - above), 0.0, 30.0)


def errors_beyond_gate(log_u: FloatArray, step: float, noise_seen: BoolArray) -> FloatArray:
    """Return by how many standard errors ln D lies beyond the gate, (M,).

    Parameters
    ----------
    log_u : array, shape (M, N)
        Standard errors of ln D at the estimate and at ln D lower by step, twice step, ...
    step : float
    noise_seen : bool array, shape (M,)
        Where R is told: its luck carries log_u over the gate as well.

    Notes
    -----
    The integral of d ln D/log_u from where log_u passes the gate up to the estimate; infinity
    where it stays below the gate all the way: then the number of samples decides what is
    given, and luck has no part.
    """
    room = np.zeros(log_u.shape[0])
    inside = log_u[:, 0] < NOISE_GATE
    for upper, lower in zip(log_u.T[:-1], log_u.T[1:], strict=True):
        rise = np.maximum(lower - upper, 1e-12)
        share = np.where(lower < NOISE_GATE, 1.0, np.clip((NOISE_GATE - upper) / rise, 0.0, 1.0))
        room += np.where(
            inside, share * step / (0.5 * (upper + np.minimum(lower, NOISE_GATE))), 0.0
        )
        inside &= lower < NOISE_GATE
    far = np.where(inside, np.inf, room)
    near = np.log(NOISE_GATE / np.minimum(log_u[:, 0], NOISE_GATE)) / GATE_BLUR
    return np.where(noise_seen, np.minimum(far, near), far)


def mean_tilt(information: FloatArray, raised: FloatArray, locked: BoolArray) -> FloatArray:
    """Return -d/ds of half the log-determinant of the information of dw, a, b, shape (M,).

    Parameters
    ----------
    information, raised : arrays, shape (M, 5, 5)
        At the estimate, and with the noise strength s (a logarithm) higher by LOG_RISE.
    locked : bool array, shape (M,)
        Where half of it counts: the other half is the relaxation rate, which moves with D.
    """
    logs = [np.linalg.slogdet(part[:, :3, :3])[1] for part in (information, raised)]
    fall = 0.5 * (logs[0] - logs[1]) / LOG_RISE
    known = np.where(np.isfinite(fall), np.clip(fall, 0.0, 1.5), 0.0)
    return np.where(locked, 0.5, 1.0) * known


def find_noise_ends(
    batch: LaneBatch, owner: IntArray, search: NoiseSearch, prior: LanePrior
) -> tuple[FloatArray, BoolArray]:
    """Return ln D at both ends (M, 2), and whether each was reached (M, 2).

    Parameters
    ----------
    batch, owner : lanes and their row in ``search``
    search : NoiseSearch
    prior : LanePrior, M rows

    Notes
    -----
    At each point the likelihood is taken as its local parabola (score and expected
    information, R as itself) and the next point is the extreme of ln D where that has fallen
    by half the squared deviate. R at its floor stays there while it would fall further.
    """
    rows = search.theta.shape[0]
    top = _top(batch, owner, search, prior)
    theta = np.repeat(top[0], 2, axis=0)
    floor = np.repeat(top[1], 2) - 0.5 * (search.deviates**2).ravel()
    side = np.tile([-1.0, 1.0], rows)
    of = np.repeat(np.arange(rows), 2)
    found = np.zeros(2 * rows, dtype=bool)
    running = (search.deviates < LARGEST_DEVIATE - 0.01).ravel()
    for turn in range(SEARCH_STEPS):
        who = np.flatnonzero(running)
        if who.size == 0:
            break
        now = _evaluate(batch, owner, of[who], theta[who], search, prior)
        step_s = search.step_s[of[who]]
        held = _at_floor(theta[who], step_s) & (now.score[:, 4] < 0.0)
        step, left = _leap(now, floor[who], side[who], held)
        below = np.abs(now.loglik - floor[who])
        good = np.isfinite(now.loglik) & (left > 0.0)
        done = good & (below < LOGLIK_TOLERANCE) & (np.abs(step[:, 3]) < 0.03)
        found[who] = done | (good & (turn >= RELAXED_FROM) & (below < LAST_TOLERANCE))
        running[who[done]] = False
        factor = 0.6 if turn >= RELAXED_FROM else 1.0
        back = 0.5 * (search.theta[of[who]] - theta[who])
        moved = _moved(theta[who], step * factor, step_s)
        moved = np.where(good[:, None], moved, theta[who] + back)
        # Below this D is not seen at all: the interval goes down to zero.
        lost = moved[:, 3] < moved[:, 4] - np.log(2.0 * step_s) + LOG_DIFFUSION_FLOOR
        running[who[lost]] = False
        theta[who] = np.where((done | lost)[:, None], theta[who], moved)
    return theta[:, 3].reshape(rows, 2), found.reshape(rows, 2)


def _top(
    batch: LaneBatch, owner: IntArray, search: NoiseSearch, prior: LanePrior
) -> tuple[FloatArray, FloatArray]:
    """Return the maximum of the tilted likelihood (one step from that of the plain one)."""
    rows = np.arange(search.theta.shape[0])
    start = _evaluate(batch, owner, rows, search.theta, search, prior)
    held = np.zeros(search.theta.shape, dtype=bool)
    held[:, 4] = _at_floor(search.theta, search.step_s) & (start.score[:, 4] < 0.0)
    step = damped_step(start.score, start.information, np.zeros(rows.size), held)
    theta = _moved(search.theta, step, search.step_s)
    after = _evaluate(batch, owner, rows, theta, search, prior)
    better = after.loglik > start.loglik
    return (
        np.where(better[:, None], theta, search.theta),
        np.where(better, after.loglik, start.loglik),
    )


def _evaluate(
    batch: LaneBatch,
    owner: IntArray,
    of: IntArray,
    theta: FloatArray,
    search: NoiseSearch,
    prior: LanePrior,
) -> LaneResult:
    """Return the tilted likelihood of records ``of``, derivatives by R in place of ln R."""
    now = record_likelihood(*repeat_lanes(batch, owner, of), theta, prior.rows(of))
    score, information = now.score, now.information
    score[:, 3:5] += search.tilt[of]
    noise = np.exp(theta[:, 4])
    score[:, 4] /= noise
    information[:, 4, :] /= noise[:, None]
    information[:, :, 4] /= noise[:, None]
    loglik = now.loglik + np.sum(search.tilt[of] * theta[:, 3:5], axis=1)
    return LaneResult(loglik=loglik, score=score, information=information)


def _leap(
    now: LaneResult, floor: FloatArray, side: FloatArray, at_floor: BoolArray
) -> tuple[FloatArray, FloatArray]:
    """Return the step to the extreme of ln D on the local parabola, and what it has to lose."""
    held = np.zeros(now.score.shape, dtype=bool)
    held[:, 4] = at_floor
    slope = np.zeros_like(now.score)
    slope[:, 3] = 1.0
    none = np.zeros(floor.size)
    centre = damped_step(now.score, now.information, none, held)
    direction = damped_step(slope, now.information, none, held)
    with np.errstate(all="ignore"):
        left = 2.0 * (now.loglik - floor) + np.sum(centre * now.score, axis=1)
        variance = np.maximum(direction[:, 3], 1e-300)
        reach = side * np.sqrt(np.maximum(left, 0.0) / variance)
    return centre + direction * np.where(np.isfinite(reach), reach, 0.0)[:, None], left


def _moved(theta: FloatArray, step: FloatArray, step_s: FloatArray) -> FloatArray:
    """Return theta after a step in (dw, a, b, ln D, R), with R held above its floor."""
    moved = theta + step
    moved[:, 3] = theta[:, 3] + np.clip(step[:, 3], -LOG_STEP, LOG_STEP)
    noise, jump = np.exp(theta[:, 4]), 2.0 * step_s * np.exp(theta[:, 3])
    least = np.maximum(_floor(moved, step_s), theta[:, 4] - LOG_STEP)
    raised = np.minimum(noise + step[:, 4], np.exp(2.0) * (noise + jump))
    moved[:, 4] = np.log(np.maximum(raised, np.exp(least)))
    return moved


def _floor(theta: FloatArray, step_s: FloatArray) -> FloatArray:
    """Return the least ln R beside this D."""
    return np.asarray(theta[:, 3] + np.log(2.0 * step_s) + LOG_NOISE_FLOOR)


def _at_floor(theta: FloatArray, step_s: FloatArray) -> BoolArray:
    """Return where R stands at its floor (the floor moves with D: a tenth counts as there)."""
    return np.asarray(theta[:, 4] < _floor(theta, step_s) + 0.1)
