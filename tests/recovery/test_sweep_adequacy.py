"""Strong drive makes the two sides of a region unequal: size and power of that test (reduced).

False alarms over 400 sweeps: bench/coverage_region.md, 4 (1 %).
"""

from __future__ import annotations

import numpy as np
import pytest

from fit.difference import Order
from fit.region import RegionRules, fit_region

RULES = RegionRules(order=Order())
CENTRE, POINTS, REACH = 0.07, 15, 1.8


def fired(sweeps, seed: int, slope: float) -> bool:
    """Whether a sweep whose coupling is 1 + slope * detuning shows unequal sides."""
    detuning = CENTRE - np.linspace(-REACH, REACH, POINTS)
    points = sweeps.sweep(
        np.random.default_rng(seed),
        centre=CENTRE,
        points=POINTS,
        reach=REACH,
        pull=lambda psi: -(1.0 + slope * detuning) * np.sin(psi - 0.7),
    )
    tests = {test.name: test for test in fit_region(points, RULES).tests}
    return tests["coupling equal on the two sides"].fired


@pytest.mark.parametrize(("slope", "low", "high"), [(0.0, 0, 1), (0.1, 7, 8), (-0.1, 7, 8)])
def test_unequal_sides_are_found_and_equal_ones_are_not(sweeps, slope, low, high):
    """At 10 % a coupling width the edges differ by a fifth: a drive of a quarter amplitude."""
    assert low <= sum(fired(sweeps, seed, slope) for seed in range(8)) <= high
