"""Fixed-step integration of many captures at once: each lane is one capture.

Fourth-order Runge-Kutta for the smooth part; white noise enters as one Gaussian kick after
each step, which is exact to the order of the step for noise that does not depend on the
state. State arrays have shape (dimensions, lanes) and are changed in place: the loop runs
some hundred thousand times, and a fresh array each time would double its cost.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from rig.arrays import FloatArray, IntArray

RateFunction = Callable[[FloatArray, FloatArray, FloatArray], None]
"""rates(state, drive, out): write d state / dt into ``out``; ``drive`` is one drive row."""

DriveFunction = Callable[[IntArray], FloatArray]
"""drive(half_steps): rows of the drive, shape (len(half_steps), ...), at half-step numbers."""

ALL_ROWS = slice(None)

CHUNK_FRAMES = 256  # frames whose drive and noise are made at once: small enough for the cache


@dataclass(frozen=True, slots=True, kw_only=True)
class LaneGrid:
    """Time grid of an integration: frames that are kept and the steps between them.

    ``settle_frames`` frames are integrated first and not kept; half-step number 0 is the
    first instant of settling.

    Raises
    ------
    ValueError
        If rate, frames or substeps are not above 0.
    """

    rate_hz: float
    frames: int
    substeps: int = 2
    settle_frames: int = 0

    def __post_init__(self) -> None:
        if not self.rate_hz > 0:
            raise ValueError(f"lane grid: rate must be above 0 Hz, got {self.rate_hz}")
        if self.frames < 1 or self.substeps < 1 or self.settle_frames < 0:
            raise ValueError(
                f"lane grid: needs frames and substeps >= 1 and settling >= 0, got "
                f"{self.frames}, {self.substeps}, {self.settle_frames}"
            )

    @property
    def step_s(self) -> float:
        """Integration step in seconds."""
        return 1.0 / (self.rate_hz * self.substeps)

    def half_step_time_s(self, half_steps: IntArray) -> FloatArray:
        """Return the time after the first kept frame of half-step numbers, s."""
        first = 2 * self.substeps * self.settle_frames
        return np.asarray((half_steps - first) * (0.5 * self.step_s), dtype=float)


def substeps_for(rate_hz: float, fastest_hz: float, *, steps_a_cycle: float = 30.0) -> int:
    """Return how many steps a frame needs so that the fastest cycle is well resolved.

    30 steps a cycle leave a relative frequency error of 2e-5, the same in every capture.
    """
    return max(1, math.ceil(steps_a_cycle * fastest_hz / rate_hz))


def no_drive(half_steps: IntArray) -> FloatArray:
    """Return a drive of nothing, for a rig that nobody drives."""
    return np.zeros((half_steps.size, 1))


def integrate_lanes(
    rates: RateFunction,
    start: FloatArray,
    *,
    grid: LaneGrid,
    drive: DriveFunction = no_drive,
    noise: tuple[FloatArray, np.random.Generator] | None = None,
    keep: slice = ALL_ROWS,
) -> FloatArray:
    """Return the states of all lanes at the kept frames.

    Parameters
    ----------
    rates : function of (state, drive row, out)
    start : array, shape (dimensions, lanes), state at the first instant of settling
    grid : LaneGrid
    drive : function of half-step numbers, rows of the drive
    noise : (strength, source of chance), optional
        strength (dimensions,) is the standard deviation that each state gathers in one
        second, in state unit / sqrt(s); rows of zero get none.
    keep : slice, rows of the state that are kept; all by default

    Returns
    -------
    array, shape (frames, rows, lanes)
    """
    stepper = _Stepper(rates, np.array(start, dtype=float), grid.step_s)
    kept = np.empty((grid.frames, *stepper.state[keep].shape))
    total = grid.settle_frames + grid.frames
    for first in range(0, total, CHUNK_FRAMES):
        frames = range(first, min(first + CHUNK_FRAMES, total))
        rows = drive(
            np.arange(2 * grid.substeps * frames.start, 2 * grid.substeps * frames.stop + 1)
        )
        kicks = _make_kicks(noise, stepper, len(frames) * grid.substeps)
        for frame in frames:
            if frame >= grid.settle_frames:
                kept[frame - grid.settle_frames] = stepper.state[keep]
            for sub in range(grid.substeps):
                step = (frame - frames.start) * grid.substeps + sub
                stepper.advance(rows[2 * step : 2 * step + 3])
                if kicks is not None:
                    stepper.kick(kicks[0], kicks[1][step])
    return kept


def _make_kicks(
    noise: tuple[FloatArray, np.random.Generator] | None, stepper: _Stepper, steps: int
) -> tuple[IntArray, FloatArray] | None:
    """Return the noisy rows and their kicks for some steps, shape (steps, rows, lanes)."""
    if noise is None:
        return None
    strength, rng = noise
    noisy = np.flatnonzero(strength)
    scale = strength[noisy] * math.sqrt(stepper.step_s)
    values = rng.standard_normal((steps, noisy.size, stepper.state.shape[1]))
    return noisy, values * scale[:, np.newaxis]


class _Stepper:
    """One state and the working arrays of its Runge-Kutta step."""

    def __init__(self, rates: RateFunction, state: FloatArray, step_s: float) -> None:
        self.rates = rates
        self.state = state
        self.step_s = step_s
        self.slopes = [np.empty_like(state) for _ in range(4)]
        self.trial = np.empty_like(state)

    def advance(self, drive: FloatArray) -> None:
        """Move the state on by one step; ``drive`` holds its start, middle and end rows."""
        one, two, three, four = self.slopes
        self.rates(self.state, drive[0], one)
        self.rates(self._ahead(one, 0.5), drive[1], two)
        self.rates(self._ahead(two, 0.5), drive[1], three)
        self.rates(self._ahead(three, 1.0), drive[2], four)
        two += three
        two *= 2.0
        one += four
        one += two
        one *= self.step_s / 6.0
        self.state += one

    def _ahead(self, slope: FloatArray, part: float) -> FloatArray:
        np.multiply(slope, part * self.step_s, out=self.trial)
        self.trial += self.state
        return self.trial

    def kick(self, rows: IntArray, values: FloatArray) -> None:
        """Add one step's noise to the noisy rows."""
        for row, value in zip(rows, values, strict=True):
            self.state[row] += value
