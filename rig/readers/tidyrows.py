"""Rows that numpy's own reader does not take as they stand, rewritten so that it does.

Times of day, units behind numbers, empty cells and D exponents come in files of any length,
and reading them cell by cell is ten times slower. Only what cannot change a value is
rewritten here; None is the answer for everything else, which is then read cell by cell.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from functools import lru_cache

from rig.readers.clocks import CLOCK, clock_seconds

_SECONDS = re.compile(r"[0-5]\d(?:[.,]\d{1,9})?", re.ASCII)


def tidy_rows(
    rows: Sequence[str], delimiter: str, column_count: int, suffixes: Sequence[str]
) -> list[str] | None:
    """Return the rows with nothing but plain numbers in their cells, None if that is not sure.

    Parameters
    ----------
    rows : lines without line end, decimal mark "."
    delimiter : str, a blank for any run of blanks
    column_count : int, cells a row
    suffixes : sequence of str, what stands behind the numbers of each column, or none at all
    """
    plain = _without_suffixes(rows, delimiter, column_count, suffixes) if any(suffixes) else rows
    if plain is None:
        return None
    text = "\n" + "\n".join(plain) + "\n"
    # Where a D is no exponent the cell is no number, with an E as well.
    text = text.replace("D", "e").replace("d", "e")
    if delimiter != " ":
        if delimiter == "\t" and "\n\t" in text:
            return None  # may be an indent
        while delimiter + delimiter in text:
            text = text.replace(delimiter + delimiter, f"{delimiter}nan{delimiter}")
        text = text.replace(delimiter + "\n", f"{delimiter}nan\n")
        text = text.replace("\n" + delimiter, f"\nnan{delimiter}")
    return text[1:-1].split("\n")


def _without_suffixes(
    rows: Sequence[str], delimiter: str, column_count: int, suffixes: Sequence[str]
) -> list[str] | None:
    between = None if delimiter == " " else delimiter
    marked = [(k, suffix) for k, suffix in enumerate(suffixes) if suffix]
    plain: list[str] = []
    for row in rows:
        cells = row.split(between)
        if len(cells) != column_count:
            return None
        for k, suffix in marked:
            cell = cells[k].strip(' "')
            bare = clock_text(cell) if suffix == CLOCK else _number_text(cell, suffix)
            if bare is None:
                return None
            cells[k] = bare
        plain.append(delimiter.join(cells))
    return plain


def _number_text(cell: str, suffix: str) -> str | None:
    """Return the number in front of a unit, None where something else stands."""
    if not cell.endswith(suffix):
        return None
    bare = cell[: -len(suffix)].rstrip()
    return bare if bare[-1:].isdecimal() and bare.isascii() else None


def clock_text(cell: str) -> str | None:
    """Return the seconds of a time of day, or of a date and time, as a decimal number."""
    minute, _, seconds = cell.rpartition(":")
    start = _minute_start(minute)
    if start is None or _SECONDS.fullmatch(seconds) is None:
        return None
    return f"{start + int(seconds[:2])}{seconds[2:].replace(',', '.')}"


@lru_cache(maxsize=64)
def _minute_start(minute: str) -> int | None:
    """Return the seconds at which a minute begins; a record stays in one for many rows."""
    seconds = clock_seconds(f"{minute}:00")
    return None if seconds is None else int(seconds)
