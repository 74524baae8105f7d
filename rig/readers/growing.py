"""Captures that are still being written, and raw samples on a pipe, taken as they come.

The length that a header declares is not believed while the recorder writes: the file's is,
until a whole header with chunks behind the samples shows that it was closed. Nothing is ever
written, and a file is opened anew for each look, so that the recorder is not held up.
"""

from __future__ import annotations

import os
import threading
from collections.abc import Callable
from dataclasses import dataclass, field
from queue import Empty, Queue
from typing import BinaryIO, Protocol

from rig.arrays import SampleBlock
from rig.captures import CaptureChannel
from rig.readers.chunks import walk_riff
from rig.readers.growingtext import open_growing_text
from rig.readers.options import ReadOptions
from rig.readers.rawblocks import RawColumn, decode_frames
from rig.readers.refusals import check_file, open_binary, read_head, refusal
from rig.readers.sound import linear_columns, sound_channels
from rig.readers.table import choose_reader

TAKE_BYTES = 2**22  # at most so much is taken at a time: a long backlog needs no more memory
PIPE_BYTES = 2**16
PIPE_PARTS = 64  # parts of a pipe that wait to be taken; then the writer has to wait
SAMPLE_CODES = {"float32": "<f4", "int16": "<i2", "int32": "<i4"}
FOLLOWED = "WAV, RF64, W64, delimited text and raw samples"


class GrowingSource(Protocol):
    """Anything whose samples come while one looks."""

    @property
    def rate_hz(self) -> float:
        """Samples a second."""

    @property
    def channels(self) -> tuple[CaptureChannel, ...]:
        """Columns."""

    @property
    def ended(self) -> bool:
        """True when nothing more can come."""

    def take(self) -> SampleBlock:
        """Return what is new, shape (channels, frames); no frame when nothing is."""


@dataclass(frozen=True, slots=True, kw_only=True)
class RawForm:
    """Raw interleaved samples: rate in Hz, channels a frame, and how a sample is coded."""

    rate_hz: float
    channel_count: int
    sample_type: str = "float32"

    @property
    def code(self) -> str:
        """Raw number code of a sample."""
        return SAMPLE_CODES[self.sample_type]

    @property
    def columns(self) -> tuple[RawColumn, ...]:
        """Columns of a frame, integers scaled to full scale 1.0."""
        width = int(self.code[2:])
        gain = 1.0 if self.code[1] == "f" else 2.0 ** (1 - 8 * width)
        return tuple(
            RawColumn(offset=k * width, code=self.code, gain=gain)
            for k in range(self.channel_count)
        )


