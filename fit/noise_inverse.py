"""Detuning and coupling from two numbers of a drifting pair: the noise laws turned round."""

from __future__ import annotations

import math

import numpy as np

from fit.noise_physics import moment_terms, stationary_moments
from rig.arrays import FloatArray

ROUNDS = 30  # Newton steps; from the noise-free start five to ten are enough
MOST_TERMS = 20_000  # moments one evaluation may ask for: some milliseconds
LARGEST_RATIO = 1e100  # of a rate to the noise: its square must not overflow
LONGEST_MOVE = 0.3  # of a parameter in one step


def invert_rate_and_length(
    rate_rad_s: float, length: float, noise_rad2_s: float
) -> tuple[float, float] | None:
    """Return (detuning, coupling) of the pair with this mean rate and resultant length.

    Newton's method on the exact laws from the noise-free inversion
    dw = v (1 + R^2)/(1 - R^2), K = 2 v R/(1 - R^2).

    Parameters
    ----------
    rate_rad_s : float, rad/s, not 0
    length : float, between 0 and 1
    noise_rad2_s : float, rad^2/s, at least 0

    Returns
    -------
    (float, float) in rad/s, or None where no pair has these two numbers, or the laws of a
    pair that had them would ask for more than 20,000 moments

    Notes
    -----
    Only for pairs that drift: inside the locking region the two numbers do not tell detuning
    from coupling with any accuracy. Work and memory are bounded whatever the numbers.
    """
    if not (math.isfinite(rate_rad_s) and math.isfinite(noise_rad2_s)):
        return None
    if not (rate_rad_s != 0.0 and 0.0 < length < 1.0 and noise_rad2_s >= 0.0):
        return None
    with np.errstate(all="ignore"):
        point = _inverted(abs(rate_rad_s), length, noise_rad2_s)
    if point is None or not np.all(np.isfinite(point)):
        return None
    return math.copysign(float(point[0]), rate_rad_s), float(point[1])


def _inverted(speed: float, length: float, noise_rad2_s: float) -> FloatArray | None:
    """Return (detuning, coupling) of a pair that drifts forward, infinite where too large."""
    share = (1.0 - length) * (1.0 + length)
    point = np.array([speed, speed]) * (np.array([1.0 + length**2, 2.0 * length]) / share)
    if not noise_rad2_s > 0.0:
        return point
    # In units of the noise, so that only ratios remain.
    goal = np.array([np.float64(speed) / noise_rad2_s, length])
    found = _newton(point / noise_rad2_s, goal)
    return None if found is None else found * noise_rad2_s


def _newton(point: FloatArray, goal: FloatArray) -> FloatArray | None:
    """Return the pair (dw/D, K/D) with the given rate and length, None where there is none."""
    for _ in range(ROUNDS):
        if not (_within_reach(point) and np.all(np.isfinite(goal))):
            return None
        here = _rate_and_length(point)
        slope = np.empty((2, 2))
        for column in range(2):
            moved = point.copy()
            moved[column] += 1e-6 * point[column]
            slope[:, column] = (_rate_and_length(moved) - here) / (1e-6 * point[column])
        if not abs(np.linalg.det(slope)) > 1e-12 / goal[0]:
            return None
        move = np.linalg.solve(slope, goal - here)
        longest = float(np.max(np.abs(move) / point))
        if longest > LONGEST_MOVE:
            move *= LONGEST_MOVE / longest
        point = np.asarray(point + move)
        if float(np.max(np.abs(move) / point)) < 1e-10:
            return point
    return None


def _within_reach(point: FloatArray) -> bool:
    """Say whether the moments of a pair can be had with bounded work."""
    if not (np.all(point < LARGEST_RATIO) and np.all(point > 0.0)):
        return False
    # A hair's step of the numerical slope must not fall on the other side.
    return moment_terms(float(point[0]), float(point[1]) * 1.01, 1.0) <= MOST_TERMS


def _rate_and_length(point: FloatArray) -> FloatArray:
    """Return (mean rate, resultant length) of (detuning, coupling) at unit noise."""
    first = stationary_moments(float(point[0]), float(point[1]), 1.0, 1)[1]
    return np.array([point[0] - point[1] * first.imag, abs(first)])
