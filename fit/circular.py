"""Statistics of directions: tests for a preferred direction and their textbook corrections.

Means and resultant lengths stand in ``rig.angles``. These tests take the angles as
independent; successive phases of an oscillator are not, so inside the package they serve as
limits only: what holds for a record stands in ``fit.freenull``.
"""

from __future__ import annotations

import math

import numpy as np

from rig.angles import mean_vector, resultant_length, wrap_rad
from rig.arrays import FloatArray, distinct
from rig.errors import FitError

#: Step of the integral of the exact test.
RAYLEIGH_STEP = 0.005


def rayleigh_p_exact(resultant: float, count: int) -> float:
    """Return the exact probability that n random directions have so long a resultant.

    P(R > r) = 1 - r int_0^inf J1(r t) J0(t)^n dt with r = n times the mean resultant length.

    Parameters
    ----------
    resultant : float
        Mean resultant length, 0 to 1.
    count : int
        Number of directions, at least 3.

    Returns
    -------
    float, in [0, 1]

    Raises
    ------
    FitError
        If the resultant lies outside 0 to 1 or there are fewer than 3 directions.

    Notes
    -----
    By trapezoids up to where the integrand is below 1e-13 (at most t = 4,000);
    good to 1e-8 from 6 directions on, 1e-4 for 3.

    References
    ----------
    Kluyver 1906; Pearson 1905 (both recalled).
    """
    _refuse_resultant(resultant, count)
    from scipy.special import j0, j1

    # |J0(t)|^n falls as (2 / (pi t))^(n/2); J1 adds a half power more.
    reach = min(4000.0, max(40.0, 0.64 * 10.0 ** (26.0 / (count + 1))))
    t = np.arange(0.0, reach, RAYLEIGH_STEP)
    length = resultant * count
    integral = float(np.trapezoid(j1(length * t) * j0(t) ** count, t))
    # The integrand starts with slope r/2; what trapezoids lose there (Euler and Maclaurin).
    integral += RAYLEIGH_STEP**2 / 12 * length / 2
    return min(max(1.0 - length * integral, 0.0), 1.0)


def rayleigh_p_zar(resultant: float, count: int) -> float:
    """Return the probability that n random directions have so long a resultant, closed form.

    P = exp(sqrt(1 + 4 n + 4 (n^2 - R^2)) - (1 + 2 n)), R = n times the mean length.

    Parameters
    ----------
    resultant : float
        Mean resultant length, 0 to 1.
    count : int
        Number of directions, at least 3.

    Returns
    -------
    float, in (0, 1]

    Raises
    ------
    FitError
        If the resultant lies outside 0 to 1 or there are fewer than 3 directions.

    References
    ----------
    Zar 2010, Biostatistical Analysis, eq. 27.4 (recalled).
    """
    _refuse_resultant(resultant, count)
    total2 = (count * resultant) ** 2
    return math.exp(math.sqrt(1 + 4 * count + 4 * (count**2 - total2)) - (1 + 2 * count))


def v_test(angle_rad: FloatArray, mean_rad: float) -> tuple[float, float]:
    """Return V and u of the test for a preferred direction that is known beforehand.

    V = R cos(mean - stated mean), u = V sqrt(2 / n); u is standard normal for random angles.

    Parameters
    ----------
    angle_rad : array, shape (n,), rad
    mean_rad : float, rad
        The stated direction.

    Returns
    -------
    (float, float)
    """
    toward = float(np.sum(np.cos(np.asarray(angle_rad) - mean_rad)))
    return toward, toward * math.sqrt(2.0 / np.size(angle_rad))


def grouping_factor(width_rad: float) -> float:
    """Return the factor by which grouping in classes shortens a resultant.

    c = (d/2) / sin(d/2), d the width of a class.

    Parameters
    ----------
    width_rad : float, rad

    Returns
    -------
    float, above 1
    """
    return width_rad / 2 / math.sin(width_rad / 2)


def angular_deviation_rad(resultant: float) -> float:
    """Return the angular deviation sqrt(2 (1 - r)), rad."""
    return math.sqrt(2.0 * (1.0 - resultant))


def expected_resultant(count: float) -> float:
    """Return the mean resultant length of n independent random directions.

    sqrt(pi / (4 n)); the mean of its square is 1 / n exactly.

    Parameters
    ----------
    count : float
        May be an effective number.

    Returns
    -------
    float, at most 1
    """
    return min(1.0, math.sqrt(math.pi / (4.0 * count)))


