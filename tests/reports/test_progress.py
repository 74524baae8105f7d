"""Progress displays."""

from __future__ import annotations

import io

import pytest

from reports.options import UsageError
from reports.progress import make_progress


def test_a_log_gets_plain_lines_without_control_codes() -> None:
    """A redirected bar fills a log with carriage returns."""
    stream = io.StringIO()
    show = make_progress("auto", stream)
    show(0, 2, "measuring")
    show(2, 2, "measuring")
    assert stream.getvalue() == "measuring: 0 of 2\nmeasuring: 2 of 2\n"


def test_a_bar_is_redrawn_in_place_and_ends_with_a_line_break() -> None:
    """What follows on the terminal must start on a line of its own."""
    stream = io.StringIO()
    show = make_progress("bar", stream)
    show(1, 2, "measuring")
    show(2, 2, "measuring")
    text = stream.getvalue()
    assert text.count("\r") == 2
    assert text.endswith("2/2\n")
    assert text.isascii()


def test_none_shows_nothing_and_an_unknown_kind_is_refused() -> None:
    """--quiet is for scripts."""
    stream = io.StringIO()
    make_progress("none", stream)(1, 2, "measuring")
    assert stream.getvalue() == ""
    with pytest.raises(UsageError, match="auto, bar, plain, none"):
        make_progress("dots", stream)
