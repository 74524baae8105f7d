"""`lockspan plan` in words and JSON."""

from __future__ import annotations

import json
import re
from dataclasses import replace

import pytest

from reports.options import UsageError
from reports.planning import PlanGoal, PlanWords, plan_before, plan_from
from rig.errors import FitError

GOAL = PlanGoal("edge", 0.005, settle_s=5.0)
WORDS = PlanWords(goal=GOAL, coupling_hz=1.0, noise_rad2_s=0.07, frequency_hz=500.0)
RECORD = PlanGoal("coupling", 0.01)


def test_a_plan_of_edges_lists_drives_length_and_promise():
    """What the person at the rig sets, and what comes of it."""
    text, value = plan_before(WORDS)
    assert len(value["drive_hz"]) == 11
    assert value["drive_hz"][0] == pytest.approx(498.5)
    assert value["edge_u_hz"] == pytest.approx(0.005, rel=1e-3)
    assert "promised standard uncertainty of each edge" in text
    assert json.loads(json.dumps(value, allow_nan=False)) == value


def test_drives_at_an_order_lie_about_n_over_m_times_the_free_frequency():
    """The centre of the region on the drive axis is n f_free / m."""
    _, value = plan_before(replace(WORDS, goal=replace(GOAL, order=(2, 1))))
    assert value["drive_hz"][5] == pytest.approx(1000.0)


def test_a_record_that_cannot_tell_is_answered_with_advice():
    """A steady lock: the length is stated, and what does it faster."""
    words = replace(WORDS, goal=RECORD, detuning_hz=0.2)
    text, value = plan_before(words)
    assert "free-running captures" in text
    assert value["duration_s"] is None or value["duration_s"] > 1000


def test_strong_coupling_is_warned_of():
    """From 1 % of the frequency on, single records stray from the edges."""
    text, _ = plan_before(replace(WORDS, coupling_hz=10.0))
    assert "stray" in text


@pytest.mark.parametrize(
    ("changes", "error", "text"),
    [
        ({"coupling_hz": None}, UsageError, "give coupling=HZ and noise=RAD2/S"),
        (
            {"goal": replace(GOAL, want="speed")},
            UsageError,
            "not one of edge, detuning, coupling, offset",
        ),
        ({"goal": RECORD}, UsageError, "needs detuning=HZ"),
        ({"goal": replace(GOAL, order=None)}, UsageError, "needs the order n:m"),
        ({"goal": replace(GOAL, points=5)}, FitError, "at least 11 points, got 5"),
    ],
)
def test_words_that_do_not_make_a_plan_are_refused(changes, error, text):
    """One line that says what is missing."""
    with pytest.raises(error, match=re.escape(text)):
        plan_before(replace(WORDS, **changes))


def test_names_on_the_command_line_make_the_same_plan():
    """coupling=1 noise=0.07 frequency=500 is the record above."""
    words = ["coupling=1", "noise=0.07", "frequency=500"]
    assert plan_from(words, GOAL) == plan_before(WORDS)


@pytest.mark.parametrize(
    ("word", "text"),
    [
        ("speed=1", "names are coupling, noise, frequency"),
        ("coupling=much", "not a number (expected coupling in Hz"),
        ("noise=inf", "must be finite"),
    ],
)
def test_words_that_are_no_expectation_are_refused(word, text):
    """An unknown name lists the known ones."""
    with pytest.raises(UsageError, match=re.escape(text)):
        plan_from([word, "noise=1"], GOAL)
