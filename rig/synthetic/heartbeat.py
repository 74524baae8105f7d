"""A beating heart against paced breathing: spikes against a slow wave, locked 1:3 at times.

The heart is a leaky pacemaker cell that charges until it fires:

    tau du/dt = supply(t) - u + pull(t) cos(3 breath phase) + noise,   at u = 1: a beat, u = 0

Breathing is paced at an even rate. In two stretches the reflex from breathing pulls on the
cell at its third harmonic and the cell's own rate is near three beats a breath; in the rest
of the record there is no pull and the rate is 1.4 times that. The switching times are the
truth: the pull is so strong that locking follows within two seconds.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from rig.angles import TURN_RAD
from rig.arrays import BoolArray, FloatArray
from rig.synthetic.records import SimulatedCapture

# One beat as the electrodes see it: (delay s, width s, height mV) of bell-shaped waves.
BEAT_WAVES = (
    (-0.160, 0.025, 0.12),
    (-0.030, 0.010, -0.15),
    (0.000, 0.011, 1.00),
    (0.030, 0.011, -0.25),
    (0.230, 0.045, 0.30),
)
BEATS_A_BREATH = 3


@dataclass(frozen=True, slots=True, kw_only=True)
class HeartbeatSettings:
    """Three minutes of heartbeat and paced breathing with two locked stretches.

    ``pull`` and ``noise`` are in units of the firing threshold; ``free_ratio`` is beats a
    breath over three outside the locked stretches, ``near_ratio`` inside them.

    Raises
    ------
    ValueError
        If a value is out of its range or the stretches overlap.
    """

    duration_s: float = 180.0
    rate_hz: float = 250.0
    breath_hz: float = 0.3
    free_ratio: float = 1.4
    near_ratio: float = 1.02
    pull: float = 1.2
    tau_s: float = 0.6
    noise: float = 0.03
    lock_1_s: float = 30.0
    unlock_1_s: float = 75.0
    lock_2_s: float = 110.0
    unlock_2_s: float = 150.0
    recorder_noise: float = 0.01

    def __post_init__(self) -> None:
        positive = ("duration_s", "rate_hz", "breath_hz", "free_ratio", "near_ratio", "tau_s")
        for name in positive:
            if not getattr(self, name) > 0:
                raise ValueError(f"heartbeat: {name} must be above 0, got {getattr(self, name)}")
        for name in ("pull", "noise", "recorder_noise"):
            if not getattr(self, name) >= 0:
                raise ValueError(f"heartbeat: {name} must be >= 0, got {getattr(self, name)}")
        if not self.lock_1_s <= self.unlock_1_s <= self.lock_2_s <= self.unlock_2_s:
            raise ValueError(
                "heartbeat: locked stretches must follow each other, got "
                f"{self.lock_1_s}-{self.unlock_1_s} s and {self.lock_2_s}-{self.unlock_2_s} s"
            )

    def locked_at(self, time_s: FloatArray) -> BoolArray:
        """Tell for each time whether breathing pulls on the heart."""
        first = (time_s >= self.lock_1_s) & (time_s < self.unlock_1_s)
        second = (time_s >= self.lock_2_s) & (time_s < self.unlock_2_s)
        return np.asarray(first | second)


def integrate_beats(settings: HeartbeatSettings, rng: np.random.Generator) -> FloatArray:
    """Return the times of the beats, s.

    The drive is held over each step of 1/(2 rate), over which the charging law is solved
    exactly; the firing instant inside a step is interpolated linearly.
    """
    step_s = 0.5 / settings.rate_hz
    steps = math.ceil(settings.duration_s / step_s)
    middle_s = step_s * (0.5 + np.arange(steps, dtype=np.float64))
    level = _supply(settings, middle_s)
    kicks = settings.noise * math.sqrt(step_s) * rng.standard_normal(steps)
    fall = math.exp(-step_s / settings.tau_s)
    charge, beats = float(rng.uniform(0.0, 1.0)), []
    for number, (target, kick) in enumerate(zip(level.tolist(), kicks.tolist(), strict=True)):
        after = target + (charge - target) * fall + kick
        if after >= 1.0:
            part = (1.0 - charge) / (after - charge)
            beats.append((number + part) * step_s)
            after = target * (1.0 - math.exp(-(1.0 - part) * step_s / settings.tau_s))
        charge = after
    return np.array(beats)


def _supply(settings: HeartbeatSettings, time_s: FloatArray) -> FloatArray:
    """Return what the cell would charge to, in units of its threshold, pull included."""
    locked = settings.locked_at(time_s)
    ratio = np.where(locked, settings.near_ratio, settings.free_ratio)
    period_s = 1.0 / (BEATS_A_BREATH * settings.breath_hz * ratio)
    alone = 1.0 / -np.expm1(-period_s / settings.tau_s)
    reflex = np.cos(BEATS_A_BREATH * TURN_RAD * settings.breath_hz * time_s)
    return np.asarray(alone + np.where(locked, settings.pull * reflex, 0.0))


def simulate_heartbeat(settings: HeartbeatSettings, rng: np.random.Generator) -> SimulatedCapture:
    """Return breathing (reference) and electrode voltage (driven).

    Parameters
    ----------
    settings : HeartbeatSettings
    rng : source of every chance in it
    """
    beats_s = integrate_beats(settings, rng)
    time_s = np.arange(round(settings.duration_s * settings.rate_hz)) / settings.rate_hz
    phase = TURN_RAD * settings.breath_hz * time_s
    breath = np.cos(phase) + 0.2 * np.cos(2.0 * phase + 0.5)
    samples = np.stack([breath, _electrode_mv(time_s, beats_s)])
    samples += settings.recorder_noise * rng.standard_normal(samples.shape)
    return SimulatedCapture(
        rig="heartbeat",
        samples=samples,
        rate_hz=settings.rate_hz,
        channels=("breathing", "heart"),
        units=("l", "mV"),
        truth=(
            ("breath_hz", settings.breath_hz, "Hz"),
            ("free_driven_hz", BEATS_A_BREATH * settings.breath_hz * settings.free_ratio, "Hz"),
            ("beats", float(beats_s.size), ""),
            ("episode_1_start_s", settings.lock_1_s, "s"),
            ("episode_1_stop_s", settings.unlock_1_s, "s"),
            ("episode_2_start_s", settings.lock_2_s, "s"),
            ("episode_2_stop_s", settings.unlock_2_s, "s"),
        ),
    )


def _electrode_mv(time_s: FloatArray, beats_s: FloatArray) -> FloatArray:
    """Return the sum of the waves of all beats, each added only where it is not nothing."""
    voltage = np.zeros(time_s.size)
    for beat_s in beats_s:
        near = slice(*np.searchsorted(time_s, [beat_s - 0.4, beat_s + 0.5]))
        after_s = time_s[near] - beat_s
        for delay_s, width_s, height_mv in BEAT_WAVES:
            voltage[near] += height_mv * np.exp(-0.5 * ((after_s - delay_s) / width_s) ** 2)
    return voltage
