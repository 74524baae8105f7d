"""Valid stretches of a grid: where they begin and end, and phases unwrapped inside them."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from rig.angles import TURN_RAD
from rig.arrays import BoolArray, FloatArray, IntArray


def runs_of(valid: BoolArray) -> IntArray:
    """Return the half-open index spans where a mask is True, shape (runs, 2)."""
    edges = np.diff(np.concatenate([[0], valid.astype(np.int8), [0]]))
    return np.stack([np.flatnonzero(edges == 1), np.flatnonzero(edges == -1)], axis=1)


def without_short_runs(valid: BoolArray, fewest: int) -> BoolArray:
    """Return the mask with stretches of fewer samples taken out."""
    kept = valid.copy()
    for first, last in runs_of(valid):
        if last - first < fewest:
            kept[first:last] = False
    return kept


def unwrapped_turns(part_turns: FloatArray) -> FloatArray:
    """Return turns made continuous: each step is brought within half a turn.

    Whole turns are counted as integers, so that nothing is lost over a long record.

    Parameters
    ----------
    part_turns : array, shape (n,), turns, each within (-0.5, 0.5]
    """
    if part_turns.size == 0:
        return part_turns.copy()
    jumps = -np.rint(np.diff(part_turns)).astype(np.int64)
    whole = np.concatenate([np.zeros(1, dtype=np.int64), np.cumsum(jumps)])
    return np.asarray(part_turns + whole)


def turns_of(vector: NDArray[np.complex128]) -> FloatArray:
    """Return the angle of complex numbers in turns."""
    return np.asarray(np.angle(vector) / TURN_RAD)


def mask_spans(count: int, first: NDArray[np.int64], stop: NDArray[np.int64]) -> BoolArray:
    """Return a mask that is True inside any of the half-open spans."""
    marks = np.zeros(count + 1, dtype=np.int64)
    np.add.at(marks, np.clip(first, 0, count), 1)
    np.add.at(marks, np.clip(stop, 0, count), -1)
    return np.asarray(np.cumsum(marks)[:count] > 0)
