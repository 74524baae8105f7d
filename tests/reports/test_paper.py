"""The PDF: same content as the page, selectable, numbered, and nothing outside the margins."""

from __future__ import annotations

import io
from dataclasses import replace
from itertools import pairwise
from types import ModuleType

import pytest

from reports.content import build_content
from reports.content_model import ReportContent, Section, Table, cells, columns
from reports.figures.catalogue import report_pictures
from reports.paper import render_paper
from reports.paper_blocks import set_block
from reports.paper_outline import Bookmark, add_outline
from reports.paper_press import Press
from reports.paper_sheets import (
    BOTTOM_PT,
    HEIGHT_PT,
    LEFT_PT,
    TEXT_WIDTH_PT,
    TOP_PT,
    Flow,
    Sheet,
)
from reports.records import SweepRun

pypdf = pytest.importorskip("pypdf")


@pytest.fixture(scope="module")
def run(made: ModuleType) -> SweepRun:
    """A run of 28 points with a failed limit."""
    return made.make_run(
        verdicts=tuple(map(made.make_verdict, ("pass", "fail", "undecided"))), verdict="fail"
    )


@pytest.fixture(scope="module")
def content(run: SweepRun) -> ReportContent:
    """What its report says."""
    return build_content(run)


@pytest.fixture(scope="module")
def pdf(run: SweepRun, content: ReportContent) -> bytes:
    """Its PDF."""
    return render_paper(content, run)


@pytest.fixture(scope="module")
def pages(pdf: bytes) -> list[str]:
    """The text of each page, as a reader would copy it."""
    return [page.extract_text() for page in pypdf.PdfReader(io.BytesIO(pdf)).pages]


def _laid_out(run: SweepRun, content: ReportContent) -> list[Sheet]:
    press = Press(content, report_pictures(run, content))
    for section in content.sections:
        for block in section.blocks:
            set_block(press, block)
    return press.flow.sheets


def test_the_same_run_gives_the_same_bytes(
    run: SweepRun, content: ReportContent, pdf: bytes
) -> None:
    """Reports are compared byte for byte in an audit."""
    assert render_paper(content, run) == pdf


def test_every_page_carries_the_report_and_its_place(pages: list[str]) -> None:
    """A loose page must say where it belongs."""
    for number, text in enumerate(pages, start=1):
        assert "Report R-001" in text
        assert f"page {number} of {len(pages)}" in text


def test_the_text_can_be_selected_and_holds_verdict_and_sections(
    content: ReportContent, pages: list[str]
) -> None:
    """A report that cannot be searched is a picture of one."""
    assert "fail" in pages[0]
    assert "0.600 ± 0.012 Hz" in " ".join(pages)
    whole = " ".join(" ".join(pages).split())
    for section in content.sections:
        assert section.title in whole
    assert "End of the report." in pages[-1]


def test_title_date_language_and_bookmarks_are_set(content: ReportContent, pdf: bytes) -> None:
    """A reader's title bar and outline lead through 30 pages."""
    reader = pypdf.PdfReader(io.BytesIO(pdf))
    assert reader.metadata.title == "Locking of the twin exciters, report R-001"
    assert reader.metadata.creation_date.isoformat() == "2026-12-01T00:00:00+00:00"
    titles = [mark.title for mark in reader.outline]
    assert titles == [f"{i} {one.title}" for i, one in enumerate(content.sections, start=1)]
    for mark in reader.outline:
        page = reader.pages[reader.get_destination_page_number(mark)]
        assert mark.title.split(" ", 1)[1] in " ".join(page.extract_text().split())
    assert reader.trailer["/Root"]["/Lang"] == "en"


def test_pages_are_a4_and_type_is_embedded(pdf: bytes) -> None:
    """What is not embedded prints in another type on another machine."""
    reader = pypdf.PdfReader(io.BytesIO(pdf))
    for page in reader.pages:
        assert float(page.mediabox.width) == pytest.approx(595.28, abs=0.01)
        assert float(page.mediabox.height) == pytest.approx(841.89, abs=0.01)
    assert b"/FontFile2" in pdf


