"""Flat tops: cut off by a rail, or the shape of the wave?

A smooth wave cut off at a rail enters the flat with a slope s and, seen from the flat, falls
away ever faster (curvature k): the part that is missing was a parabola of length 2 s / k, and
that is about as long as the flat. The edge of a square, a trapezoid, a pulse or a half wave
does not bend that way, and its flat has nothing to do with it: such a flat may be the wave
itself, or a wave cut off so hard that no more can be said.

Measured, 200 signals a row, 8 to 2000 samples a cycle, bare floats, floats with noise, and
int16: see ``tests/recovery/test_clipping_rates.py``.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Literal

import numpy as np

from rig.arrays import FloatArray

Shape = Literal["cut", "flat", "point"]

SHORTEST_CYCLE = 28.0  # frames: with fewer the bend of the flanks cannot be seen
STEEPEST = 0.2  # of the swing, from the flat to the first sample beside it: an edge, not a wave
SHORT_SHARE = 0.15  # of the cycle: a sine cut at 0.89 rests so long, most waves that rest longer
FLANK_CYCLES = 1.0 / 14.0  # length of a flank looked at
FEWEST_ON_FLANK = 3
MOST_RUNS = 2000
LOST_LENGTH = (0.4, 2.5)  # the missing parabola over the flat; 1.0 to 1.3 of a sine down to 0.7
CHATTER_CYCLES = 1.0 / 40.0  # a shorter way off the flat is noise
UNEVEN = 2.0  # the two flanks of a smooth wave fall alike; those of charge and discharge do not
FEWEST_STEPS = 8.0  # of the recorder's on a flank: fewer show no curvature
SINGLE_FRAMES = 1.5  # mean length of runs that are single samples
EQUAL_SHARE = 0.1  # of their mean: neighbours so alike were met at the same points each cycle


def flat_shape(
    spans: Sequence[FloatArray], value: float, swing: float, cycle_frames: float
) -> Shape:
    """Return what the flats at an extreme value look like.

    Parameters
    ----------
    spans : sequence of arrays, sample units
    value : float, sample units, the extreme value that is repeated
    swing : float, sample units, from the lowest to the highest value
    cycle_frames : float, frames a cycle; infinite where nothing oscillates

    Returns
    -------
    "cut", "flat" or "point"
        "cut": a smooth wave cut off. "flat": a flat that may be the wave's own. "point": tops
        of single samples that are met at the same points of each cycle.
    """
    if not math.isfinite(cycle_frames):
        return "flat"
    count = max(FEWEST_ON_FLANK, round(FLANK_CYCLES * cycle_frames))
    found = [_flanks(span, value, count, round(CHATTER_CYCLES * cycle_frames)) for span in spans]
    lengths, before, after = (np.concatenate(part) for part in zip(*found, strict=True))
    if lengths.size == 0:
        return "flat"
    if lengths.mean() < SINGLE_FRAMES:
        spread, mean = float(before[:, 0].std()), float(before[:, 0].mean())
        return "point" if spread < EQUAL_SHARE * mean else "cut"
    if float(before[:, 0].mean()) > STEEPEST * swing:
        return "flat"
    if cycle_frames < SHORTEST_CYCLE:
        return "cut" if lengths.mean() < SHORT_SHARE * cycle_frames else "flat"
    sides = [falls.mean(axis=0) for falls in (before, after)]
    drops = sorted(float(side[-1]) for side in sides)
    if drops[0] * UNEVEN < drops[1] or drops[0] < FEWEST_STEPS * _step(before):
        return "flat"
    away = np.arange(1, count + 1) - 0.5  # the edge lies, on average, half a sample back
    bend, slope, _ = np.polyfit(away, 0.5 * (sides[0] + sides[1]), 2).tolist()
    if not (bend > 0 and slope > 0):
        return "flat"
    lost = slope / bend / float(lengths.mean())
    return "cut" if LOST_LENGTH[0] <= lost <= LOST_LENGTH[1] else "flat"


def _step(falls: FloatArray) -> float:
    """Return the smallest step from the extreme value, one code of a recorder."""
    above = falls[falls > 0]
    return float(above.min()) if above.size else math.inf


def _flanks(
    span: FloatArray, value: float, count: int, chatter: int
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return the lengths of the flats at a value, and the falls before and after each.

    Falls have shape (flats, count), from the first sample outside on. Samples that noise took
    off the flat for a moment belong to it; flats whose flanks reach another, or leave the
    span, are left out.
    """
    at = span == value
    edges = np.flatnonzero(np.diff(at.astype(np.int8), prepend=0, append=0))
    starts, stops = edges[::2], edges[1::2]
    apart = starts[1:] - stops[:-1] > chatter
    starts = starts[np.append(True, apart)[: starts.size]]
    stops = stops[np.append(apart, True)[-stops.size :]] if stops.size else stops
    room = (starts >= count) & (stops + count <= span.size)
    clear = starts[1:] - stops[:-1] > count
    room[1:] &= clear
    room[:-1] &= clear
    starts, stops = starts[room][:MOST_RUNS], stops[room][:MOST_RUNS]
    steps = np.arange(count)
    before = np.abs(value - span[starts[:, None] - 1 - steps])
    after = np.abs(value - span[stops[:, None] + steps])
    there = np.isfinite(before).all(axis=1) & np.isfinite(after).all(axis=1)
    return (stops - starts).astype(float)[there], before[there], after[there]
