"""Streaming level crossings with hysteresis and sub-sample time.

A marker is the last crossing of the level before the signal has gone from one side of the
dead zone to the other. Between the two samples that bracket it the signal is taken as a
straight line. The same markers come out bit for bit however the samples are cut up.
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
        # The newest crossing of each direction seen so far: [falling, rising].
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
        arrived, up = _arrivals(values, self._level, self._half)
        before = np.concatenate([[self._side > 0], up[:-1]])
        changed = up != before
        if self._side == 0 and changed.size:
            changed[0] = False
        if changed.any():
            up_now = up[changed]
            self._frames.append(self._newest_before(arrived[changed] + first, up_now, at, rising))
            self._rising.append(up_now)
        if up.size:
            self._side = 1 if up[-1] else -1
        for direction in (0, 1):
            same = at[rising == bool(direction)]
            if same.size:
                self._newest[direction] = float(same[-1])

    def _newest_before(
        self, arrived: IntArray, up: BoolArray, at: FloatArray, rising: BoolArray
    ) -> FloatArray:
        """Return for each arrival on a side the newest crossing towards that side."""
        if _one_each(arrived, up, at, rising):
            return at
        found = np.empty(arrived.size)
        for direction in (False, True):
            known = np.concatenate([[self._newest[direction]], at[rising == direction]])
            place = np.searchsorted(known[1:], arrived[up == direction], side="right")
            found[up == direction] = known[place]
        return found

    def markers(self) -> tuple[FloatArray, BoolArray]:
        """Return marker positions in frames, in order, and which of them are rising."""
        if not self._frames:
            return np.empty(0), np.empty(0, dtype=bool)
        return np.concatenate(self._frames), np.concatenate(self._rising)

    @property
    def gap_frames(self) -> IntArray:
        """Frames without a sample."""
        return np.concatenate(self._gaps) if self._gaps else np.empty(0, dtype=np.int64)


def _arrivals(values: NDArray[Any], level: float, half_zone: float) -> tuple[IntArray, BoolArray]:
    """Return where samples begin to stand outside the dead zone, and whether above it."""
    kind = values.dtype.type
    high, low = values > kind(level + half_zone), values < kind(level - half_zone)
    begins = (high[1:] > high[:-1]) | (low[1:] > low[:-1])
    index: IntArray = np.flatnonzero(begins) + 1
    if high[0] or low[0]:
        index = np.concatenate([[0], index])
    return index, high[index]


def _one_each(arrived: IntArray, up: BoolArray, at: FloatArray, rising: BoolArray) -> bool:
    """Return whether each arrival has just one crossing, its own, right before it."""
    return (
        at.size == arrived.size
        and bool(np.array_equal(up, rising))
        and bool(np.all(at <= arrived))
        and bool(np.all(at[1:] > arrived[:-1]))
    )
