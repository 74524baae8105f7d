"""Slips: when and by how many turns psi moved on, and how often.

A state machine with hysteresis: the cell changes only when psi comes within a quarter turn of
the middle of another cell, so that noise at the boundary between two cells is not counted.
Nothing is counted across a gap.
"""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np

from fit.difference import PhaseDifference, valid_runs
from fit.quantiles import gamma_above
from fit.records import Slip
from rig.angles import TURN_RAD
from rig.arrays import FloatArray
from rig.longarrays import blocks_of
from rig.quantities import Quantity, undetermined

#: Half-width of the middle of a cell, rad: a quarter turn either side.
CELL_CORE_RAD = math.pi / 2

#: Samples worked through at a time.
BLOCK_SAMPLES = 32_768


def find_slips(difference: PhaseDifference, centre_rad: float | None = None) -> tuple[Slip, ...]:
    """Return every slip with its time and signed number of turns.

    Parameters
    ----------
    difference : PhaseDifference
    centre_rad : float, rad, optional
        Middle of a cell; the circular mean of psi when not given.

    Returns
    -------
    tuple of Slip
        In the order of time. A slip is dated where psi last crosses half way between the
        two cells.

    Notes
    -----
    Counting crossings of a cell boundary instead over-counts 1.2 to 5 times with noise. Net
    turns divided by the time equal the mean rate to one turn a stretch.
    """
    if not difference.valid.any():
        return ()
    runs = valid_runs(difference.valid)
    if centre_rad is None:
        centre_rad = _mean_angle_rad(difference.psi_rad, runs)
    return tuple(
        Slip(time_s=difference.start_s + (start + at) / difference.rate_hz, turns=by)
        for start, stop in runs
        for at, by in _run_slips(difference.psi_rad, (start, stop), centre_rad)
    )


def _mean_angle_rad(psi_rad: FloatArray, runs: tuple[tuple[int, int], ...]) -> float:
    """Return the circular mean of psi over some stretches."""
    total = 0.0 + 0.0j
    for start, stop in runs:
        for a, b in blocks_of(start, stop, BLOCK_SAMPLES):
            part = psi_rad[a:b]
            total += complex(float(np.cos(part).sum()), float(np.sin(part).sum()))
    return math.atan2(total.imag, total.real)


def slip_rate(difference: PhaseDifference, slips: tuple[Slip, ...]) -> Quantity:
    """Return how often the pair slips (turns of either sign a second) with its interval.

    Parameters
    ----------
    difference : PhaseDifference
        Its valid time is the exposure.
    slips : tuple of Slip

    Returns
    -------
    Quantity, Hz
        The interval is Garwood's for a Poisson count, 0.95. With no slip the value is 0 and
        the upper end 3.69 / T.

    References
    ----------
    Garwood 1936, Biometrika 28, 437-442 (recalled).
    """
    duration_s = np.count_nonzero(difference.valid) / difference.rate_hz
    if duration_s == 0:
        return undetermined("Hz", "no valid time")
    count = sum(abs(slip.turns) for slip in slips)
    low, high = garwood_interval(count, 0.95)
    # Without events the count itself has no spread; a third of the interval stands in.
    u_count = math.sqrt(count) if count else high / 3.92
    return Quantity(
        value=count / duration_s,
        u=u_count / duration_s,
        unit="Hz",
        low=low / duration_s,
        high=high / duration_s,
        level=0.95,
    )


def garwood_interval(count: int, level: float) -> tuple[float, float]:
    """Return the exact two-sided interval of a Poisson mean from one count.

    Parameters
    ----------
    count : int, >= 0
    level : float
        Coverage, between 0 and 1.

    Returns
    -------
    (float, float)
    """
    tail = (1.0 - level) / 2.0
    low = gamma_above(count, 1.0 - tail) if count else 0.0
    return low, gamma_above(count + 1, tail)


def _run_slips(
    psi_rad: FloatArray, run: tuple[int, int], centre_rad: float
) -> Iterator[tuple[float, int]]:
    """Yield (sample from the start, turns) of each change of cell in one stretch."""

    def turns_of(a: int, b: int) -> FloatArray:
        return np.asarray((psi_rad[a:b] - centre_rad) / TURN_RAD)

    last, cell = np.zeros(0, dtype=np.int64), np.zeros(0)
    for a, b in blocks_of(*run, BLOCK_SAMPLES):
        turns = turns_of(a, b)
        nearest = np.rint(turns)
        inside = np.flatnonzero(np.abs(turns - nearest) * TURN_RAD < CELL_CORE_RAD)
        sure, cells = np.append(last, inside + a), np.append(cell, nearest[inside])
        for k in np.flatnonzero(np.diff(cells)).tolist():
            first, stop = int(sure[k]), int(sure[k + 1]) + 1
            at = _crossing(turns_of(first, stop), (cells[k] + cells[k + 1]) / 2)
            yield first - run[0] + at, int(cells[k + 1] - cells[k])
        last, cell = sure[-1:], cells[-1:]


def _crossing(turns: FloatArray, level: float) -> float:
    """Return the (fractional) sample of the last crossing of a level."""
    part = turns - level
    at = int(np.flatnonzero(np.diff(np.signbit(part)))[-1])
    return at + float(part[at] / (part[at] - part[at + 1]))
