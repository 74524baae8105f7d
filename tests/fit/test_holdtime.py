"""The hold time: closed form against simulation and against the study it comes from."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.episodes import EpisodeRules
from fit.holdtime import (
    FreePair,
    choose_hold,
    closed_form_hold_s,
    longest_stay,
    noise_of,
    required_hold_s,
    simulated_hold_s,
    stay_quantile_s,
)
from fit.records import Baseline
from fit.slips import find_slips
from rig.quantities import Quantity, undetermined

TURN = 2 * math.pi


def free(noise, beats=30.0, drift=1.0, step=0.05):
    """One free pair of unit drift (or of none), its record so many beats long."""
    return FreePair(
        detuning_rad_s=np.array([drift]),
        noise_rad2_s=np.array([noise]),
        record_s=beats * TURN,
        step_s=step,
    )


def baseline(hz=0.5, u_hz=0.0, noise=0.1, noise_u=0.0):
    """Free-running captures that said this."""
    return Baseline(
        detuning_hz=Quantity(value=hz, u=u_hz, unit="Hz"),
        noise_rad2_s=Quantity(value=noise, u=noise_u, unit="rad2/s"),
        source="test",
    )


@pytest.mark.parametrize("beats", [30, 300])
@pytest.mark.parametrize("noise", [0.001, 0.01, 0.1, 0.3, 1.0])
def test_the_closed_form_reaches_the_simulated_table(noise, beats):
    """The study's simulated T / T_b at 1 % and eps 0.25: at most 2 % short, a third over."""
    table = {30: (0.55, 0.68, 1.23, 1.82, 1.94), 300: (0.56, 0.72, 1.40, 2.21, 2.49)}
    simulated = table[beats][(0.001, 0.01, 0.1, 0.3, 1.0).index(noise)]
    found = closed_form_hold_s(free(noise, beats), math.pi, 0.01) / TURN
    # The table has two decimals.
    assert 0.98 * (simulated - 0.005) <= found <= 1.34 * (simulated + 0.005)


@pytest.mark.parametrize(
    ("noise", "eps", "simulated"),
    [(0.003, 0.10, 0.27), (0.03, 0.40, 1.29), (0.1, 0.49, 2.07), (0.3, 0.10, 1.14), (1, 0.4, 3.75)],
)
def test_the_closed_form_holds_for_other_bands(noise, eps, simulated):
    """Bands from 0.10 to 0.49 turn, 300 beats, 1 %."""
    found = closed_form_hold_s(free(noise, 300), 4 * math.pi * eps, 0.01) / TURN
    assert 0.98 * (simulated - 0.005) <= found <= 1.34 * (simulated + 0.005)


@pytest.mark.parametrize("noise", [0.01, 0.3])
def test_the_closed_form_agrees_with_this_simulation(noise, rng):
    """The simulation that stands beside it, at 5 % so that few records suffice."""
    pair = free(noise, 30, step=0.1)
    simulated = simulated_hold_s(pair, math.pi, 0.05, rng, paths=400)
    # 8 % for the quantile of 400 records besides the stated range.
    assert 0.90 <= closed_form_hold_s(pair, math.pi, 0.05) / simulated <= 1.45


def test_equal_frequencies_part_by_diffusion_alone():
    """With no drift the hold is 1.48 W^2 / D for a record of 20 of those (4,000 simulated)."""
    pair = FreePair(
        detuning_rad_s=np.zeros(1), noise_rad2_s=np.ones(1), record_s=200.0, step_s=0.02
    )
    found = closed_form_hold_s(pair, math.pi, 0.01) / math.pi**2
    # 2 % short at most, and 2 % for the quantile of 4,000 records.
    assert found == pytest.approx(1.48, rel=0.04)


def test_a_quiet_pair_stays_half_a_beat():
    """Without diffusion a drift crosses the half-turn band in half a beat."""
    assert closed_form_hold_s(free(0.0), math.pi, 0.01) == pytest.approx(math.pi, rel=1e-9)


def test_a_pair_with_neither_drift_nor_noise_stays_for_ever():
    """No finite hold tells two identical clocks from a locked pair."""
    assert closed_form_hold_s(free(0.0, drift=0.0), math.pi, 0.01) > 1e100


