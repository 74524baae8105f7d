"""Adequacy: each test fires on what it is made for, and what follows is put on the estimate."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from fit.adequacy import examine_estimates, squared_amplitudes
from fit.adequacy_tests import ADEQUACY, WANDER_THRESHOLD
from fit.adler import AdlerSettings, estimate_adler
from fit.drift_trace import trace_records
from fit.likelihood import lane_likelihood, make_lanes
from fit.records import PsiSeries
from rig.quantities import undetermined

STEP_S = 0.1
PLAIN = AdlerSettings(intervals=False)


def simulated(
    rng,
    *,
    count=1000,
    detuning=1.5,
    diffusion=0.03,
    noise=0.05,
    second=0.0,
    time_constant=0.0,
    drift=0.0,
    extra=None,
):
    """Return psi by small Euler steps of the equation with what it may lack; K = 1 rad/s."""
    parts = 20 if time_constant else 6
    dt = STEP_S / parts
    psi, speed, seen = 0.0, 0.0, np.empty(count)
    kicks = math.sqrt(2.0 * diffusion * dt) * rng.standard_normal((count, parts))
    for sample in range(count):
        seen[sample] = psi
        more = drift * sample * STEP_S + (0.0 if extra is None else extra[sample])
        for kick in kicks[sample]:
            pull = detuning + more - math.sin(psi - 0.7) - second * math.sin(2.0 * psi)
            if time_constant:
                speed += (dt * (pull - speed) + kick) / time_constant
                psi += dt * speed
            else:
                psi += dt * pull + kick
    return seen + noise * rng.standard_normal(count)


def series(psi, step_s=STEP_S):
    """Return psi as a series of one segment."""
    return PsiSeries(step_s=step_s, segments=(psi,), start_s=(0.0,))


def examined(psi, **more):
    """Return the examined estimate of one record."""
    record = series(psi)
    return examine_estimates([record], estimate_adler([record], settings=PLAIN), **more)[0]


def outcome(estimate, name):
    """Return the test of that name."""
    return next(test for test in estimate.tests if test.name == name)


def test_a_record_that_obeys_the_equation_is_adequate():
    """The common case: every test is there, none fires, nothing is noted."""
    found = examined(simulated(np.random.default_rng(1)))
    assert found.adequate is True
    assert {test.name for test in found.tests} == set(ADEQUACY) - {"amplitude dependence"}
    assert all(test.size == 0.01 for test in found.tests)
    assert not any("not adequate" in note for note in found.notes)


def test_a_second_harmonic_is_found_with_its_size():
    """In- and anti-phase bistability shows as sin 2 psi: its amplitude comes out."""
    found = examined(simulated(np.random.default_rng(2), second=0.4))
    test = outcome(found, "second harmonic")
    assert test.fired
    assert found.adequate is False
    truth = 0.4 / (2.0 * math.pi)
    assert test.effect.value == pytest.approx(truth, abs=4.0 * test.effect.u)
    assert test.effect.u < 0.15 * truth
    assert any("second harmonic" in note for note in found.notes)


def test_a_time_constant_is_found_and_corrects_the_coupling():
    """In lock, a time constant of a tenth of 1/K halves the plain coupling; the note says so."""
    rng = np.random.default_rng(3)
    psi = simulated(rng, detuning=0.5, time_constant=0.15, noise=0.01)
    test = outcome(examined(psi), "inertia")
    assert test.fired
    assert math.log(test.effect.value / 0.15) == pytest.approx(0.0, abs=0.5)
    assert test.effect.low < 0.15 < test.effect.high
    assert "with it the coupling is" in test.meaning


def test_a_drifting_detuning_is_found():
    """A warming oscillator: 0.4 rad/s over the record of 100 s."""
    found = examined(simulated(np.random.default_rng(4), drift=0.004))
    test = outcome(found, "wander of the detuning")
    assert test.fired
    assert test.statistic > WANDER_THRESHOLD
    assert test.effect.value > 0.01


def test_dependence_on_amplitude_is_found_when_amplitudes_are_known():
    """A frequency that follows a decaying amplitude; without amplitudes it is not asked."""
    rng = np.random.default_rng(5)
    amplitude = 2.5 * np.exp(-np.arange(1000) / 400.0) - 1.0
    psi = simulated(rng, extra=0.2 * amplitude)
    test = outcome(examined(psi, amplitudes=[(amplitude,)]), "amplitude dependence")
    assert test.fired
    assert test.effect.value * 2.0 * math.pi == pytest.approx(0.2, abs=4 * test.effect.u * math.tau)


def test_results_do_not_depend_on_company():
    """A record gives the same tests alone and among others."""
    rng = np.random.default_rng(6)
    records = [series(simulated(rng, count=count)) for count in (400, 700)]
    estimates = estimate_adler(records, settings=PLAIN)
    together = examine_estimates(records, estimates)
    alone = [
        examine_estimates([record], [estimate])[0]
        for record, estimate in zip(records, estimates, strict=True)
    ]
    for one, other in zip(together, alone, strict=True):
        assert [test.fired for test in one.tests] == [test.fired for test in other.tests]
        assert [test.statistic for test in one.tests] == pytest.approx(
            [test.statistic for test in other.tests], rel=1e-9, abs=1e-9
        )


def test_a_steady_lock_is_not_called_adequate():
    """Where harmonics cannot show, silence is no proof."""
    found = examined(simulated(np.random.default_rng(7), detuning=0.3, diffusion=0.005))
    assert found.coupling_hz.value is None
    assert found.adequate is None
    assert any("steady lock" in note for note in found.notes)


@pytest.mark.parametrize(
    "psi",
    [np.zeros(200), np.linspace(0.0, 1.0, 8), np.full(50, 1e-3)],
    ids=["still", "short", "flat"],
)
def test_records_without_a_fit_stay_untested(psi):
    """Nothing to test: no traceback, no judgement."""
    found = examined(psi)
    assert found.adequate is None
    assert found.tests == ()


def test_derivatives_of_the_prediction_match_differences(rng):
    """The columns against a filter run with a slightly different drift."""
    record = series(simulated(rng, count=80))
    theta = np.array([1.5, 0.6, -0.7, math.log(0.03), math.log(0.0025)])
    base = trace_records([record], [theta])[0]
    for column in range(3):
        moved = theta.copy()
        moved[column] += 1e-5
        ahead = trace_records([record], [moved])[0]
        slope = -(ahead.innovation - base.innovation) / 1e-5
        # The variance is held in the columns, which leaves out some per cent.
        assert np.corrcoef(slope, base.columns[:, column])[0, 1] > 0.995
        assert np.max(np.abs(slope - base.columns[:, column])) < 0.1 * np.max(np.abs(slope))


def test_trace_has_the_innovations_of_the_likelihood(rng):
    """Two filters, one likelihood: lanes of the same length give the same sum."""
    record = series(simulated(rng, count=100))
    theta = np.array([1.5, 0.6, -0.7, math.log(0.03), math.log(0.0025)])
    trace = trace_records([record], [theta])[0]
    terms = np.log(2.0 * math.pi * trace.variance) + trace.innovation**2 / trace.variance
    batch, _ = make_lanes([record], 200)
    expected = lane_likelihood(batch, theta[None]).loglik[0]
    assert -0.5 * terms.sum() == pytest.approx(expected, rel=1e-6)


def test_amplitudes_are_taken_at_the_samples_of_the_series(psi_tools, rng):
    """The course squared, over the mean, less one, at the right times; noise is left out."""
    squared = np.linspace(1.0, 2.0, 200)
    track = psi_tools.track(np.linspace(0.0, 60.0, 200), 10.0, amplitude=np.sqrt(squared))
    found = squared_amplitudes(track, series(np.zeros(50), 0.2))
    assert found[0] == pytest.approx(squared[:100:2] / squared.mean() - 1.0, abs=1e-9)


def test_an_amplitude_that_only_fluctuates_is_not_asked_about(psi_tools, rng):
    """The kicks that move it move the phase too."""
    amplitude = 1.0 + 0.05 * rng.standard_normal(2000)
    track = psi_tools.track(np.linspace(0.0, 600.0, 2000), 10.0, amplitude=amplitude)
    assert squared_amplitudes(track, series(np.zeros(50), 0.2)) is None


def test_an_estimate_without_noise_strength_is_fitted_again():
    """A record whose diffusion is hidden still gets its tests."""
    record = series(simulated(np.random.default_rng(8)))
    estimate = estimate_adler([record], settings=PLAIN)[0]
    hidden = replace(estimate, noise_rad2_s=undetermined("rad^2/s", "hidden"))
    assert len(examine_estimates([record], [hidden])[0].tests) >= 4
