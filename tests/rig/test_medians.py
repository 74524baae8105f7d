"""Medians against numpy's, which they stand in for."""

from __future__ import annotations

import math

import numpy as np
import pytest

from rig.arrays import median, row_medians


@pytest.mark.parametrize("kind", [np.float64, np.float32, np.int64])
@pytest.mark.parametrize("size", [1, 2, 3, 4, 5, 16, 101, 1000])
def test_medians_are_those_of_numpy(kind: type, size: int) -> None:
    """They replace numpy's on the path of every record: not a digit may differ."""
    rows = (100.0 * np.random.default_rng(size).standard_normal((7, size))).astype(kind)
    np.testing.assert_array_equal(row_medians(rows), np.median(rows, axis=1))
    assert median(rows) == float(np.median(rows))
    assert median(rows[0].tolist()) == np.median(rows[0].tolist())


def test_a_missing_value_makes_the_median_missing() -> None:
    """A gap that passed for a number would move levels without a word."""
    assert math.isnan(median([1.0, math.nan, 3.0]))
    found = row_medians(np.array([[1.0, math.nan, 2.0], [3.0, 1.0, 2.0]]))
    np.testing.assert_array_equal(found, [math.nan, 2.0])
