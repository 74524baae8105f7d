"""The whole pipeline for one capture: phases, order, episodes, slips, state, estimate.

``measure_pair`` is what one row of a sweep needs; the region is made from many of them in
``fit.region``. Nothing here reads a file: channels hand out their samples on demand.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np

from fit.adequacy import examine_estimates, squared_amplitudes
from fit.adler import AdlerSettings, estimate_adler
from fit.difference import Order, PhaseDifference, form_difference
from fit.episodes import EpisodeRules, find_episodes
from fit.freerun import make_baseline
from fit.holdtime import choose_hold
from fit.indices import sync_indices
from fit.modes import ModesFinding, find_modes, without_coupling
from fit.mutual import estimate_mutual, no_mutual
from fit.noise_checks import checked_estimate
from fit.orders import find_order
from fit.pullin import PullIn, find_pull_in, locked_jitter, with_noise_on_the_way
from fit.rates import mean_rate
from fit.records import (
    AdlerEstimate,
    Baseline,
    Episode,
    FreeRun,
    Measurement,
    MutualEstimate,
    PsiSeries,
    RoleSummary,
)
from fit.slips import find_slips, slip_rate
from fit.state import decide_state, lost_share
from fit.thinning import thin_difference
from rig.arrays import FloatArray
from rig.channels import Channel
from rig.errors import FitError
from rig.health import PairHealth, examine_pair
from rig.phases.estimate import track_pair
from rig.phases.fewer import fewer_samples
from rig.phases.listed import EDGE_LIST_NOTE, is_edge_list
from rig.phases.settings import PairSettings
from rig.phases.track import PhaseTrack
from rig.quantities import undetermined

TRACE_POINTS = 1500  # more than a picture of a column's width can show
_PSI_DECIMALS = 7  # stored psi: 1e-7 rad lies far below the noise of any record
_TRACE_DECIMALS = 4
_NOT_YET = "not estimated yet"
_PENDING = AdlerEstimate(
    detuning_hz=undetermined("Hz", _NOT_YET),
    coupling_hz=undetermined("Hz", _NOT_YET),
    offset_rad=undetermined("rad", _NOT_YET),
    noise_rad2_s=undetermined("rad2/s", _NOT_YET),
    measurement_noise_rad=undetermined("rad", _NOT_YET),
    relaxation_rate_hz=undetermined("Hz", _NOT_YET),
    detuning_mean_hz=undetermined("Hz", _NOT_YET),
)


@dataclass(frozen=True, slots=True, kw_only=True)
class MeasureSettings:
    """How a capture is measured; every part has its defaults where it is used.

    ``order`` (n, m), or None to search for it. ``settle_s`` is left out of episodes, slips
    and state (a sweep steps the drive there) and kept for the pull-in and the estimate.
    ``one_way`` says that the reference is not pulled, so that its frequency in the capture
    is its free one. ``seed`` starts the draws behind the p-values of the indices.

    Raises
    ------
    FitError
        If the settling time is negative or not finite.
    """

    order: tuple[int, int] | None = (1, 1)
    phases: PairSettings = field(default_factory=PairSettings)
    rules: EpisodeRules = field(default_factory=EpisodeRules)
    adler: AdlerSettings = field(default_factory=AdlerSettings)
    settle_s: float = 0.0
    one_way: bool = True
    seed: int = 1

    def __post_init__(self) -> None:
        if not (math.isfinite(self.settle_s) and self.settle_s >= 0):
            raise FitError(f"settling time must be 0 s or more, got {self.settle_s:g}")


def measure_pair(
    reference: Channel,
    driven: Channel,
    *,
    settings: MeasureSettings,
    free_runs: Sequence[FreeRun] = (),
) -> Measurement:
    """Return everything one capture says about a pair.

    Parameters
    ----------
    reference, driven : Channel of one capture
    settings : MeasureSettings
    free_runs : sequence of FreeRun
        What the oscillators do alone; without them a quiet lock cannot be told from a chance.

    Raises
    ------
    PhaseError
        If a channel carries no usable phase.
    ChannelError
        If the two channels cannot be compared.
    """
    prepared = prepare_pair(reference, driven, settings=settings, free_runs=free_runs)
    return estimate_all([prepared], settings=settings)[0]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PreparedPair:
    """A measurement that still lacks its estimate, and the baseline the estimate uses.

    ``pull_in`` is the pull-in by itself, whose uncertainty waits for the estimate;
    ``amplitudes`` are the squared amplitude of the driven oscillator over its mean, less 1,
    at the samples of each segment of the series; ``modes`` what speaks
    for a passive pair.
    """

    measurement: Measurement
    baseline: Baseline | None
    pull_in: PullIn
    amplitudes: tuple[FloatArray, ...] | None = None
    modes: ModesFinding | None = None


def prepare_pair(
    reference: Channel,
    driven: Channel,
    *,
    settings: MeasureSettings,
    free_runs: Sequence[FreeRun] = (),
) -> PreparedPair:
    """Return all of a measurement but the estimate of the phase equation.

    The estimates of several captures are made together by ``estimate_all``, where they cost
    a fraction of what they cost apart. Parameters and errors as for ``measure_pair``.
    """
    tracks = track_pair(reference, driven, settings=replace(settings.phases, order=settings.order))
    prepared = prepare_tracks(tracks[0], tracks[1], driven, settings=settings, free_runs=free_runs)
    if is_edge_list(reference.capture):
        # The checks of signals (lines, offset, leaks) mean nothing there.
        notes = (*prepared.measurement.notes, EDGE_LIST_NOTE)
        return replace(prepared, measurement=replace(prepared.measurement, notes=notes))
    health = examine_pair(reference, driven)
    return replace(prepared, measurement=_with_health(prepared.measurement, health))


def estimate_all(
    prepared: Sequence[PreparedPair], *, settings: MeasureSettings
) -> list[Measurement]:
    """Return the finished measurements; each is the same whatever stands beside it."""
    estimates = estimate_adler(
        [part.measurement.series for part in prepared],
        baselines=[part.baseline for part in prepared],
        settings=settings.adler,
    )
    series = [part.measurement.series for part in prepared]
    examined = examine_estimates(
        series, estimates, amplitudes=[part.amplitudes for part in prepared]
    )
    return [_finished(part, each) for part, each in zip(prepared, examined, strict=True)]


def _finished(part: PreparedPair, estimate: AdlerEstimate) -> Measurement:
    """Return a measurement with its estimate and with what waited for it."""
    time, note = with_noise_on_the_way(part.pull_in, estimate)
    return replace(
        part.measurement,
        adler=checked_estimate(part.measurement, without_coupling(estimate, part.modes)),
        pull_in_s=time,
        notes=part.measurement.notes + ((note,) if note else ()),
    )


def prepare_tracks(
    reference: PhaseTrack,
    driven: PhaseTrack,
    channel: Channel,
    *,
    settings: MeasureSettings,
    free_runs: Sequence[FreeRun] = (),
) -> PreparedPair:
    """Return the prepared measurement of two phase tracks.

    Parameters
    ----------
    reference, driven : PhaseTrack on one grid
    channel : Channel, names the capture the tracks are of
    settings : MeasureSettings
    free_runs : sequence of FreeRun
    """
    fewer = fewer_samples(reference), fewer_samples(driven)
    order, candidates, order_notes = _settle_order(*fewer, settings, free_runs)
    settled = drop_start(form_difference(driven, reference, order), settings.settle_s)
    baseline = make_baseline(
        free_runs, order, reference_hz=reference.frequency_hz if settings.one_way else None
    )
    slips = find_slips(settled)
    tried = max(len(candidates), 1)
    hold = choose_hold(settled, slips, settings.rules, baseline=baseline, orders_tried=tried)
    episodes = _styled(settled, find_episodes(settled, settings.rules, hold.hold_s))
    # Edges and slips are dated by all samples; the rest asks for the slow motion only.
    reference, driven = fewer
    whole = form_difference(driven, reference, order)
    settled = drop_start(whole, settings.settle_s)
    decision = decide_state(
        settled,
        episodes,
        slips,
        rules=settings.rules,
        hold=hold,
        baseline=baseline,
        orders_tried=tried,
        lost=lost_share(whole.valid, _settled_at(whole, settings.settle_s)),
    )
    if candidates and candidates[0][2] <= 0 and decision.state == "locked":
        decision = replace(decision, state="undecided", reason=_no_order_reason(order))
    modes = find_modes(reference, driven)
    if modes is not None:
        decision = replace(decision, state="undecided", reason=modes.reason)
    pull_in = find_pull_in(whole, episodes)
    series = _rounded(thin_difference(whole))
    trace_s, trace_psi_rad = _trace(whole)
    measurement = Measurement(
        path=channel.capture.path,
        format=channel.capture.format,
        rate_hz=channel.capture.rate_hz,
        duration_s=channel.capture.duration_s,
        capture_notes=channel.capture.notes,
        reference=_summary(reference),
        driven=_summary(driven),
        order=order,
        decision=decision,
        episodes=episodes,
        slips=slips,
        mean_rate_hz=mean_rate(settled),
        adler=_PENDING,
        jitter_rad=locked_jitter(settled, episodes),
        pull_in_s=pull_in.time,
        slip_rate_hz=slip_rate(settled, slips),
        indices=sync_indices(
            settled,
            driven,
            reference,
            baseline=baseline,
            rng=np.random.default_rng(settings.seed),
        ),
        notes=whole.notes + order_notes,
        series=series,
        trace_s=trace_s,
        trace_psi_rad=trace_psi_rad,
        order_candidates=candidates,
        mutual=None if settings.one_way else _mutual((reference, driven), order, series, modes),
    )
    return PreparedPair(
        measurement=measurement,
        baseline=baseline,
        pull_in=pull_in,
        amplitudes=squared_amplitudes(driven, series),
        modes=modes,
    )


def _mutual(
    tracks: tuple[PhaseTrack, PhaseTrack],
    order: Order,
    series: PsiSeries,
    modes: ModesFinding | None,
) -> MutualEstimate:
    """Return both couplings, or why a passive pair has none."""
    if modes is not None:
        return no_mutual(modes.reason)
    return estimate_mutual(*tracks, order, series)


def _no_order_reason(order: Order) -> str:
    return (
        f"no order tried is likelier locked than not, the best {order.n}:{order.m}; state the order"
    )


def _styled(difference: PhaseDifference, episodes: tuple[Episode, ...]) -> tuple[Episode, ...]:
    """Return the episodes, none in phase or anti-phase where psi holds an unknown constant."""
    if difference.zeros_agree:
        return episodes
    return tuple(replace(part, style="offset") for part in episodes)


def _settled_at(difference: PhaseDifference, settle_s: float) -> int:
    """Return the first sample not before a settling time."""
    return max(0, math.ceil((settle_s - difference.start_s) * difference.rate_hz))


def drop_start(difference: PhaseDifference, settle_s: float) -> PhaseDifference:
    """Return the difference with the settling time at its start marked as not valid."""
    if not settle_s > 0:
        return difference
    valid = difference.valid.copy()
    # The first sample not before that time, as the times of the samples are rounded.
    start_s, rate_hz = difference.start_s, difference.rate_hz
    first = max(0, math.floor((settle_s - start_s) * rate_hz) - 1)
    while first < valid.size and start_s + first / rate_hz < settle_s:
        first += 1
    valid[:first] = False
    return replace(difference, valid=valid)


def _with_health(measurement: Measurement, health: PairHealth) -> Measurement:
    """Return the measurement with the faults of its signals; some forbid any state."""
    notes = measurement.notes + health.notes
    followed_hz = [part.frequency_hz.value for part in (measurement.reference, measurement.driven)]
    reason = health.no_state_reason or health.mains_reason(*followed_hz)
    if reason is None:
        return replace(measurement, notes=notes)
    barred = replace(measurement.decision, state="undecided", reason=reason)
    return replace(measurement, notes=notes, decision=barred)


def _settle_order(
    reference: PhaseTrack,
    driven: PhaseTrack,
    settings: MeasureSettings,
    free_runs: Sequence[FreeRun],
) -> tuple[Order, tuple[tuple[int, int, float], ...], tuple[str, ...]]:
    """Return the order that is given, or the one the record speaks for with its rivals."""
    if settings.order is not None:
        return Order(n=settings.order[0], m=settings.order[1], source="given"), (), ()
    search = find_order(driven, reference, rules=settings.rules, free_runs=free_runs)
    return search.order, search.candidates, (search.note,) if search.note else ()


def _summary(track: PhaseTrack) -> RoleSummary:
    """Return what a report says of one channel."""
    return RoleSummary(
        channel=track.channel,
        unit=track.unit,
        frequency_hz=track.frequency_hz,
        amplitude=track.amplitude_mean,
        snr_db=track.snr_db,
        method=track.method,
        notes=track.notes,
        components=tuple(
            (part.name, part.correction_rad, part.u_rad, part.distribution)
            for part in track.systematic
        ),
    )


def _rounded(series: PsiSeries) -> PsiSeries:
    """Return the series as it is stored, so that a stored run gives the same region."""
    return replace(
        series, segments=tuple(np.round(part, _PSI_DECIMALS) for part in series.segments)
    )


def _trace(difference: PhaseDifference) -> tuple[FloatArray, FloatArray]:
    """Return (time, psi) thinned for pictures, NaN where psi does not hold."""
    stride = max(1, -(-difference.psi_rad.size // TRACE_POINTS))
    time_s = difference.start_s + np.arange(difference.psi_rad.size)[::stride] / difference.rate_hz
    held = difference.valid[::stride]
    psi_rad = np.where(held, difference.psi_rad[::stride], np.nan)
    return np.round(time_s, 6), np.asarray(np.round(psi_rad, _TRACE_DECIMALS), dtype=float)
