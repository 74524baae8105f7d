"""The work of a report, counted: what is drawn how often, and by which process."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from types import ModuleType

import pytest
from matplotlib.figure import Figure, SubFigure

import reports.outputs
from fit import coupling_function
from reports.content import build_content
from reports.outputs import OUTPUT_FILES, write_outputs
from reports.page import render_page
from reports.paper import render_paper
from reports.records import SweepRun


@pytest.fixture(scope="module")
def run(made: ModuleType) -> SweepRun:
    """A run of few points: the report is whole, its pictures are few."""
    whole = made.make_run()
    return replace(whole, points=whole.points[:4])


def _counted(monkeypatch: pytest.MonkeyPatch, kind: type) -> list[object]:
    """Return a list that grows with every drawing of a kind of figure."""
    drawn: list[object] = []
    draw = kind.draw

    def counted(self, renderer):
        drawn.append(self)
        return draw(self, renderer)

    monkeypatch.setattr(kind, "draw", counted)
    return drawn


def test_page_and_paper_draw_every_picture_once(
    run: SweepRun, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A tight box, or a size asked for beforehand, would draw each a second time."""
    content = build_content(run)
    wholes, parts = _counted(monkeypatch, Figure), _counted(monkeypatch, SubFigure)
    page = render_page(content, run)
    pictures = len(content.figure_keys())
    assert page.count("<svg") == pictures == len(wholes)
    assert not parts
    wholes.clear()
    paper = render_paper(content, run)
    assert len(parts) == pictures
    assert len(wholes) == paper.count(b"/Type /Page ") == len(set(wholes))


def test_the_words_of_the_paper_are_not_laid_out_twice(
    run: SweepRun, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Their places are known: laying out each piece once more doubled the time of a page."""
    from matplotlib.text import Text

    content = build_content(run)
    texts: list[str] = []
    draw = Text.draw

    def counted(self, renderer):
        texts.append(self.get_text())
        return draw(self, renderer)

    monkeypatch.setattr(Text, "draw", counted)
    render_paper(content, run)
    assert content.title not in texts


def test_a_process_beside_gives_the_same_bytes(
    run: SweepRun, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """One worker or two: a report must not show where it was drawn."""
    monkeypatch.setattr(reports.outputs, "FEWEST_BESIDE", 0)
    found = []
    for workers in (1, 2):
        folder = tmp_path / str(workers)
        folder.mkdir()
        write_outputs(run, folder, workers)
        found.append([(folder / name).read_bytes() for name in OUTPUT_FILES])
    assert found[0] == found[1]


def test_the_curve_of_a_record_is_fitted_once(
    made: ModuleType, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Whether to show it, its caption, page and paper all ask for the same curve."""
    import reports.figures.coupling as coupling

    whole = made.make_run()
    row = coupling.coupling_row(whole)
    assert row is not None
    asked: list[object] = []

    def counted(series, *, rng):
        asked.append(series)
        return coupling_function.coupling_function(series, rng=rng)

    monkeypatch.setattr(coupling, "coupling_function", counted)
    coupling._curve.cache_clear()
    first = coupling.curve_of(whole, row)
    assert coupling.curve_of(whole, row) is first
    assert len(asked) == 1
    coupling._curve.cache_clear()
