"""Free oscillators: frequency, drift and diffusion with errors that hold, and the baseline."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.difference import Order
from fit.freerun import estimate_free_run, fit_free_phase, make_baseline, phase_diffusion
from fit.records import FreeRun
from rig.errors import PhaseError
from rig.quantities import Quantity, undetermined


def walk(rng, *, count, step_s, diffusion, noise, rate=3.0, drift=0.0):
    """Return a phase: turning, drifting, diffusing, seen through white noise."""
    time_s = step_s * np.arange(count)
    steps = math.sqrt(2.0 * diffusion * step_s) * rng.standard_normal(count)
    seen = math.sqrt(noise) * rng.standard_normal(count)
    return rate * time_s + 0.5 * drift * time_s**2 + np.cumsum(steps) + seen


def run(role, hz, u=1e-4, **changes):
    """Return the record of a free-running capture."""
    fields = {
        "role": role,
        "frequency_hz": Quantity(value=hz, u=u, unit="Hz"),
        "drift_hz_s": Quantity(value=0.0, u=1e-5, unit="Hz/s"),
        "noise_rad2_s": Quantity(value=0.02, u=0.002, unit="rad2/s"),
        "duration_s": 100.0,
    }
    return FreeRun(**(fields | changes))


@pytest.mark.parametrize(("noise", "seed"), [(0.0, 1), (1e-3, 2), (1e-2, 3)])
def test_errors_of_rate_drift_and_diffusion_hold(noise, seed):
    """Deviations in units of the stated errors have unit spread; D is not biased."""
    rng = np.random.default_rng(seed)
    scores, ratios = [], []
    for _ in range(300):
        phase = walk(rng, count=900, step_s=0.014, diffusion=0.0756, noise=noise)
        free = fit_free_phase(phase, 0.014)
        scores.append(
            (
                (free.rate_rad_s - 3.0) / free.rate_u_rad_s,
                free.drift_rad_s2 / free.drift_u_rad_s2,
                math.log(free.diffusion_rad2_s / 0.0756)
                * free.diffusion_rad2_s
                / free.diffusion_u_rad2_s,
            )
        )
        ratios.append(free.diffusion_rad2_s / 0.0756)
    # 300 draws: four standard errors of a standard deviation are 0.16.
    assert np.std(scores, axis=0) == pytest.approx([1.0, 1.0, 1.0], abs=0.16)
    assert np.mean(ratios) == pytest.approx(1.0, abs=4 * np.std(ratios) / math.sqrt(300))


def test_a_smoothed_walk_does_not_lower_the_diffusion():
    """A phase band smooths the walk over about one step; D used to come out a third too low."""
    rng = np.random.default_rng(4)
    kernel = np.hanning(55)
    kernel /= kernel.sum()
    found = []
    for _ in range(100):
        fine = walk(rng, count=25_000, step_s=0.0005, diffusion=0.05, noise=0.0, rate=0.0)
        smooth = np.convolve(fine, kernel, "valid")[::27]
        found.append(phase_diffusion(smooth, 27 * 0.0005)[0])
    # The smoothing leaves 1 %; 100 records determine the mean to 0.7 %.
    assert np.mean(found) / 0.05 == pytest.approx(1.0, abs=0.03)


def test_short_records_state_wider_errors():
    """Forty values: Student's t keeps the rate honest although D is hardly known."""
    rng = np.random.default_rng(5)
    scores = []
    for _ in range(400):
        free = fit_free_phase(walk(rng, count=40, step_s=0.1, diffusion=0.05, noise=1e-3), 0.1)
        scores.append((free.rate_rad_s - 3.0) / free.rate_u_rad_s)
    # Coverage of 1.96 errors at least 93 % less three binomial errors.
    assert np.mean(np.abs(scores) < 1.96) > 0.90


def test_drift_is_found_with_its_size(psi_tools, rng):
    """A frequency that runs away by 2 mHz a second."""
    drift = 2.0 * math.pi * 2e-3
    phase = walk(
        rng, count=20_000, step_s=0.01, diffusion=0.001, noise=1e-4, rate=300.0, drift=drift
    )
    found = estimate_free_run(psi_tools.track(phase, 100.0), "driven", file="alone")
    assert found.drift_hz_s.value == pytest.approx(2e-3, abs=4 * found.drift_hz_s.u)
    middle_hz = (300.0 + drift * 100.0) / (2.0 * math.pi)
    assert found.frequency_hz.value == pytest.approx(middle_hz, abs=5 * found.frequency_hz.u)


