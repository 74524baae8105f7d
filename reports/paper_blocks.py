"""How each part of a report is set on paper: paragraphs, tables with repeated heads, pictures."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass

from reports.content_model import (
    Block,
    Bullets,
    Cell,
    Fields,
    FigureRef,
    Gallery,
    Paragraph,
    ReportContent,
    Signatures,
    Table,
    VerdictLine,
    figure_refs,
)
from reports.figures.canvas import Picture
from reports.look import VERDICT_COLOURS, VERDICT_SHAPES
from reports.paper_sheets import (
    LEFT_PT,
    TEXT_HEIGHT_PT,
    TEXT_WIDTH_PT,
    Flow,
    Placed,
    Rule,
    Words,
)
from reports.typeface import Typeface

BODY_PT = 9.8
TABLE_PT = 8.4
SMALL_PT = 7.2
LEADING = 1.3
_GAP_PT = 9.0  # between columns of a table
_HAIR = "#BBBBBB"


class Press:
    """The pile of sheets with the typefaces, pictures and numbers that the blocks need."""

    def __init__(self, content: ReportContent, figures: Mapping[str, Picture]) -> None:
        self.flow = Flow()
        self.figures = figures
        # A book face for reading, narrow enough for tables; a plain one for heads and captions.
        self.text = Typeface("STIXGeneral")
        self.bold = Typeface("STIXGeneralBol", "DejaVuSans-Bold")
        self.head = Typeface("DejaVuSans-Bold")
        self.plain = Typeface("DejaVuSans")
        numbered = (ref for ref in figure_refs(content) if not ref.key.startswith("record-"))
        self.numbers = {ref.key: place for place, ref in enumerate(numbered, start=1)}

    def set_text(
        self,
        text: str,
        face: Typeface,
        size_pt: float,
        *,
        indent_pt: float = 0.0,
        width_pt: float = TEXT_WIDTH_PT,
    ) -> None:
        """Set a text in as many lines as it takes."""
        for line in face.lines(text, size_pt, width_pt - indent_pt):
            self.flow.line(line, face, size_pt, indent_pt=indent_pt, leading=LEADING)


def set_block(press: Press, block: Block) -> None:
    """Set one block of any kind below the pen."""
    _SETTERS[type(block)](press, block)


def set_heading(press: Press, place: int, title: str) -> None:
    """Set the heading of a section, kept together with what follows."""
    press.flow.down(22.0)
    press.flow.need(110.0)
    press.flow.rule(1.1)
    press.flow.y_pt -= 5.0
    press.flow.line(f"{place}   {title}", press.head, 11.5)
    press.flow.y_pt -= 3.0


def _paragraph(press: Press, block: Paragraph) -> None:
    press.flow.down(4.0)
    press.set_text(block.text, press.text, BODY_PT)


def _bullets(press: Press, block: Bullets) -> None:
    press.flow.down(3.0)
    for item in block.items:
        lines = press.text.lines(item, BODY_PT, TEXT_WIDTH_PT - 14.0)
        press.flow.need(min(len(lines), 3) * BODY_PT * LEADING)
        for place, line in enumerate(lines):
            press.flow.line(line, press.text, BODY_PT, indent_pt=14.0, leading=LEADING)
            if place == 0:
                _bullet(press)
        press.flow.down(2.0)


def _bullet(press: Press) -> None:
    press.flow.sheet.words.append(
        Words(x_pt=LEFT_PT + 3.0, y_pt=press.flow.y_pt + 0.28 * BODY_PT, text="•", face=press.text,
              size_pt=BODY_PT)
    )  # fmt: skip


def _fields(press: Press, block: Fields) -> None:
    press.flow.down(5.0)
    label_pt = 150.0
    for name, text in block.items:
        labels = press.plain.lines(name, SMALL_PT, label_pt - 8.0)
        lines = press.text.lines(text, BODY_PT, TEXT_WIDTH_PT - label_pt)
        count = max(len(labels), len(lines))
        press.flow.need(min(count, 40) * BODY_PT * LEADING)
        for place in range(count):
            if place < len(lines):
                press.flow.line(
                    lines[place], press.text, BODY_PT, indent_pt=label_pt, leading=LEADING
                )
            else:
                press.flow.y_pt -= BODY_PT * LEADING
            if place < len(labels):
                _label(press, labels[place])
        press.flow.down(1.5)


def _label(press: Press, text: str) -> None:
    press.flow.sheet.words.append(
        Words(x_pt=LEFT_PT, y_pt=press.flow.y_pt + 0.28 * BODY_PT, text=text, face=press.plain,
              size_pt=SMALL_PT, colour="#333333")
    )  # fmt: skip


def _verdict_line(press: Press, block: VerdictLine) -> None:
    press.flow.down(4.0)
    shown = f"{VERDICT_SHAPES[block.word]} {block.word}"
    press.flow.line(shown, press.head, 20.0, colour=VERDICT_COLOURS[block.word])
    press.flow.y_pt -= 2.0
    press.set_text(block.sentence, press.text, 11.0)


def _signatures(press: Press, block: Signatures) -> None:
    press.flow.need(52.0 * len(block.lines))
    for role, name in block.lines:
        press.flow.y_pt -= 34.0
        press.flow.rule(0.6)
        label = f"{role}: {name}" if name else role
        press.flow.line(
            press.plain.printable(f"{label}   –   date, signature"), press.plain, SMALL_PT
        )


def _figure(press: Press, block: FigureRef) -> None:
    picture = press.figures[block.key]
    height_pt = min(picture.height_in * 72.0, TEXT_HEIGHT_PT - 60.0)
    text = f"Figure {press.numbers[block.key]}. {block.title}. {block.caption}"
    lines = press.plain.lines(text, SMALL_PT, TEXT_WIDTH_PT)
    press.flow.down(10.0)
    press.flow.need(height_pt + len(lines) * SMALL_PT * LEADING + 10.0)
    press.flow.y_pt -= height_pt
    press.flow.sheet.pictures.append(
        Placed(x_pt=LEFT_PT, y_pt=press.flow.y_pt, width_pt=TEXT_WIDTH_PT, height_pt=height_pt,
               picture=picture)
    )  # fmt: skip
    press.flow.y_pt -= 2.0
    for line in lines:
        press.flow.line(line, press.plain, SMALL_PT, leading=LEADING)
    press.flow.down(4.0)


def _gallery(press: Press, block: Gallery) -> None:
    """Set small pictures two in a row, each under its own name and state."""
    width_pt = (TEXT_WIDTH_PT - 16.0) / 2
    for first in range(0, len(block.figures), 2):
        pair = block.figures[first : first + 2]
        heads = [_card_lines(press, ref, width_pt) for ref in pair]
        head_pt = max(len(lines) for lines in heads) * SMALL_PT * LEADING
        height_pt = press.figures[pair[0].key].height_in * 72.0
        press.flow.down(8.0)
        press.flow.need(head_pt + height_pt + 2.0)
        for column, (ref, lines) in enumerate(zip(pair, heads, strict=True)):
            _card(press, ref, lines, column * (width_pt + 16.0), (width_pt, height_pt, head_pt))
        press.flow.y_pt -= head_pt + height_pt + 2.0


def _card_lines(press: Press, ref: FigureRef, width_pt: float) -> list[tuple[str, Typeface]]:
    title = press.head.lines(ref.title, SMALL_PT, width_pt)[:2]
    caption = press.plain.lines(ref.caption, SMALL_PT, width_pt)[:2]
    return [*((line, press.head) for line in title), *((line, press.plain) for line in caption)]


def _card(
    press: Press,
    ref: FigureRef,
    lines: Sequence[tuple[str, Typeface]],
    indent_pt: float,
    sizes_pt: tuple[float, float, float],
) -> None:
    width_pt, height_pt, head_pt = sizes_pt
    sheet, top_pt = press.flow.sheet, press.flow.y_pt
    for place, (line, face) in enumerate(lines, start=1):
        y_pt = top_pt - place * SMALL_PT * LEADING + 0.28 * SMALL_PT
        sheet.words.append(
            Words(x_pt=LEFT_PT + indent_pt, y_pt=y_pt, text=line, face=face, size_pt=SMALL_PT)
        )
    sheet.pictures.append(
        Placed(x_pt=LEFT_PT + indent_pt, y_pt=top_pt - head_pt - height_pt, width_pt=width_pt,
               height_pt=height_pt, picture=press.figures[ref.key])
    )  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True)
class _Grid:
    """Widths of the columns of a table and its heads, broken into lines."""

    widths_pt: tuple[float, ...]
    heads: tuple[tuple[str, ...], ...]
    numeric: tuple[bool, ...]

    def starts_pt(self) -> Iterator[float]:
        """Yield the left edge of each column."""
        at = LEFT_PT
        for width in self.widths_pt:
            yield at
            at += width + _GAP_PT


def _table(press: Press, block: Table) -> None:
    grid = _grid(press, block)
    press.flow.down(11.0)
    caption = press.plain.lines(block.caption, SMALL_PT, TEXT_WIDTH_PT)
    head_pt = max(len(lines) for lines in grid.heads) * SMALL_PT * LEADING + 6.0
    press.flow.need(len(caption) * SMALL_PT * LEADING + head_pt + 3 * TABLE_PT * LEADING)
    for line in caption:
        press.flow.line(line, press.plain, SMALL_PT, leading=LEADING)
    press.flow.y_pt -= 3.0
    _table_head(press, grid)
    for row in block.rows:
        _table_row(press, grid, row)
    press.flow.down(3.0)


def _grid(press: Press, block: Table) -> _Grid:
    widths = _column_widths(press, block)
    heads = tuple(
        tuple(press.head.lines(column.head, SMALL_PT, width))
        for column, width in zip(block.columns, widths, strict=True)
    )
    numeric = tuple(column.numeric for column in block.columns)
    return _Grid(widths_pt=widths, heads=heads, numeric=numeric)


def _column_widths(press: Press, block: Table) -> tuple[float, ...]:
    """Return widths that fit: at least the longest word, the rest shared by what is wanted."""
    room = TEXT_WIDTH_PT - _GAP_PT * (len(block.columns) - 1)
    wanted, least = [], []
    for place, column in enumerate(block.columns):
        texts = [_cell_text(row[place]) for row in block.rows]
        head = press.head.width_pt(column.head, SMALL_PT) + 0.5
        longest = max((word for text in [column.head] for word in text.split()), key=len)
        wanted.append(max([head, *(press.bold.width_pt(text, TABLE_PT) + 1.0 for text in texts)]))
        words = (
            press.bold.width_pt(word[:18], TABLE_PT) for text in texts for word in text.split()
        )
        least.append(max([press.head.width_pt(longest, SMALL_PT), *words]) + 1.0)
    if sum(wanted) <= room:
        return tuple(wanted)
    if sum(least) >= room:
        return tuple(width * room / sum(least) for width in least)
    spare = (room - sum(least)) / sum(w - s for w, s in zip(wanted, least, strict=True))
    return tuple(s + spare * (w - s) for w, s in zip(wanted, least, strict=True))


def _cell_text(cell: Cell) -> str:
    if cell.verdict is not None:
        return f"{VERDICT_SHAPES[cell.verdict]} {cell.verdict}"
    return cell.text


def _table_head(press: Press, grid: _Grid) -> None:
    flow = press.flow
    rows = max(len(lines) for lines in grid.heads)
    top_pt = flow.y_pt
    for lines, start, width, numeric in zip(
        grid.heads, grid.starts_pt(), grid.widths_pt, grid.numeric, strict=True
    ):
        for place, line in enumerate(lines):
            below = rows - len(lines) + place + 1  # heads stand on the rule
            x_pt = start + (width - press.head.width_pt(line, SMALL_PT) if numeric else 0.0)
            y_pt = top_pt - below * SMALL_PT * LEADING + 0.28 * SMALL_PT
            flow.sheet.words.append(
                Words(x_pt=x_pt, y_pt=y_pt, text=line, face=press.head, size_pt=SMALL_PT)
            )
    flow.y_pt -= rows * SMALL_PT * LEADING + 2.0
    flow.rule(0.8)


def _table_row(press: Press, grid: _Grid, row: tuple[Cell, ...]) -> None:
    """Set a row; it goes to the next sheet whole, under a repeated head."""
    broken = [
        press.bold.lines(_cell_text(cell), TABLE_PT, width)
        if cell.verdict is not None
        else press.text.lines(cell.text, TABLE_PT, width)
        for cell, width in zip(row, grid.widths_pt, strict=True)
    ]
    most = int((TEXT_HEIGHT_PT - 80.0) / (TABLE_PT * LEADING))
    for first in range(0, max(len(lines) for lines in broken), most):
        part = [lines[first : first + most] for lines in broken]
        height_pt = max(len(lines) for lines in part) * TABLE_PT * LEADING + 4.0
        if press.flow.need(height_pt):
            _table_head(press, grid)
        _row_part(press, grid, row, part)
        press.flow.y_pt -= height_pt
        _row_rule(press, grid)


def _row_part(
    press: Press, grid: _Grid, row: tuple[Cell, ...], part: Sequence[Sequence[str]]
) -> None:
    for cell, lines, start, width, numeric in zip(
        row, part, grid.starts_pt(), grid.widths_pt, grid.numeric, strict=True
    ):
        face = press.bold if cell.verdict is not None else press.text
        colour = VERDICT_COLOURS[cell.verdict] if cell.verdict is not None else "#000000"
        for place, line in enumerate(lines, start=1):
            x_pt = start + (width - face.width_pt(line, TABLE_PT) if numeric else 0.0)
            y_pt = press.flow.y_pt - 2.0 - place * TABLE_PT * LEADING + 0.28 * TABLE_PT
            press.flow.sheet.words.append(
                Words(x_pt=x_pt, y_pt=y_pt, text=line, face=face, size_pt=TABLE_PT, colour=colour)
            )


def _row_rule(press: Press, grid: _Grid) -> None:
    end_pt = LEFT_PT + sum(grid.widths_pt) + _GAP_PT * (len(grid.widths_pt) - 1)
    press.flow.sheet.rules.append(
        Rule(x_pt=LEFT_PT, y_pt=press.flow.y_pt, to_x_pt=end_pt, to_y_pt=press.flow.y_pt,
             width_pt=0.3, colour=_HAIR)
    )  # fmt: skip


_SETTERS: Mapping[type, Callable[..., None]] = {
    Paragraph: _paragraph,
    Bullets: _bullets,
    Fields: _fields,
    Table: _table,
    FigureRef: _figure,
    Gallery: _gallery,
    VerdictLine: _verdict_line,
    Signatures: _signatures,
}
