"""A capture: where recorded samples are and what they mean, read in blocks on demand.

Sample k stands at ``k / rate_hz`` seconds after the start. A missing sample is a non-finite
number in its place, so index and time never part; the phase estimators split there and
never bridge. Which file a capture comes from, and how its format is decoded, is the affair
of ``rig.readers``; what a column means physically is said in ``rig.channels``.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Protocol

from rig.arrays import SampleBlock
from rig.errors import ChannelError

BLOCK_FRAMES = 65536  # frames a block: 0.5 MB for 2 float32 channels, fits the level-2 cache


class BlockSource(Protocol):
    """Anything that can hand out the samples of chosen columns, block by block."""

    def __call__(
        self, columns: Sequence[int], block_frames: int, start_frame: int, stop_frame: int
    ) -> Iterator[SampleBlock]:
        """Yield float32 or float64 arrays of shape (len(columns), frames), in order.

        Every block holds ``block_frames`` frames but the last, which may be shorter. Blocks
        may be reused by the source: a consumer copies what it keeps.
        """


@dataclass(frozen=True, slots=True, kw_only=True)
class CaptureChannel:
    """One column of a capture as the file describes it.

    ``full_scale`` is the sample value at which the recorder clips, None when unknown.
    ``skew_s`` is the delay of this column's sampling instant after the frame's time.
    """

    name: str
    unit: str = ""
    full_scale: float | None = None
    skew_s: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Capture:
    """A recorded capture: rate, length, columns, and a source of blocks.

    Raises
    ------
    ValueError
        If the rate is not above 0 Hz, there is no frame, or there is no channel.
    """

    path: str
    format: str
    rate_hz: float
    rate_u_hz: float | None = None
    frame_count: int
    channels: tuple[CaptureChannel, ...]
    source: BlockSource
    start_text: str | None = None
    notes: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        if not self.rate_hz > 0:
            raise ValueError(f"capture '{self.path}': rate must be above 0 Hz, got {self.rate_hz}")
        if not self.frame_count > 0:
            raise ValueError(f"capture '{self.path}': holds {self.frame_count} frames")
        if not self.channels:
            raise ValueError(f"capture '{self.path}': holds no channel")

    @property
    def duration_s(self) -> float:
        """Length of the capture in seconds."""
        return self.frame_count / self.rate_hz

    def blocks(
        self,
        columns: Sequence[int],
        *,
        block_frames: int = BLOCK_FRAMES,
        start_frame: int = 0,
        stop_frame: int | None = None,
    ) -> Iterator[SampleBlock]:
        """Yield the samples of some columns (from 0) as blocks of shape (columns, frames).

        Parameters
        ----------
        columns : sequence of int, column numbers from 0
        block_frames : int, frames a block
        start_frame, stop_frame : int, half-open range of frames; the whole capture by default

        Raises
        ------
        CaptureError
            If the file turns out to be shorter or damaged while it is read.
        """
        stop = self.frame_count if stop_frame is None else min(stop_frame, self.frame_count)
        return self.source(columns, block_frames, start_frame, stop)


def find_column(capture: Capture, wanted: int | str) -> int:
    """Return the column number (from 0) of a channel given by number (from 1) or by name.

    A text that is the exact name of a channel is taken as the name; otherwise a text of
    digits is a number.

    Raises
    ------
    ChannelError
        If there is no such channel; the message lists those that are there.
    """
    names = [channel.name for channel in capture.channels]
    if isinstance(wanted, str) and wanted in names:
        if names.count(wanted) > 1:
            raise ChannelError(
                f"{capture.path}: channel name '{wanted}' stands {names.count(wanted)} times; "
                "give the channel number"
            )
        return names.index(wanted)
    text = str(wanted).strip()
    if text.isascii() and text.isdigit() and 1 <= int(text) <= len(names):
        return int(text) - 1
    listed = ", ".join(f"{i} '{name}'" for i, name in enumerate(names, start=1))
    raise ChannelError(f"{capture.path}: no channel '{wanted}'; channels are {listed}")
