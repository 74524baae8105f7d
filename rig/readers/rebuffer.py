"""Pieces of any length into blocks of one length."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from rig.arrays import SampleBlock


def rebuffer(
    pieces: Iterator[SampleBlock], block_frames: int, frame_count: int
) -> Iterator[SampleBlock]:
    """Yield blocks of exactly ``block_frames`` frames (the last may be shorter).

    Parameters
    ----------
    pieces : iterator of arrays, shape (columns, any number of frames)
    block_frames : int, frames a block
    frame_count : int, frames that come in all, so that no larger block is set aside
    """
    block_frames = max(min(block_frames, frame_count), 1)
    block: SampleBlock | None = None
    filled = 0
    for piece in pieces:
        used = 0
        while used < piece.shape[1]:
            if block is None:
                block = np.empty((piece.shape[0], block_frames), dtype=piece.dtype)
            count = min(block_frames - filled, piece.shape[1] - used)
            block[:, filled : filled + count] = piece[:, used : used + count]
            filled, used = filled + count, used + count
            if filled == block_frames:
                yield block
                filled = 0
    if filled and block is not None:
        yield block[:, :filled]
