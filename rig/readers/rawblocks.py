"""Samples that stand as plain numbers in a file, read in blocks without a copy of the file.

Two arrangements cover every binary format here: frames (all columns of one instant side by
side) and planes (each column in one piece). Values leave as float32 where that is exact,
that is for integers up to 24 bits and for float32, else as float64.

Nothing is mapped into memory: a mapping counts as resident memory, and keeps a file from
being replaced on some systems.
"""

from __future__ import annotations

import math
import sys
from collections.abc import Iterator, Sequence
from contextlib import ExitStack
from dataclasses import dataclass, replace
from typing import Any, BinaryIO

import numpy as np
from numpy.typing import NDArray

from rig.arrays import SampleBlock
from rig.readers.parts import WHOLE_FILE, Part, open_part, part_faults
from rig.readers.refusals import open_binary, printable, refusal

PART_BYTES = 2**22  # bytes read at once, so that a frame of many columns costs no more memory
_PAD = 8  # spare bytes at both ends of the buffer, so that 3-byte words can be viewed as 4-byte
_EXACT_IN_FLOAT32 = frozenset({"b1", "i1", "u1", "i2", "u2", "i3", "f2", "f4"})


@dataclass(frozen=True, slots=True, kw_only=True)
class RawColumn:
    """One column of numbers: where it starts, how a number is coded, value = gain x + bias.

    ``offset`` counts bytes from the start of a frame, or of the file for planes. ``code`` is
    a numpy type text with its byte order ("<i2", ">f8"); "<i3" and ">i3" are 24-bit words.
    ``step`` is the distance of neighbours in a plane that is shared with others, else 0.
    ``missing`` is the raw number that stands for a sample that is not there.
    """

    offset: int
    code: str
    step: int = 0
    gain: float = 1.0
    bias: float = 0.0
    missing: int | None = None

    @property
    def width(self) -> int:
        """Bytes of one number."""
        return int(self.code[2:])

    @property
    def exact_in_float32(self) -> bool:
        """True when float32 holds every value: short words and a gain that is a power of two."""
        power_of_two = self.gain > 0 and math.frexp(self.gain)[0] == 0.5
        offset_byte = self.code[1:] == "u1" and self.bias == -1.0
        unbiased = self.bias == 0.0 or offset_byte
        return self.code[1:] in _EXACT_IN_FLOAT32 and power_of_two and unbiased


