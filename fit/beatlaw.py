"""Edges from mean beat rates alone: a check of the joint likelihood that shares little with it.

The mean rate of a noisy phase equation with detuning x, coupling K and noise D is

    v = x - K Im z,   z_k / z_(k-1) = (K/2) / (k D - i x + (K/2) z_(k+1) / z_k),

with z = z_1 = <exp(i (psi - psi0))> from the continued fraction. Centre and K are fitted to
the measured rates of the points that are not locked throughout; the noise is the joint fit's.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from scipy.optimize import least_squares

from fit.records import RegionPoint
from rig.angles import rad_s_from_hz
from rig.arrays import ComplexArray, FloatArray

LEAST_POINTS = 4
_TERMS_FLOOR, _TERMS_TOP = 80, 4000


def mean_beat_rad_s(
    detuning_rad_s: FloatArray, coupling_rad_s: float, noise_rad2_s: float
) -> FloatArray:
    """Return the mean rate of psi, rad/s, with the sign of the detuning.

    Parameters
    ----------
    detuning_rad_s : array
    coupling_rad_s : float, >= 0
    noise_rad2_s : float, > 0

    References
    ----------
    Stratonovich 1967, Topics in the Theory of Random Noise, vol. 2, ch. 9 (recalled).
    """
    return np.asarray(
        detuning_rad_s
        - coupling_rad_s * first_moment(detuning_rad_s, coupling_rad_s, noise_rad2_s).imag
    )


def first_moment(
    detuning_rad_s: FloatArray, coupling_rad_s: float, noise_rad2_s: float
) -> ComplexArray:
    """Return <exp(i (psi - psi0))> in the steady state of the noisy phase equation.

    Parameters
    ----------
    detuning_rad_s : array
    coupling_rad_s : float, >= 0
    noise_rad2_s : float, > 0
    """
    return moments(detuning_rad_s, coupling_rad_s, noise_rad2_s)[0]


def moments(
    detuning_rad_s: FloatArray, coupling_rad_s: float, noise_rad2_s: float
) -> tuple[ComplexArray, ComplexArray]:
    """Return <exp(i q)> and <exp(2 i q)> of q = psi - psi0 in the steady state.

    Parameters
    ----------
    detuning_rad_s : array
    coupling_rad_s : float, >= 0
    noise_rad2_s : float, > 0
    """
    half = 0.5 * coupling_rad_s
    terms = _terms(np.asarray(detuning_rad_s), coupling_rad_s, noise_rad2_s)
    ratio = np.zeros(np.shape(detuning_rad_s), dtype=complex)
    second = ratio
    for k in range(terms, 0, -1):
        second = ratio
        ratio = half / (k * noise_rad2_s - 1j * np.asarray(detuning_rad_s) + half * ratio)
    return ratio, ratio * second


def _terms(detuning_rad_s: FloatArray, coupling_rad_s: float, noise_rad2_s: float) -> int:
    """Return where the fraction may be cut: the moments decay like exp(-k^2 D / 2 rate) there.

    Well below k D = rate the terms hardly damp; a few square roots of rate / D reach beyond.
    """
    fastest = coupling_rad_s + float(np.max(np.abs(detuning_rad_s), initial=0.0))
    return int(min(_TERMS_FLOOR + 12.0 * np.sqrt(fastest / noise_rad2_s), _TERMS_TOP))


def beat_edges(
    points: Sequence[RegionPoint], drive_rad_s: FloatArray, start: tuple[float, float], noise: float
) -> tuple[FloatArray, FloatArray] | None:
    """Return ((lower, upper), their standard errors) on the axis of the drive, rad/s, or None.

    Parameters
    ----------
    points : sequence of RegionPoint
    drive_rad_s : array, as many, rad/s
    start : (centre, K), rad/s
    noise : float, D, rad^2/s
    """
    rows = [
        (drive, rad_s_from_hz(p.mean_rate_hz), rad_s_from_hz(p.mean_rate_u_hz))
        for p, drive in zip(points, drive_rad_s, strict=True)
        if p.state in ("drifting", "intermittent")
        and p.mean_rate_hz is not None
        and p.mean_rate_u_hz
    ]
    if len(rows) < LEAST_POINTS or not noise > 0.0:
        return None
    drive, rate, u = (np.array(column) for column in zip(*rows, strict=True))

    first, unit = start[0], max(abs(start[1]), 1e-12)

    def residuals(guess: FloatArray) -> FloatArray:
        away = mean_beat_rad_s(first + unit * guess[0] - drive, unit * abs(guess[1]), noise)
        return np.asarray((rate - away) / u)

    found = least_squares(residuals, np.array([0.0, 1.0]), diff_step=1e-6)
    if not found.success:
        return None
    freedom = max(drive.size - 2, 1)
    covariance = np.linalg.pinv(found.jac.T @ found.jac) * max(1.0, 2.0 * found.cost / freedom)
    centre, coupling = first + unit * found.x[0], unit * abs(found.x[1])
    cross = covariance[0, 1] * np.sign(found.x[1])
    variance = covariance[0, 0] + covariance[1, 1] + 2.0 * cross * np.array([-1.0, 1.0])
    edges = np.array([centre - coupling, centre + coupling])
    return edges, unit * np.sqrt(np.maximum(variance, 0.0))
