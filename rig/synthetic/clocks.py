"""Two clocks (metronomes) on one beam that can move: a mutual pair.

In the time unit of the mean small-swing frequency, with y the beam's displacement scaled so
that its acceleration acts on a pendulum as gravity does:

    th_i'' + (1 +- delta) sin th_i + mu ((th_i / th_0)^2 - 1) th_i' + cos th_i y'' = - torque
    y'' + friction y' = - beta (sin th_1 + sin th_2)''

Without friction this is the model of metronomes on a base that rolls freely, and the pair
settles in phase; a beam held by friction lets it settle in antiphase. Clock 1 is the faster.

References
----------
Pantaleone 2002, Am. J. Phys. 70, 992 (equation read in a secondary source).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from rig.angles import hz_from_rad_s
from rig.arrays import FloatArray
from rig.synthetic.lanes import LaneGrid, RateFunction, integrate_lanes, substeps_for
from rig.synthetic.records import SimulatedCapture


@dataclass(frozen=True, slots=True, kw_only=True)
class ClockSettings:
    """Two clocks on a beam; the defaults are metronomes at 104 swings a minute.

    ``delta`` is half the relative difference of the restoring forces, ``beta`` the coupling
    through the beam, ``mu`` the strength of the escapement, ``angle_rad`` the angle where it
    turns from driving to damping. ``beam_friction`` is in units of the frequency.
    ``torque_noise`` is what the swing rate gathers in one second, rad/s per sqrt(s).
    ``start_apart_rad`` is the phase by which clock 2 starts behind clock 1.

    Raises
    ------
    ValueError
        If a value is out of its range.
    """

    duration_s: float = 120.0
    rate_hz: float = 100.0
    natural_rad_s: float = 10.9
    delta: float = 0.001
    beta: float = 0.011
    mu: float = 0.010
    angle_rad: float = 0.39
    beam_friction: float = 0.0
    torque_noise: float = 0.03
    start_apart_rad: float = 1.0
    settle_s: float = 0.0
    recorder_noise_rad: float = 1e-3

    def __post_init__(self) -> None:
        for name in ("duration_s", "rate_hz", "natural_rad_s", "mu", "angle_rad"):
            if not getattr(self, name) > 0:
                raise ValueError(f"clocks: {name} must be above 0, got {getattr(self, name)}")
        for name in ("beam_friction", "torque_noise", "settle_s", "recorder_noise_rad"):
            if not getattr(self, name) >= 0:
                raise ValueError(f"clocks: {name} must be >= 0, got {getattr(self, name)}")
        if not abs(self.delta) < 1 or not 0 <= self.beta < 0.5:
            raise ValueError(
                f"clocks: needs |delta| < 1 and 0 <= beta < 0.5, got {self.delta}, {self.beta}"
            )


def clock_rates(settings: ClockSettings, delta: FloatArray, time_unit_rad_s: float) -> RateFunction:
    """Return the right-hand side for states (th_1, th_1', th_2, th_2', y').

    Parameters
    ----------
    settings : ClockSettings, its delta is not used
    delta : array, shape (lanes,), half difference of the restoring forces of each lane
    time_unit_rad_s : float, rad/s, the frequency that makes one unit of time (1 for none)
    """
    pull = np.stack([1.0 + delta, 1.0 - delta])
    beta, mu, friction = settings.beta, settings.mu, settings.beam_friction
    squared = settings.angle_rad**2

    def rates(state: FloatArray, drive: FloatArray, out: FloatArray) -> None:
        angle, speed, beam = state[0:4:2], state[1:4:2], state[4]
        sine, cosine = np.sin(angle), np.cos(angle)
        alone = -pull * sine - mu * (angle * angle / squared - 1.0) * speed
        # (sin th)'' = cos th th'' - sin th th'^2; th'' = alone - cos th y'', solved for y''.
        swing = cosine * alone - sine * speed * speed
        share = cosine * cosine
        beam_change = (-friction * beam - beta * (swing[0] + swing[1])) / (
            1.0 - beta * (share[0] + share[1])
        )
        out[0:4:2] = speed
        out[1:4:2] = alone - cosine * beam_change
        out[4] = beam_change
        out *= time_unit_rad_s

    return rates


def integrate_clocks(
    settings: ClockSettings,
    delta: FloatArray,
    *,
    rng: np.random.Generator | None,
) -> FloatArray:
    """Return both swing angles of several pairs at once, shape (frames, 2, lanes), rad.

    Parameters
    ----------
    settings : ClockSettings, its delta is not used
    delta : array, shape (lanes,)
    rng : source of the torque noise; None integrates without noise
    """
    grid = LaneGrid(
        rate_hz=settings.rate_hz,
        frames=round(settings.duration_s * settings.rate_hz),
        settle_frames=round(settings.settle_s * settings.rate_hz),
        substeps=substeps_for(settings.rate_hz, hz_from_rad_s(settings.natural_rad_s)),
    )
    swing = 2.0 * settings.angle_rad
    apart = settings.start_apart_rad
    one_lane = [swing, 0.0, swing * np.cos(apart), swing * np.sin(apart), 0.0]
    # The state is in units of time of 1 / natural frequency, so is the noise on its rates.
    strength = np.array([0.0, 1.0, 0.0, 1.0, 0.0]) * settings.torque_noise / settings.natural_rad_s
    return integrate_lanes(
        clock_rates(settings, delta, settings.natural_rad_s),
        np.tile(np.array(one_lane)[:, np.newaxis], (1, delta.size)),
        grid=grid,
        noise=None if rng is None or settings.torque_noise == 0 else (strength, rng),
        keep=slice(0, 3, 2),
    )


def simulate_clocks(settings: ClockSettings, rng: np.random.Generator) -> SimulatedCapture:
    """Return the swing angles of two clocks on a beam.

    Parameters
    ----------
    settings : ClockSettings
    rng : source of every chance in it
    """
    angles = integrate_clocks(settings, np.array([settings.delta]), rng=rng)[:, :, 0]
    samples = np.ascontiguousarray(angles.T)
    samples += settings.recorder_noise_rad * rng.standard_normal(samples.shape)
    natural_hz = hz_from_rad_s(settings.natural_rad_s)
    return SimulatedCapture(
        rig="clocks",
        samples=samples,
        rate_hz=settings.rate_hz,
        channels=("clock 1", "clock 2"),
        units=("rad", "rad"),
        truth=(
            ("small_swing_1_hz", natural_hz * (1.0 + settings.delta) ** 0.5, "Hz"),
            ("small_swing_2_hz", natural_hz * (1.0 - settings.delta) ** 0.5, "Hz"),
            ("delta", settings.delta, ""),
            ("beta", settings.beta, ""),
        ),
    )