@dataclass(frozen=True, slots=True, kw_only=True)
class FrameSource:
    """Block source over frames of ``frame_bytes`` that start at ``data_offset``.

    ``part`` says where in the file they are packed; the whole file by default.
    """

    path: str
    part: Part = WHOLE_FILE
    data_offset: int
    frame_bytes: int
    columns: tuple[RawColumn, ...]

    def __call__(
        self, columns: Sequence[int], block_frames: int, start_frame: int, stop_frame: int
    ) -> Iterator[SampleBlock]:
        """Yield blocks of the chosen columns; the same array is filled again each time."""
        chosen = [self.columns[c] for c in columns]
        block_frames = min(block_frames, max(stop_frame - start_frame, 1))
        part_frames = min(block_frames, max(PART_BYTES // self.frame_bytes, 1))
        buffer = bytearray(part_frames * self.frame_bytes + 2 * _PAD)
        planes = _empty_planes(chosen, block_frames)
        decode = _decode_pair if _is_pair(chosen, self.frame_bytes) else _decode_columns
        with open_part(self.path, self.part) as file:
            file.seek(self.data_offset + start_frame * self.frame_bytes)
            for first in range(start_frame, stop_frame, block_frames):
                frames = min(block_frames, stop_frame - first)
                for done in range(0, frames, part_frames):
                    part = planes[:, done : min(done + part_frames, frames)]
                    _fill(file, buffer, part.shape[1] * self.frame_bytes, self.path)
                    decode(buffer, chosen, self.frame_bytes, part)
                yield planes[:, :frames]


@dataclass(frozen=True, slots=True, kw_only=True)
class PlaneSource:
    """Block source over columns that each stand in one piece; offsets count from the file."""

    path: str
    part: Part = WHOLE_FILE
    columns: tuple[RawColumn, ...]

    def __call__(
        self, columns: Sequence[int], block_frames: int, start_frame: int, stop_frame: int
    ) -> Iterator[SampleBlock]:
        """Yield blocks of the chosen columns; the same array is filled again each time."""
        chosen = [self.columns[c] for c in columns]
        block_frames = min(block_frames, max(stop_frame - start_frame, 1))
        widest = max((max(column.width, column.step) for column in chosen), default=1)
        buffer = bytearray(block_frames * widest + 2 * _PAD)
        planes = _empty_planes(chosen, block_frames)
        with ExitStack() as stack:
            files = self._open_each(stack, len(chosen))
            for first in range(start_frame, stop_frame, block_frames):
                frames = min(block_frames, stop_frame - first)
                for row, (file, column) in enumerate(zip(files, chosen, strict=True)):
                    step = column.step or column.width
                    file.seek(column.offset + first * step)
                    _fill(file, buffer, (frames - 1) * step + column.width, self.path)
                    alone = [replace(column, offset=0)]
                    _decode_columns(buffer, alone, step, planes[row : row + 1, :frames])
                yield planes[:, :frames]

    def _open_each(self, stack: ExitStack, count: int) -> list[BinaryIO]:
        """Return one file a column: packed data can only be read forwards at a fair price."""
        if self.part is not WHOLE_FILE:
            return [stack.enter_context(open_part(self.path, self.part)) for _ in range(count)]
        return [stack.enter_context(open_binary(self.path))] * count


def decode_frames(
    data: bytes | bytearray, columns: Sequence[RawColumn], frame_bytes: int
) -> SampleBlock:
    """Return the numbers of whole frames held in memory, shape (columns, frames)."""
    frames = len(data) // frame_bytes
    padded = bytearray(_PAD) + data[: frames * frame_bytes] + bytearray(_PAD)
    planes = _empty_planes(columns, frames)
    _decode_columns(padded, columns, frame_bytes, planes)
    return planes


def _empty_planes(columns: Sequence[RawColumn], frames: int) -> SampleBlock:
    if all(column.exact_in_float32 for column in columns):
        return np.empty((len(columns), frames), dtype=np.float32)
    return np.empty((len(columns), frames), dtype=np.float64)


def _fill(file: BinaryIO, buffer: bytearray, byte_count: int, path: str) -> None:
    view = memoryview(buffer)[_PAD : _PAD + byte_count]
    try:
        got = file.readinto(view)  # type: ignore[attr-defined]
    except part_faults(OSError) as fault:
        what = f"reading failed ({printable(str(fault))})"
        raise refusal(path, what, "Check the disk, or re-copy the file") from fault
    if got != byte_count:
        what = f"ended while it was read ({got} of {byte_count} bytes at byte {file.tell()})"
        raise refusal(path, what, "Wait until nobody writes to it and run again")


def _column_view(
    buffer: bytearray, column: RawColumn, frame_bytes: int, frames: int
) -> NDArray[Any]:
    """Return the numbers of a column as a strided view of the buffer, 24-bit words widened."""
    order, code = column.code[0], column.code[1:]
    start = _PAD + column.offset
    if code == "i3":
        # A 4-byte view whose three upper bytes are the word; the spare byte is masked off.
        early = start - 1 if order == "<" else start
        wide: NDArray[np.int32] = np.ndarray((frames,), order + "i4", buffer, early, (frame_bytes,))
        return np.bitwise_and(wide, np.int32(-256)).astype(np.int32, copy=False)
    return np.ndarray((frames,), column.code, buffer, start, (frame_bytes,))


def _decode_columns(
    buffer: bytearray, columns: Sequence[RawColumn], frame_bytes: int, planes: SampleBlock
) -> None:
    for plane, column in zip(planes, columns, strict=True):
        plane[:] = _column_view(buffer, column, frame_bytes, len(plane))
        if column.missing is not None:
            plane[plane == column.missing] = np.nan
        # A widened 24-bit word stands 8 bits too high.
        gain = column.gain / 256 if column.code[1:] == "i3" else column.gain
        if gain != 1.0:
            plane *= gain
        if column.bias != 0.0:
            plane += column.bias


def _is_pair(columns: Sequence[RawColumn], frame_bytes: int) -> bool:
    """Tell whether the columns are the two halves of a little-endian 32-bit word."""
    shape = [(column.offset, column.code, column.bias) for column in columns]
    plain = shape == [(0, "<i2", 0.0), (2, "<i2", 0.0)] and frame_bytes == 4
    exact = all(c.exact_in_float32 and c.missing is None for c in columns)
    return plain and exact and sys.byteorder == "little"


def _decode_pair(
    buffer: bytearray, columns: Sequence[RawColumn], frame_bytes: int, planes: SampleBlock
) -> None:
    """Split 16-bit pairs by shifts of one 32-bit word: twice as fast as strided views."""
    words = np.ndarray((planes.shape[1],), "<i4", buffer, _PAD)
    planes[0] = np.left_shift(words, 16)
    planes[0] *= columns[0].gain / 65536
    planes[1] = np.right_shift(words, 16)
    planes[1] *= columns[1].gain
