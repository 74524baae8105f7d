"""The lane integrator against exact solutions, a library integrator and known statistics."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from rig.synthetic.circuit import TankValues, tank_rates
from rig.synthetic.lanes import LaneGrid, integrate_lanes, substeps_for


def decay_rates(state, drive, out):
    """dx/dt = -x + drive."""
    out[...] = drive - state


def test_a_decay_is_followed_to_the_order_of_the_method():
    """Halving the step of a fourth-order method must cut its error sixteenfold."""
    errors = []
    for substeps in (1, 2):
        grid = LaneGrid(rate_hz=4.0, frames=9, substeps=substeps)
        states = integrate_lanes(decay_rates, np.ones((1, 1)), grid=grid)
        errors.append(abs(states[-1, 0, 0] - np.exp(-2.0)))
    # 16 plus the next order of the error, which is about a tenth at this step.
    assert errors[0] / errors[1] == pytest.approx(16.0, rel=0.2)


def test_the_first_kept_frame_is_the_start_when_nothing_settles():
    """Sample k stands at k / rate; an integrator that is a step late shifts every phase."""
    states = integrate_lanes(
        decay_rates, np.full((1, 3), 2.0), grid=LaneGrid(rate_hz=10.0, frames=4)
    )
    assert np.array_equal(states[0], np.full((1, 3), 2.0))


def test_settling_moves_the_time_of_the_drive_not_the_rate():
    """The frequency step of a capture must fall on its first kept frame."""
    grid = LaneGrid(rate_hz=10.0, frames=5, substeps=3, settle_frames=7)
    first_kept = np.array([2 * 3 * 7])
    assert grid.half_step_time_s(first_kept)[0] == 0.0
    assert grid.half_step_time_s(first_kept + 6)[0] == pytest.approx(0.1, abs=1e-15)


def test_frames_beyond_one_chunk_join_without_a_seam():
    """Drive and noise are made in chunks; the state must not notice."""
    grid = LaneGrid(rate_hz=50.0, frames=700)
    times = np.arange(700) / 50.0
    states = integrate_lanes(
        decay_rates,
        np.zeros((1, 1)),
        grid=grid,
        drive=lambda half: np.sin(grid.half_step_time_s(half))[:, np.newaxis],
    )
    exact = 0.5 * (np.sin(times) - np.cos(times) + np.exp(-times))
    # Fourth order: (step 0.01)^4 / 120, a tenth of it left by the decay.
    assert np.max(np.abs(states[:, 0, 0] - exact)) < 1e-9


def test_the_circuit_agrees_with_a_library_integrator():
    """A second algorithm as witness: the noise-free tank over 20 cycles."""
    values = TankValues()
    grid = LaneGrid(rate_hz=64000.0, frames=2561)
    start = np.array([[2.0], [0.0]])
    mine = integrate_lanes(tank_rates(values), start, grid=grid)[:, 0, 0]

    def rates(_time, state):
        out = np.empty((2, 1))
        tank_rates(values)(state[:, np.newaxis], np.zeros(1), out)
        return out[:, 0]

    times = np.arange(2561) / 64000.0
    other = solve_ivp(rates, (0, times[-1]), start[:, 0], "DOP853", times, rtol=1e-12, atol=1e-12)
    # 256 steps a cycle: (2 pi / 256)^4 / 120 of a turn a cycle, 20 cycles, 2 V.
    assert np.max(np.abs(mine - other.y[0])) < 2e-6


def test_lanes_do_not_touch_each_other():
    """A capture must come out the same alone and beside others."""
    values, grid = TankValues(), LaneGrid(rate_hz=8000.0, frames=300)
    start = np.array([[2.0, 1.0, 0.3], [0.0, 100.0, 5.0]])
    together = integrate_lanes(tank_rates(values), start, grid=grid)
    alone = integrate_lanes(tank_rates(values), start[:, 1:2], grid=grid)
    assert np.array_equal(together[:, :, 1], alone[:, :, 0])


def test_noise_settles_to_the_variance_of_the_exact_process(rng):
    """dx = -x dt + s dW has variance s^2 / 2: the noise strength is per root second."""
    grid = LaneGrid(rate_hz=20.0, frames=1, substeps=1, settle_frames=160)
    states = integrate_lanes(
        decay_rates, np.zeros((1, 4000)), grid=grid, noise=(np.array([3.0]), rng)
    )
    # 4 standard errors of a variance from 4000 lanes; the kick at each step's end adds
    # step^2 / 12 of relative error, 0.02 %.
    assert np.var(states[0, 0]) == pytest.approx(4.5, rel=4 * np.sqrt(2 / 4000))


def test_the_start_state_of_the_caller_is_not_changed():
    """Callers reuse their start state for the next run."""
    start = np.ones((1, 2))
    integrate_lanes(decay_rates, start, grid=LaneGrid(rate_hz=1.0, frames=5))
    assert np.array_equal(start, np.ones((1, 2)))


@pytest.mark.parametrize(
    "values",
    [
        {"rate_hz": 0.0, "frames": 1},
        {"rate_hz": float("nan"), "frames": 1},
        {"rate_hz": 1.0, "frames": 0},
        {"rate_hz": 1.0, "frames": 1, "substeps": 0},
        {"rate_hz": 1.0, "frames": 1, "settle_frames": -1},
    ],
)
def test_a_grid_without_time_is_refused(values):
    """A grid that holds no step would end in an empty capture."""
    with pytest.raises(ValueError, match="lane grid"):
        LaneGrid(**values)


def test_substeps_resolve_the_fastest_cycle():
    """At least the asked steps a cycle, and never less than one a frame."""
    assert substeps_for(8000.0, 500.0) == 2
    assert substeps_for(1e6, 500.0) == 1
    assert substeps_for(100.0, 500.0) * 100.0 >= 30 * 500.0
