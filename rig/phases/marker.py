"""Phase by markers: level crossings, a turn (or half a turn) from each to the next.

The phase of a cos(phi) is -1/4 turn at a rising and +1/4 turn at a falling crossing of the
level, so markers and the analytic signal agree on a sine. Linear between markers, so the
phase never decreases and the momentary frequency is one over the interval.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rig.arrays import BoolArray, FloatArray, IntArray
from rig.channels import Channel
from rig.phases.bands import Band
from rig.phases.crossings import CrossingFinder
from rig.phases.events import (
    Instants,
    bridged_intervals,
    far_enough,
    phase_of_instants,
    steps_over,
)
from rig.phases.finishing import FoundPhase
from rig.phases.grid import Grid
from rig.phases.levels import running_ground, signal_level
from rig.phases.lines import FollowedLine
from rig.phases.settings import PhaseSettings

LARGEST_HYSTERESIS = 0.9  # of the rms value: 0.64 of the peak of a sine
NOISE_ZONE = 4.0  # dead zone at least this many deviations of the noise
LINEAR_FACTOR = math.sqrt(2.0 / 3.0)  # linear interpolation of two noisy samples
RISING_TURNS, FALLING_TURNS = -0.25, 0.25
OFFSET_SHARE = 0.1  # of the rms value: a larger offset is told


class MarkerFollower:
    """Samples of one channel in, its marker phase out."""

    def __init__(
        self,
        channel: Channel,
        line: FollowedLine,
        band: Band | None,
        *,
        grid: Grid,
        settings: PhaseSettings,
    ) -> None:
        self._channel, self._line, self._grid, self._settings = channel, line, grid, settings
        self._ground = running_ground(channel, line.frequency_hz)
        self._frame = grid.first_frame
        found = signal_level(channel, self._ground)
        self._rms = found.rms
        self._level = found.mean if settings.level is None else settings.level / channel.scale
        self._noise = math.sqrt(line.noise_density * grid.rate_hz / 2.0)
        stated = settings.hysteresis_rms
        share = max(stated, min(NOISE_ZONE * self._noise / found.rms, LARGEST_HYSTERESIS))
        self._finder = CrossingFinder(self._level, share * found.rms)

    def feed(self, samples: NDArray[Any]) -> None:
        """Take the next chunk of samples."""
        if self._ground is not None:
            frames = np.arange(self._frame, self._frame + samples.size)
            samples = samples - self._ground.at(frames)
            self._frame += samples.size
        self._finder.feed(samples)

    def finish(self) -> FoundPhase:
        """Return the phase on the grid with its mask, noise and notes."""
        events, rising, rejected = self._events()
        gaps_s = self._finder.gap_frames / self._grid.rate_hz
        bridged = bridged_intervals(events, self._settings.max_interval_cycles, gaps_s)
        share = 0.5 if self._settings.edge == "both" else 1.0
        turns = _turns_at(rising, steps_over(events, bridged), share)
        power = max(self._rms**2 - self._noise**2, 1e-300)
        instants = Instants(
            event_s=events,
            turns=turns,
            bridged=bridged & np.isclose(np.diff(turns), share),
            rejected=rejected,
            by_samples_rad=LINEAR_FACTOR * self._noise / math.sqrt(2.0 * power),
            amplitude=math.sqrt(2.0) * self._rms,
            snr_db=min(300.0, 10.0 * math.log10(power / max(self._noise**2, 1e-300))),
            notes=self._line.notes + self._notes(),
        )
        return phase_of_instants("marker", self._channel.name, instants, self._grid)

    def _events(self) -> tuple[FloatArray, BoolArray, int]:
        """Return marker times (s after the grid's start), which rise, and how many fell out."""
        frames, rising = self._finder.markers()
        rejected = self._finder.crossing_count - frames.size
        if self._settings.edge != "both":
            wanted = rising if self._settings.edge == "rising" else ~rising
            frames, rising = frames[wanted], rising[wanted]
        inside = frames < self._grid.frame_count - 1
        seconds, rising = frames[inside] / self._grid.rate_hz, rising[inside]
        kept = far_enough(seconds, self._settings.min_interval_cycles)
        return seconds[kept], rising[kept], rejected + int(np.sum(~kept))

    def _notes(self) -> tuple[str, ...]:
        if self._ground is not None:
            swing = float(np.ptp(self._ground.value)) / (math.sqrt(2.0) * self._rms)
            return (f"slow ground removed, moving by {swing:.3g} times the amplitude",)
        offset = abs(self._level) / self._rms
        if offset <= OFFSET_SHARE:
            return ()
        return (f"offset {offset / math.sqrt(2.0):.3g} times the amplitude removed",)


def _turns_at(rising: BoolArray, steps: IntArray, share: float) -> FloatArray:
    """Return turns at markers, ``share`` of one a step, on from the first one's own."""
    first = RISING_TURNS if rising.size == 0 or rising[0] else FALLING_TURNS
    if share == 0.5:
        # Like edges are an even number of half turns apart, unlike ones an odd number.
        odd = (rising[1:] != rising[:-1]).astype(np.int64)
        steps = np.maximum(2 - odd, 2 * np.rint((steps - odd) / 2.0).astype(np.int64) + odd)
    return np.asarray(first + share * np.concatenate([[0], np.cumsum(steps)])[: rising.size])
