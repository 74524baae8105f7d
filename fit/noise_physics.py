"""What white noise does to a pair: mean rate, diffusion, slips and resultant length of psi.

dpsi = (dw - K sin(psi - psi0)) dt + sqrt(2 D) dW with dw, K in rad/s and D in rad^2/s (free
psi spreads as Var = 2 D t). All are exact laws of this equation, computed so that they stay
accurate from D far below K to D far above it; none looks at data. The comparison of an
estimate with them stands in ``fit.noise_checks``.
"""

from __future__ import annotations

import cmath
import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from fit.bessel import scaled_bessel
from rig.angles import TURN_RAD
from rig.arrays import ComplexArray, FloatArray
from rig.errors import FitError

# exp(-EXPONENT_SPAN) of its peak is the part of an integrand that is left out.
EXPONENT_SPAN = 42.0
NODES, WEIGHTS = np.polynomial.legendre.leggauss(48)
# Panels halve towards the lower end, where the integrand may rise like an inverse root.
PANELS = 24
# Below this share of K the linear system loses the diffusion to rounding; slips are then so
# rare that the two directions are independent counts, and the law of those is exact.
RARE_SHARE = 1e-8
# Rate at the edge of the noise-free region in units of K (D/K)^(1/3).
EDGE_RATE = 0.795441278045


@dataclass(frozen=True, slots=True, kw_only=True)
class SlipRates:
    """Slips of psi by +1 and by -1 turn, per second."""

    forward_hz: float
    backward_hz: float


def _refuse(detuning_rad_s: float, coupling_rad_s: float, noise_rad2_s: float) -> None:
    """Refuse parameters that are not those of a noisy pair."""
    for name, value in (("coupling", coupling_rad_s), ("noise", noise_rad2_s)):
        if not (math.isfinite(value) and value >= 0.0):
            raise FitError(f"noisy phase equation: {name} must be at least 0, got {value}")
    if not math.isfinite(detuning_rad_s):
        raise FitError(f"noisy phase equation: detuning must be finite, got {detuning_rad_s}")


def mean_rate_rad_s(detuning_rad_s: float, coupling_rad_s: float, noise_rad2_s: float) -> float:
    """Return the long-time mean of dpsi/dt.

    D (1 - exp(-2 pi dw/D)) / int_0^2pi exp(-dw u/D) I0((2 K/D) sin(u/2)) du, in which every
    term is positive, so that no digit is lost however rare the slips are.

    Parameters
    ----------
    detuning_rad_s : float, rad/s
    coupling_rad_s : float, rad/s, at least 0
    noise_rad2_s : float, rad^2/s, at least 0

    Returns
    -------
    float, rad/s, sign of the detuning

    Raises
    ------
    FitError
        If a value is negative or not finite.

    Notes
    -----
    The same as Stratonovich's D sinh(pi dw/D) / (pi |I_(i dw/D)(K/D)|^2). Without noise
    sqrt(dw^2 - K^2) outside the locking region and 0 inside.

    References
    ----------
    Stratonovich 1967, Topics in the Theory of Random Noise, vol. 2, ch. 9; Ambegaokar and
    Halperin 1969, Phys. Rev. Lett. 22, 1364 (recalled).
    """
    _refuse(detuning_rad_s, coupling_rad_s, noise_rad2_s)
    if coupling_rad_s == 0.0:
        return detuning_rad_s
    if noise_rad2_s < 1e-9 * max(coupling_rad_s, abs(detuning_rad_s)):
        squared = detuning_rad_s**2 - coupling_rad_s**2
        return math.copysign(math.sqrt(max(squared, 0.0)), detuning_rad_s)
    return detuning_rad_s * _mobility(detuning_rad_s, coupling_rad_s, noise_rad2_s)


def _mobility(detuning_rad_s: float, coupling_rad_s: float, noise_rad2_s: float) -> float:
    """Return mean rate over detuning; at zero detuning its limit 1/I0(K/D)^2."""
    ratio = abs(detuning_rad_s) / noise_rad2_s
    height = coupling_rad_s / noise_rad2_s
    log_area = _log_area(ratio, height)
    factor = TURN_RAD if ratio == 0.0 else -math.expm1(-TURN_RAD * ratio) / ratio
    return factor * math.exp(-log_area)


