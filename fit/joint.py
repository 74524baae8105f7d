"""Joint likelihood of all points of each level and direction of a sweep.

Every point is a record of psi; the points of a group share the centre c, the coupling K, the
offset psi0 with its slope over detuning (a cable or filter delay turns psi0 as the drive
moves), and the noise. Point r has detuning x_r = c - drive_r + delta_r; its filter likelihood
(``fit.likelihood``) is summed over points, and score and information are carried from
(dw, a, b, ln D, ln R) of each record to the shared parameters by the chain rule.

delta_r is what moves the detuning from point to point: the error of the measured drive and
the wander of the free frequency. It is Gaussian with the stated spread, one value a point,
and is eliminated from each step (Schur complement), so its cost does not grow with points.

All groups, and several starts of one group, go through as one array; every sum is taken in
the order of lanes, so what a group gives does not depend on its neighbours.

Columns of ``theta`` (G, 8): centre 2 pi m centre_hz and K in rad/s, psi0 in rad at zero
detuning, its slope in rad per rad/s, ln D, ln R, and two departures from one K for all
detunings, 0 unless they are asked for: K_r = K + s x_r + d (|x_r| - K). s makes the two sides
unequal, d lets the far points have another coupling than the edge.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from fit.likelihood import (
    LaneBatch,
    LaneResult,
    damped_step,
    make_lanes,
    record_likelihood,
)
from fit.records import PsiSeries
from rig.arrays import BoolArray, FloatArray, IntArray, median

CENTRE, COUPLING, OFFSET, SLOPE, LOG_D, LOG_R, ASYMMETRY, DISTANCE = range(8)
WIDTH = 8
ITERATIONS = 60
DECREMENT = 1e-4  # squared step in standard errors at which the fit has settled
# Where rounding of the sums stops the climb first, a tenth of a standard error will do.
ROUNDED_DECREMENT = 1e-2
GAIN = 1e-3  # rise of the log-likelihood below which a full step tells nothing
# A variance below this share of what one step of the other noise adds has no influence.
NEGLIGIBLE = 1e-3
LOG_FLOOR = math.log(1e-5)  # and it is kept above this, so that logarithms stay in reach
LANE_SAMPLES = 250  # many short lanes side by side cost less than few long ones
MEMORY_LANES = 20.0  # a lane spans at least this many memories of the filter
LONGEST_LANE = 2000
MEMORY_LAG = 16  # samples over which the growth of psi is told from its noise
_LOG_STEP = 2.0  # longest single step of ln D and ln R
_TURN_STEP = 1.0  # longest single step of psi0, rad
_RELATIVE_STEP = 0.5  # longest single step of centre and K, in units of K
_DAMPING_START, _DAMPING_TOP = 1e-3, 1e4


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class JointData:
    """Records of many groups cut into lanes.

    ``owner`` (L,) is the record of each lane, ``group`` (M,) the group of each record, both
    rising; ``drive_rad_s`` (M,) is 2 pi m drive_hz (for a mutual pair minus the detuning of
    the free-running captures), ``spread_rad_s`` (M,) the standard deviation of delta;
    ``step_s`` (M,) the sampling step.
    """

    batch: LaneBatch
    owner: IntArray
    group: IntArray
    drive_rad_s: FloatArray
    spread_rad_s: FloatArray
    step_s: FloatArray

    @property
    def groups(self) -> int:
        """Number of groups."""
        return int(self.group[-1]) + 1 if self.group.size else 0

    def of_groups(self, wanted: IntArray) -> JointData:
        """Return the data of some groups, repeated and numbered as wanted."""
        records = [np.flatnonzero(self.group == index) for index in wanted]
        return self.of_records(np.concatenate(records), [rows.size for rows in records])

    def of_records(self, records: IntArray, sizes: Sequence[int]) -> JointData:
        """Return some records, in that order, as groups of the given sizes."""
        first = np.searchsorted(self.owner, np.arange(self.group.size + 1))
        lanes = [np.arange(first[k], first[k + 1]) for k in records]
        return JointData(
            batch=self.batch.take(np.concatenate(lanes)),
            owner=np.repeat(np.arange(records.size), [part.size for part in lanes]),
            group=np.repeat(np.arange(len(sizes)), sizes),
            drive_rad_s=self.drive_rad_s[records],
            spread_rad_s=self.spread_rad_s[records],
            step_s=self.step_s[records],
        )

    def every(self, stride: int) -> JointData:
        """Return the data with every stride-th lane of each record, for a first climb."""
        first = np.searchsorted(self.owner, np.arange(self.group.size))
        place = np.arange(self.owner.size) - first[self.owner]
        kept = np.flatnonzero(place % stride == 0)
        return self._with(self.batch.take(kept), self.owner[kept], self.spread_rad_s)

    def spread(self, spread_rad_s: FloatArray) -> JointData:
        """Return the data with other standard deviations of delta."""
        return self._with(self.batch, self.owner, spread_rad_s)

    def _with(self, batch: LaneBatch, owner: IntArray, spread_rad_s: FloatArray) -> JointData:
        return JointData(
            batch=batch,
            owner=owner,
            group=self.group,
            drive_rad_s=self.drive_rad_s,
            spread_rad_s=spread_rad_s,
            step_s=self.step_s,
        )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class JointFit:
    """Maxima of the joint likelihoods of G groups.

    ``theta`` (G, 8), ``delta_rad_s`` (M,), ``covariance`` (G, 8, 8) with held columns zero,
    ``loglik`` (G,) with the Gaussian terms of delta, ``converged`` (G,); ``records`` is the
    last evaluation record by record, in (dw, a, b, ln D, ln R).
    """

    theta: FloatArray
    delta_rad_s: FloatArray
    covariance: FloatArray
    loglik: FloatArray
    converged: BoolArray
    records: LaneResult
    evaluations: int


def lay_out(
    series: Sequence[PsiSeries],
    drive_rad_s: FloatArray,
    spread_rad_s: FloatArray,
    sizes: Sequence[int],
) -> JointData:
    """Return the records of all groups as lanes.

    Parameters
    ----------
    series : sequence of PsiSeries, group after group
    drive_rad_s, spread_rad_s : arrays (M,), rad/s
    sizes : sequence of int, records in each group

    Returns
    -------
    JointData
    """
    batch, owner = make_lanes(series, [_lane_samples(one) for one in series])
    return JointData(
        batch=batch,
        owner=owner,
        group=np.repeat(np.arange(len(sizes)), sizes),
        drive_rad_s=np.asarray(drive_rad_s, dtype=float),
        spread_rad_s=np.asarray(spread_rad_s, dtype=float),
        step_s=np.array([one.step_s for one in series]),
    )


def _lane_samples(series: PsiSeries) -> int:
    """Return the lane length: long against the samples over which the filter averages."""
    noise = series.noise_start_rad2 or 0.0
    apart = [part[MEMORY_LAG:] - part[:-MEMORY_LAG] for part in series.segments]
    moves = np.concatenate([np.zeros(1), *apart])
    # What psi moves over a lag, less the noise of its two ends; 0.45 is the median of chi-square.
    grown = (median(moves**2) / 0.45 - 2.0 * noise) / MEMORY_LAG
    memory = math.sqrt(noise / max(grown, 1e-4 * noise, 1e-300))
    return int(min(max(LANE_SAMPLES, MEMORY_LANES * memory), LONGEST_LANE))


def record_parameters(
    data: JointData, theta: FloatArray, delta_rad_s: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return (dw, a, b, ln D, ln R) of each record (M, 5) and their derivatives (M, 5, 8).

    Parameters
    ----------
    data : JointData
    theta : array (G, 8)
    delta_rad_s : array (M,)

    Notes
    -----
    The slope turns psi0 with the stated detuning c - drive, not with delta: a cable delays
    the drive, and the drive is known far better than the free frequency.
    """
    own = theta[data.group]
    stated = own[:, CENTRE] - data.drive_rad_s
    offset = own[:, OFFSET] + own[:, SLOPE] * stated
    beyond = np.abs(stated) - own[:, COUPLING]
    coupling = own[:, COUPLING] + own[:, ASYMMETRY] * stated + own[:, DISTANCE] * beyond
    by_centre = own[:, ASYMMETRY] + own[:, DISTANCE] * np.sign(stated)
    sine, cosine = np.sin(offset), np.cos(offset)
    out = np.column_stack(
        [stated + delta_rad_s, coupling * sine, -coupling * cosine, own[:, LOG_D], own[:, LOG_R]]
    )
    jacobian = np.zeros((stated.size, 5, WIDTH))
    jacobian[:, 0, CENTRE] = 1.0
    for row, by_coupling, by_offset in (
        (1, sine, coupling * cosine),
        (2, -cosine, coupling * sine),
    ):
        jacobian[:, row, CENTRE] = by_offset * own[:, SLOPE] + by_coupling * by_centre
        jacobian[:, row, COUPLING] = by_coupling * (1.0 - own[:, DISTANCE])
        jacobian[:, row, OFFSET] = by_offset
        jacobian[:, row, SLOPE] = by_offset * stated
        jacobian[:, row, ASYMMETRY] = by_coupling * stated
        jacobian[:, row, DISTANCE] = by_coupling * beyond
    jacobian[:, 3, LOG_D] = 1.0
    jacobian[:, 4, LOG_R] = 1.0
    return out, jacobian


