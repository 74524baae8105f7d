"""Phases of a pair or of one oscillator: lines, bands, grid, one pass, tracks.

Every estimator is a class with the same construction, fed with chunks of samples; one row
of ``ESTIMATORS`` makes it known.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Any, NamedTuple, Protocol

from numpy.typing import NDArray

from rig.channels import Channel
from rig.errors import PhaseError
from rig.phases.analytic import AnalyticFollower
from rig.phases.bands import Band, choose_band, close_beat_hz, widened_band
from rig.phases.demodulate import rows_for
from rig.phases.finishing import FoundPhase, finish_track
from rig.phases.grid import Grid, run_pass
from rig.phases.instants import track_from_events, track_pair_from_events
from rig.phases.leak import leak_notes
from rig.phases.levels import signal_shape
from rig.phases.lines import FewCyclesError, FollowedLine, follow_line, rough_line
from rig.phases.listed import listed_events
from rig.phases.marker import MarkerFollower
from rig.phases.pulse import PulseFollower
from rig.phases.settings import PairSettings, PhaseSettings
from rig.phases.spike import SpikeFollower
from rig.phases.track import PhaseTrack


class PhaseFollower(Protocol):
    """What every estimator is: fed in order, finished once."""

    def feed(self, samples: NDArray[Any]) -> None:
        """Take the next chunk of samples."""

    def finish(self) -> FoundPhase:
        """Return what was found."""


ESTIMATORS: dict[str, Callable[..., PhaseFollower]] = {
    "analytic": AnalyticFollower,
    "marker": MarkerFollower,
    "pulse": PulseFollower,
    "spike": SpikeFollower,
}
FEWEST_MARKED_CYCLES = 6.0  # cycles of a record that markers may still follow
PER_CYCLE = 4.0  # grid samples a cycle for methods by instants

MOST_PASSES = 3  # a band too narrow for the beats is widened at most twice


def track_pair(
    reference: Channel, driven: Channel, *, settings: PairSettings | None = None
) -> tuple[PhaseTrack, PhaseTrack]:
    """Return the phases of both oscillators on one even grid, from one pass over the capture.

    Parameters
    ----------
    reference, driven : Channel
        Of one capture; one column may serve both roles with two stated bands.
    settings : PairSettings

    Raises
    ------
    PhaseError
        If a channel carries no usable phase; the message names channel, value and remedy.
    """
    pair = settings or PairSettings()
    if reference.capture is not driven.capture:
        raise PhaseError(
            f"channels '{reference.name}' and '{driven.name}' come from two captures, "
            f"'{reference.capture.path}' and '{driven.capture.path}'; one grid needs one capture"
        )
    listed = listed_events(reference, pair.reference), listed_events(driven, pair.driven)
    if listed[0] is not None and listed[1] is not None:
        return track_pair_from_events(listed[0], listed[1], settings=pair)
    _refuse_same(reference, driven, pair)
    channels = (reference, driven)
    prepared = [
        _prepare(channel, rule)
        for channel, rule in zip(channels, (pair.reference, pair.driven), strict=True)
    ]
    rules, lines = [rule for rule, _ in prepared], [line for _, line in prepared]
    beats = [
        close_beat_hz(lines[0], lines[1], pair.order, own_is_driven=False),
        close_beat_hz(lines[1], lines[0], pair.order, own_is_driven=True),
    ]
    sources = [_Source(*each) for each in zip(channels, rules, lines, beats, strict=True)]
    reference_track, driven_track = _track_all(sources, pair)
    return reference_track, driven_track


def track_one(
    channel: Channel, *, settings: PhaseSettings | PairSettings | None = None
) -> PhaseTrack:
    """Return the phase of one oscillator alone (a free-running capture).

    Parameters
    ----------
    channel : Channel
    settings : PhaseSettings, or PairSettings of which the driven part is used

    Raises
    ------
    PhaseError
        If the channel carries no usable phase.
    """
    if isinstance(settings, PairSettings):
        pair = settings
    else:
        pair = PairSettings(driven=settings or PhaseSettings())
    listed = listed_events(channel, pair.driven)
    if listed is not None:
        return track_from_events(listed, settings=pair)
    rule, line = _prepare(channel, pair.driven)
    (track,) = _track_all([_Source(channel, rule, line, None)], pair)
    return track


def choose_method(channel: Channel, settings: PhaseSettings) -> PhaseSettings:
    """Return the settings with "auto" replaced by the method that suits the signal.

    A stated band means the analytic signal; a wheel or a signal of two levels the pulse
    train; short peaks of one sign on a flat ground spikes; all else the analytic signal.
    """
    if settings.method != "auto":
        return settings
    setup = channel.setup
    if settings.band_hz is not None:
        return replace(settings, method="analytic")
    if setup.pulses_per_turn > 1 or setup.missing_pulses or setup.extra_pulses:
        return replace(settings, method="pulse")
    shape = signal_shape(channel)
    if shape.is_two_level:
        return replace(settings, method="pulse")
    return replace(settings, method="spike" if shape.is_spiky else "analytic")


def _prepare(channel: Channel, settings: PhaseSettings) -> tuple[PhaseSettings, FollowedLine]:
    """Return the settings with a chosen method, and the line of the channel.

    A record too short for a filter and its guards is followed by markers, which lose no
    more than a part of a cycle at its ends; unless a method is stated.
    """
    rule = choose_method(channel, settings)
    if rule.method != "analytic":
        return rule, rough_line(channel, rule)
    try:
        return rule, follow_line(channel, rule)
    except FewCyclesError as short:
        if settings.method != "auto" or short.cycles < FEWEST_MARKED_CYCLES:
            raise
    rule = replace(rule, method="marker")
    line = rough_line(channel, rule)
    note = f"only {line.frequency_hz * channel.capture.duration_s:.1f} cycles: followed by markers"
    return rule, replace(line, notes=(*line.notes, note))


class _Source(NamedTuple):
    """One role of the pair: its channel, settings with a chosen method, line and beat."""

    channel: Channel
    rule: PhaseSettings
    line: FollowedLine
    beat_hz: float | None


def _refuse_same(reference: Channel, driven: Channel, rules: PairSettings) -> None:
    if reference.column == driven.column and (
        rules.reference.band_hz is None or rules.driven.band_hz is None
    ):
        raise PhaseError(
            f"channel '{driven.name}' serves both roles; state two bands, one for each oscillator"
        )


def _track_all(sources: list[_Source], pair: PairSettings) -> tuple[PhaseTrack, ...]:
    capture = sources[0].channel.capture
    span = _span(pair, capture.rate_hz, capture.frame_count)
    duration_s = (span[1] - span[0]) / capture.rate_hz
    bands = [_band(source, capture.rate_hz, duration_s) for source in sources]
    grid, found = _one_pass(sources, bands, pair, span)
    for _ in range(MOST_PASSES - 1):
        wider = [_wider(*each) for each in zip(sources, bands, found, strict=True)]
        if wider == bands:
            break
        bands = wider
        grid, found = _one_pass(sources, bands, pair, span)
    leaks = leak_notes([source.channel.name for source in sources], found, grid)
    tracks = []
    for source, notes in zip(sources, leaks, strict=True):
        # Each is let go as soon as its track is made: they are as large as the tracks.
        said = (*notes, *_wheel_notes(source))
        tracks.append(finish_track(source.channel, grid, found.pop(0), said))
    return tuple(tracks)


def _wheel_notes(source: _Source) -> tuple[str, ...]:
    """Say that each pulse counts as a turn: with more teeth the ratio of a pair is another."""
    is_plain = source.channel.setup.pulses_per_turn == 1
    return ("pulses per turn taken as 1",) if source.rule.method == "pulse" and is_plain else ()


def _band(source: _Source, rate_hz: float, duration_s: float) -> Band | None:
    if source.rule.method != "analytic":
        return None
    return choose_band(
        source.line, source.beat_hz, source.rule, rate_hz=rate_hz, duration_s=duration_s
    )


def _wider(source: _Source, band: Band | None, found: FoundPhase) -> Band | None:
    if band is None or source.rule.band_hz is not None:
        return band
    if found.fastest_hz is None or found.snr_db is None:
        return band
    return widened_band(band, found.fastest_hz, found.snr_db) or band


def _one_pass(
    sources: list[_Source], bands: list[Band | None], pair: PairSettings, span: tuple[int, int]
) -> tuple[Grid, list[FoundPhase]]:
    capture = sources[0].channel.capture
    grid = Grid(
        rate_hz=capture.rate_hz,
        first_frame=span[0],
        frame_count=span[1] - span[0],
        rows=_rows(sources, bands, pair, capture.rate_hz),
    )
    followers = [
        ESTIMATORS[source.rule.method](
            source.channel, source.line, band, grid=grid, settings=source.rule
        )
        for source, band in zip(sources, bands, strict=True)
    ]
    columns = [source.channel.column for source in sources]
    run_pass(capture, columns, followers, grid=grid, block_frames=pair.block_frames)
    return grid, [follower.finish() for follower in followers]


def _span(pair: PairSettings, rate_hz: float, frame_count: int) -> tuple[int, int]:
    first = min(round(pair.start_s * rate_hz), frame_count)
    stop = frame_count if pair.stop_s is None else min(round(pair.stop_s * rate_hz), frame_count)
    if not stop > first:
        raise PhaseError(
            f"span {pair.start_s:g} to {pair.stop_s} s holds no frame of a record of "
            f"{frame_count / rate_hz:g} s; state a span inside it"
        )
    return first, stop


def _rows(
    sources: list[_Source], bands: list[Band | None], pair: PairSettings, rate_hz: float
) -> int:
    """Return half the step of the grid: what the widest band and the instants allow.

    Instants need ``PER_CYCLE`` samples a cycle; a stated rate can only make it finer.
    """
    most = [
        rows_for(rate_hz, band.half_hz)
        if band is not None
        else max(1, int(rate_hz / (2.0 * PER_CYCLE * _cycle_hz(source))))
        for source, band in zip(sources, bands, strict=True)
    ]
    if pair.rate_hz is not None:
        most.append(max(1, int(rate_hz / (2.0 * pair.rate_hz))))
    return min(most)


def _cycle_hz(source: _Source) -> float:
    """Return the rate of whole turns: the line of a wheel is that of its teeth."""
    teeth = source.channel.setup.pulses_per_turn if source.rule.method == "pulse" else 1
    return source.line.frequency_hz / teeth
