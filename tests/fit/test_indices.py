"""Indices of synchronisation beside what free pairs show, and surrogates with their warning."""

from __future__ import annotations

import math
import re

import numpy as np
import pytest

from fit.difference import Order, form_difference
from fit.indices import sync_indices
from fit.records import Baseline
from fit.surrogates import (
    FALSE_ALARMS,
    SURROGATES,
    make_surrogate,
    shift_time,
    shuffle_cycles,
    surrogate_p,
)
from rig.errors import FitError
from rig.quantities import Quantity

TURN = 2 * math.pi
TIME = np.arange(0, 100, 0.05)


def indices(tools, psi_rad, rng, baseline=None, order=(1, 1)):
    """Return the indices by name for a pair with this psi about a reference of 5 Hz."""
    n, m = order
    reference = tools.track(TURN * 5 * TIME, 20.0, "reference")
    driven = tools.track((m * TURN * 5 * TIME + psi_rad) / n, 20.0, "driven")
    difference = form_difference(driven, reference, Order(n=n, m=m))
    found = sync_indices(difference, driven, reference, baseline=baseline, rng=rng)
    return {index.name: index for index in found}


def known(hz, noise):
    """Free-running captures that said this."""
    return Baseline(
        detuning_hz=Quantity(value=hz, u=1e-4, unit="Hz"),
        noise_rad2_s=Quantity(value=noise, u=noise / 5, unit="rad2/s"),
        source="test",
    )


MAIN = ("resultant length", "entropy index", "conditional-probability index")


@pytest.mark.parametrize("order", [(1, 1), (2, 3)])
def test_a_lock_has_indices_near_one_that_free_pairs_never_reach(psi_tools, rng, order):
    """All three say the same of a lock, with p at the least that 199 pairs allow."""
    psi = 0.1 * rng.standard_normal(TIME.size)
    found = indices(psi_tools, psi, rng, known(0.3, 0.05), order)
    for name in MAIN:
        assert found[name].value > 0.7
        assert found[name].p_value == pytest.approx(1 / 200)
        assert found[name].expected_free < 0.3


def test_a_short_quiet_free_pair_has_a_high_index_that_means_nothing(psi_tools, rng):
    """Index near 1 and p near 1/2: the expectation beside it tells them apart."""
    psi = psi_tools.free_psi(rng, drift_rad_s=0.0, noise_rad2_s=1e-4, step_s=0.05, count=TIME.size)
    found = indices(psi_tools, psi, rng, known(0.0, 1e-4))["resultant length"]
    assert found.value > 0.95
    assert found.expected_free > 0.95
    assert found.p_value > 0.01


def test_without_captures_the_note_says_what_is_assumed(psi_tools, rng):
    """A p-value by assumption must be known as one."""
    found = indices(psi_tools, 0.1 * rng.standard_normal(TIME.size), rng)
    for name in MAIN:
        assert found[name].note == "against 199 simulated free pairs; assumes free spread"


def test_surrogates_state_count_and_false_alarms(psi_tools, rng):
    """They stand beside the null that holds its level, with their own rate said."""
    found = indices(psi_tools, 0.1 * rng.standard_normal(TIME.size), rng)
    for name in SURROGATES:
        note = found[f"resultant length, {name}"].note
        assert note.startswith(f"19 {name} surrogates, seeded")
        assert f"{100 * FALSE_ALARMS[name][1]:.0f} % of uncoupled pairs" in note


def test_the_same_seed_gives_the_same_indices(psi_tools):
    """A report must come out the same twice."""
    psi = 0.1 * np.sin(TIME)
    first, second = (indices(psi_tools, psi, np.random.default_rng(7)) for _ in range(2))
    assert first == second


def test_a_record_without_samples_has_no_indices(psi_tools, rng):
    """Too short is not an error."""
    track = psi_tools.track(np.arange(5.0), 20.0)
    difference = form_difference(track, track, Order())
    assert sync_indices(difference, track, track, baseline=None, rng=rng) == ()


def test_gaps_are_left_out(psi_tools, rng):
    """NaN in a gap must not reach an index."""
    psi = 0.1 * rng.standard_normal(TIME.size)
    psi[300:360] = np.nan
    assert all(math.isfinite(part.value) for part in indices(psi_tools, psi, rng).values())


def test_a_shifted_phase_keeps_its_motion(rng):
    """Only where it begins changes; the join continues by the mean step."""
    phase = TURN * TIME + 0.3 * np.sin(TIME)
    steps = np.sort(np.diff(shift_time(phase, rng)))
    kept = np.sort(np.diff(phase))
    # All steps but the one at the join are the old ones.
    assert np.sum(np.abs(steps - kept) > 1e-9) <= 3 or np.abs(steps - kept).max() < 1e-3


def test_shuffled_cycles_keep_their_durations(rng):
    """The distribution of cycle times is kept, their order is not."""
    phase = np.cumsum(rng.uniform(0.25, 0.35, 4000))
    shuffled = shuffle_cycles(phase, rng)

    def cycles(values):
        marks = np.arange(values[0] + TURN, values[-1] - TURN, TURN)
        return np.diff(np.interp(marks, values, np.arange(values.size)))

    there, here = cycles(phase), cycles(shuffled)
    assert np.all(np.diff(shuffled) >= 0)
    # Marks fall between samples: a hundredth of a cycle of twenty samples.
    np.testing.assert_allclose(np.sort(here)[5:-5], np.sort(there)[5:-5], atol=0.2)
    assert not np.allclose(here, there, atol=0.05)


def test_an_unknown_surrogate_is_refused_with_the_known_ones():
    """A silent fallback would give a p-value of something else."""
    with pytest.raises(FitError, match=re.escape("known: time-shifted, cycle-shuffled, phase")):
        make_surrogate("bootstrapped")


@pytest.mark.long
@pytest.mark.parametrize("name", list(SURROGATES))
def test_stated_false_alarms_of_surrogates_are_those_measured(rng, name):
    """Equal quiet frequencies, the hardest case for shuffled cycles, and a noisy pair."""
    rates = []
    for diffusion, sigma in ((0.01, 0.02), (10.0, 0.05)):
        count = sum(
            surrogate_p(_free_phases(rng, diffusion, sigma), (1, 1), name, count=19, rng=rng)[0]
            <= 0.05
            for _ in range(300)
        )
        rates.append(count / 300)
    low, high = FALSE_ALARMS[name]
    # Four standard errors of 300 trials at the rate stated.
    assert min(rates) >= low - 0.05
    assert max(rates) <= high + 4 * math.sqrt(max(high * (1 - high), 0.05) / 300)


def _free_phases(rng, diffusion, sigma):
    """Two free oscillators of equal frequency over 200 cycles of four samples."""
    steps = math.sqrt(diffusion / 800) * rng.standard_normal((2, 800))
    clean = TURN * np.arange(800) / 4 + np.cumsum(steps, axis=1)
    return tuple(clean + sigma * rng.standard_normal(clean.shape))
