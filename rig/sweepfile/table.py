"""The table of points: one row a capture, from a plain text table or from inline rows.

Delimiter and decimal mark are decided together: a comma between cells leaves the point as
decimal mark; a semicolon or a tab allows either, but not both in one table. Columns other
than file, driven_file, drive_hz, level and direction are free and kept as text.
"""

from __future__ import annotations

import codecs
import csv
import difflib
import io
import math
import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from rig.errors import SweepFileError
from rig.sweepfile.records import Direction, LevelKind, PointEntry
from rig.sweepfile.values import as_number, as_text, shown, suggestion

KNOWN_COLUMNS = ("file", "driven_file", "drive_hz", "level", "direction")
DIRECTIONS: tuple[Direction, ...] = ("up", "down", "none")
NEAR_RATIO = 0.75  # 'drive' for 'drive_hz' is 0.77, 'spacing' for any known name below 0.5
NUMBER = re.compile(r"[+-]?(\d+[.,]?\d*|[.,]\d+)([eE][+-]?\d+)?")
LARGEST_LEVEL, SMALLEST_LEVEL = 1e30, 1e-30  # in any unit: beyond, their squares overflow
LARGEST_DECIBEL = 600.0  # either sign: the same range as an amplitude
LARGEST_DRIVE_HZ = 1e18  # beyond any oscillator: above X-rays
LARGEST_TABLE_BYTES = 50_000_000  # a million rows; more is not a table of points
BYTE_ORDER_MARKS = (
    (codecs.BOM_UTF8, "utf-8-sig"),
    (codecs.BOM_UTF16_LE, "utf-16"),
    (codecs.BOM_UTF16_BE, "utf-16"),
)


@dataclass(slots=True)
class Rules:
    """What every row is held against: the kind of level, and the decimal mark seen so far."""

    level_kind: LevelKind
    comma_decimal: bool
    mark: str = ""
    mark_place: str = ""
    seen: dict[str, str] = field(default_factory=dict)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Row:
    """One row as it stands, its numbers read but not yet held against the rules."""

    file: str
    driven_file: str
    numbers: dict[str, float]
    direction: str
    extras: dict[str, str]


def read_points_table(path: Path, level_kind: LevelKind = "amplitude") -> tuple[PointEntry, ...]:
    """Return the points of a table on disk.

    Parameters
    ----------
    path : Path
    level_kind : "amplitude", "power" or "decibel"; only a decibel level may be 0 or negative

    Raises
    ------
    SweepFileError
        If the table cannot be read or breaks a rule; file, line, column and value are named.
    """
    return points_from_bytes(str(path), read_bytes(path), level_kind)


def read_bytes(path: Path) -> bytes:
    """Return the bytes of a text file of reasonable size, or refuse it by name."""
    try:
        # Counted while it is read: a device has no size and no end.
        with path.open("rb") as stream:
            data = stream.read(LARGEST_TABLE_BYTES + 1)
        if len(data) > LARGEST_TABLE_BYTES:
            size = max(path.stat().st_size, len(data))
            raise SweepFileError(
                f"{path}: {size} bytes, at most {LARGEST_TABLE_BYTES} expected. Is this a capture?"
            )
        return data
    except (OSError, ValueError) as error:
        if isinstance(error, SweepFileError):
            raise
        reason = getattr(error, "strerror", None) or str(error)
        raise SweepFileError(f"{path}: cannot be read ({reason})") from error


def points_from_bytes(place: str, data: bytes, level_kind: LevelKind) -> tuple[PointEntry, ...]:
    """Return the points of a table given as bytes; ``place`` starts every message."""
    text = decode_text(place, data)
    delimiter = _delimiter(text)
    rows = _rows(place, text, delimiter)
    first = next(rows, None)
    if first is None:
        raise SweepFileError(f"{place}: is empty; a header row with 'file' is needed")
    columns = _columns(f"{place} line {first[0]}", first[1])
    rules = Rules(level_kind=level_kind, comma_decimal=delimiter != ",")
    points = tuple(_point(f"{place} line {line}", columns, row, rules) for line, row in rows)
    if not points:
        raise SweepFileError(f"{place}: holds a header but no row")
    return points


def decode_text(place: str, data: bytes) -> str:
    """Return text from UTF-8, or UTF-16 with its mark, or else the single bytes of cp1252."""
    for mark, encoding in BYTE_ORDER_MARKS:
        if data.startswith(mark):
            return _decoded(place, data, encoding)
    try:
        return data.decode("utf-8")
    except UnicodeDecodeError:
        return _decoded(place, data, "cp1252")


