"""Type measured and broken into lines with the fonts that come with the drawing library.

Fonts are taken by file, never by asking the system, so a report breaks its lines and pages at
the same places on every machine. A character that no font holds is written as its code
point, for example [U+4E2D]: it stays readable and nothing is lost without a word.
"""

from __future__ import annotations

from collections.abc import Iterator
from functools import lru_cache
from itertools import groupby
from pathlib import Path

import matplotlib as mpl
from matplotlib.font_manager import FontProperties, get_font
from matplotlib.ft2font import FT2Font, LoadFlags

_FALLBACK = "DejaVuSans"
_SEAMS = "/\\_-"  # a path is broken behind these rather than inside a name
_CONTROL_WIDTH = frozenset(range(0x20)) | frozenset(range(0x7F, 0xA0))


class Typeface:
    """One font with a fallback for the characters it lacks; widths in points."""

    def __init__(self, name: str, fallback: str = _FALLBACK) -> None:
        self._files = [_font_file(name), _font_file(fallback)]
        self._fonts = [get_font(file) for file in self._files]
        self._maps = [font.get_charmap() for font in self._fonts]
        self._properties = [FontProperties(fname=file) for file in self._files]
        self._advances: dict[str, float] = {}
        self._has_ascii = all(code in self._maps[0] for code in range(0x20, 0x7F))

    def printable(self, text: str) -> str:
        """Return the text with control characters as spaces and unknown ones as code points."""
        if self._is_plain(text):
            return text
        return "".join(self._shown(char) for char in text)

    def runs(self, text: str) -> Iterator[tuple[FontProperties, str]]:
        """Yield (font, piece) so that every piece is whole in its font."""
        if self._is_plain(text):
            yield self._properties[0], text
            return
        for place, chars in groupby(text, key=self._place):
            yield self._properties[place or 0], "".join(chars)

    def width_pt(self, text: str, size_pt: float) -> float:
        """Return the length of a text set at a size, kerning left out."""
        return size_pt * sum(self._advance(char) for char in text)

    def lines(self, text: str, size_pt: float, width_pt: float) -> list[str]:
        """Return a printable text broken into lines of at most a width, at least one line.

        Words longer than a line are broken behind a separator (paths), else anywhere (digests).
        """
        lines: list[str] = []
        line = ""
        for word in self.printable(text).split():
            for piece in self._pieces(word, size_pt, width_pt):
                joined = f"{line} {piece}" if line else piece
                if line and self.width_pt(joined, size_pt) > width_pt:
                    lines.append(line)
                    line = piece
                else:
                    line = joined
        return [*lines, line]

    def _pieces(self, word: str, size_pt: float, width_pt: float) -> Iterator[str]:
        """Yield a word in pieces that fit, broken behind a separator where there is one."""
        if self.width_pt(word, size_pt) <= width_pt:
            yield word
            return
        start = 0
        for stop in range(1, len(word) + 1):
            if stop - start > 1 and self.width_pt(word[start:stop], size_pt) > width_pt:
                seam = max(word.rfind(mark, start, stop - 1) for mark in _SEAMS) + 1
                end = seam if seam > start else stop - 1
                yield word[start:end]
                start = end
        yield word[start:]

    def _is_plain(self, text: str) -> bool:
        """Say whether the first font holds all of a text; most texts need no closer look."""
        return bool(text) and self._has_ascii and text.isascii() and text.isprintable()

    def _shown(self, char: str) -> str:
        if ord(char) in _CONTROL_WIDTH:
            return " "
        return char if self._place(char) is not None else f"[U+{ord(char):04X}]"

    def _place(self, char: str) -> int | None:
        code = ord(char)
        return next((i for i, known in enumerate(self._maps) if code in known), None)

    def _advance(self, char: str) -> float:
        """Return the width of a character at 1 pt, as it is shown."""
        if char not in self._advances:
            place = self._place(char)
            if place is None or ord(char) in _CONTROL_WIDTH:
                self._advances[char] = sum(map(self._advance, self._shown(char)))
            else:
                self._advances[char] = _advance_of(self._fonts[place], char)
        return self._advances[char]


def _advance_of(font: FT2Font, char: str) -> float:
    """Return the advance of a glyph the font holds, in parts of the type size."""
    font.set_size(1000.0, 72.0)
    glyph = font.load_char(ord(char), flags=LoadFlags.NO_HINTING)
    return glyph.linearHoriAdvance / 65536.0 / 1000.0


def _font_file(name: str) -> str:
    return str(Path(mpl.get_data_path()) / "fonts" / "ttf" / f"{name}.ttf")


@lru_cache(maxsize=1)
def picture_face() -> Typeface:
    """Return the typeface of pictures; loading a font is slow, so it is done once."""
    return Typeface("DejaVuSans")


def picture_text(text: str, most: int | None = None) -> str:
    """Return a user's text as a picture can show it, cut with an ellipsis beyond ``most``."""
    shown = " ".join(picture_face().printable(text).split())
    return shown if most is None or len(shown) <= most else shown[: most - 1] + "…"
