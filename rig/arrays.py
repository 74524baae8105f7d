"""Array types used in signatures; shapes and units stand in each docstring."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

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
