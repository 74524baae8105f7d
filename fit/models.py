"""The phase equation without noise, in closed form: trajectory, slopes, beat, rest, pull-in.

dpsi/dt = dw - K sin(psi - psi0); angles in rad, rates in rad/s (hertz: ``rig.angles``). One
formula serves drifting, critical and locked pairs. Noise is in ``fit.noise_physics``, its
likelihood in ``fit.likelihood``.

With theta = psi - psi0 and tan(theta/2) = p/q the equation is linear, (p, q)' = M (p, q),
M = ((-K, dw), (-dw, K))/2 and M^2 = (K^2 - dw^2)/4. So exp(M t) = C(x) + t S(x) M with
x = (K^2 - dw^2) t^2/4, C(x) = cosh sqrt x and S(x) = sinh sqrt x / sqrt x, both entire in x, and
theta turns by twice the angle between (p, q) at 0 and at t.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from rig.angles import wrap_angle_rad
from rig.arrays import FloatArray
from rig.errors import FitError

# Below this |x| the series of S and its slope are exact to rounding; above, the functions are.
SERIES_LIMIT = 1e-3


@dataclass(frozen=True, slots=True, kw_only=True)
class PhaseEquation:
    """Detuning dw, coupling K (at least 0) and offset psi0 of one pair.

    Raises
    ------
    FitError
        If a value is not finite or the coupling is negative.
    """

    detuning_rad_s: float
    coupling_rad_s: float
    offset_rad: float = 0.0

    def __post_init__(self) -> None:
        for name in ("detuning_rad_s", "coupling_rad_s", "offset_rad"):
            if not math.isfinite(getattr(self, name)):
                raise FitError(f"phase equation: {name} must be finite, got {getattr(self, name)}")
        if not self.coupling_rad_s >= 0.0:
            raise FitError(
                f"phase equation: coupling must be at least 0 rad/s, got {self.coupling_rad_s}; "
                "put its sign into the offset (half a turn)"
            )


def trajectory(equation: PhaseEquation, start_rad: float, time_s: FloatArray) -> FloatArray:
    """Return psi at the given times, unwrapped, for drifting, critical and locked pairs alike.

    Parameters
    ----------
    equation : PhaseEquation
    start_rad : float, rad
        psi at time 0.
    time_s : array, shape (n,), s
        Any order and spacing, negative times too.

    Returns
    -------
    array, shape (n,), rad

    Notes
    -----
    Turns are counted from the time itself, so sparse times are no danger. A start within
    rounding of the unstable point leaves it at a time that rounding decides.

    References
    ----------
    Adler 1946, Proc. IRE 34, 351-357 (recalled); the matrix form is derived in this module.
    """
    return _advance(equation, start_rad, np.asarray(time_s, dtype=float))[0]


def trajectory_slopes(equation: PhaseEquation, start_rad: float, time_s: FloatArray) -> FloatArray:
    """Return the derivatives of psi by detuning, coupling, offset and start.

    Parameters
    ----------
    equation, start_rad, time_s : as for ``trajectory``

    Returns
    -------
    array, shape (n, 4)
        By detuning (s), coupling (s), offset (1) and start angle (1).
    """
    return _advance(equation, start_rad, np.asarray(time_s, dtype=float))[1]


def _advance(
    equation: PhaseEquation, start_rad: float, time_s: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return psi (n,) and its derivatives (n, 4)."""
    dw, k = equation.detuning_rad_s, equation.coupling_rad_s
    theta = start_rad - equation.offset_rad
    sine, cosine = math.sin(theta), math.cos(theta)
    x = 0.25 * (k - dw) * (k + dw) * time_s**2
    c, s, s_slope, half_turns, shrink = _entire(x)
    ts, push = time_s * s, dw - k * sine
    cross = 0.5 * ts * push
    dot = c + 0.5 * k * cosine * ts
    size = cross**2 + dot**2
    # The count of half turns has the sign of dw t: drifting backward, or back in time.
    turns = half_turns * np.sign(dw * time_s)
    psi = start_rad + 2.0 * np.arctan2(cross, dot) + 2.0 * math.pi * turns
    x_dw, x_k = -0.5 * dw * time_s**2, 0.5 * k * time_s**2
    slopes = np.empty((time_s.size, 4))
    for column, x_by, d_push, d_pull in ((0, x_dw, 1.0, 0.0), (1, x_k, -sine, cosine)):
        ts_by = time_s * s_slope * x_by
        d_cross = 0.5 * (ts_by * push + ts * d_push)
        d_dot = 0.5 * s * x_by + 0.5 * (ts_by * k * cosine + ts * d_pull)
        slopes[:, column] = 2.0 * (dot * d_cross - cross * d_dot) / size
    # exp(M t) has determinant 1, so areas in the (p, q) plane are kept.
    slopes[:, 3] = shrink / size
    slopes[:, 2] = 1.0 - slopes[:, 3]
    return psi, slopes


