"""Detuning, coupling, offset and noise of records: the estimator.

Many records go through together: starting points, likelihood fits, interval ends are arrays
over records and lanes. What one record gives does not depend on the others in the call.
How the numbers of one record become quantities, or reasons why there are none, stands in
``fit.adler_record``; the likelihood in ``fit.likelihood``.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from fit.adler_record import (
    RecordFacts,
    RecordFit,
    facts_of,
    is_identified,
    record_estimate,
    refused_estimate,
    unusable,
)
from fit.intervals import DIFFUSION_FLOOR, TARGETS, EndSearch, find_ends, ratio_threshold
from fit.likelihood import (
    LaneBatch,
    LaneFit,
    LanePrior,
    ScoringRules,
    at_floor,
    fit_lanes,
    make_lanes,
    record_likelihood,
)
from fit.likelihood_start import net_turns, start_candidates
from fit.records import AdlerEstimate, Baseline, PsiSeries
from rig.angles import rad_s_from_hz
from rig.arrays import FloatArray, IntArray

# Threshold of a locked record with a baseline while relaxation_rate * duration is below 100:
# the relaxation rate is then biased high, and 3.84 covers only 92 %.
LOCKED_THRESHOLD = 4.5
LOCKED_SPAN = 100.0
# Free-running D counts with at least this relative error: coupling may change it a little.
BASELINE_LOG_NOISE_U = 0.15


@dataclass(frozen=True, slots=True, kw_only=True)
class AdlerSettings:
    """Settings of the estimator.

    ``segment_samples`` is the longest lane; ``least_samples`` a record needs; ``intervals``
    False leaves the likelihood-ratio intervals out (standard errors only).
    """

    segment_samples: int = 400
    least_samples: int = 16
    intervals: bool = True
    scoring: ScoringRules = field(default_factory=ScoringRules)


def estimate_adler(
    series: Sequence[PsiSeries],
    *,
    baselines: Sequence[Baseline | None] | None = None,
    settings: AdlerSettings | None = None,
) -> list[AdlerEstimate]:
    """Return the estimate of each record, in order.

    dpsi/dt = 2 pi (detuning_hz - coupling_hz sin(psi - offset_rad)) + noise, fitted by maximum
    likelihood with a Gaussian assumed-density filter; intervals by the likelihood ratio.

    Parameters
    ----------
    series : sequence of PsiSeries
    baselines : sequence of Baseline or None, as many as series, optional
        What free-running captures say of each pair: detuning and D enter as Gaussian priors.
    settings : AdlerSettings, optional

    Returns
    -------
    list of AdlerEstimate
        A quantity that the record cannot determine has value None and a reason. No record,
        however poor, raises.

    Raises
    ------
    ValueError
        If baselines and series differ in number.

    Notes
    -----
    A quantity is given when the standard errors of detuning and coupling are both below a
    fifth of the coupling, and, for a pair inside its locking region, when at least five slips
    or a pull-in from far off, or a baseline, back it. Coverage: bench/coverage_adler.md.
    """
    rules = settings or AdlerSettings()
    priors = list(baselines) if baselines is not None else [None] * len(series)
    if len(priors) != len(series):
        raise ValueError(f"estimate_adler: {len(series)} series but {len(priors)} baselines")
    estimates: dict[int, AdlerEstimate] = {}
    kept: list[int] = []
    for index, record in enumerate(series):
        reason = unusable(record, rules.least_samples)
        if reason:
            estimates[index] = refused_estimate(reason, priors[index])
        else:
            kept.append(index)
    if kept:
        fits = fit_records([series[k] for k in kept], [priors[k] for k in kept], rules)
        for index, fit in zip(kept, fits, strict=True):
            estimates[index] = record_estimate(series[index], fit, priors[index])
    return [estimates[index] for index in range(len(series))]


def fit_records(
    series: Sequence[PsiSeries], baselines: Sequence[Baseline | None], rules: AdlerSettings
) -> list[RecordFit]:
    """Return the likelihood fit with interval ends of each record.

    Parameters
    ----------
    series : sequence of PsiSeries, each usable
    baselines : sequence of Baseline or None, as many
    rules : AdlerSettings

    Returns
    -------
    list of RecordFit
    """
    facts = [facts_of(record) for record in series]
    batch, owner = make_lanes(series, rules.segment_samples)
    prior = _prior(baselines)
    fit = _best_fit(series, baselines, (batch, owner, prior), rules)
    covariance = _covariance(fit.information)
    thresholds, plain = _thresholds(series, facts, baselines, fit, covariance)
    records = [
        RecordFit(
            theta=fit.theta[row],
            covariance=covariance[row],
            loglik=float(fit.loglik[row]),
            converged=bool(fit.converged[row]),
            threshold=float(thresholds[row]),
            plain_threshold=float(plain[row]),
            ends={},
        )
        for row in range(len(series))
    ]
    if rules.intervals:
        _add_ends(records, series, baselines, (batch, owner, prior), fit)
    return records


def _prior(baselines: Sequence[Baseline | None]) -> LanePrior | None:
    """Return the baselines as Gaussian knowledge of dw and ln D; None when there is none."""
    mean, precision = np.zeros((len(baselines), 5)), np.zeros((len(baselines), 5))
    for row, baseline in enumerate(baselines):
        if baseline is None:
            continue
        detuning, noise = baseline.detuning_hz, baseline.noise_rad2_s
        if detuning.value is not None and detuning.u:
            mean[row, 0] = rad_s_from_hz(detuning.value)
            precision[row, 0] = rad_s_from_hz(detuning.u) ** -2
        if noise.value is not None and noise.value > 0.0 and noise.u is not None:
            mean[row, 3] = math.log(noise.value)
            precision[row, 3] = 1.0 / (BASELINE_LOG_NOISE_U**2 + (noise.u / noise.value) ** 2)
    return LanePrior(mean=mean, precision=precision) if np.any(precision) else None


def _best_fit(
    series: Sequence[PsiSeries],
    baselines: Sequence[Baseline | None],
    data: tuple[LaneBatch, IntArray, LanePrior | None],
    rules: AdlerSettings,
) -> LaneFit:
    """Return the best of the fits from the most promising starts of each record."""
    batch, owner, prior = data
    points, rows = [], []
    for row, (record, baseline) in enumerate(zip(series, baselines, strict=True)):
        known = None if baseline is None else baseline.detuning_hz.value
        candidates = start_candidates(record, None if known is None else rad_s_from_hz(known))
        points.append(candidates)
        rows.extend([row] * len(candidates))
    starts, of = np.concatenate(points), np.array(rows)
    first = record_likelihood(*_repeated(batch, owner, of), starts, _rows_of(prior, of))
    wanted = [3 if abs(net_turns(record)) < 1.0 else 2 for record in series]
    chosen = _most_promising(first.loglik, of, wanted)
    of = of[chosen]
    fits = fit_lanes(
        *_repeated(batch, owner, of),
        starts[chosen],
        prior=_rows_of(prior, of),
        rules=rules.scoring,
    )
    best = np.array([_argbest(fits, np.flatnonzero(of == row)) for row in range(len(series))])
    return LaneFit(
        theta=fits.theta[best],
        loglik=fits.loglik[best],
        score=fits.score[best],
        information=fits.information[best],
        converged=fits.converged[best],
        evaluations=fits.evaluations[best],
    )


def _argbest(fits: LaneFit, rows: IntArray) -> int:
    """Return the row of the highest likelihood, a settled one before one that is not."""
    level = fits.loglik[rows]
    settled = fits.converged[rows] & (level > np.max(level) - 0.5)
    return int(rows[np.argmax(np.where(settled, level + 1.0, level))])


def _most_promising(loglik: FloatArray, of: IntArray, wanted: list[int]) -> IntArray:
    """Return the best starts of each record, as many as wanted, in rising order."""
    chosen: list[int] = []
    for row, count in enumerate(wanted):
        own = np.flatnonzero(of == row)
        best = own[np.argsort(-loglik[own], kind="stable")[:count]]
        chosen.extend(sorted(int(k) for k in best))
    return np.array(chosen, dtype=np.int64)


def _repeated(batch: LaneBatch, owner: IntArray, of: IntArray) -> tuple[LaneBatch, IntArray]:
    """Return the lanes of record of[0], of[1], ... and the place in ``of`` each belongs to."""
    first = np.searchsorted(owner, of, side="left")
    counts = np.searchsorted(owner, of, side="right") - first
    place = np.repeat(np.arange(of.size), counts)
    begin = np.repeat(np.cumsum(counts) - counts, counts)
    lanes = np.repeat(first, counts) + np.arange(place.size) - begin
    return batch.take(lanes), place


def _rows_of(prior: LanePrior | None, of: IntArray) -> LanePrior | None:
    """Return the prior of record of[0], of[1], ..."""
    return prior and LanePrior(mean=prior.mean[of], precision=prior.precision[of])


def _covariance(information: FloatArray) -> FloatArray:
    """Return the inverse information of each record; infinite variances where there is none."""
    diagonal = np.einsum("mii->mi", information)
    usable = diagonal > 0.0
    scale = np.where(usable, 1.0 / np.sqrt(np.where(usable, diagonal, 1.0)), 0.0)
    matrix = information * scale[:, :, None] * scale[:, None, :]
    matrix = matrix + np.eye(diagonal.shape[1]) * (~usable + 1e-12)[:, :, None]
    covariance = np.linalg.inv(matrix) * scale[:, :, None] * scale[:, None, :]
    return np.asarray(
        covariance + np.eye(diagonal.shape[1]) * np.where(usable, 0.0, 1e300)[:, None]
    )


def _thresholds(
    series: Sequence[PsiSeries],
    facts: Sequence[RecordFacts],
    baselines: Sequence[Baseline | None],
    fit: LaneFit,
    covariance: FloatArray,
) -> tuple[FloatArray, FloatArray]:
    """Return the likelihood-ratio threshold of each record, and that of its relaxation rate."""
    step_s = np.array([record.step_s for record in series])
    duration_s = np.array([record.duration_s for record in series])
    based = np.array([baseline is not None for baseline in baselines])
    squared = fit.theta[:, 1] ** 2 + fit.theta[:, 2] ** 2 - fit.theta[:, 0] ** 2
    floor = 2.0 * np.exp(fit.theta[:, 3]) * step_s < DIFFUSION_FLOOR * np.exp(fit.theta[:, 4])
    slipping = (squared > 0.0) & ~based
    turns = np.array([abs(fact.turns) for fact in facts])
    slips = np.array([float(fact.slips) for fact in facts])
    few = slipping & ~np.array([fact.pulls_in for fact in facts])
    # Records with just enough slips are let through because they slipped more than usual.
    beats = np.where(slipping, 0.5 * (slips + 1.0), turns)
    log_u = np.sqrt(covariance[:, 3, 3])
    plain = ratio_threshold(log_u, floor, turns)
    threshold = np.where(few, ratio_threshold(log_u, floor | few, beats), plain)
    span = np.sqrt(np.maximum(squared, 0.0)) * duration_s
    short = based & (squared > 0.0) & (span < LOCKED_SPAN) & (turns < 3.0)
    return np.where(short, np.maximum(threshold, LOCKED_THRESHOLD), threshold), plain


def _add_ends(
    records: list[RecordFit],
    series: Sequence[PsiSeries],
    baselines: Sequence[Baseline | None],
    data: tuple[LaneBatch, IntArray, LanePrior | None],
    fit: LaneFit,
) -> None:
    """Search both ends of each target of the records that determine something."""
    batch, owner, prior = data
    jobs = [
        (row, name, side)
        for row, record in enumerate(records)
        if is_identified(series[row], record, baselines[row]).interval
        for name in TARGETS
        for side in (-1.0, 1.0)
    ]
    if not jobs:
        return
    of = np.array([row for row, _, _ in jobs])
    search = EndSearch(
        theta=fit.theta[of],
        information=fit.information[of],
        loglik=fit.loglik[of],
        threshold=np.array([records[row].threshold for row in of]),
        side=np.array([side for _, _, side in jobs]),
        target=tuple(name for _, name, _ in jobs),
        held=at_floor(fit.theta[of], np.array([series[row].step_s for row in of])),
    )
    theta, found = find_ends(*_repeated(batch, owner, of), search, _rows_of(prior, of))
    for job, (row, name, side) in enumerate(jobs):
        if found[job]:
            records[row].ends[name, side] = theta[job]
