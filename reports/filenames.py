"""What the name of a capture says: frequencies, levels, direction, running number, free-running.

People write "2V_25.1Hz_up.wav", "run 012 -10dBm", "cell alone.wav", and "25p1Hz" or "25,1Hz"
where a point is not wanted. A number counts only with its unit behind it.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from pathlib import PurePath
from typing import Literal

from rig.sweepfile import LevelKind

_NUMBER = r"(?<![a-z0-9.])(-?\d+(?:[.,p]\d+)?)"
_FREQUENCY = re.compile(_NUMBER + r"[ _]?([munkM]?hz)(?![a-z])", re.IGNORECASE)
# A unit of one letter must touch its number: "run 3 a" is no current.
_LEVEL = re.compile(
    _NUMBER + r"([ _]?(?:dbm|dbv|db|mv|uv|kv|ma|ua|mw|uw|mn|kn)|[vawn])(?![a-z])", re.IGNORECASE
)
_RUN = re.compile(r"(\d+)(?!.*\d)")
_UP = re.compile(r"(?<![a-z])(up|rise|rising|forward|fwd|asc|inc)(?![a-z])")
_DOWN = re.compile(r"(?<![a-z])(down|dn|fall|falling|backward|back|rev|desc|dec)(?![a-z])")
_FREE = re.compile(r"(?<![a-z])(free|alone|solo|uncoupled|freerun|freerunning|unlocked)(?![a-z])")
_HERTZ = {"mhz": 1e6, "khz": 1e3, "hz": 1.0, "uhz": 1e-6, "nhz": 1e-9}
_UNITS = {
    unit.lower(): unit
    for unit in ("dBm", "dBV", "dB", "mV", "uV", "kV", "V", "mA", "uA", "A", "mW", "uW", "W")
} | {"mn": "mN", "kn": "kN", "n": "N"}


@dataclass(frozen=True, slots=True, kw_only=True)
class NameHints:
    """What a name says; None or "none" where it says nothing.

    ``level`` is (number, unit); ``run`` the last number in the name that has no unit.
    """

    frequency_hz: float | None
    level: tuple[float, str] | None
    direction: Literal["up", "down", "none"]
    is_free: bool
    run: int | None


def name_hints(file: str) -> NameHints:
    """Return what the name of a capture says.

    Parameters
    ----------
    file : str, name of the file, with or without folder and suffix
    """
    stem = PurePath(file).stem
    plain = stem.lower().replace("_", " ")
    frequency, level = _FREQUENCY.search(stem), _LEVEL.search(stem)
    rest = _LEVEL.sub(" ", _FREQUENCY.sub(" ", stem))
    run = _RUN.search(rest)
    return NameHints(
        frequency_hz=_hertz(frequency[1], frequency[2]) if frequency else None,
        level=(_number(level[1]), _UNITS[level[2].strip(" _").lower()]) if level else None,
        direction=_direction(plain),
        is_free=bool(_FREE.search(plain)),
        run=int(run[1]) if run else None,
    )


def _number(text: str) -> float:
    return float(re.sub("[,p]", ".", text, flags=re.IGNORECASE))


def _hertz(number: str, unit: str) -> float:
    # A capital M is mega, a small one milli: the one prefix that differs by its case only.
    factor = 1e-3 if unit.startswith("m") else _HERTZ[unit.lower()]
    return _number(number) * factor


def _direction(plain: str) -> Literal["up", "down", "none"]:
    is_up, is_down = bool(_UP.search(plain)), bool(_DOWN.search(plain))
    if is_up == is_down:
        return "none"
    return "up" if is_up else "down"


def is_text(name: str) -> bool:
    """Tell whether a name can be written in a text file; one with stray bytes cannot."""
    return escaped(name) == name


def escaped(name: str) -> str:
    """Return a name with the bytes that are no text written out, as \\udcff for 0xff."""
    return name.encode("utf-8", "backslashreplace").decode("utf-8")


def level_kind(unit: str) -> LevelKind:
    """Return how a level of a unit turns into an amplitude."""
    if unit.lower().startswith("db"):
        return "decibel"
    return "power" if unit.lower().endswith("w") else "amplitude"
