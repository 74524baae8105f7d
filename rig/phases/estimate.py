"""Phases of a pair or of one oscillator: lines, bands, grid, one pass, tracks.

Every estimator is a class with the same construction, fed with chunks of samples; one row
of ``ESTIMATORS`` makes it known.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, Protocol

from numpy.typing import NDArray

from rig.channels import Channel
from rig.errors import PhaseError
from rig.phases.analytic import AnalyticFollower
from rig.phases.bands import Band, choose_band, close_beat_hz, widened_band
from rig.phases.demodulate import rows_for
from rig.phases.finishing import FoundPhase, finish_track
from rig.phases.grid import Grid, run_pass
from rig.phases.leak import Leak, find_leak, strongest_offset_hz
from rig.phases.lines import FollowedLine, follow_line
from rig.phases.marker import MarkerFollower
from rig.phases.settings import PairSettings, PhaseSettings
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
}

LARGEST_LEAK = 1.0  # partner's line over own: above, the phase counts the partner's turns
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
    rules = settings or PairSettings()
    if reference.capture is not driven.capture:
        raise PhaseError(
            f"channels '{reference.name}' and '{driven.name}' come from two captures, "
            f"'{reference.capture.path}' and '{driven.capture.path}'; one grid needs one capture"
        )
    _refuse_same(reference, driven, rules)
    lines = (follow_line(reference, rules.reference), follow_line(driven, rules.driven))
    beats = (
        close_beat_hz(lines[0], lines[1], rules.order, own_is_driven=False),
        close_beat_hz(lines[1], lines[0], rules.order, own_is_driven=True),
    )
    reference_track, driven_track = _track_all(
        (reference, driven), lines, beats, (rules.reference, rules.driven), rules
    )
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
    rules = (
        settings
        if isinstance(settings, PairSettings)
        else PairSettings(driven=settings or PhaseSettings())
    )
    line = follow_line(channel, rules.driven)
    (track,) = _track_all((channel,), (line,), (None,), (rules.driven,), rules)
    return track


def _refuse_same(reference: Channel, driven: Channel, rules: PairSettings) -> None:
    if reference.column == driven.column and (
        rules.reference.band_hz is None or rules.driven.band_hz is None
    ):
        raise PhaseError(
            f"channel '{driven.name}' serves both roles; state two bands, one for each oscillator"
        )


def _track_all(
    channels: tuple[Channel, ...],
    lines: tuple[FollowedLine, ...],
    beats: tuple[float | None, ...],
    rules: tuple[PhaseSettings, ...],
    pair: PairSettings,
) -> tuple[PhaseTrack, ...]:
    capture = channels[0].capture
    first, stop = _span(pair, capture.rate_hz, capture.frame_count)
    duration_s = (stop - first) / capture.rate_hz
    bands = [
        choose_band(line, beat, rule, rate_hz=capture.rate_hz, duration_s=duration_s)
        for line, beat, rule in zip(lines, beats, rules, strict=True)
    ]
    for _ in range(MOST_PASSES - 1):
        grid, found = _one_pass(channels, lines, bands, rules, pair, (first, stop))
        wider = [_wider(*each) for each in zip(bands, rules, found, strict=True)]
        if wider == bands:
            break
        bands = wider
    else:
        grid, found = _one_pass(channels, lines, bands, rules, pair, (first, stop))
    leaks = _leak_notes(channels, found, grid)
    return tuple(
        finish_track(channel, grid, part, notes)
        for channel, part, notes in zip(channels, found, leaks, strict=True)
    )


def _leak_notes(
    channels: tuple[Channel, ...], found: list[FoundPhase], grid: Grid
) -> list[tuple[str, ...]]:
    """Return for each channel what it holds of its partner's line, or refuse it."""
    if len(channels) == 1:
        return [()]
    mean_hz = [_mean_hz(part, grid) for part in found]
    leaks = [_leak(found[own], mean_hz[1 - own], grid) for own in (0, 1)]
    return [_leak_note(channels[own], leaks[own], leaks[1 - own]) for own in (0, 1)]


