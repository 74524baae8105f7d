"""How much noise scatters the time in which a pair pulls in.

psi runs into the tolerance about its rest by dpsi = f(psi) dt + sqrt(2 D) dW. Mean T and
variance V of the time of first passage obey, with both ends of the tolerance absorbing,

    f T' + D T'' = -1,      f V' + D V'' = -2 D T'^2,

the second from the equation of the second moment. In weak noise T' = -1/f and V is the
integral of 2 D / f^2 over the noise-free way: most comes from the slow parts, near the
unstable angle and at the entry. The full equations also hold where noise decides the side.
"""

from __future__ import annotations

import math

import numpy as np

from fit.models import PhaseEquation, relaxation_rate_rad_s
from rig.arrays import FloatArray
from rig.errors import FitError

NODES = 4001  # a hundredth of the narrowest tolerance (0.1 rad) apart, nearly
LARGEST_EXPONENT = 700.0  # exp() of more overflows


def passage_spread_s(
    equation: PhaseEquation, noise_rad2_s: float, start_rad: float, within_rad: float
) -> float:
    """Return the standard deviation of the time to come within an angle of the rest.

    Parameters
    ----------
    equation : PhaseEquation of a pair inside the edge
    noise_rad2_s : float, D, at least 0
    start_rad : float, rad
    within_rad : float, rad, above 0 and below half a turn

    Returns
    -------
    float, s
        0 when the start is within the angle already.

    Raises
    ------
    FitError
        If the pair is not inside the edge, or noise or angle are out of their ranges.

    References
    ----------
    Gardiner 2009, Stochastic Methods, 5.5 (moments of passage times; recalled).
    """
    rate = relaxation_rate_rad_s(equation)
    if not (rate > 0.0 and noise_rad2_s >= 0.0 and 0.0 < within_rad < math.pi):
        raise FitError(
            "spread of a pull-in needs a pair inside the edge, noise of at least 0 and an angle "
            f"between 0 and half a turn, got {rate:g} rad/s, {noise_rad2_s:g} rad2/s and "
            f"{within_rad:g} rad"
        )
    rest = math.asin(equation.detuning_rad_s / equation.coupling_rad_s)
    # From the rest a turn below to this one: the unstable angle lies between.
    way = np.linspace(rest - math.tau + within_rad, rest - within_rad, NODES)
    start = (start_rad - equation.offset_rad - rest) % math.tau + rest - math.tau
    if not way[0] < start < way[-1]:
        return 0.0
    slope = equation.detuning_rad_s - equation.coupling_rad_s * np.sin(way)
    return math.sqrt(float(np.interp(start, way, _variance(way, slope, noise_rad2_s))))


def _variance(way: FloatArray, drift: FloatArray, noise: float) -> FloatArray:
    """Return V at each node, 0 at the ends."""
    step = float(way[1] - way[0])
    # A floor far below rounding of the drift keeps the noise-free limit finite.
    held = max(noise, 1e-9 * step * float(np.max(np.abs(drift))))
    matrix = _generator(drift, held, step)
    inner = -np.ones(way.size)
    inner[[0, -1]] = 0.0
    mean = _solve(matrix, inner)
    squares = (np.diff(mean) / step) ** 2
    source = np.zeros(way.size)
    source[1:-1] = -noise * (squares[1:] + squares[:-1])
    return np.asarray(np.maximum(_solve(matrix, source), 0.0))


def _generator(drift: FloatArray, noise: float, step: float) -> FloatArray:
    """Return f d/dx + D d2/dx2 in bands, exponentially fitted; the ends hold their value."""
    between = 0.5 * (drift[1:] + drift[:-1]) * step / noise
    up, down = (noise / step**2 * _bernoulli(sign * between) for sign in (-1.0, 1.0))
    bands = np.zeros((3, drift.size))
    bands[0, 1:-1] = down[:-1]
    bands[2, 1:-1] = up[1:]
    bands[1, 1:-1] = -(up[1:] + down[:-1])
    bands[1, [0, -1]] = 1.0
    return bands


def _solve(bands: FloatArray, right: FloatArray) -> FloatArray:
    """Return x of the three bands (below, on and above the diagonal) times x = right.

    Elimination without pivots is stable here: no diagonal is smaller than its row's rest.
    """
    below, diagonal, above, wanted = (row.tolist() for row in (*bands, right))
    for k in range(1, len(wanted)):
        part = below[k] / diagonal[k - 1]
        diagonal[k] -= part * above[k - 1]
        wanted[k] -= part * wanted[k - 1]
    wanted[-1] /= diagonal[-1]
    for k in range(len(wanted) - 2, -1, -1):
        wanted[k] = (wanted[k] - above[k] * wanted[k + 1]) / diagonal[k]
    return np.array(wanted)


def _bernoulli(x: FloatArray) -> FloatArray:
    """Return x / (exp x - 1)."""
    safe = np.where(np.abs(x) < 1e-8, 1.0, np.clip(x, -LARGEST_EXPONENT, LARGEST_EXPONENT))
    near_zero = np.abs(x) < 1e-8
    return np.asarray(np.where(near_zero, 1.0 - 0.5 * x, np.where(x < 0, x, safe) / np.expm1(safe)))
