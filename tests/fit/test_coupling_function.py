"""The coupling function without a model: order, curve and bands."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.coupling_function import coupling_function, fit_harmonics
from fit.records import PsiSeries
from rig.errors import FitError

STEP_S = 0.1


def drift(psi):
    """The truth of the tests: two harmonics and a constant, rad/s."""
    return 2.0 - np.sin(psi - 0.7) - 0.3 * np.sin(2.0 * psi + 0.4)


def simulated(rng, law, *, count=1500, diffusion=0.01, noise=0.05, start=0.0):
    """Return a series of psi by small Euler steps."""
    dt = STEP_S / 5
    psi, seen = start, np.empty(count)
    kicks = math.sqrt(2.0 * diffusion * dt) * rng.standard_normal((count, 5))
    for sample in range(count):
        seen[sample] = psi
        for kick in kicks[sample]:
            psi += dt * float(law(psi)) + kick
    seen += noise * rng.standard_normal(count)
    return PsiSeries(step_s=STEP_S, segments=(seen,), start_s=(0.0,))


def test_two_harmonics_are_chosen_and_the_curve_comes_back():
    """Neither fewer nor more harmonics than there are."""
    found = coupling_function(
        simulated(np.random.default_rng(1), drift), rng=np.random.default_rng(2)
    )
    assert found.order == 2
    assert len(found.criteria) == 5
    truth = drift(found.phase_rad)
    assert np.max(np.abs(found.value_rad_s - truth)) < 0.2
    assert np.all((found.low_rad_s < truth) & (truth < found.high_rad_s))


def test_bands_cover_the_whole_curve_as_often_as_they_say():
    """Simultaneous bands: of 12 records at least 9 covered throughout (chance of fewer 0.2 %)."""
    covered = []
    for seed in range(12):
        rng = np.random.default_rng(100 + seed)
        found = coupling_function(simulated(rng, drift, count=400), rng=rng, highest=3)
        truth = drift(found.phase_rad)
        covered.append(bool(np.all((found.low_rad_s < truth) & (truth < found.high_rad_s))))
    assert sum(covered) >= 9


def test_a_pure_sine_keeps_one_harmonic():
    """The criterion does not pay for what is not there."""
    law = lambda psi: 1.5 - np.sin(psi)  # noqa: E731 - a one-line truth reads best so
    found = coupling_function(
        simulated(np.random.default_rng(3), law), rng=np.random.default_rng(4)
    )
    assert found.order == 1


def test_strong_injection_shows_as_harmonics():
    """A pair that obeys Paciorek's law, not the sine law: the fit must show structure."""

    def law(psi):
        return 1.5 * 1.1547 - np.sin(psi) / (1.0 + 0.5 * np.cos(psi))

    record = simulated(np.random.default_rng(5), law, diffusion=0.002, noise=0.01)
    found = coupling_function(record, rng=np.random.default_rng(6))
    assert found.order >= 2
    assert np.max(np.abs(found.value_rad_s - law(found.phase_rad))) < 0.1


def test_drawn_bands_repeat_with_the_seed():
    """The draws come from the generator given."""
    record = simulated(np.random.default_rng(7), drift, count=400)
    one, other = (coupling_function(record, rng=np.random.default_rng(8)) for _ in range(2))
    assert np.array_equal(one.high_rad_s, other.high_rad_s)


def test_a_pair_that_stays_in_place_has_no_curve():
    """psi must go round to show the whole function."""
    record = simulated(np.random.default_rng(9), lambda psi: 0.3 - np.sin(psi), count=300)
    with pytest.raises(FitError, match="go round"):
        coupling_function(record, rng=np.random.default_rng(1))


def test_a_step_too_long_is_refused_as_missing():
    """Parameters beyond the sampling give no fit instead of a wrong one."""
    record = PsiSeries(step_s=5.0, segments=(np.arange(100.0),), start_s=(0.0,))
    theta = np.array([40.0, 1.0, 0.0, -3.0, -6.0])
    assert fit_harmonics([record], [theta], 1) == [None]
