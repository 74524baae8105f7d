"""Arrays saved by numpy: NPY (one array) and NPZ (several under names).

The longer axis is time. Python objects are refused: loading them runs code from the file.
"""

from __future__ import annotations

import math
import zipfile
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, BinaryIO

import numpy as np

from rig.captures import Capture, CaptureChannel
from rig.errors import CaptureError
from rig.readers.datasets import ArrayBox, ArrayEntry, ArraySignals, capture_from_box
from rig.readers.options import ReadOptions
from rig.readers.rawblocks import (
    ZIP_FAULTS,
    FrameSource,
    PlaneSource,
    RawColumn,
    decode_frames,
    open_part,
)
from rig.readers.refusals import (
    check_file,
    open_binary,
    printable,
    refusal,
    refuse_empty,
    settle_rate,
)

NPY_MAGIC = b"\x93NUMPY"
ROW_BYTES_MAX = 2**20  # a structured row longer than this is no frame of samples
_KINDS = "biuf"


@dataclass(frozen=True, slots=True, kw_only=True)
class NpyHeader:
    """Shape, type and order of an NPY array, and where its numbers start."""

    shape: tuple[int, ...]
    dtype: np.dtype[np.generic]
    fortran: bool
    data_offset: int
    member: str = ""

    @property
    def value_count(self) -> int:
        """Number of values the shape declares."""
        return math.prod(self.shape)


def sniff_npy(head: bytes, path: str) -> int:
    """Return 3 for the signature of NPY, 0 otherwise."""
    return 3 if head[:6] == NPY_MAGIC else 0


def open_npy(path: str, options: ReadOptions) -> Capture:
    """Return an NPY file as a capture; its rate comes from the options.

    Raises
    ------
    CaptureError
        If the array holds Python objects, is cut short, or has no axis for time.
    """
    length = check_file(path)
    with open_binary(path) as file:
        header = read_npy_header(file, path)
    rate_hz, notes = settle_rate(path, None, options, "an NPY file has no place for one")
    short = _settle_length(path, header, length - header.data_offset, options)
    layout = lay_out(path, header, short)
    return Capture(
        path=path,
        format=f"npy, {header.dtype.name}",
        rate_hz=rate_hz,
        frame_count=layout.frame_count,
        channels=layout.channels,
        source=layout.source,
        notes=notes + layout.notes,
    )


def read_npy_header(file: BinaryIO, path: str, member: str = "") -> NpyHeader:
    """Return the header that stands at the file's position.

    Raises
    ------
    CaptureError
        If it is damaged, or the array holds Python objects.
    """
    try:
        version = np.lib.format.read_magic(file)
        # Versions 2 and 3 differ in the width of one field and the encoding of names.
        read = np.lib.format.read_array_header_1_0
        if version != (1, 0):
            read = np.lib.format.read_array_header_2_0
        shape, fortran, dtype = read(file)
    except (ValueError, EOFError, UnicodeError, SyntaxError, TypeError, MemoryError) as fault:
        what = "header of the NPY array is damaged"
        raise refusal(path, what, "Save the array again with numpy.save") from fault
    if dtype.hasobject:
        what = "contains Python objects; refused (unsafe)"
        raise refusal(path, what, "Save a plain array of numbers")
    if dtype.itemsize > ROW_BYTES_MAX:
        what = f"declares rows of {dtype.itemsize} bytes"
        raise refusal(path, what, "Save a plain array of numbers")
    if any(size < 0 for size in shape):
        raise refusal(path, f"declares the shape {shape}", "Save the array again with numpy.save")
    return NpyHeader(
        shape=tuple(shape),
        dtype=dtype,
        fortran=bool(fortran),
        data_offset=file.tell(),
        member=member,
    )


def _settle_length(path: str, header: NpyHeader, present: int, options: ReadOptions) -> int | None:
    """Return the number of values held when a cut file is accepted, None for a whole one."""
    width = max(header.dtype.itemsize, 1)
    if present >= header.value_count * width:
        return None
    held = max(present, 0) // width
    what = f"declares {header.value_count} values, holds {held}"
    remedy = "Re-copy the file or pass --allow-truncated"
    if not options.allow_truncated or _is_planes(header):
        raise refusal(path, what, remedy)
    return held


def _is_planes(header: NpyHeader) -> bool:
    """Tell whether each channel stands in one piece in the file."""
    if len(header.shape) < 2:
        return False
    return (header.shape[0] < header.shape[1]) != header.fortran


def lay_out(path: str, header: NpyHeader, held: int | None = None) -> ArraySignals:
    """Return the channels of an array: time is the longer axis, fields are channels.

    Raises
    ------
    CaptureError
        If the array has no axis for time, more than two axes, or values that are no reals.
    """
    notes: tuple[str, ...] = ()
    if header.dtype.names is not None:
        return _lay_out_fields(path, header, held)
    _refuse_shape(path, header)
    frames, count = header.shape[0], header.shape[1] if len(header.shape) == 2 else 1
    if len(header.shape) == 2 and frames < count:
        frames, count = count, frames
        notes += (f"shape {header.shape}: the longer axis is taken as time",)
    if held is not None:
        notes += (f"declares {header.value_count} values, holds {held}; truncation accepted",)
        frames = held // max(count, 1)
    refuse_empty(path, frames, count)
    code, width = _code(header.dtype), header.dtype.itemsize
    step = frames * width if _is_planes(header) else width
    start = header.data_offset if _is_planes(header) else 0
    columns = tuple(RawColumn(offset=start + c * step, code=code) for c in range(count))
    return ArraySignals(
        frame_count=frames,
        channels=tuple(CaptureChannel(name=str(c + 1)) for c in range(count)),
        source=_source(path, header, columns, count * width),
        notes=notes,
    )


