"""The report as a PDF, made without a browser: the same content, set page by page.

The drawing library's own PDF writer is used, because it needs no further package and writes
the same bytes each time. Text is embedded as type, so it can be searched and copied. Bookmarks
are added afterwards (``reports.paper_outline``), since that writer has none.
"""

from __future__ import annotations

import datetime
import io
from collections.abc import Sequence

from matplotlib.backends.backend_pdf import PdfPages

from reports.content_model import ReportContent
from reports.figures.catalogue import report_pictures
from reports.look import drawing_style
from reports.paper_blocks import set_block, set_heading
from reports.paper_outline import Bookmark, add_outline
from reports.paper_press import BODY_PT, LEADING, SMALL_PT, Press
from reports.paper_sheets import LEFT_PT, TEXT_WIDTH_PT, Sheet, Words, draw_sheet
from reports.records import SweepRun

_FOOT_PT = 34.0  # height of the footing above the lower edge
_CONTENTS_GAP_PT = 36.0  # between the two columns of the contents


def render_paper(content: ReportContent, run: SweepRun) -> bytes:
    """Return the report as a PDF file.

    Parameters
    ----------
    content : ReportContent
    run : SweepRun, from which the pictures are drawn that the content refers to; the date of
        its provenance becomes the date of creation

    Returns
    -------
    bytes, the same for the same content, run and version of the drawing library
    """
    press = Press(content, report_pictures(run, content))
    lines_at = _title(press, content)
    starts = []
    for place, section in enumerate(content.sections, start=1):
        set_heading(press, place, section)
        starts.append(len(press.flow.sheets))
        for block in section.blocks:
            set_block(press, block)
    sheets = press.flow.sheets
    _page_numbers(press, lines_at, starts)
    for number, sheet in enumerate(sheets, start=1):
        _footing(press, content, sheet, f"page {number} of {len(sheets)}")
    marks = [
        Bookmark(title=f"{place} {section.title}", page=page)
        for place, (section, page) in enumerate(zip(content.sections, starts, strict=True), start=1)
    ]
    return add_outline(_bound(sheets, content, run.provenance.date_text), marks)


def _title(press: Press, content: ReportContent) -> list[tuple[float, float]]:
    """Set title and contents; return where the page numbers of the contents go."""
    flow = press.flow
    press.set_text(running_text(content), press.plain, SMALL_PT)
    flow.y_pt -= 8.0
    press.set_text(content.title, press.head, 18.0)
    press.set_text(content.subtitle, press.text, 12.0)
    flow.y_pt -= 8.0
    flow.rule(0.5)
    flow.y_pt -= 3.0
    ends = _contents(press, content)
    flow.y_pt -= 5.0
    flow.rule(0.5)
    return ends


def _contents(press: Press, content: ReportContent) -> list[tuple[float, float]]:
    """Set the contents in two columns; return the right end and baseline of each line."""
    flow, sections = press.flow, content.sections
    rows = (len(sections) + 1) // 2
    width_pt = (TEXT_WIDTH_PT - _CONTENTS_GAP_PT) / 2
    ends = []
    for place, section in enumerate(sections):
        column, row = divmod(place, rows)
        x_pt = LEFT_PT + column * (width_pt + _CONTENTS_GAP_PT)
        y_pt = flow.y_pt - (row + 0.8) * BODY_PT * LEADING
        for indent_pt, text in ((0.0, str(place + 1)), (18.0, section.title)):
            flow.sheet.words.append(
                Words(x_pt=x_pt + indent_pt, y_pt=y_pt, text=text, face=press.text, size_pt=BODY_PT)
            )
        ends.append((x_pt + width_pt, y_pt))
    flow.y_pt -= rows * BODY_PT * LEADING
    return ends


def _page_numbers(press: Press, ends: Sequence[tuple[float, float]], starts: Sequence[int]) -> None:
    """Write the page of each section at the right end of its line in the contents."""
    for (right_pt, y_pt), page in zip(ends, starts, strict=True):
        width_pt = press.text.width_pt(str(page), BODY_PT)
        press.flow.sheets[0].words.append(
            Words(
                x_pt=right_pt - width_pt,
                y_pt=y_pt,
                text=str(page),
                face=press.text,
                size_pt=BODY_PT,
            )
        )


def running_text(content: ReportContent) -> str:
    """Return what stands on every page: the identification of the report."""
    return f"Report {content.report_id}, revision {content.revision}, issued {content.date_text}"


def _footing(press: Press, content: ReportContent, sheet: Sheet, counted: str) -> None:
    width = press.plain.width_pt(counted, SMALL_PT)
    room = TEXT_WIDTH_PT - width - 12.0
    running = press.plain.lines(running_text(content), SMALL_PT, room)[0]
    right = LEFT_PT + TEXT_WIDTH_PT - width
    for x_pt, text in ((LEFT_PT, running), (right, counted)):
        sheet.words.append(
            Words(x_pt=x_pt, y_pt=_FOOT_PT, text=text, face=press.plain, size_pt=SMALL_PT)
        )


def _bound(sheets: list[Sheet], content: ReportContent, date: str) -> bytes:
    buffer = io.BytesIO()
    metadata = {
        "Title": f"{content.title}, report {content.report_id}",
        "Subject": content.subtitle,
        "Creator": "lockspan",
        "Producer": "lockspan",
        "CreationDate": _creation_date(date),
    }
    with drawing_style(), PdfPages(buffer, metadata=metadata) as pages:
        for sheet in sheets:
            pages.savefig(draw_sheet(sheet))
    return buffer.getvalue()


def _creation_date(date: str) -> datetime.datetime | None:
    try:
        day = datetime.date.fromisoformat(date)
    except ValueError:
        return None
    return datetime.datetime(day.year, day.month, day.day, tzinfo=datetime.UTC)
