"""Streaming peaks above a threshold, with hysteresis and sub-sample time.

A peak is the highest sample between going above the threshold and falling below the release
level, refined by the parabola through it and its neighbours. The same peaks come out
however the samples are cut up.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from rig.arrays import FloatArray, IntArray


class PeakFinder:
    """Samples in, peak positions (frames) and heights out; ``sign`` -1 finds troughs."""

    def __init__(self, threshold: float, release: float, sign: int = 1) -> None:
        self._threshold, self._release, self._sign = sign * threshold, sign * release, sign
        self._held = np.empty(0)
        self._first = 0
        self._frames: list[FloatArray] = []
        self._heights: list[FloatArray] = []
        self._gaps: list[IntArray] = []

    def feed(self, samples: NDArray[Any]) -> None:
        """Take the next samples; a peak that touches a missing sample is left out."""
        values = self._sign * samples.astype(np.float64)
        start = self._first + self._held.size
        missing = np.flatnonzero(~np.isfinite(values))
        if missing.size:
            self._gaps.append(missing + start)
            values[missing] = -np.inf
        held = np.concatenate([self._held, values])
        keep = self._search(held)
        self._held, self._first = held[keep:], self._first + keep

    def _search(self, held: FloatArray) -> int:
        """Find the finished peaks in held samples; return how many samples are done with."""
        side = np.where(held > self._threshold, 1, np.where(held < self._release, -1, 0))
        strong = np.flatnonzero(side)
        if strong.size == 0:
            return max(0, held.size - 1)
        turned = np.flatnonzero(np.diff(side[strong])) + 1
        begins = strong[np.concatenate([[0], turned])]
        high = side[begins] > 0
        ends = np.concatenate([begins[1:], [held.size]])
        complete = high & (ends < held.size)
        for begin, end in zip(begins[complete].tolist(), ends[complete].tolist(), strict=True):
            self._note_peak(held, begin, end)
        # An unfinished peak, or the one sample before a next one, is kept.
        return max(0, int(begins[-1]) - 1) if high[-1] else held.size - 1

    def _note_peak(self, held: FloatArray, begin: int, end: int) -> None:
        top = begin + int(np.argmax(held[begin:end]))
        if top == 0 or not np.isfinite(held[max(0, begin - 1) : end + 1]).all():
            return
        before, height, after = held[top - 1], held[top], held[top + 1]
        bend = before - 2.0 * height + after
        shift = 0.5 * (before - after) / bend if bend < 0 else 0.0
        self._frames.append(np.array([self._first + top + shift]))
        self._heights.append(np.array([height]))

    def peaks(self) -> tuple[FloatArray, FloatArray]:
        """Return peak positions in frames and their heights (of the signed samples)."""
        if not self._frames:
            return np.empty(0), np.empty(0)
        return np.concatenate(self._frames), self._sign * np.concatenate(self._heights)

    @property
    def gap_frames(self) -> IntArray:
        """Frames without a sample."""
        return np.concatenate(self._gaps) if self._gaps else np.empty(0, dtype=np.int64)
