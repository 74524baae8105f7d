"""Options of the command line gathered into what the runs take; nothing heavy at the top."""

from __future__ import annotations

import os
import sys
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

from reports.options import UsageError, positive

if TYPE_CHECKING:
    from reports.runs import RunOptions


def emit(text: str) -> None:
    """Write a result to standard output at once, ended by a line end."""
    sys.stdout.write(text if text.endswith("\n") else f"{text}\n")
    sys.stdout.flush()


def say(text: str) -> None:
    """Write what is no result to standard error."""
    sys.stderr.write(f"{text}\n")
    sys.stderr.flush()


def write_json(value: Any, target: str) -> None:
    """Write JSON to a file, whole or not at all, or to standard output for '-'."""
    from reports.store import json_text, write_atomic

    text = json_text(value, indent=1)
    if target == "-":
        emit(text)
    else:
        write_atomic(Path(target), text.encode("utf-8"))


def given_words(**words: Any) -> dict[str, Any]:
    """Return the options that were given; what is missing is left to the sweep file."""
    return {name: value for name, value in words.items() if value is not None}


def read_words(**words: Any) -> dict[str, Any]:
    """Return the reading options as the readers name them, checked."""
    positive("--rate", words["rate_hz"])
    if words["decimal"] not in (None, ".", ","):
        raise UsageError(f"--decimal: needs '.' or ',', got '{words['decimal']}'")
    words["delimiter"] = {"tab": "\t", "space": " "}.get(words["delimiter"], words["delimiter"])
    if words["delimiter"] is not None and len(words["delimiter"]) != 1:
        raise UsageError(f"--delimiter: needs one character, got '{words['delimiter']}'")
    if words["transformer_side"] not in (None, "primary", "secondary"):
        raise UsageError(
            f"--transformer-side: needs primary or secondary, got '{words['transformer_side']}'"
        )
    return words


def run_options(
    workers: int | None, cluster: str | None, date: str | None, seed: int, fresh: bool
) -> RunOptions:
    """Return the options of a run, with the date settled."""
    from reports.provenance import date_text
    from reports.runs import RunOptions

    return RunOptions(
        workers=workers,
        cluster=cluster,
        date_text=date_text(date, os.environ),
        seed=seed,
        fresh=fresh,
    )


def chosen_progress(kind: str, quiet: bool) -> Callable[[int, int, str], None]:
    """Return the function that shows progress on standard error."""
    from reports.progress import make_progress

    return make_progress("none" if quiet else kind, sys.stderr)
