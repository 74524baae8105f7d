"""One capture of the oscillator under injection, with its truth."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from rig.angles import TURN_RAD
from rig.synthetic.circuit import TankValues, integrate_tank, quiet_tank
from rig.synthetic.edges import find_free_frequency_hz
from rig.synthetic.generator import DriveStep, generator_phase_rad
from rig.synthetic.lanes import LaneGrid, substeps_for
from rig.synthetic.records import SimulatedCapture, TruthFact


@dataclass(frozen=True, slots=True, kw_only=True)
class CircuitSettings:
    """One capture of the injected oscillator.

    ``recorder_noise_v`` is the noise of both recorded channels, V r.m.s.; drive_v = 0
    records the oscillator alone.
    """

    duration_s: float = 12.0
    rate_hz: float = 8000.0
    drive_hz: float = 500.0
    before_hz: float = 500.0
    drive_v: float = 2.0
    settle_s: float = 1.0
    recorder_noise_v: float = 2e-3
    tank: TankValues = field(default_factory=TankValues)


def simulate_circuit(settings: CircuitSettings, rng: np.random.Generator) -> SimulatedCapture:
    """Return one capture of generator voltage (reference) and tank voltage (driven).

    Parameters
    ----------
    settings : CircuitSettings
    rng : source of every chance in it
    """
    frames = round(settings.duration_s * settings.rate_hz)
    grid = LaneGrid(
        rate_hz=settings.rate_hz,
        frames=frames,
        settle_frames=round(settings.settle_s * settings.rate_hz),
        substeps=substeps_for(settings.rate_hz, settings.tank.tank_hz),
    )
    angles = rng.uniform(0.0, TURN_RAD, 2)
    step = DriveStep(
        drive_v=settings.drive_v,
        drive_hz=settings.drive_hz,
        before_hz=settings.before_hz,
        phase_rad=float(angles[0]),
    )
    tank_v = integrate_tank(settings.tank, [step], grid=grid, rng=rng, start_rad=angles[1:])[:, 0]
    time_s = np.arange(frames) / settings.rate_hz
    generator_v = settings.drive_v * np.cos(generator_phase_rad([step], time_s)[:, 0])
    samples = np.stack([generator_v, tank_v])
    samples += settings.recorder_noise_v * rng.standard_normal(samples.shape)
    return SimulatedCapture(
        rig="circuit",
        samples=samples,
        rate_hz=settings.rate_hz,
        channels=("generator", "tank"),
        units=("V", "V"),
        truth=_circuit_truth(settings),
    )


def _circuit_truth(settings: CircuitSettings) -> tuple[TruthFact, ...]:
    tank = settings.tank
    free_hz = find_free_frequency_hz(quiet_tank(tank, settings.rate_hz))
    return (
        ("free_driven_hz", free_hz, "Hz"),
        ("drive_hz", settings.drive_hz, "Hz"),
        ("detuning_hz", free_hz - settings.drive_hz, "Hz"),
        (
            "coupling_small_signal_hz",
            tank.small_signal_coupling_hz(settings.drive_v),
            "Hz",
        ),
        ("noise_rad2_s", (tank.noise_v_s / (2.0 * tank.amplitude_v)) ** 2, "rad2/s"),
    )
