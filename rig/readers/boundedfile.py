"""A file for a library that believes what a damaged file says of its own lengths.

The HDF5 library sets aside and fills whatever a size field declares, up to gigabytes, and
reads zeros where the file has ended. Behind this object a read past the end is an error before
anything is filled. The library also walks a heap of texts (attributes such as units) by the
sizes in it, and walks for ever where one is zero; so a heap is walked here before it is handed
over. No locks are asked for: file systems on a network refuse them.
"""

from __future__ import annotations

import io
from typing import Any

from rig.readers.refusals import open_binary

HEAP = b"GCOL\x01\0\0\0"  # signature and version of a heap of texts, as the standard has them
HEAP_HEAD_BYTES = 16  # of a heap, and of each object in it
LOOKED_AT_BYTES = 2**20  # longer reads are samples: the library reads its own records in pieces


class BoundedFile(io.RawIOBase):
    """The bytes of a file; a read that would pass its end raises OSError.

    ``damage`` says what was found wrong, for callers that are used to errors of the library.
    """

    def __init__(self, path: str) -> None:
        super().__init__()
        self.damage = ""
        self._file = open_binary(path)
        self._length = self._file.seek(0, io.SEEK_END)
        self._file.seek(0)

    def readable(self) -> bool:
        """Return True: it can be read."""
        return True

    def seekable(self) -> bool:
        """Return True: any place can be read next."""
        return True

    def tell(self) -> int:
        """Return the place that is read next."""
        return self._file.tell()

    def seek(self, offset: int, whence: int = io.SEEK_SET) -> int:
        """Move to a place and return it."""
        return self._file.seek(offset, whence)

    def readinto(self, buffer: Any) -> int:
        """Fill the buffer and return its length.

        Raises
        ------
        OSError
            If the file has fewer bytes than that from here on.
        """
        view = memoryview(buffer).cast("B")
        place = self._file.tell()
        if place + len(view) > self._length:
            raise OSError(f"{len(view)} bytes declared at byte {place}, file ends")
        if len(view) <= LOOKED_AT_BYTES:
            self._check_heaps(place, len(view))
        got: int = self._file.readinto(view)  # type: ignore[attr-defined]
        if got != len(view):
            raise OSError("file became shorter while it was read")
        return got

    def _check_heaps(self, place: int, size: int) -> None:
        """Walk the heaps that begin in a stretch of the file, or just before it."""
        start = max(place - len(HEAP), 0)
        self._file.seek(start)
        data = self._file.read(place + size + len(HEAP) - start)
        found = data.find(HEAP)
        while found >= 0:
            self._walk_heap(start + found)
            found = data.find(HEAP, found + 1)
        self._file.seek(place)

    def _walk_heap(self, start: int) -> None:
        """Raise OSError if the objects of a heap do not follow each other to its end."""
        self._file.seek(start + len(HEAP))
        size = int.from_bytes(self._file.read(8), "little")
        stop = min(start + size, self._length)
        place = start + HEAP_HEAD_BYTES
        while place + HEAP_HEAD_BYTES <= stop:
            self._file.seek(place)
            head = self._file.read(HEAP_HEAD_BYTES)
            held = int.from_bytes(head[8:16], "little")
            # Number 0 is the free rest, whose size counts its head; others count without it.
            used = held if head[:2] == b"\0\0" else HEAP_HEAD_BYTES + (held + 7) // 8 * 8
            if not HEAP_HEAD_BYTES <= used <= stop - place:
                self.damage = f"heap of texts at byte {start} is damaged at byte {place}"
                raise OSError(self.damage)
            place += used

    def close(self) -> None:
        """Close the file."""
        self._file.close()
        super().close()
