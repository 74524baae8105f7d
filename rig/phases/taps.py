"""Kaiser low-pass taps, their reach and what noise passes them; nothing is filtered here."""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np

from rig.arrays import FloatArray, frozen_view

# Taps this far below the largest are set to zero: products with them fall among the
# subnormal numbers, which made the matrix product 3 times slower, and change nothing.
SMALLEST_TAP = 1e-9
WIDTH_DB = 14.36  # Kaiser: rejection per (taps x transition / rate)
OFFSET_DB = 7.95


def kaiser_beta(stop_db: float) -> float:
    """Return the shape of the Kaiser window for a rejection in dB.

    References
    ----------
    Kaiser 1974, Proc. IEEE Int. Symp. Circuits and Systems, 20 (recalled).
    """
    if stop_db > 50.0:
        return 0.1102 * (stop_db - 8.7)
    above = max(stop_db - 21.0, 0.0)
    return 0.5842 * math.pow(above, 0.4) + 0.07886 * above


def half_length(transition: float, stop_db: float) -> int:
    """Return how many taps stand on each side of the middle one.

    Parameters
    ----------
    transition : float, width of the edge in cycles a sample
    stop_db : float, dB, rejection
    """
    return math.ceil((stop_db - OFFSET_DB) / (WIDTH_DB * transition) / 2.0)


def low_pass_taps(cutoff: float, half: int, stop_db: float) -> FloatArray:
    """Return 2 half + 1 symmetric taps with gain 1 at zero frequency and 1/2 at the cut-off.

    Parameters
    ----------
    cutoff : float, cycles a sample
    half : int, taps on each side of the middle one
    stop_db : float, dB, rejection, which sets the window
    """
    index = np.arange(-half, half + 1)
    window = kaiser_window(half, kaiser_beta(stop_db))
    taps = 2.0 * cutoff * np.sinc(2.0 * cutoff * index) * window
    taps[np.abs(taps) < SMALLEST_TAP * np.abs(taps).max()] = 0.0
    return np.asarray(taps / taps.sum())


@lru_cache(maxsize=16)
def kaiser_window(half: int, beta: float) -> FloatArray:
    """Return the Kaiser window of 2 half + 1 taps, made once: both channels mostly share it.

    Parameters
    ----------
    half : int, taps on each side of the middle one, at least 1
    beta : float, shape
    """
    away = np.arange(half + 1) / half
    side = np.i0(beta * np.sqrt(1.0 - away * away)) / np.i0(beta)
    return frozen_view(np.concatenate([side[:0:-1], side]))


def noise_width(taps: FloatArray) -> float:
    """Return the width (both sides) of the equal rectangle for white noise, cycles a sample."""
    return float(np.sum(taps**2) / np.sum(taps) ** 2)


def lost_time(taps: FloatArray) -> float:
    """Return the time, in samples, that filtered increments of a random walk seem to miss.

    A walk of variance 2 D t, filtered, moves over a time t longer than the taps with the
    variance 2 D (t - c), and neighbouring moves have the covariance D c.

    Parameters
    ----------
    taps : array, shape (n,), symmetric, gain 1 at zero frequency

    Notes
    -----
    c is the integral of |s| r(s), r the autocorrelation of the impulse response, or
    int_0^inf (1 - |H(f)|^2)/f^2 df / pi^2, where the images above half the rate are taken as
    removed. An ideal low-pass of half width B has c = 1/(pi^2 B).
    """
    count = 1 << max(12, (8 * taps.size - 1).bit_length())
    passed = np.abs(np.fft.rfft(taps, count)[1:]) ** 2
    frequency = np.arange(1, passed.size + 1) / count
    weighted = (1.0 - passed) / frequency**2
    index = np.arange(taps.size) - 0.5 * (taps.size - 1)
    # At zero frequency: what a second moment of the taps bends.
    bend = (2.0 * math.pi) ** 2 * float(index**2 @ taps)
    below = (0.5 * bend + float(np.sum(weighted)) - 0.5 * float(weighted[-1])) / count
    return (below + 1.0 / float(frequency[-1])) / math.pi**2


def noise_correlation(taps: FloatArray, step: int) -> float:
    """Return how many outputs, one every ``step`` samples, share one independent value.

    The sum of the autocorrelation of filtered white noise over all lags: 1 when the outputs
    are independent, about rate / (2 half band) when they are closer.
    """
    full = np.convolve(taps, taps[::-1])
    middle = taps.size - 1
    lags = np.concatenate([full[middle::-step][::-1], full[middle + step :: step]])
    return max(1.0, float(np.sum(lags) / full[middle]))
