"""Phases straight from lists of instants: edges of a counter, ticks, beats picked elsewhere."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from rig.arrays import FloatArray, frozen_view, median
from rig.channels import ChannelSetup
from rig.errors import PhaseError
from rig.phases.events import phase_of_instants
from rig.phases.finishing import finish_track
from rig.phases.grid import Grid
from rig.phases.pulse import instants_of_pulses, wheel_of
from rig.phases.settings import PairSettings, PhaseSettings
from rig.phases.track import PhaseTrack

PER_CYCLE = 4.0  # grid samples a cycle of the faster of the two


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class EventChannel:
    """Instants of one oscillator in s on a clock common to the pair, increasing.

    ``setup`` states the wheel (pulses per turn, missing, extra) and the corrections.

    Raises
    ------
    PhaseError
        If the instants are fewer than 4, not finite, or out of order.
    """

    name: str
    event_s: FloatArray
    setup: ChannelSetup
    unit: str = ""
    scale: float = 1.0
    scale_u_rel: float = 0.0
    skew_from_file_s: float = 0.0

    def __post_init__(self) -> None:
        events = np.asarray(self.event_s, dtype=float)
        if not np.isfinite(events).all():
            raise PhaseError(f"channel '{self.name}': instants must be finite numbers of seconds")
        if events.size < 4:
            raise PhaseError(
                f"channel '{self.name}': {events.size} instants, at least 4 needed; record longer"
            )
        late = np.flatnonzero(np.diff(events) <= 0)
        if late.size:
            raise PhaseError(
                f"channel '{self.name}': instant {late[0] + 2} at {events[late[0] + 1]:.9g} s does "
                f"not follow {events[late[0]]:.9g} s; sort the list and leave out repeats"
            )
        object.__setattr__(self, "event_s", frozen_view(events))


def track_pair_from_events(
    reference: EventChannel, driven: EventChannel, *, settings: PairSettings | None = None
) -> tuple[PhaseTrack, PhaseTrack]:
    """Return the phases of two oscillators known by their instants, on one even grid.

    The grid reaches from the later first to the earlier last instant, with four samples a
    turn of the faster one unless a higher rate is asked.

    Parameters
    ----------
    reference, driven : EventChannel
    settings : PairSettings; ``rate_hz``, the span and the interval rules are used

    Raises
    ------
    PhaseError
        If the two do not overlap in time, or a wheel is not what is stated.
    """
    pair = settings or PairSettings()
    first = max(reference.event_s[0], driven.event_s[0], pair.start_s)
    last = min(reference.event_s[-1], driven.event_s[-1])
    if pair.stop_s is not None:
        last = min(last, pair.stop_s)
    if not last > first:
        raise PhaseError(
            f"channels '{reference.name}' and '{driven.name}' share no time: the later begins at "
            f"{first:.6g} s, the earlier ends at {last:.6g} s; give instants on one clock"
        )
    grid = _grid(first, last, max(_turn_hz(reference), _turn_hz(driven)), pair.rate_hz)
    return _track(reference, grid, pair.reference), _track(driven, grid, pair.driven)


def track_from_events(channel: EventChannel, *, settings: PairSettings | None = None) -> PhaseTrack:
    """Return the phase of one oscillator known by its instants; see the pair."""
    pair = settings or PairSettings()
    first, last = max(channel.event_s[0], pair.start_s), channel.event_s[-1]
    return _track(channel, _grid(first, last, _turn_hz(channel), pair.rate_hz), pair.driven)


def _turn_hz(channel: EventChannel) -> float:
    """Return the median rate of whole turns."""
    pulses = channel.setup.pulses_per_turn - channel.setup.missing_pulses
    pulses += channel.setup.extra_pulses
    return 1.0 / (median(np.diff(channel.event_s)) * pulses)


def _grid(first_s: float, last_s: float, turn_hz: float, rate_hz: float | None) -> Grid:
    """Return a grid whose first sample stands at a whole frame of its own rate."""
    rate = max(PER_CYCLE * turn_hz, rate_hz or 0.0)
    first = int(np.ceil(first_s * rate))
    count = max(1, int(np.floor(last_s * rate)) - first + 1)
    return Grid(rate_hz=2.0 * rate, first_frame=2 * first, frame_count=2 * count, rows=1)


def _track(channel: EventChannel, grid: Grid, settings: PhaseSettings) -> PhaseTrack:
    seconds = channel.event_s - grid.start_s
    instants = instants_of_pulses(seconds, wheel_of(channel.setup), settings)
    return finish_track(channel, grid, phase_of_instants("pulse", channel.name, instants, grid))
