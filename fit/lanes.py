"""Pieces of records side by side, and the likelihood of each: the array side of the fit.

The model and the columns of ``theta`` stand in ``fit.likelihood``, which sums lanes to records
and maximises. Every operation works lane by lane, so what a lane gives does not depend on its
neighbours.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from fit.lane_filter import FilterRun
from fit.records import PsiSeries
from rig.arrays import FloatArray, IntArray, distinct, frozen_view

# One RK4 step is good to 1e-5 rad while it spans less than this phase (rad, drift and sine).
STEP_LIMIT_RAD = 0.4
# Beyond this drift per sample the turns between samples cannot be told apart.
DRIFT_LIMIT_RAD = 8.0
# Parameters that need more sub-steps move by more than 3 rad within a sample: not resolved.
SUBSTEP_LIMIT = 8
# Share of a step that its increment may seem to miss: from a half on the filter would break.
MOST_LOST = 0.35
# Lanes advanced together: enough to hide the cost of calls, few enough to stay in the cache.
CHUNK_LANES = 2048


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LaneBatch:
    """Pieces of records side by side.

    ``y`` (L, N), rad, is unwrapped psi padded with NaN; ``count`` (L,) its valid samples;
    ``step_s`` (L,) the step; ``start_s`` (L,) the time of each lane's first sample;
    ``lost_s`` (L,) the time that increments seem to miss (``PsiSeries``), zeros if not given.
    """

    y: FloatArray
    count: IntArray
    step_s: FloatArray
    start_s: FloatArray
    lost_s: FloatArray | None = None

    def __post_init__(self) -> None:
        lanes = self.y.shape[0]
        if self.lost_s is None:
            object.__setattr__(self, "lost_s", np.zeros(lanes))
        if not self.count.shape == self.step_s.shape == self.start_s.shape == (lanes,):
            raise ValueError("lane batch: y, count, step_s and start_s differ in lanes")
        for name in ("y", "count", "step_s", "start_s", "lost_s"):
            object.__setattr__(self, name, frozen_view(getattr(self, name)))

    def take(self, lanes: IntArray) -> LaneBatch:
        """Return the batch that holds the given lanes, in that order."""
        return LaneBatch(
            y=self.y[lanes],
            count=self.count[lanes],
            step_s=self.step_s[lanes],
            start_s=self.start_s[lanes],
            lost_s=self.lost[lanes],
        )

    @property
    def lost(self) -> FloatArray:
        """Time that increments seem to miss, s, shape (L,)."""
        assert self.lost_s is not None
        return self.lost_s


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
    lost: list[float] = []
    for index, record in enumerate(series):
        for segment, start_s in zip(record.segments, record.start_s, strict=True):
            for first, stop in _cuts(segment.size, lengths[index]):
                parts.append(segment[first:stop])
                owner.append(index)
                steps.append(record.step_s)
                starts.append(start_s + first * record.step_s)
                lost.append(min(record.lost_s, MOST_LOST * record.step_s))
    y = np.full((len(parts), max((part.size for part in parts), default=0)), np.nan)
    for row, part in zip(y, parts, strict=True):
        row[: part.size] = part
    batch = LaneBatch(
        y=y,
        count=np.array([part.size for part in parts], dtype=np.int64),
        step_s=np.array(steps, dtype=float),
        start_s=np.array(starts, dtype=float),
        lost_s=np.array(lost, dtype=float),
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
    for divisions in distinct(substeps[substeps > 0]):
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
    run = FilterRun(batch.y[:, 0], batch.step_s, theta, divisions, batch.lost)
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


def repeat_lanes(batch: LaneBatch, owner: IntArray, of: IntArray) -> tuple[LaneBatch, IntArray]:
    """Return the lanes of record of[0], of[1], ... and the place in ``of`` each belongs to.

    Parameters
    ----------
    batch : LaneBatch
    owner : int array, rising
        Record of each lane.
    of : int array
        Records wanted, any number of times.
    """
    first = np.searchsorted(owner, of, side="left")
    counts = np.searchsorted(owner, of, side="right") - first
    place = np.repeat(np.arange(of.size), counts)
    begin = np.repeat(np.cumsum(counts) - counts, counts)
    lanes = np.repeat(first, counts) + np.arange(place.size) - begin
    return batch.take(lanes), place
