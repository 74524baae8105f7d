"""The cost of the episode search over lengths and hold times, counted in passes."""

from __future__ import annotations

import math
import time

import numpy as np
import pytest

from fit.windows import qualifying_unions


def best_time_s(psi, window):
    """Least processor time of five searches."""
    spent = []
    for _ in range(5):
        start = time.process_time()
        qualifying_unions(psi, math.pi, window)
        spent.append(time.process_time() - start)
    return min(spent)


@pytest.fixture(scope="module")
def walk():
    """A long psi, seeded."""
    return np.cumsum(np.random.default_rng(5).normal(0, 0.05, 400_000))


def test_a_hold_time_a_hundred_times_longer_costs_little_more(walk):
    """Doubling: log2 of the window. A window that slides by hand would cost a hundred times."""
    # log2 of 30 and of 3,000 are 5 and 12; a factor of 6 leaves room for a busy machine.
    assert best_time_s(walk, 3000) < 6 * best_time_s(walk, 30) + 0.002


def test_a_record_ten_times_longer_costs_about_ten_times(walk):
    """Linear in length; an exact search of all windows is quadratic (a hundred times)."""
    assert best_time_s(walk, 200) < 40 * best_time_s(walk[::10].copy(), 200) + 0.002