def _log_area(ratio: float, height: float) -> float:
    """Return ln of 2 int_0^pi exp(-2 r w) I0(2 h sin w) dw, r = dw/D, h = K/D, w = u/2."""

    def exponent(w: float) -> float:
        return 2.0 * (height * math.sin(w) - ratio * w)

    peak = math.acos(ratio / height) if ratio < height else 0.0
    top = exponent(peak)
    low = _where_below(exponent, peak, 0.0, top - EXPONENT_SPAN)
    high = _where_below(exponent, peak, math.pi, top - EXPONENT_SPAN)
    edges = np.concatenate([[0.0], 2.0 ** -np.arange(PANELS - 1, -1, -1.0)]) * (high - low) + low
    half = 0.5 * np.diff(edges)[:, None]
    w = 0.5 * (edges[1:] + edges[:-1])[:, None] + half * NODES
    sine = np.sin(w)
    values = scaled_bessel(2.0 * height * sine) * np.exp(2.0 * (height * sine - ratio * w) - top)
    return top + math.log(2.0 * float(np.sum(half * WEIGHTS * values)))


def _where_below(
    exponent: Callable[[float], float], peak: float, end: float, level: float
) -> float:
    """Return where the concave exponent falls to a level between its peak and an end."""
    if exponent(end) >= level:
        return end
    inside, outside = peak, end
    for _ in range(60):
        middle = 0.5 * (inside + outside)
        if exponent(middle) >= level:
            inside = middle
        else:
            outside = middle
    return outside


def stationary_moments(
    detuning_rad_s: float, coupling_rad_s: float, noise_rad2_s: float, count: int
) -> ComplexArray:
    """Return z_k = E exp(i k (psi - psi0)) of the stationary law for k = 0 to count.

    z_k / z_(k-1) = (K/2) / (k D - i dw + (K/2) z_(k+1)/z_k), solved downwards.

    Parameters
    ----------
    detuning_rad_s, coupling_rad_s : float, rad/s
    noise_rad2_s : float, rad^2/s, above 0
    count : int, at least 1

    Returns
    -------
    complex array, shape (count + 1,)

    Raises
    ------
    FitError
        If a value is negative or not finite, or the noise is 0.

    References
    ----------
    Risken 1989, The Fokker-Planck Equation, section 11.3 (recalled).
    """
    _refuse(detuning_rad_s, coupling_rad_s, noise_rad2_s)
    if not noise_rad2_s > 0.0:
        raise FitError("stationary moments: noise must be above 0 rad2/s, got 0")
    half = 0.5 * coupling_rad_s
    last = count + moment_terms(detuning_rad_s, coupling_rad_s, noise_rad2_s)
    ratio = 0.0 + 0.0j
    ratios = np.empty(last + 1, dtype=complex)
    for k in range(last, 0, -1):
        ratio = half / (k * noise_rad2_s - 1j * detuning_rad_s + half * ratio)
        ratios[k] = ratio
    ratios[0] = 1.0
    return np.asarray(np.cumprod(ratios[: count + 1]), dtype=complex)


def _terms(coupling_rad_s: float, noise_rad2_s: float) -> int:
    """Return how many moments matter: a locked psi has a width of about sqrt(D/K)."""
    return 40 + math.ceil(10.0 * math.sqrt(coupling_rad_s / noise_rad2_s))


def moment_terms(detuning_rad_s: float, coupling_rad_s: float, noise_rad2_s: float) -> int:
    """Return how many moments ``stationary_moments`` starts from, fewer where psi drifts.

    Parameters as there. The moments of a drifting psi fall off by
    K/(|dw| + sqrt(dw^2 - K^2)) each, whatever the noise; each step downwards takes the square
    of that off what the start was wrong by.
    """
    terms = _terms(coupling_rad_s, noise_rad2_s)
    speed = abs(detuning_rad_s)
    if not speed > coupling_rad_s > 0.0:
        return terms
    fall = (speed + math.sqrt(speed**2 - coupling_rad_s**2)) / coupling_rad_s
    return min(terms, 40 + math.ceil(20.0 / math.log(fall)))


