"""Lines in the spectrum of a channel: frequency, amplitude, and the floor they stand on.

Phases are not estimated here: see ``rig.phases``; densities come from ``rig.density``.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from rig.arrays import BoolArray, FloatArray, median
from rig.captures import Capture
from rig.density import (
    MAX_SAMPLES,
    PIECES,
    Spectrum,
    averaged_spectrum,
    capture_spectrum,
    mean_down,
    piece_frames,
    read_span,
    smooth_length,
    spectrum_of,
    whole_spectrum,
)
from rig.errors import PhaseError

__all__ = [
    "MAX_SAMPLES",
    "PIECES",
    "Line",
    "Spectrum",
    "averaged_spectrum",
    "capture_spectrum",
    "chance_prominence_db",
    "clear_line",
    "dominant_line",
    "find_lines",
    "line_near",
    "mean_down",
    "measure_line",
    "noise_floor",
    "piece_frames",
    "read_span",
    "smooth_length",
    "spectrum_of",
    "whole_spectrum",
]

FEWEST_CYCLES = 8.0  # below this many cycles a piece the whole record is used instead
LOBE_BINS = 2  # half width of the main lobe of the Hann window
FLOOR_RATIO = 4.0  # a smoothed density this far above the floor still belongs to the line
VALLEY_RATIO = 6.0  # a rise by this much from the lowest density passed is another line
FIRST_SPAN = 512  # bins looked at first on either side of a line
GUARD_BINS = 6  # bins of the line that are never counted as floor


@dataclass(frozen=True, slots=True, kw_only=True)
class Line:
    """One line of a spectrum.

    ``amplitude`` is the peak value in sample units; ``noise_density`` the floor around the
    line, squared sample units per hertz; ``snr_db`` the power of the line against the floor
    in a band as wide as the frequency of the line itself; ``width_hz`` the span of bins that
    belong to it; ``prominence_db`` how far its top stands above the floor.
    """

    frequency_hz: float
    amplitude: float
    noise_density: float
    snr_db: float
    width_hz: float
    prominence_db: float
    resolution_hz: float


def dominant_line(
    capture: Capture,
    column: int,
    *,
    low_hz: float | None = None,
    high_hz: float | None = None,
    max_samples: int = MAX_SAMPLES,
) -> Line:
    """Return the strongest line of one column between two frequencies.

    Parameters
    ----------
    capture : Capture
    column : int, column number from 0
    low_hz, high_hz : float, Hz, the band searched; by default everything above zero
    max_samples : int, samples transformed at most

    Raises
    ------
    PhaseError
        If the channel does not oscillate, holds too few finite samples, or the band is empty.

    Notes
    -----
    For a wave of pulses a harmonic may be stronger than the fundamental; see ``find_lines``.
    """
    spectrum, lines = _best_lines(capture, column, (low_hz, high_hz), max_samples)
    if not lines:
        raise PhaseError(_no_line_text(spectrum.channel, low_hz, high_hz))
    return lines[0]


def clear_line(capture: Capture, column: int, *, max_samples: int = MAX_SAMPLES) -> Line | None:
    """Return the strongest line of a column if it stands above what noise alone shows.

    Its frequency is taken from the whole record where that resolves it better.

    Parameters
    ----------
    capture : Capture
    column : int, column number from 0
    max_samples : int, samples transformed at most
    """
    try:
        spectrum, lines = _best_lines(capture, column, (None, None), max_samples)
    except PhaseError:
        return None
    if not lines or lines[0].prominence_db < chance_prominence_db(spectrum):
        return None
    if capture.frame_count > max_samples or spectrum.pieces == 1:
        return lines[0]
    whole = whole_spectrum(capture, column, max_samples=max_samples)
    sharp = line_near(whole, lines[0].frequency_hz, spectrum.resolution_hz)
    return replace(lines[0], frequency_hz=sharp.frequency_hz, resolution_hz=sharp.resolution_hz)


def _best_lines(
    capture: Capture, column: int, band_hz: tuple[float | None, float | None], max_samples: int
) -> tuple[Spectrum, tuple[Line, ...]]:
    """Return the strongest line from the pieces, or from the whole record when it is slow."""
    low_hz, high_hz = band_hz
    spectrum = capture_spectrum(capture, column, max_samples=max_samples)
    lines = find_lines(spectrum, low_hz=low_hz, high_hz=high_hz, count=1)
    if _is_slow(lines, spectrum):
        spectrum = whole_spectrum(capture, column, max_samples=max_samples)
        lines = find_lines(spectrum, low_hz=low_hz, high_hz=high_hz, count=1)
    return spectrum, lines


def _is_slow(lines: tuple[Line, ...], spectrum: Spectrum) -> bool:
    """Tell whether the strongest line has too few cycles in a piece to be trusted."""
    return not lines or lines[0].frequency_hz < FEWEST_CYCLES * spectrum.resolution_hz


def _no_line_text(channel: str, low_hz: float | None, high_hz: float | None) -> str:
    high = "half the rate" if high_hz is None else f"{high_hz:g} Hz"
    return (
        f"channel '{channel}' has no line between {low_hz or 0.0:g} Hz and {high}; "
        "check the cable, the channel order and the band"
    )


def find_lines(
    spectrum: Spectrum,
    *,
    low_hz: float | None = None,
    high_hz: float | None = None,
    count: int = 8,
    floor_db: float = 12.0,
) -> tuple[Line, ...]:
    """Return the strongest lines of a spectrum, strongest first.

    Parameters
    ----------
    spectrum : Spectrum
    low_hz, high_hz : float, Hz, the band searched
    count : int, lines wanted at most
    floor_db : float, dB, a second or later line must stand this far above its floor: the
        largest of 1e5 bins of noise averaged 8 times stands about 6 dB above its mean

    Notes
    -----
    The first line is returned however weak: its ``prominence_db`` says what it is worth.
    """
    free = np.flatnonzero(_searched(spectrum, low_hz, high_hz))
    # A third of all bins are tops: only these are looked through again for each line.
    heights = spectrum.density[free]
    lines: list[Line] = []
    while len(lines) < count and heights.size and heights.max() > 0:
        line, first, last = measure_line(spectrum, int(free[np.argmax(heights)]))
        heights[slice(*np.searchsorted(free, (first, last + 1)))] = 0.0
        if lines and line.prominence_db < floor_db:
            break
        lines.append(line)
    return tuple(lines)


def line_near(spectrum: Spectrum, frequency_hz: float, reach_hz: float) -> Line:
    """Return the line at the highest bin within a reach of a frequency, however weak.

    Parameters
    ----------
    spectrum : Spectrum
    frequency_hz, reach_hz : float, Hz; at least two bins on either side are looked at

    Raises
    ------
    PhaseError
        If the frequency lies outside the spectrum.
    """
    reach = max(2, math.ceil(reach_hz / spectrum.resolution_hz))
    centre = round(frequency_hz / spectrum.resolution_hz)
    first, last = max(1, centre - reach), min(spectrum.density.size - 1, centre + reach)
    if first > last:
        raise PhaseError(
            f"channel '{spectrum.channel}': {frequency_hz:g} Hz lies outside the spectrum up to "
            f"{spectrum.frequency_hz[-1]:g} Hz; raise the rate"
        )
    top = first + int(np.argmax(spectrum.density[first : last + 1]))
    return measure_line(spectrum, top)[0]


def chance_prominence_db(spectrum: Spectrum, chance: float = 0.001) -> float:
    """Return how far the highest bin of plain noise stands above its mean, dB.

    Wilson and Hilferty's cube for the chi-square of 2 x pieces degrees of freedom, at a
    chance over all bins together (recalled; exact to 0.3 dB for one piece and more).
    """
    bins = max(2, spectrum.density.size)
    deviate = math.sqrt(2.0 * math.log(bins / chance))
    ninth = 1.0 / (9.0 * spectrum.pieces)
    return 30.0 * math.log10(1.0 - ninth + deviate * math.sqrt(ninth))


def _searched(spectrum: Spectrum, low_hz: float | None, high_hz: float | None) -> BoolArray:
    free = spectrum.frequency_hz >= max(low_hz or 0.0, 1.5 * spectrum.resolution_hz)
    if high_hz is not None:
        free &= spectrum.frequency_hz <= high_hz
    tops = _is_top(spectrum.density)
    # What rises to the lower end of the spectrum is a line too slow for it, not a slope.
    tops[:3] |= spectrum.density[:3] >= spectrum.density[:4][-3:]
    return np.asarray(free & tops)


def _is_top(density: FloatArray) -> BoolArray:
    """Tell which bins are no lower than their neighbours: a slope leads to another line."""
    beside = np.pad(density, 1, constant_values=0.0)
    return np.asarray((density > 0) & (density >= beside[:-2]) & (density >= beside[2:]))


def measure_line(spectrum: Spectrum, top: int) -> tuple[Line, int, int]:
    """Return the line whose highest bin is ``top``, and its first and last bin.

    The power is the sum over its bins less the floor; the frequency comes from the two
    highest bins of a narrow line and from the centre of power of a wide one.
    """
    floor = noise_floor(spectrum, top)
    first, last = _extent(spectrum.density, top, floor)
    bins = spectrum.density[first : last + 1]
    power = max(float(np.sum(bins - floor)), float(bins.max()) * 0.5) * spectrum.resolution_hz
    frequency_hz = _line_frequency_hz(spectrum, top, first, last)
    line = Line(
        frequency_hz=frequency_hz,
        amplitude=math.sqrt(2.0 * power),
        noise_density=floor,
        snr_db=_decibel(power, floor * frequency_hz),
        width_hz=(last - first + 1) * spectrum.resolution_hz,
        prominence_db=_decibel(float(spectrum.density[top]), floor),
        resolution_hz=spectrum.resolution_hz,
    )
    return line, first, last


def _decibel(power: float, reference: float) -> float:
    """Return 10 log10 of a ratio, held within 300 dB so that it stays a number."""
    if not reference > 0:
        return 300.0
    return min(300.0, max(-300.0, 10.0 * math.log10(max(power, 1e-300) / reference)))


def noise_floor(spectrum: Spectrum, top: int) -> float:
    """Return the density of the floor around a bin, squared sample units per hertz.

    The median of the bins from half to one and a half of its frequency, the line itself
    left out, brought to the mean of a chi-square of 2 x pieces degrees of freedom.
    """
    low, high = max(1, top // 2 - 8), min(spectrum.density.size, 3 * top // 2 + 9)
    index = np.arange(low, high)
    around = spectrum.density[low:high][np.abs(index - top) > GUARD_BINS]
    if around.size == 0:
        return float(spectrum.density[1:].min())
    # Wilson and Hilferty 1931: median of chi-square over its mean is (1 - 2 / (9 k))**3
    ratio = (1.0 - 1.0 / (9.0 * spectrum.pieces)) ** 3
    return median(around) / ratio


def _extent(density: FloatArray, top: int, floor: float) -> tuple[int, int]:
    right = _reach(density[max(0, top - 1) :], floor, top > 0)
    left = _reach(density[top + 1 :: -1], floor, top < density.size - 1)
    return max(1, top - left), min(density.size - 1, top + right)


def _reach(outward: FloatArray, floor: float, has_inner: bool) -> int:
    """Return how many bins outward still belong to the line: down to floor or a valley.

    ``outward`` begins one bin on the other side of the top where there is one. Most lines
    are narrow: what is looked at grows until the end is in it.
    """
    span = FIRST_SPAN
    while True:
        part = outward[: span + 1]
        smooth = np.convolve(part, np.ones(3) / 3.0, mode="same")[int(has_inner) :]
        is_all = part.size == outward.size
        end = _end_of_line(smooth if is_all else smooth[:-1], floor)
        if end is not None or is_all:
            return smooth.size - 1 if end is None else end
        span *= 8


def _end_of_line(smooth: FloatArray, floor: float) -> int | None:
    """Return the last bin of a line within a smoothed density from its top on."""
    lowest = np.minimum.accumulate(smooth)
    ended = (smooth < FLOOR_RATIO * floor) | (smooth > VALLEY_RATIO * lowest)
    ended[: LOBE_BINS + 1] = False
    if not ended.any():
        return None
    end = int(np.argmax(ended))
    # A rise means the valley was passed: the line ends at its lowest bin.
    return max(LOBE_BINS, int(np.argmin(smooth[: end + 1])))


def _line_frequency_hz(spectrum: Spectrum, top: int, first: int, last: int) -> float:
    if last - first > 2 * GUARD_BINS and not _is_narrow(spectrum.density, top):
        bins = spectrum.density[first : last + 1]
        return float(np.average(spectrum.frequency_hz[first : last + 1], weights=bins))
    return (top + _offset_bins(spectrum.density, top)) * spectrum.resolution_hz


def _is_narrow(density: FloatArray, top: int) -> bool:
    """Tell whether most of the power near a top lies in one main lobe."""
    near = density[max(0, top - 12) : top + 13].sum()
    return bool(density[max(0, top - LOBE_BINS) : top + LOBE_BINS + 1].sum() > 0.9 * near)


def _offset_bins(density: FloatArray, top: int) -> float:
    """Return the distance of a line from its highest bin, in bins, for the Hann window.

    The moduli of two neighbouring bins stand as (1 + d) : (2 - d).
    """
    if not 0 < top < density.size - 1:
        return 0.0
    side = 1 if density[top + 1] >= density[top - 1] else -1
    ratio = math.sqrt(max(0.0, density[top + side] / density[top]))
    return side * min(0.5, max(-0.5, (2.0 * ratio - 1.0) / (1.0 + ratio)))
