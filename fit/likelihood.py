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
``fit.likelihood_start``, intervals in ``fit.intervals``, the filter in ``fit.lane_filter``.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from fit.lane_filter import FilterRun
from fit.records import PsiSeries
from rig.arrays import BoolArray, FloatArray, IntArray, frozen_view

# One RK4 step is good to 1e-5 rad while it spans less than this phase (rad, drift and sine).
STEP_LIMIT_RAD = 0.4
# Beyond this drift per sample the turns between samples cannot be told apart.
DRIFT_LIMIT_RAD = 8.0
# Parameters that need more sub-steps move by more than 3 rad within a sample: not resolved.
SUBSTEP_LIMIT = 8
# Floors of R/(2 D h) and of 2 D h/R: beyond them the record does not see the smaller noise.
LOG_NOISE_FLOOR = float(np.log(1e-3))
LOG_DIFFUSION_FLOOR = float(np.log(1e-6))
FLOOR_WIDTH = 0.1  # the floor of one noise moves with the other; this near it counts as there
# Lanes advanced together: enough to hide the cost of calls, few enough to stay in the cache.
CHUNK_LANES = 2048


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LaneBatch:
    """Pieces of records side by side.

    ``y`` (L, N), rad, is unwrapped psi padded with NaN; ``count`` (L,) its valid samples;
    ``step_s`` (L,) the step; ``start_s`` (L,) the time of each lane's first sample.
    """

    y: FloatArray
    count: IntArray
    step_s: FloatArray
    start_s: FloatArray

    def __post_init__(self) -> None:
        lanes = self.y.shape[0]
        if not self.count.shape == self.step_s.shape == self.start_s.shape == (lanes,):
            raise ValueError("lane batch: y, count, step_s and start_s differ in lanes")
        for name in ("y", "count", "step_s", "start_s"):
            object.__setattr__(self, name, frozen_view(getattr(self, name)))

    def take(self, lanes: IntArray) -> LaneBatch:
        """Return the batch that holds the given lanes, in that order."""
        return LaneBatch(
            y=self.y[lanes],
            count=self.count[lanes],
            step_s=self.step_s[lanes],
            start_s=self.start_s[lanes],
        )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LaneResult:
    """Log-likelihood (L,), its gradient (L, P) and the expected information (L, P, P).

    A lane whose parameters cannot be evaluated (drift beyond 8 rad a sample, not finite) has
    log-likelihood minus infinity and zeros elsewhere.
    """

    loglik: FloatArray
    score: FloatArray
    information: FloatArray


def make_lanes(
    series: Sequence[PsiSeries], segment_samples: int | Sequence[int] = 400
) -> tuple[LaneBatch, IntArray]:
    """Return the records cut into lanes, and for each lane the index of its record.

    Parameters
    ----------
    series : sequence of PsiSeries
    segment_samples : int, or one int a record, at least 2
        Longest lane; longer segments are cut into nearly equal parts that share one sample.

    Returns
    -------
    LaneBatch
    owner : int array, shape (L,), rising

    Raises
    ------
    ValueError
        If segment_samples is below 2.

    Notes
    -----
    A lane starts from its first sample with the measurement noise as variance, so each cut
    loses about one measurement noise of information: 400 samples keep estimates within a
    small part of a standard error of the uncut filter.
    """
    if isinstance(segment_samples, int):
        lengths = [segment_samples] * len(series)
    else:
        lengths = list(segment_samples)
    if min(lengths, default=2) < 2 or len(lengths) != len(series):
        raise ValueError(f"make_lanes: segment_samples must be at least 2, got {segment_samples}")
    parts: list[FloatArray] = []
    owner: list[int] = []
    steps: list[float] = []
    starts: list[float] = []
    for index, record in enumerate(series):
        for segment, start_s in zip(record.segments, record.start_s, strict=True):
            for first, stop in _cuts(segment.size, lengths[index]):
                parts.append(segment[first:stop])
                owner.append(index)
                steps.append(record.step_s)
                starts.append(start_s + first * record.step_s)
    y = np.full((len(parts), max((part.size for part in parts), default=0)), np.nan)
    for row, part in zip(y, parts, strict=True):
        row[: part.size] = part
    batch = LaneBatch(
        y=y,
        count=np.array([part.size for part in parts], dtype=np.int64),
        step_s=np.array(steps, dtype=float),
        start_s=np.array(starts, dtype=float),
    )
    return batch, np.array(owner, dtype=np.int64)


