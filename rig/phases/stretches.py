"""Valid stretches of a grid: where they begin and end."""

from __future__ import annotations

import numpy as np

from rig.arrays import BoolArray, IntArray

BLOCK = 65536  # samples worked through at a time


def runs_of(valid: BoolArray) -> IntArray:
    """Return the half-open index spans where a mask is True, shape (runs, 2)."""
    if valid.size == 0:
        return np.empty((0, 2), dtype=np.int64)
    turned = np.flatnonzero(valid[1:] != valid[:-1]) + 1
    edges = [turned]
    if valid[0]:
        edges.insert(0, np.zeros(1, dtype=np.int64))
    if valid[-1]:
        edges.append(np.full(1, valid.size, dtype=np.int64))
    return np.concatenate(edges).reshape(-1, 2)


def without_short_runs(valid: BoolArray, fewest: int) -> BoolArray:
    """Return the mask with stretches of fewer samples taken out."""
    kept = valid.copy()
    for first, last in runs_of(valid):
        if last - first < fewest:
            kept[first:last] = False
    return kept


def without_spans(valid: BoolArray, first: IntArray, stop: IntArray) -> BoolArray:
    """Return a mask with half-open spans taken out; they may reach beyond its ends."""
    kept = valid.copy()
    for begin, end in zip(np.maximum(first, 0).tolist(), stop.tolist(), strict=True):
        kept[begin : max(end, begin)] = False
    return kept


def joined_spans(index: IntArray) -> tuple[IntArray, IntArray]:
    """Return first and one-past-last of each run of neighbouring indices (sorted)."""
    breaks = np.flatnonzero(np.diff(index) > 1)
    first = index[np.concatenate([[0], breaks + 1])]
    stop = index[np.concatenate([breaks, [index.size - 1]])] + 1
    return first, stop
