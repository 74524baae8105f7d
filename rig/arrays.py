"""Array types used in signatures, and medians; shapes and units stand in each docstring."""

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
    view = values.view()
    view.flags.writeable = False
    return view


def median(values: ArrayLike) -> float:
    """Return the median of all values, NaN where one of them is.

    The same as numpy's, which costs twice as much on a short array and loads masked
    arrays when it is first called: a third of the time that numpy itself takes to load.

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
