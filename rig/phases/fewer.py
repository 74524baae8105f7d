"""A long track by every so many of its samples: for what looks at slow motion only.

Samples are taken, never averaged, so that a diffusing phase keeps its increments. Turns are
counted before, so none is lost however far apart the samples stand.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from rig.arrays import BoolArray
from rig.longarrays import LONG_SAMPLES, blocks_of
from rig.phases.track import PhaseTrack

FEWER_SAMPLES = 524_288  # a sample a tenth of a second over half a day


def fewer_samples(track: PhaseTrack) -> PhaseTrack:
    """Return a track as it is, or every so many samples of one too long for memory.

    A sample stays valid where all up to the next one are: what lies on the two sides of a
    gap, however short, is not joined.

    Parameters
    ----------
    track : PhaseTrack
    """
    if track.phase_rad.size <= LONG_SAMPLES:
        return track
    every = -(-track.phase_rad.size // FEWER_SAMPLES)
    return replace(
        track,
        rate_hz=track.rate_hz / every,
        phase_rad=track.phase_rad[::every],
        amplitude=track.amplitude[::every],
        valid=_valid_throughout(track.valid, every),
        u_rad=track.u_rad[::every],
        correlation_samples=max(1.0, track.correlation_samples / every),
    )


def _valid_throughout(valid: BoolArray, every: int) -> BoolArray:
    blocks = blocks_of(0, valid.size, every * max(1, LONG_SAMPLES // every))
    parts = [np.logical_and.reduceat(valid[a:b], np.arange(0, b - a, every)) for a, b in blocks]
    return np.concatenate(parts)
