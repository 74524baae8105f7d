"""Hysteresis by inertia: the lower edge of the region, and when there is none."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.relock import NO_HYSTERESIS, relock_ratio
from rig.errors import FitError


@pytest.mark.parametrize(
    ("inertia", "printed"),
    [
        (100.0, 0.127008859803),
        (25.0, 0.252128244467),
        (10.0, 0.392682871201),
        (4.0, 0.597383200311),
        (2.0, 0.789864588741),
        (1.0, 0.964327124467),
    ],
)
def test_lower_edge_of_the_hysteresis(inertia, printed):
    """Retrapping of a junction with capacitance is relocking of a pair with inertia."""
    # Source: Stewart 1968, Appl. Phys. Lett. 12, 277; McCumber 1968, J. Appl. Phys. 39, 3113.
    # Read: law recalled; values by homoclinic shooting, 1e-11.
    # Printed: 0.127008859803 (100), 0.252128244467 (25), 0.392682871201 (10),
    #   0.597383200311 (4), 0.789864588741 (2), 0.964327124467 (1).
    # Converted: beta_c = tau K, i_r = |dw|/K.
    # Tolerance: the start next to the unstable angle leaves a few 1e-9.
    assert relock_ratio(inertia, 1.0) == pytest.approx(printed, abs=2e-8)


def test_large_inertia_follows_the_asymptote():
    """4/(pi sqrt(tau K)), 0.25 % above the exact value at tau K = 100."""
    # Source: Tinkham, Introduction to Superconductivity, section 6.3.
    # Read: via code that cites it.
    # Printed: 4 Ic/(pi Q).
    # Converted: Q^2 = tau K.
    # Tolerance: relative distance -0.2475/(tau K) of the exact value.
    exact = relock_ratio(1e3, 1.0)
    asymptote = 4.0 / (math.pi * math.sqrt(1e3))
    assert exact / asymptote - 1.0 == pytest.approx(-0.2475e-3, rel=0.05)
    assert relock_ratio(2e4, 1.0) == pytest.approx(4.0 / (math.pi * math.sqrt(2e4)), rel=1e-12)


def test_no_hysteresis_below_the_known_inertia():
    """Small time constants leave one edge: claims of hysteresis need another cause."""
    # Source: Strogatz, Nonlinear Dynamics and Chaos, section 8.5; Urabe 1955.
    # Read: recalled; recomputed to 1e-10.
    # Printed: alpha_c = 1.193046, so beta_c = 0.702564.
    # Converted: tau K = 1/alpha_c^2.
    # Tolerance: half a unit of the last printed digit.
    assert pytest.approx(1.193046**-2, abs=6e-7) == NO_HYSTERESIS
    assert relock_ratio(0.7, 1.0) == 1.0
    assert 0.99 < relock_ratio(0.8, 1.0) < 1.0


@pytest.mark.parametrize(("detuning", "runs"), [(0.57, False), (0.62, True)])
def test_direct_simulation_agrees(detuning, runs):
    """A running pair slowed down to either side of the edge at tau K = 4 (0.5974)."""
    psi, speed, dt = 0.0, 2.0, 0.002
    for _ in range(200_000):
        speed += dt * (detuning - math.sin(psi) - speed) / 4.0
        psi += dt * speed
    assert (speed > 0.05) is runs
    assert np.isfinite(psi)


@pytest.mark.parametrize("bad", [(-1.0, 1.0), (1.0, 0.0), (math.nan, 1.0)])
def test_values_outside_their_range_are_refused(bad):
    """One line, no search."""
    with pytest.raises(FitError, match="relocking needs"):
        relock_ratio(*bad)
