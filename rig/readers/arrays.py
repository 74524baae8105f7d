"""Arrays saved by numpy: NPY (one array) and NPZ (several under names).

The longer axis is time. Python objects are refused: loading them runs code from the file.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any, BinaryIO

import numpy as np

from rig.captures import Capture, CaptureChannel
from rig.readers.options import ReadOptions
from rig.readers.rawblocks import FrameSource, PlaneSource, RawColumn
from rig.readers.refusals import check_file, open_binary, refusal, refuse_empty, settle_rate

NPY_MAGIC = b"\x93NUMPY"
_KINDS = "biuf"


@dataclass(frozen=True, slots=True, kw_only=True)
class NpyHeader:
    """Shape, type and order of an NPY array, and where its numbers start."""

    shape: tuple[int, ...]
    dtype: np.dtype[np.generic]
    fortran: bool
    data_offset: int

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


def read_npy_header(file: BinaryIO, path: str) -> NpyHeader:
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
    if any(size < 0 for size in shape):
        raise refusal(path, f"declares the shape {shape}", "Save the array again with numpy.save")
    return NpyHeader(
        shape=tuple(shape), dtype=dtype, fortran=bool(fortran), data_offset=file.tell()
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


@dataclass(frozen=True, slots=True, kw_only=True)
class Layout:
    """An array laid out as channels over frames."""

    frame_count: int
    channels: tuple[CaptureChannel, ...]
    columns: tuple[RawColumn, ...]
    source: FrameSource | PlaneSource
    notes: tuple[str, ...]


def _is_planes(header: NpyHeader) -> bool:
    """Tell whether each channel stands in one piece in the file."""
    if len(header.shape) < 2:
        return False
    return (header.shape[0] < header.shape[1]) != header.fortran


def lay_out(path: str, header: NpyHeader, held: int | None = None) -> Layout:
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
    return Layout(
        frame_count=frames,
        channels=tuple(CaptureChannel(name=str(c + 1)) for c in range(count)),
        columns=columns,
        source=_source(path, header, columns, count * width),
        notes=notes,
    )


def _source(
    path: str, header: NpyHeader, columns: tuple[RawColumn, ...], frame_bytes: int
) -> FrameSource | PlaneSource:
    if _is_planes(header):
        return PlaneSource(path=path, columns=columns)
    return FrameSource(
        path=path, data_offset=header.data_offset, frame_bytes=frame_bytes, columns=columns
    )


def _refuse_shape(path: str, header: NpyHeader) -> None:
    if len(header.shape) not in (1, 2):
        what = f"array of shape {header.shape} has no one axis for time"
        raise refusal(path, what, "Save an array of shape (samples, channels)")
    if header.dtype.kind not in _KINDS or header.dtype.itemsize > 8:
        what = f"values of type {header.dtype.name} are no real numbers of 64 bits or less"
        raise refusal(path, what, "Save real and imaginary parts, or float64, as columns")


def _lay_out_fields(path: str, header: NpyHeader, held: int | None) -> Layout:
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
    return Layout(
        frame_count=frames,
        channels=tuple(CaptureChannel(name=name) for name in names),
        columns=columns,
        source=_source(path, header, columns, header.dtype.itemsize),
        notes=() if held is None else (note,),
    )


def _code(dtype: np.dtype[np.generic]) -> str:
    """Return the raw code of a type with its byte order spelled out."""
    order = dtype.str[0] if dtype.str[0] in "<>" else "<"
    return f"{order}{dtype.kind}{dtype.itemsize}"
