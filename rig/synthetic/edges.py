"""The true lock edges of an oscillator under injection, by noise-free integration alone.

No phase equation and no estimator: the very integrator that makes the captures is run
without noise at a row of drive frequencies, and a drive frequency is inside the locking
region when the oscillator, started in lock at the free frequency, never falls behind by more than
half a turn. Two rows, the second finer, narrow each edge to 0.3 % of the half-width.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from rig.angles import hz_from_rad_s, rad_s_from_hz
from rig.arrays import BoolArray, FloatArray
from rig.synthetic.generator import DriveStep, generator_phase_rad
from rig.synthetic.lanes import LaneGrid

DRIVES_A_SIDE = 32
FALLEN_BEHIND_RAD = 1.2 * math.pi  # the unstable angle is never more than pi from the start
BLOCK_CYCLES = 10  # cycles a phase reading averages over
RUN_LENGTHS = (28.0, 120.0)  # in 1/K: longer than a slip takes one cell outside the edge


IntegrateFunction = Callable[[Sequence[DriveStep], LaneGrid], FloatArray]
"""integrate(steps, grid): noise-free output of each capture, shape (frames, captures)."""


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


@dataclass(frozen=True, slots=True, kw_only=True)
class QuietRig:
    """An oscillator that can be run without noise, on the time grid of its captures.

    ``nominal_hz`` is roughly the free frequency, for the lengths of runs; ``rate_hz`` and
    ``substeps`` are those
    of the captures, so that truth and captures share the error of the step.

    Raises
    ------
    ValueError
        If frequency, rate or substeps are not above 0.
    """

    integrate: IntegrateFunction
    nominal_hz: float
    rate_hz: float
    substeps: int = 2

    def __post_init__(self) -> None:
        for name in ("rate_hz", "nominal_hz", "substeps"):
            if not getattr(self, name) > 0:
                raise ValueError(f"quiet rig: {name} must be above 0, got {getattr(self, name)}")

    def grid(self, duration_s: float, settle_s: float) -> LaneGrid:
        """Return the time grid of a run of this rig."""
        return LaneGrid(
            rate_hz=self.rate_hz,
            frames=round(duration_s * self.rate_hz),
            settle_frames=round(settle_s * self.rate_hz),
            substeps=self.substeps,
        )


def find_free_frequency_hz(rig: QuietRig, *, cycles: float = 500.0) -> float:
    """Return the frequency at which an oscillator runs alone, without noise, Hz.

    Its level crossings give it roughly, the phase against that frequency then finely.

    Parameters
    ----------
    rig : QuietRig, its output crosses its mean upwards once a cycle
    cycles : float, nominal cycles of the run; a fifth more is run first for settling
    """
    duration_s = cycles / rig.nominal_hz
    alone = DriveStep(drive_v=0.0, drive_hz=rig.nominal_hz, before_hz=rig.nominal_hz)
    volts = rig.integrate([alone], rig.grid(duration_s, 0.2 * duration_s))
    above = volts[:, 0] > np.mean(volts)
    upward = np.flatnonzero(~above[:-1] & above[1:])
    rough_hz = (upward.size - 1) * rig.rate_hz / float(upward[-1] - upward[0])
    against = DriveStep(drive_v=0.0, drive_hz=rough_hz, before_hz=rough_hz)
    psi = _psi_blocks(rig, [against], volts)[:, 0]
    block_s = _block_frames(rig) / rig.rate_hz
    return rough_hz + hz_from_rad_s(float(psi[-1] - psi[0]) / ((psi.size - 1) * block_s))


def find_lock_edges(rig: QuietRig, *, drive_v: float, half_width_hz: float) -> LockEdges:
    """Return the lock edges of the noise-free oscillator at one injected amplitude.

    Parameters
    ----------
    rig : QuietRig
    drive_v : float, V, generator amplitude, above 0
    half_width_hz : float, Hz, guess of the lock half-width, right within 0.5 to 1.6 times

    Raises
    ------
    ValueError
        If drive or guess are not above 0, or an edge lies outside that range.
    """
    if not drive_v > 0 or not half_width_hz > 0:
        raise ValueError(
            f"lock edges: drive and guess must be above 0, got {drive_v} V and {half_width_hz} Hz"
        )
    free_hz = find_free_frequency_hz(rig)
    search = _Search(rig=rig, free_hz=free_hz, drive_v=drive_v, half_width_hz=half_width_hz)
    inner_hz = np.full(2, 0.5 * half_width_hz)
    outer_hz = np.full(2, 1.6 * half_width_hz)
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

    rig: QuietRig
    free_hz: float
    drive_v: float
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
        """Tell for each drive frequency whether the oscillator, locked before, keeps up."""
        unit_s = 1.0 / rad_s_from_hz(self.half_width_hz)
        steps = [
            DriveStep(drive_v=self.drive_v, drive_hz=float(hz), before_hz=self.free_hz)
            for hz in drive_hz
        ]
        volts = self.rig.integrate(steps, self.rig.grid(length * unit_s, 10.0 * unit_s))
        psi = _psi_blocks(self.rig, steps, volts)
        return np.asarray(np.max(np.abs(psi - psi[0]), axis=0) < FALLEN_BEHIND_RAD)


def _block_frames(rig: QuietRig) -> int:
    return round(BLOCK_CYCLES * rig.rate_hz / rig.nominal_hz)


def _psi_blocks(rig: QuietRig, steps: Sequence[DriveStep], volts: FloatArray) -> FloatArray:
    """Return the phase of an output against the generator, one reading a block."""
    phase = generator_phase_rad(steps, np.arange(volts.shape[0]) / rig.rate_hz)
    return block_phase_rad(volts - np.mean(volts, axis=0), phase, _block_frames(rig))
