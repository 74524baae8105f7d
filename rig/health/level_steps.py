"""Sudden lasting changes of level or offset in a record: a gain switched, a sensor knocked."""

from __future__ import annotations

import math
from bisect import insort
from dataclasses import dataclass

import numpy as np

from rig.arrays import FloatArray, median, row_medians
from rig.health.survey import SlotLevels

CYCLES_A_GROUP = 4.0  # the rms of fewer cycles depends on where in the cycle it begins
SIDE = 3  # groups on either side that a sudden step is seen in
RESTLESS_SHARE = 0.5  # of a step: values that scatter more about their median step all the time
OTHER_SHAPE = 1.25  # a beat that halves the level on average swings by more than that
SHORTEST_SIDE = 0.03  # of the record: what comes nearer to an end is a start or a stop
FEWEST_GROUPS = 4 * SIDE


@dataclass(frozen=True, slots=True, kw_only=True)
class LevelStep:
    """The largest sudden change that lasts to the end: its time and size.

    ``size`` is a ratio above 1 for a level, a difference in sample units for an offset.
    """

    time_s: float
    size: float


def level_step(slots: SlotLevels, rate_hz: float, line_hz: float) -> LevelStep | None:
    """Return the largest lasting change of the rms value, None when the record is too short.

    Parameters
    ----------
    slots : SlotLevels
    rate_hz : float, Hz
    line_hz : float, Hz, frequency of the oscillation
    """
    _mean, rms, seconds = group_levels(slots, rate_hz, line_hz)
    usable = rms > 0
    logs = np.where(usable, np.log(np.where(usable, rms, 1.0)), math.nan)
    found = _largest(logs)
    if found is None or not _keeps_shape(slots, rms, found[0]):
        return None
    return LevelStep(time_s=found[0] * seconds, size=math.exp(found[1]))


def _keeps_shape(slots: SlotLevels, rms: FloatArray, cut: int) -> bool:
    """Tell whether the swing over the rms value is alike before and after a cut, not at an end.

    A gain switched leaves it; a beat that begins or ends as lock is lost or gained, and the
    way into lock at the start of a record, do not.
    """
    size = slots.mean.size // rms.size
    whole = (rms.size, size)
    highest = slots.highest[: rms.size * size].reshape(whole).max(axis=1)
    lowest = slots.lowest[: rms.size * size].reshape(whole).min(axis=1)
    shapes = []
    for side in (slice(None, cut), slice(cut, None)):
        swing, level = (highest - lowest)[side], rms[side]
        there = np.isfinite(swing) & np.isfinite(level)
        if np.count_nonzero(there) < SHORTEST_SIDE * rms.size:
            return False
        shapes.append(float(np.percentile(swing[there], 90.0) / np.median(level[there])))
    return max(shapes) < OTHER_SHAPE * min(shapes)


def offset_step(slots: SlotLevels, rate_hz: float, line_hz: float) -> LevelStep | None:
    """Return the largest lasting change of the mean, None when the record is too short."""
    mean, _, seconds = group_levels(slots, rate_hz, line_hz)
    found = _largest(mean)
    return found and LevelStep(time_s=found[0] * seconds, size=found[1])


def group_levels(
    slots: SlotLevels, rate_hz: float, line_hz: float
) -> tuple[FloatArray, FloatArray, float]:
    """Return mean and rms of groups of whole slots of some cycles each, and their length.

    Parameters
    ----------
    slots : SlotLevels
    rate_hz : float, Hz
    line_hz : float, Hz, frequency of the oscillation

    Returns
    -------
    mean, rms : arrays, shape (groups,), sample units; a group with an empty slot is NaN
    seconds : float, s, length of a group
    """
    size = max(1, math.ceil(CYCLES_A_GROUP * rate_hz / (line_hz * slots.frames)))
    count = slots.mean.size // size
    means = slots.mean[: count * size].reshape(count, size)
    squares = slots.rms[: count * size].reshape(count, size) ** 2
    mean = means.mean(axis=1)
    spread = (squares + (means - mean[:, None]) ** 2).mean(axis=1)
    return mean, np.sqrt(spread), size * slots.frames / rate_hz


def _largest(values: FloatArray) -> tuple[int, float] | None:
    """Return (group, size) of the largest change that is both sudden and lasting."""
    places = np.flatnonzero(np.isfinite(values))
    values = values[places]
    if values.size < FEWEST_GROUPS:
        return None
    sizes = _changes(values)
    best = int(np.argmax(sizes))
    size = float(sizes[best])
    if _restlessness(values, best + SIDE) > RESTLESS_SHARE * size:
        return None
    return int(places[best + SIDE]), size


def _restlessness(values: FloatArray, cut: int) -> float:
    """Return the larger median distance of the values on a side of a cut from their median."""
    sides = (values[:cut], values[cut:])
    return max(median(np.abs(side - median(side))) for side in sides)


def _changes(values: FloatArray) -> FloatArray:
    """Return for each cut the smaller of the change next to it and that of all before and after.

    Zero where the two go opposite ways.
    """
    beside = row_medians(np.lib.stride_tricks.sliding_window_view(values, SIDE))
    near = beside[SIDE:] - beside[:-SIDE]
    before, after = _medians_so_far(values), _medians_so_far(values[::-1])[::-1]
    whole = after[SIDE : values.size - SIDE + 1] - before[SIDE - 1 : values.size - SIDE]
    return np.where(near * whole < 0, 0.0, np.minimum(np.abs(near), np.abs(whole)))


def _medians_so_far(values: FloatArray) -> FloatArray:
    """Return the median of the first 1, 2, ... values."""
    ordered: list[float] = []
    medians = []
    for value in values.tolist():
        insort(ordered, value)
        middle = len(ordered) // 2
        medians.append(0.5 * (ordered[middle] + ordered[-middle - 1]))
    return np.array(medians)
