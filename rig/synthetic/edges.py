"""The true lock edges of the injected oscillator, by noise-free integration alone.

No phase equation and no estimator: the very integrator that makes the captures is run
without noise at a row of drive frequencies, and a drive frequency is inside the locking
region when the tank, started in lock at the free frequency, never falls behind by more than
half a turn. Two rows, the second finer, narrow each edge to 0.3 % of the half-width.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from rig.angles import hz_from_rad_s, rad_s_from_hz
from rig.arrays import BoolArray, FloatArray
from rig.synthetic.circuit import DriveStep, TankValues, generator_phase_rad, integrate_tank
from rig.synthetic.lanes import LaneGrid

DRIVES_A_SIDE = 32
FALLEN_BEHIND_RAD = 1.2 * math.pi  # the unstable angle is never more than pi from the start
BLOCK_CYCLES = 25  # cycles a phase reading averages over
RUN_LENGTHS = (28.0, 120.0)  # in 1/K: longer than a slip takes one cell outside the edge


@dataclass(frozen=True, slots=True, kw_only=True)
class LockEdges:
    """Lock edges in drive frequency, Hz; each is known to half of ``resolution_hz``."""

    free_hz: float
    lower_hz: float
    upper_hz: float
    resolution_hz: float

    @property
    def width_hz(self) -> float:
        """Distance of the edges, Hz."""
        return self.upper_hz - self.lower_hz


def block_phase_rad(volts: FloatArray, phase_rad: FloatArray, block_frames: int) -> FloatArray:
    """Return the phase of a voltage against a given phase, block by block, unwrapped.

    Parameters
    ----------
    volts, phase_rad : array, shape (frames, lanes), V and rad
    block_frames : int, frames averaged with a Hann weight (double-frequency terms vanish)

    Returns
    -------
    array, shape (blocks, lanes), rad
    """
    blocks = volts.shape[0] // block_frames
    turned = volts * np.exp(-1j * phase_rad)
    shaped = turned[: blocks * block_frames].reshape(blocks, block_frames, -1)
    weight = np.hanning(block_frames + 1)[:-1]
    vectors = np.einsum("bfl,f->bl", shaped, weight)
    return np.asarray(np.unwrap(np.angle(vectors), axis=0))


def find_free_frequency_hz(values: TankValues, rate_hz: float, *, run_s: float = 1.0) -> float:
    """Return the frequency at which the integrated oscillator runs alone, without noise.

    It is the frequency of the integrated equations, step error included, so that truth and
    captures agree.

    Parameters
    ----------
    values : TankValues
    rate_hz : float, Hz, sampling rate of the captures
    run_s : float, s, length of the run after settling
    """
    step = DriveStep(drive_v=0.0, drive_hz=values.tank_hz, before_hz=values.tank_hz)
    grid = LaneGrid(
        rate_hz=rate_hz, frames=round(run_s * rate_hz), settle_frames=round(0.1 * rate_hz)
    )
    volts = integrate_tank(values, [step], grid=grid, rng=None)
    phase = generator_phase_rad([step], np.arange(grid.frames) / rate_hz)
    block = round(BLOCK_CYCLES * rate_hz / values.tank_hz)
    psi = block_phase_rad(volts, phase, block)[:, 0]
    elapsed_s = (psi.size - 1) * block / rate_hz
    return values.tank_hz + hz_from_rad_s(float(psi[-1] - psi[0]) / elapsed_s)


def find_lock_edges(values: TankValues, drive_v: float, rate_hz: float) -> LockEdges:
    """Return the lock edges of the noise-free oscillator at one injected amplitude.

    Parameters
    ----------
    values : TankValues
    drive_v : float, V, generator amplitude, above 0
    rate_hz : float, Hz, sampling rate of the captures (sets the integration step)

    Raises
    ------
    ValueError
        If the drive is not above 0, or an edge lies outside 0.5 to 1.6 times the
        small-signal half-width.
    """
    if not drive_v > 0:
        raise ValueError(f"lock edges: drive must be above 0 V, got {drive_v}")
    free_hz = find_free_frequency_hz(values, rate_hz)
    half_hz = values.small_signal_coupling_hz(drive_v)
    search = _Search(
        values=values, drive_v=drive_v, rate_hz=rate_hz, free_hz=free_hz, half_width_hz=half_hz
    )
    inner_hz, outer_hz = np.full(2, 0.5 * half_hz), np.full(2, 1.6 * half_hz)
    for length in RUN_LENGTHS:
        inner_hz, outer_hz = search.narrow(inner_hz, outer_hz, length)
    middle = 0.5 * (inner_hz + outer_hz)
    return LockEdges(
        free_hz=free_hz,
        lower_hz=free_hz - float(middle[0]),
        upper_hz=free_hz + float(middle[1]),
        resolution_hz=float(np.max(outer_hz - inner_hz)),
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class _Search:
    """What stays the same while the brackets narrow."""

    values: TankValues
    drive_v: float
    rate_hz: float
    free_hz: float
    half_width_hz: float

    def narrow(
        self, inner_hz: FloatArray, outer_hz: FloatArray, length: float
    ) -> tuple[FloatArray, FloatArray]:
        """Return tighter distances (lower, upper side) that are locked and not locked."""
        part = np.linspace(0.0, 1.0, DRIVES_A_SIDE)
        distance = inner_hz[:, np.newaxis] + (outer_hz - inner_hz)[:, np.newaxis] * part
        drive_hz = self.free_hz + distance * np.array([[-1.0], [1.0]])
        held = self._stays_locked(drive_hz.ravel(), length).reshape(distance.shape)
        if not np.all(held[:, 0]) or np.any(held[:, -1]):
            raise ValueError(
                f"lock edges: not between {inner_hz} and {outer_hz} Hz from the free "
                f"frequency {self.free_hz:.3f} Hz at {self.drive_v} V"
            )
        first_lost = np.argmin(held, axis=1)
        rows = np.arange(2)
        # Nearer than a cell outside the edge a slip outlasts the run: one cell more is let in.
        return distance[rows, np.maximum(first_lost - 2, 0)], distance[rows, first_lost]

    def _stays_locked(self, drive_hz: FloatArray, length: float) -> BoolArray:
        """Tell for each drive frequency whether the tank, locked before, keeps up."""
        unit_s = 1.0 / rad_s_from_hz(self.half_width_hz)
        grid = LaneGrid(
            rate_hz=self.rate_hz,
            frames=round(length * unit_s * self.rate_hz),
            settle_frames=round(10.0 * unit_s * self.rate_hz),
        )
        steps = [
            DriveStep(drive_v=self.drive_v, drive_hz=float(hz), before_hz=self.free_hz)
            for hz in drive_hz
        ]
        volts = integrate_tank(self.values, steps, grid=grid, rng=None)
        phase = generator_phase_rad(steps, np.arange(grid.frames) / self.rate_hz)
        block = round(BLOCK_CYCLES * self.rate_hz / self.free_hz)
        psi = block_phase_rad(volts, phase, block)
        return np.asarray(np.max(np.abs(psi - psi[0]), axis=0) < FALLEN_BEHIND_RAD)