def test_quiet_generator_has_a_bound_and_no_diffusion(psi_tools, rng):
    """Where sensor noise hides D, a value would be chance."""
    phase = walk(rng, count=4000, step_s=0.01, diffusion=0.0, noise=1e-6, rate=300.0)
    found = estimate_free_run(psi_tools.track(phase, 100.0), "reference")
    assert found.noise_rad2_s.value is None
    assert 0.0 <= found.noise_rad2_s.high < 1e-6
    assert found.noise_type == "white phase noise"


def test_stability_rows_cover_the_truth(psi_tools):
    """White frequency noise: deviation sqrt(2 D / tau) / w0, inside the interval 95 % of times."""
    rng = np.random.default_rng(6)
    inside, types = [], []
    for _ in range(60):
        phase = walk(rng, count=2000, step_s=0.01, diffusion=0.03, noise=0.0, rate=300.0)
        found = estimate_free_run(psi_tools.track(phase, 100.0), "driven")
        truth = [math.sqrt(2.0 * 0.03 / row[0]) / 300.0 for row in found.allan]
        inside += [row[2] < true < row[3] for row, true in zip(found.allan, truth, strict=True)]
        types.append(found.noise_type.startswith("white frequency noise"))
    # Rows of one record hang together; 60 records leave some 2 %.
    assert np.mean(inside) == pytest.approx(0.95, abs=0.04)
    assert np.mean(types) > 0.85


def test_too_short_a_record_is_refused(psi_tools):
    """One line that says how many values are there."""
    with pytest.raises(PhaseError, match="at least 16 needed"):
        estimate_free_run(psi_tools.track(np.linspace(0.0, 30.0, 12), 10.0), "driven")


def test_baseline_weighs_the_order_and_carries_the_noise():
    """2:3 of two runs: detuning 2 f_d - 3 f_r, diffusion 4 D_d + 9 D_r, both with errors."""
    found = make_baseline(
        [run("driven", 3.0), run("reference", 2.0)], Order(n=2, m=3), reference_hz=None
    )
    assert found.detuning_hz.value == pytest.approx(0.0)
    assert found.detuning_hz.u == pytest.approx(math.hypot(2e-4, 3e-4), rel=1e-9)
    assert found.noise_rad2_s.value == pytest.approx(0.26)
    assert found.noise_rad2_s.u == pytest.approx(math.hypot(4 * 0.002, 9 * 0.002))


def test_two_runs_apart_widen_the_detuning():
    """Before and after differ by 2 mHz: half of it, taken as rectangular, is the drift."""
    runs = [run("driven", 3.0), run("driven", 3.002), run("reference", 3.0)]
    found = make_baseline(runs, Order(), reference_hz=None)
    assert found.detuning_hz.u == pytest.approx(0.001 / math.sqrt(3.0), rel=0.03)


def test_wander_widens_the_detuning():
    """Flicker and random walk carry from one record to the next; white noise does not."""
    rows = ((1.0, 1e-5, 9e-6, 2e-5), (25.0, 1e-5, 5e-6, 4e-5))
    quiet = run("driven", 100.0, allan=rows, noise_type="white frequency noise")
    flicker = run("driven", 100.0, allan=rows, noise_type="flicker frequency noise")
    walking = run("driven", 100.0, allan=rows, noise_type="random-walk frequency noise from 5 s")
    alone = run("reference", 100.0, u=0.0)
    u = [
        make_baseline([one, alone], Order(), reference_hz=None).detuning_hz.u
        for one in (quiet, flicker, walking)
    ]
    assert u[0] == pytest.approx(1e-4)
    assert u[1] == pytest.approx(math.hypot(1e-4, math.sqrt(2.0) * 1e-3), rel=1e-6)
    assert u[2] == pytest.approx(math.hypot(1e-4, 2.0 * math.sqrt(2.0) * 1e-3), rel=1e-6)


def test_hidden_diffusion_enters_a_baseline_as_a_range():
    """A bound alone must neither vanish nor count as known."""
    hidden = run("driven", 3.0, noise_rad2_s=undetermined("rad2/s", "hidden", low=0.0, high=0.04))
    found = make_baseline([hidden, run("reference", 3.0)], Order(), reference_hz=None)
    assert found.noise_rad2_s.value == pytest.approx(0.04)
    assert found.noise_rad2_s.u == pytest.approx(math.hypot(0.04 / math.sqrt(12.0), 0.002))


def test_without_the_driven_alone_there_is_no_baseline():
    """A reference alone says nothing of the detuning."""
    assert make_baseline([run("reference", 3.0)], Order(), reference_hz=None) is None
