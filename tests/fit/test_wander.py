"""Batch means: silent under white noise, loud when the frequency wanders."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.records import PsiSeries
from fit.wander import find_wander

THETA = np.array([2.0, 0.0, 0.0, math.log(0.01), math.log(1e-6)])


def free(rng: np.random.Generator, samples: int = 2000, wander: float = 0.0) -> PsiSeries:
    """A free pair at 2 rad/s with D = 0.01, and a slow swing of its frequency."""
    step = 0.1
    rate = 2.0 + wander * np.sin(2.0 * math.pi * np.arange(samples) / samples)
    psi = np.cumsum(rate * step + math.sqrt(0.02 * step) * rng.standard_normal(samples))
    return PsiSeries(step_s=step, segments=(psi,), start_s=(0.0,))


def test_white_noise_is_called_wander_at_the_stated_rate(rng):
    """A test that fires too often would widen errors that were right."""
    fired = sum(find_wander(free(rng), THETA).fired for _ in range(400))
    # 1 % of 400: fewer than 14 at p < 0.0001.
    assert fired < 14


def test_a_swing_is_found_and_its_size_told(rng):
    """Amplitude 0.1 rad/s of a sine has a standard deviation of 0.071 rad/s."""
    found = find_wander(free(rng, wander=0.1), THETA)
    assert found.fired
    assert found.spread_rad_s == pytest.approx(0.071, abs=0.02)
    assert found.mean_u_rad_s > math.sqrt(2.0 * 0.01 / 200.0)


def test_short_records_are_not_tested(rng):
    """Ten batches of less than eight samples say nothing."""
    assert find_wander(free(rng, samples=60), THETA) is None
