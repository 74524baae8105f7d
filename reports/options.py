"""Words of the command line turned into numbers, each refused with its rule and value."""

from __future__ import annotations

import math

from rig.errors import LockspanError
from rig.ordersize import LARGEST_STATED_ORDER


class UsageError(LockspanError):
    """A word on the command line breaks a rule: exit code 2, not 3."""


def parse_order(text: str) -> tuple[int, int] | None:
    """Return (n, m) of "n:m", or None for "find".

    Raises
    ------
    UsageError
        If it is neither.
    """
    if text.strip().lower() == "find":
        return None
    parts = text.split(":")
    if len(parts) == 2 and all(part.strip().isascii() and part.strip().isdigit() for part in parts):
        n, m = int(parts[0]), int(parts[1])
        if 1 <= n <= LARGEST_STATED_ORDER and 1 <= m <= LARGEST_STATED_ORDER:
            return n, m
    raise UsageError(
        f"--order: needs n:m with whole numbers from 1 to {LARGEST_STATED_ORDER}, or 'find'; "
        f"got '{text}'"
    )


def parse_band(text: str) -> tuple[float, float]:
    """Return (low, high) in Hz of "LO:HI".

    Raises
    ------
    UsageError
        If it is not two numbers with 0 <= LO < HI.
    """
    parts = text.split(":")
    if len(parts) == 2:
        low, high = (_number(part) for part in parts)
        if low is not None and high is not None and 0 <= low < high:
            return low, high
    raise UsageError(f"--band: needs LO:HI in Hz with 0 <= LO < HI, got '{text}'")


def parse_bands(texts: list[str]) -> tuple[tuple[float, float] | None, tuple[float, float] | None]:
    """Return the bands of (reference, driven); one band given serves both.

    Raises
    ------
    UsageError
        If more than two bands are given or one is malformed.
    """
    bands = [parse_band(text) for text in texts]
    if not bands:
        return None, None
    if len(bands) > 2:
        raise UsageError(f"--band: at most two (reference, then driven), got {len(bands)}")
    return bands[0], bands[-1]


def positive(name: str, value: float | None) -> float | None:
    """Return a number that must be above 0, or None when it was not given.

    Raises
    ------
    UsageError
        If it is not above 0.
    """
    if value is not None and not (value > 0 and math.isfinite(value)):
        raise UsageError(f"{name}: must be above 0, got {value:g}")
    return value


def _number(text: str) -> float | None:
    try:
        value = float(text)
    except ValueError:
        return None
    return value if math.isfinite(value) else None


def order_word(text: str | None) -> dict[str, tuple[int, int] | str]:
    """Return {"order": (n, m)} or {"order": "find"}; nothing where no order was given.

    Raises
    ------
    UsageError
        If it is no order.
    """
    return {} if text is None else {"order": parse_order(text) or "find"}


def clock_words(
    driven_file: str | None,
    error_ppm: float | None,
    error_u_ppm: float | None,
    shared: str | None,
    start_shift_s: float | None,
) -> dict[str, str | float | None]:
    """Return what was said of a second recorder, checked together.

    Raises
    ------
    UsageError
        If something is said of a second recorder and there is none, or two ties are given.
    """
    words = {
        "clock_error_ppm": error_ppm,
        "clock_error_u_ppm": error_u_ppm,
        "shared": shared,
        "start_shift_s": start_shift_s,
    }
    said = [name for name, value in words.items() if value is not None]
    if said and driven_file is None:
        option = said[0].removesuffix("_s").replace("_", "-")
        raise UsageError(f"--{option}: says something of a second recorder; give --driven-file")
    if shared is not None and error_ppm is not None:
        raise UsageError("--shared and --clock-error-ppm both tie the clocks; give one of them")
    if error_u_ppm is not None and (error_ppm is None or not error_u_ppm >= 0):
        raise UsageError(
            f"--clock-error-u-ppm: needs --clock-error-ppm and a value from 0, got {error_u_ppm:g}"
        )
    return {"driven_file": driven_file, **words}
