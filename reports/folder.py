"""The folder of a sweep: what is stored where, and how it is read back.

run.json      the plan, options and free-running results of the last run
points/       one JSON a capture, written as it finishes; a later run reads it back
results.json, points.csv, junit.xml, report.html, report.pdf    what people and scripts read
"""

from __future__ import annotations

import json
import os
import re
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from reports.store import json_text, write_atomic
from rig.errors import LockspanError

RUN_FILE = "run.json"
POINTS_FOLDER = "points"
OUTPUT_FILES = ("results.json", "points.csv", "junit.xml", "report.html", "report.pdf")
_KEY_LETTERS = 16  # 64 bits of the digest: no two captures of a campaign share them
_NAME_LETTERS = 60


class FolderError(LockspanError):
    """The folder does not hold what a finished or interrupted sweep leaves."""


def prepare_folder(folder: Path) -> None:
    """Make the folder of a sweep, or refuse one that holds something else.

    Raises
    ------
    FolderError
        If the path is a file, or a folder with content that no sweep has left.
    """
    if folder.exists() and not folder.is_dir():
        raise FolderError(f"{folder}: is a file; --out needs a folder")
    if folder.is_dir():
        strangers = sorted(item.name for item in folder.iterdir() if not _ours(item))
        if strangers and not (folder / RUN_FILE).exists():
            raise FolderError(
                f"{folder}: holds '{strangers[0]}' and no stored sweep; choose an empty folder"
            )
    (folder / POINTS_FOLDER).mkdir(parents=True, exist_ok=True)


def _ours(item: Path) -> bool:
    return item.name in (RUN_FILE, POINTS_FOLDER, *OUTPUT_FILES) or item.suffix == ".tmp"


def path_from(folder: Path, path: Path) -> str:
    """Return a path as seen from a folder, so that both can be moved or copied together.

    Where there is no way from one to the other (two drives), the absolute path is returned.
    """
    try:
        return Path(os.path.relpath(path.resolve(), folder.resolve())).as_posix()
    except ValueError:
        return str(path.resolve())


def point_file(folder: Path, shown: str, key: str) -> Path:
    """Return where the result of one capture is stored."""
    stem = re.sub(r"[^A-Za-z0-9._-]+", "_", Path(shown).stem)[:_NAME_LETTERS] or "capture"
    return folder / POINTS_FOLDER / f"{stem}-{key[:_KEY_LETTERS]}.json"


def read_point(path: Path, key: str) -> Mapping[str, Any] | None:
    """Return a stored result with this key, or None if there is none to be used.

    A file that cannot be read back (cut off by a full disk, say) is measured again: the
    result of a capture is never worth more than the capture.
    """
    try:
        stored = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError, RecursionError):
        return None
    if not isinstance(stored, dict) or stored.get("key") != key:
        return None
    return stored


def write_point(path: Path, key: str, outcome: Mapping[str, Any]) -> None:
    """Store the result of one capture, whole or not at all."""
    write_atomic(path, json_text({"key": key, **outcome}).encode("utf-8"))


def read_run(folder: Path) -> dict[str, Any]:
    """Return what run.json of a folder holds.

    Raises
    ------
    FolderError
        If there is none, or it is not JSON.
    """
    path = folder / RUN_FILE
    try:
        stored = json.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError as error:
        raise FolderError(f"{folder}: no {RUN_FILE}; not the folder of a sweep") from error
    except (OSError, ValueError, RecursionError) as error:
        raise FolderError(f"{path}: cannot be read ({error}); run the sweep again") from error
    if not isinstance(stored, dict):
        raise FolderError(f"{path}: holds no table; run the sweep again")
    return stored


def write_run(folder: Path, value: Mapping[str, Any]) -> None:
    """Store run.json."""
    write_atomic(folder / RUN_FILE, json_text(value, indent=1).encode("utf-8"))
