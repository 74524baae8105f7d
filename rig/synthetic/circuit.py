"""An electronic oscillator under injection: a lossy tank, a cubic element, a driven current.

    C dv/dt = i_in(t) - i_coil - v / R + g1 v - g3 v^3 + i_noise(t),     L di_coil/dt = v

v is the tank voltage, i_in the injected current: the generator voltage over the injection
resistor (the tank voltage is small against it in its effect: a resistor of that size is part
of R). The recorded reference is the generator voltage, the driven channel the tank voltage.
For a small current the lock half-width is I_in / (2 A C) rad/s, A the free amplitude; the
true edges are found by integration (``find_lock_edges``), never from that law.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from rig.angles import TURN_RAD, hz_from_rad_s
from rig.arrays import FloatArray
from rig.synthetic.edges import LockEdges, QuietRig, find_lock_edges
from rig.synthetic.generator import DriveStep, injected_drive
from rig.synthetic.lanes import LaneGrid, RateFunction, integrate_lanes, substeps_for


@dataclass(frozen=True, slots=True, kw_only=True)
class TankValues:
    """Component values of the oscillator; the defaults give about 500 Hz and 2 V.

    ``noise_v_s`` is the voltage that the noise current gathers on C in one second,
    V/sqrt(s): the free phase then diffuses with D = (noise_v_s / (2 A))^2 rad^2/s.

    Raises
    ------
    ValueError
        If a value is not above 0 (noise: not >= 0), or the element cannot overcome the loss.
    """

    coil_h: float = 0.1
    capacitor_f: float = 1.008e-6
    loss_ohm: float = 6400.0
    element_s: float = 785e-6
    cubic_s_v2: float = 209e-6
    injection_ohm: float = 40e3
    noise_v_s: float = 1.1

    def __post_init__(self) -> None:
        for name in ("coil_h", "capacitor_f", "loss_ohm", "element_s", "cubic_s_v2"):
            if not getattr(self, name) > 0:
                raise ValueError(f"tank value {name} must be above 0, got {getattr(self, name)}")
        if not self.injection_ohm > 0 or not self.noise_v_s >= 0:
            raise ValueError(
                "tank: injection_ohm must be above 0 and noise_v_s >= 0, got "
                f"{self.injection_ohm} and {self.noise_v_s}"
            )
        if not self.gain_s > 0:
            raise ValueError(
                f"tank does not oscillate: element_s {self.element_s} must exceed "
                f"1/loss_ohm = {1.0 / self.loss_ohm:.4g} S"
            )

    @property
    def gain_s(self) -> float:
        """Net negative conductance at small voltage, S."""
        return self.element_s - 1.0 / self.loss_ohm

    @property
    def tank_hz(self) -> float:
        """Resonance of coil and capacitor alone, Hz; the free frequency lies a little lower."""
        return hz_from_rad_s(1.0 / math.sqrt(self.coil_h * self.capacitor_f))

    @property
    def amplitude_v(self) -> float:
        """Free amplitude to first order, V."""
        return math.sqrt(4.0 * self.gain_s / (3.0 * self.cubic_s_v2))

    def small_signal_coupling_hz(self, drive_v: float) -> float:
        """Return the lock half-width of averaging, I / (2 A C) in Hz: a guide, not the truth."""
        current_a = drive_v / self.injection_ohm
        return hz_from_rad_s(current_a / (2.0 * self.amplitude_v * self.capacitor_f))


def tank_rates(values: TankValues) -> RateFunction:
    """Return the right-hand side of the circuit for states (v, i_coil / C).

    The drive row is the injected current over C, V/s.
    """
    gain = values.gain_s / values.capacitor_f
    cubic = values.cubic_s_v2 / values.capacitor_f
    stiffness = 1.0 / (values.coil_h * values.capacitor_f)

    def rates(state: FloatArray, drive: FloatArray, out: FloatArray) -> None:
        volts, slope = state[0], out[0]
        np.multiply(volts, volts, out=slope)
        slope *= -cubic
        slope += gain
        slope *= volts
        slope -= state[1]
        slope += drive
        np.multiply(volts, stiffness, out=out[1])

    return rates


def integrate_tank(
    values: TankValues,
    steps: Sequence[DriveStep],
    *,
    grid: LaneGrid,
    rng: np.random.Generator | None,
    start_rad: FloatArray | None = None,
) -> FloatArray:
    """Return the tank voltage of several captures at once, shape (frames, captures), V.

    Parameters
    ----------
    values : TankValues
    steps : sequence of DriveStep, one a capture
    grid : LaneGrid; its settling time runs at the frequency before the step
    rng : source of the noise current; None integrates without noise
    start_rad : array, shape (captures,), rad, phase of the tank at the first instant
    """
    angle = np.zeros(len(steps)) if start_rad is None else start_rad
    amplitude = values.amplitude_v
    pulse = TURN_RAD * values.tank_hz
    start = np.array([amplitude * np.cos(angle), amplitude * pulse * np.sin(angle)])
    noise = None if rng is None else (np.array([values.noise_v_s, 0.0]), rng)
    per_volt = 1.0 / (values.injection_ohm * values.capacitor_f)
    states = integrate_lanes(
        tank_rates(values),
        start,
        grid=grid,
        drive=injected_drive(steps, grid, strength_per_v=per_volt),
        noise=noise,
        keep=slice(0, 1),
    )
    return states[:, 0, :]


def quiet_tank(values: TankValues, rate_hz: float) -> QuietRig:
    """Return this oscillator without noise, for the search of free frequency and lock edges."""
    return QuietRig(
        integrate=lambda steps, grid: integrate_tank(values, steps, grid=grid, rng=None),
        nominal_hz=values.tank_hz,
        rate_hz=rate_hz,
        substeps=substeps_for(rate_hz, values.tank_hz),
    )


def tank_lock_edges(values: TankValues, *, drive_v: float, rate_hz: float) -> LockEdges:
    """Return the true lock edges of the noise-free oscillator (see ``find_lock_edges``)."""
    return find_lock_edges(
        quiet_tank(values, rate_hz),
        drive_v=drive_v,
        half_width_hz=values.small_signal_coupling_hz(drive_v),
    )
