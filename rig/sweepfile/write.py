"""A sweep file written out: commented TOML and its table of points, read back unchanged."""

from __future__ import annotations

import csv
import io
from collections.abc import Mapping, Sequence
from dataclasses import fields
from typing import Any

from rig.sweepfile.keys import (
    CHANNEL_KEYS,
    FREE_KEYS,
    INSTRUMENT_KEYS,
    ITEM_KEYS,
    LAB_KEYS,
    LEVEL_KEYS,
    MEASURE_KEYS,
    NOT_STATED,
    PAIR_KEYS,
    SECOND_RECORDER_KEYS,
    VARIABLE_KEYS,
)
from rig.sweepfile.records import PointEntry, SweepPlan
from rig.sweepfile.values import Key

ESCAPES = {
    "\\": "\\\\",
    '"': '\\"',
    "\b": "\\b",
    "\t": "\\t",
    "\n": "\\n",
    "\f": "\\f",
    "\r": "\\r",
}


def toml_text(text: str) -> str:
    """Return a text as a TOML basic string, control characters escaped."""
    return '"' + "".join(ESCAPES.get(mark) or _escaped(mark) for mark in text) + '"'


def _escaped(mark: str) -> str:
    if mark >= " " and mark != "\x7f" and not 0xD800 <= ord(mark) <= 0xDFFF:
        return mark
    # A lone surrogate (a file name of undecodable bytes) cannot stand in TOML at all.
    return "\\uFFFD" if ord(mark) >= 0xD800 else f"\\u{ord(mark):04X}"


