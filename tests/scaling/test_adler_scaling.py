"""The cost of the estimator grows with the data, not faster."""

from __future__ import annotations

import math
import time

import numpy as np

from fit.likelihood import LaneBatch, lane_likelihood

THETA = np.array([1.5, 0.6, -0.8, math.log(0.03), math.log(0.01)])


def cost_s(lanes: int, samples: int) -> float:
    """Least processor time of three evaluations."""
    rng = np.random.default_rng(1)
    psi = np.cumsum(0.2 + 0.1 * rng.standard_normal((lanes, samples)), axis=1)
    batch = LaneBatch(
        y=psi,
        count=np.full(lanes, samples),
        step_s=np.full(lanes, 0.2),
        start_s=np.zeros(lanes),
    )
    theta = np.tile(THETA, (lanes, 1))
    times = []
    for _ in range(3):
        begin = time.process_time()
        lane_likelihood(batch, theta)
        times.append(time.process_time() - begin)
    return min(times)


def test_many_lanes_cost_less_each_than_few():
    """Lanes side by side are the whole point: one loop over samples serves them all."""
    few, many = cost_s(8, 100), cost_s(1024, 100)
    # 128 times the lanes: measured 15-25 times the cost; 64 leaves room for a busy machine.
    assert many < 64.0 * few


def test_cost_is_linear_in_the_samples():
    """Sums are carried along; nothing is kept per sample."""
    short, long = cost_s(64, 100), cost_s(64, 800)
    assert long < 20.0 * short
