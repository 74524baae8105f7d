"""Quantiles of the normal, chi-square, gamma and Student laws, by their upper tails.

They are all that measuring a record needs of special functions; the library that has the rest
takes longer to load than a record takes to measure. Each quantile is the root of the
logarithm of its tail, found by Newton's rule in ln x, where that logarithm is concave.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from functools import lru_cache

# Degrees of freedom from which the expansions about the normal law are good to the last digits.
MANY_SQUARES, MANY_STUDENT = 1e4, 1e3
TINY = 1e-300
ROUNDS = 100  # a dozen are needed
CLOSE = 1e-8  # Newton's rule squares what is left: after so small a step nothing is
MOST_TERMS = 10_000  # about 10 sqrt(freedom) are needed
LAST_DIGIT = 1e-16
_ROOT_2 = math.sqrt(2.0)


@lru_cache(maxsize=64)
def normal_above(tail: float) -> float:
    """Return the value that a standard normal variable exceeds with a probability.

    Parameters
    ----------
    tail : float, above 0 and below 1
    """
    if tail > 0.5:
        return -normal_above(1.0 - tail)
    # The tail lies below exp(-z^2/2)/2: from there on Newton's rule comes down to the root.
    value = math.sqrt(max(-2.0 * math.log(2.0 * tail), 0.0))
    for _ in range(ROUNDS):
        share = 0.5 * math.erfc(value / _ROOT_2)
        slope = math.exp(-0.5 * value**2) / (math.sqrt(2.0 * math.pi) * share)
        step = math.log(share / tail) / slope
        value += step
        if abs(step) <= CLOSE:
            break
    return value


@lru_cache(maxsize=4096)
def chi_square_above(freedom: float, tail: float) -> float:
    """Return the value that a chi-square variable exceeds with a probability.

    Parameters
    ----------
    freedom : float, degrees of freedom, above 0
    tail : float, above 0 and below 1

    Notes
    -----
    Good to 1e-12 of the value; above 10,000 degrees of freedom by the expansion in powers of
    their root.

    References
    ----------
    Goldberg and Levine 1946, Ann. Math. Statist. 17, 216 (recalled).
    """
    if freedom <= MANY_SQUARES:
        return 2.0 * gamma_above(0.5 * freedom, tail)
    z = normal_above(tail)
    root = math.sqrt(freedom)
    return (
        freedom
        + root * z * _ROOT_2
        + 2.0 / 3.0 * (z**2 - 1.0)
        + (z**3 - 7.0 * z) / (9.0 * _ROOT_2 * root)
        - (6.0 * z**4 + 14.0 * z**2 - 32.0) / (405.0 * freedom)
        + (9.0 * z**5 + 256.0 * z**3 - 433.0 * z) / (4860.0 * _ROOT_2 * root**3)
    )


def gamma_above(shape: float, tail: float) -> float:
    """Return the value that a gamma variable of unit scale exceeds with a probability.

    Parameters
    ----------
    shape : float, above 0
    tail : float, above 0 and below 1

    Notes
    -----
    A Poisson mean at which ``shape`` or more events have the probability ``1 - tail``.
    """
    if 2.0 * shape > MANY_SQUARES:
        return 0.5 * chi_square_above(2.0 * shape, tail)
    upper = tail < 0.5
    share = tail if upper else 1.0 - tail

    def tail_at(x: float) -> tuple[float, float]:
        scale = math.exp(shape * math.log(x) - x - math.lgamma(shape))
        below = x < shape + 1.0
        found = scale * (_series(shape, x) if below else _fraction(shape, x))
        return (found if upper != below else 1.0 - found), -scale if upper else scale

    return _root(tail_at, share, max(shape, TINY))


@lru_cache(maxsize=4096)
def student_above(freedom: float, tail: float) -> float:
    """Return the value that Student's t exceeds with a probability.

    Parameters
    ----------
    freedom : float, degrees of freedom, above 0
    tail : float, above 0 and below 0.5

    Notes
    -----
    Good to 1e-12 of the value; above 1,000 degrees of freedom by the expansion in powers of
    their inverse.

    References
    ----------
    Abramowitz and Stegun 1972, Handbook of Mathematical Functions, 26.7.1 and 26.7.5 (recalled).
    """
    z = normal_above(tail)
    if freedom > MANY_STUDENT:
        first, second = (z**3 + z) / 4.0, (5.0 * z**5 + 16.0 * z**3 + 3.0 * z) / 96.0
        third = (3.0 * z**7 + 19.0 * z**5 + 17.0 * z**3 - 15.0 * z) / 384.0
        fourth = (79.0 * z**9 + 776.0 * z**7 + 1482.0 * z**5 - 1920.0 * z**3 - 945.0 * z) / 92160.0
        return z + (first + (second + (third + fourth / freedom) / freedom) / freedom) / freedom

    half = 0.5 * freedom
    log_beta = math.lgamma(half) + math.lgamma(0.5) - math.lgamma(half + 0.5)

    def tail_at(t: float) -> tuple[float, float]:
        squared = t * t / freedom
        near, far = 1.0 / (1.0 + squared), squared / (1.0 + squared)
        scale = math.exp(-half * math.log1p(squared) + 0.5 * math.log(far) - log_beta)
        if near < (half + 1.0) / (half + 2.5):
            share = scale * _beta_fraction(half, 0.5, near) / half
        else:
            share = 1.0 - scale * _beta_fraction(0.5, half, far) / 0.5
        return 0.5 * share, -scale

    return _root(tail_at, tail, z)


def _root(tail_at: Callable[[float], tuple[float, float]], share: float, start: float) -> float:
    """Return where a tail has a probability; ``tail_at`` gives it and its slope in ln x."""
    log_x, low, high = math.log(start), -math.inf, math.inf
    for _ in range(ROUNDS):
        found, slope = tail_at(math.exp(log_x))
        below = (found > share) == (math.copysign(1.0, slope) < 0.0)
        low, high = (log_x, high) if below else (low, log_x)
        told = found > 0.0 and slope != 0.0
        blind = 1.0 if below else -1.0
        step = math.log(share / max(found, TINY)) * found / slope if told else blind
        # Far out the tail is flat next to its logarithm: one leap would leave the numbers.
        step = min(max(step, -3.0), 3.0)
        # Where the tail has run out of digits, steps would go to and fro past the root for ever.
        if not low <= log_x + step <= high:
            step = 0.5 * (low + high) - log_x
        log_x += step
        if abs(step) <= CLOSE:
            break
    return math.exp(log_x)


def _series(shape: float, x: float) -> float:
    """Return the lower incomplete gamma function over x^a exp(-x), by its series."""
    term = total = 1.0 / shape
    for k in range(1, MOST_TERMS):
        term *= x / (shape + k)
        total += term
        if term < LAST_DIGIT * total:
            break
    return total


def _fraction(shape: float, x: float) -> float:
    """Return the upper incomplete gamma function over x^a exp(-x), by its continued fraction."""
    b = x + 1.0 - shape
    c, d = 1.0 / TINY, 1.0 / b
    total = d
    for k in range(1, MOST_TERMS):
        weight = -k * (k - shape)
        b += 2.0
        d = 1.0 / (weight * d + b)
        c = b + weight / c
        total *= c * d
        if abs(c * d - 1.0) < LAST_DIGIT:
            break
    return total


def _beta_fraction(a: float, b: float, x: float) -> float:
    """Return the continued fraction of the incomplete beta function."""
    c, d = 1.0, 1.0 / (1.0 - (a + b) * x / (a + 1.0))
    total = d
    for k in range(1, MOST_TERMS):
        even = k * (b - k) * x / ((a + 2 * k - 1) * (a + 2 * k))
        odd = -(a + k) * (a + b + k) * x / ((a + 2 * k) * (a + 2 * k + 1))
        for weight in (even, odd):
            d = 1.0 / (1.0 + weight * d)
            c = 1.0 + weight / c
            total *= c * d
        if abs(c * d - 1.0) < LAST_DIGIT:
            break
    return total