def test_nothing_stands_outside_the_margins(run: SweepRun, content: ReportContent) -> None:
    """A cut word or picture is a lost one. Half a point allows for kerning."""
    right = LEFT_PT + TEXT_WIDTH_PT + 0.5
    for sheet in _laid_out(run, content):
        for words in sheet.words:
            assert words.x_pt + words.face.width_pt(words.text, words.size_pt) <= right
            assert BOTTOM_PT - 1.0 <= words.y_pt <= HEIGHT_PT - TOP_PT
            assert words.size_pt >= 7.0
        for placed in sheet.pictures:
            assert placed.x_pt + placed.width_pt <= right
            assert placed.y_pt >= BOTTOM_PT - 0.01
            assert placed.y_pt + placed.height_pt <= HEIGHT_PT - TOP_PT + 0.01


def test_no_text_runs_into_another(run: SweepRun, content: ReportContent) -> None:
    """Words on one line must not overlap; pictures must not cover words."""
    for sheet in _laid_out(run, content):
        lines: dict[float, list[tuple[float, float]]] = {}
        for words in sheet.words:
            width = words.face.width_pt(words.text, words.size_pt)
            lines.setdefault(round(words.y_pt, 3), []).append((words.x_pt, words.x_pt + width))
        for spans in lines.values():
            spans.sort()
            for (_start, end), (start, _end) in pairwise(spans):
                assert end <= start + 0.5
        for placed in sheet.pictures:
            for words in sheet.words:
                across = placed.x_pt <= words.x_pt < placed.x_pt + placed.width_pt
                inside = placed.y_pt < words.y_pt < placed.y_pt + placed.height_pt
                assert not (across and inside)


def _table_content(table: Table) -> ReportContent:
    return ReportContent(
        title="t", subtitle="s", report_id="r", revision="1", date_text="2026-12-01",
        verdict="pass", sections=(Section(key="k", title="Title", blocks=(table,)),),
    )  # fmt: skip


def test_long_tables_repeat_their_head_and_lose_no_row(run: SweepRun) -> None:
    """The 300th row must still say what its columns are."""
    rows = tuple(cells(f"row {i}", str(i)) for i in range(300))
    content = _table_content(Table(caption="c", columns=columns("Name", "Number"), rows=rows))
    reader = pypdf.PdfReader(io.BytesIO(render_paper(content, run)))
    texts = [page.extract_text() for page in reader.pages]
    assert len(texts) > 3
    assert all("Number" in text for text in texts)
    whole = " ".join(texts).split()
    assert [int(word) for word in whole if word.isdigit() and 100 <= int(word) < 300].count(
        299
    ) == 2


def test_a_cell_taller_than_a_page_is_carried_on(run: SweepRun) -> None:
    """A reader's long message must not run off the sheet."""
    rows = (cells("x", "word " * 2500),)
    content = _table_content(Table(caption="c", columns=columns("Name", "Text"), rows=rows))
    reader = pypdf.PdfReader(io.BytesIO(render_paper(content, run)))
    whole = " ".join(page.extract_text() for page in reader.pages)
    assert whole.split().count("word") == 2500


def test_characters_without_a_glyph_are_written_as_code_points(run: SweepRun) -> None:
    """A box or a warning would hide what a user wrote."""
    table = Table(caption="c", columns=columns("Name"), rows=(cells("frame \u4e2d $x_1$ \x07Ψ"),))
    reader = pypdf.PdfReader(io.BytesIO(render_paper(_table_content(table), run)))
    assert "frame [U+4E2D] $x_1$ Ψ" in reader.pages[0].extract_text()


def test_a_date_that_is_none_leaves_the_date_out(run: SweepRun) -> None:
    """Today's date would change the bytes."""
    content = _table_content(Table(caption="c", columns=columns("Name"), rows=(cells("x"),)))
    undated = replace(run, provenance=replace(run.provenance, date_text="in winter"))
    reader = pypdf.PdfReader(io.BytesIO(render_paper(content, undated)))
    assert reader.metadata.creation_date is None


def test_bookmarks_leave_an_unknown_file_alone() -> None:
    """Better no outline than a broken file."""
    mark = Bookmark(title="a", page=1)
    assert add_outline(b"not a pdf", [mark]) == b"not a pdf"


def test_a_fresh_sheet_is_not_skipped() -> None:
    """An empty page in a numbered report looks like a lost one."""
    flow = Flow()
    assert not flow.need(10_000.0)
    flow.new_sheet()
    assert len(flow.sheets) == 1
