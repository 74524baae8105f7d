"""How a run came about: digests of its inputs, versions, and the date that is printed."""

from __future__ import annotations

import datetime
import errno
import hashlib
import os
from collections.abc import Mapping
from pathlib import Path

from reports.options import UsageError

PACKAGES = ("numpy", "scipy", "soundfile", "lmfit", "matplotlib")
_PIECE_BYTES = 1 << 20


def program_version() -> str:
    """Return the version of the installed distribution."""
    import importlib.metadata

    return importlib.metadata.version("lockspan")


def package_versions() -> tuple[tuple[str, str], ...]:
    """Return (name, version) of the packages that take part in the numbers."""
    import importlib.metadata

    return tuple((name, importlib.metadata.version(name)) for name in PACKAGES)


def file_digest(path: Path) -> str:
    """Return the SHA-256 of a file, read in pieces.

    Raises
    ------
    OSError
        If the file cannot be read, or is a pipe or a device, which may never end.
    """
    digest = hashlib.sha256()
    if path.exists() and not (path.is_file() or path.is_dir()):
        raise OSError(errno.EINVAL, "no regular file; give a capture file", str(path))
    with open(path, "rb") as stream:
        while piece := stream.read(_PIECE_BYTES):
            digest.update(piece)
    return digest.hexdigest()


def text_digest(*texts: str) -> str:
    """Return the SHA-256 of some texts, each closed by a NUL so that they cannot run together."""
    digest = hashlib.sha256()
    for text in texts:
        digest.update(text.encode("utf-8", "surrogateescape") + b"\0")
    return digest.hexdigest()


def date_text(given: str | None, environment: Mapping[str, str]) -> str:
    """Return the date a report prints: the one given, SOURCE_DATE_EPOCH, or today's.

    Raises
    ------
    UsageError
        If the given date is not YYYY-MM-DD or the epoch is not a whole number of seconds.
    """
    if given is not None:
        try:
            return datetime.date.fromisoformat(given).isoformat()
        except ValueError as error:
            raise UsageError(f"--date: needs YYYY-MM-DD, got '{given}'") from error
    epoch = environment.get("SOURCE_DATE_EPOCH")
    if epoch is None:
        return datetime.date.today().isoformat()
    if not (epoch.isascii() and epoch.isdigit()):
        raise UsageError(f"SOURCE_DATE_EPOCH: needs whole seconds, got '{epoch}'")
    moment = datetime.datetime.fromtimestamp(int(epoch), tz=datetime.UTC)
    return moment.date().isoformat()


def display_path(path: Path, folder: Path) -> str:
    """Return a path as a report shows it: relative to a folder where it lies below it."""
    try:
        return path.resolve().relative_to(folder.resolve()).as_posix()
    except ValueError:
        return os.fspath(path)
