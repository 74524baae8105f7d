"""Slips counted across overlapping windows: none twice, none lost between two.

The middle of a cell is where psi was last locked (before the first lock, its mean), but never
further than a quarter turn from the first: a middle that followed psi would count no slips of
a drift slower than the window. Each window goes on where the last one surely stood in a cell,
with psi continued by whole turns.
"""

from __future__ import annotations

import cmath
import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from fit.difference import PhaseDifference
from fit.records import Episode, Slip
from fit.slips import CELL_CORE_RAD, find_slips
from rig.angles import TURN_RAD, wrap_angle_rad
from rig.arrays import FloatArray


@dataclass(slots=True)
class SlipCounter:
    """Where psi last surely stood: time, psi continued over all windows, and its cell."""

    sure_s: float = -math.inf
    sure_rad: float = 0.0
    cell: int | None = None
    centre_rad: float | None = None
    first_rad: float | None = None

    def count(
        self, psi: PhaseDifference, episodes: Sequence[Episode], end_s: float
    ) -> tuple[Slip, ...]:
        """Return the slips of a window up to a time that were not counted before.

        Parameters
        ----------
        psi : PhaseDifference of the window, on the time of the record
        episodes : sequence of Episode of the window
        end_s : float, s
        """
        time_s = psi.start_s + np.arange(psi.psi_rad.size) / psi.rate_hz
        held = psi.valid & (time_s >= self.sure_s) & (time_s <= end_s)
        if not held.any():
            return ()
        old_rad = self.centre_rad
        centre_rad = self._settle_centre(psi, episodes, end_s)
        slips = find_slips(replace(psi, valid=held), centre_rad)
        at = np.flatnonzero(held)
        sure = at[np.cos(psi.psi_rad[at] - centre_rad) > math.cos(CELL_CORE_RAD)]
        if not sure.size:
            return slips
        going_rad = psi.psi_rad + TURN_RAD * self._turns_to_add(psi)
        turns = (going_rad - centre_rad) / TURN_RAD
        first, last = int(sure[0]), int(sure[-1])
        unbroken = bool(psi.valid[at[0] : first + 1].all())
        if self.cell is not None and unbroken and round(turns[first]) != self.cell:
            # The middle moved to where the flight landed: its start is no longer in the cell.
            moved = round(turns[first]) - self.cell
            level = self.cell + moved / 2 + ((old_rad or 0.0) - centre_rad) / TURN_RAD
            crossed = _crossing(turns[at[0] : last + 1] - level) / psi.rate_hz
            slips = (Slip(time_s=float(time_s[at[0]]) + crossed, turns=moved), *slips)
        self.sure_s, self.cell = float(time_s[last]), round(turns[last])
        self.sure_rad = float(turns[last] * TURN_RAD + centre_rad)
        return slips

    def _settle_centre(
        self, psi: PhaseDifference, episodes: Sequence[Episode], end_s: float
    ) -> float:
        """Return the middle of the cell: that of the last lock in reach, as near as the old."""
        near = [part for part in episodes if part.stop_s >= self.sure_s and part.start_s <= end_s]
        if self.centre_rad is None:
            self.centre_rad = cmath.phase(complex(np.mean(np.exp(1j * psi.psi_rad[psi.valid]))))
        if near:
            if self.first_rad is None:
                away_rad = float(wrap_angle_rad(near[-1].offset_rad - self.centre_rad))
                self.first_rad = self.centre_rad + away_rad
            away_rad = float(wrap_angle_rad(near[-1].offset_rad - self.first_rad))
            self.centre_rad = self.first_rad + min(max(away_rad, -CELL_CORE_RAD), CELL_CORE_RAD)
        return self.centre_rad

    def _turns_to_add(self, psi: PhaseDifference) -> int:
        """Return the whole turns by which this window's psi lies below the continued one."""
        if self.cell is None:
            return 0
        at = round((self.sure_s - psi.start_s) * psi.rate_hz)
        if not (0 <= at < psi.psi_rad.size and psi.valid[at]):
            self.cell = None  # a gap, in which turns cannot be counted
            return 0
        return round(float(self.sure_rad - psi.psi_rad[at]) / TURN_RAD)


def _crossing(above: FloatArray) -> float:
    """Return the (fractional) sample of the first crossing of zero, 0 where there is none."""
    found = np.flatnonzero(np.diff(np.signbit(above)))
    if not found.size:
        return 0.0
    at = int(found[0])
    return at + float(above[at] / (above[at] - above[at + 1]))
