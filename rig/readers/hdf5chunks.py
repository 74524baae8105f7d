"""Rows of an HDF5 dataset, with the chunks of the file held against what they should be.

The library trusts a chunk to unpack to its full size and hands out foreign memory where it
does not. So each chunk is measured before it is used: plain ones by their stored size, those
packed by deflate (and shuffle) by unpacking them here. Other packings are left to the library.
"""

from __future__ import annotations

import math
import zlib
from collections.abc import Iterator
from dataclasses import dataclass, field
from itertools import product
from typing import Any

import numpy as np
from numpy.typing import NDArray

DEFLATE, SHUFFLE = 1, 2  # numbers of the filters in the standard
CHUNKS_MAX = 50_000_000  # an index of more is damaged and may run in a circle

Offset = tuple[int, ...]


@dataclass(slots=True, kw_only=True)
class StoredRows:
    """Reads rows along one axis of a dataset of one or two axes.

    ``sizes`` holds the stored bytes of each chunk by the place of its first value; empty where
    the dataset is not chunked.
    """

    item: Any
    axis: int = 0
    sizes: dict[Offset, int] = field(default_factory=dict)
    filters: tuple[int, ...] = ()
    plain_type: bool = False

    @property
    def declared_count(self) -> int:
        """Number of chunks the shape asks for."""
        pairs = zip(self.item.shape, self.item.chunks, strict=True)
        return math.prod(-(-size // chunk) for size, chunk in pairs)

    @property
    def chunk_bytes(self) -> int:
        """Bytes of a chunk when unpacked."""
        return int(math.prod(self.item.chunks) * self.item.dtype.itemsize)

    @property
    def unpacked_here(self) -> bool:
        """True when every packing in use is known here."""
        return bool(self.filters) and set(self.filters) <= {DEFLATE, SHUFFLE}

    def read(self, start: int, stop: int) -> NDArray[Any]:
        """Return rows from start up to stop, all columns.

        Raises
        ------
        ValueError, OSError
            If a chunk is damaged.
        """
        part = (slice(None),) * self.axis + (slice(start, stop),) if self.item.shape else ()
        if not self.unpacked_here:
            return np.asarray(self.item[part])
        shape = list(self.item.shape)
        shape[self.axis] = stop - start
        values = np.full(shape, self.item.fillvalue, dtype=self.item.dtype)
        for offset in self._touched(start, stop):
            chunk = self._unpacked(offset)
            if self.plain_type:
                _place(values, chunk, offset, self.axis, start)
        return values if self.plain_type else np.asarray(self.item[part])

    def _touched(self, start: int, stop: int) -> Iterator[Offset]:
        """Yield the places of the stored chunks that hold some of the rows."""
        ranges = [
            range(0, size, step)
            for size, step in zip(self.item.shape, self.item.chunks, strict=True)
        ]
        step = self.item.chunks[self.axis]
        ranges[self.axis] = range(start // step * step, stop, step)
        return (offset for offset in product(*ranges) if offset in self.sizes)

    def _unpacked(self, offset: Offset) -> NDArray[Any]:
        mask, data = self.item.id.read_direct_chunk(offset)
        for place in reversed(range(len(self.filters))):
            if mask >> place & 1:
                continue  # left out for this chunk by its writer
            if self.filters[place] == DEFLATE:
                data = _inflated(data, self.chunk_bytes)
            else:
                data = _unshuffled(data, int(self.item.dtype.itemsize))
        if len(data) != self.chunk_bytes:
            raise _odd_size(offset, len(data), self.chunk_bytes)
        return np.frombuffer(data, dtype=self.item.dtype).reshape(self.item.chunks)


def stored_rows(item: Any, axis: int = 0) -> StoredRows:
    """Return the reader of a dataset's rows; its chunks have been looked through.

    Raises
    ------
    ValueError
        If the index of chunks is damaged, or an unpacked chunk has an odd size.
    """
    if item.chunks is None or not hasattr(item.id, "chunk_iter"):
        return StoredRows(item=item, axis=axis)
    settings = item.id.get_create_plist()
    filters = tuple(settings.get_filter(k)[0] for k in range(settings.get_nfilters()))
    rows = StoredRows(item=item, axis=axis, filters=filters, plain_type=_is_plain(item))
    found: list[tuple[Offset, int, int]] = []

    def take(info: Any) -> bool | None:
        found.append((info.chunk_offset, info.size, info.filter_mask))
        return True if len(found) > CHUNKS_MAX else None

    item.id.chunk_iter(take)
    steps, shape = item.chunks, item.shape
    for offset, size, mask in found:
        fits = all(o % c == 0 and o < s for o, c, s in zip(offset, steps, shape, strict=True))
        if offset in rows.sizes or not fits:
            raise ValueError(f"index of chunks is damaged at {offset}")
        packed = any(not mask >> place & 1 for place in range(len(filters)))
        if size != rows.chunk_bytes and (size == 0 or not packed):
            raise _odd_size(offset, size, rows.chunk_bytes)
        rows.sizes[offset] = size
    return rows


def _odd_size(offset: Offset, held: int, declared: int) -> ValueError:
    return ValueError(f"chunk at {offset} holds {held} of {declared} bytes")


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
