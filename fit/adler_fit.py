"""Likelihood fits and interval ends of many records at once, with or without baselines.

From PsiSeries to ``RecordFit``; what a fit means is decided in ``fit.adler_record``.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from fit.identify import (
    LEAST_SLIPS,
    LOCKED_THRESHOLD,
    RecordFacts,
    RecordFit,
    facts_of,
    is_identified,
)
from fit.intervals import (
    LOG_RISE,
    TARGETS,
    EndSearch,
    find_ends,
    lifted,
    student_threshold,
    target_threshold,
)
from fit.lanes import repeat_lanes
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
from fit.likelihood_start import start_candidates, steady_start
from fit.noise_ends import (
    GATE_REACH,
    NOISE_GATE,
    NOISE_TOLD,
    WELL_KNOWN,
    NoiseSearch,
    cut_deviates,
    errors_beyond_gate,
    find_noise_ends,
    mean_tilt,
)
from fit.records import Baseline, PsiSeries
from rig.angles import rad_s_from_hz
from rig.arrays import FloatArray, IntArray

# Relaxation rate times duration below which a locked record with a baseline takes
# LOCKED_THRESHOLD.
LOCKED_SPAN = 300.0
# Free-running D counts with at least this relative error: coupling may change it a little.
BASELINE_LOG_NOISE_U = 0.15
# Lanes in memories of the filter, drifting and in lock.
LANE_MEMORIES, LANE_MEMORIES_LOCKED = 24.0, 200.0
# Steady records: the detuning times the step is held at zero to one part in this.
HELD_FIRMLY = 1e6


@dataclass(frozen=True, slots=True, kw_only=True)
class AdlerSettings:
    """Settings of the estimator.

    ``lane_least`` and ``lane_most`` bound the samples of one lane; ``least_samples`` are what
    a record needs; ``intervals`` False leaves the likelihood-ratio intervals out (standard
    errors only); ``trajectory`` adds the least-squares fit of the noise-free curve as a check
    (lmfit, some 20 ms a record).
    """

    lane_least: int = 64
    lane_most: int = 2000
    least_samples: int = 16
    intervals: bool = True
    trajectory: bool = False
    scoring: ScoringRules = field(default_factory=ScoringRules)


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
    prior = _prior(series, facts, baselines)
    starts = [
        _starts(record, fact, baseline)
        for record, fact, baseline in zip(series, facts, baselines, strict=True)
    ]
    lengths = [
        lane_samples(record, points[0], rules)
        for record, points in zip(series, starts, strict=True)
    ]
    batch, owner = make_lanes(series, lengths)
    wanted = [3 if abs(fact.turns) < 1.0 else 2 for fact in facts]
    fit = _best_fit(starts, wanted, (batch, owner, prior), rules)
    covariance = covariance_of(fit.information)
    worth = _noise_worth(series, (batch, owner, prior), fit.theta)
    thresholds = _thresholds(series, facts, baselines, worth, fit.theta)
    records = [
        RecordFit(
            theta=fit.theta[row],
            covariance=covariance[row],
            loglik=float(fit.loglik[row]),
            converged=bool(fit.converged[row]),
            thresholds={name: float(values[row]) for name, values in thresholds.items()},
            ends={},
            noise_ends={},
        )
        for row in range(len(series))
    ]
    if rules.intervals:
        _add_ends(records, series, baselines, (batch, owner, prior), fit)
        _add_noise_ends(records, series, (batch, owner, prior), worth)
    return records


def _starts(record: PsiSeries, facts: RecordFacts, baseline: Baseline | None) -> FloatArray:
    """Return the starting points of one record."""
    if is_steady(facts, baseline):
        return steady_start(record)
    return start_candidates(record, _known(baseline))


def lane_samples(record: PsiSeries, start: FloatArray, rules: AdlerSettings) -> int:
    """Return the longest lane of a record: many times the memory of its filter.

    The filter forgets over sqrt(R/(2 D h)) samples; each cut costs about as much, so lanes of
    24 times that lose a few per cent of the information at most, and short lanes run faster.
    In lock psi at a cut is better known than the one sample tells from which a lane begins:
    relaxation and D would come out high, by a tenth at 24 times the memory.
    """
    log_ratio = start[4] - start[3] - math.log(2.0 * record.step_s)
    memory = math.exp(min(0.5 * log_ratio, 20.0))
    locked = math.hypot(start[1], start[2]) > abs(start[0])
    times = LANE_MEMORIES_LOCKED if locked else LANE_MEMORIES
    return int(min(max(times * memory, rules.lane_least), rules.lane_most))


def is_steady(facts: RecordFacts, baseline: Baseline | None) -> bool:
    """Say whether the record only sits at its angle: no slip, no pull-in, detuning not known.

    Such a record cannot tell detuning from offset. It is fitted with the detuning at zero,
    which leaves relaxation rate, noise and angle as they are and spares a search along a
    ridge.
    """
    quiet = facts.slips == 0 and abs(facts.turns) < 0.5 and not facts.pulls_in
    return quiet and _known(baseline) is None


def _known(baseline: Baseline | None) -> float | None:
    """Return the free-running detuning in rad/s where there is one."""
    value = None if baseline is None else baseline.detuning_hz.value
    return None if value is None else rad_s_from_hz(value)


def _prior(
    series: Sequence[PsiSeries],
    facts: Sequence[RecordFacts],
    baselines: Sequence[Baseline | None],
) -> LanePrior:
    """Return the baselines as Gaussian knowledge of dw and ln D; steady records have dw = 0."""
    mean, precision = np.zeros((len(baselines), 5)), np.zeros((len(baselines), 5))
    for row, baseline in enumerate(baselines):
        if is_steady(facts[row], baseline):
            precision[row, 0] = (series[row].step_s * HELD_FIRMLY) ** 2
        if baseline is None:
            continue
        detuning, noise = baseline.detuning_hz, baseline.noise_rad2_s
        if detuning.value is not None and detuning.u:
            mean[row, 0] = rad_s_from_hz(detuning.value)
            precision[row, 0] = rad_s_from_hz(detuning.u) ** -2
        if noise.value is not None and noise.value > 0.0 and noise.u is not None:
            mean[row, 3] = math.log(noise.value)
            precision[row, 3] = 1.0 / (BASELINE_LOG_NOISE_U**2 + (noise.u / noise.value) ** 2)
    return LanePrior(mean=mean, precision=precision)


def _best_fit(
    points: Sequence[FloatArray],
    wanted: Sequence[int],
    data: tuple[LaneBatch, IntArray, LanePrior],
    rules: AdlerSettings,
) -> LaneFit:
    """Return the best of the fits from the most promising starts of each record."""
    batch, owner, prior = data
    starts = np.concatenate(points)
    of = np.repeat(np.arange(len(points)), [len(own) for own in points])
    first = record_likelihood(*repeat_lanes(batch, owner, of), starts, prior.rows(of))
    chosen = _most_promising(first.loglik, of, wanted)
    of = of[chosen]
    fits = fit_lanes(
        *repeat_lanes(batch, owner, of), starts[chosen], prior=prior.rows(of), rules=rules.scoring
    )
    best = np.array([_argbest(fits, np.flatnonzero(of == row)) for row in range(len(points))])
    return fits.rows(best)


def _argbest(fits: LaneFit, rows: IntArray) -> int:
    """Return the row of the highest likelihood, a settled one before one that is not."""
    level = fits.loglik[rows]
    settled = fits.converged[rows] & (level > np.max(level) - 0.5)
    return int(rows[np.argmax(np.where(settled, level + 1.0, level))])


def _most_promising(loglik: FloatArray, of: IntArray, wanted: Sequence[int]) -> IntArray:
    """Return the best starts of each record, as many as wanted, in rising order."""
    chosen: list[int] = []
    for row, count in enumerate(wanted):
        own = np.flatnonzero(of == row)
        best = own[np.argsort(-loglik[own], kind="stable")[:count]]
        chosen.extend(sorted(int(k) for k in best))
    return np.array(chosen, dtype=np.int64)


def covariance_of(information: FloatArray) -> FloatArray:
    """Return the inverse information of each record; infinite variances where there is none."""
    diagonal = np.einsum("mii->mi", information)
    usable = diagonal > 0.0
    scale = np.where(usable, 1.0 / np.sqrt(np.where(usable, diagonal, 1.0)), 0.0)
    matrix = information * scale[:, :, None] * scale[:, None, :]
    matrix = matrix + np.eye(diagonal.shape[1]) * (~usable + 1e-12)[:, :, None]
    covariance = np.linalg.inv(matrix) * scale[:, :, None] * scale[:, None, :]
    return np.asarray(
        covariance + np.eye(diagonal.shape[1]) * np.where(usable, 0.0, 1e100)[:, None]
    )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class NoiseWorth:
    """Information of each record at ``theta``, where it sees D, and with ln D LOG_RISE higher."""

    theta: FloatArray
    here: FloatArray
    more: FloatArray


def _noise_worth(
    series: Sequence[PsiSeries], data: tuple[LaneBatch, IntArray, LanePrior], theta: FloatArray
) -> NoiseWorth:
    """Return what each record says at its estimate, and with more phase noise."""
    step_s = np.array([record.step_s for record in series])
    seen = lifted(theta, step_s, _samples(series))
    return NoiseWorth(
        theta=seen,
        here=_information(data, seen, 3, 0.0),
        more=_information(data, seen, 3, LOG_RISE),
    )


def _information(
    data: tuple[LaneBatch, IntArray, LanePrior], theta: FloatArray, column: int, rise: float
) -> FloatArray:
    """Return the information with one parameter higher."""
    batch, owner, prior = data
    point = theta.copy()
    point[:, column] += rise
    return record_likelihood(batch, owner, point, prior).information


def _thresholds(
    series: Sequence[PsiSeries],
    facts: Sequence[RecordFacts],
    baselines: Sequence[Baseline | None],
    worth: NoiseWorth,
    theta: FloatArray,
) -> dict[str, FloatArray]:
    """Return the likelihood-ratio threshold of each target and record."""
    before, after = covariance_of(worth.here), covariance_of(worth.more)
    squared = theta[:, 1] ** 2 + theta[:, 2] ** 2 - theta[:, 0] ** 2
    duration_s = np.array([record.duration_s for record in series])
    based = np.array([baseline is not None for baseline in baselines])
    turns = np.array([abs(fact.turns) for fact in facts])
    slips = np.array([float(fact.slips) for fact in facts])
    beats = np.where(squared < 0.0, np.maximum(turns, 1.0), np.inf)
    # Records with just enough slips are let through because they slipped more than usual.
    few = (squared > 0.0) & ~based & ~np.array([fact.pulls_in for fact in facts])
    spare = 2.0 * (np.sqrt(np.maximum(slips, LEAST_SLIPS)) - math.sqrt(LEAST_SLIPS))
    wider = 1.0 + 0.5 * np.exp(-1.5 * spare)
    by_slips = np.where(few, wider * student_threshold(4.0 * slips - 12.0), 0.0)
    span = np.sqrt(np.maximum(squared, 0.0)) * duration_s
    least = np.where(based & (squared > 0.0) & (span < LOCKED_SPAN), LOCKED_THRESHOLD, by_slips)
    found = {name: target_threshold(name, theta, (before, after), beats) for name in TARGETS}
    return {name: np.maximum(values, least) for name, values in found.items()}


def _samples(series: Sequence[PsiSeries]) -> IntArray:
    """Return the number of samples of each record."""
    return np.array([sum(part.size for part in record.segments) for record in series])


def _add_ends(
    records: list[RecordFit],
    series: Sequence[PsiSeries],
    baselines: Sequence[Baseline | None],
    data: tuple[LaneBatch, IntArray, LanePrior],
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
    step_s = np.array([series[row].step_s for row in of])
    samples = _samples([series[row] for row in of])
    held = at_floor(fit.theta[of], step_s)
    held[:, 3] = False
    search = EndSearch(
        theta=lifted(fit.theta[of], step_s, samples),
        information=fit.information[of],
        loglik=fit.loglik[of],
        threshold=np.array([records[row].thresholds[name] for row, name, _ in jobs]),
        side=np.array([side for _, _, side in jobs]),
        target=tuple(name for _, name, _ in jobs),
        held=held,
    )
    theta, found = find_ends(*repeat_lanes(batch, owner, of), search, prior.rows(of))
    for job, (row, name, side) in enumerate(jobs):
        if found[job]:
            records[row].ends[name, side] = theta[job]


def _less(theta: FloatArray, information: FloatArray) -> list[FloatArray]:
    """Return theta with D once and twice GATE_REACH lower, and R as much higher as goes with it."""
    covariance = covariance_of(information)
    share = np.maximum(-covariance[:, 4, 3] / covariance[:, 3, 3], 0.0)
    points = []
    for times in (1, 2):
        point = theta.copy()
        point[:, 3] -= GATE_REACH * times
        point[:, 4] += np.log1p(GATE_REACH * times * share)
        points.append(point)
    return points


def _near_gate(
    data: tuple[LaneBatch, IntArray, LanePrior], worth: NoiseWorth, rows: IntArray
) -> tuple[FloatArray, FloatArray]:
    """Return how far D lies beyond its gate, and the information with R stronger."""
    batch, owner, prior = data
    part = (*repeat_lanes(batch, owner, rows), prior.rows(rows))
    theta, here = worth.theta[rows], worth.here[rows]
    points = _less(theta, here)
    falls = [record_likelihood(*part[:2], point, part[2]).information for point in points]
    covariances = [covariance_of(one) for one in (here, *falls)]
    errors = np.sqrt([one[:, 3, 3] for one in covariances]).T
    told = np.sqrt(covariances[0][:, 4, 4]) < NOISE_TOLD
    return errors_beyond_gate(errors, GATE_REACH, told), _information(part, theta, 4, LOG_RISE)


def _add_noise_ends(
    records: list[RecordFit],
    series: Sequence[PsiSeries],
    data: tuple[LaneBatch, IntArray, LanePrior],
    worth: NoiseWorth,
) -> None:
    """Search both ends of D of the records that determine it."""
    batch, owner, prior = data
    log_u = np.sqrt(covariance_of(worth.here)[:, 3, 3])
    settled = np.array([one.converged for one in records])
    rows = np.flatnonzero(settled & (log_u < NOISE_GATE))
    if rows.size == 0:
        return
    part = (*repeat_lanes(batch, owner, rows), prior.rows(rows))
    locked = np.array([records[row].relaxation_rad_s is not None for row in rows.tolist()])
    beyond, tilt = np.full(rows.size, np.inf), np.zeros((rows.size, 2))
    tilt[:, 0] = mean_tilt(worth.here[rows], worth.more[rows], locked)
    close = np.flatnonzero(log_u[rows] > WELL_KNOWN)
    if close.size:
        found_beyond, noisier = _near_gate(data, worth, rows[close])
        beyond[close] = found_beyond
        tilt[close, 1] = mean_tilt(worth.here[rows[close]], noisier, locked[close])
    search = NoiseSearch(
        theta=np.array([records[row].theta for row in rows.tolist()]),
        step_s=np.array([series[row].step_s for row in rows.tolist()]),
        deviates=cut_deviates(beyond),
        tilt=tilt,
    )
    ends, found = find_noise_ends(*part[:2], search, part[2])
    for place, row in enumerate(rows.tolist()):
        for column, side in enumerate((-1.0, 1.0)):
            if found[place, column]:
                records[row].noise_ends[side] = math.exp(ends[place, column])
