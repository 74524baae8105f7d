"""Bookmarks, language and title bar of a finished PDF, appended as an incremental update.

An update adds new objects and a new cross-reference table behind the file and leaves every
byte before them alone (ISO 32000-1, 7.5.6), so it does not depend on how the file was made
beyond a plain cross-reference table.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass


@dataclass(frozen=True, slots=True, kw_only=True)
class Bookmark:
    """One entry of the outline: its title and its page, from 1."""

    title: str
    page: int


def add_outline(pdf: bytes, marks: Sequence[Bookmark], language: str = "en") -> bytes:
    """Return the PDF with one bookmark a section; unchanged where its structure is unknown.

    Parameters
    ----------
    pdf : bytes, with a plain cross-reference table
    marks : bookmarks in reading order
    language : str, of the text, for screen readers

    Returns
    -------
    bytes
    """
    found = _structure(pdf)
    if found is None or not marks:
        return pdf
    root, info, size, pages_ref, page_refs = found
    outline = size
    items = [size + 1 + place for place in range(len(marks))]
    objects = {
        root: b"<< /Type /Catalog /Pages %d 0 R /Outlines %d 0 R /PageMode /UseOutlines "
        b"/Lang (%s) /ViewerPreferences << /DisplayDocTitle true >> >>"
        % (pages_ref, outline, language.encode("ascii")),
        outline: b"<< /Type /Outlines /First %d 0 R /Last %d 0 R /Count %d >>"
        % (items[0], items[-1], len(items)),
    }
    for place, (number, mark) in enumerate(zip(items, marks, strict=True)):
        objects[number] = _item(mark, outline, items, place, page_refs)
    return _appended(pdf, objects, (root, info, size + 1 + len(items)))


def _structure(pdf: bytes) -> tuple[int, int, int, int, list[int]] | None:
    """Return numbers of catalogue, information, size, page tree and pages; None if not found."""
    trailer = pdf[pdf.rfind(b"trailer") :]
    numbers = [
        re.search(pattern, trailer)
        for pattern in (rb"/Root (\d+) 0 R", rb"/Info (\d+) 0 R", rb"/Size (\d+)")
    ]
    if any(number is None for number in numbers):
        return None
    root, info, size = (int(number.group(1)) for number in numbers if number is not None)
    pages = re.search(rb"/Pages (\d+) 0 R", _object(pdf, root))
    if pages is None:
        return None
    kids = re.search(rb"/Kids \[([^\]]*)\]", _object(pdf, int(pages.group(1))))
    if kids is None:
        return None
    refs = [int(number) for number in re.findall(rb"(\d+) 0 R", kids.group(1))]
    return root, info, size, int(pages.group(1)), refs


def _object(pdf: bytes, number: int) -> bytes:
    start = pdf.find(b"\n%d 0 obj" % number)
    return pdf[start : pdf.find(b"endobj", start)] if start >= 0 else b""


def _item(
    mark: Bookmark, outline: int, items: Sequence[int], place: int, page_refs: Sequence[int]
) -> bytes:
    title = b"\xfe\xff" + mark.title.encode("utf-16-be")
    links = b""
    if place > 0:
        links += b" /Prev %d 0 R" % items[place - 1]
    if place + 1 < len(items):
        links += b" /Next %d 0 R" % items[place + 1]
    page = page_refs[mark.page - 1]
    return b"<< /Title <%s> /Parent %d 0 R%s /Dest [%d 0 R /Fit] >>" % (
        title.hex().encode("ascii"), outline, links, page,
    )  # fmt: skip


def _appended(pdf: bytes, objects: dict[int, bytes], trailer: tuple[int, int, int]) -> bytes:
    """Write the objects behind the file with their cross-reference sections."""
    root, info, size = trailer
    previous = int(pdf[pdf.rfind(b"startxref") :].split()[1])
    out = bytearray(pdf if pdf.endswith(b"\n") else pdf + b"\n")
    table = bytearray(b"xref\n")
    for number, body in sorted(objects.items()):
        table += b"%d 1\n%010d 00000 n \n" % (number, len(out))
        out += b"%d 0 obj\n%s\nendobj\n" % (number, body)
    start = len(out)
    out += table
    out += b"trailer\n<< /Size %d /Root %d 0 R /Info %d 0 R /Prev %d >>\n" % (
        size, root, info, previous,
    )  # fmt: skip
    out += b"startxref\n%d\n%%%%EOF\n" % start
    return bytes(out)
