"""The report as one HTML file: no script, nothing from the network, readable on a phone and on A4.

Every text that came from a user is escaped here and nowhere else. Pictures are inline SVG
with a title and a description, so a screen reader says what a picture shows.
"""

from __future__ import annotations

import html
import re
from collections.abc import Callable, Mapping
from importlib import resources
from string import Template

from reports.content_model import (
    Block,
    Bullets,
    Cell,
    Column,
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
from reports.figures.catalogue import report_pictures
from reports.figures.svg import figure_svg
from reports.look import VERDICT_SHAPES
from reports.numbers import one_line
from reports.records import SweepRun

# Control characters are not allowed in HTML text; they would break the page or hide something.
_CONTROL = re.compile(r"[\x00-\x08\x0b\x0c\x0e-\x1f\x7f-\x9f\ud800-\udfff\ufffe\uffff]")
_LONG_WORD = 24  # longer words (paths, digests) may be broken anywhere
_WORDY_CHARS = 16  # row names longer than this keep some width on a phone
_TIGHT_CHARS = 24  # shorter numbers with a unit are not broken over lines


class _Places:
    """Numbers of pictures and names of tables, given out in reading order."""

    def __init__(self, content: ReportContent, figures: Mapping[str, Picture]) -> None:
        self.figures = figures
        numbered = (ref for ref in figure_refs(content) if not ref.key.startswith("record-"))
        self.numbers = {ref.key: place for place, ref in enumerate(numbered, start=1)}
        self.tables = 0
        self.drawn = {ref.key for ref in figure_refs(content)}

    def next_table(self) -> str:
        """Return the name of the next table of the page."""
        self.tables += 1
        return f"table-{self.tables}"


def render_page(content: ReportContent, run: SweepRun) -> str:
    """Return the whole report as one self-contained HTML text.

    Parameters
    ----------
    content : ReportContent
    run : SweepRun, from which the pictures are drawn that the content refers to

    Returns
    -------
    str, the same for the same content, run and version of the drawing library
    """
    places = _Places(content, report_pictures(run, content))
    style = Template(_asset("report.css")).substitute(page_foot=css_string(_running(content)))
    sections = [_section(place, one, places) for place, one in enumerate(content.sections, start=1)]
    return Template(_asset("report.html")).substitute(
        page_title=escaped(f"{content.title} {content.report_id}"),
        style=style.strip(),
        running=escaped(_running(content)),
        title=escaped(content.title),
        subtitle=escaped(content.subtitle),
        contents="\n".join(_contents_line(one) for one in content.sections),
        sections="\n".join(sections),
    )


def escaped(text: str) -> str:
    """Return a text made harmless for HTML, quotes included, control characters marked."""
    return html.escape(_CONTROL.sub("\ufffd", text), quote=True)


def css_string(text: str) -> str:
    """Return a text as a CSS string in which nothing can end the string or the style."""
    clean = _CONTROL.sub("\ufffd", one_line(text))
    # The blank ends each escape; without it a following blank or digit would be swallowed.
    return '"' + "".join(c if c.isalnum() or c in " .:" else f"\\{ord(c):x} " for c in clean) + '"'


def _asset(name: str) -> str:
    return (resources.files("reports") / "templates" / name).read_text(encoding="utf-8")


def _running(content: ReportContent) -> str:
    return f"Report {content.report_id}, revision {content.revision}, issued {content.date_text}"


def _contents_line(section: Section) -> str:
    return f'<li><a href="#{escaped(section.key)}">{escaped(section.title)}</a></li>'


def _section(place: int, section: Section, places: _Places) -> str:
    key = escaped(section.key)
    body = "\n".join(_block(block, places) for block in section.blocks)
    return (
        f'<section aria-labelledby="{key}">\n<h2 id="{key}"><span class="no">{place}</span>'
        f"{escaped(section.title)}</h2>\n{body}\n</section>"
    )


def _block(block: Block, places: _Places) -> str:
    return _RENDERERS[type(block)](block, places)


def _paragraph(block: Paragraph, _places: _Places) -> str:
    return f'<p class="{block.tone}">{escaped(block.text)}</p>'


def _bullets(block: Bullets, _places: _Places) -> str:
    items = "\n".join(f"<li>{escaped(item)}</li>" for item in block.items)
    return f'<ul class="{block.tone}">\n{items}\n</ul>'


def _fields(block: Fields, _places: _Places) -> str:
    items = "\n".join(
        f"<dt>{escaped(name)}</dt><dd>{escaped(text)}</dd>" for name, text in block.items
    )
    return f"<dl>\n{items}\n</dl>"


def _verdict_line(block: VerdictLine, _places: _Places) -> str:
    return f'<p class="overall">{_verdict(block.word)} {escaped(block.sentence)}</p>'


def _verdict(word: str) -> str:
    shape = VERDICT_SHAPES[word]
    return f'<span class="verdict {word}"><span aria-hidden="true">{shape}</span> {word}</span>'


def _signatures(block: Signatures, _places: _Places) -> str:
    lines = "\n".join(
        f"<p>{escaped(role)}{': ' if name else ''}{escaped(name)}<br>Date, signature</p>"
        for role, name in block.lines
    )
    return f'<div class="signatures">\n{lines}\n</div>'


def _table(block: Table, places: _Places) -> str:
    name = places.next_table()
    head = "".join(_heading(column) for column in block.columns)
    rows = "\n".join(_row(row, block.columns, places) for row in block.rows)
    return (
        f'<div class="table">\n<p class="caption" id="{name}"><b>Table {places.tables}.</b> '
        f"{escaped(block.caption)}</p>\n"
        f'<div class="scroll" role="group" tabindex="0" aria-labelledby="{name}">\n'
        f'<table aria-labelledby="{name}">\n<thead><tr>{head}</tr></thead>\n'
        f"<tbody>\n{rows}\n</tbody>\n</table>\n</div>\n</div>"
    )


def _heading(column: Column) -> str:
    kind = ' class="num"' if column.numeric else ""
    return f'<th scope="col"{kind}>{escaped(column.head)}</th>'


def _row(row: tuple[Cell, ...], columns: tuple[Column, ...], places: _Places) -> str:
    kind = _head_kind(row[0].text, columns[0])
    first = f'<th scope="row"{kind}>{_cell(row[0], places)}</th>'
    rest = (
        f"<td{_kind(cell, column)}>{_cell(cell, places)}</td>"
        for cell, column in zip(row[1:], columns[1:], strict=True)
    )
    return f"<tr>{first}{''.join(rest)}</tr>"


def _head_kind(text: str, column: Column) -> str:
    if column.numeric:
        return ' class="num"'
    if _has_long_word(text):
        return ' class="long"'
    return ' class="wordy"' if len(text) > _WORDY_CHARS else ""


def _kind(cell: Cell, column: Column) -> str:
    names = [
        *(["num"] if column.numeric else []),
        *(["tight"] if len(cell.text) <= _TIGHT_CHARS else []),
        *(["long"] if _has_long_word(cell.text) else []),
    ]
    return f' class="{" ".join(names)}"' if names else ""


def _has_long_word(text: str) -> bool:
    return any(len(word) > _LONG_WORD for word in text.split())


def _cell(cell: Cell, places: _Places) -> str:
    if cell.verdict is not None:
        return _verdict(cell.verdict)
    if cell.target is not None and cell.target in places.drawn:
        return f'<a href="#{escaped(cell.target)}">{_seamed(cell.text)}</a>'
    return _seamed(cell.text)


def _seamed(text: str) -> str:
    """Return a text that may be broken behind the separators of a path."""
    shown = escaped(text)
    return re.sub(r"([/\\_])", r"\1<wbr>", shown) if _has_long_word(text) else shown


def _figure(block: FigureRef, places: _Places) -> str:
    number = places.numbers[block.key]
    name = f"figure-{escaped(block.key)}"
    return (
        f'<figure class="wide" id="{name}">\n<div class="scroll" role="group" tabindex="0" '
        f'aria-label="Figure {number}">\n{_svg(block, places)}\n</div>\n'
        f"<figcaption><b>Figure {number}. {escaped(block.title)}.</b> {escaped(block.caption)}"
        "</figcaption>\n</figure>"
    )


def _gallery(block: Gallery, places: _Places) -> str:
    cards = "\n".join(_card(ref, places) for ref in block.figures)
    return f'<ul class="cards">\n{cards}\n</ul>'


def _card(ref: FigureRef, places: _Places) -> str:
    return (
        f'<li id="{escaped(ref.key)}"><figure>\n<figcaption><b>{escaped(ref.title)}</b> '
        f"{escaped(ref.caption)}</figcaption>\n{_svg(ref, places)}\n</figure></li>"
    )


def _svg(ref: FigureRef, places: _Places) -> str:
    picture = places.figures[ref.key].figure()
    title = _CONTROL.sub("\ufffd", ref.title)
    description = _CONTROL.sub("\ufffd", ref.caption)
    return figure_svg(picture, ref.key, title=title, description=description).strip()


_RENDERERS: Mapping[type, Callable[..., str]] = {
    Paragraph: _paragraph,
    Bullets: _bullets,
    Fields: _fields,
    Table: _table,
    FigureRef: _figure,
    Gallery: _gallery,
    VerdictLine: _verdict_line,
    Signatures: _signatures,
}
