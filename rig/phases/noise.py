"""Noise in a band, read from the base-band signal itself.

The modulus of a turning vector carries half of the noise and none of the oscillator's
phase; the fast half of its spectrum inside the band is therefore the floor, unless the
amplitude itself is modulated that fast.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from rig.angles import TURN_RAD
from rig.arrays import FloatArray, IntArray, median
from rig.longarrays import blocks_of

PIECES_AT_ONCE = 32  # transformed together: they stay in the cache
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
    """A turning vector at base band: unwrapped turns (n,), length (n,), rate and half band.

    ``runs`` (k, 2) are the half-open spans in which it is valid.
    """

    turns: FloatArray
    modulus: FloatArray
    runs: IntArray
    rate_hz: float
    half_hz: float


def band_noise(base: BaseBand) -> BandNoise | None:
    """Return the noise in the fast half of a band, None where no stretch is long enough."""
    rate_hz, half_hz = base.rate_hz, base.half_hz
    size = _piece_size(base.runs)
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


def _piece_size(runs: IntArray) -> int:
    longest = int(np.max(runs[:, 1] - runs[:, 0], initial=0))
    return PIECE if longest >= 2 * PIECE else longest // 2 * 2


def _mean_densities(base: BaseBand, size: int) -> tuple[FloatArray, FloatArray, int]:
    window = 0.5 - 0.5 * np.cos(TURN_RAD * np.arange(size) / size)
    scale = 2.0 / (base.rate_hz * np.sum(window**2))
    radial = np.zeros(size // 2 + 1)
    across = np.zeros(size // 2 + 1)
    pieces = 0
    for first, stop in base.runs.tolist():
        count = min((stop - first) // size, MOST_PIECES - pieces)
        if count <= 0:
            continue
        angles, total = np.zeros(size // 2 + 1), 0.0
        for start, end in blocks_of(first, first + count * size, PIECES_AT_ONCE * size):
            modulus = base.modulus[start:end].reshape(-1, size)
            kind = modulus.dtype
            # Single precision suffices where the samples have no more.
            turned = _level(base.turns[start:end].reshape(-1, size)).astype(kind)
            radial += _power(_level(modulus), window.astype(kind)) * scale
            angles += _power(turned, window.astype(kind)) * scale
            total += float(modulus.sum(dtype=float))
        across += angles * (TURN_RAD * total / (count * size)) ** 2
        pieces += count
    return radial / max(pieces, 1), across / max(pieces, 1), pieces


def _power(table: FloatArray, window: FloatArray) -> FloatArray:
    """Return the squared moduli of the windowed transforms of all rows, added up."""
    transform = np.fft.rfft(table * window)
    parts = transform.real**2 + transform.imag**2
    return np.asarray(np.sum(parts, axis=0, dtype=float))


def _level(table: FloatArray) -> FloatArray:
    """Take a straight line off each row."""
    time = (np.arange(table.shape[1]) - (table.shape[1] - 1) / 2.0).astype(table.dtype)
    rest = table - table.mean(axis=1, keepdims=True)
    return np.asarray(rest - np.outer(rest @ time / (time @ time), time))
