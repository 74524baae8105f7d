"""Coverage of the edges over whole simulated sweeps of the demo's circuit (long).

The truth is the edge of the noise-free circuit, found by slow integration that knows no phase
equation; a sweep is integrated from the circuit with its noise and measured like captures.
"""

from __future__ import annotations

import numpy as np
import pytest

from fit.difference import Order
from fit.freerun import estimate_free_run
from fit.region import RegionRules, fit_region
from reports.demo import demo_cell
from rig.phases.estimate import track_one
from rig.synthetic.circuit import integrate_tank, tank_lock_edges
from rig.synthetic.generator import DriveStep, generator_phase_rad
from rig.synthetic.lanes import LaneGrid

RATE_HZ, DURATION_S, LEAD_S = 8000.0, 12.0, 0.5
DRIVE_V, CENTRE_HZ = 2.0, 500.0
OFFSETS_HZ = np.linspace(-4.5, 4.5, 21)
RECORDER_NOISE_V = 1e-3
SWEEPS = 20


@pytest.fixture(scope="module")
def edges():
    """True edges of the demo's circuit at 2 V; their own resolution is resolution_hz."""
    return tank_lock_edges(demo_cell(faulty=False), drive_v=DRIVE_V, rate_hz=RATE_HZ)


def sweep_of(rigs, seed):
    """The region of one seeded sweep, measured from integrated captures."""
    rng = np.random.default_rng(seed)
    steps = [
        DriveStep(
            drive_v=DRIVE_V,
            drive_hz=CENTRE_HZ + away,
            before_hz=CENTRE_HZ + away - 0.45,
            phase_rad=rng.uniform(0.0, 2 * np.pi),
        )
        for away in OFFSETS_HZ
    ]
    steps.append(DriveStep(drive_v=0.0, drive_hz=CENTRE_HZ, before_hz=CENTRE_HZ))
    grid = LaneGrid(
        rate_hz=RATE_HZ,
        frames=round(DURATION_S * RATE_HZ),
        settle_frames=round(LEAD_S * RATE_HZ),
    )
    volts = integrate_tank(demo_cell(faulty=False), steps, grid=grid, rng=rng)
    phase = generator_phase_rad(steps, np.arange(volts.shape[0]) / RATE_HZ)
    made = []
    for lane, step in enumerate(steps):
        rows = np.stack([max(step.drive_v, 1.0) * np.cos(phase[:, lane]), volts[:, lane]])
        rows += RECORDER_NOISE_V * rng.standard_normal(rows.shape)
        made.append(rigs.pair_of(rows, RATE_HZ))
    alone = estimate_free_run(track_one(rigs.channels_of(made[-1])[1]), "driven")
    points = [
        rigs.region_point(f"{number:03d}", DRIVE_V, rigs.measured(one, free_runs=[alone]))
        for number, one in enumerate(made[:-1])
    ]
    return fit_region(points, RegionRules(order=Order())).levels[0]


@pytest.mark.long
def test_intervals_of_the_edges_cover_the_truth_of_the_circuit(rigs, edges):
    """95 % intervals over 20 seeded sweeps; the two edges of a sweep share its noise."""
    covered, scores = 0, []
    for seed in range(SWEEPS):
        level = sweep_of(rigs, 1000 + seed)
        for edge, truth in ((level.lower_hz, edges.lower_hz), (level.upper_hz, edges.upper_hz)):
            assert edge.value is not None, edge.reason
            # The truth is itself known to half its resolution only (rectangular).
            u = float(np.hypot(edge.u, edges.resolution_hz / np.sqrt(12.0)))
            scores.append((edge.value - truth) / u)
            covered += abs(scores[-1]) < 1.96
    # 40 intervals, of which the pairs may be dependent: as for 20 independent pairs, fewer
    # than 33 of 40 would come from 95 % coverage less than once in 200.
    assert covered >= 33, scores
    assert np.sqrt(np.mean(np.square(scores))) < 1.5