def resultant_length(detuning_rad_s: float, coupling_rad_s: float, noise_rad2_s: float) -> float:
    """Return |E exp(i psi)| of the stationary law; parameters as for ``mean_rate_rad_s``."""
    return float(abs(stationary_moments(detuning_rad_s, coupling_rad_s, noise_rad2_s, 1)[1]))


def preferred_angle_rad(detuning_rad_s: float, coupling_rad_s: float, noise_rad2_s: float) -> float:
    """Return arg E exp(i (psi - psi0)); parameters as for ``mean_rate_rad_s``."""
    return cmath.phase(stationary_moments(detuning_rad_s, coupling_rad_s, noise_rad2_s, 1)[1])


def effective_diffusion_rad2_s(
    detuning_rad_s: float, coupling_rad_s: float, noise_rad2_s: float
) -> float:
    """Return the long-time diffusion of psi: its variance grows as 2 D_eff t.

    Second-order perturbation of the moment equations in the wave number: D + K Re u_1, with u
    the first-order change of the moments. Where slips are rare, pi v coth(pi dw/D).

    Parameters
    ----------
    detuning_rad_s, coupling_rad_s : float, rad/s
    noise_rad2_s : float, rad^2/s, above 0

    Returns
    -------
    float, rad^2/s

    Raises
    ------
    FitError
        If a value is negative or not finite, or the noise is 0.

    Notes
    -----
    Equal to the double integral of Reimann et al.; at zero detuning D / I0(K/D)^2.

    References
    ----------
    Reimann et al. 2001, Phys. Rev. Lett. 87, 010602 (recalled).
    """
    rare = _rare_diffusion(detuning_rad_s, coupling_rad_s, noise_rad2_s)
    if rare < RARE_SHARE * coupling_rad_s:
        return rare
    dw, half = detuning_rad_s, 0.5 * coupling_rad_s
    size = _terms(coupling_rad_s, noise_rad2_s)
    z = stationary_moments(dw, coupling_rad_s, noise_rad2_s, size + 1)
    rate = dw - coupling_rad_s * z[1].imag
    k = np.arange(1, size + 1)
    # First-order forcing (lambda_1 - M_1) z with lambda_1 = i v, each row over its own k.
    forcing = 1j * (rate - dw) * z[1:-1] + 2.0 * k * noise_rad2_s * z[1:-1]
    forcing += half * (z[2:] - z[:-2])
    diagonal = np.asarray(k * noise_rad2_s - 1j * dw, dtype=complex)
    change = _first_unknown(diagonal, half, np.asarray(-forcing / k, dtype=complex))
    return float(noise_rad2_s + coupling_rad_s * change.real)


def _first_unknown(diagonal: ComplexArray, half: float, right: ComplexArray) -> complex:
    """Return u_1 of half (u_(k+1) - u_(k-1)) + diagonal_k u_k = right_k, with u_0 = 0.

    Eliminated from the far end, where the moments vanish: each pivot keeps the positive real
    part of its diagonal, so none is lost.
    """
    pivot, rest = math.inf + 0.0j, 0.0j
    for own, wanted in zip(diagonal.tolist()[::-1], right.tolist()[::-1], strict=True):
        rest = wanted - half * rest / pivot
        pivot = own + half * half / pivot
    return rest / pivot


def _rare_diffusion(detuning_rad_s: float, coupling_rad_s: float, noise_rad2_s: float) -> float:
    """Return pi v coth(pi dw/D): independent slips both ways."""
    _refuse(detuning_rad_s, coupling_rad_s, noise_rad2_s)
    if not noise_rad2_s > 0.0:
        raise FitError("effective diffusion: noise must be above 0 rad2/s, got 0")
    if coupling_rad_s == 0.0:
        return math.inf
    turn = math.pi * detuning_rad_s / noise_rad2_s
    spread = 1.0 if turn == 0.0 else turn / math.tanh(turn)
    return noise_rad2_s * spread * _mobility(detuning_rad_s, coupling_rad_s, noise_rad2_s)


