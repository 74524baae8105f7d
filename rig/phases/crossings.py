"""Streaming level crossings with hysteresis and sub-sample time.

A marker is the last crossing of the level before the signal has gone from one side of the
dead zone to the other. Between the two samples that bracket it the signal is taken as a
straight line. The same markers come out bit for bit however the samples are cut up.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from rig.arrays import FloatArray, IntArray


class CrossingFinder:
    """Samples in, marker positions (frames) and directions out.

    ``level`` is crossed; the dead zone is level - half_zone ... level + half_zone.
    """

    def __init__(self, level: float, half_zone: float) -> None:
        self._level, self._half = level, half_zone
        self._last: float | None = None
        self._side = 0
        self._frame = 0
        # The newest crossing of each direction seen so far: [falling, rising].
        self._newest = [np.nan, np.nan]
        self._frames: list[FloatArray] = []
        self._rising: list[NDArray[np.bool_]] = []
        self._gaps: list[IntArray] = []
        self.crossing_count = 0

    def feed(self, samples: NDArray[Any]) -> None:
        """Take the next samples; where they are not finite the search starts anew."""
        finite = np.isfinite(samples)
        if finite.all():
            self._take(samples)
            return
        gap = np.flatnonzero(~finite)
        self._gaps.append(gap + self._frame)
        start = 0
        for stop in [*gap, samples.size]:
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
        values = samples.astype(np.float64) - self._level
        lead = 0 if self._last is None else 1
        if self._last is not None:
            values = np.concatenate([[self._last], values])
        at, rising = self._crossings(values, self._frame - lead)
        self._markers(values, at, rising, self._frame - lead)
        self._last = float(values[-1])
        self._frame += samples.size

    def _crossings(self, values: FloatArray, first: int) -> tuple[FloatArray, NDArray[np.bool_]]:
        above = values > 0.0
        index = np.flatnonzero(above[1:] != above[:-1])
        before, after = values[index], values[index + 1]
        self.crossing_count += index.size
        return (first + index) + before / (before - after), above[index + 1]

    def _markers(
        self, values: FloatArray, at: FloatArray, rising: NDArray[np.bool_], first: int
    ) -> None:
        strong = np.flatnonzero(np.abs(values) > self._half)
        side = np.where(values[strong] > 0.0, 1, -1)
        before = np.concatenate([[self._side], side[:-1]]) if side.size else side
        changed = (side != before) & (before != 0)
        if changed.any():
            up = side[changed] > 0
            self._frames.append(self._newest_before(strong[changed] + first, up, at, rising))
            self._rising.append(up)
        if side.size:
            self._side = int(side[-1])
        for direction in (0, 1):
            same = at[rising == bool(direction)]
            if same.size:
                self._newest[direction] = float(same[-1])

    def _newest_before(
        self, arrived: IntArray, up: NDArray[np.bool_], at: FloatArray, rising: NDArray[np.bool_]
    ) -> FloatArray:
        """Return for each arrival on a side the newest crossing towards that side."""
        found = np.empty(arrived.size)
        for direction in (False, True):
            known = np.concatenate([[self._newest[direction]], at[rising == direction]])
            place = np.searchsorted(known[1:], arrived[up == direction], side="right")
            found[up == direction] = known[place]
        return found

    def markers(self) -> tuple[FloatArray, NDArray[np.bool_]]:
        """Return marker positions in frames, in order, and which of them are rising."""
        if not self._frames:
            return np.empty(0), np.empty(0, dtype=bool)
        return np.concatenate(self._frames), np.concatenate(self._rising)

    @property
    def gap_frames(self) -> IntArray:
        """Frames without a sample."""
        return np.concatenate(self._gaps) if self._gaps else np.empty(0, dtype=np.int64)
