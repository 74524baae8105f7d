"""Parts of a file that are packed: a member of a zip archive, or a run of deflated bytes.

Each opens as a file of its own that is unpacked as it is read; nothing is unpacked whole.
"""

from __future__ import annotations

import io
import sys
import zlib
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any, BinaryIO, cast

from rig.errors import CaptureError
from rig.readers.refusals import open_binary, printable, refusal

_PIECE_BYTES = 2**16


@dataclass(frozen=True, slots=True)
class WholeFile:
    """The file itself."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ZipPart:
    """A member of a zip archive, by name."""

    name: str


@dataclass(frozen=True, slots=True, kw_only=True)
class DeflatedPart:
    """A run of deflated bytes: where it starts and how long it is."""

    offset: int
    size: int


Part = WholeFile | ZipPart | DeflatedPart
WHOLE_FILE = WholeFile()


def part_faults(*more: type[Exception]) -> tuple[type[Exception], ...]:
    """Return what reading packed bytes can raise, and more; zips are asked only when loaded."""
    zips = sys.modules.get("zipfile")
    if zips is not None:
        more = (*more, zips.BadZipFile)
    return (zlib.error, EOFError, NotImplementedError, RuntimeError, *more)


class Inflated(io.RawIOBase):
    """A run of deflated bytes of a file, read as what it unpacks to; seeking back starts anew."""

    def __init__(self, file: BinaryIO, part: DeflatedPart) -> None:
        super().__init__()
        self._file = file
        self._part = part
        self._restart()

    def _restart(self) -> None:
        self._file.seek(self._part.offset)
        self._packed_left = self._part.size
        self._unpacker = zlib.decompressobj()
        self._ahead = b""
        self._place = 0

    def readable(self) -> bool:
        """Return True: it can be read."""
        return True

    def tell(self) -> int:
        """Return the place in the unpacked bytes."""
        return self._place

    def seek(self, offset: int, whence: int = io.SEEK_SET) -> int:
        """Move to a place counted from the start, unpacking what lies between."""
        if whence != io.SEEK_SET:
            raise NotImplementedError("packed bytes have no known end")
        if offset < self._place:
            self._restart()
        while self._place < offset:
            if not self._take(min(offset - self._place, _PIECE_BYTES)):
                break
        return self._place

    def readinto(self, buffer: Any) -> int:
        """Fill the buffer as far as there are bytes and return how many there were."""
        view = memoryview(buffer).cast("B")
        filled = 0
        while filled < len(view):
            data = self._take(min(len(view) - filled, _PIECE_BYTES))
            if not data:
                break
            view[filled : filled + len(data)] = data
            filled += len(data)
        return filled

    def _take(self, size: int) -> bytes:
        while not self._ahead and not self._unpacker.eof:
            packed = self._unpacker.unconsumed_tail
            if not packed:
                packed = self._file.read(min(_PIECE_BYTES, self._packed_left))
                self._packed_left -= len(packed)
            if not packed:
                break
            self._ahead = self._unpacker.decompress(packed, _PIECE_BYTES)
        data, self._ahead = self._ahead[:size], self._ahead[size:]
        self._place += len(data)
        return data


@contextmanager
def open_part(path: str, part: Part) -> Iterator[BinaryIO]:
    """Yield a file, or a packed part of it, opened for reading bytes.

    Raises
    ------
    CaptureError
        If the part is damaged, or packed in a way that cannot be read.
    """
    if isinstance(part, ZipPart):
        yield from _open_zip(path, part)
        return
    with open_binary(path) as file:
        if isinstance(part, WholeFile):
            yield file
        else:
            yield cast(BinaryIO, Inflated(file, part))


def _open_zip(path: str, part: ZipPart) -> Iterator[BinaryIO]:
    import zipfile

    try:
        with zipfile.ZipFile(path) as archive, archive.open(part.name) as member:
            yield cast(BinaryIO, member)
    except CaptureError:
        raise  # from the reading of the part, which has said what is wrong
    except part_faults(KeyError, OSError, ValueError) as fault:
        what = f"part '{printable(part.name)}' of the archive cannot be read "
        remedy = "Re-copy the file or save it again"
        raise refusal(path, f"{what}({printable(str(fault))})", remedy) from fault
