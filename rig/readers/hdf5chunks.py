"""Rows of an HDF5 dataset, with the chunks of the file held against what they should be.

The library trusts a chunk to unpack to its full size and hands out foreign memory where it
does not. So each chunk is measured before it is used: plain ones by their stored size, those
packed by deflate (and shuffle) by unpacking them here. Other packings are left to the library.
"""

from __future__ import annotations

import math
import zlib
from collections.abc import Iterator
from dataclasses import dataclass
from itertools import product
from typing import Any

import numpy as np
from numpy.typing import NDArray

DEFLATE, SHUFFLE = 1, 2  # numbers of the filters in the standard
MARKED_MAX = 2**27  # more chunks than this are counted one by one, not marked in a row of bytes
COUNTED_MAX = 5_000_000

Offset = tuple[int, ...]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ChunkIndex:
    """The chunks of a dataset that were written, by their number in the order of the shape.

    ``declared`` counts what the shape asks for, ``written`` what is there. ``plain_type`` is
    true when stored bytes are the numbers of a numpy type as they stand.
    """

    declared: int
    written: int
    present: bytearray | set[int]
    filters: tuple[int, ...]
    plain_type: bool

    @property
    def unpacked_here(self) -> bool:
        """True when the chunks are packed, and every packing in use is known here."""
        return bool(self.filters) and set(self.filters) <= {DEFLATE, SHUFFLE}

    def has(self, number: int) -> bool:
        """Tell whether a chunk was written."""
        if isinstance(self.present, set):
            return number in self.present
        return bool(self.present[number])


