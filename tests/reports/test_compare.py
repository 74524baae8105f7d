"""Two runs side by side: what changed by more than chance, and what only looks so."""

from __future__ import annotations

import math
import sys
from dataclasses import replace
from types import ModuleType

import pytest
from scipy import stats

from reports.compare import (
    compare_folders,
    compare_runs,
    comparison_json,
    comparison_text,
    holm_rejects,
)
from reports.store import json_text
from rig.quantities import undetermined


def widened(made, change_hz):
    """A run whose widths are all larger by something."""
    region = made.make_region()
    levels = tuple(
        replace(level, width_hz=made.q(level.width_hz.value + change_hz, 0.006, "Hz"))
        for level in region.levels
    )
    return made.make_run(region=replace(region, levels=levels))


def row(comparison, quantity, where):
    """One row of a comparison."""
    return next(one for one in comparison.rows if (one.quantity, one.where) == (quantity, where))


def test_a_run_compared_with_itself_differs_in_nothing(made):
    """Anything else would be an artefact of the comparison."""
    comparison = compare_runs(made.make_run(), made.make_run())
    assert {one.outcome for one in comparison.rows} <= {"no difference seen", "cannot be compared"}
    assert (comparison.changes, comparison.unpaired) == ((), ())


def test_a_real_change_is_found_with_its_uncertainty_and_p_value(made):
    """0.1 Hz with 8.5 mHz of uncertainty."""
    found = row(
        compare_runs(made.make_run(), widened(made, 0.1)), "locking_width_hz", "level 1 A, up"
    )
    assert found.difference.value == pytest.approx(0.1)
    assert found.difference.u == pytest.approx(math.hypot(0.006, 0.006))
    assert found.p_value == pytest.approx(2 * stats.norm.sf(0.1 / math.hypot(0.006, 0.006)))
    assert found.outcome == "differs"


def test_a_change_within_the_uncertainties_is_not_called_one(made):
    """Two repeats of one rig differ by chance."""
    found = row(
        compare_runs(made.make_run(), widened(made, 0.01)), "locking_width_hz", "level 1 A, up"
    )
    assert found.outcome == "no difference seen"


def test_swapping_the_runs_turns_the_sign(made):
    """Second less first."""
    there = compare_runs(made.make_run(), widened(made, 0.1)).rows
    back = compare_runs(widened(made, 0.1), made.make_run()).rows
    for one, other in zip(there, back, strict=True):
        if one.difference.value is not None:
            assert one.difference.value == pytest.approx(-other.difference.value)
            assert one.outcome == other.outcome


def test_angles_differ_on_the_circle(made):
    """From 179 to -179 deg is 2 deg, not 358."""
    runs = []
    for angle_deg in (179, -179):
        region = made.make_region()
        levels = tuple(
            replace(level, offset_rad=made.q(math.radians(angle_deg), 0.01, "rad"))
            for level in region.levels
        )
        runs.append(made.make_run(region=replace(region, levels=levels)))
    found = row(compare_runs(*runs), "phase_offset_centre_rad", "level 1 A, up")
    assert math.degrees(found.difference.value) == pytest.approx(2.0)


def test_captures_are_paired_by_setting_not_by_file_name(made):
    """After a repair the files have new names."""
    run = made.make_run()
    renamed = replace(
        run, points=tuple(replace(point, file=f"new/{k}.wav") for k, point in enumerate(run.points))
    )
    comparison = compare_runs(run, renamed)
    assert comparison.unpaired == ()
    assert any(one.quantity == "mean_rate_hz" for one in comparison.rows)


def test_what_only_one_run_has_is_listed(made):
    """A level that was left out is not a change of the rig."""
    run = made.make_run()
    fewer = replace(run, points=run.points[1:])
    assert any("first run only" in text for text in compare_runs(run, fewer).unpaired)
    assert any("second run only" in text for text in compare_runs(fewer, run).unpaired)


def test_what_cannot_be_determined_cannot_be_compared(made):
    """The reason says in which run."""
    region = made.make_region()
    open_side = replace(region, centre_hz=undetermined("Hz", "open"))
    found = row(
        compare_runs(made.make_run(), made.make_run(region=open_side)), "centre_hz", "whole sweep"
    )
    assert found.outcome == "cannot be compared"
    assert found.difference.reason == "second run: open"


def test_changed_verdicts_and_states_are_told(made):
    """Pass became fail: the line a reader looks for first."""
    before = made.make_run(verdicts=(made.make_verdict("pass"),), verdict="pass")
    point = replace(before.points[1], measurement=made.make_measurement(detuning_hz=0.0))
    after = replace(
        before,
        points=(before.points[0], point, *before.points[2:]),
        verdicts=(made.make_verdict("fail"),),
        verdict="fail",
    )
    changes = {one.subject: (one.first, one.second) for one in compare_runs(before, after).changes}
    assert changes["limit 'locking width'"] == ("pass", "fail")
    assert changes["overall verdict"] == ("pass", "fail")
    assert changes["state, drive 24.9 Hz, level 0.5 A, up"] == ("drifting", "locked")


# Worked by hand: m = 4, size 0.05: 0.005 <= 0.0125, 0.011 <= 0.01667, 0.02 <= 0.025, 0.04 <= 0.05
@pytest.mark.parametrize(
    ("p_values", "rejected"),
    [
        ([0.02, 0.005, 0.04, 0.011], [True, True, True, True]),
        ([0.03, 0.005, 0.04, 0.011], [False, True, False, True]),
        ([0.02, 0.02], [True, True]),
        ([0.03, 0.03], [False, False]),
        ([], []),
    ],
)
def test_holms_procedure_agrees_with_hand_work(p_values, rejected):
    """Step down from the smallest, stop at the first that is too large."""
    assert holm_rejects(p_values) == rejected


def test_equal_rigs_are_called_different_in_at_most_five_per_cent(rng):
    """60 pairs a comparison, 2000 comparisons: 5 % and 4 standard errors are 6.9 %."""
    p_values = rng.uniform(size=(2000, 60))
    wrong = sum(any(holm_rejects(list(row))) for row in p_values)
    assert wrong / 2000 <= 0.05 + 4 * math.sqrt(0.05 * 0.95 / 2000)


def test_the_text_puts_what_differs_first_and_counts_the_rest(made):
    """A terminal holds some tens of lines."""
    text = comparison_text(compare_runs(made.make_run(), widened(made, 0.1)), "A", "B")
    lines = text.splitlines()
    assert lines[:2] == ["first:  A", "second: B"]
    assert lines[3].startswith("locking_width_hz, level 0.5 A, up: 0.3000 ± 0.0060 Hz -> ")
    assert lines[3].endswith("differs")
    assert "4 differ significantly (5 % for all together, Holm)" in text


def test_the_comparison_is_json(made):
    """Every number finite, every row with its outcome."""
    told = comparison_json(compare_runs(made.make_run(), widened(made, 0.1)))
    assert told["schema"] == "lockspan.comparison/1.0"
    assert json_text(told)


def test_folders_are_loaded_and_compared(made, monkeypatch, tmp_path):
    """The shell only loads."""
    runs = {"a": made.make_run(), "b": widened(made, 0.1)}
    shell = ModuleType("reports.runs")
    shell.load_run = lambda folder: ({}, runs[folder.name])
    monkeypatch.setitem(sys.modules, "reports.runs", shell)
    text, value = compare_folders(tmp_path / "a", tmp_path / "b")
    assert "4 differ significantly" in text
    assert value["rows"]
