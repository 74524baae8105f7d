"""The joint fit of a sweep costs the same per point whatever their number."""

from __future__ import annotations

import time

import numpy as np
import pytest

from fit.region_fit import climb_groups, held_columns, lay_groups
from fit.region_wander import with_spread


def seconds(sweeps, points):
    """Processor time of the climb and of the spread between points; evaluations of the climb."""
    group = sweeps.sweep(np.random.default_rng(2), points=points, length_s=20.0, wander=0.1)
    groups = [group]
    data = lay_groups(groups, 1)
    begin = time.process_time()
    fit = climb_groups(data, groups, 1)
    climbed = time.process_time()
    with_spread(data, fit, held_columns(groups))
    assert fit.converged.all()
    return climbed - begin, time.process_time() - climbed, fit.evaluations


def check_linear(sweeps, few, many):
    """Cost per point may grow by caches and by a round more, not with the number of points."""
    small = min((seconds(sweeps, few) for _ in range(2)), key=lambda found: found[0])
    large = seconds(sweeps, many)
    growth = many / few
    # Per evaluation, because a climb of more points may take a step more or less.
    assert large[0] / large[2] < 2.0 * growth * small[0] / small[2]
    assert large[1] < 3.0 * growth * small[1]


def test_ten_times_the_points_take_ten_times_the_work(sweeps):
    """A method that grows with the square would take a hundred times."""
    check_linear(sweeps, 150, 1500)


@pytest.mark.long
def test_ten_thousand_points_take_ten_times_a_thousand(sweeps):
    """A sweep of 10,000 captures is meant to be mapped."""
    check_linear(sweeps, 1000, 10000)
