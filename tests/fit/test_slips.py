"""Slips: counted once, timed, signed; their rate with its interval."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.slips import find_slips, garwood_interval, slip_rate

TURN = 2 * math.pi
RATE = 20.0
TIME = np.arange(0, 60, 1 / RATE)


def steps(*moves):
    """psi that stays at 0.4 rad and moves on by (time, turns) in about a second."""
    return 0.4 + sum(TURN * turns / (1 + np.exp(-(TIME - at) * 6)) for at, turns in moves)


@pytest.mark.parametrize("turns", [1, -1])
def test_a_slip_has_its_time_and_sign(psi_tools, turns):
    """The side on which a pair slips tells the sign of its detuning."""
    (slip,) = find_slips(psi_tools.difference(steps((20.0, turns)), RATE))
    assert slip.turns == turns
    assert slip.time_s == pytest.approx(20.0, abs=0.01)


def test_slips_forth_and_back_are_two(psi_tools):
    """Net zero is not the same as no slip."""
    found = find_slips(psi_tools.difference(steps((20.0, 1), (40.0, -1)), RATE))
    assert [slip.turns for slip in found] == [1, -1]


def test_a_jump_of_two_turns_at_once_keeps_its_size(psi_tools):
    """A slip faster than the sampling still moves psi by the turns it moves."""
    psi = np.where(TIME < 30, 0.4, 0.4 + 2 * TURN)
    assert [slip.turns for slip in find_slips(psi_tools.difference(psi, RATE))] == [2]


def test_noise_at_the_boundary_is_not_counted(psi_tools, rng):
    """Plain counting of boundary crossings over-counts up to five times."""
    psi = TURN * TIME / 30 + 0.6 * rng.standard_normal(TIME.size)
    found = find_slips(psi_tools.difference(psi, RATE))
    assert [slip.turns for slip in found] == [1, 1]


def test_net_slips_follow_the_motion_of_psi(psi_tools, rng):
    """Net turns and total motion agree to a turn, with noise of a third of the coupling."""
    psi = psi_tools.pulled_psi(
        rng, drift_rad_s=1.0, coupling_rad_s=1.0, noise_rad2_s=0.3, step_s=0.1, count=4000
    )
    net = sum(slip.turns for slip in find_slips(psi_tools.difference(psi, 10.0)))
    assert net > 20
    assert net == pytest.approx((psi[-1] - psi[0]) / TURN, abs=1.0)


def test_nothing_is_counted_across_a_gap(psi_tools):
    """A gap may hide any number of turns."""
    psi = np.where(TIME < 30, 0.4, 0.4 + TURN)
    psi[580:620] = np.nan
    assert find_slips(psi_tools.difference(psi, RATE)) == ()


def test_no_valid_sample_gives_no_slip_and_no_rate(psi_tools):
    """An all-gap record must not fail."""
    empty = psi_tools.difference(np.full(10, np.nan), RATE)
    assert find_slips(empty) == ()
    assert slip_rate(empty, ()).value is None


def test_no_slip_bounds_the_rate_at_3_69_over_the_time(psi_tools):
    """Zero slips are not a zero rate: the record length bounds it."""
    found = slip_rate(psi_tools.difference(np.zeros(1000), 10.0), ())
    assert found.value == 0.0
    # -ln 0.025 = 3.6889.
    assert found.high == pytest.approx(3.6889 / 100.0, rel=1e-4)


def test_the_rate_counts_slips_of_both_signs(psi_tools):
    """A pair that slips forth and back is not a quiet one."""
    record = psi_tools.difference(steps((20.0, 1), (40.0, -1)), RATE)
    assert slip_rate(record, find_slips(record)).value == pytest.approx(2 / 60, rel=1e-9)


@pytest.mark.parametrize("count", [0, 1, 4, 30])
def test_garwood_ends_have_the_stated_tails(count):
    """The exact interval is defined by its two Poisson tails, summed here term by term."""
    low, high = garwood_interval(count, 0.95)

    def at_most(limit, mean):
        return sum(math.exp(-mean) * mean**k / math.factorial(k) for k in range(limit + 1))

    assert at_most(count, high) == pytest.approx(0.025, abs=1e-10)
    assert 1 - at_most(count - 1, low) == pytest.approx(0.025 if count else 1.0, abs=1e-10)
