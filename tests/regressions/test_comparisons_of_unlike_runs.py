"""Runs that once were compared although their values mean different things."""

from __future__ import annotations

from dataclasses import replace

import pytest

from reports.compare import compare_runs, comparison_text
from rig.sweepfile.records import LevelAxis


@pytest.mark.parametrize(
    ("changes", "quantity", "reason"),
    [
        # used to subtract a free detuning from a drive frequency
        ({"coupling": "mutual"}, "lower_edge_hz", "axes differ"),
        # used to call the same captures different: per volt against per ten decibels
        ({"level": LevelAxis(kind="decibel", unit="dB")}, "coupling_per_level", "levels differ"),
        # used to subtract a 2:1 region from a 1:1 region
        ({"order": (2, 1)}, "locking_width_hz", "orders differ: 1:1 and 2:1"),
    ],
)
def test_values_of_another_meaning_are_not_subtracted(made, changes, quantity, reason) -> None:
    """A significant difference of two unlike numbers is nonsense with a p-value."""
    run = made.make_run()
    other = replace(run, plan=made.make_plan(**changes))
    rows = [row for row in compare_runs(run, other).rows if row.quantity == quantity]
    assert rows
    assert all(row.outcome == "cannot be compared" for row in rows)
    assert all(reason in row.difference.reason for row in rows)
    assert reason in comparison_text(compare_runs(run, other), "first", "second")


def test_free_frequencies_compare_whatever_the_order(made) -> None:
    """They belong to one oscillator; the order of the pair does not enter."""
    run = made.make_run()
    other = replace(run, plan=made.make_plan(order=(2, 1)))
    rows = [row for row in compare_runs(run, other).rows if row.quantity.startswith("free_")]
    assert rows
    assert {row.outcome for row in rows} == {"no difference seen"}
