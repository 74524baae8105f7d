"""Lines broken by measured widths, with every character accounted for."""

from __future__ import annotations

import pytest

from reports.typeface import Typeface, picture_text


@pytest.fixture(scope="module")
def face() -> Typeface:
    """The book face of the paper."""
    return Typeface("STIXGeneral")


def test_lines_fit_and_keep_every_word(face: Typeface) -> None:
    """A cut word in a report is a wrong report."""
    text = "the value lies inside the limit by at least U " * 5
    lines = face.lines(text, 9.0, 120.0)
    assert " ".join(lines).split() == text.split()
    assert all(face.width_pt(line, 9.0) <= 120.0 for line in lines)


def test_a_word_longer_than_the_line_is_broken_behind_a_separator(face: Typeface) -> None:
    """Paths stay readable; a digest without any separator is broken anywhere."""
    path = face.lines("captures/up_0.02_A/point_24.92Hz.wav", 9.0, 70.0)
    assert "".join(path) == "captures/up_0.02_A/point_24.92Hz.wav"
    assert path[0].endswith(("/", "_"))
    digest = face.lines("5f" * 32, 9.0, 70.0)
    assert "".join(digest) == "5f" * 32
    assert all(face.width_pt(line, 9.0) <= 70.0 for line in digest)


def test_unknown_and_control_characters_are_written_out(face: Typeface) -> None:
    """A box or a lost letter would hide what a user wrote."""
    assert face.printable("a\u4e2db\x00c") == "a[U+4E2D]b c"
    assert face.printable("Ψ ü ✕ ± 10⁻⁶ ψ") == "Ψ ü ✕ ± 10⁻⁶ ψ"


def test_the_width_is_that_of_what_is_shown(face: Typeface) -> None:
    """A column measured by the unknown character itself would be too narrow for its code."""
    assert face.width_pt("\u4e2d", 9.0) == pytest.approx(face.width_pt("[U+4E2D]", 9.0))
    assert face.width_pt("\x07", 9.0) == pytest.approx(face.width_pt(" ", 9.0))


def test_pieces_change_font_only_where_a_glyph_is_missing(face: Typeface) -> None:
    """The verdict shapes come from the fallback, the words from the book face."""
    pieces = list(face.runs("✕ fail"))
    assert "".join(piece for _font, piece in pieces) == "✕ fail"
    assert len({font.get_file() for font, _piece in pieces}) == 2


def test_picture_text_is_one_line_and_cut_with_an_ellipsis() -> None:
    """A file name of 200 letters must not push a key out of its picture."""
    assert picture_text("a\nb\tc") == "a b c"
    assert picture_text("x" * 50, 10) == "x" * 9 + "…"
