"""How fast a pair pulls in, and how much psi jitters once it is locked."""

from __future__ import annotations

import math

import numpy as np

from fit.difference import PhaseDifference, valid_runs
from fit.records import Episode
from rig.angles import TURN_RAD
from rig.arrays import FloatArray
from rig.quantities import Quantity, undetermined

TOLERANCE_RAD = 0.1  # psi counts as settled within this of its final mean (about 6 degrees)
TOLERANCE_SPREADS = 3.0  # or within this many spreads where the jitter is larger
EDGE_SAMPLES = 4  # slope at the entry is taken over this many samples either side


def pull_in_time(difference: PhaseDifference, episodes: tuple[Episode, ...]) -> Quantity:
    """Return the time from the first valid sample until psi settles for good, s.

    Settled means within 0.1 rad (or three spreads) of the mean of the last episode, and
    staying there to the end of that valid stretch.

    Parameters
    ----------
    difference : PhaseDifference of the whole record, its start included
    episodes : tuple of Episode

    Returns
    -------
    Quantity, s; undetermined where the record is not locked at its end or starts settled.
        Its uncertainty is the spread of psi over its slope at the entry, and the grid step.

    Notes
    -----
    An episode that was cut off by a gap says nothing of what happened before the gap.
    """
    runs = valid_runs(difference.valid)
    if not runs or not episodes:
        return undetermined("s", "the record has no locked episode")
    start, stop = runs[0]
    last = [e for e in episodes if e.stop_s <= _time(difference, stop)]
    if not last or last[-1].stop_s < _time(difference, stop) - 0.1 * (stop - start) / (
        difference.rate_hz
    ):
        return undetermined("s", "the record is not locked at the end of its first stretch")
    away = _away(difference.psi_rad[start:stop], last[-1])
    tolerance = max(TOLERANCE_RAD, TOLERANCE_SPREADS * last[-1].spread_rad)
    outside = np.flatnonzero(np.abs(away) > tolerance)
    if outside.size == 0:
        return undetermined("s", "the record starts locked: no pull-in to be seen")
    entry = _settling_entry(away, tolerance, last[-1], difference, start)
    if entry is None:
        return undetermined("s", "the record starts locked: no pull-in to be seen")
    u_s = _entry_u_s(away, entry, last[-1].spread_rad, difference.rate_hz)
    return Quantity(value=(entry + 1) / difference.rate_hz, u=u_s, unit="s")


def _away(psi_rad: FloatArray, episode: Episode) -> FloatArray:
    """Return psi minus the offset, whole turns taken off so that the end lies near zero."""
    away = psi_rad - episode.offset_rad
    tail = float(np.median(away[-max(away.size // 10, 1) :]))
    return np.asarray(away - TURN_RAD * round(tail / TURN_RAD))


def _settling_entry(
    away: FloatArray, tolerance: float, episode: Episode, difference: PhaseDifference, start: int
) -> int | None:
    """Return the last sample outside the tolerance in the approach to the episode.

    Single excursions of noise later in the episode are no pull-in: only samples up to a
    tenth into the episode count.
    """
    begin = round((episode.start_s - difference.start_s) * difference.rate_hz) - start
    length = round((episode.stop_s - episode.start_s) * difference.rate_hz)
    limit = min(away.size, max(begin + length // 10, 1))
    outside = np.flatnonzero(np.abs(away[:limit]) > tolerance)
    return int(outside[-1]) if outside.size else None


def _entry_u_s(away: FloatArray, entry: int, spread_rad: float, rate_hz: float) -> float:
    """Return the standard uncertainty of the entry time."""
    low, high = max(entry - EDGE_SAMPLES, 0), min(entry + EDGE_SAMPLES, away.size - 1)
    slope = abs(float(away[high] - away[low])) / max(high - low, 1)
    grid = 1.0 / math.sqrt(12.0)
    return math.hypot(spread_rad / slope if slope > 0 else 0.0, grid) / rate_hz


def _time(difference: PhaseDifference, index: int) -> float:
    return difference.start_s + index / difference.rate_hz


def locked_jitter(difference: PhaseDifference, episodes: tuple[Episode, ...]) -> Quantity:
    """Return the standard deviation of psi about its mean in the longest episode, rad.

    Parameters
    ----------
    difference : PhaseDifference
    episodes : tuple of Episode

    Returns
    -------
    Quantity, rad; its u is s / sqrt(2 n_eff), n_eff from the correlation time of psi.
    """
    if not episodes:
        return undetermined("rad", "the record has no locked episode")
    longest = max(episodes, key=lambda episode: episode.stop_s - episode.start_s)
    first = round((longest.start_s - difference.start_s) * difference.rate_hz)
    stop = round((longest.stop_s - difference.start_s) * difference.rate_hz) + 1
    inside = difference.valid[first:stop]
    psi_rad = difference.psi_rad[first:stop][inside]
    if psi_rad.size < 8:
        return undetermined("rad", f"the longest episode holds {psi_rad.size} samples; 8 needed")
    value = float(np.std(psi_rad, ddof=1))
    return Quantity(value=value, u=value / math.sqrt(2.0 * _effective_count(psi_rad)), unit="rad")


def _effective_count(values: FloatArray) -> float:
    """Return the number of independent values, from the lag-one correlation of thinned data.

    The correlation of psi in lock decays exponentially; the lag at which it falls below 1/e
    is found by doubling, and n_eff = n (1 - r) / (1 + r) at unit lag of that decay.
    """
    away = values - values.mean()
    power = float(away @ away)
    if not power > 0:
        return 1.0
    lag = 1
    while lag < values.size // 4 and float(away[lag:] @ away[:-lag]) / power > math.exp(-1.0):
        lag *= 2
    r = math.pow(max(float(away[lag:] @ away[:-lag]) / power, 0.0), 1.0 / lag)
    return max(values.size * (1.0 - r) / (1.0 + r), 1.0)
