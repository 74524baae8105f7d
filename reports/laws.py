"""The laws of ``fit`` as curves in hertz and radians, to be set beside measured points."""

from __future__ import annotations

import math

import numpy as np

from fit.models import PhaseEquation, beat_rate_rad_s, rest_angle_rad
from fit.noise_physics import mean_rate_rad_s
from rig.angles import hz_from_rad_s, rad_s_from_hz, wrap_angle_rad
from rig.arrays import FloatArray


def beat_law_hz(detuning_hz: FloatArray, coupling_hz: float) -> FloatArray:
    """Return the mean rate of a noise-free pair at some detunings.

    Parameters
    ----------
    detuning_hz : array, shape (n,), Hz
    coupling_hz : float, Hz, half-width of the locking range

    Returns
    -------
    array, shape (n,), Hz
    """
    rates = (beat_rate_rad_s(_equation(float(place), coupling_hz)) for place in detuning_hz)
    return np.array([hz_from_rad_s(rate) for rate in rates])


def arcsine_law_rad(detuning_hz: FloatArray, coupling_hz: float, offset_rad: float) -> FloatArray:
    """Return the locked phase at some detunings, NaN outside the locking range.

    Parameters
    ----------
    detuning_hz : array, shape (n,), Hz
    coupling_hz : float, Hz, above 0
    offset_rad : float, rad

    Returns
    -------
    array, shape (n,), rad, within a quarter of a turn of the offset
    """
    return np.array([_rest_rad(float(place), coupling_hz, offset_rad) for place in detuning_hz])


def noisy_rate_law_hz(
    detuning_hz: FloatArray, coupling_hz: FloatArray | float, noise_rad2_s: FloatArray | float
) -> FloatArray:
    """Return the mean rate of a pair with white phase noise at some detunings.

    Parameters
    ----------
    detuning_hz : array, shape (n,), Hz
    coupling_hz : float or array (n,), Hz, above 0
    noise_rad2_s : float or array (n,), rad2/s, at least 0

    Returns
    -------
    array, shape (n,), Hz
    """
    rows = np.broadcast_arrays(detuning_hz, coupling_hz, noise_rad2_s)
    rates = (
        mean_rate_rad_s(rad_s_from_hz(float(place)), rad_s_from_hz(float(pull)), float(noise))
        for place, pull, noise in zip(*rows, strict=True)
    )
    return np.array([hz_from_rad_s(rate) for rate in rates])


def _equation(detuning_hz: float, coupling_hz: float) -> PhaseEquation:
    return PhaseEquation(
        detuning_rad_s=rad_s_from_hz(detuning_hz), coupling_rad_s=rad_s_from_hz(coupling_hz)
    )


def _rest_rad(detuning_hz: float, coupling_hz: float, offset_rad: float) -> float:
    if not abs(detuning_hz) <= coupling_hz:
        return math.nan
    return offset_rad + wrap_angle_rad(rest_angle_rad(_equation(detuning_hz, coupling_hz)))
