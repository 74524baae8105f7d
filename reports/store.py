"""Records to plain JSON and back without loss, and files written whole or not at all.

A record is stored field by field under its own names; the type of each field says how it is
read back, so that ``decode_record(cls, encode_record(x))`` gives the same numbers to the last
bit: floats are written with the shortest digits that read back equal. NaN in an array is
null; a single number that is not finite is the text "nan", "inf" or "-inf", because JSON has
no sign for it. What the published results look like is said in ``reports.exports``.
"""

from __future__ import annotations

import functools
import json
import math
import os
import secrets
import sys
import time
import types
from collections.abc import Callable, Mapping
from dataclasses import MISSING, fields, is_dataclass
from pathlib import Path
from typing import Any, Literal, TypeVar, Union, get_args, get_origin, get_type_hints

import numpy as np

from rig.errors import LockspanError

Record = TypeVar("Record")

_NOT_FINITE = {"nan": math.nan, "inf": math.inf, "-inf": -math.inf}
_REPLACE_TRIES = 10  # a scanner that holds a file on Windows lets go within about a second
_REPLACE_WAIT_S = 0.1


def encode_record(record: Any) -> dict[str, Any]:
    """Return a record as a dictionary of plain JSON values.

    Parameters
    ----------
    record : instance of one of the package's frozen dataclasses

    Returns
    -------
    dict, field name -> plain value; nested records become nested dictionaries

    Raises
    ------
    TypeError
        If it is not a record, or a field holds what its type does not allow.
    """
    if not is_dataclass(record) or isinstance(record, type):
        raise TypeError(f"only records can be stored, got {type(record).__name__}")
    hints = _hints(type(record))
    return {
        field.name: _encode(hints[field.name], getattr(record, field.name))
        for field in fields(record)
    }


def decode_record(cls: type[Record], stored: Mapping[str, Any]) -> Record:
    """Return the record that ``encode_record`` made into a dictionary.

    Parameters
    ----------
    cls : type of the record
    stored : mapping of field names to plain values

    Raises
    ------
    LockspanError
        If a field is missing or unknown, or a value does not fit its field.
    """
    if not isinstance(stored, Mapping):
        raise LockspanError(f"stored {cls.__name__}: a table is needed, got {_kind(stored)}")
    hints = _hints(cls)
    unknown = sorted(set(stored) - set(hints))
    if unknown:
        raise LockspanError(f"stored {cls.__name__}: unknown field '{unknown[0]}'; measure again")
    values = {}
    for field in fields(cls):  # type: ignore[arg-type]
        if field.name in stored:
            values[field.name] = _read_field(cls, field.name, hints[field.name], stored)
        elif field.default is MISSING and field.default_factory is MISSING:
            raise LockspanError(f"stored {cls.__name__}: field '{field.name}' is missing")
    try:
        return cls(**values)
    except ValueError as error:
        raise LockspanError(f"stored {cls.__name__}: {error}") from error


def json_text(value: Any, *, indent: int | None = None) -> str:
    """Return canonical JSON: sorted keys, no NaN, a newline at the end, valid UTF-8.

    A file name with bytes that are no text (lone surrogates) is written as JSON escapes, so
    that the text can always be encoded and reads back equal.

    Raises
    ------
    ValueError
        If a number is not finite.
    """
    separators = (",", ":") if indent is None else (",", ": ")
    text = json.dumps(
        value,
        allow_nan=False,
        sort_keys=True,
        ensure_ascii=False,
        indent=indent,
        separators=separators,
    )
    return text.encode("utf-8", "backslashreplace").decode("utf-8") + "\n"


def write_atomic(path: Path, data: bytes) -> None:
    """Write a file so that a reader finds either the old or the whole new content.

    The bytes go to a temporary file in the same folder, are flushed to the disk and then
    renamed over the target. On Windows a scanner may hold the target for a moment; the
    renaming is tried again for about a second there. A device or a pipe is written to as it is.

    Parameters
    ----------
    path : path of the file; its folder must exist
    data : bytes

    Raises
    ------
    OSError
        If the folder cannot be written or the disk is full; the old file is left as it was.
    """
    path = Path(path)
    try:
        if path.exists() and not (path.is_file() or path.is_dir()):
            # A device or a pipe has no old content to keep, and must not be renamed over.
            path.write_bytes(data)
        else:
            _write_beside(path, data)
    except OSError as error:
        # The person named the target; the temporary name, or none, would say nothing to them.
        error.filename, error.filename2 = str(path), None
        raise


def _write_beside(path: Path, data: bytes) -> None:
    """Write to a temporary file in the same folder, then rename it over the target."""
    temporary = path.with_name(f".{path.name}.{os.getpid()}-{secrets.token_hex(4)}.tmp")
    handle = os.open(temporary, os.O_WRONLY | os.O_CREAT | os.O_EXCL | _BINARY, 0o666)
    try:
        with os.fdopen(handle, "wb") as stream:
            stream.write(data)
            stream.flush()
            os.fsync(stream.fileno())
        _replace(temporary, path)
    except BaseException:
        temporary.unlink(missing_ok=True)
        raise


_BINARY = getattr(os, "O_BINARY", 0)  # only Windows knows text mode here


def _replace(temporary: Path, path: Path) -> None:
    for attempt in range(_REPLACE_TRIES):
        try:
            os.replace(temporary, path)
            return
        except PermissionError:
            if sys.platform != "win32" or attempt == _REPLACE_TRIES - 1:
                raise
            time.sleep(_REPLACE_WAIT_S)


def _hints(cls: Any) -> dict[str, Any]:
    return _cached_hints(cls)


