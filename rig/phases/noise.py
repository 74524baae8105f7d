"""Noise in a band, read from the base-band signal itself.

The modulus of a turning vector carries half of the noise and none of the oscillator's
phase; the fast half of its spectrum inside the band is therefore the floor, unless the
amplitude itself is modulated that fast.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rig.arrays import BoolArray, FloatArray, median
from rig.phases.stretches import runs_of

PIECE = 256  # samples a piece: 60 bins in the fast half of the band
MOST_PIECES = 256  # 3e4 degrees of freedom: more cost time and tell nothing
FAST_FROM, FAST_TO = 0.5, 0.95  # of the half band: above the beats, below the filter's edge
EDGE_FROM = 0.75


@dataclass(frozen=True, slots=True, kw_only=True)
class BandNoise:
    """Noise of a base-band signal: densities one-sided in squared units per hertz.

    ``amplitude_density`` belongs to the modulus, ``phase_density`` to modulus times phase
    (both one-sided over 0 ... half band, fast half); ``edge_ratio`` is how far the phase
    stands above the noise in the outer quarter of the band; ``freedom`` is the degrees of
    freedom of a density.
    """

    amplitude_density: float
    phase_density: float
    edge_ratio: float
    freedom: int


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class BaseBand:
    """A turning vector (n,) at base band, where it is valid (n,), its rate and half band."""

    vector: NDArray[Any]
    valid: BoolArray
    rate_hz: float
    half_hz: float


def band_noise(base: BaseBand) -> BandNoise | None:
    """Return the noise in the fast half of a band, None where no stretch is long enough."""
    rate_hz, half_hz = base.rate_hz, base.half_hz
    size = _piece_size(base.valid)
    if size < 16:
        return None
    radial, across, pieces = _mean_densities(base, size)
    frequency = np.arange(radial.size) * rate_hz / size
    fast = (frequency >= FAST_FROM * half_hz) & (frequency <= FAST_TO * half_hz)
    edge = fast & (frequency >= EDGE_FROM * half_hz)
    if not edge.any():
        return None
    to_mean = 1.0 / (1.0 - 1.0 / (9.0 * pieces)) ** 3
    floor = median(radial[fast]) * to_mean
    return BandNoise(
        amplitude_density=floor,
        phase_density=median(across[fast]) * to_mean,
        edge_ratio=float(np.mean(across[edge]) / max(floor, 1e-300)),
        freedom=2 * pieces * int(fast.sum()),
    )


def _piece_size(valid: BoolArray) -> int:
    longest = int(max((stop - first for first, stop in runs_of(valid)), default=0))
    return PIECE if longest >= 2 * PIECE else longest // 2 * 2


def _mean_densities(base: BaseBand, size: int) -> tuple[FloatArray, FloatArray, int]:
    window = 0.5 - 0.5 * np.cos(2.0 * math.pi * np.arange(size) / size)
    scale = 2.0 / (base.rate_hz * np.sum(window**2))
    radial = np.zeros(size // 2 + 1)
    across = np.zeros(size // 2 + 1)
    pieces = 0
    for first, stop in runs_of(base.valid):
        count = (stop - first) // size
        count = min(count, MOST_PIECES - pieces)
        if count <= 0:
            continue
        table = base.vector[first : first + count * size].reshape(count, size)
        modulus = np.abs(table)
        angle = np.unwrap(np.angle(table), axis=1) * modulus.mean()
        radial += np.sum(np.abs(np.fft.rfft(_level(modulus) * window)) ** 2, axis=0) * scale
        across += np.sum(np.abs(np.fft.rfft(_level(angle) * window)) ** 2, axis=0) * scale
        pieces += count
    return radial / max(pieces, 1), across / max(pieces, 1), pieces


def _level(table: FloatArray) -> FloatArray:
    """Take a straight line off each row."""
    time = np.arange(table.shape[1]) - (table.shape[1] - 1) / 2.0
    rest = table - table.mean(axis=1, keepdims=True)
    return np.asarray(rest - np.outer(rest @ time / (time @ time), time))
