"""Phase by spikes: one turn from peak to peak; phase 0 at the peak."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rig.arrays import BoolArray, FloatArray, median
from rig.channels import Channel
from rig.phases.bands import Band
from rig.phases.events import (
    Instants,
    bridged_intervals,
    phase_of_instants,
    steps_over,
    usual_intervals,
)
from rig.phases.finishing import FoundPhase
from rig.phases.grid import Grid
from rig.phases.levels import SignalLevel, signal_level
from rig.phases.lines import FollowedLine
from rig.phases.peaks import PeakFinder
from rig.phases.settings import PhaseSettings

THRESHOLD_SHARE = 0.5  # of the usual height over the median
RELEASE_SHARE = 0.25
LOPSIDED = 1.5  # troughs this much deeper than peaks are high are the spikes


class SpikeFollower:
    """Samples of one channel in, the phase of its spikes out."""

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
        self._level = signal_level(channel)
        self._sign = _sign_of(self._level)
        reach = self._level.top if self._sign > 0 else self._level.bottom
        height = reach - self._level.median
        threshold = self._level.median + THRESHOLD_SHARE * height
        if settings.level is not None:
            threshold = settings.level / channel.scale
        release = self._level.median + RELEASE_SHARE * height
        self._finder = PeakFinder(threshold, release, self._sign)

    def feed(self, samples: NDArray[Any]) -> None:
        """Take the next chunk of samples."""
        self._finder.feed(samples)

    def finish(self) -> FoundPhase:
        """Return the phase on the grid, one turn from spike to spike."""
        frames, heights = self._finder.peaks()
        events = frames / self._grid.rate_hz
        kept = after_refractory(events, self._sign * heights, self._settings.refractory_cycles)
        events = events[kept]
        notes = ("troughs taken as the spikes",) if self._sign < 0 else ()
        gaps_s = self._finder.gap_frames / self._grid.rate_hz
        bridged = bridged_intervals(events, self._settings.max_interval_cycles, gaps_s)
        instants = Instants(
            event_s=events,
            turns=np.concatenate([[0.0], np.cumsum(steps_over(events, bridged))]),
            bridged=bridged,
            rejected=int(np.sum(~kept)),
            amplitude=abs(median(heights) - self._level.median) if heights.size else 0.0,
            notes=notes,
        )
        return phase_of_instants("spike", self._channel.name, instants, self._grid)


def _sign_of(level: SignalLevel) -> int:
    up, down = level.top - level.median, level.median - level.bottom
    return -1 if down > LOPSIDED * up else 1


def after_refractory(event_s: FloatArray, height: FloatArray, share: float) -> BoolArray:
    """Return which peaks stand alone: of two nearer than the refractory time the higher stays.

    Parameters
    ----------
    event_s : array, shape (n,), s, increasing
    height : array, shape (n,)
    share : float, refractory time over the usual interval
    """
    kept = np.ones(event_s.size, dtype=bool)
    if event_s.size < 2:
        return kept
    refractory_s = share * median(usual_intervals(event_s))
    last, last_height = -1, -math.inf
    for index in range(event_s.size):
        if last >= 0 and event_s[index] - event_s[last] < refractory_s:
            kept[last if height[index] > last_height else index] = False
            if height[index] <= last_height:
                continue
        last, last_height = index, float(height[index])
    return kept
