"""A file for a library that believes what a damaged file says of its own lengths.

The HDF5 library sets aside and fills whatever a size field declares, up to gigabytes, and
reads zeros where the file has ended. Behind this object a read past the end is an error before
anything is filled. No locks are asked for: file systems on a network refuse them.
"""

from __future__ import annotations

import io
from typing import Any

from rig.readers.refusals import open_binary


class BoundedFile(io.RawIOBase):
    """The bytes of a file; a read that would pass its end raises OSError."""

    def __init__(self, path: str) -> None:
        super().__init__()
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
        if self._file.tell() + len(view) > self._length:
            raise OSError(f"{len(view)} bytes declared at byte {self._file.tell()}, file ends")
        got: int = self._file.readinto(view)  # type: ignore[attr-defined]
        if got != len(view):
            raise OSError("file became shorter while it was read")
        return got

    def close(self) -> None:
        """Close the file."""
        self._file.close()
        super().close()
