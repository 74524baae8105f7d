"""The memory of an inspection does not grow with the record, and each sample is read once."""

from __future__ import annotations

import tracemalloc
from collections.abc import Iterator, Sequence

import numpy as np
import pytest

from rig.captures import Capture, CaptureChannel
from rig.health import examine_signals


class CountedSource:
    """Makes blocks of two sines on demand and counts the frames it handed out."""

    def __init__(self) -> None:
        self.frames = 0

    def __call__(
        self, columns: Sequence[int], block_frames: int, start: int, stop: int
    ) -> Iterator[np.ndarray]:
        for first in range(start, stop, block_frames):
            index = np.arange(first, min(first + block_frames, stop))
            self.frames += index.size
            both = np.sin(2 * np.pi * np.array([[0.0101], [0.0113]]) * index)
            yield both[list(columns)].astype(np.float32)


def examined(frames: int) -> tuple[int, int]:
    """Return (peak bytes, frames read) of an inspection of a capture of some frames."""
    source = CountedSource()
    capture = Capture(
        path="made",
        format="made",
        rate_hz=1000.0,
        frame_count=frames,
        channels=(CaptureChannel(name="a"), CaptureChannel(name="b")),
        source=source,
    )
    tracemalloc.start()
    examine_signals(capture)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    return peak, source.frames


def test_memory_stays_and_every_frame_is_read_once(monkeypatch: pytest.MonkeyPatch) -> None:
    """An hour at 51.2 kHz must fit where a minute fits, and must not be read twice."""
    # fewer kept samples than by default: the same bound, reached by a record of seconds
    monkeypatch.setattr("rig.health.survey.SPECTRUM_SAMPLES", 65_536)
    small, large = 400_000, 1_600_000
    peaks = {}
    for frames in (small, large):
        peaks[frames], read = examined(frames)
        assert read == frames
    # what is kept is rounded to whole runs of frames: some percent
    assert peaks[large] < 1.1 * peaks[small]