def toml_value(value: Any) -> str:
    """Return a text, number, truth value, list or table as TOML on one line."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, (int, float)):
        return repr(value)
    if isinstance(value, (list, tuple)):
        return "[" + ", ".join(toml_value(part) for part in value) + "]"
    if isinstance(value, Mapping):
        pairs = (f"{toml_key(name)} = {toml_value(part)}" for name, part in value.items())
        return "{ " + ", ".join(pairs) + " }"
    return toml_text(str(value))


def toml_key(name: str) -> str:
    """Return a key bare where TOML allows it, else in quotes."""
    bare = name.replace("_", "").replace("-", "")
    return name if bare.isalnum() and bare.isascii() else toml_text(name)


def render_sweep_toml(
    plan: SweepPlan,
    *,
    table: str | None = "points.csv",
    comments: Mapping[str, str] | None = None,
    hints: bool = True,
) -> str:
    """Return a plan as commented TOML; reading it gives the plan back.

    Parameters
    ----------
    plan : SweepPlan
    table : str, name of the table of points; None writes the points inline
    comments : text put behind a key, by "block.key" (as "driven.channel"), or above a block,
        by its name
    hints : bool, whether keys left at their default stand as comments with their meaning
    """
    writer = _Writer(comments or {}, hints)
    # A table is named before the first block: after it, it would belong to that block.
    if table is not None:
        writer.line("points.table", "points", {"table": table})
    writer.block("item", _stated(plan.item), ITEM_KEYS)
    writer.block("lab", _stated(plan.lab), LAB_KEYS)
    writer.blocks("instrument", [_stated(part) for part in plan.instruments], INSTRUMENT_KEYS)
    writer.block("pair", _pair(plan), PAIR_KEYS)
    writer.block("reference", _changed(plan.reference), CHANNEL_KEYS)
    writer.block("driven", _changed(plan.driven), CHANNEL_KEYS)
    writer.block("level", _values(plan.level), LEVEL_KEYS)
    if plan.variable is not None:
        writer.block("variable", _values(plan.variable), VARIABLE_KEYS)
    writer.block("measure", _changed(plan.measure), MEASURE_KEYS)
    tie = _changed(plan.second_recorder)
    if tie or any(point.driven_file for point in plan.points):
        writer.block("second_recorder", tie, SECOND_RECORDER_KEYS)
    writer.blocks("free_running", [_changed(entry) for entry in plan.free_running], FREE_KEYS)
    writer.blocks("limit", list(plan.limits), {})
    if table is None:
        writer.blocks("point", [_inline(point) for point in plan.points], {})
    return writer.text()


class _Writer:
    """Lines of TOML as they are put together."""

    def __init__(self, comments: Mapping[str, str], hints: bool) -> None:
        self._comments = comments
        self._hints = hints
        self._lines = self._comment_lines("file")

    def text(self) -> str:
        return "\n".join(self._lines) + "\n"

    def line(self, place: str, name: str, value: Any) -> None:
        comment = self._comments.get(place, "")
        behind = "  # " + _one_line(comment) if comment else ""
        self._lines.append(f"{toml_key(name)} = {toml_value(value)}{behind}")

    def block(self, name: str, values: Mapping[str, Any], keys: Mapping[str, Key]) -> None:
        self._start(name, f"[{name}]")
        self._body(name, values)
        if self._hints:
            self._lines += [_hint(key, keys[key]) for key in keys if _wants_hint(key, keys, values)]

    def blocks(self, name: str, many: Sequence[Mapping[str, Any]], keys: Mapping[str, Key]) -> None:
        for number, values in enumerate(many, start=1):
            self._start(name if number == 1 else "", f"[[{name}]]")
            self._body(f"{name}.{number}", values)
        if not many and self._hints and keys:
            self._lines += ["", f"# [[{name}]]", *(_hint(key, keys[key]) for key in keys)]

    def _start(self, name: str, header: str) -> None:
        self._lines += ["", *self._comment_lines(name), header]

    def _body(self, place: str, values: Mapping[str, Any]) -> None:
        for name, value in values.items():
            self.line(f"{place}.{name}", name, value)

    def _comment_lines(self, name: str) -> list[str]:
        text = self._comments.get(name, "")
        return [f"# {_one_line(line)}" for line in text.split("\n")] if text else []


def _one_line(text: str) -> str:
    """Return a comment on one line: control characters are not allowed in TOML comments."""
    return "".join(mark if mark.isprintable() else "?" for mark in text)


def _hint(name: str, key: Key) -> str:
    choices = f" ({', '.join(map(str, key.choices))})" if key.choices else ""
    return f"# {name} = ?  # {key.help}{choices}"


def _wants_hint(name: str, keys: Mapping[str, Key], values: Mapping[str, Any]) -> bool:
    # The key in degrees says the same as the key in radians: one of the two is enough.
    return (keys[name].target or name) not in values and name not in values


def _stated(pairs: Sequence[tuple[str, str]]) -> dict[str, str]:
    return {name: text for name, text in pairs if text != NOT_STATED}


def _values(record: Any) -> dict[str, Any]:
    return {part.name: getattr(record, part.name) for part in fields(record)}


def _changed(record: Any) -> dict[str, Any]:
    """Return the fields of a record that differ from their default."""
    return {
        part.name: getattr(record, part.name)
        for part in fields(record)
        if getattr(record, part.name) != part.default
    }


def _pair(plan: SweepPlan) -> dict[str, str]:
    order = "find" if plan.order is None else f"{plan.order[0]}:{plan.order[1]}"
    return {"order": order, "coupling": plan.coupling}


def _inline(point: PointEntry) -> dict[str, Any]:
    known = {name: value for name, value in _changed(point).items() if name != "extras"}
    return {**known, **dict(point.extras)}


def render_points_csv(points: Sequence[PointEntry]) -> str:
    """Return the table of points as comma-separated text with a header row.

    Parameters
    ----------
    points : sequence of PointEntry; free columns stand in the order they are first met
    """
    free = list(dict.fromkeys(name for point in points for name, _ in point.extras))
    second = ["driven_file"] if any(point.driven_file for point in points) else []
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(["file", *second, "drive_hz", "level", "direction", *free])
    for point in points:
        drive = "" if point.drive_hz is None else repr(point.drive_hz)
        extras = dict(point.extras)
        files = [point.file, point.driven_file] if second else [point.file]
        cells = [*files, drive, repr(point.level), point.direction]
        writer.writerow(cells + [extras.get(name, "") for name in free])
    return out.getvalue()
