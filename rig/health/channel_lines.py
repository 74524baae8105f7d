"""The lines of one channel: its own, harmonics, mains pick-up, and others.

The averaged spectrum of pieces tells a line from noise; the spectrum of one long span tells
two close lines apart. Both come from the samples that one pass has kept.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

from rig.arrays import FloatArray
from rig.errors import PhaseError
from rig.health.spike_train import find_train
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
SLOWER_RATIO = 1.2  # of amplitudes: a line that only the whole record shows is the stronger
HIGHEST_HARMONIC = 10
CLEAR_DB = 12.0  # a weaker line counts when it stands this far above its floor
FUNDAMENTAL_SHARE = 0.1  # of the strongest line: less is no fundamental of it
MAINS_HZ = (50.0, 60.0)
MAINS_ORDERS = (1, 2, 3)
MAINS_REACH_HZ = 0.2  # normal operation of public networks keeps within 0.2 Hz
SPIKY_KURTOSIS = 8.0  # noise has 3; spikes that fill a tenth of the cycle have about 10
FEWEST_CYCLES_WANTED = 8.0  # a slower line is drift, as long as there is a clear one above
AVERAGED_SHARE = 0.1  # of the averaged rate: above, what folds down could be mistaken


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ChannelLines:
    """Spectra and lines of one channel; frequencies in Hz, amplitudes in sample units.

    ``own`` is the strongest line; ``is_clear`` whether it stands above what noise alone
    shows. ``harmonics`` are (order, amplitude) from the second; ``fundamental`` is a line of
    which the strongest would be a harmonic, ``mains`` the strongest pick-up beside it.
    Of a train of spikes (``is_spiky``) the own line is its repetition, its amplitude half of
    the whole range, and nothing else is looked for.
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
    is_spiky: bool = False


def find_channel_lines(name: str, survey: ChannelSurvey, rate_hz: float) -> ChannelLines | None:
    """Return the lines of a surveyed channel, None when it has no oscillation at all.

    Parameters
    ----------
    name : str, name of the channel
    survey : ChannelSurvey
    rate_hz : float, Hz
    """
    if survey.kurtosis > SPIKY_KURTOSIS:
        train = _spike_lines(name, survey, rate_hz)
        if train is not None:  # else a transient, or too few spikes to be a train
            return train
    whole = _whole(name, survey, rate_hz)
    chosen = _chosen(name, survey, rate_hz, whole)
    if chosen is None:
        return None
    coarse, lines = chosen
    own = lines[0]
    return ChannelLines(
        coarse=coarse,
        fine=_fine(name, survey, rate_hz, own.frequency_hz, whole) or coarse,
        own=own,
        is_clear=_is_clear(lines, coarse),
        lines=lines,
        harmonics=_harmonics(coarse, own),
        fundamental=_fundamental(coarse, own),
        mains=_mains(coarse, own),
        is_at_mains=is_mains(own.frequency_hz, coarse.resolution_hz),
    )


def _spike_lines(name: str, survey: ChannelSurvey, rate_hz: float) -> ChannelLines | None:
    """Return the repetition of a train of spikes as its own line."""
    spectrum = _spectrum(name, list(survey.pieces), rate_hz)
    train = find_train(survey.pieces, survey.mean, rate_hz)
    if spectrum is None or train is None:
        return None
    line = line_near(spectrum, train.frequency_hz, spectrum.resolution_hz)
    half = 0.5 * (survey.top.value - survey.bottom.value)
    own = replace(line, frequency_hz=train.frequency_hz, amplitude=half)
    return ChannelLines(
        coarse=spectrum,
        fine=spectrum,
        own=own,
        is_clear=train.is_regular,
        lines=(own,),
        harmonics=(),
        fundamental=None,
        mains=None,
        is_at_mains=False,
        is_spiky=True,
    )


def _chosen(
    name: str, survey: ChannelSurvey, rate_hz: float, whole: Spectrum | None
) -> tuple[Spectrum, tuple[Line, ...]] | None:
    """Return the spectrum that shows the own line best, and its lines, strongest first.

    Lines of some cycles a piece, or a record, are looked for first: what is slower is drift
    unless nothing else is there.
    """
    slowest_hz = FEWEST_CYCLES_WANTED * rate_hz / survey.frame_count
    coarse = _spectrum(name, list(survey.pieces), rate_hz)
    averaged = _lines_from(coarse, FEWEST_CYCLES_WANTED * coarse.resolution_hz if coarse else 0.0)
    single = _lines_from(whole, slowest_hz)
    found = [
        (spectrum, lines)
        for spectrum, lines in ((coarse, averaged), (whole, single))
        if spectrum is not None and _is_clear(lines, spectrum)
    ]
    if not found:
        lines = _lines_from(whole, 0.0)
        return (whole, lines) if whole is not None and lines else None
    # The averaged spectrum is the truer one for lines that both show.
    is_slower = len(found) == 2 and single[0].amplitude > SLOWER_RATIO * averaged[0].amplitude
    return found[1] if is_slower else found[0]


def _lines_from(spectrum: Spectrum | None, low_hz: float) -> tuple[Line, ...]:
    if spectrum is None:
        return ()
    floor_db = max(CLEAR_DB, chance_prominence_db(spectrum))
    return find_lines(spectrum, low_hz=low_hz, count=LINES_KEPT, floor_db=floor_db)


def _is_clear(lines: tuple[Line, ...], spectrum: Spectrum) -> bool:
    return bool(lines) and lines[0].prominence_db >= chance_prominence_db(spectrum)


def _spectrum(name: str, parts: list[FloatArray], rate_hz: float) -> Spectrum | None:
    try:
        return spectrum_of(name, parts, rate_hz)
    except PhaseError:
        return None


def _whole(name: str, survey: ChannelSurvey, rate_hz: float) -> Spectrum | None:
    try:
        return averaged_spectrum(name, survey.means, rate_hz, survey.mean_frames)
    except PhaseError:
        return None


def _fine(
    name: str, survey: ChannelSurvey, rate_hz: float, own_hz: float, whole: Spectrum | None
) -> Spectrum | None:
    """Return the best resolved spectrum in which the own line is still true."""
    slow = own_hz < AVERAGED_SHARE * rate_hz / survey.mean_frames
    if survey.mean_frames == 1 or slow:
        return whole
    return _spectrum(name, [survey.middle], rate_hz)


def reach_hz(spectrum: Spectrum, own: Line, order: float) -> float:
    """Return how far from its order a harmonic may lie: the width of the line, so often, Hz."""
    return max(2.0 * spectrum.resolution_hz, 0.5 * order * own.width_hz)


def _clear_near(spectrum: Spectrum, frequency_hz: float, reach_hz: float) -> Line | None:
    if not frequency_hz + reach_hz < spectrum.frequency_hz[-1]:
        return None
    line = line_near(spectrum, frequency_hz, reach_hz)
    return line if line.prominence_db >= CLEAR_DB else None


def _harmonics(spectrum: Spectrum, own: Line) -> tuple[tuple[int, float], ...]:
    found = []
    for order in range(2, HIGHEST_HARMONIC + 1):
        reach = min(reach_hz(spectrum, own, order), 0.25 * own.frequency_hz)
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
    return at_mains and distance > reach_hz(spectrum, own, order)
