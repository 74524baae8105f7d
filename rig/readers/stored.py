"""An array of numbers as it is stored: shape, type, order, and which of its axes is time.

Shared by NPY, NPZ and MAT. Nothing is loaded to lay an array out; blocks come from the file.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np

from rig.captures import CaptureChannel
from rig.readers.datasets import CHANNELS_MAX, ArraySignals
from rig.readers.parts import WHOLE_FILE, Part
from rig.readers.rawblocks import FrameSource, PlaneSource, RawColumn, decode_frames
from rig.readers.refusals import refusal, refuse_empty

REAL_KINDS = "biuf"


@dataclass(frozen=True, slots=True, kw_only=True)
class StoredArray:
    """Shape, type and order of an array, and where in its part its numbers start."""

    shape: tuple[int, ...]
    dtype: np.dtype[np.generic]
    fortran: bool
    data_offset: int
    part: Part = WHOLE_FILE

    @property
    def value_count(self) -> int:
        """Number of values the shape declares."""
        return math.prod(self.shape)


def is_planes(header: StoredArray) -> bool:
    """Tell whether each channel of a stored array stands in one piece."""
    if len(header.shape) < 2:
        return False
    return (header.shape[0] < header.shape[1]) != header.fortran


def lay_out(path: str, header: StoredArray, held: int | None = None) -> ArraySignals:
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
    if count > CHANNELS_MAX:
        what = f"array of shape {header.shape} would be {count} channels"
        raise refusal(path, what, "Save the signals alone")
    if is_planes(header) != header.fortran and count > 1:
        notes += (f"shape {header.shape}: the longer axis is taken as time",)
    if held is not None:
        notes += (f"declares {header.value_count} values, holds {held}; truncation accepted",)
        frames = held // max(count, 1)
    refuse_empty(path, frames, count)
    code, width = number_code(header.dtype), header.dtype.itemsize
    step = frames * width if is_planes(header) else width
    start = header.data_offset if is_planes(header) else 0
    columns = tuple(RawColumn(offset=start + c * step, code=code) for c in range(count))
    return ArraySignals(
        frame_count=frames,
        channels=tuple(CaptureChannel(name=str(c + 1)) for c in range(count)),
        source=_source_of(path, header, columns, count * width),
        notes=notes,
    )


def _source_of(
    path: str, header: StoredArray, columns: tuple[RawColumn, ...], frame_bytes: int
) -> FrameSource | PlaneSource:
    if is_planes(header):
        return PlaneSource(path=path, part=header.part, columns=columns)
    return FrameSource(
        path=path,
        part=header.part,
        data_offset=header.data_offset,
        frame_bytes=frame_bytes,
        columns=columns,
    )


def _refuse_shape(path: str, header: StoredArray) -> None:
    if len(header.shape) not in (1, 2):
        what = f"array of shape {header.shape} has no one axis for time"
        raise refusal(path, what, "Save an array of shape (samples, channels)")
    if header.dtype.kind not in REAL_KINDS or header.dtype.itemsize > 8:
        what = f"values of type {header.dtype.name} are no real numbers of 64 bits or less"
        raise refusal(path, what, "Save real and imaginary parts, or float64, as columns")


def _lay_out_fields(path: str, header: StoredArray, held: int | None) -> ArraySignals:
    """Return the layout of a structured array: each numeric field is a channel."""
    fields: Any = header.dtype.fields
    names = header.dtype.names or ()
    plain = all(fields[n][0].kind in REAL_KINDS and fields[n][0].itemsize <= 8 for n in names)
    if len(header.shape) != 1 or not plain:
        what = f"structured array of shape {header.shape} holds fields that are no plain numbers"
        raise refusal(path, what, "Save a plain array of shape (samples, channels)")
    frames = header.shape[0] if held is None else held
    refuse_empty(path, frames, len(names))
    columns = tuple(RawColumn(offset=fields[n][1], code=number_code(fields[n][0])) for n in names)
    note = f"declares {header.value_count} rows, holds {held}; truncation accepted"
    return ArraySignals(
        frame_count=frames,
        channels=tuple(CaptureChannel(name=name) for name in names),
        source=_source_of(path, header, columns, header.dtype.itemsize),
        notes=() if held is None else (note,),
    )


def number_code(dtype: np.dtype[np.generic]) -> str:
    """Return the raw code of a type with its byte order spelled out."""
    order = dtype.str[0] if dtype.str[0] in "<>" else "<"
    return f"{order}{dtype.kind}{dtype.itemsize}"


def one_number(body: bytes, header: StoredArray) -> float:
    """Return the value of an array of a single number, NaN if it is not there."""
    width = header.dtype.itemsize
    if len(body) < width or width > 8:
        return math.nan
    return float(
        decode_frames(body, [RawColumn(offset=0, code=number_code(header.dtype))], width)[0, 0]
    )
