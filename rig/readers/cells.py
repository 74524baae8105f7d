"""Rows of numbers as text: splitting, number forms, and the fast path for clean rows.

A clean piece goes through ``numpy.loadtxt``; anything it does not take (empty cells, quotes,
thousands marks, D exponents, unit suffixes) is parsed cell by cell with the line at hand.
"""

from __future__ import annotations

import csv
import math
import re
from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np

from rig.arrays import FloatArray
from rig.errors import CaptureError
from rig.readers.clocks import CLOCK, clock_seconds
from rig.readers.keyedrows import KeyForm, keyed_lines
from rig.readers.refusals import printable, refusal
from rig.readers.tidyrows import tidy_rows

MISSING = frozenset({"", "nan", "-nan", "na", "n/a", "null", "none", "-", "--", "---", "#n/a"})
_INFINITE = {"inf": math.inf, "+inf": math.inf, "-inf": -math.inf, "∞": math.inf, "-∞": -math.inf}


@dataclass(frozen=True, slots=True, kw_only=True)
class Marks:
    """Delimiter (a blank stands for any run of blanks) and decimal mark, decided together."""

    delimiter: str
    decimal: str


@lru_cache(maxsize=16)
def _number_form(delimiter: str, decimal: str) -> re.Pattern[str]:
    """Return the pattern of a number: digits, thousands, decimals, exponent, unit."""
    other = "," if decimal == "." else "."
    thousands = "".join({"'", " ", "\u00a0", "\u202f", other} - {delimiter})
    if delimiter == " ":
        thousands = thousands.replace("\u00a0", "").replace("\u202f", "")
    mark = re.escape(decimal)
    return re.compile(
        rf"([+-]?(?:[1-9]\d{{0,2}}(?:[{re.escape(thousands)}]\d{{3}})+|\d+|(?={mark}\d)))"
        rf"(?:{mark}(\d*))?(?:[eEdD]([+-]?\d{{1,4}}))?\s*([A-Za-zµμΩ°%][^\s\d]{{0,7}})?",
        re.ASCII,
    )


def split_cells(line: str, marks: Marks) -> list[str]:
    """Return the cells of a line without the blanks around them; quotes protect delimiters."""
    if marks.delimiter == " ":
        return line.split()
    if '"' in line:
        try:
            cells = next(csv.reader([line], delimiter=marks.delimiter, skipinitialspace=True), [])
        except csv.Error:
            return [line]
        return [cell.strip() for cell in cells]
    return [cell.strip() for cell in line.split(marks.delimiter)]


def cell_value(cell: str, marks: Marks) -> tuple[float, str] | None:
    """Return value and unit suffix of a cell, NaN for a missing one, None for no number."""
    bare = cell.strip('"').strip()
    word = bare.lower()
    if word in MISSING:
        return math.nan, ""
    if word in _INFINITE:
        return _INFINITE[word], ""
    found = _number_form(marks.delimiter, marks.decimal).fullmatch(bare)
    if found is None:
        seconds = clock_seconds(bare)
        return None if seconds is None else (seconds, CLOCK)
    whole, fraction, exponent, unit = found.groups()
    if unit and fraction == "" and not exponent:
        return None  # "5,x" is a number beside a word, not five of the unit x
    digits = re.sub(r"[^\d+-]", "", whole)
    return float(f"{digits or 0}.{fraction or 0}e{exponent or 0}"), unit or ""


def bare_line(line: str, marks: Marks) -> str:
    """Return a line without the blanks around it; tabs at the end may be empty cells."""
    return line.lstrip().rstrip(" \r\f\v") if marks.delimiter == "\t" else line.strip()


def row_values(cells: Sequence[str], marks: Marks) -> list[float] | None:
    """Return the values of a row all of whose cells are numbers or missing, else None.

    A row without a single number is none either.
    """
    values = []
    for cell in cells:
        found = cell_value(cell, marks)
        if found is None:
            return None
        values.append(found[0])
    return values if any(not math.isnan(value) for value in values) else None


@dataclass(frozen=True, slots=True, kw_only=True)
class RowForm:
    """What every row must look like: marks, columns, empty cells at the end, unit suffixes.

    ``keys`` are the names in front of the values, None for a plain table.
    """

    marks: Marks
    column_count: int
    trailing: int = 0
    suffixes: tuple[str, ...] = ()
    keys: KeyForm | None = None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ParsedRows:
    """Values of shape (rows, columns), and the fault of the lines behind the last good row."""

    values: FloatArray
    fault: CaptureError | None = None
    fault_is_text: bool = False
    fault_text: str = ""
    comment_count: int = 0


