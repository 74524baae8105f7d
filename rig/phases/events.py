"""Phase from instants: fixed turns at each, linear between, never bridged where one is missing."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from rig.arrays import BoolArray, FloatArray, IntArray

NEIGHBOURS = 8  # intervals on each side that say how long one should be
FEWEST_EVENTS = 4


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class EventPhase:
    """Turns and mask on a grid, with what was counted on the way."""

    turns: FloatArray
    valid: BoolArray
    missing: int


def usual_intervals(event_s: FloatArray) -> FloatArray:
    """Return for each interval the median of it and its neighbours, s.

    Parameters
    ----------
    event_s : array, shape (n,), s, increasing

    Returns
    -------
    array, shape (n - 1,), s
    """
    gaps = np.diff(event_s)
    width = 2 * NEIGHBOURS + 1
    if gaps.size < width:
        return np.full(gaps.size, float(np.median(gaps)) if gaps.size else 0.0)
    middle = np.median(np.lib.stride_tricks.sliding_window_view(gaps, width), axis=1)
    return np.concatenate(
        [
            np.full(NEIGHBOURS, middle[0]),
            middle,
            np.full(gaps.size - middle.size - NEIGHBOURS, middle[-1]),
        ]
    )


def spaced_events(event_s: FloatArray, shortest_s: float) -> FloatArray:
    """Return the events with those left out that follow the one before too soon.

    Parameters
    ----------
    event_s : array, shape (n,), s, increasing
    shortest_s : float, s
    """
    if event_s.size < 2 or not (np.diff(event_s) < shortest_s).any():
        return event_s
    kept = [float(event_s[0])]
    for time_s in event_s[1:].tolist():
        if time_s - kept[-1] >= shortest_s:
            kept.append(time_s)
    return np.array(kept)


def phase_between(
    event_s: FloatArray,
    event_turns: FloatArray,
    time_s: FloatArray,
    *,
    bridged: BoolArray,
) -> EventPhase:
    """Return turns at times, linear between events; False outside and where not bridged.

    Parameters
    ----------
    event_s : array, shape (n,), s, increasing
    event_turns : array, shape (n,), turns at the events
    time_s : array, shape (m,), s
    bridged : bool array, shape (n - 1,), which intervals may be crossed
    """
    turns = np.interp(time_s, event_s, event_turns)
    place: IntArray = np.searchsorted(event_s, time_s, side="right") - 1
    inside = (place >= 0) & (place < event_s.size - 1)
    held = np.clip(place, 0, max(event_s.size - 2, 0))
    valid = inside & bridged[held] if bridged.size else np.zeros(time_s.size, dtype=bool)
    # An exact hit on the last event is inside.
    return EventPhase(turns=turns, valid=valid, missing=int(np.sum(~bridged)))
