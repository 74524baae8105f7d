"""Array types used in signatures, and what numpy has only together with masked arrays.

Shapes and units stand in each docstring. numpy's own median, quantile and unique load masked
arrays when they are first called, which takes a third of the time that numpy itself takes;
these give the same numbers without.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.int64]
SampleBlock = NDArray[np.float32] | NDArray[np.float64]


def frozen_view(values: NDArray) -> NDArray:  # type: ignore[type-arg]
    """Return a read-only view of an array, so that a record cannot be changed through it."""
    if not isinstance(values, np.ndarray):
        return values  # a long row (``rig.longarrays``) cannot be written to
    view = values.view()
    view.flags.writeable = False
    return view


def median(values: ArrayLike) -> float:
    """Return the median of all values, NaN where one of them is.

    Parameters
    ----------
    values : numbers, at least one
    """
    return float(row_medians(np.reshape(values, (1, -1)))[0])


def row_medians(values: NDArray) -> FloatArray:  # type: ignore[type-arg]
    """Return the median along the last axis, NaN where a value is; see ``median``.

    Parameters
    ----------
    values : array, shape (..., n), n at least 1

    Returns
    -------
    array, shape (...)
    """
    last = values.shape[-1] - 1
    low, high = last // 2, (last + 1) // 2
    # A NaN is sorted behind everything: the last place tells of it.
    part = np.partition(values, (low, high, last), axis=-1)
    middle = part[..., high] if low == high else 0.5 * (part[..., low] + part[..., high])
    return np.asarray(np.where(np.isnan(part[..., last]), np.nan, middle), dtype=float)


def quantile(values: FloatArray, share: float) -> float:
    """Return the value below which a share of all values lies, between the two next to it.

    Parameters
    ----------
    values : array, shape (n,), n at least 1
    share : float, from 0 to 1
    """
    place = (values.size - 1) * share
    low = min(int(place), values.size - 1)
    high = min(low + 1, values.size - 1)
    part = np.partition(values, (low, high, values.size - 1))
    if np.isnan(part[-1]):
        return float("nan")
    rest, step = place - low, part[high] - part[low]
    # From the nearer end, as numpy does it: then the ends are met exactly.
    return float(part[low] + step * rest if rest < 0.5 else part[high] - step * (1 - rest))


def distinct(values: NDArray) -> NDArray:  # type: ignore[type-arg]
    """Return the different values, in rising order.

    Parameters
    ----------
    values : array
    """
    ordered = np.sort(values, axis=None)
    is_new = np.ones(ordered.size, dtype=bool)
    np.not_equal(ordered[1:], ordered[:-1], out=is_new[1:])
    return np.asarray(ordered[is_new])
