"""Progress of a run: a bar on a terminal, plain lines in a log, or nothing."""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import TextIO

from reports.options import UsageError

Progress = Callable[[int, int, str], None]
PLAIN_INTERVAL_S = 5.0  # a log line every few seconds says it lives without filling the log
_BAR_CELLS = 30
KINDS = ("auto", "bar", "plain", "none")


def make_progress(kind: str, stream: TextIO) -> Progress:
    """Return a function of (done, total, text) that shows progress on a stream.

    Parameters
    ----------
    kind : "auto" (a bar on a terminal, else plain lines), "bar", "plain" or "none"
    stream : text stream, normally standard error

    Raises
    ------
    UsageError
        If the kind is not one of these.
    """
    if kind not in KINDS:
        raise UsageError(f"--progress: needs one of {', '.join(KINDS)}; got '{kind}'")
    if kind == "auto":
        kind = "bar" if stream.isatty() else "plain"
    return {"bar": _bar, "plain": _plain, "none": _none}[kind](stream)


def _none(stream: TextIO) -> Progress:
    """Show nothing."""

    def show(done: int, total: int, text: str) -> None:
        del done, total, text

    return show


def _plain(stream: TextIO) -> Progress:
    """Show one line per interval, and the last one."""
    last = [float("-inf")]

    def show(done: int, total: int, text: str) -> None:
        now = time.monotonic()
        if now - last[0] >= PLAIN_INTERVAL_S or done == total:
            last[0] = now
            stream.write(f"{text}: {done} of {total}\n")
            stream.flush()

    return show


def _bar(stream: TextIO) -> Progress:
    """Redraw one line; ASCII only, so that every terminal can show it."""

    def show(done: int, total: int, text: str) -> None:
        filled = _BAR_CELLS * done // max(total, 1)
        cells = "=" * filled + " " * (_BAR_CELLS - filled)
        stream.write(f"\r{text:<24} [{cells}] {done}/{total}" + ("\n" if done == total else ""))
        stream.flush()

    return show
