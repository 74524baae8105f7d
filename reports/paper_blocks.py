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
    Section,
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
_WHOLE_CHARS = 26  # cells up to this length are values, which read badly when broken
_HAIR = "#BBBBBB"
_HEADING_PT = 36.0
_SHORT_LINES = 4
_SIGNED_PT = 200.0  # heading, statements and signatures together
_WHOLE_TABLE_PT = 250.0  # a table up to this height is never cut


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
        self.tables = 0
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


def set_heading(press: Press, place: int, section: Section) -> None:
    """Set the heading of a section, kept together with the start of what follows."""
    press.flow.down(22.0)
    signed = any(isinstance(block, Signatures) for block in section.blocks)
    press.flow.need(_SIGNED_PT if signed else _HEADING_PT + _start_pt(press, section.blocks[0]))
    press.flow.rule(1.1)
    press.flow.y_pt -= 5.0
    press.flow.line(f"{place}   {section.title}", press.head, 11.5)
    press.flow.y_pt -= 3.0


def _start_pt(press: Press, block: Block) -> float:
    """Return how much of a block must stand under its heading: a picture whole, else some."""
    if isinstance(block, FigureRef):
        return _figure_pt(press, block) + 10.0
    return 80.0


def _paragraph(press: Press, block: Paragraph) -> None:
    lines = press.text.lines(block.text, BODY_PT, TEXT_WIDTH_PT)
    press.flow.down(4.0)
    # A short paragraph stays whole; a long one starts with so many lines at least.
    press.flow.need(min(len(lines), _SHORT_LINES) * BODY_PT * LEADING)
    for line in lines:
        press.flow.line(line, press.text, BODY_PT, leading=LEADING)


def _bullets(press: Press, block: Bullets) -> None:
    press.flow.down(3.0)
    for item in block.items:
        lines = press.text.lines(item, BODY_PT, TEXT_WIDTH_PT - 14.0)
        press.flow.need(min(len(lines), 3) * BODY_PT * LEADING)
        for place, line in enumerate(lines):
            press.flow.line(line, press.text, BODY_PT, indent_pt=14.0, leading=LEADING)
            if block.tone == "caution":
                _bar(press)
            elif place == 0:
                _bullet(press)
        press.flow.down(2.0)


def _bar(press: Press) -> None:
    """Draw a heavy bar left of the line just set."""
    x_pt, y_pt = LEFT_PT + 3.0, press.flow.y_pt
    press.flow.sheet.rules.append(
        Rule(x_pt=x_pt, y_pt=y_pt, to_x_pt=x_pt, to_y_pt=y_pt + BODY_PT * LEADING, width_pt=2.4)
    )


def _bullet(press: Press) -> None:
    x_pt, y_pt = LEFT_PT + 3.0, press.flow.y_pt + 0.28 * BODY_PT
    press.flow.sheet.words.append(
        Words(x_pt=x_pt, y_pt=y_pt, text="•", face=press.text, size_pt=BODY_PT)
    )


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
        press.flow.line(press.plain.printable(f"{label} – date, signature"), press.plain, SMALL_PT)


def _figure(press: Press, block: FigureRef) -> None:
    height_pt = _picture_pt(press, block)
    press.flow.down(10.0)
    press.flow.need(_figure_pt(press, block))
    press.flow.y_pt -= height_pt
    press.flow.sheet.pictures.append(
        Placed(
            x_pt=LEFT_PT,
            y_pt=press.flow.y_pt,
            width_pt=TEXT_WIDTH_PT,
            height_pt=height_pt,
            picture=press.figures[block.key],
        )
    )
    press.flow.y_pt -= 2.0
    for line in _figure_caption(press, block):
        press.flow.line(line, press.plain, SMALL_PT, leading=LEADING)
    press.flow.down(4.0)


def _picture_pt(press: Press, block: FigureRef) -> float:
    return min(press.figures[block.key].height_in * 72.0, TEXT_HEIGHT_PT - 60.0)


def _figure_caption(press: Press, block: FigureRef) -> list[str]:
    text = f"Figure {press.numbers[block.key]}. {block.title}. {block.caption}"
    return press.plain.lines(text, SMALL_PT, TEXT_WIDTH_PT)


def _figure_pt(press: Press, block: FigureRef) -> float:
    """Return the height of a picture with its caption."""
    return _picture_pt(press, block) + len(_figure_caption(press, block)) * SMALL_PT * LEADING + 3.0


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
    press.tables += 1
    press.flow.down(11.0)
    text = f"Table {press.tables}. {block.caption}"
    caption = press.plain.lines(text, SMALL_PT, TEXT_WIDTH_PT)
    press.flow.need(_table_start_pt(press, block, grid, len(caption)))
    for line in caption:
        press.flow.line(line, press.plain, SMALL_PT, leading=LEADING)
    press.flow.y_pt -= 3.0
    _table_head(press, grid)
    for row in block.rows:
        _table_row(press, grid, row)
    press.flow.down(3.0)


