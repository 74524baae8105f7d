"""Detuning and coupling by mean rate and resultant length of whole beats."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.models import PhaseEquation, trajectory
from fit.records import PsiSeries
from fit.two_number import two_number_check


def record(dw: float, span_s: float, step_s: float = 0.01, noise: float = 0.0) -> PsiSeries:
    """A pair without phase noise: K = 1, any start."""
    equation = PhaseEquation(detuning_rad_s=dw, coupling_rad_s=1.0, offset_rad=0.4)
    psi = trajectory(equation, 2.0, np.arange(0.0, span_s, step_s))
    seen = psi + noise * np.random.default_rng(3).standard_normal(psi.size)
    return PsiSeries(step_s=step_s, segments=(seen,), start_s=(0.0,))


@pytest.mark.parametrize("dw", [1.25, -1.25, 4.0, 1.01])
def test_clean_records_give_both_numbers(dw):
    """The sign of the detuning is that of the drift; the coupling has none."""
    found = dict(two_number_check(record(dw, 400.0), 0.0, 0.0))
    # Trapezoids at 0.01 and the last part of a beat left out.
    detuning = found["detuning by rate and resultant"].value * math.tau
    assert detuning == pytest.approx(dw, rel=1e-4)
    coupling = found["coupling by rate and resultant"].value * math.tau
    assert coupling == pytest.approx(1.0, rel=1e-3)


def test_measurement_noise_is_undone():
    """Noise of the sensors shortens the resultant as a weaker coupling would."""
    found = dict(two_number_check(record(1.5, 600.0, noise=0.3), 0.0, 0.3))
    quantity = found["coupling by rate and resultant"]
    assert quantity.value * math.tau == pytest.approx(1.0, abs=0.02)


def test_few_beats_give_nothing():
    """With fewer than five beats neither number is known."""
    assert two_number_check(record(1.25, 30.0), 0.0, 0.0) == ()


def test_segments_are_taken_apart():
    """A gap must not count as a part of a beat."""
    psi = record(1.25, 400.0).segments[0]
    parts = PsiSeries(
        step_s=0.01, segments=(psi[:19000], psi[19400:] + 3.0 * math.tau), start_s=(0.0, 194.0)
    )
    found = dict(two_number_check(parts, 0.0, 0.0))
    detuning = found["detuning by rate and resultant"].value * math.tau
    assert detuning == pytest.approx(1.25, rel=1e-3)
