"""The curves of the phase equation that pictures set beside measured points."""

from __future__ import annotations

import numpy as np

from rig.angles import TURN_RAD
from rig.arrays import FloatArray

_TERMS_MOST = 4000  # enough for a noise of 1 part in 400 of the coupling


def beat_law_hz(detuning_hz: FloatArray, coupling_hz: float) -> FloatArray:
    """Return the mean rate of a noise-free pair: sign(d) sqrt(d^2 - k^2), 0 when locked.

    Parameters
    ----------
    detuning_hz : array, shape (n,), Hz
    coupling_hz : float, Hz, half-width of the locking range

    Returns
    -------
    array, shape (n,), Hz

    References
    ----------
    Adler 1946, Proc. IRE 34, 351-357 (recalled).
    """
    beyond = np.clip(np.square(detuning_hz) - coupling_hz**2, 0.0, None)
    return np.asarray(np.sign(detuning_hz) * np.sqrt(beyond))


def arcsine_law_rad(detuning_hz: FloatArray, coupling_hz: float, offset_rad: float) -> FloatArray:
    """Return the locked phase offset + asin(d / k), NaN outside the locking range."""
    ratio = np.asarray(detuning_hz, dtype=float) / coupling_hz
    inside = np.where(np.abs(ratio) <= 1.0, ratio, np.nan)
    return np.asarray(offset_rad + np.arcsin(inside))


def noisy_rate_law_hz(
    detuning_hz: FloatArray, coupling_hz: FloatArray | float, noise_rad2_s: FloatArray | float
) -> FloatArray:
    """Return the mean rate of a pair with white phase noise, by the stationary moments.

    With z_n the mean of exp(i n psi), z_n / z_(n-1) is a continued fraction, and the mean
    rate is d - k Im z_1.

    Parameters
    ----------
    detuning_hz : array, shape (n,), Hz
    coupling_hz : float or array (n,), Hz, above 0
    noise_rad2_s : float or array (n,), rad2/s, above 0 (Var psi = 2 D t without coupling)

    Returns
    -------
    array, shape (n,), Hz

    References
    ----------
    Risken 1989, The Fokker-Planck Equation, section 11.3 (recalled).
    """
    noise_hz = np.asarray(noise_rad2_s, dtype=float) / TURN_RAD
    half_hz = np.asarray(coupling_hz, dtype=float) / 2.0
    terms = int(min(50 + 20 * np.max(half_hz / noise_hz), _TERMS_MOST))
    ratio = np.zeros(np.shape(detuning_hz), dtype=complex)
    for n in range(terms, 0, -1):
        ratio = half_hz / (n * noise_hz - 1j * detuning_hz + half_hz * ratio)
    return np.asarray(detuning_hz - 2.0 * half_hz * ratio.imag)
