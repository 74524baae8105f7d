"""Two unbalanced exciters on one softly mounted frame: five degrees of freedom.

The frame moves in a plane (x, y, turn u); two rotors with equal unbalance p (mass times
eccentricity) turn in the same sense about axes at +l and -l from its centre of mass. With
small frame motion and gravity along the axes:

    M x'' + c x' + k x   = p sum_i (w_i^2 cos a_i + a_i'' sin a_i)
    M y'' + c y' + k y   = p sum_i (w_i^2 sin a_i - a_i'' cos a_i)
    I u'' + c_u u' + k_u u = p sum_i l_i (w_i^2 sin a_i - a_i'' cos a_i)
    J a_i'' = slope (w_free,i - w_i) + p (x'' sin a_i - (y'' + l_i u'') cos a_i)

M and I hold the rotors' masses. Above the mounting resonances the pair runs in phase when
M l^2 / I > 2 and in antiphase when it is less.

References
----------
Blekhman 1988, Synchronization in Science and Technology (recalled; rule re-derived).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from rig.angles import TURN_RAD, rad_s_from_hz
from rig.arrays import FloatArray
from rig.synthetic.lanes import LaneGrid, RateFunction, integrate_lanes, substeps_for
from rig.synthetic.records import SimulatedCapture


@dataclass(frozen=True, slots=True, kw_only=True)
class ExciterSettings:
    """Two exciters at about 25 turns a second on a frame of 100 kg.

    ``arm_ratio`` is M l^2 / I. ``free_1_hz`` and ``free_2_hz`` are the speeds at which the
    motors run with the frame held; ``slope_nms`` is the fall of motor torque with speed.
    ``torque_noise_nms`` is the noise torque's strength, N m sqrt(s). Exciter 2 starts
    ``start_apart_rad`` ahead of exciter 1.

    Raises
    ------
    ValueError
        If a value is out of its range.
    """

    duration_s: float = 30.0
    rate_hz: float = 1000.0
    free_1_hz: float = 25.0
    free_2_hz: float = 25.0
    arm_ratio: float = 1.0
    mass_kg: float = 100.0
    arm_m: float = 0.3
    unbalance_kgm: float = 0.1
    rotor_kgm2: float = 0.02
    slope_nms: float = 0.05
    mount_hz: float = 3.0
    mount_damping: float = 0.1
    torque_noise_nms: float = 0.0
    start_apart_rad: float = 1.2
    settle_s: float = 0.0
    recorder_noise: float = 1e-3

    def __post_init__(self) -> None:
        positive = ("duration_s", "rate_hz", "free_1_hz", "free_2_hz", "arm_ratio", "mass_kg")
        for name in (*positive, "arm_m", "unbalance_kgm", "rotor_kgm2", "slope_nms", "mount_hz"):
            if not getattr(self, name) > 0:
                raise ValueError(f"exciters: {name} must be above 0, got {getattr(self, name)}")
        for name in ("mount_damping", "torque_noise_nms", "settle_s", "recorder_noise"):
            if not getattr(self, name) >= 0:
                raise ValueError(f"exciters: {name} must be >= 0, got {getattr(self, name)}")


def exciter_rates(settings: ExciterSettings, arm_ratio: FloatArray) -> RateFunction:
    """Return the right-hand side for states (x, y, u, a_1, a_2 and their five rates).

    Parameters
    ----------
    settings : ExciterSettings, its arm_ratio is not used
    arm_ratio : array, shape (lanes,), M l^2 / I of each lane
    """
    mass, unbalance, rotor = settings.mass_kg, settings.unbalance_kgm, settings.rotor_kgm2
    inertia = mass * settings.arm_m**2 / arm_ratio
    natural = rad_s_from_hz(settings.mount_hz)
    free = rad_s_from_hz(1.0) * np.array([[settings.free_1_hz], [settings.free_2_hz]])
    arms = np.array([[settings.arm_m], [-settings.arm_m]])

    def both(rows: FloatArray) -> FloatArray:
        return np.asarray(rows[0] + rows[1])  # a reduction over two rows costs five times this

    def rates(state: FloatArray, drive: FloatArray, out: FloatArray) -> None:
        place, speed, turning = state[:3], state[5:8], state[8:]
        sine, cosine = np.sin(state[3:5]), np.cos(state[3:5])
        pull = unbalance * turning * turning
        held = -2.0 * settings.mount_damping * natural * speed - natural**2 * place
        held[0] += both(pull * cosine) / mass
        held[1] += both(pull * sine) / mass
        held[2] += both(arms * pull * sine) / inertia
        torque = settings.slope_nms * (free - turning) + unbalance * (
            held[0] * sine - (held[1] + arms * held[2]) * cosine
        )
        change = _rotor_changes(torque, sine, cosine)
        out[:5] = state[5:]
        out[5] = held[0] + unbalance * both(change * sine) / mass
        out[6] = held[1] - unbalance * both(change * cosine) / mass
        out[7] = held[2] - unbalance * both(arms * change * cosine) / inertia
        out[8:] = change

    def _rotor_changes(torque: FloatArray, sine: FloatArray, cosine: FloatArray) -> FloatArray:
        """Solve the two rotors' accelerations, coupled through the frame's acceleration."""
        squared = unbalance**2
        own = rotor - squared * (1.0 / mass + settings.arm_m**2 * cosine**2 / inertia)
        across = -squared * (
            (sine[0] * sine[1] + cosine[0] * cosine[1]) / mass
            - settings.arm_m**2 * cosine[0] * cosine[1] / inertia
        )
        determinant = own[0] * own[1] - across * across
        solved = np.stack(
            [own[1] * torque[0] - across * torque[1], own[0] * torque[1] - across * torque[0]]
        )
        return np.asarray(solved / determinant)

    return rates


def integrate_exciters(
    settings: ExciterSettings, arm_ratio: FloatArray, *, rng: np.random.Generator | None
) -> FloatArray:
    """Return frame motion and rotor angles, shape (frames, 5, lanes), m and rad.

    Parameters
    ----------
    settings : ExciterSettings, its arm_ratio is not used
    arm_ratio : array, shape (lanes,)
    rng : source of the torque noise; None integrates without noise
    """
    grid = LaneGrid(
        rate_hz=settings.rate_hz,
        frames=round(settings.duration_s * settings.rate_hz),
        settle_frames=round(settings.settle_s * settings.rate_hz),
        substeps=substeps_for(settings.rate_hz, max(settings.free_1_hz, settings.free_2_hz)),
    )
    start = np.zeros((10, arm_ratio.size))
    start[4] = settings.start_apart_rad
    start[8] = rad_s_from_hz(settings.free_1_hz)
    start[9] = rad_s_from_hz(settings.free_2_hz)
    strength = np.zeros(10)
    strength[8:] = settings.torque_noise_nms / settings.rotor_kgm2
    quiet = rng is None or settings.torque_noise_nms == 0
    return integrate_lanes(
        exciter_rates(settings, arm_ratio),
        start,
        grid=grid,
        noise=None if quiet or rng is None else (strength, rng),
        keep=slice(0, 5),
    )


def simulate_exciters(settings: ExciterSettings, rng: np.random.Generator) -> SimulatedCapture:
    """Return a once-per-turn eccentric-collar signal of each exciter and the frame motion.

    Parameters
    ----------
    settings : ExciterSettings
    rng : source of every chance in it
    """
    motion = integrate_exciters(settings, np.array([settings.arm_ratio]), rng=rng)[:, :, 0]
    samples = np.stack([np.cos(motion[:, 3]), np.cos(motion[:, 4]), 1e3 * motion[:, 1]])
    samples += settings.recorder_noise * rng.standard_normal(samples.shape)
    apart = motion[-1, 4] - motion[-1, 3]
    return SimulatedCapture(
        rig="exciters",
        samples=samples,
        rate_hz=settings.rate_hz,
        channels=("exciter 1", "exciter 2", "frame"),
        units=("V", "V", "mm"),
        truth=(
            ("free_1_hz", settings.free_1_hz, "Hz"),
            ("free_2_hz", settings.free_2_hz, "Hz"),
            ("arm_ratio", settings.arm_ratio, ""),
            ("final_angle_rad", float(np.mod(apart, TURN_RAD)), "rad"),
        ),
    )