def counts_of(item: Any) -> tuple[int, ...]:
    """Return the number of chunks along each axis."""
    return tuple(-(-size // step) for size, step in zip(item.shape, item.chunks, strict=True))


def chunk_bytes(item: Any) -> int:
    """Return the bytes of a chunk when unpacked."""
    return int(math.prod(item.chunks) * item.dtype.itemsize)


def chunk_index(item: Any) -> ChunkIndex | None:
    """Return the chunks of a dataset, looked through once; None where it is not chunked.

    Raises
    ------
    ValueError
        If the index of chunks is damaged, or a chunk that is not packed has an odd size.
    """
    if item.chunks is None or not hasattr(item.id, "chunk_iter"):
        return None
    settings = item.id.get_create_plist()
    filters = tuple(settings.get_filter(k)[0] for k in range(settings.get_nfilters()))
    walk = _Walk(item=item, filters=filters, counts=counts_of(item))
    item.id.chunk_iter(walk.take)
    if walk.fault:
        raise ValueError(walk.fault)
    return ChunkIndex(
        declared=math.prod(walk.counts),
        written=walk.written,
        present=walk.present,
        filters=filters,
        plain_type=_is_plain(item),
    )


class _Walk:
    """What the walk over the stored chunks has met; it stops at the first fault."""

    def __init__(self, *, item: Any, filters: tuple[int, ...], counts: tuple[int, ...]) -> None:
        declared = math.prod(counts)
        self.present: bytearray | set[int] = set()
        if declared <= MARKED_MAX:
            self.present = bytearray(declared)
        self.counts, self.written, self.fault = counts, 0, ""
        self._steps, self._size, self._all = item.chunks, chunk_bytes(item), (1 << len(filters)) - 1
        self._length = item.file.id.get_filesize()

    def take(self, info: Any) -> bool | None:
        """Check one chunk and mark it; True ends the walk."""
        number, packed = 0, bool(~info.filter_mask & self._all)
        for place, step, count in zip(info.chunk_offset, self._steps, self.counts, strict=True):
            part, rest = divmod(place, step)
            if rest or part >= count:
                self.fault = f"index of chunks is damaged at {info.chunk_offset}"
                return True
            number = number * count + part
        if info.size != self._size and (info.size == 0 or not packed):
            self.fault = _odd_size(info.chunk_offset, info.size, self._size)
        elif info.byte_offset is None or info.byte_offset + info.size > self._length:
            # The library sets its memory aside before it finds the end of the file.
            self.fault = f"chunk at {info.chunk_offset} ends behind the file"
        elif not self._mark(number):
            self.fault = f"index of chunks is damaged at {info.chunk_offset}"
        return True if self.fault else None

    def _mark(self, number: int) -> bool:
        """Mark a chunk as written; False if it was already, or if there are too many."""
        self.written += 1
        if isinstance(self.present, set):
            fresh = number not in self.present and self.written <= COUNTED_MAX
            self.present.add(number)
            return fresh
        fresh = not self.present[number]
        self.present[number] = 1
        return fresh


@dataclass(frozen=True, slots=True, kw_only=True)
class StoredRows:
    """Reads rows along one axis of a dataset of one or two axes."""

    item: Any
    index: ChunkIndex | None
    axis: int = 0

    def read(self, start: int, stop: int) -> NDArray[Any]:
        """Return rows from start up to stop, all columns.

        Raises
        ------
        ValueError, OSError
            If a chunk is damaged.
        """
        part = (slice(None),) * self.axis + (slice(start, stop),) if self.item.shape else ()
        index = self.index
        if index is None or not index.unpacked_here:
            return np.asarray(self.item[part])
        shape = list(self.item.shape)
        shape[self.axis] = stop - start
        values = np.full(shape, self.item.fillvalue, dtype=self.item.dtype)
        for offset in self._touched(index, start, stop):
            chunk = self._unpacked(index, offset)
            if index.plain_type:
                _place(values, chunk, offset, self.axis, start)
        return values if index.plain_type else np.asarray(self.item[part])

    def _touched(self, index: ChunkIndex, start: int, stop: int) -> Iterator[Offset]:
        """Yield the places of the stored chunks that hold some of the rows."""
        steps, counts = self.item.chunks, counts_of(self.item)
        ranges = [range(count) for count in counts]
        step = steps[self.axis]
        ranges[self.axis] = range(start // step, -(-stop // step))
        for parts in product(*ranges):
            number = 0
            for part, count in zip(parts, counts, strict=True):
                number = number * count + part
            if index.has(number):
                yield tuple(part * step for part, step in zip(parts, steps, strict=True))

    def _unpacked(self, index: ChunkIndex, offset: Offset) -> NDArray[Any]:
        mask, data = self.item.id.read_direct_chunk(offset)
        size = chunk_bytes(self.item)
        for place in reversed(range(len(index.filters))):
            if mask >> place & 1:
                continue  # left out for this chunk by its writer
            if index.filters[place] == DEFLATE:
                data = _inflated(data, size)
            else:
                data = _unshuffled(data, int(self.item.dtype.itemsize))
        if len(data) != size:
            raise ValueError(_odd_size(offset, len(data), size))
        return np.frombuffer(data, dtype=self.item.dtype).reshape(self.item.chunks)


def _odd_size(offset: Offset, held: int, declared: int) -> str:
    return f"chunk at {offset} holds {held} of {declared} bytes"


def _is_plain(item: Any) -> bool:
    """Tell whether stored bytes are the numbers of a numpy type as they stand."""
    from h5py import h5t

    kind = item.dtype.kind
    return kind in "iuf" and bool(item.id.get_type().equal(h5t.py_create(item.dtype)))


def _inflated(data: bytes, limit: int) -> bytes:
    unpacker = zlib.decompressobj()
    try:
        return unpacker.decompress(data, limit + 1)
    except zlib.error as fault:
        raise ValueError(f"a chunk cannot be unpacked ({fault})") from fault


def _unshuffled(data: bytes, width: int) -> bytes:
    whole = len(data) // width * width
    planes = np.frombuffer(data, dtype=np.uint8, count=whole).reshape(width, -1)
    return planes.T.tobytes() + data[whole:]


def _place(
    values: NDArray[Any], chunk: NDArray[Any], offset: Offset, axis: int, start: int
) -> None:
    """Copy a chunk to its place among the rows from ``start`` on, cut at their edges."""
    into, out = [], []
    for place, (begin, step, size) in enumerate(
        zip(offset, chunk.shape, values.shape, strict=True)
    ):
        first = begin - (start if place == axis else 0)
        low, high = max(first, 0), min(first + step, size)
        into.append(slice(low, high))
        out.append(slice(low - first, high - first))
    values[tuple(into)] = chunk[tuple(out)]
