"""Where psi stays within a band for a window: the union of all windows that do.

Running extremes by doubling, over blocks, of an array or of a row that is read in blocks.
"""

from __future__ import annotations

import numpy as np

from rig.arrays import FloatArray, IntArray
from rig.longarrays import blocks_of

#: Window starts looked at in one go; a block and its extremes fit into a cache of 2 MB.
BLOCK_SAMPLES = 32_768

#: Samples of a window that are looked at one by one.
LONGEST_WINDOW = 262_144


def qualifying_unions(psi_rad: FloatArray, band_rad: float, window: int) -> list[tuple[int, int]]:
    """Return the unions of all windows in which psi spans less than the band.

    Parameters
    ----------
    psi_rad : array, shape (n,), rad
        Unwrapped.
    band_rad : float, rad
        Full width 4 pi eps.
    window : int
        Samples in a window, at least 2.

    Returns
    -------
    list of (int, int)
        Sample spans, stop excluded. Two windows belong together when they share a sample;
        windows either side of a whole-turn slip never do.

    Notes
    -----
    Running extremes by doubling: log2(window) passes whatever the window, over blocks that
    stay in the processor's cache (six times faster on long records). A window of more than
    ``LONGEST_WINDOW`` samples is looked at in extremes of some samples each, and its ends are
    as coarse.
    """
    if psi_rad.size < window:
        return []
    each = 1 + window // LONGEST_WINDOW
    if each == 1:
        return _unions(psi_rad, psi_rad, band_rad, window)
    low, high = (_block_extremes(psi_rad, each, extreme) for extreme in (np.minimum, np.maximum))
    found = _unions(low, high, band_rad, -(-window // each))
    return [(a * each, min(b * each, psi_rad.size)) for a, b in found]


def _block_extremes(psi_rad: FloatArray, each: int, extreme: np.ufunc) -> FloatArray:
    """Return the lowest or highest of every so many samples; the last may be fewer."""
    together = BLOCK_SAMPLES // each * each
    return np.concatenate(
        [
            extreme.reduceat(psi_rad[a:b], np.arange(0, b - a, each))
            for a, b in blocks_of(0, psi_rad.size, together)
        ]
    )


def _unions(
    low: FloatArray, high: FloatArray, band_rad: float, window: int
) -> list[tuple[int, int]]:
    """Return the unions of the windows over which the highest and lowest are near enough."""
    block = max(BLOCK_SAMPLES, window)
    found: list[tuple[int, int]] = []
    for a in range(0, low.size - window + 1, block):
        starts = a + _qualifying_starts(low, high, (a, a + block + window - 1), band_rad, window)
        for first, stop in _joined(starts, window):
            if found and first < found[-1][1]:
                found[-1] = (found[-1][0], stop)
            else:
                found.append((first, stop))
    return found


def _joined(starts: IntArray, window: int) -> list[tuple[int, int]]:
    """Return the spans of windows that share samples."""
    if starts.size == 0:
        return []
    breaks = np.flatnonzero(np.diff(starts) >= window)
    firsts = starts[np.concatenate(([0], breaks + 1))]
    lasts = starts[np.concatenate((breaks, [starts.size - 1]))]
    return [(int(a), int(b) + window) for a, b in zip(firsts, lasts, strict=True)]


def _qualifying_starts(
    low: FloatArray, high: FloatArray, span: tuple[int, int], band_rad: float, window: int
) -> IntArray:
    """Return where the windows begin in which psi spans less than the band."""
    lows = low[slice(*span)]
    highs = lows if high is low else high[slice(*span)]
    reach = _running(highs, window, np.maximum) - _running(lows, window, np.minimum)
    return np.flatnonzero(reach < band_rad)


def _running(values: FloatArray, window: int, extreme: np.ufunc) -> FloatArray:
    """Return the running maximum or minimum of each full window by doubling."""
    width, result = 1, values
    while 2 * width <= window:
        result = extreme(result[:-width], result[width:])
        width *= 2
    rest = window - width
    return np.asarray(extreme(result[: result.size - rest], result[rest:]) if rest else result)
