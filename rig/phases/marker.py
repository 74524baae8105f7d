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

from rig.angles import TURN_RAD
from rig.arrays import BoolArray, FloatArray
from rig.channels import Channel
from rig.errors import PhaseError
from rig.phases.bands import Band
from rig.phases.crossings import CrossingFinder
from rig.phases.events import FEWEST_EVENTS, phase_between, usual_intervals
from rig.phases.finishing import FoundPhase
from rig.phases.grid import Grid
from rig.phases.lines import FollowedLine
from rig.phases.settings import PhaseSettings
from rig.phases.stretches import without_short_runs
from rig.spectrum import read_span

LEVEL_FRAMES = 65536  # frames read at each of three places to find level and rms value
LARGEST_HYSTERESIS = 0.9  # of the rms value: 0.64 of the peak of a sine
NOISE_ZONE = 4.0  # dead zone at least this many deviations of the noise
LINEAR_FACTOR = math.sqrt(2.0 / 3.0)  # linear interpolation of two noisy samples
RISING_TURNS, FALLING_TURNS = -0.25, 0.25


class MarkerFollower:
    """Samples of one channel in, its marker phase out."""

    def __init__(
        self,
        channel: Channel,
        line: FollowedLine,
        band: Band,
        *,
        grid: Grid,
        settings: PhaseSettings,
    ) -> None:
        self._channel, self._line, self._grid, self._settings = channel, line, grid, settings
        level, self._rms = level_and_rms(channel)
        self._level = level if settings.level is None else settings.level / channel.scale
        self._noise = math.sqrt(line.noise_density * grid.rate_hz / 2.0)
        half_zone = min(
            max(settings.hysteresis_rms * self._rms, NOISE_ZONE * self._noise),
            max(settings.hysteresis_rms, LARGEST_HYSTERESIS) * self._rms,
        )
        self._finder = CrossingFinder(self._level, half_zone)

    def feed(self, samples: NDArray[Any]) -> None:
        """Take the next chunk of samples."""
        self._finder.feed(samples)

    def finish(self) -> FoundPhase:
        """Return the phase on the grid with its mask, noise and notes."""
        events, turns, rejected = self._events()
        if events.size < FEWEST_EVENTS:
            raise PhaseError(
                f"channel '{self._channel.name}': {events.size} markers found, at least "
                f"{FEWEST_EVENTS} needed; lower the hysteresis or check the level"
            )
        time_s = np.arange(self._grid.count) / self._grid.grid_rate_hz
        bridged = self._bridged(events, turns)
        found = phase_between(events, turns, time_s, bridged=bridged)
        noise_rad = self._noise_rad(events, turns)
        amplitude = math.sqrt(2.0) * self._rms
        power = max(self._rms**2 - self._noise**2, 1e-300)
        return FoundPhase(
            method="marker",
            turns=found.turns,
            amplitude=np.full(time_s.size, amplitude),
            valid=without_short_runs(found.valid, 2),
            u_rad=np.full(time_s.size, noise_rad),
            snr_db=min(300.0, 10.0 * math.log10(power / max(self._noise**2, 1e-300))),
            band_hz=None,
            smear_s=float(np.median(np.diff(events))),
            line_hz=self._line.frequency_hz,
            correlation_samples=max(
                1.0, float(np.median(np.diff(events))) * self._grid.grid_rate_hz
            ),
            event_s=events + self._grid.start_s,
            notes=self._line.notes + self._notes(rejected, found.missing),
        )

    def _events(self) -> tuple[FloatArray, FloatArray, int]:
        """Return marker times (s after the grid's start), turns there, and how many fell out."""
        frames, rising = self._finder.markers()
        if self._settings.edge != "both":
            wanted = rising if self._settings.edge == "rising" else ~rising
            frames, rising = frames[wanted], rising[wanted]
        share = 0.5 if self._settings.edge == "both" else 1.0
        shortest = self._settings.min_interval_cycles * share / self._line.frequency_hz
        inside = frames < self._grid.frame_count - 1
        seconds = frames[inside] / self._grid.rate_hz
        kept = far_enough(seconds, shortest)
        events, up = seconds[kept], rising[inside][kept]
        rejected = self._finder.crossing_count - self._finder.markers()[0].size
        return events, _turns_at(up, share), rejected + int(np.sum(~kept))

    def _bridged(self, events: FloatArray, turns: FloatArray) -> BoolArray:
        """Return which intervals hold no missing marker and no missing sample."""
        gaps = np.diff(events)
        steps = np.diff(turns)
        usual = usual_intervals(events)
        bridged = gaps <= self._settings.max_interval_cycles * usual
        bridged &= np.isclose(steps, np.median(steps))
        missing = self._finder.gap_frames / self._grid.rate_hz
        place = np.searchsorted(events, missing) - 1
        place = place[(place >= 0) & (place < bridged.size)]
        bridged[place] = False
        return np.asarray(bridged)

    def _noise_rad(self, events: FloatArray, turns: FloatArray) -> float:
        """Return the deviation of the phase by noise of the samples.

        sigma / (slope of a sine) at a crossing, by linear interpolation times sqrt(2/3); a
        scatter of the markers themselves that is smaller is believed instead.
        """
        by_floor = LINEAR_FACTOR * self._noise / (math.sqrt(2.0) * self._rms)
        bends = np.diff(turns, 2) - np.diff(events, 2) / np.median(np.diff(events))
        usual_step = float(np.median(np.diff(turns)))
        by_scatter = TURN_RAD * usual_step * float(np.median(np.abs(bends))) / 0.6745 / math.sqrt(6)
        between = LINEAR_FACTOR if usual_step > 0 else 1.0
        return min(by_floor, by_scatter) * between if by_scatter > 0 else by_floor * between

    def _notes(self, rejected: int, missing: int) -> tuple[str, ...]:
        notes = []
        if rejected:
            notes.append(f"{rejected} crossings rejected by hysteresis or minimum interval")
        if missing:
            notes.append(f"{missing} intervals not bridged (missing markers or samples)")
        offset = abs(self._level) / max(self._rms, 1e-300)
        if offset > 0.1:
            notes.append(f"offset {offset / math.sqrt(2.0):.3g} times the amplitude removed")
        return tuple(notes)