def _table_start_pt(press: Press, block: Table, grid: _Grid, caption_lines: int) -> float:
    """Return the height that must be free: that of a short table whole, else of its start."""
    head_lines = max(len(lines) for lines in grid.heads)
    start_pt = (caption_lines + head_lines) * SMALL_PT * LEADING + 8.0
    rows_pt = sum(_row_pt(_broken(press, grid, row)) for row in block.rows)
    return start_pt + (rows_pt if rows_pt <= _WHOLE_TABLE_PT else 5 * TABLE_PT * LEADING)


def _grid(press: Press, block: Table) -> _Grid:
    widths = _column_widths(press, block)
    heads = tuple(
        tuple(press.head.lines(column.head, SMALL_PT, width))
        for column, width in zip(block.columns, widths, strict=True)
    )
    numeric = tuple(column.numeric for column in block.columns)
    return _Grid(widths_pt=widths, heads=heads, numeric=numeric)


def _column_widths(press: Press, block: Table) -> tuple[float, ...]:
    """Return widths that fit; values with their uncertainty stay on one line if at all possible.

    Tried in turn as the least width of a column: its short cells whole, then its words whole;
    what room is left goes to the columns that want more.
    """
    room = TEXT_WIDTH_PT - _GAP_PT * (len(block.columns) - 1)
    wanted = [_widest(press, block, place, 1000) for place in range(len(block.columns))]
    if sum(wanted) <= room:
        return tuple(wanted)
    for whole_chars in (_WHOLE_CHARS, 18, 14, 0):
        least = [_widest(press, block, place, whole_chars) for place in range(len(block.columns))]
        if sum(least) < room:
            spare = (room - sum(least)) / sum(w - s for w, s in zip(wanted, least, strict=True))
            return tuple(s + spare * (w - s) for w, s in zip(wanted, least, strict=True))
    return tuple(width * room / sum(least) for width in least)


def _widest(press: Press, block: Table, place: int, whole_chars: int) -> float:
    """Return the width a column needs when cells of up to so many characters are not broken."""
    head = block.columns[place].head
    heads = [head] if whole_chars >= 1000 else head.split()
    widths = [press.head.width_pt(part, SMALL_PT) for part in heads]
    for row in block.rows:
        text = _cell_text(row[place])
        face = press.bold if row[place].verdict is not None else press.text
        parts = [text] if len(text) <= whole_chars else [word[:18] for word in text.split()]
        widths += [face.width_pt(part, TABLE_PT) for part in parts]
    return max(widths) + 1.0


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
    _grid_rule(press, grid, 0.8, "#000000")


def _table_row(press: Press, grid: _Grid, row: tuple[Cell, ...]) -> None:
    """Set a row; it goes to the next sheet whole, under a repeated head."""
    broken = _broken(press, grid, row)
    most = int((TEXT_HEIGHT_PT - 80.0) / (TABLE_PT * LEADING))
    for first in range(0, max(len(lines) for lines in broken), most):
        part = [lines[first : first + most] for lines in broken]
        height_pt = _row_pt(part)
        if press.flow.need(height_pt):
            _table_head(press, grid)
        _row_part(press, grid, row, part)
        press.flow.y_pt -= height_pt
        _grid_rule(press, grid, 0.3, _HAIR)


def _broken(press: Press, grid: _Grid, row: tuple[Cell, ...]) -> list[list[str]]:
    """Return the lines of each cell of a row."""
    return [
        press.bold.lines(_cell_text(cell), TABLE_PT, width)
        if cell.verdict is not None
        else press.text.lines(cell.text, TABLE_PT, width)
        for cell, width in zip(row, grid.widths_pt, strict=True)
    ]


def _row_pt(lines: Sequence[Sequence[str]]) -> float:
    return max(len(part) for part in lines) * TABLE_PT * LEADING + 4.0


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


def _grid_rule(press: Press, grid: _Grid, width_pt: float, colour: str) -> None:
    end_pt = LEFT_PT + sum(grid.widths_pt) + _GAP_PT * (len(grid.widths_pt) - 1)
    press.flow.sheet.rules.append(
        Rule(
            x_pt=LEFT_PT,
            y_pt=press.flow.y_pt,
            to_x_pt=end_pt,
            to_y_pt=press.flow.y_pt,
            width_pt=width_pt,
            colour=colour,
        )
    )


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
