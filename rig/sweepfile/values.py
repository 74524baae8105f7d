"""One value of the sweep file at a time: its kind checked, or refused with its place.

A kind is one function from a place and a raw value to the value wanted; the table KINDS
names them. A place is the text that a message starts with: file, block, key.
"""

from __future__ import annotations

import datetime
import difflib
import math
import re
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from typing import Any

from rig.errors import SweepFileError
from rig.ordersize import LARGEST_STATED_ORDER

LARGEST_WHOLE = 10**18  # of a whole number; beyond, it is a slip of the finger
SHOWN_LENGTH = 60  # a value longer than this is cut in a message


@dataclass(frozen=True, slots=True, kw_only=True)
class Key:
    """One key of a block: its kind, the closed choices if any, and what it means.

    ``target`` is the field the value goes to when it has another name than the key.
    """

    kind: str
    help: str
    choices: tuple[str | int, ...] = ()
    needed: bool = False
    target: str = ""


def shown(value: object) -> str:
    """Return a value for a message: quoted, control characters escaped, cut when long."""
    try:
        text = repr(value)
    except (RecursionError, ValueError):
        # Nested beyond what can be written out, or a whole number of thousands of digits.
        return f"a {type(value).__name__} too large to show"
    return text if len(text) <= SHOWN_LENGTH else text[:SHOWN_LENGTH] + "..."


def suggestion(word: str, known: Iterable[str]) -> str:
    """Return ' (did you mean ...?)' for the nearest known word, or nothing."""
    by_lower = {name.lower(): name for name in known}
    near = difflib.get_close_matches(word.lower(), list(by_lower), n=1, cutoff=0.6)
    return f" (did you mean '{by_lower[near[0]]}'?)" if near else ""


def as_text(place: str, value: Any) -> str:
    """Return a text; a date or a whole number is written out."""
    if isinstance(value, str):
        if "\0" in value:
            raise SweepFileError(f"{place}: must hold no NUL character, got {shown(value)}")
        return value
    if isinstance(value, (datetime.date, datetime.time)):
        return value.isoformat()
    is_whole = isinstance(value, int) and not isinstance(value, bool)
    if is_whole and abs(value) <= LARGEST_WHOLE:
        return str(value)
    raise SweepFileError(f"{place}: must be a text in quotes or a date, got {shown(value)}")


def as_number(place: str, value: Any) -> float:
    """Return a finite number."""
    if isinstance(value, bool) or not isinstance(value, (int, float)):
        raise SweepFileError(f"{place}: must be a number{_number_hint(value)}, got {shown(value)}")
    # A whole number has no end in a sweep file; a float has.
    if isinstance(value, int) and abs(value) > LARGEST_WHOLE:
        raise SweepFileError(
            f"{place}: must be a number of at most {LARGEST_WHOLE:g}, got {shown(value)}"
        )
    if not math.isfinite(value):
        raise SweepFileError(f"{place}: must be a finite number, got {value}")
    return float(value)


def _number_hint(value: Any) -> str:
    if not isinstance(value, str):
        return ""
    return " with a decimal point" if "," in value else " without quotes"


def as_positive(place: str, value: Any) -> float:
    """Return a number above 0."""
    number = as_number(place, value)
    if not number > 0:
        raise SweepFileError(f"{place}: must be above 0, got {shown(value)}")
    return number


def as_not_negative(place: str, value: Any) -> float:
    """Return a number of 0 or more."""
    number = as_number(place, value)
    if not number >= 0:
        raise SweepFileError(f"{place}: must be 0 or more, got {shown(value)}")
    return number


def as_degrees(place: str, value: Any) -> float:
    """Return an angle in rad from a number of degrees."""
    return math.radians(as_number(place, value))


def as_eps(place: str, value: Any) -> float:
    """Return a half width of the locked band in turns, above 0 and below 0.5."""
    number = as_positive(place, value)
    if not number < 0.5:
        raise SweepFileError(f"{place}: must be below 0.5 turns, got {shown(value)}")
    return number


def as_style(place: str, value: Any) -> float:
    """Return a half width of what is called in phase, in degrees, above 0 and below 90."""
    number = as_positive(place, value)
    if not number < 90.0:
        raise SweepFileError(f"{place}: must be below 90 degrees, got {shown(value)}")
    return number


def as_whole(place: str, value: Any) -> int:
    """Return a whole number of 0 or more."""
    if isinstance(value, bool) or not isinstance(value, int) or not 0 <= value <= LARGEST_WHOLE:
        raise SweepFileError(f"{place}: must be a whole number of 0 or more, got {shown(value)}")
    return value