@dataclass(slots=True, kw_only=True)
class GrowingFrames:
    """Plain frames in a growing file, from ``offset`` to ``limit()``."""

    path: str
    rate_hz: float
    channels: tuple[CaptureChannel, ...]
    columns: tuple[RawColumn, ...]
    frame_bytes: int
    offset: int
    limit: Callable[[], int]
    ended: bool = False

    def take(self) -> SampleBlock:
        """Return the frames that were added.

        Raises
        ------
        CaptureError
            If the file has become shorter, or cannot be read any more.
        """
        stop = self.limit()
        if stop < self.offset:
            what = f"has become shorter ({stop} bytes, read up to {self.offset})"
            raise refusal(self.path, what, "Start again")
        size = min(stop - self.offset, TAKE_BYTES) // self.frame_bytes * self.frame_bytes
        with open_binary(self.path) as file:
            file.seek(self.offset)
            data = file.read(size)
        data = data[: len(data) // self.frame_bytes * self.frame_bytes]
        self.offset += len(data)
        return decode_frames(data, self.columns, self.frame_bytes)


@dataclass(slots=True, kw_only=True)
class PipedFrames:
    """Plain frames from a pipe, read by a thread of its own so that a look never waits."""

    rate_hz: float
    channels: tuple[CaptureChannel, ...]
    columns: tuple[RawColumn, ...]
    frame_bytes: int
    parts: Queue[bytes] = field(default_factory=lambda: Queue(maxsize=PIPE_PARTS))
    rest: bytes = b""
    ended: bool = False

    def take(self) -> SampleBlock:
        """Return the frames that came since the last look."""
        data = bytearray(self.rest)
        while len(data) < TAKE_BYTES and not self.ended:
            try:
                part = self.parts.get_nowait()
            except Empty:
                break
            self.ended = not part
            data += part
        whole = len(data) // self.frame_bytes * self.frame_bytes
        self.rest = bytes(data[whole:])
        return decode_frames(data[:whole], self.columns, self.frame_bytes)

    def listen(self, pipe: BinaryIO) -> None:
        """Start to read a pipe; its end is an empty part."""

        def read() -> None:
            while part := os.read(pipe.fileno(), PIPE_BYTES):
                self.parts.put(part)
            self.parts.put(b"")

        threading.Thread(target=read, daemon=True).start()


def open_growing(path: str, options: ReadOptions, raw: RawForm | None = None) -> GrowingSource:
    """Return a file that is still being written, to be taken from its start on.

    Parameters
    ----------
    path : str
    options : ReadOptions
    raw : RawForm, for a file of plain samples without a header

    Raises
    ------
    CaptureError
        If the format cannot be followed, or too little is there to know what it is.
    """
    check_file(path)
    if raw is not None:
        return _raw_file(path, raw)
    reader = choose_reader(path, read_head(path), options.format)
    if reader.name in ("wav", "rf64", "w64"):
        return _sound_file(path, options)
    if reader.name == "csv":
        return open_growing_text(path, options)
    what = f"{reader.label} cannot be followed while it grows"
    raise refusal(path, what, f"Followed are {FOLLOWED}; else wait and measure it")


def open_pipe(pipe: BinaryIO, raw: RawForm) -> PipedFrames:
    """Return raw interleaved samples as they come through a pipe."""
    frames = PipedFrames(
        rate_hz=raw.rate_hz,
        channels=_numbered(raw.channel_count),
        columns=raw.columns,
        frame_bytes=raw.channel_count * int(raw.code[2:]),
    )
    frames.listen(pipe)
    return frames


def _numbered(count: int) -> tuple[CaptureChannel, ...]:
    return tuple(CaptureChannel(name=str(number)) for number in range(1, count + 1))


def _raw_file(path: str, raw: RawForm) -> GrowingFrames:
    return GrowingFrames(
        path=path,
        rate_hz=raw.rate_hz,
        channels=_numbered(raw.channel_count),
        columns=raw.columns,
        frame_bytes=raw.channel_count * int(raw.code[2:]),
        offset=0,
        limit=lambda: os.stat(path).st_size,
    )


def _sound_file(path: str, options: ReadOptions) -> GrowingFrames:
    length = os.stat(path).st_size
    with open_binary(path) as file:
        header = walk_riff(file, path, length)
    if not header.code:
        raise refusal(path, f"{header.coding} cannot be followed", f"Followed are {FOLLOWED}")
    return GrowingFrames(
        path=path,
        rate_hz=options.rate_hz or header.rate_hz,
        channels=sound_channels(header),
        columns=linear_columns(header),
        frame_bytes=header.frame_bytes,
        offset=header.data_offset,
        limit=lambda: _sample_end(path),
    )


def _sample_end(path: str) -> int:
    """Return where the samples of a sound file end at this moment, bytes.

    The declared length counts only where whole chunks stand behind it: then the recorder has
    closed the file. Samples in that place hardly ever look like the name of a chunk.
    """
    length = os.stat(path).st_size
    with open_binary(path) as file:
        header = walk_riff(file, path, length)
    declared = header.declared_bytes or 0
    closed = 0 < declared < header.present_bytes and header.tail_bytes == 0
    return header.data_offset + (declared if closed else header.present_bytes)
