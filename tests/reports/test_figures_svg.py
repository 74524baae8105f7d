"""SVG inside a page: same bytes each time, names that never clash, words for screen readers."""

from __future__ import annotations

import re
from types import ModuleType

import pytest

from reports.figures.catalogue import picture_of
from reports.figures.svg import figure_svg
from reports.records import SweepRun


@pytest.fixture(scope="module")
def run(made: ModuleType) -> SweepRun:
    """A small run."""
    return made.make_run(verdicts=(made.make_verdict("pass"),))


@pytest.mark.parametrize("name", ["region", "limits", "record-1"])
def test_the_same_picture_gives_the_same_bytes(run: SweepRun, name: str) -> None:
    """Two runs of one campaign must give equal files."""
    first = figure_svg(picture_of(run, name).figure(), name)
    assert figure_svg(picture_of(run, name).figure(), name) == first


def test_nothing_but_the_element_is_left(run: SweepRun) -> None:
    """A prolog, a date or metadata has no place inside a page."""
    text = figure_svg(picture_of(run, "region").figure(), "region")
    assert text.startswith("<svg ")
    for word in ("<?xml", "<!DOCTYPE", "<metadata", "<dc:", "<script", "<style", 'href="http'):
        assert word not in text


def test_names_inside_two_pictures_never_clash(run: SweepRun) -> None:
    """Equal names would clip one picture by the shape of another."""
    texts = [figure_svg(picture_of(run, key).figure(), key) for key in ("record-1", "record-2")]
    names = [set(re.findall(r'\bid="([^"]+)"', text)) for text in texts]
    assert names[0]
    assert not names[0] & names[1]


def test_title_and_description_are_read_aloud_and_escaped(run: SweepRun) -> None:
    """The sentence states the result; a file name with a tag in it stays text."""
    figure = picture_of(run, "record-1").figure()
    text = figure_svg(figure, "a b", title="<b>&", description='3 of 4 "locked"')
    assert 'aria-labelledby="a-b-title a-b-desc"' in text
    assert '<title id="a-b-title">&lt;b&gt;&amp;</title>' in text
    assert '<desc id="a-b-desc">3 of 4 &quot;locked&quot;</desc>' in text
