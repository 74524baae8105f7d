"""Phase from instants: fixed turns at each, linear between, never bridged where one is missing."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from rig.angles import TURN_RAD
from rig.arrays import BoolArray, FloatArray, IntArray, median, row_medians
from rig.errors import PhaseError
from rig.longarrays import blocks_of, made_row
from rig.phases.finishing import FoundPhase
from rig.phases.grid import Grid
from rig.phases.stretches import leave_out_short_runs

FEWEST_EVENTS = 4  # instants below which nothing is said about a phase
FEWEST_PER_CYCLE = 4.0  # samples between two instants
NEIGHBOURS = 8  # intervals on each side that say how long one should be
BETWEEN = math.sqrt(2.0 / 3.0)  # deviation on a line between two instants over theirs, rms
# On a straight line between values of a random walk one interval apart the increments miss
# 2 u (1 - u) of it, u the place on the line: a third on the mean.
LOST_SHARE = 3.0
NORMAL_SPREAD = 0.6745  # median of the modulus over the deviation, normal law


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Instants:
    """Instants in s after the start of the grid, turns there, and which intervals are bridged.

    ``rejected`` instants were left out; ``by_samples_rad`` is the deviation of the phase that
    noise of the samples explains, None when it is not known.
    """

    event_s: FloatArray
    turns: FloatArray
    bridged: BoolArray
    rejected: int = 0
    by_samples_rad: float | None = None
    amplitude: float = 1.0
    snr_db: float | None = None
    notes: tuple[str, ...] = ()


def phase_of_instants(method: str, name: str, instants: Instants, grid: Grid) -> FoundPhase:
    """Return the phase on the grid, linear between instants.

    Raises
    ------
    PhaseError
        If there are fewer than 4 instants.
    """
    events, turns = instants.event_s, instants.turns
    _refuse_few(name, events)
    inside, values = _on_grid(instants, grid)
    cycle_s = usual_cycle_s(events, turns)
    u_rad = scatter_rad(events, turns)
    if instants.by_samples_rad is not None:
        u_rad = min(u_rad, instants.by_samples_rad) if u_rad > 0 else instants.by_samples_rad
    interval_s = median(np.diff(events))
    leave_out_short_runs(inside, 2)
    return FoundPhase(
        method=method,
        turns=values,
        amplitude=np.broadcast_to(np.float64(instants.amplitude), inside.shape),
        valid=inside,
        u_rad=np.broadcast_to(np.float64(u_rad * BETWEEN), inside.shape),
        snr_db=instants.snr_db,
        band_hz=None,
        smear_s=interval_s,
        lost_s=interval_s / LOST_SHARE,
        line_hz=1.0 / cycle_s,
        correlation_samples=max(1.0, interval_s * grid.grid_rate_hz),
        event_s=events + grid.start_s,
        notes=instants.notes + _counts(instants),
    )


def _on_grid(instants: Instants, grid: Grid) -> tuple[BoolArray, FloatArray]:
    """Return where the grid lies in a bridged interval, and the turns there."""

    def turns_at(start: int, stop: int) -> FloatArray:
        time_s = np.arange(start, stop) / grid.grid_rate_hz
        return np.interp(time_s, instants.event_s, instants.turns)

    inside = np.empty(grid.count, dtype=bool)
    for start, stop in blocks_of(0, grid.count):
        time_s = np.arange(start, stop) / grid.grid_rate_hz
        inside[start:stop] = _is_bridged(instants.event_s, time_s, instants.bridged)
    values: FloatArray = made_row(grid.count, np.float64, turns_at)
    return inside, values


def _refuse_few(name: str, events: FloatArray) -> None:
    if events.size < FEWEST_EVENTS:
        raise PhaseError(
            f"channel '{name}': {events.size} markers found, at least {FEWEST_EVENTS} needed; "
            "check level and hysteresis, or record longer"
        )


def _counts(instants: Instants) -> tuple[str, ...]:
    notes = []
    if instants.rejected:
        notes.append(
            f"{instants.rejected} crossings rejected by hysteresis or as too near the one before"
        )
    missing = int(np.sum(~instants.bridged))
    if missing:
        notes.append(f"{missing} intervals not bridged (missing markers or samples)")
    return tuple(notes)


def between_instants(
    event_s: FloatArray, event_turns: FloatArray, time_s: FloatArray, bridged: BoolArray
) -> tuple[BoolArray, FloatArray]:
    """Return where times lie in a bridged interval, and the turns there.

    Parameters
    ----------
    event_s : array, shape (n,), s, increasing
    event_turns : array, shape (n,), turns
    time_s : array, shape (m,), s
    bridged : bool array, shape (n - 1,)
    """
    return _is_bridged(event_s, time_s, bridged), np.interp(time_s, event_s, event_turns)


def _is_bridged(event_s: FloatArray, time_s: FloatArray, bridged: BoolArray) -> BoolArray:
    place: IntArray = np.searchsorted(event_s, time_s, side="right") - 1
    inside = (place >= 0) & (place < event_s.size - 1)
    held = np.clip(place, 0, event_s.size - 2)
    return np.asarray(inside & bridged[held])


def usual_cycle_s(event_s: FloatArray, turns: FloatArray) -> float:
    """Return the median time of a whole turn, s."""
    return median(np.diff(event_s)) / median(np.diff(turns))


def scatter_rad(event_s: FloatArray, turns: FloatArray) -> float:
    """Return the deviation of the phase at an instant, from second differences.

    Of independent timing errors the second difference holds 1 + 4 + 1 shares; what the
    oscillator itself does from one cycle to the next counts too, so this is an upper bound.
    """
    expected_s = usual_cycle_s(event_s, turns)
    bends = np.diff(event_s, 2) / expected_s - np.diff(turns, 2)
    return TURN_RAD * median(np.abs(bends)) / NORMAL_SPREAD / math.sqrt(6.0)


def usual_intervals(event_s: FloatArray) -> FloatArray:
    """Return for each interval the median of it and its neighbours, s, shape (n - 1,)."""
    gaps = np.diff(event_s)
    width = 2 * NEIGHBOURS + 1
    if gaps.size < width:
        return np.full(gaps.size, median(gaps) if gaps.size else 0.0)
    middle = row_medians(np.lib.stride_tricks.sliding_window_view(gaps, width))
    ends = (np.full(NEIGHBOURS, middle[0]), np.full(NEIGHBOURS, middle[-1]))
    return np.concatenate([ends[0], middle, ends[1]])


def bridged_intervals(
    event_s: FloatArray, longest: float, missing_s: FloatArray | None = None
) -> BoolArray:
    """Return which intervals hold no missing instant and no missing sample.

    Parameters
    ----------
    event_s : array, shape (n,), s, increasing
    longest : float, times the usual interval
    missing_s : array, s, instants of samples that are missing
    """
    gaps = np.diff(event_s)
    if gaps.size and gaps.max() <= longest * gaps.min():
        bridged = np.ones(gaps.size, dtype=bool)  # no need for medians of neighbours
    else:
        bridged = gaps <= longest * usual_intervals(event_s)
    if missing_s is not None and missing_s.size:
        place = np.searchsorted(event_s, missing_s) - 1
        bridged[place[(place >= 0) & (place < bridged.size)]] = False
    return np.asarray(bridged)


def steps_over(event_s: FloatArray, bridged: BoolArray) -> IntArray:
    """Return how many markers on each next one is: 1, or over a hole the likeliest number.

    Over a hole the number follows from the usual interval around it. It makes the phase on
    both sides comparable while the frequency is steady; whole turns may still be missing.
    """
    steps = np.ones(bridged.size, dtype=np.int64)
    if not bridged.all():
        gaps, usual = np.diff(event_s)[~bridged], usual_intervals(event_s)[~bridged]
        steps[~bridged] = np.maximum(1, np.rint(gaps / np.maximum(usual, 1e-300)))
    return steps


def far_enough(event_s: FloatArray, shortest: float) -> BoolArray:
    """Return which instants do not follow the last one kept too soon.

    Parameters
    ----------
    event_s : array, shape (n,), s, increasing
    shortest : float, times the usual interval between them
    """
    kept = np.ones(event_s.size, dtype=bool)
    gaps = np.diff(event_s)
    if event_s.size < 2 or gaps.min() >= shortest * gaps.max():
        return kept
    least_s = shortest * usual_intervals(event_s)
    if not (gaps < least_s).any():
        return kept
    last = -math.inf
    for index, (time_s, least) in enumerate(
        zip(event_s.tolist(), [float(least_s[0]), *least_s.tolist()], strict=True)
    ):
        kept[index] = time_s - last >= least
        if kept[index]:
            last = time_s
    return kept
