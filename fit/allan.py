"""Frequency stability of an oscillator alone: Allan deviations, their confidence, noise type.

Input is the time error x(t) in seconds (phase over 2 pi times the nominal frequency) on an
even grid; the deviations are those of the fractional frequency y, a ratio. Power-law noise
types carry the exponent alpha of the spectral density of y: S_y(f) ~ f^alpha.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from fit.quantiles import chi_square_above
from rig.arrays import FloatArray
from rig.errors import FitError

NOISE_NAMES = {
    2: "white phase noise",
    1: "flicker phase noise",
    0: "white frequency noise",
    -1: "flicker frequency noise",
    -2: "random-walk frequency noise",
}
# The lag-one autocorrelation tells neighbouring types apart from about this many values on.
LEAST_VALUES = 64
CONFIDENCE = 0.95


@dataclass(frozen=True, slots=True, kw_only=True)
class Stability:
    """One averaging time: deviation of y (a ratio), its 95 % interval, noise exponent there.

    ``freedom`` are the equivalent degrees of freedom behind the interval.
    """

    averaging_s: float
    deviation: float
    low: float
    high: float
    freedom: float
    alpha: int


def overlapping_allan_deviation(time_error_s: FloatArray, step_s: float, factor: int) -> float:
    """Return the overlapping Allan deviation at the averaging time factor * step_s.

    sqrt(mean((x[i + 2m] - 2 x[i + m] + x[i])^2) / (2 m^2 h^2)).

    Parameters
    ----------
    time_error_s : array, shape (n,), s
    step_s : float, s
    factor : int, from 1 to (n - 1) / 2

    Returns
    -------
    float, ratio

    Raises
    ------
    FitError
        If the record is too short for the averaging factor.

    References
    ----------
    Riley 2008, NIST Special Publication 1065, equation 11 (recalled).
    """
    second = _second_difference(time_error_s, factor)
    return math.sqrt(0.5 * float(np.mean(second**2))) / (factor * step_s)


def allan_deviation(time_error_s: FloatArray, step_s: float, factor: int) -> float:
    """Return the Allan deviation of successive averages that do not overlap.

    Parameters, errors and reference as for ``overlapping_allan_deviation``.
    """
    second = _second_difference(np.asarray(time_error_s)[::factor], 1)
    return math.sqrt(0.5 * float(np.mean(second**2))) / (factor * step_s)


def modified_allan_deviation(time_error_s: FloatArray, step_s: float, factor: int) -> float:
    """Return the modified Allan deviation, which tells white from flicker phase noise.

    The second difference is averaged over m neighbours before it is squared. Parameters and
    errors as for ``overlapping_allan_deviation``; the record must hold 3 m samples.

    References
    ----------
    Riley 2008, NIST Special Publication 1065, equation 15 (recalled).
    """
    second = _second_difference(time_error_s, factor)
    if second.size < factor:
        raise FitError(
            f"modified Allan deviation: factor {factor} needs {3 * factor} samples, got "
            f"{np.asarray(time_error_s).size}; record longer"
        )
    sums = np.concatenate([[0.0], np.cumsum(second)])
    means = (sums[factor:] - sums[:-factor]) / factor
    return math.sqrt(0.5 * float(np.mean(means**2))) / (factor * step_s)


def _second_difference(time_error_s: FloatArray, factor: int) -> FloatArray:
    """Return x[i + 2m] - 2 x[i + m] + x[i]."""
    x = np.asarray(time_error_s, dtype=float)
    if factor < 1 or x.size < 2 * factor + 1:
        raise FitError(
            f"Allan deviation: factor {factor} needs at least {2 * max(factor, 1) + 1} samples, "
            f"got {x.size}; record longer"
        )
    return np.asarray(x[2 * factor :] - 2.0 * x[factor:-factor] + x[: -2 * factor])


DEVIATIONS: dict[str, Callable[[FloatArray, float, int], float]] = {
    "allan": allan_deviation,
    "overlapping": overlapping_allan_deviation,
    "modified": modified_allan_deviation,
}


def stability_table(time_error_s: FloatArray, step_s: float) -> tuple[Stability, ...]:
    """Return the overlapping Allan deviation at factors 1, 2, 4 ... with 95 % intervals.

    Parameters
    ----------
    time_error_s : array, shape (n,), s, at least 16 samples
    step_s : float, s

    Returns
    -------
    tuple of Stability
        Up to averaging times of a quarter of the record; empty when it is too short.

    Notes
    -----
    The interval takes freedom * variance over a chi-square variable, with the equivalent
    degrees of freedom of the noise type found at that averaging time. With longer averaging
    the type can only turn redder, because what falls off more slowly takes over; where fewer
    than 64 values remain, the type found last is kept.
    """
    x = np.asarray(time_error_s, dtype=float)
    rows: list[Stability] = []
    alpha, factor = max(NOISE_NAMES), 1
    while x.size >= 16 and factor <= (x.size - 1) // 4:
        found = noise_exponent(x, factor)
        if found is not None:
            alpha = min(found, alpha)
        elif factor == 1:
            # Too few values to tell: white frequency noise lies in the middle.
            alpha = 0
        deviation = overlapping_allan_deviation(x, step_s, factor)
        freedom = equivalent_freedom(alpha, x.size, factor)
        low, high = (math.sqrt(freedom / chi_square_above(freedom, tail)) for tail in _tails())
        rows.append(
            Stability(
                averaging_s=factor * step_s,
                deviation=deviation,
                low=deviation * low,
                high=deviation * high,
                freedom=freedom,
                alpha=alpha,
            )
        )
        factor *= 2
    return tuple(rows)


def _tails() -> tuple[float, float]:
    """Return the upper tails of the chi-square quantiles of the interval."""
    return (0.5 * (1.0 - CONFIDENCE), 0.5 * (1.0 + CONFIDENCE))


def noise_exponent(time_error_s: FloatArray, factor: int) -> int | None:
    """Return the exponent alpha (-2 to 2) of the noise at one averaging factor.

    The series, thinned by the factor, is differenced until its lag-one autocorrelation r
    gives delta = r / (1 + r) below 1/4; alpha = 2 - 2 (delta + number of differences),
    rounded.

    Parameters
    ----------
    time_error_s : array, shape (n,), s
    factor : int, at least 1

    Returns
    -------
    int, or None where fewer than 64 values remain

    References
    ----------
    Riley and Greenhall 2004, Power law noise identification using the lag 1 autocorrelation,
    18th European Frequency and Time Forum (recalled).
    """
    values = np.asarray(time_error_s, dtype=float)[::factor]
    if values.size < LEAST_VALUES:
        return None
    steps = np.arange(values.size, dtype=float)
    # A constant frequency offset is no noise.
    values = values - np.polyval(np.polyfit(steps, values, 1), steps)
    for differences in range(3):
        away = values - values.mean()
        power = float(away @ away)
        if not power > 0.0:
            return None
        correlation = float(away[1:] @ away[:-1]) / power
        delta = correlation / (1.0 + correlation)
        if delta < 0.25 or differences == 2:
            alpha = round(2.0 - 2.0 * (delta + differences))
            return max(-2, min(2, alpha))
        values = np.diff(values)
    return None


def _white_phase(n: float, m: float) -> float:
    return (n + 1.0) * (n - 2.0 * m) / (2.0 * (n - m))


def _flicker_phase(n: float, m: float) -> float:
    first = max(math.log((n - 1.0) / (2.0 * m)), 0.0)
    return math.exp(math.sqrt(first * math.log((2.0 * m + 1.0) * (n - 1.0) / 4.0)))


def _white_frequency(n: float, m: float) -> float:
    whole = 3.0 * (n - 1.0) / (2.0 * m) - 2.0 * (n - 2.0) / n
    return whole * 4.0 * m**2 / (4.0 * m**2 + 5.0)


def _flicker_frequency(n: float, m: float) -> float:
    if m == 1.0:
        return 2.0 * (n - 2.0) ** 2 / (2.3 * n - 4.9)
    return 5.0 * n**2 / (4.0 * m * (n + 3.0 * m))


def _random_walk(n: float, m: float) -> float:
    squares = (n - 1.0) ** 2 - 3.0 * m * (n - 1.0) + 4.0 * m**2
    return (n - 2.0) / m * squares / (n - 3.0) ** 2


FREEDOM: dict[int, Callable[[float, float], float]] = {
    2: _white_phase,
    1: _flicker_phase,
    0: _white_frequency,
    -1: _flicker_frequency,
    -2: _random_walk,
}


def equivalent_freedom(alpha: int, samples: int, factor: int) -> float:
    """Return the equivalent degrees of freedom of an overlapping Allan variance, at least 1.

    Parameters
    ----------
    alpha : int, exponent of the noise, -2 to 2
    samples : int, phase samples of the record
    factor : int, averaging factor

    Returns
    -------
    float

    Raises
    ------
    FitError
        If the exponent is not one of the known noise types.

    References
    ----------
    Howe, Allan and Barnes 1981, Properties of signal sources and measurement methods, table 2,
    as in NIST Special Publication 1065, section 5.4 (recalled).
    """
    if alpha not in FREEDOM:
        raise FitError(f"noise exponent must be one of {sorted(FREEDOM)}, got {alpha}")
    return max(FREEDOM[alpha](float(samples), float(factor)), 1.0)


def describe_noise(rows: tuple[Stability, ...], samples: int) -> str:
    """Return the noise types over averaging times in words.

    Parameters
    ----------
    rows : tuple of Stability
    samples : int, phase samples of the record

    Returns
    -------
    str
        One name, or the names with the averaging times where they change.
    """
    step_s = rows[0].averaging_s if rows else 1.0
    told = [row for row in rows if samples * step_s / row.averaging_s >= LEAST_VALUES]
    if not told:
        return "not determined"
    parts = [NOISE_NAMES[told[0].alpha]]
    for before, row in pairwise(told):
        if row.alpha != before.alpha:
            parts.append(f"{NOISE_NAMES[row.alpha]} from {row.averaging_s:.3g} s")
    return ", ".join(parts)