def _cuts(size: int, longest: int) -> list[tuple[int, int]]:
    """Return (first, stop) of nearly equal parts that overlap by one sample."""
    if size < 2:
        return []
    pieces = -(-(size - 1) // (longest - 1))
    edges = [(size - 1) * k // pieces for k in range(pieces + 1)]
    return [(first, last + 1) for first, last in pairwise(edges)]


def lane_likelihood(batch: LaneBatch, theta: FloatArray, *, wrapped: bool = False) -> LaneResult:
    """Return log-likelihood, gradient and expected information of each lane.

    Parameters
    ----------
    batch : LaneBatch
    theta : array, shape (L, 5) or (L, 6)
        Parameters of each lane (see the module docstring).
    wrapped : bool
        Bring each innovation to (-pi, pi]: for psi whose turns may be miscounted.

    Returns
    -------
    LaneResult
        The information is sum(dv dv'/S + dS dS'/(2 S^2)): never negative, and what Fisher
        scoring uses in place of the second derivative.

    References
    ----------
    Assumed-density filtering: Maybeck 1982, Stochastic Models, Estimation and Control,
    vol. 2, section 12.7 (recalled).
    """
    lanes, width = theta.shape
    result = LaneResult(
        loglik=np.full(lanes, -np.inf),
        score=np.zeros((lanes, width)),
        information=np.zeros((lanes, width, width)),
    )
    substeps = _substeps(batch, theta)
    for divisions in np.unique(substeps[substeps > 0]):
        chosen = np.flatnonzero(substeps == divisions)
        # Longest lanes first: those that end early then drop off the end of the arrays.
        chosen = chosen[np.argsort(-batch.count[chosen], kind="stable")]
        for first in range(0, chosen.size, CHUNK_LANES):
            part = chosen[first : first + CHUNK_LANES]
            _fill(result, batch.take(part), theta[part], part, int(divisions), wrapped)
    return result


def _substeps(batch: LaneBatch, theta: FloatArray) -> IntArray:
    """Return RK4 steps per sample of each lane, a power of two; 0 where it is refused."""
    with np.errstate(over="ignore", invalid="ignore"):
        drift = np.abs(theta[:, 0])
        if theta.shape[1] == 6:
            span_s = batch.step_s * np.maximum(batch.count - 1, 0)
            drift = np.maximum(drift, np.abs(theta[:, 0] + theta[:, 5] * span_s))
        sine = np.hypot(theta[:, 1], theta[:, 2])
        reach = batch.step_s * (0.5 * drift + sine)
        needed = np.exp2(np.ceil(np.log2(np.maximum(reach / STEP_LIMIT_RAD, 1.0))))
        fits = (batch.step_s * drift <= DRIFT_LIMIT_RAD) & (needed <= SUBSTEP_LIMIT)
    fits &= np.all(np.isfinite(theta), axis=1) & np.all(np.abs(theta[:, 3:5]) < 300.0, axis=1)
    return np.where(fits, needed, 0).astype(np.int64)


def _fill(
    result: LaneResult,
    batch: LaneBatch,
    theta: FloatArray,
    where: IntArray,
    divisions: int,
    wrapped: bool,
) -> None:
    """Run the filter over one chunk and put its sums into the result."""
    run = FilterRun(batch.y[:, 0], batch.step_s, theta, divisions)
    samples = np.ascontiguousarray(batch.y.T)
    longest = int(batch.count.max(initial=0))
    active = np.searchsorted(-batch.count, -np.arange(longest), side="left")
    # Overflow to infinity marks hopeless parameters; it is caught as a non-finite sum below.
    with np.errstate(all="ignore"):
        for sample in range(1, longest):
            run.narrow(int(active[sample]))
            for part in range(divisions):
                run.advance((sample - 1) + part / divisions)
            run.update(samples[sample, : active[sample]], wrapped)
    score = run.score_all.T * run.scale.T
    information = np.moveaxis(run.information_all.sum(axis=0), -1, 0)
    information = information * run.scale.T[:, :, None] * run.scale.T[:, None, :]
    good = np.isfinite(run.loglik_all) & np.all(np.isfinite(score), axis=1)
    good &= np.all(np.isfinite(information), axis=(1, 2))
    result.loglik[where[good]] = run.loglik_all[good]
    result.score[where[good]] = score[good]
    result.information[where[good]] = information[good]


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
    in rad per sample; ``held`` are columns kept at their start.
    """

    iterations: int = 40
    decrement: float = 1e-4
    gain: float = 1e-3
    log_step: float = 2.0
    phase_step_rad: float = 1.5
    held: tuple[int, ...] = ()


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
    likelihood rises. Each record has its own damping and stops on its own.

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
        hold_floor(trial, step_s[who])
        gain = _try(fit, (batch, owner, prior), who, trial, damping)
        # An all but undamped step that neither wins nor loses: the top, as far as the gradient
        # (good to a hundredth of a standard error) can tell.
        level = (np.abs(gain) < rules.gain) & (damping[who] < 2e-2)
        fit.converged[who[level]] = True
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


def hold_floor(theta: FloatArray, step_s: FloatArray) -> None:
    """Bring ln D and ln R of trial points up to their floors, in place."""
    step = np.log(2.0 * step_s)
    theta[:, 3] = np.maximum(theta[:, 3], theta[:, 4] - step + LOG_DIFFUSION_FLOOR)
    theta[:, 4] = np.maximum(theta[:, 4], theta[:, 3] + step + LOG_NOISE_FLOOR)


def _try(
    fit: LaneFit,
    data: tuple[LaneBatch, IntArray, LanePrior | None],
    who: IntArray,
    trial: FloatArray,
    damping: FloatArray,
) -> FloatArray:
    """Evaluate trial points, keep those that rise, adapt the damping; return the gains."""
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
    damping[kept] = np.maximum(damping[kept] * 0.1, 1e-9)
    damping[who[~better]] *= 10.0
    return gain


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
