"""Tables on paper: columns as wide as their content asks, rows kept whole, heads repeated."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from reports.content_model import Cell, Table
from reports.look import VERDICT_COLOURS, VERDICT_SHAPES
from reports.paper_press import LEADING, SMALL_PT, TABLE_PT, Press
from reports.paper_sheets import LEFT_PT, TEXT_HEIGHT_PT, TEXT_WIDTH_PT, Rule, Words

_GAP_PT = 9.0  # between columns of a table
_WHOLE_CHARS = 26  # cells up to this length are values, which read badly when broken
_HAIR = "#BBBBBB"
_WHOLE_TABLE_PT = 250.0  # a table up to this height is never cut


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


def set_table(press: Press, block: Table) -> None:
    """Set a table below the pen: caption, head, rows; the head stands again on each sheet."""
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
