"""Innovations of the filter and how they depend on the drift law, sample by sample.

The filter of ``fit.likelihood`` with a drift of any number of harmonics,

    f(psi) = dw + sum_k (a_k cos k psi + b_k sin k psi),

keeps for each sample the innovation v, its variance S, and the derivative of the prediction
by every drift coefficient. Near the maximum v = X delta + white noise of variance S, so that
tests for a richer drift and fits of it are weighted regressions of v on columns of X. Lanes
are pieces of records; nothing a lane gives depends on its neighbours.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from fit.likelihood import LaneBatch, make_lanes
from fit.records import PsiSeries
from rig.arrays import FloatArray, IntArray, distinct

STEP_LIMIT_RAD = 0.4  # as in fit.likelihood: one RK4 step spans less than this phase
SUBSTEP_LIMIT = 8
LANE_LEAST, LANE_MOST = 100, 1000
MEMORIES = 24.0  # lanes are at least this many memories of the filter long


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class DriftTrace:
    """Innovations of one record in order of time.

    ``innovation`` (n,), rad; ``variance`` (n,), rad^2; ``columns`` (n, C) derivatives of the
    prediction by (dw, a_1, b_1, a_2, b_2, ...), s; ``known`` (n, E) by further known drifts.
    """

    innovation: FloatArray
    variance: FloatArray
    columns: FloatArray
    known: FloatArray


def trace_records(
    series: Sequence[PsiSeries],
    theta: Sequence[FloatArray],
    *,
    harmonics: int = 3,
    known: Sequence[Sequence[FloatArray]] | None = None,
) -> list[DriftTrace]:
    """Return the traces of records at given drift coefficients and noise.

    Parameters
    ----------
    series : sequence of PsiSeries
    theta : sequence of arrays, shape (1 + 2 M + 2,)
        (dw, a_1, b_1, ..., a_M, b_M, ln D, ln R) of each record, rad/s, rad^2/s, rad^2; all
        records with the same M.
    harmonics : int
        Harmonics up to which derivatives are kept, at least M.
    known : sequence (records) of sequences (segments) of arrays (samples, E), optional
        Further drifts in rad/s that a coefficient of 1 would add.

    Returns
    -------
    list of DriftTrace
        Empty arrays where the parameters cannot be followed at the step of the record.
    """
    lengths = [
        _lane_samples(point[-2:], record) for record, point in zip(series, theta, strict=True)
    ]
    batch, owner = make_lanes(series, lengths)
    extra = _known_lanes(series, lengths, known, batch)
    stacked = np.array(theta)[owner] if owner.size else np.zeros((0, len(theta[0])))
    run = _run_grouped(batch, stacked, harmonics, extra)
    return [_of_record(run, batch, np.flatnonzero(owner == row)) for row in range(len(series))]


def _lane_samples(log_noise: FloatArray, record: PsiSeries) -> int:
    """Return the longest lane of a record: many memories sqrt(R/(2 D h)) of its filter."""
    log_ratio = float(log_noise[1] - log_noise[0]) - math.log(2.0 * record.step_s)
    memory = math.exp(min(max(0.5 * log_ratio, -20.0), 20.0))
    return int(min(max(MEMORIES * memory, LANE_LEAST), LANE_MOST))


def _known_lanes(
    series: Sequence[PsiSeries],
    lengths: Sequence[int],
    known: Sequence[Sequence[FloatArray]] | None,
    batch: LaneBatch,
) -> FloatArray:
    """Return the known drifts cut like the records, shape (E, lanes, samples)."""
    if known is None:
        return np.zeros((0, *batch.y.shape))
    width = known[0][0].shape[1] if known and known[0] else 0
    cut = np.zeros((width, *batch.y.shape))
    for column in range(width):
        like = [
            PsiSeries(
                step_s=record.step_s,
                segments=tuple(part[:, column] for part in parts),
                start_s=record.start_s,
            )
            for record, parts in zip(series, known, strict=True)
        ]
        cut[column] = np.nan_to_num(make_lanes(like, list(lengths))[0].y)
    return cut


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Run:
    """Sums of all lanes: innovation, variance (N, L), columns (N, C, L), known (N, E, L)."""

    innovation: FloatArray
    variance: FloatArray
    columns: FloatArray
    known: FloatArray


def _of_record(run: _Run, batch: LaneBatch, lanes: IntArray) -> DriftTrace:
    """Return the trace of one record from its lanes, lane after lane."""
    width, extra = run.columns.shape[1], run.known.shape[1]
    parts = [(lane, slice(1, int(batch.count[lane]))) for lane in lanes]
    # Where the slope is steep, a variance that starts below zero may run away.
    good = all(
        np.all(np.isfinite(run.innovation[rows, lane])) and np.all(run.variance[rows, lane] > 0.0)
        for lane, rows in parts
    )
    if not good or not parts:
        none = np.zeros(0)
        return DriftTrace(
            innovation=none,
            variance=none,
            columns=np.zeros((0, width)),
            known=np.zeros((0, extra)),
        )
    return DriftTrace(
        innovation=np.concatenate([run.innovation[rows, lane] for lane, rows in parts]),
        variance=np.concatenate([run.variance[rows, lane] for lane, rows in parts]),
        columns=np.concatenate([run.columns[rows, :, lane] for lane, rows in parts]),
        known=np.concatenate([run.known[rows, :, lane] for lane, rows in parts]),
    )


def _run_grouped(batch: LaneBatch, theta: FloatArray, harmonics: int, extra: FloatArray) -> _Run:
    """Run the filter, lanes with the same number of sub-steps together."""
    lanes, samples = batch.y.shape
    run = _Run(
        innovation=np.full((samples, lanes), np.nan),
        variance=np.full((samples, lanes), np.nan),
        columns=np.zeros((samples, 1 + 2 * harmonics, lanes)),
        known=np.zeros((samples, extra.shape[0], lanes)),
    )
    divisions = _divisions(batch, theta)
    for count in distinct(divisions[divisions > 0]):
        chosen = np.flatnonzero(divisions == count)
        _run_lanes(run, batch.take(chosen), theta[chosen], int(count), (chosen, extra[:, chosen]))
    return run


def _divisions(batch: LaneBatch, theta: FloatArray) -> IntArray:
    """Return RK4 steps per sample of each lane, 0 where the drift cannot be followed."""
    drift = theta[:, 1:-2].reshape(theta.shape[0], -1, 2)
    order = np.arange(1, drift.shape[1] + 1)
    reach = np.abs(theta[:, 0]) / 2.0 + np.hypot(drift[..., 0], drift[..., 1]) @ order
    with np.errstate(invalid="ignore", over="ignore"):
        needed = np.exp2(np.ceil(np.log2(np.maximum(reach * batch.step_s / STEP_LIMIT_RAD, 1.0))))
    fits = np.all(np.isfinite(theta), axis=1) & (needed <= SUBSTEP_LIMIT)
    return np.where(fits, needed, 0).astype(np.int64)


def _run_lanes(
    run: _Run,
    batch: LaneBatch,
    theta: FloatArray,
    divisions: int,
    place: tuple[IntArray, FloatArray],
) -> None:
    """Run the filter over lanes that share the number of sub-steps."""
    lanes, extra = place
    law = _Law(theta, batch.step_s / divisions)
    samples = np.ascontiguousarray(batch.y.T)
    # As in fit.lane_filter: the band takes D lost_s off the measurement noise.
    noise = np.exp(theta[:, -1]) - np.exp(theta[:, -2]) * batch.lost
    mean, spread = samples[0].copy(), noise.copy()
    width = run.columns.shape[1]
    slopes = np.zeros((width + extra.shape[0], lanes.size))
    # Infinities mark parameters that run away; their lanes are dropped afterwards.
    with np.errstate(all="ignore"):
        for sample in range(1, samples.shape[0]):
            for _ in range(divisions):
                mean, spread = law.advance(mean, spread, slopes, width, extra[:, :, sample - 1])
            innovation = samples[sample] - mean
            total = spread + noise
            run.innovation[sample, lanes] = innovation
            run.variance[sample, lanes] = total
            run.columns[sample][:, lanes] = slopes[:width]
            run.known[sample][:, lanes] = slopes[width:]
            gain = spread / total
            mean = mean + gain * innovation
            spread = gain * noise
            slopes *= 1.0 - gain


class _Law:
    """The drift of each lane with its noise, and one sub-step of mean, variance, slopes."""

    def __init__(self, theta: FloatArray, step_s: FloatArray) -> None:
        self.step = step_s
        self.dw = theta[:, 0] * step_s
        pairs = theta[:, 1:-2].reshape(theta.shape[0], -1, 2)
        # f_k = Re(c_k exp(i k psi)) with c_k = a_k - i b_k.
        self.c = (pairs[..., 0] - 1j * pairs[..., 1]).T * step_s
        self.k = np.arange(1.0, self.c.shape[0] + 1.0)[:, None]
        self.d2 = 2.0 * np.exp(theta[:, -2]) * step_s

    def slope(
        self, mean: FloatArray, spread: FloatArray
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Return f, f' and the rate of the variance, each per sub-step."""
        waves = self.c * np.exp(1j * self.k * mean - 0.5 * self.k**2 * spread)
        drift = self.dw + waves.real.sum(axis=0)
        steepness = -(self.k * waves.imag).sum(axis=0)
        return drift, steepness, 2.0 * steepness * spread + self.d2

    def advance(
        self,
        mean: FloatArray,
        spread: FloatArray,
        slopes: FloatArray,
        width: int,
        extra: FloatArray,
    ) -> tuple[FloatArray, FloatArray]:
        """Return mean and variance one sub-step on; ``slopes`` are carried in place."""
        f1, g1, r1 = self.slope(mean, spread)
        f2, g2, r2 = self.slope(mean + 0.5 * f1, spread + 0.5 * r1)
        f3, g3, r3 = self.slope(mean + 0.5 * f2, spread + 0.5 * r2)
        f4, g4, r4 = self.slope(mean + f3, spread + r3)
        growth = (g1 + 2.0 * (g2 + g3) + g4) / 6.0
        half_mean, half_spread = mean + 0.5 * f2, spread + 0.5 * r2
        order = np.arange(1.0, (width - 1) // 2 + 1.0)[:, None]
        waves = np.exp(1j * order * half_mean - 0.5 * order**2 * half_spread)
        # Carried over half the growth: what is added in mid-step grows for half of it.
        push = self.step * np.exp(0.5 * growth)
        slopes *= np.exp(growth)
        slopes[0] += push
        slopes[1:width:2] += push * waves.real
        slopes[2:width:2] += push * waves.imag
        slopes[width:] += push * extra
        ahead = mean + (f1 + 2.0 * (f2 + f3) + f4) / 6.0
        return ahead, spread + (r1 + 2.0 * (r2 + r3) + r4) / 6.0
