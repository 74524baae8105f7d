"""The only place that wraps and converts angles, and averages them on the circle.

Inside the package angles are radians and angular rates rad/s; hertz, degrees and turns
stand only where people read, and are made from radians by the functions here.
"""

from __future__ import annotations

import math

import numpy as np

from rig.arrays import FloatArray

TURN_RAD = 2.0 * math.pi


def wrap_rad(angle_rad: FloatArray) -> FloatArray:
    """Return angles brought to (-pi, pi].

    Parameters
    ----------
    angle_rad : array or float, rad

    Returns
    -------
    array of the same shape, rad, in (-pi, pi]
    """
    wrapped = math.pi - np.mod(math.pi - np.asarray(angle_rad, dtype=float), TURN_RAD)
    # Just above pi the remainder rounds to a whole turn, which would give -pi.
    return np.where(wrapped <= -math.pi, math.pi, wrapped)


def wrap_angle_rad(angle_rad: float) -> float:
    """Return one angle brought to (-pi, pi]."""
    wrapped = math.pi - (math.pi - angle_rad) % TURN_RAD
    return math.pi if wrapped <= -math.pi else wrapped


def rad_from_turns(turns: float) -> float:
    """Convert turns to radians."""
    return turns * TURN_RAD


def turns_from_rad(angle_rad: float) -> float:
    """Convert radians to turns."""
    return angle_rad / TURN_RAD


def rad_from_deg(angle_deg: float) -> float:
    """Convert degrees to radians."""
    return math.radians(angle_deg)


def deg_from_rad(angle_rad: float) -> float:
    """Convert radians to degrees."""
    return math.degrees(angle_rad)


def rad_s_from_hz(rate_hz: float) -> float:
    """Convert hertz (turns a second) to rad/s."""
    return rate_hz * TURN_RAD


def hz_from_rad_s(rate_rad_s: float) -> float:
    """Convert rad/s to hertz (turns a second)."""
    return rate_rad_s / TURN_RAD


def mean_vector(angle_rad: FloatArray) -> complex:
    """Return the mean of exp(i angle): its length is the resultant length.

    Parameters
    ----------
    angle_rad : array, shape (n,), rad, n >= 1

    Returns
    -------
    complex, length in [0, 1]

    Raises
    ------
    ValueError
        If there is no angle.
    """
    if np.size(angle_rad) == 0:
        raise ValueError("mean of no angles: at least 1 needed, got 0")
    return complex(np.mean(np.exp(1j * np.asarray(angle_rad, dtype=float))))


def circular_mean_rad(angle_rad: FloatArray) -> float:
    """Return the circular mean of angles, in (-pi, pi]."""
    vector = mean_vector(angle_rad)
    return math.atan2(vector.imag, vector.real)


def resultant_length(angle_rad: FloatArray) -> float:
    """Return the resultant length of angles: 1 when all agree, about 0 when spread evenly."""
    return min(abs(mean_vector(angle_rad)), 1.0)


def circular_spread_rad(angle_rad: FloatArray) -> float:
    """Return the circular standard deviation sqrt(-2 ln R), rad.

    R is the resultant length. Equals the usual standard deviation for narrow distributions.
    A vanishing resultant is held at the smallest positive number, so the result is finite.

    References
    ----------
    Mardia and Jupp 2000, Directional Statistics, eq. 2.3.14 (recalled).
    """
    return spread_of_length_rad(resultant_length(angle_rad))


def spread_of_length_rad(length: float) -> float:
    """Return the circular standard deviation that belongs to a resultant length, rad."""
    return math.sqrt(max(0.0, -2.0 * math.log(max(length, np.finfo(float).tiny))))
