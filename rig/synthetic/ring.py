"""A ring of three inverting stages under injection: a relaxation oscillator far from a sine.

    tau dv_k/dt = -v_k - swing tanh(gain v_(k-1) / swing) + offset,   k = 1, 2, 3 in a ring

with the generator added to stage 1 through a large resistor (``injection`` is the ratio of
the currents) and voltage noise on every stage. ``offset_v`` makes rise and fall unequal, so
that even harmonics appear. Recorded are the generator and stage 1.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from rig.angles import TURN_RAD
from rig.arrays import FloatArray
from rig.synthetic.edges import QuietRig, find_free_frequency_hz
from rig.synthetic.generator import DriveStep, generator_phase_rad, injected_drive
from rig.synthetic.lanes import LaneGrid, RateFunction, integrate_lanes, substeps_for
from rig.synthetic.records import SimulatedCapture

NOMINAL_CYCLES_PER_TAU = 0.3068  # free frequency times tau of the integrated ring, defaults


@dataclass(frozen=True, slots=True, kw_only=True)
class RingSettings:
    """A ring oscillator of about 500 Hz under injection.

    ``noise_v_s`` is what each stage voltage gathers in one second, V/sqrt(s).

    Raises
    ------
    ValueError
        If a value is out of its range; a ring with gain <= 2 does not oscillate.
    """

    duration_s: float = 12.0
    rate_hz: float = 8000.0
    drive_hz: float = 500.0
    before_hz: float = 500.0
    drive_v: float = 2.0
    injection: float = 0.01
    tau_s: float = 6.13e-4
    swing_v: float = 2.0
    gain: float = 8.0
    offset_v: float = 0.4
    noise_v_s: float = 0.3
    settle_s: float = 1.0
    recorder_noise_v: float = 2e-3

    def __post_init__(self) -> None:
        for name in ("duration_s", "rate_hz", "drive_hz", "before_hz", "tau_s", "swing_v"):
            if not getattr(self, name) > 0:
                raise ValueError(f"ring: {name} must be above 0, got {getattr(self, name)}")
        for name in ("drive_v", "injection", "noise_v_s", "settle_s", "recorder_noise_v"):
            if not getattr(self, name) >= 0:
                raise ValueError(f"ring: {name} must be >= 0, got {getattr(self, name)}")
        if not self.gain > 2:
            raise ValueError(f"ring does not oscillate: gain must be above 2, got {self.gain}")

    @property
    def nominal_hz(self) -> float:
        """Frequency near the free one, Hz."""
        return NOMINAL_CYCLES_PER_TAU / self.tau_s

    @property
    def substeps(self) -> int:
        """Integration steps a frame: the edges of the wave need more than a sine does."""
        return substeps_for(self.rate_hz, self.nominal_hz, steps_a_cycle=45.0)


def ring_rates(settings: RingSettings) -> RateFunction:
    """Return the right-hand side for the three stage voltages; the drive acts on stage 1."""
    steep = settings.gain / settings.swing_v

    def rates(state: FloatArray, drive: FloatArray, out: FloatArray) -> None:
        np.tanh(steep * state[[2, 0, 1]], out=out)
        out *= -settings.swing_v
        out -= state
        out += settings.offset_v
        out[0] += drive
        out /= settings.tau_s

    return rates


def integrate_ring(
    settings: RingSettings,
    steps: Sequence[DriveStep],
    *,
    grid: LaneGrid,
    rng: np.random.Generator | None,
) -> FloatArray:
    """Return the stage 1 voltage of several captures at once, shape (frames, captures), V."""
    start = settings.swing_v * np.tile([[0.9], [-0.5], [0.1]], (1, len(steps)))
    noise = None if rng is None else (np.full(3, settings.noise_v_s), rng)
    states = integrate_lanes(
        ring_rates(settings),
        start,
        grid=grid,
        drive=injected_drive(steps, grid, strength_per_v=settings.injection),
        noise=noise,
        keep=slice(0, 1),
    )
    return states[:, 0, :]


def quiet_ring(settings: RingSettings) -> QuietRig:
    """Return this ring without noise, for the search of free frequency and lock edges."""
    return QuietRig(
        integrate=lambda steps, grid: integrate_ring(settings, steps, grid=grid, rng=None),
        nominal_hz=settings.nominal_hz,
        rate_hz=settings.rate_hz,
        substeps=settings.substeps,
    )


def simulate_ring(settings: RingSettings, rng: np.random.Generator) -> SimulatedCapture:
    """Return one capture of generator voltage (reference) and stage 1 voltage (driven).

    Parameters
    ----------
    settings : RingSettings
    rng : source of every chance in it
    """
    quiet = quiet_ring(settings)
    step = DriveStep(
        drive_v=settings.drive_v,
        drive_hz=settings.drive_hz,
        before_hz=settings.before_hz,
        phase_rad=float(rng.uniform(0.0, TURN_RAD)),
    )
    grid = quiet.grid(settings.duration_s, settings.settle_s)
    stage_v = integrate_ring(settings, [step], grid=grid, rng=rng)[:, 0]
    time_s = np.arange(grid.frames) / settings.rate_hz
    generator_v = settings.drive_v * np.cos(generator_phase_rad([step], time_s)[:, 0])
    samples = np.stack([generator_v, stage_v])
    samples += settings.recorder_noise_v * rng.standard_normal(samples.shape)
    free_hz = find_free_frequency_hz(quiet)
    return SimulatedCapture(
        rig="ring",
        samples=samples,
        rate_hz=settings.rate_hz,
        channels=("generator", "stage 1"),
        units=("V", "V"),
        truth=(
            ("free_driven_hz", free_hz, "Hz"),
            ("drive_hz", settings.drive_hz, "Hz"),
            ("detuning_hz", free_hz - settings.drive_hz, "Hz"),
        ),
    )