def _mean_hz(part: FoundPhase, grid: Grid) -> float:
    """Return the frequency of the strongest line of the base band, or of the line followed."""
    if part.base_band is None or part.base_band.size < 2:
        return part.line_hz
    return part.carrier_hz + strongest_offset_hz(part.base_band, grid.grid_rate_hz)


def _leak(part: FoundPhase, partner_hz: float, grid: Grid) -> Leak | None:
    if part.base_band is None or part.band_hz is None:
        return None
    if not part.band_hz[0] < partner_hz < part.band_hz[1]:
        return None
    return find_leak(
        part.base_band,
        rate_hz=grid.grid_rate_hz,
        carrier_hz=part.carrier_hz,
        half_hz=(part.band_hz[1] - part.band_hz[0]) / 2.0,
        partner_hz=partner_hz,
    )


def _leak_note(channel: Channel, own: Leak | None, partner: Leak | None) -> tuple[str, ...]:
    if own is None:
        return ()
    if own.ratio > LARGEST_LEAK and partner is None:
        raise PhaseError(
            f"channel '{channel.name}' holds {own.ratio:.2f} times more of the partner's line "
            f"({own.partner_hz:.6g} Hz) than of its own ({own.own_hz:.6g} Hz): locking cannot be "
            "judged; separate the sensors or state a band that leaves the partner out"
        )
    return (
        f"{own.ratio:.2g} of its own line at {own.own_hz:.6g} Hz is added from the partner's at "
        f"{own.partner_hz:.6g} Hz; the phase is bent by as many radians at the beat",
    )


def _wider(band: Band, rule: PhaseSettings, found: FoundPhase) -> Band:
    if rule.band_hz is not None or found.fastest_hz is None or found.snr_db is None:
        return band
    return widened_band(band, found.fastest_hz, found.snr_db) or band


def _one_pass(
    channels: tuple[Channel, ...],
    lines: tuple[FollowedLine, ...],
    bands: list[Band],
    rules: tuple[PhaseSettings, ...],
    pair: PairSettings,
    span: tuple[int, int],
) -> tuple[Grid, list[FoundPhase]]:
    capture = channels[0].capture
    grid = Grid(
        rate_hz=capture.rate_hz,
        first_frame=span[0],
        frame_count=span[1] - span[0],
        rows=_rows(bands, pair, capture.rate_hz),
    )
    followers = [
        ESTIMATORS[_method(rule)](channel, line, band, grid=grid, settings=rule)
        for channel, line, band, rule in zip(channels, lines, bands, rules, strict=True)
    ]
    columns = [channel.column for channel in channels]
    run_pass(capture, columns, followers, grid=grid, block_frames=pair.block_frames)
    return grid, [follower.finish() for follower in followers]


def _method(rule: PhaseSettings) -> str:
    return "analytic" if rule.method == "auto" else rule.method


def _span(pair: PairSettings, rate_hz: float, frame_count: int) -> tuple[int, int]:
    first = min(round(pair.start_s * rate_hz), frame_count)
    stop = frame_count if pair.stop_s is None else min(round(pair.stop_s * rate_hz), frame_count)
    if not stop > first:
        raise PhaseError(
            f"span {pair.start_s:g} to {pair.stop_s} s holds no frame of a record of "
            f"{frame_count / rate_hz:g} s; state a span inside it"
        )
    return first, stop


def _rows(bands: list[Band], pair: PairSettings, rate_hz: float) -> int:
    """Return the rows of stage 1: what the wider band allows, fewer where a rate is asked."""
    rows = rows_for(rate_hz, max(band.half_hz for band in bands))
    if pair.rate_hz is not None:
        rows = max(1, min(rows, int(rate_hz / (2.0 * pair.rate_hz))))
    return rows
