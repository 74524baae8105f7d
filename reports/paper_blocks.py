"""How each part of a report is set on paper: paragraphs, tables with repeated heads, pictures."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence

from reports.content_model import (
    Block,
    Bullets,
    Fields,
    FigureRef,
    Gallery,
    Paragraph,
    Section,
    Signatures,
    Table,
    VerdictLine,
)
from reports.look import VERDICT_COLOURS, VERDICT_SHAPES
from reports.paper_press import BODY_PT, LEADING, SMALL_PT, Press
from reports.paper_sheets import LEFT_PT, TEXT_HEIGHT_PT, TEXT_WIDTH_PT, Placed, Rule, Words
from reports.paper_tables import set_table
from reports.typeface import Typeface

_HEADING_PT = 36.0
_SHORT_LINES = 4
_SIGNED_PT = 200.0  # heading, statements and signatures together


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


_SETTERS: Mapping[type, Callable[..., None]] = {
    Paragraph: _paragraph,
    Bullets: _bullets,
    Fields: _fields,
    Table: set_table,
    FigureRef: _figure,
    Gallery: _gallery,
    VerdictLine: _verdict_line,
    Signatures: _signatures,
}
