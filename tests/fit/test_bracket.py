"""Edges read off states: runs, holes, open sides."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.bracket import bracket_runs, slip_shift


@pytest.fixture
def row(sweeps):
    """Make points in one row from a word: L locked, D drifting, I intermittent, ? undecided."""
    words = {"L": "locked", "D": "drifting", "I": "intermittent", "?": "undecided"}

    def make(letters):
        psi = np.zeros(5)
        return [
            sweeps.point(f"{k}", 2 * math.pi * k, psi, state=words[letter])
            for k, letter in enumerate(letters)
        ]

    return make


def test_an_edge_is_the_middle_of_its_cell(row):
    """Half a cell either way, as a rectangular distribution."""
    (run,) = bracket_runs(row("DDLLLDD"))
    assert run.lower_hz.value == pytest.approx(1.5)
    assert run.upper_hz.value == pytest.approx(4.5)
    assert run.lower_hz.u == pytest.approx(0.5 / math.sqrt(3))


def test_a_run_at_the_end_of_the_range_is_open(row):
    """No point beyond: a bound, not a value."""
    (run,) = bracket_runs(row("LLLD"))
    assert run.lower_hz.value is None
    assert run.lower_hz.high == pytest.approx(0.0)


def test_undecided_points_are_passed_over(row):
    """A point that settles nothing neither opens nor closes a region."""
    (run,) = bracket_runs(row("DL?LD"))
    assert (run.first_locked_hz, run.last_locked_hz) == (1.0, 3.0)


def test_a_hole_gives_two_runs(row):
    """Drifting or slipping points between locked ones part the runs."""
    assert len(bracket_runs(row("DLLDLLD"))) == 2
    assert bracket_runs(row("DDID")) == []


@pytest.mark.parametrize(
    ("ratio", "relaxations", "simulated"),
    [(0.03, 100, 0.114), (0.03, 400, 0.157), (0.1, 100, 0.303), (0.003, 400, 0.039)],
)
def test_slips_move_the_last_locked_point_inward(ratio, relaxations, simulated):
    """Why a bracket is no edge: the shift, against simulated sweeps (a tenth, or 0.01 K)."""
    assert slip_shift(ratio, relaxations) == pytest.approx(simulated, rel=0.1, abs=0.011)
