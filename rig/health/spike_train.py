"""How often the spikes of a train come, from the times between them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from rig.arrays import FloatArray, median

SPIKE_SHARE = 0.4  # of the largest excursion of a piece: what reaches it is a spike
INNER_SHARE = 0.4  # of a long interval: shorter ones lie within one spike of several swings
LONG_PERCENTILE = 90.0  # one interval in ten at least lies between spikes, not within one
FEWEST_INTERVALS = 8
QUIET_SHARE = 0.1  # of the largest excursion of all: a piece below it holds noise, no spikes
REGULAR_SPREAD = 0.35  # of the median interval: above, the spikes come by chance (0.48 there)


@dataclass(frozen=True, slots=True, kw_only=True)
class SpikeTrain:
    """Repetition rate of a train of spikes, and whether its intervals are alike."""

    frequency_hz: float
    is_regular: bool


def find_train(pieces: Sequence[FloatArray], level: float, rate_hz: float) -> SpikeTrain | None:
    """Return the train of spikes in pieces of a record, None when there are too few spikes.

    Parameters
    ----------
    pieces : sequence of arrays, sample units; missing samples are no spikes
    level : float, sample units, the line the spikes stand out from
    rate_hz : float, Hz
    """
    loud = _loud([np.abs(piece - level) for piece in pieces])
    intervals = np.concatenate([_intervals(excursion) for excursion in loud])
    if intervals.size < FEWEST_INTERVALS:
        return None
    long = np.percentile(intervals, LONG_PERCENTILE)
    between = intervals[intervals > INNER_SHARE * long]
    middle = median(between)
    spread = median(np.abs(between - middle))
    return SpikeTrain(frequency_hz=rate_hz / middle, is_regular=spread < REGULAR_SPREAD * middle)


def _loud(excursions: Sequence[FloatArray]) -> list[FloatArray]:
    """Leave out what a transient leaves behind: its noise would pass for spikes of its own."""
    largest = [np.nan_to_num(each, nan=0.0).max(initial=0.0) for each in excursions]
    floor = QUIET_SHARE * max(largest)
    return [each for each, peak in zip(excursions, largest, strict=True) if peak >= floor]


def _intervals(excursion: FloatArray) -> FloatArray:
    """Return frames between rises past the threshold."""
    present = np.where(np.isfinite(excursion), excursion, 0.0)
    above = present > SPIKE_SHARE * present.max(initial=0.0)
    rises = np.flatnonzero(above[1:] & ~above[:-1])
    return np.diff(rises).astype(float)
