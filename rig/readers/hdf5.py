"""HDF5 datasets and MAT files of version 7.3, which are HDF5 inside.

Rows are read in whole chunks with all their columns, never strided: a single column of a
chunk costs as much as the chunk. The file is held against its own length, and its chunks
against their size: the library believes what a damaged file says of both. The library (extra
``[formats]``) is loaded when such a file is met.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from rig.arrays import SampleBlock
from rig.captures import Capture, CaptureChannel
from rig.errors import CaptureError
from rig.readers.boundedfile import BoundedFile
from rig.readers.datasets import (
    CHANNELS_MAX,
    ArrayBox,
    ArrayEntry,
    ArraySignals,
    as_samples,
    capture_from_box,
    is_exact_in_float32,
)
from rig.readers.hdf5chunks import ChunkIndex, StoredRows, chunk_index
from rig.readers.options import ReadOptions
from rig.readers.rebuffer import rebuffer
from rig.readers.refusals import check_file, printable, refusal, size_text

PART_BYTES = 2**22  # bytes read at once
CHUNK_BYTES_MAX = 2**28  # a chunk is unpacked whole: a larger one breaks the memory ceiling
CACHE_BYTES = 2**25  # the library's default of 1 MB reads a larger chunk again and again
SCALAR_BYTES_MAX = 2**20  # a single number in a larger chunk is no setting
OBJECTS_MAX = 20_000
UNWRITTEN_FACTOR_MAX = 20  # more chunks set aside for each one written outweigh the record
UNWRITTEN_ALWAYS_ALLOWED = 100
FAULTS = (OSError, KeyError, ValueError, TypeError, RuntimeError, OverflowError, MemoryError)


def open_hdf5(path: str, options: ReadOptions) -> Capture:
    """Return the signals of an HDF5 file as a capture.

    Raises
    ------
    CaptureError
        If h5py is missing, the file is damaged, or the choice of datasets is not forced.
    """
    return open_box(path, options, "hdf5", matlab=False)


def open_box(path: str, options: ReadOptions, format_text: str, *, matlab: bool) -> Capture:
    """Return the signals of an HDF5 container; ``matlab`` knows the marks of MAT 7.3."""
    check_file(path)
    survey = _Survey(path=path, matlab=matlab)
    with Opened(path=path) as file:
        try:
            survey.take_attributes("", file.handle)
            file.handle.visititems(survey.visit)
            if file.damage:
                raise OSError(file.damage)
        except CaptureError:
            raise
        except FAULTS as fault:
            raise _damaged(path, fault) from fault
    box = ArrayBox(
        path=path,
        format_text=format_text,
        entries=tuple(survey.entries),
        scalars=survey.scalars,
        lay_out=lambda entry: _lay_out(path, entry),
    )
    return capture_from_box(box, options)


def import_h5py(path: str) -> Any:
    """Return the h5py module, or refuse with the name of the extra that brings it."""
    try:
        import h5py
    except ImportError as fault:
        raise refusal(path, "needs h5py", "Install lockspan[formats]") from fault
    return h5py


@dataclass(slots=True, kw_only=True)
class Opened:
    """An HDF5 file opened for reading, with its faults said in one line."""

    path: str
    handle: Any = None
    file: BoundedFile | None = None

    def __enter__(self) -> Opened:
        library = import_h5py(self.path)
        self.file = BoundedFile(self.path)
        try:
            self.handle = library.File(self.file, "r", rdcc_nbytes=CACHE_BYTES)
        except FAULTS as fault:
            self.file.close()
            raise _damaged(self.path, fault) from fault
        return self

    @property
    def damage(self) -> str:
        """What was found wrong with the file while the library read it, "" for nothing."""
        return "" if self.file is None else self.file.damage

    def __exit__(self, *_: object) -> None:
        try:
            self.handle.close()
        finally:
            if self.file is not None:
                self.file.close()


def _damaged(path: str, fault: Exception) -> Exception:
    """Return the library's complaint in plain words; a cut file is told by its two lengths."""
    found = re.search(r"eof = (\d+).*stored_eof = (\d+)", str(fault))
    if found:
        held, declared = (size_text(int(text)) for text in found.groups())
        return refusal(path, f"cut short: {held} of {declared}", "Re-copy the file")
    what = f"cannot be read as HDF5 ({printable(str(fault), 100) or type(fault).__name__})"
    return refusal(path, what, "Re-copy the file or export it again")


