"""Words and names that once were taken as they came, or ended in a fault."""

from __future__ import annotations

import os
from pathlib import Path

import numpy as np
import pytest

from fit.noise_inverse import invert_rate_and_length
from fit.planning import edge_u_hz
from reports.filenames import escaped, is_text
from reports.looking import measure_file
from reports.options import UsageError, parse_order
from reports.planning import PlanGoal, plan_from
from rig.errors import LockspanError, SweepFileError
from rig.sweepfile.keys import MEASURE_KEYS, PAIR_KEYS
from rig.sweepfile.values import read_value


def test_a_name_that_is_no_text_is_told_apart_and_written_out() -> None:
    """A draft of a folder with such a capture used to end in UnicodeEncodeError."""
    name = os.fsdecode(b"run\xff.wav")
    assert not is_text(name)
    assert escaped(name) == "run\\udcff.wav"
    assert is_text("Lauf 1 µ.wav")


@pytest.mark.parametrize("words", [["coupling=1e308", "noise=1"], ["coupling=1", "noise=1e-300"]])
def test_a_plan_for_numbers_of_no_rig_is_refused(words: list[str]) -> None:
    """Used to end in a NaN that became a whole number."""
    with pytest.raises(UsageError, match="must lie between"):
        plan_from(words, PlanGoal("edge", 0.1))


def test_a_goal_that_no_rig_reaches_is_refused() -> None:
    """The goal goes into the same powers as the numbers."""
    with pytest.raises(UsageError, match="--within: must lie between"):
        plan_from(["coupling=1", "noise=1"], PlanGoal("edge", 1e-300))


def test_points_that_say_nothing_of_a_parameter_promise_no_edge() -> None:
    """Used to overflow, and LAPACK wrote to the terminal."""
    information = np.ones((4, 4))
    information[3, 3] = 0.0
    assert edge_u_hz(information, 1) == (float("inf"), float("inf"))


@pytest.mark.parametrize("text", ["999:1000", "100:1", "1:100"])
def test_an_order_beyond_any_lock_is_refused(text: str) -> None:
    """Used to be searched for without a word."""
    with pytest.raises(UsageError, match="from 1 to 99"):
        parse_order(text)
    with pytest.raises(SweepFileError, match="from 1 to 99"):
        read_value("S.toml [pair] order", PAIR_KEYS["order"], text)


@pytest.mark.parametrize("value", [1e300, 90.0])
def test_a_style_angle_is_refused_where_it_stands(value: float) -> None:
    """Used to be refused by a rule that knew neither file nor key."""
    with pytest.raises(SweepFileError, match=r"^S\.toml \[measure\] style_deg: must be below 90"):
        read_value("S.toml [measure] style_deg", MEASURE_KEYS["style_deg"], value)


@pytest.mark.parametrize("rate_rad_s", [1e11, 1e12])
def test_a_fast_pair_is_inverted_without_overflow(rate_rad_s: float) -> None:
    """Used to warn on the terminal: the last step of Newton's method may be exactly 0."""
    detuning, coupling = invert_rate_and_length(rate_rad_s, 0.5, 1.0) or (0.0, 0.0)
    # The noise-free inversion: 1.25 / 0.75 and 1 / 0.75; the noise is 1e-11 of the rate.
    assert detuning == pytest.approx(rate_rad_s * 5.0 / 3.0, rel=1e-6)
    assert coupling == pytest.approx(rate_rad_s * 4.0 / 3.0, rel=1e-6)


def test_a_missing_free_running_capture_is_the_only_file_named(tmp_path: Path) -> None:
    """Used to be refused as 'circuit: nosuch: ...', naming a file that was sound."""
    file = tmp_path / "circuit.npy"
    time_s = np.arange(4000) / 100.0
    np.save(file, np.array([np.cos(2 * np.pi * 9 * time_s), np.sin(2 * np.pi * 9 * time_s)]))
    missing = str(tmp_path / "nosuch.wav")
    with pytest.raises(LockspanError) as caught:
        measure_file(
            str(file),
            words={"reference": "1", "driven": "2", "free_driven": [missing]},
            read={"rate_hz": 100.0},
            picture=None,
        )
    assert str(caught.value).startswith(missing)