@dataclass(slots=True, kw_only=True, eq=False)
class _Point:
    """Where a search stands: parameters and what the likelihood says there."""

    theta: FloatArray
    delta: FloatArray
    records: LaneResult
    loglik: FloatArray
    score: FloatArray
    information: FloatArray
    coupled: FloatArray  # d2/(d theta d delta) of each record, (M, 8)
    shrink: FloatArray  # spread^2 / (1 + spread^2 I) of each record, 0 without spread
    pull: FloatArray  # derivative of the objective by delta, times shrink


def _evaluate(data: JointData, theta: FloatArray, delta: FloatArray) -> _Point:
    """Return objective, reduced score and reduced information of every group."""
    parameters, jacobian = record_parameters(data, theta, delta)
    found = record_likelihood(data.batch, data.owner, parameters)
    variance = data.spread_rad_s**2
    info = found.information[:, 0, 0]
    shrink = variance / (1.0 + variance * info)
    pull = shrink * found.score[:, 0] - delta / (1.0 + variance * info)
    coupled = np.einsum("mi,mij->mj", found.information[:, 0, :], jacobian)
    score = np.einsum("mij,mi->mj", jacobian, found.score) - coupled * pull[:, None]
    information = np.einsum("mij,mik,mkl->mjl", jacobian, found.information, jacobian)
    information -= shrink[:, None, None] * coupled[:, :, None] * coupled[:, None, :]
    known = np.where(variance > 0.0, variance, 1.0)
    loglik = found.loglik - 0.5 * np.where(variance > 0.0, delta**2 / known, 0.0)
    groups = theta.shape[0]
    sums = [
        np.zeros(groups),
        np.zeros((groups, WIDTH)),
        np.zeros((groups, WIDTH, WIDTH)),
    ]
    for total, part in zip(sums, (loglik, score, information), strict=True):
        np.add.at(total, data.group, part)
    return _Point(
        theta=theta,
        delta=delta,
        records=found,
        loglik=sums[0],
        score=sums[1],
        information=sums[2],
        coupled=coupled,
        shrink=shrink,
        pull=pull,
    )