def test_uncertain_detuning_asks_for_a_longer_hold():
    """A pair that may have nearly equal frequencies stays longer than its best guess."""
    sure = required_hold_s(baseline(0.05), EpisodeRules(), record_s=300, step_s=0.1)
    unsure = required_hold_s(baseline(0.05, 0.04), EpisodeRules(), record_s=300, step_s=0.1)
    assert unsure > 1.2 * sure


def test_the_mixture_has_the_stated_mean_probability():
    """With drawn pairs the probability of a longer stay, averaged, is alpha."""
    pair = FreePair(
        detuning_rad_s=np.array([0.5, 1.0, 2.0]),
        noise_rad2_s=np.array([0.05, 0.1, 0.2]),
        record_s=300.0,
        step_s=0.1,
    )
    hold_s = closed_form_hold_s(pair, math.pi, 0.02)
    levels = np.geomspace(1e-12, 1, 4000)[:, None]
    stays = stay_quantile_s(pair, math.pi, levels)
    reached = [levels[np.argmin(np.abs(stays[:, k] - hold_s)), 0] for k in range(3)]
    # Interpolation between the 39 levels of the routine.
    assert np.mean(reached) == pytest.approx(0.02, rel=0.1)


def test_a_resolved_detuning_asks_for_its_beats():
    """A drifting coupled pair dwells for most of a beat: never less than three."""
    found = required_hold_s(baseline(0.5, noise=1e-6), EpisodeRules(), record_s=100, step_s=0.1)
    assert found == pytest.approx(6.0)


def test_more_orders_tried_ask_for_a_longer_hold():
    """Each order looked at is another chance for a false lock."""
    rules = EpisodeRules(hold_beats=0.1)
    one, ten = (
        required_hold_s(baseline(), rules, record_s=100, step_s=0.1, orders_tried=k)
        for k in (1, 10)
    )
    assert ten > one


@pytest.mark.parametrize("size", [1, 2, 7, 64, 333])
def test_the_longest_stay_equals_that_of_an_exact_search(rng, size):
    """Doubling up and down against every window."""
    psi = np.cumsum(rng.normal(0.05, 0.4, size))
    exact = max(
        b - a for a in range(size) for b in range(a, size) if np.ptp(psi[a : b + 1]) < math.pi
    )
    assert longest_stay(psi, math.pi) == exact


def test_an_empty_record_stays_for_nothing():
    """A capture without valid phase must not fail."""
    assert longest_stay(np.zeros(0), math.pi) == 0


def test_a_stated_hold_is_used_as_it_is(psi_tools):
    """What the user states is not bettered."""
    record = psi_tools.difference(np.zeros(1000), 10.0)
    found = choose_hold(record, (), EpisodeRules(hold_s=7.0), baseline=baseline())
    assert (found.hold_s, found.reason) == (7.0, "stated")
    assert found.needed_s is not None


def test_a_hold_longer_than_the_record_is_cut_and_said(psi_tools):
    """The plateau rule is powerless there; the other tests of lock remain."""
    record = psi_tools.difference(np.zeros(1001), 10.0)
    found = choose_hold(record, (), EpisodeRules(), baseline=baseline(0.005))
    assert found.hold_s == pytest.approx(50.0)
    assert found.needed_s > 500
    assert "half the record" in found.reason


def test_without_captures_a_drifting_record_sets_its_own_hold(psi_tools):
    """A pair that drifts cannot stay for three of its own beats."""
    psi = TURN * 0.2 * np.arange(0, 100, 0.1)
    record = psi_tools.difference(psi, 10.0)
    found = choose_hold(record, find_slips(record), EpisodeRules())
    assert found.hold_s == pytest.approx(15.0, rel=0.01)
    assert found.needed_s is None


def test_without_captures_and_slips_five_cycles_are_the_least(psi_tools):
    """Fewer cycles hold fewer independent phases."""
    record = psi_tools.difference(np.zeros(1000), 10.0, hz=(2.0, 1.0))
    assert choose_hold(record, (), EpisodeRules()).hold_s == pytest.approx(5.0)


def test_diffusion_known_only_by_its_bound_counts_as_the_bound():
    """More diffusion than there is asks for a longer hold, never a shorter one here."""
    bound = undetermined("rad2/s", "too quiet to tell", high=0.02)
    known = Baseline(detuning_hz=baseline().detuning_hz, noise_rad2_s=bound, source="test")
    assert noise_of(known) == (0.02, 0.0)
