"""Slips counted window by window, against psi whose turns are known."""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest

from fit.difference import Order, PhaseDifference
from fit.episodes import EpisodeRules, find_episodes
from fit.slip_counter import SlipCounter
from fit.slips import find_slips
from rig.angles import TURN_RAD

RATE_HZ = 20.0


def difference(psi_rad: np.ndarray, valid: np.ndarray | None = None) -> PhaseDifference:
    """A record of psi at 20 Hz."""
    return PhaseDifference(
        order=Order(),
        start_s=0.0,
        rate_hz=RATE_HZ,
        psi_rad=psi_rad,
        valid=np.ones(psi_rad.size, dtype=bool) if valid is None else valid,
        u_rad=np.zeros(psi_rad.size),
        cycle_rate_hz=50.0,
        driven_frequency_hz=50.0,
        reference_frequency_hz=50.0,
    )


def windowed(whole: PhaseDifference, window: int = 200, hop: int = 50) -> list:
    """Slips of overlapping windows, each with psi from another whole turn on."""
    counter, slips = SlipCounter(), []
    size = whole.psi_rad.size
    for number, stop in enumerate(range(window, size + hop, hop)):
        first, stop = max(0, min(stop, size) - window), min(stop, size)
        part = replace(
            whole,
            start_s=first / RATE_HZ,
            psi_rad=whole.psi_rad[first:stop] - TURN_RAD * (number % 3),
            valid=whole.valid[first:stop],
            u_rad=whole.u_rad[first:stop],
        )
        episodes = find_episodes(part, EpisodeRules(), 2.0)
        slips += counter.count(part, episodes, (stop - 20) / RATE_HZ)
    return slips


def staircase(levels: list[float], length: int = 300, flight: int = 8) -> np.ndarray:
    """psi that stays at levels in turns, with short flights between."""
    parts = [np.full(length, levels[0])]
    for before, after in pairwise(levels):
        parts += [np.linspace(before, after, flight), np.full(length, after)]
    return TURN_RAD * np.concatenate(parts)


@pytest.mark.parametrize(
    ("levels", "turns"),
    [
        ([0.1, 1.1, 2.1], [1, 1]),
        ([0.1, -0.9, 0.1], [-1, 1]),
        ([0.1, 2.1], [2]),
        ([0.1, 0.4, 0.1], []),  # another locked angle is no slip
        ([0.1, 1.4, 1.1], [1]),  # nor is it one beside a slip
    ],
)
def test_each_flight_is_one_slip(levels: list[float], turns: list[int]) -> None:
    """Windows overlap four times; a slip is told once."""
    slips = windowed(difference(staircase(levels)))
    assert sum(slip.turns for slip in slips) == sum(turns)
    assert len(slips) == len(turns) or turns == [2]


def test_slips_are_dated_as_in_the_whole_record() -> None:
    """Within a flight: 8 samples of 50 ms."""
    whole = difference(staircase([0.1, 1.1, 2.1, 1.1]))
    expected = [slip.time_s for slip in find_slips(whole, 0.1 * TURN_RAD)]
    assert [slip.time_s for slip in windowed(whole)] == pytest.approx(expected, abs=0.05)


@pytest.mark.parametrize("rate", [0.02, 0.31, -1.7])
def test_a_drift_slips_once_a_turn(rate: float) -> None:
    """A middle that followed psi would count none of a slow drift."""
    psi = TURN_RAD * rate * np.arange(6000) / RATE_HZ
    counted = sum(slip.turns for slip in windowed(difference(psi)))
    # The last second is not told yet, and a turn may be under way at both ends.
    assert counted == pytest.approx(rate * 300.0, abs=1.5 + abs(rate))


def test_nothing_is_counted_across_a_gap() -> None:
    """Turns that nobody saw are not known."""
    psi = staircase([0.1, 1.1])
    valid = np.ones(psi.size, dtype=bool)
    valid[280:330] = False
    assert windowed(difference(psi, valid)) == []


def test_a_window_without_phase_counts_nothing() -> None:
    """And does not move the middle."""
    counter = SlipCounter()
    nothing = difference(np.zeros(50), np.zeros(50, dtype=bool))
    assert counter.count(nothing, (), 10.0) == ()
    assert counter.centre_rad is None
