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
from rig.arrays import FloatArray, median
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
    batch = _batch_size(runs)
    increments = np.concatenate([np.zeros(0), *(_batch_increments(run, batch) for run in runs)])
    if increments.size < 3:
        return None
    moved, time_s = _end_to_end(runs, rate_hz)
    ends = sum(batch / _edge(run) for run in runs)
    u_rad = math.hypot(math.sqrt(_moved_variance(increments, ends)), PHASE_FLOOR_RAD)
    return Slope(rate_rad_s=moved / time_s, u_rad_s=u_rad / time_s, duration_s=time_s)


def fit_slope(runs: list[FloatArray], rate_hz: float) -> Slope | None:
    """Return the slope of psi by least squares, one constant for each stretch.

    Far sharper than ``measure_slope`` for a psi that stays; its uncertainty is that of a
    stationary psi with memory and too small for a free pair, so it serves to ask how small a
    slope is, never to report a rate.

    Parameters
    ----------
    runs : list of arrays, rad
        Unwrapped psi of each stretch.
    rate_hz : float, Hz
        Samples per second.

    Returns
    -------
    Slope or None
        None when fewer than six batches exist.
    """
    batch = _batch_size(runs)
    parts = [_batch_means(run, batch) for run in runs if run.size >= 2 * batch]
    levels = [part - part.mean() for part in parts]
    places = [(np.arange(part.size) - (part.size - 1) / 2) * batch / rate_hz for part in parts]
    if sum(part.size for part in parts) < 6:
        return None
    power = sum(float(place @ place) for place in places)
    cross = sum(float(place @ level) for place, level in zip(places, levels, strict=True))
    rest = [level - cross / power * place for place, level in zip(places, levels, strict=True)]
    duration_s = sum(run.size for run in runs) / rate_hz
    u_rad_s = math.hypot(math.sqrt(_memory_variance(rest) / power), PHASE_FLOOR_RAD / duration_s)
    return Slope(rate_rad_s=cross / power, u_rad_s=u_rad_s, duration_s=duration_s)


def _memory_variance(rest: list[FloatArray]) -> float:
    """Return the variance of batch residuals, widened for what neighbours share."""
    freedom = sum(part.size for part in rest) - len(rest) - 1
    square = sum(float(part @ part) for part in rest)
    shared = sum(float(part[1:] @ part[:-1]) for part in rest)
    memory = min(max(shared / square, 0.0), 0.9) if square > 0 else 0.0
    return square / max(freedom, 1) * (1 + memory) / (1 - memory)


def _batch_size(runs: list[FloatArray]) -> int:
    """Return the samples of a batch; gaps may leave stretches too short for the whole's."""
    total = sum(run.size for run in runs)
    typical = int(median([run.size for run in runs])) if runs else 0
    return max(1, min(total // BATCHES, typical // 3))


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


def _batch_means(run: FloatArray, batch: int) -> FloatArray:
    """Return the means of successive whole batches of one stretch."""
    count = run.size // batch
    return np.asarray(run[: count * batch].reshape(count, batch).mean(axis=1))


def _batch_increments(run: FloatArray, batch: int) -> FloatArray:
    """Return the steps between successive batch means of one stretch."""
    return np.asarray(np.diff(_batch_means(run, batch)))


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
