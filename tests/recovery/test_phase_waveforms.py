"""Phases of waveforms that are no sines, made by integrating physics or by shape alone."""

from __future__ import annotations

import math

import numpy as np
import pytest

from rig.errors import PhaseError
from rig.phases.estimate import track_one, track_pair
from rig.phases.protophase import correct_protophase, cycle_coefficients
from rig.phases.settings import PairSettings, PhaseSettings
from rig.phases.stretches import runs_of
from rig.synthetic.rigs import simulate_rig

TWO_PI = 2.0 * math.pi
RATE_HZ = 400.0
# Up to between harmonics 7 and 9: no line of the wave crosses the edge as it wanders.
WIDE = PhaseSettings(method="analytic", band_hz=(0.5, 15.8))


def wandering_phase_rad(duration_s=200.0):
    """Return a phase near 2 Hz that is pulled back and forth twenty times."""
    time = np.arange(round(duration_s * RATE_HZ)) / RATE_HZ
    return TWO_PI * 2.0 * time + 0.8 * np.sin(TWO_PI * 0.1 * time)


def relaxation_cycle(stiffness=5.0, steps=20_000):
    """Return one cycle of a van der Pol oscillator, even in time, by fourth-order steps."""

    def rate(state):
        return np.array([state[1], stiffness * (1.0 - state[0] ** 2) * state[1] - state[0]])

    step, state, path = 12.0 / steps, np.array([2.0, 0.0]), []
    for _ in range(5 * steps // 2):
        first = rate(state)
        second = rate(state + 0.5 * step * first)
        third = rate(state + 0.5 * step * second)
        state = state + step / 6.0 * (first + 2 * second + 2 * third + rate(state + step * third))
        path.append(state[0])
    wave = np.array(path)
    rising = np.flatnonzero((wave[:-1] < 0) & (wave[1:] >= 0))
    return wave[rising[-2] : rising[-1]]


def on_cycle(cycle, phase_rad):
    """Return the value of a cycle at phases."""
    place = np.mod(phase_rad / TWO_PI, 1.0) * cycle.size
    return np.interp(place, np.arange(cycle.size + 1), np.append(cycle, cycle[0]))


def error_rms_rad(track, phase_rad):
    """Return the spread of a track about the truth."""
    frames = np.rint(track.time_s * RATE_HZ).astype(int)
    return float(np.std((track.phase_rad - phase_rad[frames])[track.valid]))


@pytest.fixture(scope="module")
def relaxation():
    """One cycle of the relaxation oscillator."""
    return relaxation_cycle()


def test_relaxation_loop_becomes_an_even_phase(slow, relaxation):
    """Steep flanks and flat tops: the loop turns by jumps, the phase does not."""
    rng = np.random.default_rng(2)
    truth = wandering_phase_rad()
    samples = on_cycle(relaxation, truth) + 0.01 * rng.standard_normal(truth.size)
    (channel,) = slow.memory_channels(samples, RATE_HZ)
    pair = correct_protophase(track_one(channel, settings=WIDE))
    raw, even = error_rms_rad(pair.protophase, truth), error_rms_rad(pair.phase, truth)
    assert raw > 0.15
    assert even < 0.1 * raw
    assert pair.difference_rms_rad == pytest.approx(raw, rel=0.05)
    assert any("they differ by" in note for note in pair.phase.notes)


def test_rounded_pulses_become_an_even_phase(slow):
    """Pulses of a photocell or a pressure gauge: one loop, turned through unevenly."""
    rng = np.random.default_rng(3)
    truth = wandering_phase_rad()
    samples = np.exp(0.8 * np.cos(truth)) + 0.005 * rng.standard_normal(truth.size)
    (channel,) = slow.memory_channels(samples, RATE_HZ)
    pair = correct_protophase(track_one(channel, settings=WIDE))
    raw, even = error_rms_rad(pair.protophase, truth), error_rms_rad(pair.phase, truth)
    assert raw > 0.1
    assert even < 0.1 * raw


@pytest.mark.parametrize("shape", ["relaxation", "pulses", "spikes"])
def test_the_band_around_the_line_needs_no_correction(slow, relaxation, shape):
    """Sharp spikes have no single loop; their fundamental has a good phase all the same."""
    rng = np.random.default_rng(4)
    truth = wandering_phase_rad()
    samples = {
        "relaxation": lambda p: on_cycle(relaxation, p),
        "pulses": lambda p: np.exp(np.cos(p)),
        "spikes": lambda p: np.exp(30.0 * (np.cos(p) - 1.0)),
    }[shape](truth)
    noisy = samples + 0.005 * rng.standard_normal(truth.size)
    (channel,) = slow.memory_channels(noisy, RATE_HZ)
    track = track_one(channel, settings=PhaseSettings(method="analytic"))
    # 0.08 Hz of swing in a half band of 0.3 Hz.
    assert error_rms_rad(track, truth) < 3e-3
    assert correct_protophase(track).difference_rms_rad == 0.0


def test_spikes_are_followed_as_well_as_their_flanks_allow(slow):
    """Sharp spikes mark the cycle: between them the phase is a straight line."""
    rng = np.random.default_rng(5)
    truth = wandering_phase_rad()
    samples = np.exp(30.0 * (np.cos(truth) - 1.0)) + 0.01 * rng.standard_normal(truth.size)
    (channel,) = slow.memory_channels(samples, RATE_HZ)
    track = track_one(channel)
    assert track.method == "spike"
    # Largest slope 0.05 Hz/s over half a second: pi a T^2 / 4 = 0.01 rad; peaks to 2 ms.
    assert error_rms_rad(track, truth) < 0.03


def test_too_few_cycles_have_no_shape(slow):
    """Nine cycles do not tell noise from waveform."""
    theta = np.linspace(0.0, 9.5 * TWO_PI, 500)
    with pytest.raises(PhaseError, match="9 whole cycles, at least 10"):
        cycle_coefficients(theta, np.ones(theta.size, dtype=bool))


def test_beats_against_breathing_are_counted_right(slow):
    """A heart against slow breathing: every beat once, both phases on one grid."""
    made = simulate_rig("heartbeat", settings={}, seed=3)
    breath, heart = slow.memory_channels(made.samples, made.rate_hz)
    reference, driven = track_pair(breath, heart, settings=PairSettings(order=(1, 3)))
    assert (reference.method, driven.method) == ("analytic", "spike")
    assert driven.event_s.size == pytest.approx(made.fact("beats"), abs=1)
    assert reference.frequency_hz.value == pytest.approx(made.fact("breath_hz"), rel=1e-3)
    held = reference.valid & driven.valid
    psi_turns = (driven.phase_rad - 3.0 * reference.phase_rad) / TWO_PI
    for number in (1, 2):
        start, stop = made.fact(f"episode_{number}_start_s"), made.fact(f"episode_{number}_stop_s")
        inside = held & (driven.time_s > start + 8.0) & (driven.time_s < stop - 2.0)
        assert np.ptp(psi_turns[inside]) < 0.5


def test_free_pendulums_that_beat_show_no_slip(slow):
    """Linear modes: the phase turns by pi at each node, which is masked and no slip."""
    made = simulate_rig("pendulums", settings={}, seed=3)
    reference, driven = track_pair(*slow.memory_channels(made.samples, made.rate_hz))
    held = reference.valid & driven.valid
    psi_turns = (driven.phase_rad - reference.phase_rad) / TWO_PI
    spans = runs_of(held)
    assert len(spans) >= 4
    for first, stop in spans:
        assert np.ptp(psi_turns[first:stop]) < 0.1
    assert any("amplitude below" in note for note in driven.notes)
