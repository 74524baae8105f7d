"""Medians, quantiles and distinct values against numpy's, which they stand in for."""

from __future__ import annotations

import math

import numpy as np
import pytest

from rig.arrays import distinct, median, quantile, row_medians


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


@pytest.mark.parametrize("size", [1, 2, 3, 10, 101, 1000])
def test_quantiles_are_those_of_numpy(size: int) -> None:
    """They decide how long a hold must last and how fast a phase turns: not a digit may differ."""
    values = np.random.default_rng(size).standard_normal(size)
    for share in (0.0, 0.05, 0.3, 0.5, 0.77, 0.95, 0.999, 1.0):
        assert quantile(values, share) == float(np.quantile(values, share))
    values[-1] = math.nan
    assert math.isnan(quantile(values, 0.5))


def test_distinct_values_are_those_of_numpy() -> None:
    """Groups of records and numbers of substeps are told apart by them."""
    for values in (np.array([3, 1, 3, 2, 1]), np.zeros(0), np.array([[0.5, 0.5], [-1.0, 2.0]])):
        np.testing.assert_array_equal(distinct(values), np.unique(values))