@dataclass(slots=True, kw_only=True)
class _Survey:
    """Collects the datasets and the scalar settings of a file."""

    path: str
    matlab: bool
    entries: list[ArrayEntry] = field(default_factory=list)
    scalars: dict[str, float] = field(default_factory=dict)
    seen: int = 0

    def visit(self, name: str, item: Any) -> None:
        """Take one object of the file."""
        self.seen += 1
        if self.seen > OBJECTS_MAX:
            what = f"holds more than {OBJECTS_MAX} objects"
            raise refusal(self.path, what, "Export the signals alone")
        self.take_attributes(f"/{name}", item)
        if name.startswith("#"):
            return
        obstacle = self._matlab_obstacle(item)
        if obstacle:
            self.entries.append(ArrayEntry(name=self._called(name), obstacle=obstacle))
        elif hasattr(item, "shape") and hasattr(item, "dtype"):
            self._take_dataset(name, item)

    def _called(self, name: str) -> str:
        return name.replace("/", ".") if self.matlab else f"/{name}"

    def _matlab_obstacle(self, item: Any) -> str:
        if not self.matlab:
            return ""
        kind = item.attrs.get("MATLAB_class", b"")
        kind = kind.decode("ascii", "replace") if isinstance(kind, bytes) else str(kind)
        if "MATLAB_object_decode" in item.attrs or kind in ("table", "timetable", "string"):
            kind = kind if kind in ("table", "timetable", "string") else "table or other"
            return f"is a {printable(kind, 30)} object, not a numeric array"
        return {"cell": "is a cell array", "char": "is text"}.get(kind, "")

    def _take_dataset(self, name: str, item: Any) -> None:
        shape = tuple(item.shape or ())
        if item.dtype.names is None and item.dtype.kind not in "biuf":
            obstacle = f"holds {printable(str(item.dtype), 30)} values, no real numbers"
            self.entries.append(ArrayEntry(name=self._called(name), shape=shape, obstacle=obstacle))
            return
        small = math.prod(item.chunks or ()) * item.dtype.itemsize <= SCALAR_BYTES_MAX
        if item.size == 1 and item.dtype.names is None and small:
            self.scalars[self._called(name)] = _single_number(item)
        self.entries.append(ArrayEntry(name=self._called(name), shape=shape))

    def take_attributes(self, name: str, item: Any) -> None:
        """Keep the attributes that are one number, as "name@attribute"."""
        for key in item.attrs:
            try:
                value = np.asarray(item.attrs[key])
            except FAULTS:
                continue  # an attribute of a kind the library does not know is no setting
            if value.size == 1 and value.dtype.kind in "biuf":
                self.scalars[f"{name}@{key}"] = float(value.reshape(-1)[0])


def _lay_out(path: str, entry: ArrayEntry) -> ArraySignals:
    """Return the channels of a dataset: time is the longer axis, fields of a row are channels."""
    key = entry.name
    with Opened(path=path) as file:
        try:
            item = file.handle[key] if key in file.handle else file.handle[key.replace(".", "/")]
            name, shape, dtype = item.name, tuple(item.shape), item.dtype
            _refuse_elsewhere(path, entry, item)
            chunks, index = item.chunks, chunk_index(item)
            unwritten = _settle_unwritten(path, entry, item, index)
            unit = _text_attribute(item, "units") or _text_attribute(item, "unit")
        except CaptureError:
            raise
        except FAULTS as fault:
            raise _damaged(path, fault) from fault
    _refuse_chunks(path, entry, chunks, dtype.itemsize)
    fields: tuple[str, ...] = dtype.names or ()
    if fields and (len(shape) != 1 or any(dtype[f].kind not in "biuf" for f in fields)):
        what = f"dataset {entry.text} has fields that are no plain numbers"
        raise refusal(path, what, "Save an array of shape (samples, channels)")
    swapped = len(shape) == 2 and shape[0] < shape[1]
    frames = max(shape)
    channels = len(fields) or (min(shape) if len(shape) == 2 else 1)
    if channels > CHANNELS_MAX:
        what = f"dataset {entry.text} would be {channels} channels"
        raise refusal(path, what, "Export the signals alone")
    narrow = all(is_exact_in_float32(dtype[f]) for f in fields) if fields else None
    return ArraySignals(
        frame_count=frames,
        channels=tuple(
            CaptureChannel(name=fields[c] if fields else str(c + 1), unit=unit)
            for c in range(channels)
        ),
        source=Hdf5Source(
            path=path,
            name=name,
            index=index,
            fields=fields,
            swapped=swapped,
            flat=len(shape) == 1,
            narrow=is_exact_in_float32(dtype) if narrow is None else narrow,
        ),
        notes=unwritten + _axis_note(entry, swapped and channels > 1),
    )


