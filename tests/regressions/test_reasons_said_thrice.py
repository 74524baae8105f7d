"""A line of the summary that said one reason three times."""

from __future__ import annotations

from reports.summaries import range_text
from rig.quantities import undetermined


def test_a_range_that_is_not_determined_gives_its_reason_once() -> None:
    """Used to be read three times over in one line."""
    unknown = undetermined("Hz", "no point is unlocked")
    assert range_text(unknown, unknown, unknown).count("no point is unlocked") == 1
