"""Tables whose rows are changes of a two-level signal: a counter or a logic recorder.

Such a row says "from this time on, the level is 0 (or 1)". With a rate stated by the person,
the level is held from row to row and sampled at that rate; an edge then stands in its frame,
that is to within one sample interval. The times of the rows themselves are kept beside it, for
whoever works on edges (``edges_s``).
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field

import numpy as np

from rig.arrays import FloatArray, SampleBlock
from rig.readers.refusals import refusal

FRAMES_MAX = 2**40
RATE_PER_CHANGE_MAX = 1e6  # frames a row: more is a rate typed wrongly


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class HeldLevels:
    """Block source that holds the level of the last row; times in seconds, levels (rows, n)."""

    rate_hz: float
    times_s: FloatArray = field(repr=False)
    levels: FloatArray = field(repr=False)

    @property
    def frame_count(self) -> int:
        """Frames from the first row to the last, both included."""
        span_s = float(self.times_s[-1] - self.times_s[0])
        return int(np.floor(span_s * self.rate_hz * (1 + 1e-12))) + 1

    def __call__(
        self, columns: Sequence[int], block_frames: int, start_frame: int, stop_frame: int
    ) -> Iterator[SampleBlock]:
        """Yield float32 blocks of the chosen columns."""
        chosen = np.ascontiguousarray(self.levels[:, list(columns)].T, dtype=np.float32)
        # A row belongs to the first frame that is not before it; rounding must not delay it.
        first_frames = np.ceil((self.times_s - self.times_s[0]) * self.rate_hz - 1e-6)
        for first in range(start_frame, stop_frame, block_frames):
            frames = np.arange(first, min(first + block_frames, stop_frame))
            row = np.searchsorted(first_frames, frames, side="right") - 1
            yield chosen[:, row]

    def edges_s(self, column: int, *, rising: bool) -> FloatArray:
        """Return when a column changes to 1 (or to 0), as the rows state it, s after the first.

        Rows that stand at one time are one change: the last of them holds.
        """
        times_s = self.times_s - self.times_s[0]
        last = np.append(np.diff(times_s) > 0, True)
        steps = np.diff(self.levels[last, column])
        return np.asarray(times_s[last][1:][steps > 0 if rising else steps < 0], dtype=float)

    @property
    def note(self) -> str:
        """What was done, and how well an edge is placed."""
        return (
            f"rows are changes of level, not samples: {len(self.times_s)} changes held at "
            f"{self.rate_hz:.10g} Hz, edges placed to {1 / self.rate_hz:.3g} s"
        )


def hold_levels(
    path: str, rows: FloatArray, time_column: int, scale: float, rate_hz: float
) -> HeldLevels | None:
    """Return the held levels of a table, None when its rows are no changes of level.

    Parameters
    ----------
    rows : array, shape (rows, columns), one column of times and else zeros and ones
    scale : float, what turns the times into seconds
    rate_hz : float, the rate at which levels are held

    Raises
    ------
    CaptureError
        If the stated rate makes a million frames and more of each row.
    """
    times_s = rows[:, time_column] * scale
    levels = np.delete(rows, time_column, axis=1)
    two_levels = bool(np.isin(levels, (0.0, 1.0)).all()) and levels.shape[1] > 0
    in_order = len(times_s) > 1 and bool((np.diff(times_s) >= 0).all())
    if not (two_levels and in_order):
        return None
    held = HeldLevels(rate_hz=rate_hz, times_s=times_s, levels=levels)
    if held.frame_count > min(RATE_PER_CHANGE_MAX * len(rows), FRAMES_MAX):
        what = f"rate {rate_hz:.10g} Hz makes {held.frame_count} frames of {len(rows)} rows"
        raise refusal(path, what, "Pass a lower --rate")
    return held
