"""Rows of numbers too long to be kept in memory: made or read block by block when asked for.

Up to ``LONG_SAMPLES`` a row is a plain array. A longer one is written to a temporary file
while it is made, and handed out as a ``LongArray``: slices, single places and strides of it
are plain arrays, and arithmetic with it makes the whole. So the numbers of a record of hours
are those of a short one, and its memory is that of one block.
"""

from __future__ import annotations

import os
import threading
import weakref
from collections.abc import Callable, Iterator
from typing import Any, BinaryIO, cast

import numpy as np
from numpy.lib.mixins import NDArrayOperatorsMixin
from numpy.typing import DTypeLike, NDArray

from rig.errors import PhaseError

LONG_SAMPLES = 1_048_576  # numbers a row in memory: 8 MB; some 20 hours of a 1 kHz line at 1/80
LONG_BLOCK = 16_384  # numbers worked through at a time: 128 kB, which the heap keeps

_ONE_AT_A_TIME = threading.Lock()

Read = Callable[[int, int], NDArray[Any]]


class LongArray(NDArrayOperatorsMixin):
    """A read-only row (n,) whose numbers are made by ``read(start, stop)`` when asked for."""

    ndim = 1

    def __init__(self, size: int, dtype: DTypeLike, read: Read) -> None:
        self.size, self.shape = size, (size,)
        self.dtype = np.dtype(dtype)
        self.strides = (self.dtype.itemsize,)
        self._read = read

    def __len__(self) -> int:
        return self.size

    def __getitem__(self, key: Any) -> Any:
        if isinstance(key, slice):
            return self._slice(*key.indices(self.size))
        if isinstance(key, int | np.integer):
            at = range(self.size)[int(key)]
            return self._read(at, at + 1)[0]
        places = np.asarray(key)
        return self._at(np.flatnonzero(places) if places.dtype == bool else places)

    def _slice(self, start: int, stop: int, step: int) -> NDArray[Any]:
        if step == 1 and stop - start <= LONG_BLOCK:
            return self._read(start, max(start, stop))
        if step < 1 or step > LONG_BLOCK // 4:
            return self._at(np.arange(start, stop, step))
        whole = np.empty(len(range(start, stop, step)), dtype=self.dtype)
        block = LONG_BLOCK // step
        for first in range(0, whole.size, block):
            count = min(block, whole.size - first)
            begin = start + first * step
            part = self._read(begin, begin + (count - 1) * step + 1)
            whole[first : first + count] = part[::step]
        return whole

    def _at(self, places: NDArray[Any]) -> NDArray[Any]:
        """Return the numbers at some places, read together where they lie close."""
        wanted = np.where(places < 0, places + self.size, places).ravel()
        if wanted.size and not 0 <= int(wanted.min()) <= int(wanted.max()) < self.size:
            raise IndexError(f"places outside a row of {self.size}")
        found = np.empty(wanted.size, dtype=self.dtype)
        for first in range(0, wanted.size, LONG_BLOCK // 4):
            some = wanted[first : first + LONG_BLOCK // 4]
            if some.size and int(np.ptp(some)) < 4 * LONG_BLOCK:
                low = int(some.min())
                part = self._read(low, int(some.max()) + 1)[some - low]
            else:
                part = np.array([self._read(at, at + 1)[0] for at in some.tolist()])
            found[first : first + some.size] = part
        return found.reshape(places.shape)

    def __array__(self, dtype: DTypeLike | None = None, copy: bool | None = None) -> NDArray[Any]:
        return np.asarray(self[:], dtype=dtype)

    def __array_ufunc__(self, ufunc: Any, method: str, *inputs: Any, **kwargs: Any) -> Any:
        plain = [np.asarray(part) if isinstance(part, LongArray) else part for part in inputs]
        return getattr(ufunc, method)(*plain, **kwargs)


class SampleRow:
    """Numbers in, block by block, up to a count known before; the row of them out."""

    def __init__(self, count: int, dtype: DTypeLike) -> None:
        self.count, self.filled = count, 0
        self._dtype = np.dtype(dtype)
        self._array = np.empty(count, dtype) if count <= LONG_SAMPLES else None
        self._file = None if self._array is not None else _scratch_file()
        if self._file is not None:
            weakref.finalize(self, self._file.close)

    def append(self, values: NDArray[Any]) -> None:
        """Take the next numbers; those beyond the count are dropped."""
        values = values[: self.count - self.filled]
        if self._array is not None:
            self._array[self.filled : self.filled + values.size] = values
        elif values.size:
            _write(cast(BinaryIO, self._file), np.ascontiguousarray(values, dtype=self._dtype))
        self.filled += values.size

    def read(self, start: int, stop: int) -> NDArray[Any]:
        """Return a copy of some numbers."""
        if self._array is not None:
            return self._array[start:stop].copy()
        part = np.empty(stop - start, dtype=self._dtype)
        view, done = part.view(np.uint8).data, 0
        first = start * self._dtype.itemsize
        while done < len(view):
            got = _read_at(cast(BinaryIO, self._file), first + done, view[done:])
            if not got:
                raise PhaseError("temporary file of a long record was cut off; run again")
            done += got
        return part

    def row(self) -> Any:
        """Return the numbers: a plain array, or a long one that reads its file."""
        if self._array is not None:
            return self._array
        return LongArray(self.count, self._dtype, self.read)


def made_row(size: int, dtype: DTypeLike, read: Read) -> Any:
    """Return a row made by ``read``: at once where it is short, when asked for where long.

    Parameters
    ----------
    size : int
    dtype : data type of its numbers
    read : function of (start, stop) that returns those numbers
    """
    if size > LONG_SAMPLES:
        return LongArray(size, dtype, read)
    whole = np.empty(size, dtype=dtype)
    for start, stop in blocks_of(0, size):
        whole[start:stop] = read(start, stop)
    return whole


def blocks_of(first: int, stop: int, block: int = LONG_BLOCK) -> Iterator[tuple[int, int]]:
    """Yield the half-open spans of blocks that make up a span."""
    for start in range(first, stop, block):
        yield start, min(start + block, stop)


def _scratch_file() -> BinaryIO:
    # Loaded where a record is long: most are short, and wait for no file.
    import tempfile

    try:
        return cast(BinaryIO, tempfile.TemporaryFile(buffering=0))
    except OSError as fault:
        raise PhaseError(_full_text(fault)) from fault


def _read_at(file: BinaryIO, place: int, view: memoryview) -> int:
    """Return how many bytes were read from a place of a file into a view.

    The place goes with the call: threads and forked processes share where a file stands, and
    would read each other's numbers.
    """
    if hasattr(os, "preadv"):
        return os.preadv(file.fileno(), [view], place)
    with _ONE_AT_A_TIME:
        file.seek(place)
        return cast(int, file.readinto(view))  # type: ignore[attr-defined]


def _write(file: BinaryIO, values: NDArray[Any]) -> None:
    file.seek(0, os.SEEK_END)
    view, done = values.view(np.uint8).data, 0
    try:
        while done < len(view):
            done += file.write(view[done:])
    except OSError as fault:
        raise PhaseError(_full_text(fault)) from fault


def _full_text(fault: OSError) -> str:
    import tempfile

    try:
        where = f" in '{tempfile.gettempdir()}'"
    except OSError:  # no folder at all: the fault says where was looked
        where = ""
    return (
        f"phases of a long record need a temporary file{where}, got "
        f"'{fault.strerror or fault}'; make room there, or set TMPDIR to a folder with room"
    )
