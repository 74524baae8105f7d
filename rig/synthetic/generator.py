"""The generator that drives a rig: amplitude, frequency, and the step into that frequency."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from rig.angles import TURN_RAD
from rig.arrays import FloatArray, IntArray
from rig.synthetic.lanes import DriveFunction, LaneGrid


@dataclass(frozen=True, slots=True, kw_only=True)
class DriveStep:
    """What the generator does in one capture: amplitude, and the step into its frequency.

    The generator runs at ``before_hz`` until the capture starts and then, its phase going on
    unbroken, at ``drive_hz``. ``phase_rad`` is its phase at the step.
    """

    drive_v: float
    drive_hz: float
    before_hz: float
    phase_rad: float = 0.0


def generator_phase_rad(steps: Sequence[DriveStep], time_s: FloatArray) -> FloatArray:
    """Return the generator phase of each capture, shape (times, captures); step at time 0."""
    before = np.array([step.before_hz for step in steps])
    after = np.array([step.drive_hz for step in steps])
    phase = np.array([step.phase_rad for step in steps])
    column = time_s[:, np.newaxis]
    return phase + TURN_RAD * np.where(column < 0.0, before, after) * column


def injected_drive(
    steps: Sequence[DriveStep], grid: LaneGrid, *, strength_per_v: float
) -> DriveFunction:
    """Return the drive of each capture, strength_per_v times the generator voltage.

    Parameters
    ----------
    steps : sequence of DriveStep, one a capture
    grid : LaneGrid of the integration; the frequency steps at its first kept frame
    strength_per_v : float, drive unit of the rig per volt of the generator
    """
    strength = strength_per_v * np.array([step.drive_v for step in steps])

    def drive(half_steps: IntArray) -> FloatArray:
        phase = generator_phase_rad(steps, grid.half_step_time_s(half_steps))
        return np.asarray(strength * np.cos(phase))

    return drive