def _decoded(place: str, data: bytes, encoding: str) -> str:
    try:
        return data.decode(encoding)
    except UnicodeDecodeError as error:
        raise SweepFileError(
            f"{place}: byte {error.start} is not text in {encoding}. Save the table as UTF-8."
        ) from error


def _delimiter(text: str) -> str:
    """Return the delimiter of the header row: a semicolon or tab wins over a comma."""
    for line in text.splitlines():
        if line.strip(" \t;,") and not line.startswith("#"):
            return next((mark for mark in ";\t" if mark in line), ",")
    return ","


def _rows(place: str, text: str, delimiter: str) -> Iterator[tuple[int, list[str]]]:
    """Yield line number and cells of each row that is neither blank nor a comment."""
    if "\0" in text:
        line = text[: text.index("\0")].count("\n") + 1
        raise SweepFileError(f"{place} line {line}: holds a NUL byte. Save the table as text.")
    reader = csv.reader(io.StringIO(text, newline=""), delimiter=delimiter, strict=True)
    start = 1
    try:
        for cells in reader:
            row = [cell.strip() for cell in cells]
            if any(row) and not row[0].startswith("# "):
                yield start, row
            start = reader.line_num + 1
    except csv.Error as error:
        raise SweepFileError(f"{place} line {start}: {error}. Check the quotes.") from error


def _columns(place: str, header: list[str]) -> list[str]:
    columns = [name.lower() if name.lower() in KNOWN_COLUMNS else name for name in header]
    while columns and not columns[-1]:
        columns.pop()
    for name in columns:
        if not name or columns.count(name) > 1:
            what = "a column without a name" if not name else f"column {shown(name)} twice"
            raise SweepFileError(f"{place}: {what}. Give each column its own name.")
        _refuse_near_miss(place, name, columns)
    if "file" not in columns:
        raise SweepFileError(
            f"{place}: column 'file' is missing; columns are {', '.join(map(shown, columns))}"
        )
    return columns


def _refuse_near_miss(place: str, name: str, columns: Sequence[str]) -> None:
    """Refuse a free column whose name is a misspelt known one, whose values would be lost."""
    if name in KNOWN_COLUMNS:
        return
    for known in KNOWN_COLUMNS:
        if known not in columns and _is_near(name, known):
            raise SweepFileError(
                f"{place}: unknown column {shown(name)} (did you mean '{known}'?). "
                "Rename it, or add the column meant."
            )


def _is_near(name: str, known: str) -> bool:
    plain = re.sub(r"[^a-z]", "", name.lower())
    if plain == known.replace("_", ""):
        return True
    return difflib.SequenceMatcher(None, name.lower(), known).ratio() >= NEAR_RATIO


def _point(place: str, columns: list[str], row: list[str], rules: Rules) -> PointEntry:
    cells = _cells(place, columns, row)
    known = {name: cells.pop(name, "") for name in KNOWN_COLUMNS}
    numbers = {
        name: _cell_number(f"{place} {name}", known[name], rules)
        for name in ("drive_hz", "level")
        if known[name]
    }
    row_values = _Row(
        file=known["file"],
        driven_file=known["driven_file"],
        numbers=numbers,
        direction=known["direction"],
        extras=cells,
    )
    return _make_point(place, row_values, rules)


def _cells(place: str, columns: list[str], row: list[str]) -> dict[str, str]:
    while len(row) > len(columns) and not row[-1]:
        row = row[:-1]
    if len(row) != len(columns):
        raise SweepFileError(
            f"{place}: {len(row)} cells, {len(columns)} expected ({', '.join(columns)}); "
            f"first cell {shown(row[0])}"
        )
    return dict(zip(columns, row, strict=True))


def _cell_number(place: str, cell: str, rules: Rules) -> float:
    """Return the number of a cell, with the decimal mark of the table."""
    if not NUMBER.fullmatch(cell) or ("," in cell and not rules.comma_decimal):
        if cell.lower().lstrip("+-") in ("nan", "inf", "infinity"):
            raise SweepFileError(f"{place}: must be a finite number, got {shown(cell)}")
        raise SweepFileError(
            f"{place}: must be a number without unit and thousands marks, got {shown(cell)}"
        )
    mark = next((mark for mark in ",." if mark in cell), "")
    if mark and rules.mark and mark != rules.mark:
        raise SweepFileError(
            f"{place}: {shown(cell)} has another decimal mark than {rules.mark_place}; "
            "use one in the whole table"
        )
    if mark and not rules.mark:
        rules.mark, rules.mark_place = mark, f"{shown(cell)} in {place}"
    return float(cell.replace(",", "."))


