"""The lines of one channel: its own, harmonics, mains pick-up, and others.

The averaged spectrum of pieces tells a line from noise; the spectrum of one long span tells
two close lines apart. Both come from the samples that one pass has kept.
"""

from __future__ import annotations

from dataclasses import dataclass

from rig.errors import PhaseError
from rig.health.survey import ChannelSurvey
from rig.spectrum import (
    Line,
    Spectrum,
    averaged_spectrum,
    chance_prominence_db,
    find_lines,
    line_near,
    spectrum_of,
)

LINES_KEPT = 8
FEWEST_CYCLES_A_PIECE = 16.0  # fewer cycles a piece: the whole record is looked at instead
HIGHEST_HARMONIC = 10
CLEAR_DB = 12.0  # a weaker line counts when it stands this far above its floor
FUNDAMENTAL_SHARE = 0.1  # of the strongest line: less is no fundamental of it
MAINS_HZ = (50.0, 60.0)
MAINS_ORDERS = (1, 2, 3)
MAINS_REACH_HZ = 0.2  # normal operation of public networks keeps within 0.2 Hz
AVERAGED_SHARE = 0.1  # of the averaged rate: above, what folds down could be mistaken


@dataclass(frozen=True, slots=True, kw_only=True)
class NamedLine:
    """A line with what it is taken for: own, harmonic, fundamental, mains, or other."""

    line: Line
    kind: str
    label: str


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ChannelLines:
    """Spectra and lines of one channel; frequencies in Hz, amplitudes in sample units.

    ``own`` is the strongest line; ``is_clear`` whether it stands above what noise alone
    shows. ``harmonics`` are (order, amplitude) from the second; ``fundamental`` is a line of
    which the strongest would be a harmonic, ``mains`` the strongest pick-up beside it.
    """

    coarse: Spectrum
    fine: Spectrum
    own: Line
    is_clear: bool
    lines: tuple[Line, ...]
    harmonics: tuple[tuple[int, float], ...]
    fundamental: Line | None
    mains: Line | None
    is_at_mains: bool


def find_channel_lines(name: str, survey: ChannelSurvey, rate_hz: float) -> ChannelLines | None:
    """Return the lines of a surveyed channel, None when it has no oscillation at all.

    Parameters
    ----------
    name : str, name of the channel
    survey : ChannelSurvey
    rate_hz : float, Hz
    """
    coarse = _spectrum(name, list(survey.pieces), rate_hz)
    whole = _whole(name, survey, rate_hz)
    if coarse is not None and whole is not None and _is_slow(coarse):
        coarse = whole
    if coarse is None:
        coarse = whole
    if coarse is None:
        return None
    lines = find_lines(
        coarse, count=LINES_KEPT, floor_db=max(CLEAR_DB, chance_prominence_db(coarse))
    )
    if not lines:
        return None
    own = lines[0]
    mains = _mains(coarse, own)
    return ChannelLines(
        coarse=coarse,
        fine=_fine(name, survey, rate_hz, own.frequency_hz, whole) or coarse,
        own=own,
        is_clear=own.prominence_db >= chance_prominence_db(coarse),
        lines=lines,
        harmonics=_harmonics(coarse, own),
        fundamental=_fundamental(coarse, own),
        mains=mains,
        is_at_mains=is_mains(own.frequency_hz, coarse.resolution_hz),
    )


def _spectrum(name: str, parts: list, rate_hz: float) -> Spectrum | None:  # type: ignore[type-arg]
    try:
        return spectrum_of(name, parts, rate_hz)
    except PhaseError:
        return None


def _whole(name: str, survey: ChannelSurvey, rate_hz: float) -> Spectrum | None:
    try:
        return averaged_spectrum(name, survey.means, rate_hz, survey.mean_frames)
    except PhaseError:
        return None


def _is_slow(coarse: Spectrum) -> bool:
    lines = find_lines(coarse, count=1)
    return not lines or lines[0].frequency_hz < FEWEST_CYCLES_A_PIECE * coarse.resolution_hz


def _fine(
    name: str, survey: ChannelSurvey, rate_hz: float, own_hz: float, whole: Spectrum | None
) -> Spectrum | None:
    """Return the best resolved spectrum in which the own line is still true."""
    slow = own_hz < AVERAGED_SHARE * rate_hz / survey.mean_frames
    if survey.mean_frames == 1 or slow:
        return whole
    return _spectrum(name, [survey.middle], rate_hz)