def _entire(x: FloatArray) -> tuple[FloatArray, ...]:
    """Return C, S, dS/dx, the half turns taken out, and the squared scale.

    For x > 0 all three are scaled by exp(-sqrt x) so that long locked records do not overflow;
    for x < 0 whole half turns are taken out of cosine and sine.
    """
    root = np.sqrt(np.abs(x))
    grows = x > 0.0
    half_turns = np.where(grows, 0.0, np.round(root / math.pi))
    rest = root - math.pi * half_turns
    decay = np.exp(-2.0 * np.where(grows, root, 0.0))
    c = np.where(grows, 0.5 * (1.0 + decay), np.cos(rest))
    small = np.abs(x) < SERIES_LIMIT
    safe_root, safe_x = np.where(small, 1.0, root), np.where(small, 1.0, x)
    scale = np.where(grows, np.exp(-root), 1.0)
    odd = np.where(grows, 0.5 * (1.0 - decay), np.sin(rest))
    s = np.where(small, scale * _sinc_series(x), odd / safe_root)
    # With half turns out, C and S have both lost the same sign; dS/dx = (C - S)/(2 x).
    s_slope = np.where(small, scale * _slope_series(x), (c - s) / (2.0 * safe_x))
    return c, s, s_slope, half_turns, scale**2


def _sinc_series(x: FloatArray) -> FloatArray:
    return np.asarray(1.0 + x / 6.0 * (1.0 + x / 20.0 * (1.0 + x / 42.0 * (1.0 + x / 72.0))))


def _slope_series(x: FloatArray) -> FloatArray:
    return np.asarray(1.0 / 6.0 + x / 60.0 * (1.0 + x / 28.0 * (1.0 + x / 54.0)))


def beat_rate_rad_s(equation: PhaseEquation) -> float:
    """Return the mean rate of psi: sign(dw) sqrt(dw^2 - K^2) while drifting, 0 when locked.

    Parameters
    ----------
    equation : PhaseEquation

    Returns
    -------
    float, rad/s

    References
    ----------
    Adler 1946, Proc. IRE 34, 351-357 (recalled).
    """
    dw, k = equation.detuning_rad_s, equation.coupling_rad_s
    return math.copysign(math.sqrt(max((abs(dw) - k) * (abs(dw) + k), 0.0)), dw)


def relaxation_rate_rad_s(equation: PhaseEquation) -> float:
    """Return sqrt(K^2 - dw^2), at which a locked psi returns to its rest; 0 when drifting.

    Parameters
    ----------
    equation : PhaseEquation

    Returns
    -------
    float, rad/s
    """
    dw, k = abs(equation.detuning_rad_s), equation.coupling_rad_s
    return math.sqrt(max((k - dw) * (k + dw), 0.0))


def rest_angle_rad(equation: PhaseEquation) -> float:
    """Return the stable angle psi0 + asin(dw/K) of a locked pair, in (-pi, pi].

    Parameters
    ----------
    equation : PhaseEquation

    Returns
    -------
    float, rad

    Raises
    ------
    FitError
        If the pair drifts: it has no rest angle.
    """
    _require_lock(equation, "rest angle")
    ratio = equation.detuning_rad_s / equation.coupling_rad_s
    return wrap_angle_rad(equation.offset_rad + math.asin(ratio))


def pull_in_time_s(equation: PhaseEquation, start_rad: float, within_rad: float) -> float:
    """Return the time that psi needs from its start to within an angle of its rest.

    t = ln(sin((a-p)/2) cos((b+p)/2) / (sin((b-p)/2) cos((a+p)/2)))/sqrt(K^2 - dw^2), from a to
    b = p +- within, p = asin(dw/K), all measured from the offset.

    Parameters
    ----------
    equation : PhaseEquation
    start_rad : float, rad
    within_rad : float, rad, above 0

    Returns
    -------
    float, s
        0 when the start is within the angle already; infinite on the unstable point.

    Raises
    ------
    FitError
        If the pair drifts, sits on the edge, or the angle is not above 0.

    References
    ----------
    Adler 1946, Proc. IRE 34, 351-357 (recalled); integral checked by quadrature in the tests.
    """
    _require_lock(equation, "pull-in time")
    rate = relaxation_rate_rad_s(equation)
    if not (within_rad > 0.0 and rate > 0.0):
        raise FitError(
            f"pull-in time needs a lock inside the edge and an angle above 0 rad, got "
            f"{rate:g} rad/s and {within_rad:g} rad"
        )
    rest = math.asin(equation.detuning_rad_s / equation.coupling_rad_s)
    away = wrap_angle_rad(start_rad - equation.offset_rad - rest)
    unstable = math.pi - 2.0 * rest
    if away > unstable:
        away -= math.tau
    elif away < unstable - math.tau:
        away += math.tau
    if abs(away) <= within_rad:
        return 0.0
    left = math.copysign(within_rad, away)
    return (_log_ratio(away, rest) - _log_ratio(left, rest)) / rate


def _log_ratio(away: float, rest: float) -> float:
    """Return ln |sin(away/2)/cos(away/2 + rest)|, which falls at the relaxation rate."""
    below = abs(math.cos(0.5 * away + rest))
    return math.inf if below == 0.0 else math.log(abs(math.sin(0.5 * away)) / below)


def _require_lock(equation: PhaseEquation, what: str) -> None:
    if not 0.0 < equation.coupling_rad_s >= abs(equation.detuning_rad_s):
        raise FitError(
            f"{what}: the pair drifts, detuning {equation.detuning_rad_s:g} rad/s needs a "
            f"coupling above it, got {equation.coupling_rad_s:g} rad/s"
        )