def _make_point(place: str, row: _Row, rules: Rules) -> PointEntry:
    """Return one point, its numbers and direction checked, its file not yet seen."""
    file, numbers = row.file, row.numbers
    if not file:
        raise SweepFileError(f"{place} file: is empty; the name of a capture is needed")
    for name in filter(None, (file, row.driven_file)):
        if name in rules.seen:
            where = rules.seen[name]
            raise SweepFileError(f"{place} file: {shown(name)} stands already in {where}")
        rules.seen[name] = place
    return PointEntry(
        file=file,
        driven_file=row.driven_file,
        drive_hz=_drive(f"{place} drive_hz", numbers.get("drive_hz")),
        level=_level(f"{place} level", numbers.get("level", 1.0), rules.level_kind),
        direction=_direction(f"{place} direction", row.direction),
        extras=tuple(row.extras.items()),
    )


def _drive(place: str, drive_hz: float | None) -> float | None:
    if drive_hz is not None and not (drive_hz > 0 and math.isfinite(drive_hz)):
        raise SweepFileError(f"{place}: must be above 0 Hz, got {drive_hz:g}")
    if drive_hz is not None and drive_hz > LARGEST_DRIVE_HZ:
        raise SweepFileError(f"{place}: must be below {LARGEST_DRIVE_HZ:g} Hz, got {drive_hz:g}")
    return drive_hz


def _level(place: str, level: float, kind: LevelKind) -> float:
    if not math.isfinite(level):
        raise SweepFileError(f"{place}: must be a finite number, got {level}")
    if kind != "decibel" and not level > 0:
        raise SweepFileError(
            f"{place}: must be above 0 for a level of kind '{kind}', got {level:g}. "
            "A capture without drive belongs under [[free_running]]."
        )
    if kind == "decibel" and abs(level) > LARGEST_DECIBEL:
        raise SweepFileError(f"{place}: must lie within {LARGEST_DECIBEL:g} dB of 0, got {level:g}")
    if kind != "decibel" and not SMALLEST_LEVEL <= level <= LARGEST_LEVEL:
        raise SweepFileError(
            f"{place}: must lie between {SMALLEST_LEVEL:g} and {LARGEST_LEVEL:g}, got {level:g}. "
            "State it in another unit."
        )
    return level


def _direction(place: str, text: str) -> Direction:
    word = text.strip().lower() or "none"
    for known in DIRECTIONS:
        if word == known:
            return known
    raise SweepFileError(
        f"{place}: must be one of {', '.join(DIRECTIONS)}, got {shown(text)}"
        f"{suggestion(word, DIRECTIONS)}"
    )


def points_from_blocks(place: str, raw: Any, level_kind: LevelKind) -> tuple[PointEntry, ...]:
    """Return the points of inline [[point]] blocks."""
    if not isinstance(raw, list) or not raw:
        raise SweepFileError(f"{place} [[point]]: must be one block a capture, got {shown(raw)}")
    rules = Rules(level_kind=level_kind, comma_decimal=False)
    return tuple(
        _inline_point(f"{place} [[point]] {number}", block, rules)
        for number, block in enumerate(raw, start=1)
    )


def _inline_point(place: str, block: Any, rules: Rules) -> PointEntry:
    if not isinstance(block, dict):
        raise SweepFileError(f"{place}: must be a table of keys, got {shown(block)}")
    for name in block:
        _refuse_near_miss(place, name, list(block))
    numbers = {
        name: as_number(f"{place} {name}", block[name])
        for name in ("drive_hz", "level")
        if name in block
    }
    file, driven_file = (
        as_text(f"{place} {name}", block.get(name, "")) for name in ("file", "driven_file")
    )
    direction = as_text(f"{place} direction", block.get("direction", "none"))
    extras = {
        name: _free_text(f"{place} {name}", value)
        for name, value in block.items()
        if name not in KNOWN_COLUMNS
    }
    row = _Row(
        file=file, driven_file=driven_file, numbers=numbers, direction=direction, extras=extras
    )
    return _make_point(place, row, rules)


def _free_text(place: str, value: Any) -> str:
    return repr(value) if isinstance(value, float) else as_text(place, value)
