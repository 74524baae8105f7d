"""The page: one file, no network, no script, harmless whatever a user wrote."""

from __future__ import annotations

import re
from collections import Counter
from dataclasses import replace
from html.parser import HTMLParser
from types import ModuleType

import pytest

from reports.content import build_content
from reports.page import css_string, escaped, render_page
from reports.records import SweepRun

HOSTILE = "<script>alert(1)</script>\"'&\x00\x1b</style>$page_title \u202eΨ"


class _Outline(HTMLParser):
    """Names, links, headings and void checks of a page."""

    def __init__(self) -> None:
        super().__init__()
        self.ids: list[str] = []
        self.links: list[str] = []
        self.headings: list[int] = []
        self.tags: Counter[str] = Counter()
        self.scopes: list[str | None] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        """Collect what the tests ask for."""
        found = dict(attrs)
        self.tags[tag] += 1
        if found.get("id"):
            self.ids.append(str(found["id"]))
        if tag == "a" and found.get("href"):
            self.links.append(str(found["href"]))
        if re.fullmatch("h[1-6]", tag):
            self.headings.append(int(tag[1]))
        if tag == "th":
            self.scopes.append(found.get("scope"))


@pytest.fixture(scope="module")
def run(made: ModuleType) -> SweepRun:
    """A run of 28 points with a failed limit."""
    return made.make_run(
        verdicts=tuple(map(made.make_verdict, ("pass", "fail", "undecided"))), verdict="fail"
    )


@pytest.fixture(scope="module")
def page(run: SweepRun) -> str:
    """Its page."""
    return render_page(build_content(run), run)


@pytest.fixture(scope="module")
def outline(page: str) -> _Outline:
    """The page as parsed."""
    found = _Outline()
    found.feed(page)
    return found


def test_the_same_run_gives_the_same_bytes(run: SweepRun, page: str) -> None:
    """Reports are compared byte for byte in an audit."""
    assert render_page(build_content(run), run) == page


def test_nothing_is_loaded_and_nothing_runs(page: str, outline: _Outline) -> None:
    """A report in an archive must not depend on a network that is gone."""
    for tag in ("script", "link", "img", "iframe", "object", "embed", "form", "base"):
        assert outline.tags[tag] == 0
    assert "@import" not in page
    addresses = set(re.findall(r"https?://[^\s\"'<)]+", page))
    assert addresses <= {"http://www.w3.org/2000/svg", "http://www.w3.org/1999/xlink"}
    assert not re.search(r"url\((?!#)", page)


def test_names_are_unique_and_links_lead_somewhere(outline: _Outline) -> None:
    """A link to nothing is worse than none; a doubled name breaks pictures and readers."""
    assert [name for name, count in Counter(outline.ids).items() if count > 1] == []
    assert {link.removeprefix("#") for link in outline.links} <= set(outline.ids)
    assert "#record-1" in outline.links


def test_headings_go_down_step_by_step(outline: _Outline) -> None:
    """Screen readers walk a page by its headings."""
    assert outline.headings[0] == 1
    assert outline.headings.count(1) == 1
    steps = zip(outline.headings, outline.headings[1:], strict=False)
    assert all(after - before <= 1 for before, after in steps)


def test_every_table_head_says_what_it_heads(outline: _Outline) -> None:
    """A cell without its head is a number without a name."""
    assert set(outline.scopes) == {"row", "col"}
    assert outline.tags["thead"] == outline.tags["table"]


def test_the_verdict_is_a_word_and_a_shape(page: str) -> None:
    """Colour alone tells nothing in grey print or to a colour-blind reader."""
    assert '<span class="verdict fail"><span aria-hidden="true">✕</span> fail</span>' in page
    assert 'lang="en"' in page


def test_whatever_a_user_wrote_stays_text(made: ModuleType, run: SweepRun) -> None:
    """A serial number with a tag in it must not become one."""
    point = replace(run.points[0], file=HOSTILE)
    limit = replace(run.verdicts[0].limit, name=HOSTILE)
    hostile = replace(
        run,
        points=(point, *run.points[1:]),
        verdicts=(replace(run.verdicts[0], limit=limit, reason=HOSTILE), *run.verdicts[1:]),
        plan=replace(
            run.plan,
            item=(("description", HOSTILE), (HOSTILE, HOSTILE)),
            lab=(("title", HOSTILE), ("report_id", HOSTILE), ("revision", HOSTILE)),
            level=replace(run.plan.level, name=HOSTILE, unit=HOSTILE),
        ),
        free_runs=tuple(replace(free, file=HOSTILE, notes=(HOSTILE,)) for free in run.free_runs),
        notes=(HOSTILE,),
    )
    page = render_page(build_content(hostile), hostile)
    found = _Outline()
    found.feed(page)
    assert found.tags["script"] == 0
    assert page.count("</style>") == 1
    assert not re.search(r"[\x00-\x08\x0b\x0c\x0e-\x1f]", page)
    assert "&lt;script&gt;alert(1)&lt;/script&gt;" in page


def test_escapes_cover_quotes_and_control_characters() -> None:
    """Attributes end at quotes, browsers at NUL."""
    assert (
        escaped("<a b=\"c\" d='e'>&\x00") == "&lt;a b=&quot;c&quot; d=&#x27;e&#x27;&gt;&amp;\ufffd"
    )


def test_css_strings_end_every_escape() -> None:
    """Without the blank an escape swallows the character behind it."""
    assert css_string('R-1, "x"') == '"R\\2d 1\\2c  \\22 x\\22 "'


def test_print_style_repeats_heads_and_keeps_pictures_whole(page: str) -> None:
    """A table that continues without its head cannot be read."""
    style = page[page.index("<style>") : page.index("</style>")]
    assert "display: table-header-group" in style
    assert "size: A4" in style
    assert re.search(r"figure:not\(\.table\)[^}]*break-inside: avoid", style)
    assert 'counter(page) " of " counter(pages)' in style
