"""The dialect of a delimited text: delimiter and decimal mark together, names, units, times.

Both marks are decided from many rows at once: "1,5;2,5" read at its commas gives wrong
numbers without an error. Where two readings of all rows give different numbers the file is
refused with both readings shown.
"""

from __future__ import annotations

import math
import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from rig.readers.cells import Marks, RowForm, cell_value, row_values, split_cells
from rig.readers.clocks import CLOCK
from rig.readers.keyedrows import KeyForm, find_keys, keyed_lines
from rig.readers.options import ReadOptions
from rig.readers.refusals import printable, refusal
from rig.readers.statedlength import StatedRows, find_stated_rows
from rig.readers.timebase import decimal_quantum

ROWS_LOOKED_AT = 400
ROWS_FOR_A_GUESS = 8  # fewer rows that rise evenly may do so by chance
DELIMITERS = (",", ";", "\t", "|", " ")
DELIMITER_NAMES = {",": "comma", ";": "semicolon", "\t": "tab", "|": "bar", " ": "blanks"}
TIME_UNITS_S = {
    "s": 1.0,
    "sec": 1.0,
    "second": 1.0,
    "seconds": 1.0,
    "ms": 1e-3,
    "us": 1e-6,
    "µs": 1e-6,
    "μs": 1e-6,
    "ns": 1e-9,
    "min": 60.0,
    "h": 3600.0,
    "d": 86400.0,
    "days": 86400.0,
}
_TIME_NAME = re.compile(r"^(time|t|zeit|temps|tiempo|tempo|timestamp|seconds?|secs?|mjd)$", re.I)
_COUNT_NAME = re.compile(r"^(sample|samples|index|idx|n|no\.?|nr\.?|#|count|point|row)$", re.I)
_UNIT_IN_NAME = re.compile(r"^(.*?)\s*[\[(]\s*([^\])]*)\s*[\])]\s*$")
_LEADING_ZERO = re.compile(r"0\d+$")
_UNIT_SUFFIX = re.compile(r"^(time|t)_(s|ms|us|ns|min)$", re.I)


@dataclass(frozen=True, slots=True, kw_only=True)
class Dialect:
    """How rows are written and what the columns are called.

    ``start_index`` is the index of the first row among the lines looked at. ``names`` and
    ``units`` have one entry a column. ``time_column`` counts from 0; None where no column
    holds times, ``time_unit_s`` turns it into seconds.
    """

    marks: Marks
    start_index: int
    column_count: int
    trailing: int
    suffixes: tuple[str, ...]
    names: tuple[str, ...]
    units: tuple[str, ...]
    time_column: int | None
    time_unit_s: float
    notes: tuple[str, ...]
    stated_rows: StatedRows | None = None
    keys: KeyForm | None = None

    @property
    def form(self) -> RowForm:
        """What every row must look like."""
        return RowForm(
            marks=self.marks,
            column_count=self.column_count,
            trailing=self.trailing,
            suffixes=self.suffixes if any(self.suffixes) else (),
            keys=self.keys,
        )

    @property
    def text(self) -> str:
        """Delimiter and decimal mark in words."""
        if self.keys is not None:
            return f"pairs of name and value, decimal '{self.marks.decimal}'"
        if self.column_count == 1:
            return f"one column, decimal '{self.marks.decimal}'"
        delimiter = DELIMITER_NAMES.get(self.marks.delimiter, repr(self.marks.delimiter))
        return f"delimiter {delimiter}, decimal '{self.marks.decimal}'"


