"""Pulses of a toothed wheel placed on its turns: missing teeth, an index pulse, uneven pitch.

A wheel has ``positions`` equal pitches a turn, ``missing`` of them without a tooth and
side by side (the gap), or one ``extra`` index pulse between two teeth. With a gap phase 0 is
the first tooth after it, with an index pulse it is that pulse, else the first pulse met.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from rig.arrays import BoolArray, FloatArray, IntArray, median, row_medians
from rig.errors import PhaseError
from rig.phases.events import steps_over

NEAR = 2  # intervals on each side whose median is the pitch: one gap among five does not matter
FEWEST_LEARNED_TURNS = 8  # turns before uneven teeth are told from noise by more than 1/3


@dataclass(frozen=True, slots=True, kw_only=True)
class Wheel:
    """Pitches a turn, how many of them have no tooth, and index pulses a turn (0 or 1)."""

    positions: int = 1
    missing: int = 0
    extra: int = 0

    def __post_init__(self) -> None:
        if not self.positions > self.missing >= 0:
            raise PhaseError(
                f"wheel needs 0 <= missing < positions, got {self.missing} of {self.positions}"
            )
        if self.extra not in (0, 1):
            raise PhaseError(f"wheel can have 0 or 1 index pulse a turn, got {self.extra}")
        if self.extra and self.missing:
            raise PhaseError("wheel can have a gap or an index pulse, not both")
        if self.missing and self.positions - self.missing < 3:
            raise PhaseError(
                f"wheel with a gap needs at least 3 teeth, got {self.positions - self.missing}"
            )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PlacedPulses:
    """Pulses with the turns of the wheel there; ``bridged`` (n - 1,) intervals hold a phase."""

    event_s: FloatArray
    turns: FloatArray
    bridged: BoolArray
    notes: tuple[str, ...] = ()


def place_pulses(event_s: FloatArray, wheel: Wheel, longest: float) -> PlacedPulses:
    """Return the pulses of a wheel placed on its turns.

    Parameters
    ----------
    event_s : array, shape (n,), s, increasing
    wheel : Wheel
    longest : float, an interval longer than this many pitches (times its own) is not bridged

    Raises
    ------
    PhaseError
        If the stated gap or index pulse is not found where it must be.
    """
    if wheel.extra:
        return _with_index(event_s, wheel, longest)
    if wheel.missing:
        return _with_gap(event_s, wheel, longest)
    return _plain(event_s, wheel, longest)


def local_pitch_s(event_s: FloatArray, near: int = NEAR) -> FloatArray:
    """Return for each interval the median of it and its neighbours, s, shape (n - 1,)."""
    gaps = np.diff(event_s)
    width = 2 * near + 1
    if gaps.size < width:
        return np.full(gaps.size, median(gaps) if gaps.size else 0.0)
    padded = np.concatenate([gaps[near:0:-1], gaps, gaps[-2 : -near - 2 : -1]])
    return np.asarray(row_medians(np.lib.stride_tricks.sliding_window_view(padded, width)))


def _plain(event_s: FloatArray, wheel: Wheel, longest: float) -> PlacedPulses:
    bridged = np.diff(event_s) <= longest * _same_tooth_s(event_s, wheel.positions)
    if wheel.positions == 1:
        place = np.concatenate([[0], np.cumsum(steps_over(event_s, bridged))])
    else:
        # Which tooth comes after a hole is not known; to count on keeps it the likeliest.
        place = np.arange(event_s.size)
    return _learned(event_s, place, wheel, bridged, ())


def _same_tooth_s(event_s: FloatArray, positions: int) -> FloatArray:
    """Return for each interval the usual one between the same two teeth, s.

    The median over two turns before and after, so that uneven teeth are not taken for
    missing ones and a missing one not for the rule.
    """
    gaps = np.diff(event_s)
    shifted = np.full((5, gaps.size), np.nan)
    for row, turns in enumerate((-2, -1, 0, 1, 2)):
        move = turns * positions
        from_, to = max(0, move), min(gaps.size, gaps.size + move)
        if to > from_:
            shifted[row, from_ - move : to - move] = gaps[from_:to]
    return np.asarray(np.nanmedian(shifted, axis=0))


def _with_gap(event_s: FloatArray, wheel: Wheel, longest: float) -> PlacedPulses:
    ratio = np.diff(event_s) / local_pitch_s(event_s)
    found = np.flatnonzero(ratio > 1.0 + wheel.missing / 2.0)
    teeth = wheel.positions - wheel.missing
    gaps = _regular(found, teeth)
    if gaps.size < 2:
        raise PhaseError(
            f"pulse train of {event_s.size} pulses shows no gap of {wheel.missing} teeth every "
            f"{teeth} pulses ({found.size} long intervals); check pulses_per_turn and "
            "missing_pulses, or take the other edge"
        )
    turn, tooth, known = _counted(event_s.size, gaps, teeth)
    place = turn * wheel.positions + tooth
    steps = np.diff(place)
    bridged = known[1:] & known[:-1] & (ratio <= longest * steps) & (steps >= 1)
    stray = found.size - gaps.size
    notes = (f"{stray} long intervals besides the gap",) if stray else ()
    return _learned(event_s, place, wheel, bridged, notes)


def _regular(found: IntArray, spacing: int) -> IntArray:
    """Return those long intervals that stand exactly one turn from another one."""
    after = np.isin(found + spacing, found)
    before = np.isin(found - spacing, found)
    return found[after | before]


def _counted(count: int, marks: IntArray, spacing: int) -> tuple[IntArray, IntArray, BoolArray]:
    """Return turn, tooth since the mark, and whether that is sure, for each pulse.

    ``marks`` are the intervals before tooth 0. Where two marks are not one turn apart, turns
    are counted by the nearest whole number and the pulses between them are not sure.
    """
    first = marks + 1
    turns = np.concatenate([[0], np.cumsum(np.maximum(1, np.rint(np.diff(first) / spacing)))])
    index = np.arange(count)
    which = np.clip(np.searchsorted(first, index, side="right") - 1, 0, None)
    tooth = index - first[which]
    turn = turns[which].astype(np.int64)
    early = tooth < 0
    turn, tooth = np.where(early, turn - 1, turn), np.where(early, tooth + spacing, tooth)
    exact = np.concatenate([np.diff(first) == spacing, [True]])
    known = (tooth >= 0) & (tooth < spacing) & (exact[which] | early)
    return turn, tooth, np.asarray(known)


def _with_index(event_s: FloatArray, wheel: Wheel, longest: float) -> PlacedPulses:
    gaps = np.diff(event_s)
    pitch = local_pitch_s(event_s)
    both = gaps[:-1] + gaps[1:]
    between = np.minimum(pitch[:-1], pitch[1:])
    wider = np.maximum(pitch[:-1], pitch[1:])
    short = np.maximum(gaps[:-1], gaps[1:]) < 0.85 * wider
    found = np.flatnonzero(short & (both < 1.3 * wider) & (both > 0.6 * between)) + 1
    extra = _regular(found, wheel.positions + 1)
    if extra.size < 2:
        raise PhaseError(
            f"pulse train of {event_s.size} pulses shows no index pulse every "
            f"{wheel.positions + 1} pulses; check pulses_per_turn and extra_pulses"
        )
    teeth_s = np.delete(event_s, extra)
    # Tooth 0 is the first after the index pulse, which it follows by a part of a pitch.
    marks = extra - np.arange(extra.size) - 1
    turn, tooth, known = _counted(teeth_s.size, marks, wheel.positions)
    place = turn * wheel.positions + tooth
    part = median((event_s[extra[:-1] + 1] - event_s[extra[:-1]]) / both[extra[:-1] - 1])
    steps = np.diff(place)
    ratio = np.diff(teeth_s) / local_pitch_s(teeth_s)
    bridged = known[1:] & known[:-1] & (ratio <= longest) & (steps == 1)
    placed = _learned(teeth_s, place, wheel, bridged, ())
    return PlacedPulses(
        event_s=placed.event_s,
        turns=placed.turns + float(part) / wheel.positions,
        bridged=placed.bridged,
        notes=placed.notes,
    )


def _learned(
    event_s: FloatArray, place: IntArray, wheel: Wheel, bridged: BoolArray, notes: tuple[str, ...]
) -> PlacedPulses:
    """Return placed pulses with the uneven pitch of the teeth learned and taken off."""
    errors, turns_used = tooth_errors(event_s, place, wheel, bridged)
    if errors is None:
        return PlacedPulses(
            event_s=event_s, turns=place / wheel.positions, bridged=bridged, notes=notes
        )
    largest = float(np.abs(errors).max()) / wheel.positions
    note = f"uneven teeth learned from {turns_used} turns and removed, up to {largest:.2e} turn"
    return PlacedPulses(
        event_s=event_s,
        turns=(place + errors[np.mod(place, wheel.positions)]) / wheel.positions,
        bridged=bridged,
        notes=(*notes, note),
    )


def tooth_errors(
    event_s: FloatArray, place: IntArray, wheel: Wheel, bridged: BoolArray
) -> tuple[FloatArray | None, int]:
    """Return how far each tooth stands ahead, in pitches, and from how many turns.

    The time of each tooth is set against the mean over one whole turn around it, in which
    every tooth has its share; missing teeth are filled in on a straight line. A steady run
    up moves all teeth alike and falls out with the mean. None below 8 turns.
    """
    if wheel.positions == 1 or event_s.size < FEWEST_LEARNED_TURNS * wheel.positions:
        return None, 0
    grid = np.arange(place[0], place[-1] + 1)
    rising = np.concatenate([[True], np.diff(place) > 0])
    time = np.interp(grid, place[rising], event_s[rising])
    real = np.zeros(grid.size, dtype=bool)
    real[place[rising] - place[0]] = True
    sure = np.concatenate([[True], bridged])[rising]
    real[(place[rising] - place[0])[~sure]] = False
    late, there = _lateness(time, real, wheel.positions)
    tooth = np.mod(grid[there], wheel.positions)
    errors = np.zeros(wheel.positions)
    counts = np.bincount(tooth, minlength=wheel.positions)
    for index in np.flatnonzero(counts):
        errors[index] = median(late[tooth == index])
    used = counts > 0
    if not used.any() or counts[used].min() < FEWEST_LEARNED_TURNS - 2:
        return None, 0
    errors[used] -= errors[used].mean()
    placed = np.flatnonzero(used) + errors[used]
    if np.any(np.diff(np.concatenate([placed, placed[:1] + wheel.positions])) <= 0):
        return None, 0
    return errors, int(median(counts[used]))


def _lateness(time: FloatArray, real: BoolArray, positions: int) -> tuple[FloatArray, IntArray]:
    """Return how late teeth come after the mean over a turn, in pitches, and which they are."""
    # An even number of pitches is centred on a tooth by halves at both ends.
    weights = np.full(positions + 1, 1.0) if positions % 2 == 0 else np.ones(positions)
    if positions % 2 == 0:
        weights[[0, -1]] = 0.5
    weights /= weights.sum()
    middle = np.convolve(time, weights, mode="valid")
    reach = weights.size // 2
    # The mean over a turn moves on by one pitch of that turn a tooth, uneven or not.
    pitch = np.gradient(middle)
    inside = np.arange(reach, time.size - reach)
    late = (time[inside] - middle) / np.where(pitch > 0, pitch, np.inf)
    kept = real[inside]
    return late[kept], inside[kept]
