"""The look: told by shape and word as well as by colour, and independent of the user's own."""

from __future__ import annotations

import matplotlib as mpl
import pytest

from reports.look import (
    DIRECTION_MARKS,
    LEVEL_MARKS,
    STATE_MARKS,
    VERDICT_COLOURS,
    VERDICT_SHAPES,
    drawing_style,
)


def _luminance(colour: str) -> float:
    """Relative luminance of an sRGB colour as WCAG 2 defines it."""
    channels = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in channels]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


@pytest.mark.parametrize("colour", VERDICT_COLOURS.values())
def test_verdict_words_keep_the_contrast_that_small_text_needs(colour: str) -> None:
    """WCAG 2 asks 4.5 to 1 of text against its ground; the ground is white."""
    assert 1.05 / (_luminance(colour) + 0.05) >= 4.5


def test_states_verdicts_and_levels_differ_in_shape_and_not_only_in_colour() -> None:
    """A grey print and a colour-blind reader see the same as everybody."""
    for marks in (STATE_MARKS.values(), DIRECTION_MARKS.values(), LEVEL_MARKS):
        shapes = [(mark.shape, mark.filled) for mark in marks]
        assert len(set(shapes)) == len(shapes)
    assert len(set(VERDICT_SHAPES.values())) == 3


def test_style_ignores_the_users_settings_and_gives_them_back() -> None:
    """A settings file on one machine must not change a report, nor we the user's session."""
    with mpl.rc_context({"font.size": 31.0}):
        with drawing_style():
            assert mpl.rcParams["font.size"] == 8.0
            assert mpl.rcParams["text.parse_math"] is False
        assert mpl.rcParams["font.size"] == 31.0
