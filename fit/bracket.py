"""Edges read off the states of the points: last locked, first unlocked, and holes between.

Only a plausibility check beside the joint likelihood: under noise points near the edge slip,
so the bracket lies inside the true region by much more than half a cell, and its bar then
covers the truth rarely.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from fit.records import AdlerEstimate, RegionPoint
from rig.quantities import Quantity, undetermined

VAGUE = 0.15  # of the coupling: a detuning less sure than that gives a point no place
_SHIFT_ROUNDS = 30  # the shift enters its own law through a logarithm and settles fast


@dataclass(frozen=True, slots=True, kw_only=True)
class Bracket:
    """One run of locked points along the axis of the sweep, with its two bracketed edges."""

    lower_hz: Quantity
    upper_hz: Quantity
    first_locked_hz: float
    last_locked_hz: float


def bracket_runs(points: Sequence[RegionPoint]) -> list[Bracket]:
    """Return the locked runs of some points of one level and direction, by drive frequency.

    Parameters
    ----------
    points : sequence of RegionPoint; undecided ones and those without a place are left out

    Returns
    -------
    list of Bracket, rising; empty when no point is locked
    """
    known = sorted(
        (axis_hz(point), point.state == "locked")
        for point in points
        if point.state != "undecided" and is_placed(point)
    )
    drives = [drive for drive, _ in known]
    locked = [flag for _, flag in known]
    runs: list[Bracket] = []
    index = 0
    while index < len(locked):
        if not locked[index]:
            index += 1
            continue
        stop = index
        while stop + 1 < len(locked) and locked[stop + 1]:
            stop += 1
        runs.append(_bracket(drives, index, stop))
        index = stop + 1
    return runs


def slip_shift(ratio: float, relaxations: float) -> float:
    """Return by what part of the coupling slips move the last locked point inward.

    s = ((3 D / (4 sqrt(2) K)) ln(k T / (2 pi ln 2)))^(2/3), k = K sqrt(2 s - s^2): where one
    slip becomes likely within a point (Kramers rate).

    Parameters
    ----------
    ratio : float, D / K
    relaxations : float, K T of one point

    References
    ----------
    Kramers 1940, Physica 7, 284 (recalled).
    """
    shift = 0.1
    for _ in range(_SHIFT_ROUNDS):
        rate = math.sqrt(max(2.0 * shift - shift**2, 0.0))
        often = max(rate * relaxations / (2.0 * math.pi * math.log(2.0)), 1.0)
        shift = (3.0 * ratio / (4.0 * math.sqrt(2.0)) * math.log(often)) ** (2.0 / 3.0)
        shift = min(shift, 1.0)
    return shift


def is_placed(point: RegionPoint) -> bool:
    """Say whether it is known where on the axis of the sweep a point lies."""
    return point.drive_hz is not None or point.detuning_hz is not None


def axis_hz(point: RegionPoint) -> float:
    """Return where a point lies: its drive frequency, or for a mutual pair its free detuning."""
    if point.drive_hz is not None:
        return point.drive_hz
    return point.detuning_hz or 0.0


def own_place_hz(adler: AdlerEstimate) -> float | None:
    """Return the detuning at which a record of a mutual pair lies, None where it is vague.

    Locked records tell their own detuning badly or not at all; one that is off by a good part
    of the coupling would stand among points of another state.

    Parameters
    ----------
    adler : AdlerEstimate of the record
    """
    detuning, coupling = adler.detuning_hz, adler.coupling_hz
    if detuning.value is None:
        return None
    if coupling.value is not None and (detuning.u or 0.0) > VAGUE * coupling.value:
        return None
    return detuning.value


def _bracket(drives: list[float], first: int, last: int) -> Bracket:
    """Return the run of points first..last with its edges."""
    return Bracket(
        lower_hz=_between(drives[first - 1] if first > 0 else None, drives[first], "below"),
        upper_hz=_between(
            drives[last + 1] if last + 1 < len(drives) else None, drives[last], "above"
        ),
        first_locked_hz=drives[first],
        last_locked_hz=drives[last],
    )


def _between(unlocked_hz: float | None, locked_hz: float, side: str) -> Quantity:
    """Return the middle of a cell with the rectangular uncertainty of its half-width."""
    if unlocked_hz is None:
        reason = f"open on this side: no unlocked point {side} {locked_hz:.6g} Hz"
        low, high = (None, locked_hz) if side == "below" else (locked_hz, None)
        return undetermined("Hz", reason, low=low, high=high)
    half_hz = abs(unlocked_hz - locked_hz) / 2.0
    return Quantity(value=(unlocked_hz + locked_hz) / 2.0, u=half_hz / math.sqrt(3.0), unit="Hz")
