"""Size and power of the adequacy tests on simulated records (reduced; more with make test-long)."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.adequacy import examine_estimates
from fit.adler import AdlerSettings, estimate_adler
from fit.records import PsiSeries


def records(seed, count, *, samples, step_s, detuning, diffusion=0.03, noise=0.05, **lacks):
    """Return psi of many records by small Euler steps; K = 1 rad/s, offset 0.7 rad."""
    rng = np.random.default_rng(seed)
    tau, second, third, walk = (lacks.get(name, 0.0) for name in ("tau", "second", "third", "walk"))
    course = lacks.get("course", np.zeros(samples))
    parts = max(math.ceil(step_s / 0.02), math.ceil(8.0 * step_s / tau) if tau else 1)
    dt = step_s / parts
    psi = (
        np.full(count, 0.7 + math.asin(detuning))
        if abs(detuning) < 1
        else rng.uniform(-3, 3, count)
    )
    speed, moved, seen = np.zeros(count), np.zeros(count), np.empty((count, samples))
    for sample in range(samples):
        seen[:, sample] = psi
        for _ in range(parts):
            moved = moved + math.sqrt(walk * dt) * rng.standard_normal(count)
            pull = detuning + course[sample] + moved - np.sin(psi - 0.7)
            pull = pull - second * np.sin(2.0 * psi) - third * np.sin(3.0 * psi)
            kick = math.sqrt(2.0 * diffusion * dt) * rng.standard_normal(count)
            if tau:
                speed = speed + (dt * (pull - speed) + kick) / tau
                psi = psi + dt * speed
            else:
                psi = psi + dt * pull + kick
    seen += noise * rng.standard_normal(seen.shape)
    return [PsiSeries(step_s=step_s, segments=(row,), start_s=(0.0,)) for row in seen]


def rates(made, amplitude=None):
    """Return how often each test fired, and how often the equation was called inadequate."""
    estimates = estimate_adler(made, settings=AdlerSettings(intervals=False))
    amplitudes = None if amplitude is None else [(amplitude,)] * len(made)
    found = examine_estimates(made, estimates, amplitudes=amplitudes)
    fired: dict[str, int] = {}
    for one in found:
        for test in one.tests:
            fired[test.name] = fired.get(test.name, 0) + test.fired
    shares = {name: number / len(made) for name, number in fired.items()}
    return shares, sum(one.adequate is False for one in found) / len(made)


SIZES = [
    (1.5, 0.1, 500, 0.05),
    (1.1, 0.1, 500, 0.05),
    (3.0, 0.05, 500, 0.1),
    (0.5, 0.1, 500, 0.01),
]


@pytest.mark.parametrize("cell", SIZES)
def test_false_alarms_are_as_rare_as_stated(cell):
    """1 % a test: of 100 records at most 5 may fire (chance of more 0.05 %), 12 over all tests."""
    detuning, step_s, samples, noise = cell
    made = records(11, 100, samples=samples, step_s=step_s, detuning=detuning, noise=noise)
    shares, refused = rates(made)
    assert max(shares.values()) <= 0.05, shares
    assert refused <= 0.12, shares


@pytest.mark.parametrize(("factor", "least"), [(1.0, 0.35), (1.5, 0.85)])
def test_second_harmonic_is_found_where_the_information_promises(factor, least):
    """g80 = 6.5 sqrt(D/T) is what 5 % would find in 80 %; 1 % size finds half of that, and 9 in 10
    at 1.5 times it."""
    duration_s = 50.0
    second = factor * 6.5 * math.sqrt(0.03 / duration_s)
    made = records(12, 60, samples=500, step_s=0.1, detuning=1.5, second=second)
    assert rates(made)[0]["second harmonic"] >= least


def test_third_harmonic_is_found_like_the_second():
    """The information on sin 3 psi of a drifting pair is that on sin 2 psi."""
    third = 1.5 * 6.5 * math.sqrt(0.03 / 50.0)
    made = records(16, 60, samples=500, step_s=0.1, detuning=1.5, third=third)
    assert rates(made)[0]["third harmonic"] >= 0.8


def swing():
    """Squared amplitude over its mean, less 1, of a pendulum that loses half its swing."""
    squared = np.exp(-2.0 * np.arange(500) / 720.0)
    return squared / squared.mean() - 1.0


def test_amplitude_dependence_is_rarely_seen_where_there_is_none():
    """1 % size: of 100 records whose frequency does not follow their swing at most 5 fire."""
    made = records(17, 100, samples=500, step_s=0.1, detuning=1.5)
    assert rates(made, swing())[0]["amplitude dependence"] <= 0.05


@pytest.mark.parametrize(("errors", "least"), [(3.42, 0.65), (5.0, 0.9)])
def test_the_slowing_of_a_wide_swing_is_found(errors, least):
    """A pendulum loses theta^2/16 of its rate: found in 80 % at 3.42 standard errors.

    The detuning over 50 s is known to sqrt(2 D/T) = 0.035, its slope over the swing to that
    over the spread of the swing, 1.3 times more near the edge.
    """
    course = swing()
    slope = errors * 1.3 * math.sqrt(2.0 * 0.03 / 50.0) / float(np.std(course))
    # At a rate of 60 per 1/K the swing that slows by this is moderate.
    assert 0.1 < math.sqrt(16.0 * slope / 60.0) < 0.8
    made = records(18, 60, samples=500, step_s=0.1, detuning=1.5, course=-slope * course)
    assert rates(made, course)[0]["amplitude dependence"] >= least


def test_inertia_is_found_from_one_step_on():
    """Time constant of 0.1/K at a step of 0.1/K, little measurement noise."""
    made = records(13, 40, samples=500, step_s=0.1, detuning=1.5, noise=0.01, tau=0.1)
    assert rates(made)[0]["inertia"] >= 0.8


def test_inertia_in_lock_is_found_before_it_ruins_the_coupling():
    """There it matters most: the plain coupling falls by half."""
    made = records(14, 40, samples=500, step_s=0.1, detuning=0.5, noise=0.01, tau=0.15)
    assert rates(made)[0]["inertia"] >= 0.9


def test_wander_is_found_when_it_is_several_errors_wide():
    """A random walk of 0.6 rad/s over a record whose detuning is known to 0.035 rad/s."""
    made = records(15, 40, samples=500, step_s=0.1, detuning=1.5, walk=0.6**2 / 50.0)
    assert rates(made)[0]["wander of the detuning"] >= 0.4


@pytest.mark.long
@pytest.mark.parametrize("cell", SIZES)
def test_false_alarms_in_full(cell):
    """400 records a cell: a test of 1 % fires in at most 3 %."""
    detuning, step_s, samples, noise = cell
    made = records(21, 400, samples=2 * samples, step_s=step_s, detuning=detuning, noise=noise)
    shares, refused = rates(made)
    assert max(shares.values()) <= 0.03, shares
    assert refused <= 0.08, shares