def _reach_hz(spectrum: Spectrum, own: Line, order: float) -> float:
    """Return how far from its order a harmonic may lie: the width of the line, so often."""
    return max(2.0 * spectrum.resolution_hz, 0.5 * order * own.width_hz)


def _clear_near(spectrum: Spectrum, frequency_hz: float, reach_hz: float) -> Line | None:
    if not frequency_hz + reach_hz < spectrum.frequency_hz[-1]:
        return None
    line = line_near(spectrum, frequency_hz, reach_hz)
    return line if line.prominence_db >= CLEAR_DB else None


def _harmonics(spectrum: Spectrum, own: Line) -> tuple[tuple[int, float], ...]:
    found = []
    for order in range(2, HIGHEST_HARMONIC + 1):
        reach = min(_reach_hz(spectrum, own, order), 0.25 * own.frequency_hz)
        line = _clear_near(spectrum, order * own.frequency_hz, reach)
        if line is not None:
            found.append((order, line.amplitude))
    return tuple(found)


def _fundamental(spectrum: Spectrum, own: Line) -> Line | None:
    """Return the strongest clear line at an integer part of the own frequency, if any."""
    found = []
    for order in range(2, HIGHEST_HARMONIC + 1):
        part_hz = own.frequency_hz / order
        if part_hz < 3.0 * spectrum.resolution_hz or is_mains(part_hz, spectrum.resolution_hz):
            continue
        line = _clear_near(spectrum, part_hz, 1.5 * spectrum.resolution_hz)
        if line is not None and line.amplitude >= FUNDAMENTAL_SHARE * own.amplitude:
            found.append(line)
    return max(found, key=lambda line: line.amplitude, default=None)


def is_mains(frequency_hz: float, resolution_hz: float) -> bool:
    """Tell whether a frequency cannot be told from the mains or its first harmonics."""
    reach = max(MAINS_REACH_HZ, resolution_hz)
    return any(
        abs(frequency_hz - order * base) <= reach * order
        for base in MAINS_HZ
        for order in MAINS_ORDERS
    )


def _mains(spectrum: Spectrum, own: Line) -> Line | None:
    """Return the strongest line at the mains or its harmonics that is not the own line."""
    found = []
    for base in MAINS_HZ:
        for order in MAINS_ORDERS:
            line = _clear_near(spectrum, order * base, order * MAINS_REACH_HZ)
            if line is not None and _is_apart(line, own, spectrum):
                found.append(line)
    return max(found, key=lambda line: line.amplitude, default=None)


def _is_apart(line: Line, own: Line, spectrum: Spectrum) -> bool:
    """Tell whether a line is neither the own one nor one of its harmonics."""
    order = max(1, round(line.frequency_hz / own.frequency_hz))
    distance = abs(line.frequency_hz - order * own.frequency_hz)
    at_mains = is_mains(line.frequency_hz, spectrum.resolution_hz)
    return at_mains and distance > _reach_hz(spectrum, own, order)


def named_lines(found: ChannelLines, unit: str = "") -> tuple[NamedLine, ...]:
    """Return the lines of a channel with what each is taken for, strongest first."""
    return tuple(_named(found, line) for line in found.lines)


def _named(found: ChannelLines, line: Line) -> NamedLine:
    own_hz = found.own.frequency_hz
    if line is found.own:
        return NamedLine(line=line, kind="own", label="own line")
    order = round(line.frequency_hz / own_hz)
    reach = _reach_hz(found.coarse, found.own, max(1, order))
    if order >= 2 and abs(line.frequency_hz - order * own_hz) <= reach:
        return NamedLine(line=line, kind="harmonic", label=f"harmonic {order}")
    if is_mains(line.frequency_hz, found.coarse.resolution_hz):
        return NamedLine(line=line, kind="mains", label="mains")
    if found.fundamental and abs(line.frequency_hz - found.fundamental.frequency_hz) <= reach:
        return NamedLine(line=line, kind="fundamental", label="fundamental?")
    return NamedLine(line=line, kind="other", label="other")
