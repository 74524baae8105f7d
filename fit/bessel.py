"""The modified Bessel function of order 0, scaled so that it never overflows."""

from __future__ import annotations

import numpy as np

from rig.angles import TURN_RAD
from rig.arrays import FloatArray

LARGE_ARGUMENT = 500.0  # numpy's I0 overflows from 713 on
TERMS = 6  # of the series at large arguments: the last digit at 500


def scaled_bessel(x: FloatArray) -> FloatArray:
    """Return exp(-x) I0(x): numpy's I0, and the asymptotic series where that is too large.

    Parameters
    ----------
    x : array, numbers from 0

    References
    ----------
    Abramowitz and Stegun 1972, Handbook of Mathematical Functions, 9.7.1 (recalled).
    """
    if x.max() < LARGE_ARGUMENT:
        return np.asarray(np.i0(x) * np.exp(-x))
    small, large = np.minimum(x, LARGE_ARGUMENT), np.maximum(x, LARGE_ARGUMENT)
    series = np.ones_like(x)
    for k in range(TERMS, 0, -1):
        series = 1.0 + series * (2 * k - 1) ** 2 / (8.0 * k * large)
    beyond = series / np.sqrt(TURN_RAD * large)
    return np.asarray(np.where(x < LARGE_ARGUMENT, np.i0(small) * np.exp(-small), beyond))
