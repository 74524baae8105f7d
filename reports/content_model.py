"""The parts a report is made of, free of any format: sections, tables, pictures, fields.

Renderers arrange these records and add nothing. Texts are plain; what a user wrote reaches
them unescaped, and each renderer makes it harmless for its own format.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Literal

from reports.records import VerdictWord

DASH = "–"  # what a table shows where there is nothing to say
Tone = Literal["text", "lead", "note", "caution"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Cell:
    """A table cell: text, and optionally the picture it points to or a verdict it states."""

    text: str
    target: str | None = None
    verdict: VerdictWord | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Column:
    """A column: its heading, and whether its cells are plain numbers (set to the right)."""

    head: str
    numeric: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class Paragraph:
    """A paragraph and its tone."""

    text: str
    tone: Tone = "text"


@dataclass(frozen=True, slots=True, kw_only=True)
class Bullets:
    """A list of short statements."""

    items: tuple[str, ...]
    tone: Tone = "text"


@dataclass(frozen=True, slots=True, kw_only=True)
class Fields:
    """Names with their texts: particulars of the test, definitions."""

    items: tuple[tuple[str, str], ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Table:
    """A table with a caption above; the first column names the row."""

    caption: str
    columns: tuple[Column, ...]
    rows: tuple[tuple[Cell, ...], ...]

    def __post_init__(self) -> None:
        if any(len(row) != len(self.columns) for row in self.rows):
            raise ValueError(f"table '{self.caption}': a row differs from its columns in length")


@dataclass(frozen=True, slots=True, kw_only=True)
class FigureRef:
    """A picture by key, with one sentence that states what it shows (also read aloud)."""

    key: str
    title: str
    caption: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Gallery:
    """Small pictures side by side."""

    figures: tuple[FigureRef, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class VerdictLine:
    """The overall verdict with the sentence that gives its ground."""

    word: VerdictWord
    sentence: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Signatures:
    """Lines to be signed: role and, where stated, the name."""

    lines: tuple[tuple[str, str], ...]


Block = Paragraph | Bullets | Fields | Table | FigureRef | Gallery | VerdictLine | Signatures


@dataclass(frozen=True, slots=True, kw_only=True)
class Section:
    """A numbered part of the report; ``key`` is its stable name for links."""

    key: str
    title: str
    blocks: tuple[Block, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class ReportContent:
    """A whole report, format-free.

    ``report_id``, ``revision`` and ``date_text`` stand on every page; ``subtitle`` names the
    item under test.
    """

    title: str
    subtitle: str
    report_id: str
    revision: str
    date_text: str
    verdict: VerdictWord
    sections: tuple[Section, ...] = field(default=())

    def figure_keys(self) -> list[str]:
        """Return the keys of all pictures referred to, in reading order, each once."""
        return list(dict.fromkeys(ref.key for ref in figure_refs(self)))


def figure_refs(content: ReportContent) -> Iterator[FigureRef]:
    """Yield every picture a report refers to, in reading order."""
    for section in content.sections:
        for block in section.blocks:
            if isinstance(block, FigureRef):
                yield block
            elif isinstance(block, Gallery):
                yield from block.figures


def cells(*texts: str) -> tuple[Cell, ...]:
    """Return a table row of plain texts."""
    return tuple(Cell(text=text) for text in texts)


def columns(*heads: str, numeric: tuple[int, ...] = ()) -> tuple[Column, ...]:
    """Return columns from their headings; ``numeric`` lists the places of number columns."""
    return tuple(Column(head=head, numeric=place in numeric) for place, head in enumerate(heads))