def slip_rates(detuning_rad_s: float, coupling_rad_s: float, noise_rad2_s: float) -> SlipRates:
    """Return the rates of slips both ways of a pair inside its locking region.

    forward - backward = v / 2 pi and forward / backward = exp(2 pi dw/D).

    Parameters
    ----------
    detuning_rad_s, coupling_rad_s : float, rad/s
    noise_rad2_s : float, rad^2/s, above 0

    Returns
    -------
    SlipRates

    Raises
    ------
    FitError
        If a value is negative or not finite, or the noise is 0.
    """
    _refuse(detuning_rad_s, coupling_rad_s, noise_rad2_s)
    if not noise_rad2_s > 0.0:
        raise FitError("slip rates: noise must be above 0 rad2/s, got 0")
    if coupling_rad_s == 0.0:
        # Without coupling there are no cells to slip between; only the drift is left.
        rate_hz = detuning_rad_s / TURN_RAD
        return SlipRates(forward_hz=max(rate_hz, 0.0), backward_hz=max(-rate_hz, 0.0))
    ratio = abs(detuning_rad_s) / noise_rad2_s
    log_area = _log_area(ratio, coupling_rad_s / noise_rad2_s)
    along = noise_rad2_s * math.exp(-log_area) / TURN_RAD
    against = along * math.exp(-TURN_RAD * ratio)
    forward, backward = (along, against) if detuning_rad_s >= 0.0 else (against, along)
    return SlipRates(forward_hz=forward, backward_hz=backward)


def kramers_rate_rad_s(detuning_rad_s: float, coupling_rad_s: float, noise_rad2_s: float) -> float:
    """Return the mean rate of psi deep inside the locking region by Kramers' law.

    2 sqrt(K^2 - dw^2) exp(-(2/D)(sqrt(K^2 - dw^2) + dw asin(dw/K))) sinh(pi dw/D).

    Parameters
    ----------
    detuning_rad_s, coupling_rad_s : float, rad/s, |detuning| below the coupling
    noise_rad2_s : float, rad^2/s, above 0

    Returns
    -------
    float, rad/s, sign of the detuning

    Raises
    ------
    FitError
        If the pair is not inside its locking region, or the noise is not above 0.

    Notes
    -----
    2 % above the exact law at dw = K/2, D = 0.05 K; no use near the edge.

    References
    ----------
    Kramers 1940, Physica 7, 284; Ambegaokar and Halperin 1969 (recalled).
    """
    _refuse(detuning_rad_s, coupling_rad_s, noise_rad2_s)
    dw = abs(detuning_rad_s)
    if not (dw < coupling_rad_s and noise_rad2_s > 0.0):
        raise FitError(
            "Kramers' law needs |detuning| below the coupling and noise above 0, got "
            f"{detuning_rad_s}, {coupling_rad_s} rad/s, {noise_rad2_s} rad2/s"
        )
    rest = math.sqrt(coupling_rad_s**2 - dw**2)
    height = 2.0 * (rest + dw * math.asin(dw / coupling_rad_s)) - math.pi * dw
    rate = rest * math.exp(-height / noise_rad2_s) * -math.expm1(-TURN_RAD * dw / noise_rad2_s)
    return math.copysign(rate, detuning_rad_s)


def asymptotic_errors(
    detuning_rad_s: float, coupling_rad_s: float, noise_rad2_s: float, duration_s: float
) -> FloatArray:
    """Return the least standard errors of (dw, K, K psi0) from a record without sensor noise.

    Covariance (2 D/T) <g g'>^-1 with g = (1, -sin, cos) of psi - psi0.

    Parameters
    ----------
    detuning_rad_s, coupling_rad_s : float, rad/s
    noise_rad2_s : float, rad^2/s, above 0
    duration_s : float, s, above 0

    Returns
    -------
    array, shape (3,), rad/s

    Raises
    ------
    FitError
        If a value is negative or not finite, or the noise is 0.
    """
    z = stationary_moments(detuning_rad_s, coupling_rad_s, noise_rad2_s, 2)
    c1, s1 = z[1].real, z[1].imag
    c2, s2 = z[2].real, z[2].imag
    moments = np.array(
        [
            [1.0, -s1, c1],
            [-s1, 0.5 * (1.0 - c2), -0.5 * s2],
            [c1, -0.5 * s2, 0.5 * (1.0 + c2)],
        ]
    )
    covariance = 2.0 * noise_rad2_s / duration_s * np.linalg.inv(moments)
    return np.asarray(np.sqrt(np.diag(covariance)))