def parse_rows(path: str, lines: Sequence[str], first_line: int, form: RowForm) -> ParsedRows:
    """Return the values of the rows among some lines; blank and comment lines are no rows.

    Raises
    ------
    CaptureError
        If a line that is no row has rows behind it.
    """
    if form.keys is not None:
        lines = keyed_lines(lines, form.keys)
    values = _parse_clean(lines, form) if lines and lines[0] and not lines[0].isspace() else None
    if values is not None:
        return ParsedRows(values=values)
    rows = [line for line in lines if line and not line.isspace()]
    comment_count = sum(line.lstrip().startswith("#") for line in rows if "#" in line)
    if comment_count:
        rows = [line for line in rows if not line.lstrip().startswith("#")]
    values = _parse_clean(rows, form) if len(rows) < len(lines) or not rows else None
    if values is None:
        values = _parse_tidied(rows, form)
    if values is not None:
        return ParsedRows(values=values, comment_count=comment_count)
    return _parse_slowly(path, lines, first_line, form)


def _parse_clean(rows: Sequence[str], form: RowForm) -> FloatArray | None:
    """Return the values if numpy's own reader takes every row as it stands, else None."""
    if not rows:
        return np.empty((0, form.column_count))
    if any(form.suffixes):
        return None
    if form.trailing:
        rows, form = _without_trailing(rows, form)
    pointed = _with_points(rows, form)
    return None if pointed is None else _load(pointed, form)


def _parse_tidied(rows: Sequence[str], form: RowForm) -> FloatArray | None:
    """Return the values if numpy's reader takes every row after a rewriting, else None."""
    if form.trailing:
        rows, form = _without_trailing(rows, form)
    pointed = _with_points(rows, form)
    if pointed is None:
        return None
    tidy = tidy_rows(pointed, form.marks.delimiter, form.column_count, form.suffixes)
    return None if tidy is None else _load(tidy, form, quotes=any('"' in row for row in tidy))


def _with_points(rows: Sequence[str], form: RowForm) -> Sequence[str] | None:
    """Return the rows with decimal points, None where a point stands already."""
    if form.marks.decimal == ".":
        return rows
    # A dot is a thousands mark here: never to be taken for a decimal point.
    if any("." in row for row in rows):
        return None
    return [row.replace(",", ".") for row in rows]


def _load(rows: Sequence[str], form: RowForm, *, quotes: bool = False) -> FloatArray | None:
    blanks = form.marks.delimiter == " " or form.column_count == 1
    if not rows[0] or rows[0].isspace():
        return None  # numpy would pass over an empty row, and warn where all are
    try:
        values = np.loadtxt(
            rows,
            dtype=np.float64,
            delimiter=None if blanks else form.marks.delimiter,
            comments=None,
            quotechar='"' if quotes else None,
            ndmin=2,
        )
    except ValueError:
        return None
    return values if values.shape == (len(rows), form.column_count) else None


def _without_trailing(rows: Sequence[str], form: RowForm) -> tuple[list[str], RowForm]:
    tail = form.marks.delimiter * form.trailing
    bare = replace(form, trailing=0)
    return [bare_line(row, form.marks).removesuffix(tail) for row in rows], bare


def _parse_slowly(path: str, lines: Sequence[str], first_line: int, form: RowForm) -> ParsedRows:
    values: list[list[float]] = []
    fault: CaptureError | None = None
    fault_text, comments, only_text = "", 0, True
    for number, line in enumerate(lines, start=first_line):
        text = bare_line(line, form.marks)
        if not text or text.startswith("#"):
            comments += bool(text)
            continue
        row = parse_row(path, text, number, form)
        if isinstance(row, list):
            if fault is not None:
                raise fault
            values.append(row)
            continue
        only_text = only_text and _starts_with_text(text, form.marks)
        if fault is None:
            fault, fault_text = row, printable(text, 40)
    return ParsedRows(
        values=np.array(values, dtype=np.float64).reshape(-1, form.column_count),
        fault=fault,
        fault_is_text=only_text,
        fault_text=fault_text,
        comment_count=comments,
    )


def _starts_with_text(text: str, marks: Marks) -> bool:
    """Tell a footer ("END", "Average;1,2") from a damaged row, which starts with a number."""
    cells = split_cells(text, marks)
    return bool(cells) and cell_value(cells[0], marks) is None


def parse_row(path: str, text: str, number: int, form: RowForm) -> list[float] | CaptureError:
    """Return the values of one row, or the refusal that names its line."""
    cells = split_cells(text, form.marks)
    while len(cells) > form.column_count and not cells[-1]:
        cells.pop()
    remedy = "Repair or remove the line"
    if len(cells) != form.column_count:
        what = f'line {number}: {len(cells)} fields, {form.column_count} expected: "'
        return refusal(path, f'{what}{printable(text)}"', remedy)
    values = []
    suffixes = form.suffixes or ("",) * len(cells)
    for cell, suffix in zip(cells, suffixes, strict=True):
        found = cell_value(cell, form.marks)
        if found is None:
            return refusal(path, f'line {number}: "{printable(cell)}" is no number', remedy)
        if not math.isnan(found[0]) and found[1] != suffix:
            what = f"line {number}: unit '{found[1]}' where the column has '{suffix}'"
            return refusal(path, what, remedy)
        values.append(found[0])
    return values