@functools.cache
def _cached_hints(cls: Any) -> dict[str, Any]:
    return get_type_hints(cls)


def _kind(value: Any) -> str:
    return "nothing" if value is None else type(value).__name__


def _read_field(cls: type, name: str, hint: Any, stored: Mapping[str, Any]) -> Any:
    try:
        return _decode(hint, stored[name])
    except _Mismatch as error:
        raise LockspanError(f"stored {cls.__name__}: field '{name}' {error}") from error


class _Mismatch(Exception):
    """A stored value does not fit the type of its field."""


# ---- writing -------------------------------------------------------------------------------


def _encode(hint: Any, value: Any) -> Any:
    if value is None:
        return None
    if is_dataclass(value):
        return encode_record(value)
    origin = get_origin(hint)
    if origin in (Union, types.UnionType):
        return _encode(_member(hint, value), value)
    if origin is tuple:
        return [_encode(part, item) for part, item in _paired(hint, value)]
    if isinstance(value, np.ndarray):
        return _encode_array(value)
    if origin is Literal or hint is Any or origin is dict:
        return _encode_plain(value)
    if hint in _WRITERS:
        return _WRITERS[hint](value)
    raise TypeError(f"no way to store a value of type {hint!r}")


def _encode_float(value: Any) -> float | str:
    number = float(value)
    return number if math.isfinite(number) else repr(number)


_WRITERS: dict[Any, Callable[[Any], Any]] = {
    float: _encode_float,
    int: int,
    bool: bool,
    str: str,
}


def _encode_array(array: np.ndarray[Any, Any]) -> list[Any]:
    if array.dtype.kind != "f" or bool(np.all(np.isfinite(array))):
        return list(array.tolist())
    if np.any(np.isinf(array)):
        raise TypeError("an array to be stored holds an infinite number")
    return [None if item != item else item for item in array.tolist()]


def _encode_plain(value: Any) -> Any:
    """Return a free value (a raw table of the sweep file) as JSON can hold it."""
    if isinstance(value, Mapping):
        return {str(key): _encode_plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_encode_plain(item) for item in value]
    if isinstance(value, bool | int | str) or value is None:
        return value
    # a date of a TOML table has no JSON form of its own: it is kept as its text
    return _encode_float(value) if isinstance(value, float) else str(value)


def _member(hint: Any, value: Any) -> Any:
    """Return the member of a union that a present value belongs to."""
    members = [part for part in get_args(hint) if part is not type(None)]
    if len(members) == 1:
        return members[0]
    for part in members:
        if isinstance(part, type) and isinstance(value, part):
            return part
    raise TypeError(f"value {value!r} is of none of the types {hint!r}")


def _paired(hint: Any, value: Any) -> list[tuple[Any, Any]]:
    parts = get_args(hint)
    if len(parts) == 2 and parts[1] is Ellipsis:
        return [(parts[0], item) for item in value]
    if len(parts) != len(value):
        raise TypeError(f"{len(parts)} values needed, got {len(value)}")
    return list(zip(parts, value, strict=True))


# ---- reading -------------------------------------------------------------------------------


def _decode(hint: Any, stored: Any) -> Any:
    origin = get_origin(hint)
    if origin in (Union, types.UnionType):
        return _decode_union(hint, stored)
    if is_dataclass(hint):
        return decode_record(hint, stored)  # type: ignore[arg-type]
    if origin is tuple:
        return _decode_tuple(hint, stored)
    if origin is np.ndarray:
        return _decode_array(hint, stored)
    if origin is Literal:
        if stored not in get_args(hint):
            raise _Mismatch(f"must be one of {', '.join(map(str, get_args(hint)))}, got {stored!r}")
        return stored
    if hint is Any or origin is dict:
        return stored
    return _decode_simple(hint, stored)


def _decode_union(hint: Any, stored: Any) -> Any:
    members = get_args(hint)
    if stored is None and type(None) in members:
        return None
    for part in members:
        if part is type(None):
            continue
        try:
            return _decode(part, stored)
        except _Mismatch as error:
            last = error
    raise last


def _decode_tuple(hint: Any, stored: Any) -> tuple[Any, ...]:
    if not isinstance(stored, list):
        raise _Mismatch(f"must be a list, got {_kind(stored)}")
    try:
        pairs = _paired(hint, stored)
    except TypeError as error:
        raise _Mismatch(str(error)) from error
    return tuple(_decode(part, item) for part, item in pairs)


def _decode_array(hint: Any, stored: Any) -> Any:
    if not isinstance(stored, list):
        raise _Mismatch(f"must be a list of numbers, got {_kind(stored)}")
    (dtype,) = get_args(get_args(hint)[1])
    try:
        # None turns into NaN here, which is what it stands for
        return np.array(stored, dtype=dtype)
    except (TypeError, ValueError, OverflowError) as error:
        raise _Mismatch(f"must be a list of numbers ({error})") from error


def _decode_simple(hint: Any, stored: Any) -> Any:
    if hint is float:
        if isinstance(stored, str) and stored in _NOT_FINITE:
            return _NOT_FINITE[stored]
        if isinstance(stored, int | float) and not isinstance(stored, bool):
            return _float_of(stored)
    elif hint is int:
        if isinstance(stored, int) and not isinstance(stored, bool):
            return stored
    elif isinstance(stored, hint):
        return stored
    raise _Mismatch(f"must be {hint.__name__}, got {stored!r}")


def _float_of(stored: float) -> float:
    try:
        return float(stored)
    except OverflowError as error:
        raise _Mismatch("is a whole number beyond any of a measurement") from error
