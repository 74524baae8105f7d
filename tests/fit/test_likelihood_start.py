"""Starting values: near the truth where they claim to be, and always at least one."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.likelihood_start import (
    net_turns,
    relaxation,
    start_candidates,
    steady_start,
    weak_form,
)
from fit.models import PhaseEquation, trajectory
from fit.records import PsiSeries


def clean(dw: float, step: float = 0.1, samples: int = 600) -> PsiSeries:
    """A record without any noise: K = 1, psi0 = 0.3."""
    equation = PhaseEquation(detuning_rad_s=dw, coupling_rad_s=1.0, offset_rad=0.3)
    psi = trajectory(equation, 1.0, step * np.arange(samples))
    return PsiSeries(step_s=step, segments=(psi,), start_s=(0.0,))


@pytest.mark.parametrize("lag", [1, 4])
def test_weak_form_has_no_bias_by_the_lag(lag):
    """Regression of increments turns the offset by half a step; integrals do not."""
    dw, a, b = weak_form(clean(1.5), lag)
    # Trapezoids over a step of 0.1 are good to 1e-3.
    assert dw == pytest.approx(1.5, abs=3e-3)
    assert math.hypot(a, b) == pytest.approx(1.0, abs=3e-3)
    assert math.atan2(a, -b) == pytest.approx(0.3, abs=3e-3)


def test_weak_form_survives_measurement_noise(rng):
    """The instruments are older than the increment: noise only widens the result."""
    record = clean(1.5, samples=4000)
    noisy = record.segments[0] + 0.1 * rng.standard_normal(4000)
    found = weak_form(PsiSeries(step_s=0.1, segments=(noisy,), start_s=(0.0,)), 4)
    assert math.hypot(found[1], found[2]) == pytest.approx(1.0, abs=0.1)


def test_segments_are_not_joined(rng):
    """A jump of psi over a gap must not enter any increment."""
    psi = clean(1.5).segments[0]
    parts = (psi[:300], psi[310:] + 50.0 * math.tau)
    found = weak_form(PsiSeries(step_s=0.1, segments=parts, start_s=(0.0, 31.0)), 1)
    assert found[0] == pytest.approx(1.5, abs=5e-3)
    assert net_turns(PsiSeries(step_s=0.1, segments=(psi, psi), start_s=(0.0, 100.0))) == (
        pytest.approx(2.0 * (psi[-1] - psi[0]) / math.tau)
    )


def test_relaxation_of_a_correlated_process(rng):
    """Rate, D and R of a locked pair's start come from three autocovariances."""
    rate, step, size = 0.8, 0.2, 40000
    factor = math.exp(-rate * step)
    shocks = math.sqrt(0.03 / rate * (1.0 - factor**2)) * rng.standard_normal(size)
    psi = np.zeros(size)
    for index in range(1, size):
        psi[index] = factor * psi[index - 1] + shocks[index]
    found = relaxation(psi + 0.1 * rng.standard_normal(size), step)
    assert found == pytest.approx((rate, 0.03, 0.01), rel=0.15)


@pytest.mark.parametrize(
    "psi",
    [np.linspace(0.0, 1e9, 50), np.zeros(50) + 1e-12 * np.arange(50), np.tile([0.0, 3.1], 25)],
    ids=["too fast", "almost still", "flip-flop"],
)
def test_every_record_has_a_finite_start(psi):
    """The search needs a point to begin at, or to refuse."""
    record = PsiSeries(step_s=0.1, segments=(psi,), start_s=(0.0,))
    points = np.vstack([start_candidates(record), steady_start(record)])
    assert points.shape[1] == 5
    assert np.all(np.isfinite(points))
