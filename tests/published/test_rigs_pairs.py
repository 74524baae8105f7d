"""Simulated pairs against published behaviour: pendulums, metronomes, clocks, exciters."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.signal import hilbert

from rig.synthetic.clocks import ClockSettings, integrate_clocks
from rig.synthetic.exciters import ExciterSettings, integrate_exciters
from rig.synthetic.lanes import LaneGrid, integrate_lanes
from rig.synthetic.pendulums import PendulumSettings, simulate_pendulums


def settled_phase(angles: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Phase of clock 1 ahead of clock 2 over the second half, and both amplitudes."""
    wave = hilbert(angles, axis=0)[angles.shape[0] // 2 : -200]
    ahead = np.unwrap(np.angle(wave[:, 0] * np.conj(wave[:, 1])), axis=0)
    return ahead, np.mean(np.abs(wave), axis=0)


# Source: textbook normal modes of two pendulums on a spring: w_s^2 = g/l, w_a^2 = g/l + 2k/m
# Read: derived
# Printed: f_s = 0.498402795329 Hz, f_a = 0.523197517485 Hz, beat 0.024794722156 Hz, with
#     g = 9.80665 m/s^2, l = 1 m, k/m = 0.5 1/s^2
# Converted: mean rate of the sum and of the difference of the two displacements
# Tolerance: 1e-5 Hz: 240 s of phase, read to a thousandth of a turn
def test_two_pendulums_on_a_spring_swing_in_their_two_modes():
    """Both lines stand in both channels: superposition, which is not locking."""
    settings = PendulumSettings(recorder_noise_m=0.0, decay_s=1e9)
    capture = simulate_pendulums(settings, np.random.default_rng(0))
    modes = hilbert(np.stack([capture.samples.sum(0), np.diff(capture.samples, axis=0)[0]]))
    turns = np.unwrap(np.angle(modes), axis=1)[:, 1000:-1000] / (2 * np.pi)
    times = np.arange(turns.shape[1]) / capture.rate_hz
    together_hz, against_hz = (np.polyfit(times, row, 1)[0] for row in turns)
    assert together_hz == pytest.approx(0.498402795329, abs=1e-5)
    assert against_hz == pytest.approx(0.523197517485, abs=1e-5)
    assert against_hz - together_hz == pytest.approx(0.024794722156, abs=2e-5)
    assert capture.fact("beat_hz") == pytest.approx(0.024794722156, abs=1e-12)


# Source: Pantaleone 2002, Am. J. Phys. 70, 992: metronomes on a base that rolls freely;
#     w = 10.9 1/s, beta = 0.011, mu = 0.010, angle 0.39 rad, amplitude about twice that
# Read: secondary (public notebook that takes equation and constants from the paper)
# Printed: in phase, phase 11.06 delta rad (0.0110631 at 0.001, 0.0552673 at 0.005, 0.110212
#     at 0.01), amplitude 0.7832 rad, lock lost at delta = 0.0407
# Converted: phase of the faster clock ahead of the slower, mean over the second half of
#     3000 units of time from a start at rest, both at twice the angle
# Tolerance: 2 % of phase and edge; 1 % of the amplitude (envelope of a slightly bent sine)
def test_metronomes_on_a_free_base_lock_in_phase_with_the_published_lag():
    """Mutual locking of physical clocks, in one run of all detunings side by side."""
    delta = np.array([0.0, 0.001, 0.005, 0.010, 0.0399, 0.0415])
    settings = ClockSettings(
        duration_s=3000 / 10.9, rate_hz=40.0, torque_noise=0.0, start_apart_rad=0.0
    )
    ahead, amplitude = settled_phase(integrate_clocks(settings, delta, rng=None))
    phase = np.mean(ahead, axis=0)
    assert phase[0] == pytest.approx(0.0, abs=1e-9)
    assert phase[1:4] == pytest.approx([0.0110631, 0.0552673, 0.110212], rel=0.02)
    assert amplitude[:, 0] == pytest.approx([0.7832, 0.7832], rel=0.01)
    assert abs(ahead[-1, 4] - ahead[0, 4]) < np.pi
    assert abs(ahead[-1, 5] - ahead[0, 5]) > 6 * np.pi


# Source: Bennett, Schatz, Rockwood and Wiesenfeld 2002, Proc. R. Soc. A 458, 563-579:
#     Huygens' clocks on a beam that loses energy settle in antiphase
# Read: recalled, qualitative only
# Printed: antiphase
# Converted: phase between the clocks, modulo a turn; the beam here is held by friction alone
# Tolerance: 0.02 rad about pi for two equal clocks from a start a quarter turn apart
def test_clocks_on_a_beam_held_by_friction_settle_in_antiphase():
    """The two styles of locking come from the same clocks on different beams."""
    settings = ClockSettings(
        duration_s=700.0,
        rate_hz=40.0,
        beta=0.05,
        beam_friction=10.0,
        torque_noise=0.0,
        start_apart_rad=1.5,
    )
    ahead, _ = settled_phase(integrate_clocks(settings, np.zeros(1), rng=None))
    assert abs(np.angle(-np.exp(1j * ahead[-1, 0]))) < 0.02


# Source: Blekhman 1988, Synchronization in Science and Technology: two equal unbalanced
#     rotors on a soft mount, same sense: in phase if M l^2 / I > 2, else in antiphase
# Read: recalled; re-derived by the rule of least averaged kinetic energy
# Printed: ratios 0.5, 1, 1.5, 1.8: pi; 2.2: 0
# Converted: angle of rotor 2 ahead of rotor 1, modulo a turn
# Tolerance: 1e-6 rad, the approach to rest after 20 s of equal motors
def test_exciters_on_a_soft_frame_follow_the_arm_ratio_rule():
    """Five degrees of freedom integrated, not the averaged rule."""
    ratios = np.array([0.5, 1.0, 1.5, 1.8, 2.2])
    settings = ExciterSettings(duration_s=20.0, rate_hz=250.0)
    motion = integrate_exciters(settings, ratios, rng=None)
    apart = np.exp(1j * (motion[-1, 4] - motion[-1, 3]))
    assert np.abs(np.angle(-apart[:4])) == pytest.approx(np.zeros(4), abs=1e-6)
    assert abs(np.angle(apart[4])) < 1e-6


def phase_pair_rates(detuning: np.ndarray, coupling: float):
    """Two phases that pull each other by half the coupling each."""

    def rates(state, drive, out):
        pull = 0.5 * coupling * np.sin(state[1] - state[0])
        out[0] = -0.5 * detuning + pull
        out[1] = 0.5 * detuning - pull

    return rates


# Source: Kuramoto 1984, Chemical Oscillations, Waves, and Turbulence, two oscillators
# Read: recalled; follows from the locked angle asin(dw / K)
# Printed: order parameter |cos(psi / 2)|: 0.9659258 at dw / K = 0.5, 0.7071068 at 1;
#     critical coupling |dw|
# Converted: two phases integrated side by side; at the edge itself the approach goes as
#     1 / time, so 0.999 stands for 1
# Tolerance: 1e-7 inside; 0.02 at 0.999 of the edge, where the angle is sqrt(2 x 0.001) short
def test_two_kuramoto_oscillators_lock_up_to_the_critical_coupling():
    """The integrator on the simplest mutual pair there is."""
    detuning = np.array([0.5, 0.999, 1.01])
    grid = LaneGrid(rate_hz=10.0, frames=4000, substeps=1)
    states = integrate_lanes(phase_pair_rates(detuning, 1.0), np.zeros((2, 3)), grid=grid)
    apart = states[:, 1] - states[:, 0]
    order = np.abs(np.cos(0.5 * apart[-1]))
    assert order[0] == pytest.approx(0.965925826289, abs=1e-7)
    assert order[1] == pytest.approx(0.707106781187, abs=0.02)
    assert apart[-1, 2] > 2 * np.pi
