"""Valid stretches of a grid: where they begin and end."""

from __future__ import annotations

import numpy as np

from rig.arrays import BoolArray, IntArray
from rig.longarrays import blocks_of

BLOCK = 65536  # samples of a mask worked through at a time


def runs_of(valid: BoolArray) -> IntArray:
    """Return the half-open index spans where a mask is True, shape (runs, 2)."""
    if valid.size == 0:
        return np.empty((0, 2), dtype=np.int64)
    edges = [
        np.flatnonzero(valid[a + 1 : b + 1] != valid[a : min(b, valid.size - 1)]) + (a + 1)
        for a, b in blocks_of(0, valid.size, BLOCK)
    ]
    if valid[0]:
        edges.insert(0, np.zeros(1, dtype=np.int64))
    if valid[-1]:
        edges.append(np.full(1, valid.size, dtype=np.int64))
    return np.concatenate(edges).reshape(-1, 2)


def leave_out_short_runs(valid: BoolArray, fewest: int) -> None:
    """Take stretches of fewer samples out of a mask."""
    runs = runs_of(valid)
    for first, stop in runs[runs[:, 1] - runs[:, 0] < fewest].tolist():
        valid[first:stop] = False


def leave_out_spans(valid: BoolArray, first: IntArray, stop: IntArray) -> None:
    """Take half-open spans out of a mask; they may reach beyond its ends."""
    for begin, end in zip(np.maximum(first, 0).tolist(), stop.tolist(), strict=True):
        valid[begin : max(end, begin)] = False


def joined_spans(index: IntArray) -> tuple[IntArray, IntArray]:
    """Return first and one-past-last of each run of neighbouring indices (sorted)."""
    breaks = np.flatnonzero(np.diff(index) > 1)
    first = index[np.concatenate([[0], breaks + 1])]
    stop = index[np.concatenate([breaks, [index.size - 1]])] + 1
    return first, stop
