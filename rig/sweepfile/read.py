"""A sweep file and its table of points, read into a plan or refused with the place named.

The captures themselves are not looked for: a missing one is one bad row of the run, not a
reason to refuse the campaign. Limits are handed on raw.
"""

from __future__ import annotations

import codecs
import hashlib
import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from rig.channels import ChannelSetup
from rig.errors import ChannelError, SweepFileError
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
    POINTS_KEYS,
    SECOND_RECORDER_KEYS,
    TOP_KEYS,
    VARIABLE_KEYS,
)
from rig.sweepfile.notes import plan_notes
from rig.sweepfile.records import (
    FreeRunEntry,
    LevelAxis,
    LevelKind,
    MeasureTable,
    PointEntry,
    SecondRecorder,
    SweepPlan,
    VariableAxis,
)
from rig.sweepfile.table import points_from_blocks, points_from_bytes, read_bytes
from rig.sweepfile.values import Key, read_block, shown, suggestion

TextTable = tuple[tuple[str, str], ...]


def read_sweep_file(path: str | Path, *, points_needed: bool = True) -> SweepPlan:
    """Return the plan that a sweep file and its table of points state.

    Parameters
    ----------
    path : path of the TOML file; the table of points is looked for beside it
    points_needed : bool
        False leaves the points and what hangs on them unread: for a single capture the
        wiring, the rules and the free-running captures are enough.

    Raises
    ------
    SweepFileError
        If a file cannot be read, a key or column is unknown or missing, or a value breaks
        its rule; the message names file, block or line, key and value.
    """
    file = Path(path)
    data = read_bytes(file)
    raw = _parsed(str(file), data)
    _refuse_unknown_blocks(str(file), raw)
    plan = _stated_once(file, raw)
    if not points_needed:
        return SweepPlan(**plan, text_sha256=hashlib.sha256(data).hexdigest())
    table = _table_path(file, raw)
    table_data = read_bytes(table) if table else b""
    points = _points(file, raw, table, table_data, plan["level"].kind)
    _refuse_untied(file, points, plan["second_recorder"])
    return SweepPlan(
        **plan,
        variable=_variable(file, raw, points),
        points=points,
        text_sha256=hashlib.sha256(data + b"\0" + table_data).hexdigest(),
        notes=plan_notes(plan, points),
    )


def _parsed(place: str, data: bytes) -> dict[str, Any]:
    try:
        return tomllib.loads(data.removeprefix(codecs.BOM_UTF8).decode("utf-8"))
    except UnicodeDecodeError as error:
        raise SweepFileError(
            f"{place}: byte {error.start} is not UTF-8. Save it as UTF-8."
        ) from error
    except tomllib.TOMLDecodeError as error:
        raise SweepFileError(f"{place}: is not TOML: {error}. Texts stand in quotes.") from error
    except RecursionError as error:
        raise SweepFileError(f"{place}: is nested too deeply to be a sweep file.") from error
    except ValueError as error:
        # Python refuses to read a whole number of more than some thousand digits.
        raise SweepFileError(f"{place}: holds a number of thousands of digits.") from error


def _refuse_unknown_blocks(place: str, raw: Mapping[str, Any]) -> None:
    for name, value in raw.items():
        if name not in TOP_KEYS:
            raise SweepFileError(
                f"{place}: unknown block or key {shown(name)} (value {shown(value)})"
                f"{suggestion(name, TOP_KEYS)}. Known blocks: {', '.join(TOP_KEYS)}."
            )


def _table_path(file: Path, raw: Mapping[str, Any]) -> Path | None:
    """Return where the table of points is, None when points stand inline."""
    if ("points" in raw) == ("point" in raw):
        what = "both points = { table } and [[point]]" if "points" in raw else "no points"
        raise SweepFileError(
            f'{file}: states {what}. Give either points = {{ table = "points.csv" }} '
            "or one [[point]] a capture."
        )
    if "points" not in raw:
        return None
    name = str(read_block(f"{file} points", raw["points"], POINTS_KEYS)["table"])
    return file.parent / name


def _points(
    file: Path, raw: Mapping[str, Any], table: Path | None, data: bytes, kind: LevelKind
) -> tuple[PointEntry, ...]:
    if table is None:
        return points_from_blocks(str(file), raw["point"], kind)
    return points_from_bytes(str(table), data, kind)