def _source(
    path: str, header: NpyHeader, columns: tuple[RawColumn, ...], frame_bytes: int
) -> FrameSource | PlaneSource:
    if _is_planes(header):
        return PlaneSource(path=path, member=header.member, columns=columns)
    return FrameSource(
        path=path,
        member=header.member,
        data_offset=header.data_offset,
        frame_bytes=frame_bytes,
        columns=columns,
    )


def _refuse_shape(path: str, header: NpyHeader) -> None:
    if len(header.shape) not in (1, 2):
        what = f"array of shape {header.shape} has no one axis for time"
        raise refusal(path, what, "Save an array of shape (samples, channels)")
    if header.dtype.kind not in _KINDS or header.dtype.itemsize > 8:
        what = f"values of type {header.dtype.name} are no real numbers of 64 bits or less"
        raise refusal(path, what, "Save real and imaginary parts, or float64, as columns")


def _lay_out_fields(path: str, header: NpyHeader, held: int | None) -> ArraySignals:
    """Return the layout of a structured array: each numeric field is a channel."""
    fields: Any = header.dtype.fields
    names = header.dtype.names or ()
    plain = all(fields[n][0].kind in _KINDS and fields[n][0].itemsize <= 8 for n in names)
    if len(header.shape) != 1 or not plain:
        what = f"structured array of shape {header.shape} holds fields that are no plain numbers"
        raise refusal(path, what, "Save a plain array of shape (samples, channels)")
    frames = header.shape[0] if held is None else held
    refuse_empty(path, frames, len(names))
    columns = tuple(RawColumn(offset=fields[n][1], code=_code(fields[n][0])) for n in names)
    note = f"declares {header.value_count} rows, holds {held}; truncation accepted"
    return ArraySignals(
        frame_count=frames,
        channels=tuple(CaptureChannel(name=name) for name in names),
        source=_source(path, header, columns, header.dtype.itemsize),
        notes=() if held is None else (note,),
    )


def _code(dtype: np.dtype[np.generic]) -> str:
    """Return the raw code of a type with its byte order spelled out."""
    order = dtype.str[0] if dtype.str[0] in "<>" else "<"
    return f"{order}{dtype.kind}{dtype.itemsize}"


def sniff_npz(head: bytes, path: str) -> int:
    """Return 2 for a zip archive whose first part is an NPY array, 0 otherwise."""
    return 2 if head[:4] == b"PK\x03\x04" and b".npy" in head[:300] else 0


@dataclass(slots=True, kw_only=True)
class _Archive:
    """The parts of an NPZ file: headers of its arrays, and the values of its scalars."""

    path: str
    headers: dict[str, NpyHeader] = field(default_factory=dict)
    scalars: dict[str, float] = field(default_factory=dict)
    entries: list[ArrayEntry] = field(default_factory=list)

    def take(self, name: str, packed_bytes: int) -> None:
        """Read the header of one part, and its value if it is a single number."""
        key = name.removesuffix(".npy")
        try:
            with open_part(self.path, name) as part:
                header = read_npy_header(part, self.path, name)
                if header.value_count == 1 and header.dtype.kind in _KINDS:
                    self.scalars[key] = _one_number(part.read(header.dtype.itemsize), header)
        except CaptureError as fault:
            if "Python objects" not in str(fault):
                raise
            obstacle = "contains Python objects; refused (unsafe)"
            self.entries.append(ArrayEntry(name=key, obstacle=obstacle))
            return
        held = (packed_bytes - header.data_offset) // max(header.dtype.itemsize, 1)
        if held < header.value_count:
            what = f"array '{printable(key)}' declares {header.value_count} values, holds {held}"
            raise refusal(self.path, what, "Re-copy the file")
        self.headers[key] = header
        plain = header.dtype.names is not None or header.dtype.kind in _KINDS
        obstacle = "" if plain else f"holds {header.dtype.name} values, no real numbers"
        self.entries.append(ArrayEntry(name=key, shape=header.shape, obstacle=obstacle))


def _one_number(body: bytes, header: NpyHeader) -> float:
    width = header.dtype.itemsize
    if len(body) < width or width > 8:
        return math.nan
    return float(decode_frames(body, [RawColumn(offset=0, code=_code(header.dtype))], width)[0, 0])


def open_npz(path: str, options: ReadOptions) -> Capture:
    """Return the signals of an NPZ file as a capture.

    Raises
    ------
    CaptureError
        If the archive is damaged, the choice of arrays is not forced, or no rate is stated.
    """
    check_file(path)
    box = _Archive(path=path)
    for name, size in _parts(path).items():
        if name.endswith(".npy"):
            box.take(name, size)
    signals = ArrayBox(
        path=path,
        format_text="npz",
        entries=tuple(box.entries),
        scalars=box.scalars,
        lay_out=lambda entry: lay_out(path, box.headers[entry.name]),
    )
    return capture_from_box(signals, options)


def _parts(path: str) -> Mapping[str, int]:
    """Return the names and unpacked sizes of the parts of a zip archive."""
    try:
        with zipfile.ZipFile(path) as archive:
            return {info.filename: info.file_size for info in archive.infolist()}
    except (*ZIP_FAULTS, OSError, ValueError) as fault:
        what = f"archive is cut short or damaged ({printable(str(fault))})"
        raise refusal(path, what, "Re-copy the file or save it again") from fault
