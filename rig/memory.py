"""A capture of samples that are in memory already: the last seconds of a growing one."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field

from rig.arrays import SampleBlock
from rig.captures import Capture, CaptureChannel


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class HeldSamples:
    """Block source over an array of shape (channels, frames)."""

    samples: SampleBlock = field(repr=False)

    def __call__(
        self, columns: Sequence[int], block_frames: int, start_frame: int, stop_frame: int
    ) -> Iterator[SampleBlock]:
        """Yield blocks of the chosen columns."""
        for first in range(start_frame, stop_frame, block_frames):
            yield self.samples[list(columns), first : min(first + block_frames, stop_frame)]


def held_capture(
    samples: SampleBlock, rate_hz: float, channels: tuple[CaptureChannel, ...], path: str
) -> Capture:
    """Return a capture of samples in memory.

    Parameters
    ----------
    samples : array, shape (channels, frames); not copied
    rate_hz : float, Hz
    channels : tuple of CaptureChannel
    path : str, the name that errors and results show

    Raises
    ------
    ValueError
        If there is no frame or no channel.
    """
    return Capture(
        path=path,
        format="memory",
        rate_hz=rate_hz,
        frame_count=samples.shape[1],
        channels=channels,
        source=HeldSamples(samples=samples),
    )
