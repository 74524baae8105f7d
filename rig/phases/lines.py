"""The line a channel is followed by, and the refusals when there is none to follow."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from rig.arrays import median
from rig.channels import Channel
from rig.errors import PhaseError
from rig.phases.settings import PhaseSettings
from rig.spectrum import (
    Line,
    Spectrum,
    capture_spectrum,
    chance_prominence_db,
    find_lines,
    whole_spectrum,
)

SURVEY_SAMPLES = 131_072  # samples transformed to find the line: 5 ms, 8 pieces
FEWEST_CYCLES_A_PIECE = 16.0  # fewer cycles a piece: the whole record is looked at instead
FEWEST_PER_CYCLE = 4.0  # samples a cycle below which no phase is given
ADVISED_PER_CYCLE = 10.0
FEWEST_CYCLES = 20.0  # cycles: guards of 6 at each end leave 8
EQUAL_RATIO = 0.9  # a second line of this share of the first leaves the choice open
APART = 0.25  # lines nearer than this share of the frequency are one oscillator's beat
POWER_SHARE = 0.99  # of a line's power: its extent
FEWEST_FLOOR_BINS = 16  # above a stated band, for a floor from there
FLOOR_DB = 6.0  # above its floor: lines listed beside the first
DRIFT_SHARE = 0.3  # of the size of a drift: a line smaller than this is not the signal
FALSE_LINES = 0.001  # chance that plain noise passes for a line


class FewCyclesError(PhaseError):
    """A record with too few cycles for a filter; ``cycles`` says how many."""

    def __init__(self, text: str, cycles: float) -> None:
        super().__init__(text)
        self.cycles = cycles


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class FollowedLine:
    """The line of a channel: frequency, peak value and noise floor in sample units.

    ``extent_hz`` is how far from it the power of the line reaches on either side;
    ``others`` are further lines of the channel in the search band, strongest first.
    """

    frequency_hz: float
    amplitude: float
    noise_density: float
    extent_hz: float
    resolution_hz: float
    others: tuple[Line, ...]
    spectrum: Spectrum
    notes: tuple[str, ...] = ()


def follow_line(channel: Channel, settings: PhaseSettings) -> FollowedLine:
    """Return the line of a channel, searched within the stated band.

    Raises
    ------
    PhaseError
        If the channel is silent, has no line above its noise or two equal ones, fewer than
        4 samples a cycle, or too few cycles (FewCyclesError).
    """
    spectrum, lines = _lines_of(channel, settings)
    name = channel.name
    needed_db = chance_prominence_db(spectrum, FALSE_LINES)
    if lines and settings.band_hz is not None and lines[0].prominence_db < needed_db:
        lines = (_against_outside(lines[0], spectrum, settings.band_hz[1]), *lines[1:])
    if not lines or lines[0].prominence_db < needed_db:
        raise PhaseError(_no_line_text(name, settings, lines, needed_db))
    line = lines[0]
    _refuse_equal(name, lines, settings)
    _refuse_coarse(name, channel.capture.rate_hz, line.frequency_hz)
    _refuse_short(name, channel.capture.duration_s, line.frequency_hz)
    return FollowedLine(
        frequency_hz=line.frequency_hz,
        amplitude=line.amplitude,
        noise_density=line.noise_density,
        extent_hz=_power_extent_hz(spectrum, line),
        resolution_hz=line.resolution_hz,
        others=lines[1:],
        spectrum=spectrum,
        notes=_line_notes(channel.capture.rate_hz, lines),
    )


def rough_line(channel: Channel, settings: PhaseSettings) -> FollowedLine:
    """Return the strongest line of a channel whatever it is worth; for methods by instants.

    They need the floor and a rough frequency only, and a wheel that runs up has no line.
    """
    spectrum, lines = _lines_of(channel, settings)
    if not lines:
        raise PhaseError(_no_line_text(channel.name, settings, lines, 0.0))
    return FollowedLine(
        frequency_hz=lines[0].frequency_hz,
        amplitude=lines[0].amplitude,
        noise_density=lines[0].noise_density,
        extent_hz=lines[0].width_hz / 2.0,
        resolution_hz=lines[0].resolution_hz,
        others=lines[1:],
        spectrum=spectrum,
    )


def _lines_of(channel: Channel, settings: PhaseSettings) -> tuple[Spectrum, tuple[Line, ...]]:
    low, high = settings.band_hz or (None, None)
    spectrum = capture_spectrum(channel.capture, channel.column, max_samples=SURVEY_SAMPLES)
    lines = find_lines(spectrum, low_hz=low, high_hz=high, count=6, floor_db=FLOOR_DB)
    if lines and lines[0].frequency_hz >= FEWEST_CYCLES_A_PIECE * spectrum.resolution_hz:
        return spectrum, lines
    whole = whole_spectrum(channel.capture, channel.column, max_samples=SURVEY_SAMPLES)
    slow = find_lines(whole, low_hz=low, high_hz=high, count=6, floor_db=FLOOR_DB)
    for seen, found in ((whole, slow), (spectrum, lines)):
        above = _above_drift(found, seen, channel.capture.duration_s)
        if above:
            return seen, above
    return whole, slow


def _above_drift(
    lines: tuple[Line, ...], spectrum: Spectrum, duration_s: float
) -> tuple[Line, ...]:
    """Return the lines without those of a slow drift, none where no fair line is left."""
    kept = tuple(line for line in lines if line.frequency_hz * duration_s >= FEWEST_CYCLES)
    if not kept or kept[0].prominence_db < chance_prominence_db(spectrum, FALSE_LINES):
        return ()
    return kept if kept[0].amplitude > DRIFT_SHARE * lines[0].amplitude else ()


def _against_outside(line: Line, spectrum: Spectrum, high_hz: float) -> Line:
    """Return a line of a stated band set against the floor above the band.

    A breath or a wandering clock fills its band, and there is no floor beside it.
    """
    above = (spectrum.frequency_hz > 2.0 * high_hz) & (spectrum.frequency_hz < 20.0 * high_hz)
    if above.sum() < FEWEST_FLOOR_BINS:
        return line
    floor = median(spectrum.density[above])
    if not 0 < floor < line.noise_density:
        return line
    rise_db = 10.0 * math.log10(line.noise_density / floor)
    return replace(line, noise_density=floor, prominence_db=line.prominence_db + rise_db)


def _power_extent_hz(spectrum: Spectrum, line: Line) -> float:
    """Return how far from a line 99 % of its power reaches.

    The skirts of the window around a strong line do not count: they hold no power.
    """
    distance = np.abs(spectrum.frequency_hz - line.frequency_hz)
    near = distance <= line.width_hz
    order = np.argsort(distance[near])
    power = np.cumsum(np.maximum(spectrum.density[near] - line.noise_density, 0.0)[order])
    if power.size == 0:
        return line.resolution_hz
    reach = int(np.searchsorted(power, POWER_SHARE * power[-1]))
    return float(distance[near][order][min(reach, power.size - 1)])


def _no_line_text(
    name: str, settings: PhaseSettings, lines: tuple[Line, ...], needed_db: float
) -> str:
    where = "at any frequency"
    if settings.band_hz is not None:
        where = f"from {settings.band_hz[0]:g} to {settings.band_hz[1]:g} Hz"
    best = ""
    if lines:
        best = (
            f": the highest, at {lines[0].frequency_hz:.6g} Hz, stands {lines[0].prominence_db:.1f}"
            f" dB above the floor, {needed_db:.1f} dB needed"
        )
    return f"channel '{name}' has no line {where}{best}; check the cable, or state the band"


def _refuse_equal(name: str, lines: tuple[Line, ...], settings: PhaseSettings) -> None:
    first = lines[0]
    for other in lines[1:]:
        equal = other.amplitude >= EQUAL_RATIO * first.amplitude
        if equal and not _belongs(first.frequency_hz, other.frequency_hz):
            raise PhaseError(
                f"channel '{name}' has two lines of equal size, {first.frequency_hz:.6g} and "
                f"{other.frequency_hz:.6g} Hz ({other.amplitude / first.amplitude:.2f} of the "
                "larger); state the band of the one that is meant"
            )


def _belongs(first_hz: float, other_hz: float) -> bool:
    """Tell whether two lines can be one oscillator's: a close beat, or harmonics."""
    if abs(first_hz - other_hz) < APART * first_hz:
        return True
    ratio = max(first_hz, other_hz) / min(first_hz, other_hz)
    return abs(ratio - round(ratio)) < 0.02 or abs(2 * ratio - round(2 * ratio)) < 0.02