def _stated_once(file: Path, raw: Mapping[str, Any]) -> dict[str, Any]:
    """Return the fields of the plan that do not depend on the points."""
    return {
        "path": str(file),
        "folder": str(file.parent),
        "item": text_table(f"{file} [item]", raw.get("item", {}), ITEM_KEYS),
        "lab": text_table(f"{file} [lab]", raw.get("lab", {}), LAB_KEYS),
        "instruments": _instruments(file, raw),
        "reference": _channel(file, raw, "reference"),
        "driven": _channel(file, raw, "driven"),
        "level": LevelAxis(**_block(file, raw, "level", LEVEL_KEYS)),
        "measure": MeasureTable(**_block(file, raw, "measure", MEASURE_KEYS)),
        "second_recorder": _second_recorder(file, raw),
        "free_running": _free_running(file, raw),
        "limits": _limits(file, raw),
        **_block(file, raw, "pair", PAIR_KEYS),
    }


def _block(
    file: Path, raw: Mapping[str, Any], name: str, keys: Mapping[str, Key]
) -> dict[str, Any]:
    return read_block(f"{file} [{name}]", raw.get(name, {}), keys)


def text_table(place: str, raw: Any, keys: Mapping[str, Key]) -> TextTable:
    """Return every field of a text block in the order of its keys, absent ones "not stated"."""
    values = read_block(place, raw, keys)
    return tuple((name, values.get(name, "").strip() or NOT_STATED) for name in keys)


def _blocks(file: Path, raw: Mapping[str, Any], name: str) -> list[tuple[str, Any]]:
    """Return the repeated blocks of a name, each with its place."""
    blocks = raw.get(name, [])
    if not isinstance(blocks, list):
        raise SweepFileError(
            f"{file} [{name}]: is repeated, so it needs double brackets: [[{name}]]"
        )
    return [(f"{file} [[{name}]] {number}", block) for number, block in enumerate(blocks, 1)]


def _instruments(file: Path, raw: Mapping[str, Any]) -> tuple[TextTable, ...]:
    blocks = _blocks(file, raw, "instrument")
    return tuple(text_table(place, block, INSTRUMENT_KEYS) for place, block in blocks)


def _channel(file: Path, raw: Mapping[str, Any], role: str) -> ChannelSetup:
    place = f"{file} [{role}]"
    if role not in raw:
        raise SweepFileError(f"{place}: block is missing; state at least its channel")
    values = read_block(place, raw[role], CHANNEL_KEYS)
    try:
        return ChannelSetup(**values)
    except ChannelError as error:
        raise SweepFileError(f"{place}: {error}") from error


def _variable(
    file: Path, raw: Mapping[str, Any], points: tuple[PointEntry, ...]
) -> VariableAxis | None:
    if "variable" not in raw:
        return None
    place = f"{file} [variable]"
    values = read_block(place, raw["variable"], VARIABLE_KEYS)
    axis = VariableAxis(**{"column": values["name"], **values})
    free = list(dict.fromkeys(name for point in points for name, _ in point.extras))
    if axis.column not in free:
        listed = ", ".join(map(shown, free)) or "none"
        raise SweepFileError(
            f"{place} column: {shown(axis.column)} is no free column of the points; "
            f"there are: {listed}{suggestion(axis.column, free)}"
        )
    return axis


def _second_recorder(file: Path, raw: Mapping[str, Any]) -> SecondRecorder:
    second = SecondRecorder(**_block(file, raw, "second_recorder", SECOND_RECORDER_KEYS))
    place = f"{file} [second_recorder]"
    if second.shared is not None and second.clock_error_ppm is not None:
        raise SweepFileError(
            f"{place}: shared and clock_error_ppm both tie the clocks; state one of them"
        )
    if second.clock_error_u_ppm is not None and second.clock_error_ppm is None:
        raise SweepFileError(f"{place} clock_error_u_ppm: needs clock_error_ppm")
    return second


def _refuse_untied(file: Path, points: tuple[PointEntry, ...], second: SecondRecorder) -> None:
    """Refuse points of two recorders whose clocks nothing ties: their rate of psi is unknown."""
    apart = [point for point in points if point.driven_file]
    if apart and not second.is_tied:
        raise SweepFileError(
            f"{file} [second_recorder]: {len(apart)} points have a driven_file of another "
            f"recorder (first: {shown(apart[0].driven_file)}), and nothing ties the two clocks. "
            "State shared (a channel that both recorded) or clock_error_ppm."
        )


def _free_running(file: Path, raw: Mapping[str, Any]) -> tuple[FreeRunEntry, ...]:
    blocks = _blocks(file, raw, "free_running")
    return tuple(FreeRunEntry(**read_block(place, block, FREE_KEYS)) for place, block in blocks)


def _limits(file: Path, raw: Mapping[str, Any]) -> tuple[dict[str, Any], ...]:
    for place, block in _blocks(file, raw, "limit"):
        if not isinstance(block, dict):
            raise SweepFileError(f"{place}: must be a table of keys, got {shown(block)}")
    return tuple(dict(block) for _, block in _blocks(file, raw, "limit"))
