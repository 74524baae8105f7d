"""Mean rate of psi and its uncertainty, with no model of the motion.

The rate is end to end inside each valid stretch; the uncertainty comes from the scatter of
batches, so that it holds for a random walk (free pair) as for a stationary psi (locked pair).
Model-based rates are in the Adler estimate, not here.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from fit.difference import PhaseDifference, valid_runs
from rig.angles import hz_from_rad_s
from rig.arrays import FloatArray
from rig.quantities import Quantity, undetermined

#: Batches over the valid time: enough for a scatter known to a third, long enough to
#: outlast the memory of the noise.
BATCHES = 20

#: Each end of a stretch is averaged over this fraction of it, against measurement noise.
END_PARTS = 50

#: The drift of phase that a quiet measuring chain may make by itself over a record, rad.
PHASE_FLOOR_RAD = 1e-3


@dataclass(frozen=True, slots=True, kw_only=True)
class Slope:
    """Mean rate of psi with its standard uncertainty, rad/s, over ``duration_s``."""

    rate_rad_s: float
    u_rad_s: float
    duration_s: float

    @property
    def moved_rad(self) -> float:
        """How far psi moved on at that rate, rad."""
        return abs(self.rate_rad_s) * self.duration_s

    def differs_from_zero(self, factor: float = 2.0) -> bool:
        """Say whether zero lies outside rate +- factor u."""
        return abs(self.rate_rad_s) > factor * self.u_rad_s


def measure_slope(runs: list[FloatArray], rate_hz: float) -> Slope | None:
    """Return the mean rate of psi over stretches that are never joined.

    Parameters
    ----------
    runs : list of arrays, rad
        Unwrapped psi of each stretch.
    rate_hz : float, Hz
        Samples per second.

    Returns
    -------
    Slope or None
        None when fewer than three batch increments exist to tell the uncertainty.

    Notes
    -----
    Each end is averaged over a fiftieth of its stretch against measurement noise. The floor
    PHASE_FLOOR_RAD / duration keeps a slope from being called real that a warming sensor
    could make.
    """
    total = sum(run.size for run in runs)
    # Gaps may leave stretches shorter than a batch of the whole; three must fit into most.
    typical = int(np.median([run.size for run in runs])) if runs else 0
    batch = max(1, min(total // BATCHES, typical // 3))
    increments = np.concatenate([np.zeros(0), *(_batch_increments(run, batch) for run in runs)])
    if increments.size < 3:
        return None
    moved, time_s = _end_to_end(runs, rate_hz)
    ends = sum(batch / _edge(run) for run in runs)
    u_rad = math.hypot(math.sqrt(_moved_variance(increments, ends)), PHASE_FLOOR_RAD)
    return Slope(rate_rad_s=moved / time_s, u_rad_s=u_rad / time_s, duration_s=time_s)


def mean_rate(difference: PhaseDifference) -> Quantity:
    """Return the mean of dpsi/dt / 2 pi over the valid time, Hz.

    Parameters
    ----------
    difference : PhaseDifference

    Returns
    -------
    Quantity, Hz
    """
    slope = measure_slope(run_values(difference), difference.rate_hz)
    if slope is None:
        return undetermined("Hz", "too few valid samples of psi for a mean rate")
    return Quantity(
        value=hz_from_rad_s(slope.rate_rad_s), u=hz_from_rad_s(slope.u_rad_s), unit="Hz"
    )


def run_values(difference: PhaseDifference) -> list[FloatArray]:
    """Return psi of each valid stretch, rad."""
    return [difference.psi_rad[a:b] for a, b in valid_runs(difference.valid)]


def _batch_increments(run: FloatArray, batch: int) -> FloatArray:
    """Return the steps between successive batch means of one stretch."""
    count = run.size // batch
    return np.asarray(np.diff(run[: count * batch].reshape(count, batch).mean(axis=1)))


def _edge(run: FloatArray) -> int:
    """Return how many samples at each end of a stretch are averaged."""
    return max(1, run.size // END_PARTS)


def _moved_variance(increments: FloatArray, ends: float) -> float:
    """Return the variance of the motion from end to end, rad2.

    Random walk: the steps of batch means have variance 2/3 and neighbour covariance 1/6 of
    that of one step, which add up to it. Stationary psi: the steps undo each other and the
    averaged ends are left; ``ends`` is how many times shorter they are than a batch, summed
    over the stretches.
    """
    away = increments - increments.mean()
    count = increments.size
    power = float(away @ away) / (count - 1)
    neighbour = float(away[1:] @ away[:-1]) / (count - 1)
    walk = max(power + 2.0 * neighbour, 0.0)
    return count * walk + power * ends


def _end_to_end(runs: list[FloatArray], rate_hz: float) -> tuple[float, float]:
    """Return the summed motion (rad) and time (s) between the averaged ends of each stretch."""
    moved, samples = 0.0, 0
    for run in runs:
        edge = _edge(run)
        moved += float(run[-edge:].mean() - run[:edge].mean())
        samples += run.size - edge
    return moved, samples / rate_hz