def _axis_note(entry: ArrayEntry, swapped: bool) -> tuple[str, ...]:
    return (f"{entry.text}: the longer axis is taken as time",) if swapped else ()


def _refuse_elsewhere(path: str, entry: ArrayEntry, item: Any) -> None:
    """Refuse samples that stand in other files: their lengths cannot be compared with anything."""
    others = [name for name, _, _ in item.external or ()]
    if item.is_virtual:
        others += [source.file_name for source in item.virtual_sources() if source.file_name != "."]
    if others:
        what = f"dataset {entry.text} has its samples in other files ('{printable(others[0])}')"
        raise refusal(path, what, "Give that file, or copy the samples into one")


def _single_number(item: Any) -> float:
    return float(StoredRows(item=item, index=chunk_index(item)).read(0, 1).reshape(-1)[0])


def _settle_unwritten(
    path: str, entry: ArrayEntry, item: Any, index: ChunkIndex | None
) -> tuple[str, ...]:
    """Return the note on samples that were set aside but never written; refuse if most were."""
    written, declared = int(item.is_virtual or item.id.get_storage_size() > 0), 1
    if index is not None:
        written, declared = index.written, index.declared
    if written == 0:
        what = f"dataset {entry.text}: no sample was ever written"
        raise refusal(path, what, "Record it again")
    if written >= declared:
        return ()
    what = f"{entry.text}: {declared - written} of {declared} chunks were never written"
    if declared > UNWRITTEN_FACTOR_MAX * written + UNWRITTEN_ALWAYS_ALLOWED:
        raise refusal(path, f"dataset {what}", "Cut it to the part that was recorded")
    return (what,)


def _refuse_chunks(
    path: str, entry: ArrayEntry, chunks: tuple[int, ...] | None, itemsize: int
) -> None:
    size = 0 if chunks is None else int(np.prod(chunks, dtype=np.int64)) * itemsize
    if size > CHUNK_BYTES_MAX:
        what = f"dataset '{printable(entry.name)}' is stored in chunks of {size_text(size)}"
        raise refusal(path, what, "Store it in chunks of a few MB")


def _text_attribute(item: Any, key: str) -> str:
    try:
        value = item.attrs.get(key, "")
    except FAULTS:
        return ""
    if isinstance(value, bytes):
        value = value.decode("utf-8", "replace")
    return printable(value, 20) if isinstance(value, str) else ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Hdf5Source:
    """Block source over one dataset, read in runs of whole chunks."""

    path: str
    name: str
    index: ChunkIndex | None = field(repr=False)
    fields: tuple[str, ...]
    swapped: bool
    flat: bool
    narrow: bool

    def __call__(
        self, columns: Sequence[int], block_frames: int, start_frame: int, stop_frame: int
    ) -> Iterator[SampleBlock]:
        """Yield blocks of the chosen columns."""
        pieces = self._pieces(list(columns), start_frame, stop_frame)
        return rebuffer(pieces, block_frames, stop_frame - start_frame)

    def _pieces(self, columns: list[int], start: int, stop: int) -> Iterator[SampleBlock]:
        with Opened(path=self.path) as file:
            try:
                item = file.handle[self.name]
                stored = StoredRows(item=item, index=self.index, axis=int(self.swapped))
                step = self._step(item)
                place = start
                while place < stop:
                    # The first piece ends at the edge of a chunk; all others are whole.
                    end = min((place // step + 1) * step, stop)
                    yield self._read(stored, columns, place, end)
                    place = end
            except FAULTS as fault:
                raise _damaged(self.path, fault) from fault

    def _step(self, item: Any) -> int:
        """Return frames a piece: whole chunks near the piece size."""
        row_bytes = item.dtype.itemsize * max(item.size // max(item.shape), 1)
        frames = max(PART_BYTES // int(row_bytes), 1)
        if item.chunks is None:
            return frames
        chunk = int(item.chunks[1 if self.swapped else 0])
        return max(frames // chunk, 1) * chunk

    def _read(self, stored: StoredRows, columns: list[int], start: int, stop: int) -> SampleBlock:
        if self.swapped:
            return as_samples(stored.read(start, stop)[columns], self.narrow)
        rows = stored.read(start, stop)
        if self.fields:
            planes = np.stack([rows[self.fields[c]] for c in columns])
            return as_samples(planes, self.narrow)
        if self.flat:
            return as_samples(np.stack([rows for _ in columns]), self.narrow)
        return as_samples(rows[:, columns].T, self.narrow)
