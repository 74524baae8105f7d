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
from scipy.special import stdtrit

from fit.likelihood import LaneBatch, LanePrior, damped_step, record_likelihood
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
# se(ln D) above which D and the measurement noise cannot be told apart.
LOG_NOISE_LIMIT = 0.7
MEAN_PARAMETERS = 3.0  # dw, a, b
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


def ratio_threshold(log_noise_u: FloatArray, limited: BoolArray, beats: FloatArray) -> FloatArray:
    """Return the 95 % threshold of the likelihood ratio of one parameter.

    Parameters
    ----------
    log_noise_u : array, shape (M,)
        Standard error of ln D; not finite where it is not defined.
    limited : bool array, shape (M,)
        Whether the number of beats must limit nu: 2 D h is below a thousandth of R, or all
        that is known of the record comes from its slips.
    beats : array, shape (M,)
        Turns of a drifting record, slips of one inside the locking region.

    Notes
    -----
    A variance known to se(ln D) is worth nu = 2/se(ln D)^2 samples of white noise. With three
    parameters of the mean fitted to that many samples, Student's statistic at nu - 3 degrees
    of freedom corresponds to the likelihood ratio nu ln(1 + t^2/(nu - 3)). Where D and R
    cannot be told apart, t^2 with nu limited by the number of beats is taken, if larger.
    """
    known = np.isfinite(log_noise_u) & (log_noise_u > 0.0)
    samples = np.where(known, 2.0 / np.where(known, log_noise_u, 1.0) ** 2, 1e9)
    freedom = np.clip(samples - MEAN_PARAMETERS, 2.0, 1e9)
    samples = freedom + MEAN_PARAMETERS
    usual = samples * np.log1p(stdtrit(freedom, 0.975) ** 2 / freedom)
    poor = ~known | (log_noise_u > LOG_NOISE_LIMIT) | limited
    by_beats = stdtrit(np.maximum(2.0, 2.0 * beats - 2.0), 0.975) ** 2
    return np.asarray(np.where(poor, np.maximum(usual, by_beats), usual))


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
