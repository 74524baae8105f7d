"""Streaming level crossings with hysteresis and sub-sample time.

A marker is the crossing of the level on the way from one side of the dead zone to the other;
where noise makes several of them, it is the middle between the first and the last in that
direction (the last alone would come late, the first early). Between the two samples that
bracket a crossing the signal is taken as a straight line. The same markers come out bit for
bit however the samples are cut up.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from rig.arrays import BoolArray, FloatArray, IntArray


class CrossingFinder:
    """Samples in, marker positions (frames) and directions out.

    ``level`` is crossed; the dead zone is level - half_zone ... level + half_zone, all
    rounded to the type of the samples.
    """

    def __init__(self, level: float, half_zone: float) -> None:
        self._level, self._half = level, half_zone
        self._last: NDArray[Any] | None = None
        self._side = 0
        self._frame = 0
        # First and newest crossing of each direction since the last sample outside the zone:
        # [falling, rising].
        self._oldest = [np.nan, np.nan]
        self._newest = [np.nan, np.nan]
        self._frames: list[FloatArray] = []
        self._rising: list[BoolArray] = []
        self._gaps: list[IntArray] = []
        self.crossing_count = 0

    def feed(self, samples: NDArray[Any]) -> None:
        """Take the next samples; where they are not finite the search starts anew."""
        # One sum tells whether anything is missing, at a tenth of the cost of a test of each.
        if samples.size == 0 or np.isfinite(np.add.reduce(samples)):
            self._take(samples)
            return
        finite = np.isfinite(samples)
        gap = np.flatnonzero(~finite)
        self._gaps.append(gap + self._frame)
        start = 0
        for stop in [*gap.tolist(), samples.size]:
            if stop > start:
                self._take(samples[start:stop])
            if stop < samples.size:
                self._restart()
            start = stop + 1

    def _restart(self) -> None:
        self._frame += 1
        self._last, self._side = None, 0
        self._oldest = [np.nan, np.nan]
        self._newest = [np.nan, np.nan]

    def _take(self, samples: NDArray[Any]) -> None:
        if samples.size == 0:
            return
        # The last sample seen is looked at again, so that a crossing after it is not lost.
        lead = 0 if self._last is None else 1
        values = samples if self._last is None else np.concatenate([self._last, samples])
        first = self._frame - lead
        at, rising = self._crossings(values, first)
        self._markers(values, at, rising, first)
        self._last = values[-1:].copy()
        self._frame += samples.size

    def _crossings(self, values: NDArray[Any], first: int) -> tuple[FloatArray, BoolArray]:
        level = values.dtype.type(self._level)
        above = values > level
        index = np.flatnonzero(above[1:] != above[:-1])
        before = values[index].astype(np.float64)
        after = values[index + 1].astype(np.float64)
        self.crossing_count += index.size
        return (first + index) + (before - float(level)) / (before - after), above[index + 1]

    def _markers(self, values: NDArray[Any], at: FloatArray, rising: BoolArray, first: int) -> None:
        high, low = _outside(values, self._level, self._half)
        arrived, up = _arrivals(high, low)
        before = np.concatenate([[self._side > 0], up[:-1]])
        changed = up != before
        if self._side == 0 and changed.size:
            changed[0] = False
        if changed.any():
            there, up_now = arrived[changed] + first, up[changed]
            fresh = bool(np.isnan(self._oldest[int(up_now[0])]))
            if fresh and _one_each(there, up_now, at, rising):
                found = at
            else:
                leaves = first + _leaves(high, low, there - first)
                found = self._between(there, leaves, up_now, (at, rising))
            self._frames.append(found)
            self._rising.append(up_now)
        if up.size:
            self._side = 1 if up[-1] else -1
        self._remember(first + _last_outside(high, low), at, rising)

    def _between(
        self,
        there: IntArray,
        leaves: FloatArray,
        up: BoolArray,
        crossings: tuple[FloatArray, BoolArray],
    ) -> FloatArray:
        """Return for each arrival the middle of the crossings that led to it.

        ``leaves`` is the last sample outside the zone before each arrival, -inf when that
        was in an earlier chunk.
        """
        at, rising = crossings
        found = np.empty(there.size)
        for direction in (False, True):
            known = at[rising == direction]
            mine = up == direction
            newest = np.concatenate([[self._newest[direction]], known])
            last = newest[np.searchsorted(known, there[mine], side="right")]
            after = np.searchsorted(known, leaves[mine], side="left")
            oldest = np.concatenate([known, [np.nan]])[after]
            carried = np.isneginf(leaves[mine]) & ~np.isnan(self._oldest[direction])
            found[mine] = (np.where(carried, self._oldest[direction], oldest) + last) / 2.0
        return found

    def _remember(self, outside: float, at: FloatArray, rising: BoolArray) -> None:
        """Keep the crossings after the last sample outside the zone for the next chunk."""
        for direction in (0, 1):
            same = at[rising == bool(direction)]
            if np.isfinite(outside):
                same = same[same >= outside]
                self._oldest[direction] = np.nan
            if same.size:
                self._newest[direction] = float(same[-1])
                if np.isnan(self._oldest[direction]):
                    self._oldest[direction] = float(same[0])

    def markers(self) -> tuple[FloatArray, BoolArray]:
        """Return marker positions in frames, in order, and which of them are rising."""
        if not self._frames:
            return np.empty(0), np.empty(0, dtype=bool)
        return np.concatenate(self._frames), np.concatenate(self._rising)

    @property
    def gap_frames(self) -> IntArray:
        """Frames without a sample."""
        return np.concatenate(self._gaps) if self._gaps else np.empty(0, dtype=np.int64)


def _outside(values: NDArray[Any], level: float, half_zone: float) -> tuple[BoolArray, BoolArray]:
    """Return which samples stand above and which below the dead zone."""
    kind = values.dtype.type
    return values > kind(level + half_zone), values < kind(level - half_zone)


def _arrivals(high: BoolArray, low: BoolArray) -> tuple[IntArray, BoolArray]:
    """Return where samples begin to stand outside the dead zone, and whether above it."""
    begins = (high[1:] > high[:-1]) | (low[1:] > low[:-1])
    index: IntArray = np.flatnonzero(begins) + 1
    if high[0] or low[0]:
        index = np.concatenate([[0], index])
    return index, high[index]


def _leaves(high: BoolArray, low: BoolArray, there: IntArray) -> FloatArray:
    """Return the last sample outside the zone before each arrival, -inf if there is none."""
    outside = np.flatnonzero(high | low)
    place = np.searchsorted(outside, there, side="left") - 1
    return np.where(place >= 0, outside[np.maximum(place, 0)].astype(float), -np.inf)


def _last_outside(high: BoolArray, low: BoolArray) -> float:
    """Return the last sample outside the zone, -inf if there is none."""
    outside = (high | low)[::-1]
    ago = int(np.argmax(outside))
    return float(high.size - 1 - ago) if outside[ago] else -np.inf


def _one_each(arrived: IntArray, up: BoolArray, at: FloatArray, rising: BoolArray) -> bool:
    """Return whether each arrival has just one crossing, its own, right before it."""
    return (
        at.size == arrived.size
        and bool(np.array_equal(up, rising))
        and bool(np.all(at <= arrived))
        and bool(np.all(at[1:] > arrived[:-1]))
    )
