"""Spread of pull-in times by noise: against simulated passages and the weak-noise integral."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.integrate import quad

from fit.models import PhaseEquation
from fit.passage import passage_spread_s
from rig.errors import FitError

STEP_S = 0.01


def pair(dw):
    """K = 1 rad/s, psi0 = 0.4."""
    return PhaseEquation(detuning_rad_s=dw, coupling_rad_s=1.0, offset_rad=0.4)


def simulated_spread_s(rng, dw, noise, away, within, count=1500):
    """Standard deviation of passage times by Euler's rule, which knows no passage theory."""
    rest = math.asin(dw)
    psi, arrived = np.full(count, rest + away), np.full(count, np.nan)
    for step in range(1, 6000):
        psi = psi + STEP_S * (dw - np.sin(psi))
        psi += math.sqrt(2 * noise * STEP_S) * rng.standard_normal(count)
        near = np.abs((psi - rest + math.pi) % math.tau - math.pi) < within
        arrived[near & np.isnan(arrived)] = step * STEP_S
        if not np.isnan(arrived).any():
            break
    return float(np.std(arrived))


@pytest.mark.parametrize(
    ("dw", "noise", "away", "within"),
    [
        (0.0, 0.03, 3.1, 0.52),  # noise decides the side
        (0.0, 1e-3, 3.1, 0.1),
        (0.6, 0.01, 2.2, 0.34),  # just inside the unstable angle
        (0.6, 0.03, -2.0, 0.58),
        (0.95, 0.003, -0.8, 0.29),
        (0.0, 0.01, math.pi, 0.3),  # on the unstable angle, no noise-free time at all
    ],
)
def test_it_is_the_spread_of_simulated_passages(rng, dw, noise, away, within):
    """The acceptance of a pull-in rests on this number: within a tenth."""
    found = passage_spread_s(pair(dw), noise, 0.4 + math.asin(dw) + away, within)
    # 1,500 passages tell their deviation to 2-3 % (their times are skewed); a grid of 0.01 s.
    assert found == pytest.approx(simulated_spread_s(rng, dw, noise, away, within), rel=0.1)


def test_weak_noise_leaves_the_integral_along_the_way():
    """var T = integral of 2 D / |f|^3 over the angle, by quadrature."""
    dw, noise, within = 0.6, 1e-7, 0.1
    rest = math.asin(dw)
    integral, _ = quad(
        lambda psi: 2 * noise / abs(dw - math.sin(psi)) ** 3, rest - 2.0, rest - within
    )
    found = passage_spread_s(pair(dw), noise, 0.4 + rest - 2.0, within)
    # The grid smooths over a fiftieth of the tolerance where f is smallest.
    assert found == pytest.approx(math.sqrt(integral), rel=0.03)


def test_it_grows_with_noise_and_ends_at_the_tolerance():
    """No noise, no spread; a start within the tolerance has no passage."""
    spreads = [passage_spread_s(pair(0.3), noise, 3.0, 0.2) for noise in (0.0, 1e-5, 1e-3, 0.1)]
    assert spreads[0] == 0.0
    assert spreads == sorted(spreads)
    assert passage_spread_s(pair(0.3), 0.01, 0.4 + math.asin(0.3) + 0.1, 0.2) == 0.0


def test_a_whole_turn_of_the_start_changes_nothing():
    """psi comes unwrapped from a record."""
    first, second = (
        passage_spread_s(pair(0.5), 0.01, 2.6 + turn, 0.2) for turn in (0, 7 * math.tau)
    )
    assert first == pytest.approx(second, rel=1e-9)


@pytest.mark.parametrize(
    ("dw", "noise", "within"), [(1.2, 0.01, 0.1), (1.0, 0.01, 0.1), (0.3, -1.0, 0.1), (0.3, 0.1, 0)]
)
def test_what_has_no_passage_is_refused(dw, noise, within):
    """A drifting pair comes to no rest."""
    with pytest.raises(FitError, match="spread of a pull-in needs"):
        passage_spread_s(pair(dw), noise, 1.0, within)
