"""Power density of a channel: averaged windowed transforms of pieces of the record.

Pieces are spread evenly over the record, so that a long capture is judged by all its parts
and never read whole; what is too slow for the pieces is looked for in the whole record,
averaged down. Densities are one-sided, in squared sample units per hertz, for the Hann
window. Lines are found in ``rig.spectrum``.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np

from rig.arrays import BoolArray, FloatArray, frozen_view
from rig.captures import Capture
from rig.errors import PhaseError

MAX_SAMPLES = 1_048_576  # samples transformed at most: 8 MB, 0.1 s
PIECES = 8  # averaging 8 pieces leaves 35 % scatter of a density
MISSING_SHARE = 0.5  # a piece with more samples missing tells too little about a line


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Spectrum:
    """Power density of one channel.

    ``density`` (n,) is one-sided, squared sample units per hertz, at ``frequency_hz`` (n,);
    ``resolution_hz`` is the spacing of the bins and ``pieces`` how many were averaged.
    """

    channel: str
    frequency_hz: FloatArray
    density: FloatArray
    resolution_hz: float
    pieces: int

    def __post_init__(self) -> None:
        for name in ("frequency_hz", "density"):
            object.__setattr__(self, name, frozen_view(getattr(self, name)))


def capture_spectrum(
    capture: Capture, column: int, *, max_samples: int = MAX_SAMPLES, pieces: int = PIECES
) -> Spectrum:
    """Return the density averaged over pieces spread evenly over the record.

    Parameters
    ----------
    capture : Capture
    column : int, column number from 0
    max_samples : int, samples transformed at most, shared among the pieces
    pieces : int, pieces wanted; a short record is cut into pieces that overlap by half

    Raises
    ------
    PhaseError
        If there are fewer than 16 samples, all pieces have gaps, or nothing oscillates.
    """
    length = piece_frames(capture.frame_count, max_samples, pieces)
    starts = np.linspace(0, capture.frame_count - length, pieces).astype(int)
    parts = [read_span(capture, column, int(s), int(s) + length) for s in sorted(set(starts))]
    return spectrum_of(capture.channels[column].name, parts, capture.rate_hz)


def piece_frames(frame_count: int, max_samples: int, pieces: int) -> int:
    """Return the frames of a piece, so that the pieces overlap by half or lie apart."""
    by_record = 2 * frame_count // (pieces + 1)
    return max(min(by_record, max_samples // pieces, frame_count), min(frame_count, 16))


def whole_spectrum(capture: Capture, column: int, *, max_samples: int = MAX_SAMPLES) -> Spectrum:
    """Return the density of the whole record in one piece, averaged down when it is long.

    Notes
    -----
    The running mean droops as sinc(f / rate), which is undone; what lies above the new half
    rate folds down weakened, so this serves lines far below it.
    """
    factor = -(-capture.frame_count // max_samples)
    means = mean_down(capture, column, factor)
    return averaged_spectrum(capture.channels[column].name, means, capture.rate_hz, factor)


def averaged_spectrum(channel: str, means: FloatArray, rate_hz: float, factor: int) -> Spectrum:
    """Return the density of samples that are means over runs of ``factor`` frames.

    Parameters
    ----------
    channel : str, its name
    means : array, shape (n,), sample units
    rate_hz : float, Hz, before the averaging
    factor : int, frames a mean

    Raises
    ------
    PhaseError
        If there are too few finite means, or nothing oscillates.
    """
    raw = spectrum_of(channel, [means], rate_hz / factor)
    if factor == 1:
        return raw
    droop = np.sinc(raw.frequency_hz * factor / rate_hz) ** 2
    return replace(raw, density=raw.density / droop)


def mean_down(capture: Capture, column: int, factor: int) -> FloatArray:
    """Return the record averaged over runs of ``factor`` frames, missing samples left out."""
    means = []
    for block in capture.blocks([column], block_frames=max(1, 65536 // factor) * factor):
        whole = block.shape[1] // factor * factor
        if whole:
            means.append(_row_means(block[0, :whole].reshape(-1, factor).astype(float)))
    return np.concatenate(means) if means else np.empty(0)


def _row_means(rows: FloatArray) -> FloatArray:
    present = np.isfinite(rows)
    if present.all():
        return np.asarray(rows.mean(axis=1))
    count = present.sum(axis=1)
    total = np.where(present, rows, 0.0).sum(axis=1)
    return np.where(count > 0, total / np.maximum(count, 1), np.nan)


def read_span(capture: Capture, column: int, start: int, stop: int) -> FloatArray:
    """Return a copy of some frames of one column as float64."""
    blocks = capture.blocks([column], start_frame=start, stop_frame=stop)
    parts = [block[0].astype(float) for block in blocks]
    return np.concatenate(parts) if parts else np.empty(0)


def spectrum_of(channel: str, parts: list[FloatArray], rate_hz: float) -> Spectrum:
    """Return the density averaged over parts of equal length, offset and slope taken off.

    Raises
    ------
    PhaseError
        If no part has enough finite samples, or no part oscillates.
    """
    usable = [part for part in parts if _is_usable(part)]
    if not usable:
        raise PhaseError(
            f"channel '{channel}': no piece of the record has 16 samples and at most "
            f"{MISSING_SHARE:.0%} of them missing; record longer or repair the gaps"
        )
    size = smooth_length(min(part.size for part in usable))
    window = _hann(size)
    total = _power(usable[0][:size], window)
    for part in usable[1:]:
        total += _power(part[:size], window)
    density = total * (2.0 / (rate_hz * len(usable)))
    if not density.max() > 0:
        raise PhaseError(
            f"channel '{channel}' has no oscillation (spread 0); "
            "check the cable and the channel order"
        )
    return Spectrum(
        channel=channel,
        frequency_hz=np.asarray(np.arange(density.size) * (rate_hz / size), dtype=float),
        density=density,
        resolution_hz=rate_hz / size,
        pieces=len(usable),
    )


@lru_cache(maxsize=2)
def _hann(size: int) -> FloatArray:
    """Return the window of a length; its cosines cost as much as a transform, so it is kept.

    The channels of a pair, and the captures of a sweep, share two lengths: that of the pieces
    and that of the whole. The second half is the first one mirrored.
    """
    half = 0.5 - 0.5 * np.cos(np.arange(size // 2 + 1) * (2.0 * math.pi / size))
    window = np.empty(size)
    window[: half.size] = half
    window[half.size :] = half[1 : size - half.size + 1][::-1]
    return frozen_view(window)


def smooth_length(most: int) -> int:
    """Return the largest length up to ``most`` with no prime factor above 5.

    Other lengths cost a transform up to ten times the time and four times the memory; the
    few samples left out at the end (1 % of a long piece) do not matter to a spectrum.
    """
    best = 1
    for fives in _powers(5, most):
        for threes in _powers(3, most // fives):
            best = max(best, fives * threes * 2 ** ((most // (fives * threes)).bit_length() - 1))
    return best


def _powers(base: int, most: int) -> list[int]:
    found = [1]
    while found[-1] * base <= most:
        found.append(found[-1] * base)
    return found


def _is_usable(part: FloatArray) -> bool:
    return part.size >= 16 and bool(np.isfinite(part).mean() >= 1.0 - MISSING_SHARE)


def _power(part: FloatArray, window: FloatArray) -> FloatArray:
    """Return the squared modulus of the windowed transform over the power of the window."""
    finite = np.isfinite(part)
    is_whole = bool(finite.all())
    rest = _without_trend(part) if is_whole else _without_trend_of_some(part, finite)
    rest *= window
    transform = np.fft.rfft(rest)
    power = transform.real**2
    power += transform.imag**2
    there = window if is_whole else window[finite]  # a missing sample adds no power
    power /= float(there @ there)
    return np.asarray(power)


def _without_trend(part: FloatArray) -> FloatArray:
    """Take off a straight line; a constant becomes exactly zero."""
    rest = part - part.mean()
    if part.max() == part.min():
        return np.zeros(part.size)
    time = np.arange(part.size) - (part.size - 1) / 2.0
    time *= (time @ rest) / (time @ time)
    rest -= time
    return np.asarray(rest)


def _without_trend_of_some(part: FloatArray, finite: BoolArray) -> FloatArray:
    """Take off a straight line; a missing sample becomes zero, a constant exactly zero."""
    time = np.arange(part.size) - (part.size - 1) / 2.0
    level = part[finite].mean()
    rest = np.where(finite, part - level, 0.0)
    if not rest.any() or np.ptp(part[finite]) == 0.0:
        return np.zeros(part.size)
    slope = (time @ rest) / (time @ time)
    return np.where(finite, rest - slope * time, 0.0)
