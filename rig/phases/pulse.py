"""Phase of a toothed wheel or tacho: pulses per turn, a gap or an index pulse, uneven teeth."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from rig.arrays import FloatArray
from rig.channels import Channel, ChannelSetup
from rig.phases.bands import Band
from rig.phases.crossings import CrossingFinder
from rig.phases.events import Instants, far_enough, phase_of_instants
from rig.phases.finishing import FoundPhase
from rig.phases.grid import Grid
from rig.phases.levels import SignalLevel, signal_level
from rig.phases.lines import FollowedLine
from rig.phases.settings import PhaseSettings
from rig.phases.wheel import Wheel, place_pulses

ZONE_SHARE = 0.25  # of the height: half the dead zone around the middle of a pulse
GLITCH_SHARE = 0.05  # of the usual interval: nearer pulses are glitches, not uneven teeth


def wheel_of(setup: ChannelSetup) -> Wheel:
    """Return the wheel a channel is wired to."""
    return Wheel(
        positions=setup.pulses_per_turn, missing=setup.missing_pulses, extra=setup.extra_pulses
    )


def instants_of_pulses(event_s: FloatArray, wheel: Wheel, settings: PhaseSettings) -> Instants:
    """Return pulses placed on the turns of their wheel.

    Parameters
    ----------
    event_s : array, shape (n,), s after the start of the grid, increasing
    wheel : Wheel
    settings : PhaseSettings

    Raises
    ------
    PhaseError
        If the stated gap or index pulse is not found.
    """
    share = settings.min_interval_cycles if wheel.positions == 1 else GLITCH_SHARE
    kept = far_enough(event_s, share)
    placed = place_pulses(event_s[kept], wheel, settings.max_interval_cycles)
    return Instants(
        event_s=placed.event_s,
        turns=placed.turns,
        bridged=placed.bridged,
        rejected=int(np.sum(~kept)),
        notes=placed.notes,
    )


class PulseFollower:
    """Samples of a tacho channel in, the phase of its wheel out."""

    def __init__(
        self,
        channel: Channel,
        line: FollowedLine,
        band: Band | None,
        *,
        grid: Grid,
        settings: PhaseSettings,
    ) -> None:
        self._channel, self._grid, self._settings = channel, grid, settings
        self._height = signal_level(channel)
        level, zone = _middle(self._height)
        if settings.level is not None:
            level = settings.level / channel.scale
        self._finder = CrossingFinder(level, zone)

    def feed(self, samples: NDArray[Any]) -> None:
        """Take the next chunk of samples."""
        self._finder.feed(samples)

    def finish(self) -> FoundPhase:
        """Return the phase of the wheel on the grid."""
        frames, rising = self._finder.markers()
        wanted = rising if self._settings.edge != "falling" else ~rising
        seconds = frames[wanted] / self._grid.rate_hz
        seconds = seconds[seconds < (self._grid.frame_count - 1) / self._grid.rate_hz]
        instants = instants_of_pulses(seconds, wheel_of(self._channel.setup), self._settings)
        gaps = self._finder.gap_frames / self._grid.rate_hz
        bridged = instants.bridged.copy()
        place = np.searchsorted(instants.event_s, gaps) - 1
        bridged[place[(place >= 0) & (place < bridged.size)]] = False
        found = Instants(
            event_s=instants.event_s,
            turns=instants.turns,
            bridged=bridged,
            rejected=instants.rejected,
            amplitude=(self._height.top - self._height.bottom) / 2.0,
            notes=instants.notes,
        )
        return phase_of_instants("pulse", self._channel.name, found, self._grid)


def _middle(height: SignalLevel) -> tuple[float, float]:
    """Return the level halfway up a pulse, and half the dead zone around it."""
    rise = height.top - height.bottom
    return height.bottom + rise / 2.0, ZONE_SHARE * rise