def fit_joint(
    data: JointData,
    start: FloatArray,
    held: BoolArray,
    *,
    delta: FloatArray | None = None,
    iterations: int = ITERATIONS,
) -> JointFit:
    """Return the maximum of the joint likelihood of every group from one start each.

    Levenberg-damped Fisher scoring, all groups advanced together, each with its own damping;
    a group that has settled is not evaluated again.

    Parameters
    ----------
    data : JointData
    start : array (G, 8)
    held : bool array (G, 8)
        Columns kept at their start.
    delta : array (M,), optional
        Start of the single detunings; zeros by default.
    iterations : int

    Returns
    -------
    JointFit
    """
    begin = np.zeros(data.group.size) if delta is None else delta.copy()
    now = _evaluate(data, start.copy(), begin)
    damping = np.full(start.shape[0], _DAMPING_START)
    converged = np.zeros(start.shape[0], dtype=bool)
    running = np.isfinite(now.loglik)
    evaluations = 1
    gain = np.full(start.shape[0], np.inf)
    for _ in range(iterations):
        fixed = held | _at_floor(data, now)
        converged |= running & (_left(now, fixed) < _needed(damping))
        converged |= running & (gain < GAIN) & (damping < _DAMPING_START)
        running &= ~converged & (damping < _DAMPING_TOP)
        if not running.any():
            break
        gain = _advance(data, now, np.flatnonzero(running), fixed, damping)
        evaluations += 1
    _fold(now.theta)
    return JointFit(
        theta=now.theta,
        delta_rad_s=now.delta,
        covariance=_covariance(now.information, held | _at_floor(data, now)),
        loglik=now.loglik,
        converged=converged,
        records=now.records,
        evaluations=evaluations,
    )


def _left(now: _Point, fixed: BoolArray) -> FloatArray:
    """Return the squared length, in standard errors, of the step that is left."""
    plain = damped_step(now.score, now.information, np.zeros(now.loglik.size), fixed)
    return np.asarray(np.abs(np.sum(plain * now.score, axis=1)))


def _needed(damping: FloatArray) -> FloatArray:
    return np.where(damping > 1e2, ROUNDED_DECREMENT, DECREMENT)