def as_channel(place: str, value: Any) -> int | str:
    """Return a channel number from 1, or a channel name."""
    if isinstance(value, str) and value.strip():
        return value
    if isinstance(value, int) and not isinstance(value, bool) and 1 <= value <= LARGEST_WHOLE:
        return value
    raise SweepFileError(
        f"{place}: must be a channel number from 1 or a channel name, got {shown(value)}"
    )


def as_band(place: str, value: Any) -> tuple[float, float]:
    """Return (low, high) in Hz, 0 <= low < high."""
    if not isinstance(value, list) or len(value) != 2:
        raise SweepFileError(f"{place}: must be two numbers [low, high] in Hz, got {shown(value)}")
    low, high = as_not_negative(place, value[0]), as_number(place, value[1])
    if not low < high:
        raise SweepFileError(f"{place}: low must be below high, got {shown(value)}")
    return low, high


def as_order(place: str, value: Any) -> tuple[int, int] | None:
    """Return (n, m) of a locking order "n:m", None for "find"."""
    if value == "find":
        return None
    match = (
        re.fullmatch(r"\s*(\d{1,4})\s*:\s*(\d{1,4})\s*", value) if isinstance(value, str) else None
    )
    n, m = (int(match[1]), int(match[2])) if match else (0, 0)
    if not (1 <= n <= LARGEST_STATED_ORDER and 1 <= m <= LARGEST_STATED_ORDER):
        raise SweepFileError(
            f'{place}: must be "n:m" with n, m from 1 to {LARGEST_STATED_ORDER}, or "find", '
            f"got {shown(value)}"
        )
    if math.gcd(n, m) != 1:
        part = math.gcd(n, m)
        raise SweepFileError(
            f'{place}: must be in lowest terms, "{n // part}:{m // part}", got {shown(value)}'
        )
    return n, m


def as_hold(place: str, value: Any) -> str:
    """Return a minimum time locked as text: seconds, or beats as in "2beats"."""
    text = value.strip() if isinstance(value, str) else f"{as_positive(place, value):g}"
    match = re.fullmatch(r"(\d+(?:\.\d*)?|\.\d+)(?:\s*beats)?", text)
    if not match or not 0 < float(match[1]) < math.inf:
        raise SweepFileError(
            f'{place}: must be seconds above 0 or beats as in "2beats", got {shown(value)}'
        )
    return text


KINDS: dict[str, Callable[[str, Any], Any]] = {
    "text": as_text,
    "number": as_number,
    "positive": as_positive,
    "not negative": as_not_negative,
    "degrees": as_degrees,
    "eps": as_eps,
    "style": as_style,
    "whole": as_whole,
    "channel": as_channel,
    "band": as_band,
    "order": as_order,
    "hold": as_hold,
}


def read_value(place: str, key: Key, value: Any) -> Any:
    """Return one value of a key, checked against its kind and its choices.

    Raises
    ------
    SweepFileError
        If the kind is wrong or the value is not among the choices.
    """
    if key.kind != "choice":
        return KINDS[key.kind](place, value)
    if isinstance(value, (str, int)) and not isinstance(value, bool) and value in key.choices:
        return value
    known = [str(choice) for choice in key.choices]
    raise SweepFileError(
        f"{place}: must be one of {', '.join(known)}, got {shown(value)}"
        f"{suggestion(str(value), known)}"
    )


def read_block(place: str, raw: Any, keys: Mapping[str, Key]) -> dict[str, Any]:
    """Return the values of one block, by the fields they go to.

    Parameters
    ----------
    place : str, file and block, for messages
    raw : the table as TOML gives it
    keys : the keys that the block may hold

    Raises
    ------
    SweepFileError
        If the block is no table, a key is unknown or missing, or a value is refused.
    """
    if not isinstance(raw, dict):
        raise SweepFileError(f"{place}: must be a table of keys, got {shown(raw)}")
    values: dict[str, Any] = {}
    for name, value in raw.items():
        if name not in keys:
            raise SweepFileError(
                f"{place}: unknown key {shown(name)} (value {shown(value)})"
                f"{suggestion(name, keys)}. Known keys: {', '.join(keys)}."
            )
        field = keys[name].target or name
        if field in values:
            raise SweepFileError(f"{place} {name}: says the same as another key; keep one")
        values[field] = read_value(f"{place} {name}", keys[name], value)
    missing = [name for name, key in keys.items() if key.needed and name not in values]
    if missing:
        raise SweepFileError(f"{place}: key '{missing[0]}' is missing; {keys[missing[0]].help}")
    return values
