"""The one line a reader says when it cannot read, and the checks every reader shares."""

from __future__ import annotations

import math
import os
import stat
from typing import BinaryIO

from rig.errors import CaptureError
from rig.readers.options import ReadOptions

HEAD_BYTES = 8192  # enough for every signature and for a preamble of text


def printable(text: str, limit: int = 60) -> str:
    """Return text fit for one line: control characters as spaces, cut to a length."""
    kept = _on_one_line(text).strip()
    return kept if len(kept) <= limit else kept[: limit - 3] + "..."


def refusal(path: str, what: str, remedy: str) -> CaptureError:
    """Return the error "FILE: what. Remedy." on one line, ready to be raised."""
    return CaptureError(_on_one_line(f"{path}: {what}. {remedy}."))


def _on_one_line(text: str) -> str:
    """Return text with a blank for each control character."""
    if text.isprintable():
        return text
    return "".join(c if c.isprintable() else " " for c in text)


def shown(head: bytes) -> str:
    """Return the first bytes of a file: quoted when they are text, else as hexadecimal."""
    first = head.split(b"\n")[0][:24].rstrip(b"\r")
    if first and all(32 <= byte < 127 for byte in first):
        return f'"{first.decode("ascii")}"'
    return head[:8].hex(" ")


def size_text(byte_count: int) -> str:
    """Return a byte count as people write it: 399 kB, 32 MB, 4.3 GB."""
    value = float(byte_count)
    for unit in ("bytes", "kB", "MB", "GB"):
        if value < 1000 or unit == "GB":
            return (
                f"{value:.0f} {unit}" if value >= 10 or unit == "bytes" else f"{value:.1f} {unit}"
            )
        value /= 1000
    raise AssertionError("unreachable: the loop ends at GB")


def check_file(path: str) -> int:
    """Return the length of a regular, non-empty file in bytes, or refuse it by its fault."""
    try:
        status = os.stat(path)
    except (OSError, ValueError) as fault:
        reason = getattr(fault, "strerror", None) or str(fault)
        raise refusal(path, f"cannot be opened ({reason})", "Check the path") from fault
    if not stat.S_ISREG(status.st_mode):
        kind = "a folder" if stat.S_ISDIR(status.st_mode) else "no regular file"
        raise refusal(path, f"is {kind}", "Give a capture file")
    if status.st_size == 0:
        raise refusal(path, "is empty (0 bytes)", "Record or copy it again")
    return status.st_size


def open_binary(path: str) -> BinaryIO:
    """Return the file opened for reading bytes, unbuffered by text; refuse if not allowed."""
    try:
        return open(path, "rb")
    except OSError as fault:
        raise refusal(path, f"cannot be opened ({fault.strerror})", "Check the path") from fault


def read_head(path: str) -> bytes:
    """Return the first bytes of a file."""
    with open_binary(path) as file:
        return file.read(HEAD_BYTES)


def settle_rate(
    path: str, stated_hz: float | None, options: ReadOptions, where: str
) -> tuple[float, tuple[str, ...]]:
    """Return the rate to use and the note it deserves.

    Parameters
    ----------
    stated_hz : float or None, the rate the file states, in hertz
    where : str, where in the file it is stated ("header", "attribute 'fs'")

    Raises
    ------
    CaptureError
        If neither the file nor the options state a usable rate.
    """
    given_hz = options.rate_hz
    if given_hz is not None:
        if stated_hz is None or stated_hz == given_hz:
            return given_hz, ()
        return given_hz, (f"{where} says {stated_hz:.10g} Hz; overridden by {given_hz:.10g} Hz",)
    if stated_hz is None:
        raise refusal(path, f"states no sample rate ({where})", "Pass --rate HZ")
    if not (stated_hz > 0 and math.isfinite(stated_hz)):
        raise refusal(path, f"sample rate {stated_hz:.10g} Hz ({where})", "Pass --rate HZ")
    return stated_hz, ()


def refuse_empty(path: str, frame_count: int, channel_count: int) -> None:
    """Refuse a file without channels or without samples in the reader's own words."""
    if channel_count <= 0:
        raise refusal(path, "header gives 0 channels", "Record or export it again")
    if frame_count <= 0:
        raise refusal(path, "holds no samples", "Record or export it again")