def _turns_at(rising: NDArray[np.bool_], share: float) -> FloatArray:
    """Return turns at markers: one (or half) a marker, on from the first one's own."""
    first = RISING_TURNS if rising.size == 0 or rising[0] else FALLING_TURNS
    steps = np.full(max(rising.size - 1, 0), share)
    # Two markers of the same direction running in "both" mode are a whole turn apart.
    if share == 0.5:
        steps[rising[1:] == rising[:-1]] = 1.0
    return np.asarray(first + np.concatenate([[0.0], np.cumsum(steps)])[: rising.size])


def far_enough(seconds: FloatArray, shortest_s: float) -> BoolArray:
    """Return which instants do not follow the last one kept too soon."""
    kept = np.ones(seconds.size, dtype=bool)
    if not (np.diff(seconds) < shortest_s).any():
        return kept
    last = -math.inf
    for index, time_s in enumerate(seconds.tolist()):
        kept[index] = time_s - last >= shortest_s
        if kept[index]:
            last = time_s
    return kept


def level_and_rms(channel: Channel) -> tuple[float, float]:
    """Return mean and rms value about it, in sample units, from three places of the record.

    A Hann weight makes the mean that of whole cycles.
    """
    count = channel.capture.frame_count
    length = min(count, LEVEL_FRAMES)
    means, powers = [], []
    for start in sorted({0, (count - length) // 2, count - length}):
        part = read_span(channel.capture, channel.column, start, start + length)
        weight = np.hanning(part.size + 2)[1:-1] * np.isfinite(part)
        if not weight.sum() > 0:
            continue
        part = np.where(np.isfinite(part), part, 0.0)
        mean = float(weight @ part / weight.sum())
        means.append(mean)
        powers.append(float(weight @ (part - mean) ** 2 / weight.sum()))
    if not means:
        raise PhaseError(f"channel '{channel.name}' holds no finite sample where it was looked at")
    return float(np.mean(means)), math.sqrt(float(np.mean(powers)))
