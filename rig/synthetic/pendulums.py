"""Two free pendulums joined by a spring: linear, passive, and never locked.

    x_1'' + 2 d x_1' + (g/l) x_1 + (k/m)(x_1 - x_2) = 0,  and the same with 1 and 2 exchanged

The motion is the sum of two modes, both seen in both channels: the envelopes beat in turn,
and each mode alone keeps a constant phase between the channels. That is superposition, not
synchronisation, and an analyser must not call it locking.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from rig.angles import hz_from_rad_s
from rig.arrays import FloatArray
from rig.synthetic.lanes import LaneGrid, RateFunction, integrate_lanes, substeps_for
from rig.synthetic.records import SimulatedCapture


@dataclass(frozen=True, slots=True, kw_only=True)
class PendulumSettings:
    """Two pendulums of the same length and a spring between them.

    ``start_1_m`` and ``start_2_m`` are where they are let go; ``decay_s`` is the time in
    which the swing falls to 1/e, and ``spring_per_mass`` k/m in 1/s^2.

    Raises
    ------
    ValueError
        If a value is out of its range.
    """

    duration_s: float = 240.0
    rate_hz: float = 50.0
    length_m: float = 1.0
    gravity_m_s2: float = 9.80665
    spring_per_mass: float = 0.5
    decay_s: float = 300.0
    start_1_m: float = 0.05
    start_2_m: float = 0.0
    recorder_noise_m: float = 1e-4

    def __post_init__(self) -> None:
        for name in ("duration_s", "rate_hz", "length_m", "gravity_m_s2", "decay_s"):
            if not getattr(self, name) > 0:
                raise ValueError(f"pendulums: {name} must be above 0, got {getattr(self, name)}")
        if not self.spring_per_mass >= 0 or not self.recorder_noise_m >= 0:
            raise ValueError(
                "pendulums: spring_per_mass and recorder_noise_m must be >= 0, got "
                f"{self.spring_per_mass} and {self.recorder_noise_m}"
            )

    @property
    def together_hz(self) -> float:
        """Frequency of the mode in which both swing together, Hz."""
        return hz_from_rad_s(math.sqrt(self.gravity_m_s2 / self.length_m))

    @property
    def against_hz(self) -> float:
        """Frequency of the mode in which they swing against each other, Hz."""
        stiffness = self.gravity_m_s2 / self.length_m + 2.0 * self.spring_per_mass
        return hz_from_rad_s(math.sqrt(stiffness))


def pendulum_rates(settings: PendulumSettings) -> RateFunction:
    """Return the right-hand side for states (x_1, x_2, x_1', x_2')."""
    gravity = settings.gravity_m_s2 / settings.length_m

    def rates(state: FloatArray, drive: FloatArray, out: FloatArray) -> None:
        stretch = settings.spring_per_mass * (state[0] - state[1])
        out[:2] = state[2:]
        out[2:] = -gravity * state[:2] - (2.0 / settings.decay_s) * state[2:]
        out[2] -= stretch
        out[3] += stretch

    return rates


def simulate_pendulums(settings: PendulumSettings, rng: np.random.Generator) -> SimulatedCapture:
    """Return the displacement of two spring-coupled pendulums after they are let go.

    Parameters
    ----------
    settings : PendulumSettings
    rng : source of the recorder noise
    """
    grid = LaneGrid(
        rate_hz=settings.rate_hz,
        frames=round(settings.duration_s * settings.rate_hz),
        substeps=substeps_for(settings.rate_hz, settings.against_hz),
    )
    start = np.array([[settings.start_1_m], [settings.start_2_m], [0.0], [0.0]])
    states = integrate_lanes(pendulum_rates(settings), start, grid=grid, keep=slice(0, 2))
    samples = np.ascontiguousarray(states[:, :, 0].T)
    samples += settings.recorder_noise_m * rng.standard_normal(samples.shape)
    return SimulatedCapture(
        rig="pendulums",
        samples=samples,
        rate_hz=settings.rate_hz,
        channels=("pendulum 1", "pendulum 2"),
        units=("m", "m"),
        truth=(
            ("together_hz", settings.together_hz, "Hz"),
            ("against_hz", settings.against_hz, "Hz"),
            ("beat_hz", settings.against_hz - settings.together_hz, "Hz"),
        ),
    )
