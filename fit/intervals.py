"""Likelihood-ratio intervals of detuning, coupling and offset, all ends searched together.

The end of an interval is the extreme of a quantity g(theta) over all parameters whose
likelihood is within half the threshold of the maximum; this equals the profile interval.
At each point the likelihood is taken as its local parabola (score and expected information)
and g as its local plane, which gives the next point in closed form.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from fit.likelihood import LaneBatch, LanePrior, damped_step, record_likelihood
from fit.quantiles import student_above
from rig.arrays import BoolArray, FloatArray, IntArray

Target = Callable[[FloatArray], FloatArray]

# An end is found when the likelihood is this near its threshold (1 % of the half-width).
LOGLIK_TOLERANCE = 0.02
STEP_TOLERANCE = 0.1  # standard errors along the edge of the region
SEARCH_STEPS = 16
# From this step on steps are shortened: expected information may overshoot the true curvature.
RELAXED_FROM = 3
LAST_TOLERANCE = 0.2
LOG_STEP = 2.0
LOG_RANGE = 3.0
# Rise of ln D by which the share of D in a variance is found.
LOG_RISE = 0.5
# Variance of ln R from which the record says nothing of R.
NOISE_UNKNOWN = 4.0
# A variance is never trusted to less than this many degrees of freedom: Student's quantile
# would outgrow what the likelihood, which lets D rise by itself, already allows for.
LEAST_FREEDOM = 5.0
MEAN_PARAMETERS = 3.0  # dw, a, b
LARGEST_RISE = 0.25
# Variance of ln D from which D counts as hardly seen.
BLUR = 2.0
# Beats from which on the mean parameters take ever less from D.
FEW_BEATS = 3.0
# 2 D h below this part of R: D stands at its floor and its own error means nothing.
DIFFUSION_FLOOR = 1e-3


def coupling_rad_s(theta: FloatArray) -> FloatArray:
    """Return K = hypot(a, b) of each row of theta, rad/s."""
    return np.asarray(np.hypot(theta[:, 1], theta[:, 2]))


def offset_rad(theta: FloatArray) -> FloatArray:
    """Return psi0 = atan2(a, -b) of each row of theta, rad."""
    return np.asarray(np.arctan2(theta[:, 1], -theta[:, 2]))


def detuning_slope(theta: FloatArray) -> FloatArray:
    """Return the gradient of dw, shape (M, P)."""
    slope = np.zeros_like(theta)
    slope[:, 0] = 1.0
    return slope


def coupling_slope(theta: FloatArray) -> FloatArray:
    """Return the gradient of K, shape (M, P)."""
    slope = np.zeros_like(theta)
    slope[:, 1:3] = theta[:, 1:3] / np.maximum(coupling_rad_s(theta), 1e-300)[:, None]
    return slope


def offset_slope(theta: FloatArray) -> FloatArray:
    """Return the gradient of psi0, shape (M, P)."""
    slope = np.zeros_like(theta)
    squared = np.maximum(coupling_rad_s(theta) ** 2, 1e-300)
    slope[:, 1] = -theta[:, 2] / squared
    slope[:, 2] = theta[:, 1] / squared
    return slope


TARGETS: dict[str, Target] = {
    "detuning": detuning_slope,
    "coupling": coupling_slope,
    "offset": offset_slope,
}


def student_threshold(freedom: FloatArray) -> FloatArray:
    """Return the 95 % threshold of the likelihood ratio, the squared Student quantile."""
    counted = np.maximum(freedom, LEAST_FREEDOM).tolist()
    return np.array([student_above(one, 0.025) for one in counted]) ** 2


def target_threshold(
    target: str, theta: FloatArray, covariances: tuple[FloatArray, FloatArray], beats: FloatArray
) -> FloatArray:
    """Return the likelihood-ratio threshold of a target, shape (M,).

    Parameters
    ----------
    target : str, a key of TARGETS
    theta : array, shape (M, 5)
    covariances : two arrays, shape (M, 5, 5)
        At parameters where the record sees D (``lifted``), and with ln D higher by LOG_RISE.
    beats : array, shape (M,)
        Beats of a drifting record, infinity where it does not drift.

    Notes
    -----
    The variance V of the target rests on estimated D and R: nu = 2/var(ln V), with
    var(ln V) = w^2 var(ln D) + 2 w (1 - w) cov(ln D, ln R) + (1 - w)^2 var(ln R) and w the
    share d ln V/d ln D. Where the record says nothing of R, all of V is put down to D. D and R
    themselves come out low by what the mean parameters take of them; that raises the
    threshold, by a quarter at most.

    References
    ----------
    Satterthwaite 1946, Biometrics Bulletin 2, 110-114 (recalled).
    """
    before, after = covariances
    slope = TARGETS[target](theta)
    low, high = (np.einsum("mi,mij,mj->m", slope, one, slope) for one in (before, after))
    known = (low > 0.0) & (high > 0.0) & np.isfinite(low) & np.isfinite(high)
    rise = np.log(np.where(known, high, 1.0)) - np.log(np.where(known, low, 1.0))
    share = np.clip(rise / LOG_RISE, 0.0, 1.0)
    share = np.where(before[:, 4, 4] > NOISE_UNKNOWN, 1.0, share)
    rest = 1.0 - share
    variance = share**2 * before[:, 3, 3] + rest**2 * before[:, 4, 4]
    variance += 2.0 * share * rest * before[:, 3, 4]
    # The mean parameters take from D only where the beat is as slow as the motion showing D.
    slow = np.minimum(1.0, 1.0 / (before[:, 3, 3] * beats))
    slow *= np.minimum(1.0, np.sqrt(FEW_BEATS / beats))
    taken = 0.5 * share * MEAN_PARAMETERS * slow * before[:, 3, 3]
    taken += 0.5 * rest * MEAN_PARAMETERS * before[:, 4, 4]
    # A D that is hardly seen moves freely in the likelihood: its error tells nothing more.
    seen = np.minimum(1.0, BLUR / np.maximum(before[:, 3, 3], 1e-300))
    larger = 1.0 + np.where(np.isfinite(beats), seen * np.minimum(taken, LARGEST_RISE), 0.0)
    freedom = 2.0 / np.maximum(variance, 1e-9)
    return np.asarray(larger * student_threshold(freedom))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class EndSearch:
    """One end of an interval a row: where the search starts, and what it must reach.

    ``theta`` (E, P) and ``information`` (E, P, P) at the maximum; ``loglik`` (E,) and
    ``threshold`` (E,) say how far down the end lies; ``side`` (E,) is +1 or -1; ``target``
    names the quantity; ``held`` (E, P) marks parameters at their floor, which stay there.
    """

    theta: FloatArray
    information: FloatArray
    loglik: FloatArray
    threshold: FloatArray
    side: FloatArray
    target: tuple[str, ...]
    held: BoolArray


def find_ends(
    batch: LaneBatch, owner: IntArray, search: EndSearch, prior: LanePrior | None = None
) -> tuple[FloatArray, BoolArray]:
    """Return the parameters at each end (E, P), and whether the end was reached (E,).

    Parameters
    ----------
    batch, owner : lanes and their row in ``search``
    search : EndSearch
    prior : LanePrior, optional, E rows

    Notes
    -----
    An end that is not reached in 16 steps is "not closed on this side": the likelihood stays
    above the threshold as far as the search went, or its shape defeats the local parabola.
    """
    floor = search.loglik - 0.5 * search.threshold
    lowest = search.theta[:, 3:5] - LOG_RANGE
    first = _leap(np.zeros_like(search.theta), search.information, search.threshold, search)
    theta = search.theta + _shortened(first)
    found = np.zeros(floor.size, dtype=bool)
    running = np.ones(floor.size, dtype=bool)
    for turn in range(SEARCH_STEPS):
        who = np.flatnonzero(running)
        if who.size == 0:
            break
        lanes, number = lanes_of(owner, who, floor.size)
        now = record_likelihood(batch.take(lanes), number, theta[who], prior and prior.rows(who))
        here = _rows(search, who, theta[who])
        # Far below, a noise strength has no slope any more and would run off: it is held.
        here.held[:, 3:5] |= (theta[who, 3:5] <= lowest[who]) & (now.score[:, 3:5] < 0.0)
        left = 2.0 * (now.loglik - floor[who]) + _room(now.score, now.information, here.held)
        lost = ~np.isfinite(now.loglik) | (left <= 0.0)
        # Rows that are lost have no information; what the division makes of it is not used.
        with np.errstate(all="ignore"):
            step = _leap(now.score, now.information, np.maximum(left, 0.0), here)
        below = np.abs(now.loglik - floor[who])
        small = _length(step, now.information) < STEP_TOLERANCE**2
        done = (below < LOGLIK_TOLERANCE) & ~lost & small
        running[who[done]] = False
        # The last step that comes near enough counts, also where the search goes in circles.
        found[who] = ~lost & (below < (LAST_TOLERANCE if turn >= RELAXED_FROM else 0.0)) | done
        back = 0.5 * (search.theta[who] - theta[who])
        relaxed = _shortened(step) * (0.6 if turn >= RELAXED_FROM else 1.0)
        if turn < SEARCH_STEPS - 1:
            theta[who[~done]] += np.where(lost[:, None], back, relaxed)[~done]
            theta[:, 3:5] = np.maximum(theta[:, 3:5], lowest)
    return theta, found


def _leap(
    score: FloatArray, information: FloatArray, left: FloatArray, search: EndSearch
) -> FloatArray:
    """Return the step to the extreme of each target where the local parabola has lost ``left``."""
    slope = target_slopes(search.theta, search.target)
    none = np.zeros(score.shape[0])
    centre = damped_step(score, information, none, search.held)
    direction = damped_step(slope, information, none, search.held)
    variance = np.maximum(np.sum(direction * slope, axis=1), 1e-300)
    return np.asarray(centre + direction * (search.side * np.sqrt(left / variance))[:, None])


def _shortened(step: FloatArray) -> FloatArray:
    """Return the step with ln D and ln R moving by at most LOG_STEP, the others untouched."""
    held = step.copy()
    held[:, 3:5] = np.clip(step[:, 3:5], -LOG_STEP, LOG_STEP)
    return held


def lifted(theta: FloatArray, step_s: FloatArray, samples: IntArray) -> FloatArray:
    """Return theta with ln D at least where the record would begin to see it.

    A D at its floor has no slope, so an end search could not raise it again, and the interval
    would be that of a pair without phase noise. Where 2 D/T equals 12 R/(n T^2), the two
    noises weigh alike on the mean rate.
    """
    raised = theta.copy()
    seen = theta[:, 4] + np.log(6.0 / (samples**2 * step_s))
    raised[:, 3] = np.maximum(theta[:, 3], seen)
    return raised


def target_slopes(theta: FloatArray, targets: tuple[str, ...]) -> FloatArray:
    """Return the gradient of the named quantity of each row, shape (E, P)."""
    slopes = np.zeros_like(theta)
    names = np.array(targets)
    for name, slope in TARGETS.items():
        rows = names == name
        slopes[rows] = slope(theta[rows])
    return slopes


def _room(score: FloatArray, information: FloatArray, held: BoolArray) -> FloatArray:
    """Return twice what the local parabola could still rise, score' information^-1 score."""
    step = damped_step(score, information, np.zeros(score.shape[0]), held)
    return np.asarray(np.sum(step * score, axis=1))


def _length(step: FloatArray, information: FloatArray) -> FloatArray:
    """Return the squared length of a step in standard errors."""
    return np.asarray(np.einsum("mi,mij,mj->m", step, information, step))


def _rows(search: EndSearch, who: IntArray, theta: FloatArray) -> EndSearch:
    """Return the search of the given rows, standing at theta."""
    return EndSearch(
        theta=theta,
        information=search.information[who],
        loglik=search.loglik[who],
        threshold=search.threshold[who],
        side=search.side[who],
        target=tuple(search.target[row] for row in who),
        held=search.held[who],
    )


def lanes_of(owner: IntArray, who: IntArray, rows: int) -> tuple[IntArray, IntArray]:
    """Return the lanes of the given rows and their new row numbers."""
    number = np.full(rows, -1)
    number[who] = np.arange(who.size)
    lanes = np.flatnonzero(number[owner] >= 0)
    return lanes, number[owner[lanes]]
