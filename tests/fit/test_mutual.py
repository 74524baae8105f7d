"""Couplings of a mutual pair from both phases: size, lag, direction, and when there is none."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.difference import Order
from fit.mutual import estimate_mutual
from fit.pull_ratio import pull_ratio
from fit.records import PsiSeries

STEP_S = 0.1


def simulated(
    tools, rng, *, apart=1.5, on_driven=0.7, on_reference=0.3, count=800, noise=0.1, order=(1, 1)
):
    """Return (reference, driven) tracks and psi of two pulled phases, by small Euler steps."""
    n, m = order
    dt = STEP_S / 5
    phases, seen = np.zeros(2), np.empty((2, count))
    kicks = rng.standard_normal((count, 5, 2)) * np.sqrt(2.0 * np.array([0.01, 0.02]) * dt)
    for sample in range(count):
        seen[:, sample] = phases
        for kick in kicks[sample]:
            psi = n * phases[1] - m * phases[0]
            rate_r = 6.0 + on_reference * math.sin(psi + 0.2)
            rate_d = (6.0 * m + apart) / n - on_driven * math.sin(psi - 0.3)
            phases = phases + dt * np.array([rate_r, rate_d]) + kick
    seen += noise * rng.standard_normal(seen.shape)
    psi = PsiSeries(step_s=STEP_S, segments=(n * seen[1] - m * seen[0],), start_s=(0.0,))
    return tools.track(seen[0], 10.0, "r"), tools.track(seen[1], 10.0, "d"), psi


def test_both_couplings_and_lags_come_back_with_honest_errors(psi_tools):
    """Measurement noise of 0.1 rad biases regressions; here the scores have unit spread."""
    scores = []
    for seed in range(10):
        reference, driven, psi = simulated(psi_tools, np.random.default_rng(seed), count=600)
        found = estimate_mutual(reference, driven, Order(), psi)
        for quantity, truth in (
            (found.on_driven_hz, 0.7 / math.tau),
            (found.on_reference_hz, 0.3 / math.tau),
            (found.lag_driven_rad, 0.3),
            (found.lag_reference_rad, -0.2),
            (found.direction, 0.4),
        ):
            scores.append((quantity.value - truth) / quantity.u)
    spread = np.array(scores).reshape(10, 5)
    # 50 scores, partly dependent: standard deviation 1 within four of its errors.
    assert np.std(spread) == pytest.approx(1.0, abs=0.4)
    assert np.max(np.abs(spread)) < 4.5


@pytest.mark.parametrize("seed", [0, 1, 2])
def test_a_recorder_without_noise_does_not_keep_the_fit_from_settling(psi_tools, seed):
    """Good recorders add less than can be seen; the fit then climbed without end."""
    reference, driven, psi = simulated(psi_tools, np.random.default_rng(seed), noise=1e-4)
    found = estimate_mutual(reference, driven, Order(), psi)
    for quantity, truth in ((found.on_driven_hz, 0.7), (found.on_reference_hz, 0.3)):
        assert quantity.value == pytest.approx(truth / math.tau, abs=4.5 * quantity.u)


def test_one_way_coupling_has_direction_one_and_a_bound(psi_tools):
    """A length is never negative: no pull on the reference is a bound, not a small number."""
    reference, driven, psi = simulated(psi_tools, np.random.default_rng(50), on_reference=0.0)
    found = estimate_mutual(reference, driven, Order(), psi)
    assert found.direction.value > 0.85
    assert found.on_reference_hz.value is None
    assert "not told apart from zero" in found.on_reference_hz.reason
    assert 0.0 < found.on_reference_hz.high < 0.2 / math.tau


def test_swapping_the_channels_turns_the_direction_round(psi_tools):
    """The roles only name the two; what is pulled stays the same."""
    reference, driven, psi = simulated(psi_tools, np.random.default_rng(51))
    swapped = PsiSeries(step_s=STEP_S, segments=(-psi.segments[0],), start_s=(0.0,))
    one = estimate_mutual(reference, driven, Order(), psi)
    other = estimate_mutual(driven, reference, Order(), swapped)
    assert other.direction.value == pytest.approx(-one.direction.value, abs=0.01)
    assert other.on_driven_hz.value == pytest.approx(one.on_reference_hz.value, rel=0.02)


def test_higher_orders_keep_each_coupling_in_its_own_phase(psi_tools):
    """1:2 - psi = phi_d - 2 phi_r - with the same pulls."""
    reference, driven, psi = simulated(psi_tools, np.random.default_rng(52), order=(1, 2))
    found = estimate_mutual(reference, driven, Order(n=1, m=2), psi)
    assert found.on_driven_hz.value == pytest.approx(0.7 / math.tau, abs=4 * found.on_driven_hz.u)
    near = found.on_reference_hz
    assert near.value == pytest.approx(0.3 / math.tau, abs=4 * near.u)


def test_a_locked_pair_is_not_separable(psi_tools):
    """In lock only the sum of both pulls shows: no number, and what to do."""
    reference, driven, psi = simulated(psi_tools, np.random.default_rng(53), apart=0.2, noise=0.01)
    found = estimate_mutual(reference, driven, Order(), psi)
    for quantity in (found.on_driven_hz, found.on_reference_hz, found.direction):
        assert quantity.value is None
        assert "not separable" in quantity.reason


def test_too_short_a_record_says_so(psi_tools):
    """Thirty samples."""
    reference, driven, psi = simulated(psi_tools, np.random.default_rng(54), count=30)
    assert "at least 64" in estimate_mutual(reference, driven, Order(), psi).direction.reason


def test_in_lock_free_frequencies_give_the_ratio_of_the_pulls():
    """3.0 and 3.3 Hz alone, locked at 3.1: the driven gave way twice as far."""
    assert pull_ratio(3.0, 3.3, 3.1, Order()) == pytest.approx(0.5)
    assert pull_ratio(3.0, 3.3, 3.3, Order()) is None