def _advance(
    data: JointData, now: _Point, who: IntArray, fixed: BoolArray, damping: FloatArray
) -> FloatArray:
    """Try one step of the running groups, keep those that rise, in place; return the gains."""
    step = damped_step(now.score[who], now.information[who], damping[who], fixed[who])
    step = _shortened(step, now.theta[who])
    rows = np.flatnonzero(np.isin(data.group, who))
    mine = np.searchsorted(who, data.group[rows])
    moved = np.sum(now.coupled[rows] * step[mine], axis=1)
    delta = now.delta[rows] + now.pull[rows] - now.shrink[rows] * moved
    trial = now.theta[who] + step
    _hold_noise(data, who, trial)
    part = data.of_groups(who)
    found = _evaluate(part, trial, delta)
    better = found.loglik > now.loglik[who]
    kept = who[better]
    gain = np.full(damping.size, np.inf)
    gain[kept] = found.loglik[better] - now.loglik[kept]
    for name in ("theta", "loglik", "score", "information"):
        getattr(now, name)[kept] = getattr(found, name)[better]
    taken = better[mine]
    for name in ("delta", "coupled", "shrink", "pull"):
        getattr(now, name)[rows[taken]] = getattr(found, name)[taken]
    for name in ("loglik", "score", "information"):
        getattr(now.records, name)[rows[taken]] = getattr(found.records, name)[taken]
    damping[kept] = np.maximum(damping[kept] * 0.1, 1e-9)
    damping[who[~better]] *= 10.0
    return gain


def _group_step_s(data: JointData) -> FloatArray:
    """Return the shortest sampling step in each group."""
    step_s = np.full(data.groups, np.inf)
    np.minimum.at(step_s, data.group, data.step_s)
    return step_s


def _at_floor(data: JointData, now: _Point) -> BoolArray:
    """Return where ln D or ln R is too small to be seen and wants to go on down (G, 8)."""
    ratio = np.log(2.0 * _group_step_s(data)) + now.theta[:, LOG_D] - now.theta[:, LOG_R]
    out = np.zeros(now.theta.shape, dtype=bool)
    out[:, LOG_D] = (ratio < math.log(NEGLIGIBLE)) & (now.score[:, LOG_D] < 0.0)
    out[:, LOG_R] = (ratio > -math.log(NEGLIGIBLE)) & (now.score[:, LOG_R] < 0.0)
    return out


def _hold_noise(data: JointData, who: IntArray, trial: FloatArray) -> None:
    """Bring ln D and ln R of trial points up to their floors, in place."""
    log_step = np.log(2.0 * _group_step_s(data)[who])
    least = trial[:, LOG_R] - log_step + LOG_FLOOR
    trial[:, LOG_D] = np.maximum(trial[:, LOG_D], least)
    least = trial[:, LOG_D] + log_step + LOG_FLOOR
    trial[:, LOG_R] = np.maximum(trial[:, LOG_R], least)


def _shortened(step: FloatArray, theta: FloatArray) -> FloatArray:
    """Return steps cut so that nothing jumps out of the valley it is in.

    ln R is cut by itself: where it has next to no influence its step is as good as endless,
    and nothing else may wait for it.
    """
    step = step.copy()
    step[:, LOG_R] = np.clip(step[:, LOG_R], -_LOG_STEP, _LOG_STEP)
    limits = np.full_like(step, np.inf)
    limits[:, LOG_D] = _LOG_STEP
    limits[:, OFFSET] = _TURN_STEP
    reach = _RELATIVE_STEP * np.maximum(np.abs(theta[:, COUPLING]), 1e-12)
    limits[:, CENTRE] = limits[:, COUPLING] = reach
    factor = np.min(limits / np.maximum(np.abs(step), 1e-300), axis=1)
    return np.asarray(step * np.minimum(factor, 1.0)[:, None])


def _covariance(information: FloatArray, held: BoolArray) -> FloatArray:
    """Return the inverse of each information over the columns that were not held."""
    out = np.zeros_like(information)
    for group, matrix in enumerate(information):
        free = np.flatnonzero(~held[group])
        scale = 1.0 / np.sqrt(np.maximum(np.diag(matrix)[free], np.finfo(float).tiny))
        inner = matrix[np.ix_(free, free)] * np.outer(scale, scale)
        inverse = np.linalg.pinv(inner, hermitian=True) * np.outer(scale, scale)
        out[group][np.ix_(free, free)] = inverse
    return out


def _fold(theta: FloatArray) -> None:
    """Make K >= 0 in place: a negative coupling is an offset turned by pi."""
    negative = theta[:, COUPLING] < 0.0
    theta[negative, COUPLING] *= -1.0
    # With K < 0 the distance column measures |x| + |K|; it only occurs on the way.
    theta[negative, ASYMMETRY] *= -1.0
    theta[negative, DISTANCE] = 0.0
    theta[negative, OFFSET] += math.pi