def find_dialect(path: str, lines: Sequence[str], options: ReadOptions) -> Dialect:
    """Return the dialect of a text from its first lines.

    Raises
    ------
    CaptureError
        If no reading gives rows of numbers, or two give different ones.
    """
    looked_at = lines[:ROWS_LOOKED_AT]
    keys = find_keys(looked_at)
    if keys is not None:
        looked_at, options = (
            keyed_lines(looked_at, keys),
            replace(options, delimiter=",", decimal="."),
        )
    reading = _decide_marks(path, looked_at, options)
    column_count = reading.column_count
    above = [line for line in looked_at[: reading.start] if line.strip()]
    names, units, notes = _names_and_units(above, reading)
    if keys is not None and len(keys.names) == column_count:
        names, notes = keys.names, (*notes, "each value stands behind its name")
    suffixes = reading.suffixes
    units = tuple(u or s for u, s in zip(units, suffixes, strict=True))
    time_column, time_unit_s, time_notes = _find_times(path, names, units, reading, options)
    return Dialect(
        marks=reading.marks,
        start_index=reading.start,
        column_count=column_count,
        trailing=reading.trailing,
        suffixes=suffixes,
        names=names,
        units=units,
        time_column=time_column,
        time_unit_s=time_unit_s,
        notes=notes + time_notes,
        stated_rows=find_stated_rows(above),
        keys=keys,
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class _Reading:
    """One way to read the lines: the rows it explains and their values."""

    marks: Marks
    start: int
    column_count: int
    trailing: int
    suffixes: tuple[str, ...]
    leading_zeros: bool
    values: tuple[tuple[float, ...], ...]


def _decide_marks(path: str, lines: Sequence[str], options: ReadOptions) -> _Reading:
    delimiters = DELIMITERS if options.delimiter is None else (options.delimiter,)
    decimals = (".", ",") if options.decimal is None else (options.decimal,)
    readings = [
        reading
        for delimiter in _that_differ(lines, delimiters)
        for decimal in decimals
        if delimiter != decimal
        for reading in [_read_with(lines, Marks(delimiter=delimiter, decimal=decimal))]
        if reading is not None
    ]
    if not readings:
        shown = next((line for line in lines if line.strip()), "")
        what = f'no rows of numbers found (starts with "{printable(shown, 40)}")'
        raise refusal(path, what, "Pass --delimiter and --decimal, or --format")
    most = max(len(reading.values) for reading in readings)
    best = [reading for reading in readings if len(reading.values) == most]
    best = _prefer_confirmed(lines, best)
    for other in best[1:]:
        if not _same_values(other, best[0]):
            _refuse_ambiguous(path, best[0], other)
    return best[0]


def _that_differ(lines: Sequence[str], delimiters: Sequence[str]) -> list[str]:
    """Return the delimiters that stand somewhere; of the others one, since all read alike.

    A comma stays, since it cannot be the decimal mark of its own reading.
    """
    text = "\n".join(lines)
    blanks = any(len(line.split()) > 1 for line in lines)
    present = [d for d in delimiters if (blanks if d == " " else d in text)]
    absent = [d for d in delimiters if d not in present and d != ","]
    return [d for d in delimiters if d in present or d == "," or d == absent[0]]


def _read_with(lines: Sequence[str], marks: Marks) -> _Reading | None:
    """Return the rows the marks explain: those with the commonest number of cells."""
    rows: list[tuple[int, list[str], list[float]]] = []
    for index, line in enumerate(lines):
        text = line.strip()
        if text and not text.startswith("#"):
            cells = split_cells(text, marks)
            values = row_values(cells, marks)
            if values is not None:
                rows.append((index, cells, values))
    if not rows:
        return None
    # The widest of equally common counts: a preamble of single numbers is no table.
    counts = Counter(len(cells) for _, cells, _ in rows)
    width = max(counts, key=lambda n: (counts[n], n))
    kept = [row for row in rows if len(row[1]) == width]
    trailing = 0
    while trailing < width - 1 and all(not cells[width - 1 - trailing] for _, cells, _ in kept):
        trailing += 1
    columns = width - trailing
    return _Reading(
        marks=marks,
        start=kept[0][0],
        column_count=columns,
        trailing=trailing,
        suffixes=_suffixes(kept, columns, marks),
        leading_zeros=any(_LEADING_ZERO.match(cell) for _, cells, _ in kept for cell in cells),
        values=tuple(tuple(values[:columns]) for _, _, values in kept),
    )


def _suffixes(
    rows: Sequence[tuple[int, list[str], list[float]]], columns: int, marks: Marks
) -> tuple[str, ...]:
    """Return the unit suffix of each column: that of its first cell that has a value."""
    suffixes = []
    for column in range(columns):
        cells = (cell_value(row[1][column], marks) for row in rows)
        suffixes.append(next((c[1] for c in cells if c is not None and c[0] == c[0]), ""))
    return tuple(suffixes)


def _prefer_confirmed(lines: Sequence[str], readings: list[_Reading]) -> list[_Reading]:
    """Keep the readings that something besides the numbers speaks for, if there are any.

    A header with a name a column speaks for its delimiter; a part with a zero in front ("05")
    is no whole number of a column of its own, but the decimals of its neighbour.
    """
    named = [reading for reading in readings if _header_fits(lines, reading)]
    plain = [reading for reading in named or readings if not reading.leading_zeros]
    return plain or named or readings


def _header_fits(lines: Sequence[str], reading: _Reading) -> bool:
    above = [line for line in lines[: reading.start] if line.strip()]
    if not above or reading.column_count < 2:
        return False
    cells = header_cells(above[-1], reading.marks)
    return len(cells) == reading.column_count and all(cells)


def _same_values(one: _Reading, other: _Reading) -> bool:
    # Written so that NaN in the same place counts as the same.
    return repr(one.values) == repr(other.values)


def _refuse_ambiguous(path: str, one: _Reading, other: _Reading) -> None:
    shown = [_said(reading) for reading in (one, other)]
    raise refusal(path, f"ambiguous: {shown[0]} or {shown[1]}", "State --decimal and --delimiter")


def _said(reading: _Reading) -> str:
    first = " and ".join(f"{value:.10g}" for value in reading.values[0][:3])
    delimiter = "tab" if reading.marks.delimiter == "\t" else f'"{reading.marks.delimiter}"'
    marks = f'delimiter {delimiter} decimal "{reading.marks.decimal}"'
    return f"{marks} (first row {first})"


def header_cells(line: str, marks: Marks) -> list[str]:
    """Return the names in a header line, without comment mark, quotes and empty ends."""
    cells = [cell.strip('" ') for cell in split_cells(line.strip().lstrip("#%").strip(), marks)]
    while cells and not cells[-1]:
        cells.pop()
    return cells


def _names_and_units(
    above: Sequence[str], reading: _Reading
) -> tuple[tuple[str, ...], tuple[str, ...], tuple[str, ...]]:
    """Return names, units and notes from the lines above the rows."""
    count = reading.column_count
    numbers = tuple(str(c + 1) for c in range(count))
    blank = ("",) * count
    fitting = [header_cells(line, reading.marks) for line in above[-2:]]
    notes = _preamble_notes(above, reading)
    if not fitting or len(fitting[-1]) != count:
        if fitting and len(fitting[-1]) > 1 and count > 1:
            notes += (f"header has {len(fitting[-1])} names for {count} columns; names not used",)
        return numbers, blank, notes
    two = len(fitting) == 2 and len(fitting[0]) == count
    if two and _are_units(fitting[1]) and not _holds_numbers(fitting[0], reading.marks):
        units = tuple(cell.strip("[]() ") for cell in fitting[1])
        return tuple(fitting[0]), units, notes
    split = [_split_unit(cell) for cell in fitting[-1]]
    return tuple(name for name, _ in split), tuple(unit for _, unit in split), notes


def _holds_numbers(cells: Sequence[str], marks: Marks) -> bool:
    """Tell a line of the preamble ("Points,40") from a row of names."""
    values = [cell_value(cell, marks) for cell in cells]
    return any(found is not None and not math.isnan(found[0]) for found in values)


def _preamble_notes(above: Sequence[str], reading: _Reading) -> tuple[str, ...]:
    extra = [
        line for line in above if len(header_cells(line, reading.marks)) != reading.column_count
    ]
    if not extra:
        return ()
    return (f"{len(extra)} lines of preamble, first: '{printable(extra[0])}'",)


def _are_units(cells: Sequence[str]) -> bool:
    """Tell whether a row of texts looks like units: short, and at least one known or bracketed."""
    known = set(TIME_UNITS_S) | {
        "v",
        "mv",
        "a",
        "ma",
        "g",
        "m",
        "mm",
        "m/s",
        "m/s2",
        "m/s^2",
        "mm/s",
    }
    if any(_UNIT_IN_NAME.sub(r"\1", cell) not in ("", cell) for cell in cells):
        return False  # "time (s)" is a name with its unit
    bare = [cell.strip("[]() ").lower() for cell in cells]
    bracketed = all(cell[:1] in ("[", "(") for cell in cells if cell)
    return all(len(cell) <= 8 for cell in bare) and (
        bracketed or sum(cell in known for cell in bare) >= max(1, len(cells) // 2)
    )


def _split_unit(cell: str) -> tuple[str, str]:
    found = _UNIT_IN_NAME.match(cell)
    if found and found.group(1):
        return found.group(1).strip(), found.group(2).strip()
    suffix = _UNIT_SUFFIX.match(cell)
    return (cell, suffix.group(2)) if suffix else (cell, "")


def _find_times(
    path: str,
    names: tuple[str, ...],
    units: tuple[str, ...],
    reading: _Reading,
    options: ReadOptions,
) -> tuple[int | None, float, tuple[str, ...]]:
    """Return the column of times, its unit in seconds, and what was assumed."""
    if options.time_column is not None:
        column = _stated_column(path, names, options.time_column)
        return column, *(_unit_s(names, units, column) if column is not None else (1.0, ()))
    if CLOCK in reading.suffixes:
        return reading.suffixes.index(CLOCK), 1.0, ()
    named = [c for c, name in enumerate(names) if _is_time_name(name)]
    if named and reading.column_count > 1:
        return named[0], *_unit_s(names, units, named[0])
    if reading.column_count > 1 and names[0] == "1" and _rises_evenly(reading):
        note = "the first column rises evenly and is taken as time in s"
        return 0, 1.0, (note,)
    return None, 1.0, ()


def _is_time_name(name: str) -> bool:
    return bool(_TIME_NAME.match(name) or _UNIT_SUFFIX.match(name))


def _stated_column(path: str, names: tuple[str, ...], wanted: int | str) -> int | None:
    text = str(wanted).strip()
    if text in names:
        return names.index(text)
    if text.lower() == "none":
        return None
    if text.isascii() and text.isdigit() and 1 <= int(text) <= len(names):
        return int(text) - 1
    what = f"no time column '{printable(text)}' (columns: {', '.join(names[:12])})"
    raise refusal(path, printable(what, 300), "Pass --time-column with a number, a name, or none")


def _unit_s(
    names: tuple[str, ...], units: tuple[str, ...], column: int
) -> tuple[float, tuple[str, ...]]:
    unit = units[column].strip().lower()
    if not unit and names[column].lower() == "mjd":
        unit = "d"
    if unit in TIME_UNITS_S:
        return TIME_UNITS_S[unit], ()
    said = f"unit '{printable(unit)}' is not known" if unit else "no unit is stated"
    return 1.0, (f"time column '{printable(names[column])}': {said}; taken as seconds",)


def _rises_evenly(reading: _Reading) -> bool:
    """Tell whether the first column can be a clock: rising, even, and no count of rows."""
    first = np.array([row[0] for row in reading.values])
    if not bool(np.isfinite(first).all()):
        return False
    steps = np.diff(first)
    if len(steps) < ROWS_FOR_A_GUESS or not bool((steps >= 0).all()):
        return False
    mean = float(first[-1] - first[0]) / len(steps)
    if not mean > 0 or bool((first == np.rint(first)).all()):
        return False  # whole numbers may count rows, days or years: the person must say
    return float(steps.max()) <= 1.5 * mean + 1.01 * decimal_quantum(first)
