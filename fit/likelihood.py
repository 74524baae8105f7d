"""Likelihood of psi under the noisy phase equation, many pieces of records at once.

dpsi = (dw + a cos psi + b sin psi) dt + sqrt(2 D) dW, observed as y = psi + e, var e = R.
With a = K sin psi0 and b = -K cos psi0 this is the phase equation of ``fit.difference`` in
rad/s. A Gaussian assumed-density filter carries mean m and variance P between samples,

    m' = dw + r t + exp(-P/2) (a cos m + b sin m)
    P' = 2 exp(-P/2) (b cos m - a sin m) P + 2 D,

with the sine averaged over the Gaussian exactly (the factor exp(-P/2)), and updates them at
each sample. Mean, variance and their derivatives by every parameter are carried for all
lanes as one array; a lane is a piece of a record. Every operation works lane by lane, so
what a lane gives does not depend on its neighbours.

Columns of ``theta``: dw in rad/s at the lane's first sample, a, b in rad/s, ln D (D in
rad^2/s), ln R (R in rad^2), and optionally the ramp r in rad/s^2. Starting values are in
``fit.likelihood_start``, intervals in ``fit.intervals``, lanes in ``fit.lanes``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from fit.lanes import LaneBatch, LaneResult, lane_likelihood, make_lanes
from rig.arrays import BoolArray, FloatArray, IntArray

__all__ = [
    "LaneBatch",
    "LaneFit",
    "LanePrior",
    "LaneResult",
    "ScoringRules",
    "at_floor",
    "damped_step",
    "fit_lanes",
    "hold_floor",
    "lane_likelihood",
    "make_lanes",
    "record_likelihood",
]

# Floors of R/(2 D h) and of 2 D h/R: beyond them the record does not see the smaller noise.
LOG_NOISE_FLOOR = float(np.log(1e-3))
LOG_DIFFUSION_FLOOR = float(np.log(1e-6))
FLOOR_WIDTH = 0.1  # the floor of one noise moves with the other; this near it counts as there


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LanePrior:
    """Gaussian knowledge of parameters: mean (M, P), precision (M, P); precision 0 is none."""

    mean: FloatArray
    precision: FloatArray

    def __post_init__(self) -> None:
        if self.mean.shape != self.precision.shape:
            raise ValueError("lane prior: mean and precision differ in shape")
        if not (np.all(np.isfinite(self.mean)) and np.all(self.precision >= 0.0)):
            raise ValueError("lane prior: means must be finite and precisions at least 0")

    def rows(self, rows: IntArray) -> LanePrior:
        """Return the prior of the given records."""
        return LanePrior(mean=self.mean[rows], precision=self.precision[rows])


@dataclass(frozen=True, slots=True, kw_only=True)
class ScoringRules:
    """How the maximum is searched.

    ``decrement`` is the squared step in standard errors at which a fit has settled (0.01 of a
    standard error), ``gain`` the rise of the log-likelihood below which a step tells nothing;
    ``log_step`` limits one step of ln D and ln R, and ``phase_step_rad`` one step of dw, a, b
    in rad per sample; ``held`` are columns kept at their start. After ``patience`` steps on
    end that each gain less than ``worth``, or as many in all to where the likelihood cannot be
    evaluated, the fit is given up: as settled where the squared step left is below ``near``.
    """

    iterations: int = 40
    decrement: float = 1e-4
    gain: float = 1e-3
    log_step: float = 2.0
    phase_step_rad: float = 1.5
    held: tuple[int, ...] = ()
    worth: float = 2e-3
    patience: int = 8
    near: float = 0.01


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LaneFit:
    """Maximum of each record: theta (M, P), log-likelihood with prior, information with prior.

    ``converged`` (M,) says whether the step left was below the stated part of a standard
    error; ``evaluations`` (M,) counts likelihood evaluations.
    """

    theta: FloatArray
    loglik: FloatArray
    score: FloatArray
    information: FloatArray
    converged: BoolArray
    evaluations: IntArray

    def rows(self, rows: IntArray) -> LaneFit:
        """Return the fits of the given records."""
        return LaneFit(
            theta=self.theta[rows],
            loglik=self.loglik[rows],
            score=self.score[rows],
            information=self.information[rows],
            converged=self.converged[rows],
            evaluations=self.evaluations[rows],
        )


def record_likelihood(
    batch: LaneBatch, owner: IntArray, theta: FloatArray, prior: LanePrior | None = None
) -> LaneResult:
    """Return log-likelihood, gradient and information summed over the lanes of each record.

    Parameters
    ----------
    batch : LaneBatch, L lanes
    owner : int array, shape (L,), rising
        Record of each lane.
    theta : array, shape (M, P)
        Parameters of each record.
    prior : LanePrior, optional

    Returns
    -------
    LaneResult of M records; a record without lanes has zeros.
    """
    lanes = lane_likelihood(batch, theta[owner])
    records = theta.shape[0]
    loglik, score = np.zeros(records), np.zeros_like(theta)
    information = np.zeros((records, theta.shape[1], theta.shape[1]))
    # Unbuffered sums in lane order: the same bytes for a record in any company.
    np.add.at(loglik, owner, lanes.loglik)
    np.add.at(score, owner, lanes.score)
    np.add.at(information, owner, lanes.information)
    if prior is not None:
        away = theta - prior.mean
        loglik -= 0.5 * np.sum(prior.precision * away**2, axis=1)
        score -= prior.precision * away
        information += prior.precision[:, :, None] * np.eye(theta.shape[1])
    return LaneResult(loglik=loglik, score=score, information=information)


def fit_lanes(
    batch: LaneBatch,
    owner: IntArray,
    start: FloatArray,
    *,
    prior: LanePrior | None = None,
    rules: ScoringRules | None = None,
) -> LaneFit:
    """Return the maximum of the likelihood of each record, all records advanced together.

    Levenberg-damped Fisher scoring: steps (I + damping diag I)^-1 score, taken when the
    likelihood rises. Each record has its own damping and stops on its own: settled, or given
    up (``converged`` False) when steps no longer gain and do not settle either.

    Parameters
    ----------
    batch : LaneBatch, L lanes
    owner : int array, shape (L,), rising
    start : array, shape (M, P)
    prior : LanePrior, optional
    rules : ScoringRules, optional

    Returns
    -------
    LaneFit
    """
    rules = rules or ScoringRules()
    now = record_likelihood(batch, owner, start, prior)
    fit = LaneFit(
        theta=start.copy(),
        loglik=now.loglik,
        score=now.score,
        information=now.information,
        converged=np.zeros(start.shape[0], dtype=bool),
        evaluations=np.ones(start.shape[0], dtype=np.int64),
    )
    step_s = np.full(start.shape[0], np.inf)
    np.minimum.at(step_s, owner, batch.step_s)
    damping = np.full(start.shape[0], 1e-3)
    idle, refused = np.zeros((2, start.shape[0]), dtype=np.int64)
    running = np.isfinite(fit.loglik) & np.isfinite(step_s)
    for _ in range(rules.iterations):
        held = at_floor(fit.theta, step_s) & (fit.score < 0.0)
        held[:, list(rules.held)] = True
        plain = damped_step(fit.score, fit.information, np.zeros_like(damping), held)
        left = np.abs(np.sum(plain * fit.score, axis=1))
        fit.converged[running & (left < rules.decrement)] = True
        running &= ~fit.converged & (damping < 1e8)
        who = np.flatnonzero(running)
        if who.size == 0:
            break
        step = damped_step(fit.score[who], fit.information[who], damping[who], held[who])
        trial = fit.theta[who] + _limited(step, step_s[who], rules)
        hold_floor(trial, step_s[who], held[who])
        promised = _promised(fit, who, trial)
        gain = _try(fit, (batch, owner, prior), who, trial, (damping, promised))
        # An all but undamped step that neither wins nor loses: the top, as far as the gradient
        # (good to a hundredth of a standard error) can tell.
        level = (np.abs(gain) < rules.gain) & (damping[who] < 2e-2)
        fit.converged[who[level]] = True
        idle[who] = np.where(gain > rules.worth, 0, idle[who] + 1)
        refused[who] += ~np.isfinite(gain)
        # Where sub-steps change the likelihood has a jump that no step may cross.
        fit.converged[running & (idle >= rules.patience) & (left < rules.near)] = True
        running &= (idle < rules.patience) & (refused < rules.patience)
    return fit


def at_floor(theta: FloatArray, step_s: FloatArray) -> BoolArray:
    """Return where ln D or ln R stands at its floor (M, P): the record no longer sees it.

    R below 1e-3 of 2 D h and D below 1e-6 of R/(2 h) leave the likelihood flat, and a search
    would run off along it.
    """
    ratio = theta[:, 3] - theta[:, 4] + np.log(2.0 * step_s)
    floor = np.zeros(theta.shape, dtype=bool)
    floor[:, 3] = ratio <= LOG_DIFFUSION_FLOOR + FLOOR_WIDTH
    floor[:, 4] = ratio >= -LOG_NOISE_FLOOR - FLOOR_WIDTH
    return floor


def hold_floor(theta: FloatArray, step_s: FloatArray, held: BoolArray | None = None) -> None:
    """Bring ln D and ln R of trial points up to their floors, in place.

    A noise held at its floor stays on it while the other one falls: left behind, it would
    have to follow in a step of its own, and the search would go to and fro between the two.
    """
    step = np.log(2.0 * step_s)
    least = theta[:, 4] - step + LOG_DIFFUSION_FLOOR
    theta[:, 3] = np.maximum(theta[:, 3], least)
    least = theta[:, 3] + step + LOG_NOISE_FLOOR
    theta[:, 4] = np.maximum(theta[:, 4], least)
    if held is not None:
        follows = held[:, 4] & ~held[:, 3] & (theta[:, 4] < least + 4.0)
        theta[:, 4] = np.where(follows, least, theta[:, 4])


def _try(
    fit: LaneFit,
    data: tuple[LaneBatch, IntArray, LanePrior | None],
    who: IntArray,
    trial: FloatArray,
    region: tuple[FloatArray, FloatArray],
) -> FloatArray:
    """Evaluate trial points, keep those that rise, adapt the damping; return the gains.

    Where a rise is far below the one promised, the expected information is not the curvature
    here: the damping grows although the step is kept, or the search would go to and fro.
    """
    damping, promised = region
    batch, owner, prior = data
    number = np.full(fit.loglik.size, -1)
    number[who] = np.arange(who.size)
    lanes = np.flatnonzero(number[owner] >= 0)
    part = None if prior is None else prior.rows(who)
    found = record_likelihood(batch.take(lanes), number[owner[lanes]], trial, part)
    fit.evaluations[who] += 1
    gain = found.loglik - fit.loglik[who]
    better = gain > 0.0
    kept = who[better]
    fit.theta[kept] = trial[better]
    fit.loglik[kept] = found.loglik[better]
    fit.score[kept] = found.score[better]
    fit.information[kept] = found.information[better]
    share = gain / np.maximum(promised, 1e-300)
    factor = np.where(share > 0.5, 0.1, np.where(share > 0.2, 1.0, 4.0))
    damping[kept] = np.maximum(damping[kept] * factor[better], 1e-9)
    damping[who[~better]] *= 10.0
    return gain


def _promised(fit: LaneFit, who: IntArray, trial: FloatArray) -> FloatArray:
    """Return the rise of the log-likelihood that its local parabola promises for the trial."""
    step = trial - fit.theta[who]
    bend = np.einsum("mi,mij,mj->m", step, fit.information[who], step)
    return np.asarray(np.sum(step * fit.score[who], axis=1) - 0.5 * bend)


def damped_step(
    score: FloatArray,
    information: FloatArray,
    damping: FloatArray,
    held: BoolArray | None = None,
) -> FloatArray:
    """Return the damped scoring step (M, P) of each record; held (M, P) columns do not move.

    The information is scaled to unit diagonal first, so that no unit matters.
    """
    scale = np.sqrt(np.maximum(np.einsum("mii->mi", information), 0.0))
    usable = scale > 0.0
    if held is not None:
        usable &= ~held
    inverse = np.where(usable, 1.0 / np.where(usable, scale, 1.0), 0.0)
    matrix = information * inverse[:, :, None] * inverse[:, None, :]
    # A parameter without influence, or held, gets a row of its own and does not move.
    matrix += np.eye(score.shape[1]) * (damping[:, None] + ~usable + 1e-12)[:, :, None]
    reduced = np.linalg.solve(matrix, (score * inverse)[:, :, None])[:, :, 0]
    return np.asarray(reduced * inverse)


def _limited(step: FloatArray, step_s: FloatArray, rules: ScoringRules) -> FloatArray:
    """Return the step shortened so that no parameter jumps further than the rules say."""
    limits = np.full_like(step, rules.log_step)
    limits[:, :3] = rules.phase_step_rad / step_s[:, None]
    if step.shape[1] == 6:
        limits[:, 5] = np.inf
    factor = np.min(limits / np.maximum(np.abs(step), 1e-300), axis=1)
    return np.asarray(step * np.minimum(factor, 1.0)[:, None])
