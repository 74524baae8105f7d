"""The injected oscillator: free run, diffusion, lock edges, generator steps."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from rig.synthetic.circuit import TankValues, integrate_tank, quiet_tank, tank_lock_edges
from rig.synthetic.edges import block_phase_rad, find_free_frequency_hz, find_lock_edges
from rig.synthetic.generator import DriveStep, generator_phase_rad
from rig.synthetic.lanes import LaneGrid
from rig.synthetic.ring import RingSettings, quiet_ring

RATE_HZ = 8000.0
ALONE = DriveStep(drive_v=0.0, drive_hz=500.0, before_hz=500.0)


def test_the_free_frequency_lies_below_the_tank_by_the_known_pull():
    """The cubic element lowers the frequency by mu^2 / 16 to first order."""
    values = TankValues()
    free_hz = find_free_frequency_hz(quiet_tank(values, RATE_HZ))
    mu = values.gain_s * np.sqrt(values.coil_h / values.capacitor_f)
    # The step adds 2e-5 relative, the next order of the law is mu^4 17/3072 = 8e-6.
    assert free_hz == pytest.approx(values.tank_hz * (1.0 - mu**2 / 16.0), rel=4e-5)


def test_the_free_frequency_does_not_need_a_good_guess():
    """A ring of other gain runs 10 % off its nominal frequency; aliasing must not fool it."""
    settings = RingSettings(gain=4.0)
    quiet = quiet_ring(settings)
    finer = dataclasses.replace(quiet, nominal_hz=find_free_frequency_hz(quiet))
    assert find_free_frequency_hz(finer) == pytest.approx(find_free_frequency_hz(quiet), abs=1e-4)


def test_the_phase_diffuses_as_the_noise_current_says(rng):
    """Var phi = 2 D t with D = (noise / (2 A))^2: the truth that captures state."""
    values = TankValues()
    lanes = 300
    grid = LaneGrid(rate_hz=RATE_HZ, frames=4000)
    volts = integrate_tank(values, [ALONE] * lanes, grid=grid, rng=rng)
    phase = np.repeat(generator_phase_rad([ALONE], np.arange(4000) / RATE_HZ), lanes, axis=1)
    psi = block_phase_rad(volts, phase, 160)
    elapsed_s = (psi.shape[0] - 1) * 160 / RATE_HZ
    diffusion = np.var(psi[-1] - psi[0]) / (2.0 * elapsed_s)
    stated = (values.noise_v_s / (2.0 * values.amplitude_v)) ** 2
    # 4 standard errors of a variance from 300 lanes; smoothing by blocks takes off 3 %.
    assert diffusion == pytest.approx(stated, rel=4 * np.sqrt(2 / lanes) + 0.03)


def test_lock_edges_of_a_weak_drive_lie_at_the_averaged_law():
    """Independent witness: I / (2 A C) from averaging, within 2 % at 0.6 % injection."""
    values = TankValues()
    edges = tank_lock_edges(values, drive_v=3.0, rate_hz=RATE_HZ)
    assert edges.width_hz / 2 == pytest.approx(values.small_signal_coupling_hz(3.0), rel=0.02)
    assert edges.lower_hz < edges.free_hz < edges.upper_hz
    assert edges.resolution_hz < 0.005 * edges.width_hz


def test_edges_outside_the_guess_are_refused_not_invented():
    """A search that starts from a wrong half-width must say so."""
    quiet = quiet_tank(TankValues(), RATE_HZ)
    with pytest.raises(ValueError, match="lock edges: not between"):
        find_lock_edges(quiet, drive_v=3.0, half_width_hz=40.0)


@pytest.mark.parametrize(("drive_v", "guess"), [(0.0, 1.0), (1.0, float("nan"))])
def test_an_edge_search_without_drive_is_refused(drive_v, guess):
    """No drive, no region."""
    with pytest.raises(ValueError, match="must be above 0"):
        find_lock_edges(quiet_tank(TankValues(), RATE_HZ), drive_v=drive_v, half_width_hz=guess)


def test_the_generator_phase_is_unbroken_at_the_step():
    """A jump of the generator's phase would add a pull-in that no bench shows."""
    step = DriveStep(drive_v=1.0, drive_hz=503.0, before_hz=500.0, phase_rad=0.7)
    times = np.array([-1e-9, 0.0, 1e-9])
    phase = generator_phase_rad([step], times)[:, 0]
    assert phase[1] == pytest.approx(0.7, abs=1e-15)
    assert np.max(np.abs(np.diff(phase))) < 4e-6


def test_a_locked_lane_follows_and_a_free_one_beats():
    """Inside the edges the phase stays, outside it runs: the scenario rests on it."""
    steps = [DriveStep(drive_v=3.0, drive_hz=hz, before_hz=500.0) for hz in (500.0, 502.5, 506.0)]
    grid = LaneGrid(rate_hz=RATE_HZ, frames=16000, settle_frames=4000)
    volts = integrate_tank(TankValues(), steps, grid=grid, rng=None)
    psi = block_phase_rad(volts, generator_phase_rad(steps, np.arange(16000) / RATE_HZ), 160)
    turns = np.abs(psi[-1] - psi[0]) / (2 * np.pi)
    assert turns[0] < 0.1
    assert turns[1] < 0.25
    assert turns[2] > 9.0


@pytest.mark.parametrize(
    ("values", "message"),
    [
        ({"coil_h": 0.0}, "coil_h must be above 0"),
        ({"capacitor_f": float("nan")}, "capacitor_f must be above 0"),
        ({"noise_v_s": -1.0}, "noise_v_s >= 0"),
        ({"element_s": 1e-4}, "does not oscillate"),
    ],
)
def test_a_tank_that_cannot_run_is_refused(values, message):
    """Each refusal names the component."""
    with pytest.raises(ValueError, match=message):
        TankValues(**values)