def _refuse_coarse(name: str, rate_hz: float, line_hz: float) -> None:
    per_cycle = rate_hz / line_hz
    # The line is known to a part of a bin only, so that just 4 may come out as 3.999.
    if per_cycle < 0.998 * FEWEST_PER_CYCLE:
        raise PhaseError(
            f"channel '{name}': rate {rate_hz:g} Hz gives {per_cycle:.1f} samples per cycle of "
            f"{line_hz:.6g} Hz, at least 4 needed (10 advised); record at {10 * line_hz:.3g} Hz"
        )


def _refuse_short(name: str, duration_s: float, line_hz: float) -> None:
    cycles = duration_s * line_hz
    if cycles < FEWEST_CYCLES:
        raise FewCyclesError(
            f"channel '{name}': record holds {cycles:.1f} cycles of {line_hz:.6g} Hz, at least "
            f"{FEWEST_CYCLES:g} needed (30 advised); record {30.0 / line_hz:.3g} s or more",
            cycles,
        )


def _line_notes(rate_hz: float, lines: tuple[Line, ...]) -> tuple[str, ...]:
    first = lines[0]
    notes = []
    if rate_hz / first.frequency_hz < ADVISED_PER_CYCLE:
        notes.append(f"only {rate_hz / first.frequency_hz:.1f} samples per cycle (10 advised)")
    for other in lines[1:]:
        share = first.frequency_hz / other.frequency_hz
        harmonic = round(share) >= 2 and abs(share - round(share)) < 0.02
        if harmonic and other.amplitude > 0.1 * first.amplitude:
            notes.append(
                f"the line followed, {first.frequency_hz:.6g} Hz, may be harmonic "
                f"{round(share)} of {other.frequency_hz:.6g} Hz "
                f"({other.amplitude / first.amplitude:.2f} of it); state the band if so"
            )
            break
    return tuple(notes)