def bin_count(samples: int) -> int:
    """Return how many classes suit a sample for the entropy index.

    exp(0.626 + 0.4 ln(M - 1)), rounded, at least 2.

    Parameters
    ----------
    samples : int

    Returns
    -------
    int

    References
    ----------
    Otnes and Enochson, as quoted by Le Van Quyen et al. 2001 (recalled).
    """
    return max(2, round(math.exp(0.626 + 0.4 * math.log(max(samples - 1, 1)))))


def shannon_index(angle_rad: FloatArray, bins: int) -> FloatArray:
    """Return how far the distribution of angles is from even: 0 even, 1 all in one class.

    (ln N - S) / ln N, S the entropy over N classes.

    Parameters
    ----------
    angle_rad : array, shape (..., n), rad
    bins : int, at least 2

    Returns
    -------
    array, shape (...)

    References
    ----------
    Tass et al. 1998, PRL 81, 3291 (recalled).
    """
    share = _shares(np.atleast_2d(angle_rad), bins)
    with np.errstate(divide="ignore", invalid="ignore"):
        entropy = -np.sum(np.where(share > 0, share * np.log(share), 0.0), axis=-1)
    return np.asarray(1.0 - entropy / math.log(bins))


def conditional_index(reference_rad: FloatArray, driven_rad: FloatArray, bins: int) -> FloatArray:
    """Return how well the reference phase predicts the driven phase: 0 not at all, 1 fully.

    Mean over classes of the reference phase of |<exp(i driven phase)>| in the class.

    Parameters
    ----------
    reference_rad : array, shape (n,), rad
        m times the reference phase.
    driven_rad : array, shape (..., n), rad
        n times the driven phase.
    bins : int
        Classes of the reference phase; empty ones do not count.

    Returns
    -------
    array, shape (...)

    Notes
    -----
    A perfect lock falls short of 1 by the class width: sin(pi/N) / (pi/N).

    References
    ----------
    Tass et al. 1998, PRL 81, 3291 (recalled).
    """
    classes = _classes(reference_rad, bins)
    member = classes[:, None] == distinct(classes)[None, :]
    sums = np.exp(1j * np.atleast_2d(driven_rad)) @ member.astype(float)
    return np.asarray(np.mean(np.abs(sums) / member.sum(axis=0), axis=-1))


def _classes(angle_rad: FloatArray, bins: int) -> FloatArray:
    """Return the class of each angle, counted from -pi."""
    place = (wrap_rad(angle_rad) + math.pi) / (2.0 * math.pi) * bins
    return np.asarray(np.minimum(place.astype(np.int64), bins - 1))


def _shares(angle_rad: FloatArray, bins: int) -> FloatArray:
    """Return the share of angles in each class, one row for each row of angles."""
    rows = angle_rad.shape[0]
    flat = _classes(angle_rad, bins) + bins * np.arange(rows)[:, None]
    counts = np.bincount(flat.ravel().astype(np.int64), minlength=rows * bins)
    return np.asarray(counts.reshape(rows, bins) / angle_rad.shape[1])


def _refuse_resultant(resultant: float, count: int) -> None:
    """Refuse values that are no mean resultant length of several directions."""
    if not 0 <= resultant <= 1:
        raise FitError(f"mean resultant length must lie in [0, 1], got {resultant:g}")
    if count < 3:
        raise FitError(f"test for a preferred direction needs 3 angles or more, got {count}")


def rayleigh_p(angle_rad: FloatArray) -> float:
    """Return the probability that independent random angles agree so well.

    Exact up to 30 angles, the closed form beyond (good to a percent of p there).

    Parameters
    ----------
    angle_rad : array, shape (n,), rad, n >= 3

    Returns
    -------
    float
    """
    count, length = int(np.size(angle_rad)), resultant_length(angle_rad)
    return rayleigh_p_exact(length, count) if count <= 30 else rayleigh_p_zar(length, count)


def corrected_mean_length(angle_rad: FloatArray, width_rad: float) -> float:
    """Return the resultant length of grouped angles with the shortening by classes undone."""
    return min(1.0, abs(mean_vector(angle_rad)) * grouping_factor(width_rad))
