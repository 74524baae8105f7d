"""Sheets of paper: places for text, rules and pictures, filled from top to bottom.

Lengths are points (1/72 inch) from the lower left corner of an A4 sheet. A sheet is a list of
marks first and becomes ink only when all sheets are laid out, because "page n of N" and the
contents need the whole.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

from matplotlib.artist import Artist
from matplotlib.figure import Figure
from matplotlib.font_manager import FontProperties
from matplotlib.lines import Line2D

from reports.figures.canvas import Picture
from reports.typeface import Typeface

WIDTH_PT, HEIGHT_PT = 595.28, 841.89  # A4, 210 mm x 297 mm
LEFT_PT, RIGHT_PT = 57.0, 45.0  # the left margin leaves room for filing holes
TOP_PT, BOTTOM_PT = 48.0, 60.0
TEXT_WIDTH_PT = WIDTH_PT - LEFT_PT - RIGHT_PT
TEXT_HEIGHT_PT = HEIGHT_PT - TOP_PT - BOTTOM_PT


@dataclass(frozen=True, slots=True, kw_only=True)
class Words:
    """A piece of text on one line; ``y_pt`` is its baseline."""

    x_pt: float
    y_pt: float
    text: str
    face: Typeface
    size_pt: float
    colour: str = "#000000"


@dataclass(frozen=True, slots=True, kw_only=True)
class Rule:
    """A straight line."""

    x_pt: float
    y_pt: float
    to_x_pt: float
    to_y_pt: float
    width_pt: float = 0.5
    colour: str = "#000000"


@dataclass(frozen=True, slots=True, kw_only=True)
class Placed:
    """A picture in a rectangle given by its lower left corner and its size."""

    x_pt: float
    y_pt: float
    width_pt: float
    height_pt: float
    picture: Picture


@dataclass(slots=True)
class Sheet:
    """The marks of one page."""

    words: list[Words] = field(default_factory=list)
    rules: list[Rule] = field(default_factory=list)
    pictures: list[Placed] = field(default_factory=list)

    def empty(self) -> bool:
        """Say whether nothing stands on the sheet yet."""
        return not (self.words or self.rules or self.pictures)


class Flow:
    """A growing pile of sheets with a pen that moves down the last one."""

    def __init__(self) -> None:
        self.sheets = [Sheet()]
        self.y_pt = HEIGHT_PT - TOP_PT

    @property
    def sheet(self) -> Sheet:
        """The sheet in work."""
        return self.sheets[-1]

    @property
    def room_pt(self) -> float:
        """Height left on the sheet in work."""
        return self.y_pt - BOTTOM_PT

    def new_sheet(self) -> None:
        """Go to the top of a fresh sheet."""
        if not self.sheet.empty():
            self.sheets.append(Sheet())
        self.y_pt = HEIGHT_PT - TOP_PT

    def need(self, height_pt: float) -> bool:
        """Go to a fresh sheet when a height does not fit; say whether that was done."""
        if height_pt <= self.room_pt or self.sheet.empty():
            return False
        self.new_sheet()
        return True

    def down(self, height_pt: float) -> None:
        """Move the pen down; at the top of a fresh sheet nothing is skipped."""
        if not self.sheet.empty():
            self.y_pt -= height_pt

    def line(
        self,
        text: str,
        face: Typeface,
        size_pt: float,
        *,
        indent_pt: float = 0.0,
        leading: float = 1.32,
        colour: str = "#000000",
    ) -> None:
        """Set one line below the pen."""
        self.need(size_pt * leading)
        self.y_pt -= size_pt * leading
        self.sheet.words.append(
            Words(
                x_pt=LEFT_PT + indent_pt,
                y_pt=self.y_pt + 0.28 * size_pt,
                text=text,
                face=face,
                size_pt=size_pt,
                colour=colour,
            )
        )

    def rule(self, width_pt: float = 0.5, colour: str = "#000000") -> None:
        """Draw a rule over the width of the text at the pen."""
        self.sheet.rules.append(
            Rule(
                x_pt=LEFT_PT,
                y_pt=self.y_pt,
                to_x_pt=LEFT_PT + TEXT_WIDTH_PT,
                to_y_pt=self.y_pt,
                width_pt=width_pt,
                colour=colour,
            )
        )


def draw_sheet(sheet: Sheet) -> Figure:
    """Return a sheet as an A4 figure; text stays text that can be selected."""
    page = Figure(figsize=(WIDTH_PT / 72.0, HEIGHT_PT / 72.0), dpi=72)
    for placed in sheet.pictures:
        _draw_picture(page, placed)
    for rule in sheet.rules:
        page.add_artist(
            Line2D(
                [rule.x_pt / WIDTH_PT, rule.to_x_pt / WIDTH_PT],
                [rule.y_pt / HEIGHT_PT, rule.to_y_pt / HEIGHT_PT],
                linewidth=rule.width_pt,
                color=rule.colour,
                solid_capstyle="butt",
            )
        )
    page.add_artist(_Type(sheet.words))
    return page


def _draw_picture(page: Figure, placed: Placed) -> None:
    """Draw in the middle cell of a 3 x 3 grid: part of a figure heeds ratios, not margins."""
    grid = page.add_gridspec(
        3,
        3,
        width_ratios=[placed.x_pt, placed.width_pt, WIDTH_PT - placed.x_pt - placed.width_pt],
        height_ratios=[HEIGHT_PT - placed.y_pt - placed.height_pt, placed.height_pt, placed.y_pt],
    )
    placed.picture.draw(page.add_subfigure(grid[1, 1]))


class _Type(Artist):
    """The words of a sheet, each piece in a font that holds all its characters.

    They are handed to the renderer as they stand: their places are known, and asking for
    the extent of each piece, as text that is laid out does, would double the cost of a page.
    """

    zorder = 3  # above rules and pictures, as any text

    def __init__(self, words: Sequence[Words]) -> None:
        super().__init__()
        self._words = words

    def draw(self, renderer: Any) -> None:
        """Set every piece behind the one before."""
        sized: dict[tuple[int, float], FontProperties] = {}
        for words in self._words:
            gc = renderer.new_gc()
            gc.set_foreground(words.colour)
            x_pt = words.x_pt
            for font, piece in words.face.runs(words.text):
                if piece.strip():
                    key = id(font), words.size_pt
                    if key not in sized:
                        sized[key] = _sized(font, words.size_pt)
                    renderer.draw_text(gc, x_pt, words.y_pt, piece, sized[key], 0.0)
                x_pt += words.face.width_pt(piece, words.size_pt)
            gc.restore()


def _sized(font: FontProperties, size_pt: float) -> FontProperties:
    sized = font.copy()
    sized.set_size(size_pt)
    return sized
