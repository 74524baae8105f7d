"""Steps of two staircases with known edges: the sine circle map and the forced Adler equation."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.staircase import find_steps


def winding_numbers(drive, strength, turns=4000, settle=500):
    """Winding number of th' = th + drive - (strength / 2 pi) sin(2 pi th), for many drives."""
    angle = np.zeros_like(drive)
    for _ in range(settle):
        angle = angle + drive - strength / (2 * math.pi) * np.sin(2 * math.pi * angle)
    start = angle.copy()
    for _ in range(turns):
        angle = angle + drive - strength / (2 * math.pi) * np.sin(2 * math.pi * angle)
    return (angle - start) / turns


@pytest.mark.parametrize(("p", "q"), [(1, 2), (1, 3), (2, 5), (1, 4)])
def test_steps_of_the_circle_map_lie_where_they_are_known(check_tables, p, q):
    """Widths of n:m steps against edges computed to 30 digits (E3)."""
    # Source: sine circle map at K = 1, folds f^q = th + p with (f^q)' = 1
    # Read: computed (see fixtures/README.md); E2 and the mirror symmetry are second checks
    # Printed: lo, hi in check_tables.json: circle_map_tongues
    # Converted: none
    # Tolerance: two cells of the grid: critical slowing at an edge blurs one
    rows = check_tables["circle_map_tongues"]["rows"]
    (row,) = [r for r in rows if (float(r["K"]), r["p"], r["q"]) == (1.0, p, q)]
    low, high = float(row["lo"]), float(row["hi"])
    drive = np.linspace(low - 0.3 * (high - low), high + 0.3 * (high - low), 161)
    steps = find_steps(drive, winding_numbers(drive, 1.0), np.full(drive.size, 1.2e-4), unit="1")
    (step,) = [one for one in steps if (one.order.m, one.order.n) == (p, q)]
    cell = drive[1] - drive[0]
    assert step.lower.value == pytest.approx(low, abs=2 * cell)
    assert step.upper.value == pytest.approx(high, abs=2 * cell)


def test_the_main_step_of_the_circle_map_is_the_strength_over_two_pi():
    """0/1 locks for |drive| <= K/2 pi exactly (E1); moved to 1/1, where a ratio is above 0."""
    # Source: sine circle map, textbook
    # Read: recalled; the fold of the map gives it by hand
    # Printed: +-0.0795774715 at K = 0.5
    # Converted: 1 added, since the map is the same a turn further
    # Tolerance: one cell of the grid
    drive = 1.0 + np.linspace(-0.12, 0.12, 121)
    (step,) = find_steps(drive, winding_numbers(drive, 0.5, 1500), np.full(121, 2e-4), largest=1)
    assert step.lower.value == pytest.approx(1 - 0.0795774715, abs=0.002)
    assert step.upper.value == pytest.approx(1 + 0.0795774715, abs=0.002)


def test_the_forced_phase_equation_steps_at_whole_numbers_only():
    """phi' = B + cos t - sin phi locks at whole rotation numbers and nowhere else (E6)."""
    # Source: Buchstaber, Karpov and Tertychnyi 2010 (quantisation of the rotation number)
    # Read: recalled; edges from the monodromy trace, computed
    # Printed: n = 1: B from 1.0000000000 to 1.6537151833986
    # Converted: none
    # Tolerance: two cells of the grid
    bias = np.linspace(0.85, 1.9, 106)
    step, per_turn, turns = 2 * math.pi / 60, 60, 120
    phi, time = np.zeros_like(bias), 0.0
    marks = {}
    for index in range(per_turn * (turns + 20)):
        if index % per_turn == 0:
            marks[index // per_turn] = phi.copy()
        first = bias + math.cos(time) - np.sin(phi)
        second = bias + math.cos(time + step / 2) - np.sin(phi + step / 2 * first)
        third = bias + math.cos(time + step / 2) - np.sin(phi + step / 2 * second)
        fourth = bias + math.cos(time + step) - np.sin(phi + step * third)
        phi = phi + step / 6 * (first + 2 * second + 2 * third + fourth)
        time += step
    ratio = (marks[turns + 19] - marks[19]) / (2 * math.pi * turns)
    steps = find_steps(bias, ratio, np.full(bias.size, 1e-3), unit="1", largest=3)
    wide = [one for one in steps if one.width.value is None or one.width.value > 0.05]
    (one,) = [found for found in wide if (found.order.n, found.order.m) == (1, 1)]
    assert one.lower.value == pytest.approx(1.0, abs=0.02)
    assert one.upper.value == pytest.approx(1.6537151833986, abs=0.02)
    assert {found.order.n for found in wide} == {1}


def test_the_golden_mean_lies_on_no_step():
    """The most irrational ratio is where it is known to be, and no step is claimed there (E4)."""
    # Source: S. J. Shenker 1982, Physica D 5, 405: sine circle map at K = 1
    # Read: recalled; superstable Fibonacci sequence to 2584/4181, computed
    # Printed: drive at the golden mean 0.606661063470
    # Converted: none
    # Tolerance: drive 2e-6, what 40,000 turns of the map resolve
    golden, at = (math.sqrt(5.0) - 1.0) / 2.0, 0.606661063470
    drive = at + np.linspace(-1.2e-5, 1.2e-5, 25)
    ratio = winding_numbers(drive, 1.0, turns=40_000)
    assert np.interp(golden, ratio, drive) == pytest.approx(at, abs=2e-6)
    # The convergents 5/8 and 8/13 stand on either side, each on a step of its own.
    wide = at + np.linspace(-0.005, 0.007, 121)
    ratio = winding_numbers(wide, 1.0, turns=8000)
    steps = find_steps(wide, ratio, np.full(wide.size, 6e-5), unit="1", largest=13)
    assert {(one.order.m, one.order.n) for one in steps} >= {(5, 8), (8, 13)}
    for one in steps:
        low, high = one.lower.value or wide[0], one.upper.value or wide[-1]
        assert not low <= at <= high
