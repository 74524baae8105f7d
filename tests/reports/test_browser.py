"""The page in a real browser: quiet, self-contained, fits a phone and A4, open to all readers."""

from __future__ import annotations

import io
import os
import shutil
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from types import ModuleType
from typing import Any

import pytest

from reports.content import build_content
from reports.page import render_page

BROWSER = shutil.which("chromium") or shutil.which("chromium-browser")
FLAGS = [
    "--no-sandbox",
    "--disable-gpu",
    "--disable-dev-shm-usage",
    "--disable-background-networking",
    "--disable-component-update",
    "--no-first-run",
]
REQUIRED = bool(os.environ.get("CI"))
pytestmark = pytest.mark.skipif(
    BROWSER is None and not REQUIRED, reason="no chromium on this machine"
)


@pytest.fixture(scope="module")
def browser() -> Iterator[Any]:
    """Chromium without a window; missing it is a failure where CI promises one."""
    assert BROWSER is not None, "CI is set but there is no chromium: install it"
    sync_api = pytest.importorskip("playwright.sync_api") if not REQUIRED else _playwright()
    with sync_api.sync_playwright() as driver:
        started = driver.chromium.launch(executable_path=BROWSER, headless=True, args=FLAGS)
        yield started
        started.close()


def _playwright() -> Any:
    import playwright.sync_api

    return playwright.sync_api


@pytest.fixture(scope="module")
def address(made: ModuleType, tmp_path_factory: pytest.TempPathFactory) -> str:
    """A report on disk, opened as a user would."""
    verdicts = tuple(map(made.make_verdict, ("pass", "fail", "undecided")))
    run = made.make_run(verdicts=verdicts, verdict="fail")
    run = replace(run, points=run.points[:8])  # fewer pictures, same parts, less waiting
    path: Path = tmp_path_factory.mktemp("page") / "report ü.html"
    path.write_text(render_page(build_content(run), run), encoding="utf-8")
    return path.as_uri()


def _opened(browser: Any, address: str, width: int = 1200) -> tuple[Any, list[str], list[str]]:
    """Open the page and listen to what it says and asks for."""
    page = browser.new_page(viewport={"width": width, "height": 800})
    said: list[str] = []
    asked: list[str] = []
    page.on("console", lambda message: said.append(message.text))
    page.on("pageerror", lambda error: said.append(str(error)))
    page.on("request", lambda request: asked.append(request.url))
    page.goto(address)
    return page, said, asked


def test_no_console_message_and_no_request_leaves_the_page(browser: Any, address: str) -> None:
    """A report that phones out or fails in silence cannot be trusted."""
    page, said, asked = _opened(browser, address)
    assert said == []
    assert asked == [address]
    page.close()


@pytest.mark.parametrize("width", [360, 768, 1200])
def test_the_page_never_scrolls_sideways(browser: Any, address: str, width: int) -> None:
    """On a phone, wide tables and pictures scroll inside their own box."""
    page, _said, _asked = _opened(browser, address, width)
    inner = page.evaluate("[document.documentElement.scrollWidth, window.innerWidth]")
    assert inner[0] <= inner[1]
    page.close()


def test_type_on_a_phone_stays_readable(browser: Any, address: str) -> None:
    """8 pt type in a picture squeezed to 330 px would be 5 px high."""
    page, _said, _asked = _opened(browser, address, 360)
    scale = page.evaluate(
        "Math.min(...[...document.querySelectorAll('figure svg')].map("
        "s => s.getBoundingClientRect().width / s.viewBox.baseVal.width))"
    )
    assert scale * 8.0 >= 8.0  # CSS px for 8 pt type
    page.close()


def test_it_prints_on_a4_without_cutting_anything(browser: Any, address: str) -> None:
    """Printed pages are A4, numbered, and nothing is wider than the sheet."""
    pypdf = pytest.importorskip("pypdf")
    page, _said, _asked = _opened(browser, address)
    page.emulate_media(media="print")
    page.set_viewport_size({"width": 658, "height": 900})  # 174 mm of text at 96 px an inch
    wide = page.evaluate(
        "[...document.querySelectorAll('table, svg, figure, p')].filter("
        "e => e.getBoundingClientRect().right > window.innerWidth + 1).length"
    )
    assert wide == 0
    reader = pypdf.PdfReader(io.BytesIO(page.pdf(prefer_css_page_size=True)))
    assert float(reader.pages[0].mediabox.width) == pytest.approx(595, abs=2)
    texts = [one.extract_text() for one in reader.pages]
    assert f"page 1 of {len(texts)}" in texts[0]
    assert "Report R-001, revision not stated" in texts[-1]
    page.close()


def test_an_accessibility_check_finds_nothing_serious(browser: Any, address: str) -> None:
    """Headings, heads, contrast, names: what a screen reader needs."""
    axe = pytest.importorskip("axe_playwright_python.sync_playwright")
    page, _said, _asked = _opened(browser, address)
    found = axe.Axe().run(page).response["violations"]
    assert [one["id"] for one in found if one["impact"] in ("serious", "critical")] == []
    page.close()


def test_the_keyboard_reaches_the_verdict_first(browser: Any, address: str) -> None:
    """The skip link spares a keyboard user the contents list."""
    page, _said, _asked = _opened(browser, address)
    page.keyboard.press("Tab")
    assert page.evaluate("document.activeElement.className") == "skip"
    page.keyboard.press("Enter")
    assert page.evaluate("location.hash") == "#main"
    page.close()
