"""Does a channel hold the partner's line beside its own? Crosstalk can look like locking.

Two lines that are merely added beat in amplitude: the squared modulus turns at their
distance with the product of their sizes. A pulled oscillator shows many lines as well, but
its amplitude stays even, so that product is missing.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from typing import NamedTuple

import numpy as np

from rig.angles import rad_s_from_hz
from rig.arrays import ComplexArray, FloatArray, frozen_view, median
from rig.density import smooth_length
from rig.errors import PhaseError
from rig.health.locus import circle_through
from rig.phases.finishing import FoundPhase
from rig.phases.grid import Grid

MOST_SAMPLES = 16384  # of the base band looked at: 8000 half periods of the half band
LINE_BINS = 3  # half width of a line under the Hann window, and some wander
NEAREST_BINS = 12  # two lines nearer than this are not told apart
LARGEST_LEAK = 1.0  # partner's line over own: above, the phase counts the partner's turns
SMALLEST_SHARE = 0.05  # a line smaller than this share of the other bends 0.05 rad at most
ABOVE_NOISE = 6.0  # times the noise of a bin: the largest of 1e4 bins reaches 4
STILL_LEVEL = 1e-3  # of the rms: what is left of a filter's response to a signal that stopped
STILL_SHARE = 0.1  # of the samples; the zeros of a beat of two equal lines last far less
TWO_SIDED = 0.5  # of a line: with one like it on the other side both are a modulation
LINEAR_SHARE = 0.5  # of the product expected from plain addition


@dataclass(frozen=True, slots=True, kw_only=True)
class Leak:
    """The partner's line in a channel: its frequency, and its size over the channel's own."""

    partner_hz: float
    own_hz: float
    ratio: float


class _Seen(NamedTuple):
    """The part of a base band that is looked at, its window, and its power spectrum."""

    part: ComplexArray
    window: FloatArray
    power: FloatArray


def leak_notes(names: list[str], found: list[FoundPhase], grid: Grid) -> list[tuple[str, ...]]:
    """Return for each channel what it holds of its partner's line.

    Raises
    ------
    PhaseError
        If a channel holds more of its partner's line than of its own.
    """
    if len(names) == 1:
        return [()]
    seen = [_seen(part.base_band) for part in found]
    mean_hz = [_mean_hz(*each, grid) for each in zip(found, seen, strict=True)]
    leaks = [_leak(found[own], seen[own], mean_hz[1 - own], grid) for own in (0, 1)]
    for own in (0, 1):
        leak = leaks[own]
        is_more = leak is not None and leak.ratio > LARGEST_LEAK and leaks[1 - own] is None
        if leak is not None and is_more and not _goes_round(found[own], found[1 - own], grid):
            raise PhaseError(_refusal(names[own], leak))
    return [_leak_note(leak) for leak in leaks]


def _goes_round(own: FoundPhase, partner: FoundPhase, grid: Grid) -> bool:
    """Tell whether the phase difference still turns about the origin, however large the line.

    A strongly driven oscillator may hold more of its partner's line than of its own and still
    drift; where something is added, the circle of its amplitude does not hold the origin.
    """
    if own.base_band is None or partner.base_band is None:
        return False
    ours, theirs = own.base_band[:MOST_SAMPLES], partner.base_band[:MOST_SAMPLES]
    if ours.size != theirs.size:
        return False
    apart_hz = own.carrier_hz - partner.carrier_hz
    turning = np.exp(1j * rad_s_from_hz(apart_hz) * np.arange(ours.size) / grid.grid_rate_hz)
    clear = np.abs(theirs) > 0
    points = (ours * turning * np.conj(theirs))[clear] / np.abs(theirs[clear])
    circle = circle_through(points)
    return circle is not None and circle.shift < 1.0


def _seen(vector: ComplexArray | None) -> _Seen | None:
    """Return the start of a base band with its spectrum, None where there is none."""
    if vector is None or vector.size < 2:
        return None
    part = vector[: smooth_length(min(vector.size, MOST_SAMPLES))]
    window = _hann(part.size)
    power = np.abs(np.fft.fft(part * window)) ** 2
    return _Seen(part=part, window=window, power=power)


@lru_cache(maxsize=2)
def _hann(size: int) -> FloatArray:
    return frozen_view(np.hanning(size + 2)[1:-1])


def _mean_hz(part: FoundPhase, seen: _Seen | None, grid: Grid) -> float:
    """Return the frequency of the strongest line of the base band, or of the line followed."""
    if seen is None:
        return part.line_hz
    offset_hz = np.fft.fftfreq(seen.part.size, 1.0 / grid.grid_rate_hz)
    return part.carrier_hz + float(offset_hz[int(np.argmax(seen.power))])


def _leak(part: FoundPhase, seen: _Seen | None, partner_hz: float, grid: Grid) -> Leak | None:
    if seen is None or part.band_hz is None:
        return None
    if not part.band_hz[0] < partner_hz < part.band_hz[1] or _stands_still(seen.part):
        return None
    return _leak_in(
        seen,
        rate_hz=grid.grid_rate_hz,
        carrier_hz=part.carrier_hz,
        half_hz=(part.band_hz[1] - part.band_hz[0]) / 2.0,
        partner_hz=partner_hz,
    )


def _stands_still(vector: ComplexArray) -> bool:
    """Tell whether a part of a base band holds nothing: its spectrum is then no row of lines."""
    size = np.abs(vector)
    is_still = size <= STILL_LEVEL * math.sqrt(float(np.mean(size**2)))
    return float(np.mean(is_still)) > STILL_SHARE


def _refusal(name: str, leak: Leak) -> str:
    return (
        f"channel '{name}' holds {leak.ratio:.2f} times more of the partner's line "
        f"({leak.partner_hz:.6g} Hz) than of its own ({leak.own_hz:.6g} Hz): locking cannot be "
        "judged; separate the sensors, lower the drive, or state a band without the partner"
    )


def _leak_note(leak: Leak | None) -> tuple[str, ...]:
    if leak is None:
        return ()
    return (
        f"{leak.ratio:.2g} of its own line at {leak.own_hz:.6g} Hz is added from the partner's at "
        f"{leak.partner_hz:.6g} Hz; the phase is bent by as many radians at the beat",
    )


def find_leak(
    vector: ComplexArray, *, rate_hz: float, carrier_hz: float, half_hz: float, partner_hz: float
) -> Leak | None:
    """Return the partner's line in a channel, None where there is no plain addition of two.

    Parameters
    ----------
    vector : complex array, shape (n,), base band without missing samples
    rate_hz : float, Hz, rate of the base band
    carrier_hz : float, Hz, frequency that became zero
    half_hz : float, Hz, half band
    partner_hz : float, Hz, mean frequency of the partner
    """
    seen = _seen(vector)
    if seen is None:
        return None
    return _leak_in(
        seen, rate_hz=rate_hz, carrier_hz=carrier_hz, half_hz=half_hz, partner_hz=partner_hz
    )


def _leak_in(
    seen: _Seen, *, rate_hz: float, carrier_hz: float, half_hz: float, partner_hz: float
) -> Leak | None:
    part, window = seen.part, seen.window
    if part.size < 8 * NEAREST_BINS:
        return None
    power = seen.power / np.sum(window) ** 2
    offset = np.fft.fftfreq(part.size, 1.0 / rate_hz)
    bin_hz = rate_hz / part.size
    there = np.abs(offset - (partner_hz - carrier_hz)) <= LINE_BINS * bin_hz
    apart = np.abs(offset - (partner_hz - carrier_hz)) > NEAREST_BINS * bin_hz
    if power[~apart].max() > power[there].max(initial=0.0):
        return None  # another line stands too near to tell the partner's
    candidates = np.where(apart & (np.abs(offset) <= half_hz), power, 0.0)
    own = int(np.argmax(candidates))
    partner_size = _line_size(power, there)
    own_size = _line_size(power, np.abs(offset - offset[own]) <= LINE_BINS * bin_hz)
    opposite = 2.0 * (partner_hz - carrier_hz) - float(offset[own])
    if _line_size(power, np.abs(offset - opposite) <= LINE_BINS * bin_hz) > TWO_SIDED * own_size:
        return None  # the amplitude of the line between the two is modulated
    small, large = sorted((partner_size, own_size))
    noise = math.sqrt(median(power[np.abs(offset) <= half_hz]))
    if not small > max(SMALLEST_SHARE * large, ABOVE_NOISE * noise):
        return None
    distance_hz = abs(float(offset[own]) + carrier_hz - partner_hz)
    product = _beat_size(np.abs(part) ** 2, window, distance_hz, bin_hz)
    if product < LINEAR_SHARE * partner_size * own_size:
        return None
    return Leak(
        partner_hz=partner_hz,
        own_hz=float(offset[own]) + carrier_hz,
        ratio=partner_size / own_size,
    )


def _line_size(power: FloatArray, where: np.ndarray) -> float:
    # The Hann window spreads a line's power over 1.5 times its peak bin.
    return math.sqrt(float(np.sum(power[where])) / 1.5)


def _beat_size(square: FloatArray, window: FloatArray, beat_hz: float, bin_hz: float) -> float:
    power = np.abs(np.fft.rfft((square - square.mean()) * window)) ** 2 / np.sum(window) ** 2
    near = np.abs(np.arange(power.size) * bin_hz - beat_hz) <= LINE_BINS * bin_hz
    return _line_size(power, near)
