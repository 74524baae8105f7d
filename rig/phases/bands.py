"""How wide a band each phase is given, and the grid both phases share.

The rule, when no band is stated. The half band B is 0.15 of the line's frequency: a pair
that Adler's equation describes has its beats (detuning plus coupling, at most 0.06 of the
frequency) within 0.4 B, where the filter turns the phase by 1 mrad at most. It is widened

- to 2.5 times the largest beat to be expected, twice the distance to the partner's line
  where that lies close by, so that the partner's line is always inside;
- to 1.5 times the extent of the line itself, where the frequency runs;
- for a short record, so that the guards at its ends stay below 12 % of it;

and narrowed, never below what the first two ask, until the noise in it is 13 dB below the
line (slips are unreliable below 10 dB). It never reaches zero frequency or the second
harmonic. When the pass then shows beats faster than 1/2.5 of it, it is widened and the pass
made once more.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

from rig.errors import PhaseError
from rig.phases.demodulate import SPLIT, rows_for
from rig.phases.lines import FollowedLine
from rig.phases.settings import PhaseSettings
from rig.phases.taps import half_length

HALF_SHARE = 0.15  # of the line's frequency
LARGEST_SHARE = 0.5
EDGE_SHARE = 0.95  # the stop edge lies this share of the frequency away at most
BEAT_FACTOR = 2.5  # half band over largest beat for 1 mrad
CLOSE_SHARE = 0.2  # a partner's line nearer than this share of the frequency is a beat
GOOD_RATIO = 20.0  # wanted power ratio of line to noise in the band (13 dB)
WIDENING = 1.2  # a band that cut its beats shows them too slow
FEWEST_DB = 10.0  # line over noise in the band
WIDE_BINS = 4.0  # a line reaching further than this is one that runs
GUARD_SHARE = 0.12  # of the record, both ends together: costs 20 % of the frequency
SHORT_STOP_DB = 60.0  # rejection left to the shortest records: 1 mrad of an equal line
CLEARANCE = 0.2  # of a stated band's lower limit left free above zero frequency
STEEPEST = 0.005  # of the half band: the steepest edge a stated band can ask for
STATED_GUARD_SHARE = 0.5  # the same, when the band is stated
WIDER_EDGES = (0.3, 0.6, 0.9)  # edges tried for records too short for the stated one


@dataclass(frozen=True, slots=True, kw_only=True)
class Band:
    """A pass band: line, half width, and the width of the filter's edge as a share of it."""

    line_hz: float
    half_hz: float
    transition: float
    stop_db: float


def choose_band(
    line: FollowedLine,
    beat_hz: float | None,
    settings: PhaseSettings,
    *,
    rate_hz: float,
    duration_s: float,
) -> Band:
    """Return the band of one channel; see the module for the rule.

    Parameters
    ----------
    line : FollowedLine
    beat_hz : float, Hz, distance to the partner's line where it is close, else None
    settings : PhaseSettings
    rate_hz : float, Hz
    duration_s : float, s, length of the record

    Raises
    ------
    PhaseError
        If a stated band reaches half the rate, or the record is shorter than its filter.
    """
    if settings.band_hz is not None:
        return _stated_band(settings, rate_hz, duration_s)
    half = _wanted_half_hz(line, beat_hz)
    edges = [edge for edge in (settings.transition, *WIDER_EDGES) if edge >= settings.transition]
    span = (settings.stop_db, rate_hz, duration_s)
    fitting = [edge for edge in edges if _guard_share(half, edge, *span) <= GUARD_SHARE]
    transition = fitting[0] if fitting else edges[-1]
    if not fitting:
        wider = half * _guard_share(half, transition, *span) / GUARD_SHARE
        half = min(wider, LARGEST_SHARE * line.frequency_hz)
    half = min(half, EDGE_SHARE * line.frequency_hz / (1.0 + transition))
    # The shortest of records would leave nothing between the guards of a better filter.
    tight = _guard_share(half, transition, *span) > 2.0 * GUARD_SHARE
    stop_db = min(settings.stop_db, SHORT_STOP_DB) if tight else settings.stop_db
    return Band(line_hz=line.frequency_hz, half_hz=half, transition=transition, stop_db=stop_db)


def widened_band(band: Band, fastest_hz: float, snr_db: float) -> Band | None:
    """Return a band wide enough for the fastest beat that was seen, None if this one is.

    None too where it cannot be had: the noise would rise to within 10 dB of the line, or the
    band would reach zero frequency.
    """
    largest = EDGE_SHARE * band.line_hz / (1.0 + band.transition)
    half = min(BEAT_FACTOR * WIDENING * fastest_hz, largest)
    lost_db = 10.0 * math.log10(max(half, band.half_hz) / band.half_hz)
    if half < 1.05 * band.half_hz or snr_db - lost_db < FEWEST_DB:
        return None
    return replace(band, half_hz=half)


def _wanted_half_hz(line: FollowedLine, beat_hz: float | None) -> float:
    carrier = line.frequency_hz
    needed = BEAT_FACTOR * 2.0 * (beat_hz or 0.0)
    if line.extent_hz > WIDE_BINS * line.resolution_hz:
        needed = max(needed, 1.5 * line.extent_hz)
    half = max(HALF_SHARE * carrier, needed)
    if line.noise_density > 0:
        quiet = line.amplitude**2 / 2.0 / (line.noise_density * 2.0 * GOOD_RATIO)
        half = min(half, max(quiet, needed, 0.01 * carrier, 12.0 * line.resolution_hz))
    return min(half, LARGEST_SHARE * carrier)


def _stated_band(settings: PhaseSettings, rate_hz: float, duration_s: float) -> Band:
    assert settings.band_hz is not None
    low, high = settings.band_hz
    if not high < rate_hz / 2.0:
        raise PhaseError(
            f"band {low:g} to {high:g} Hz needs a rate above {2 * high:g} Hz, got {rate_hz:g} Hz; "
            "narrow the band"
        )
    half = (high - low) / 2.0
    middle = (high + low) / 2.0
    # The edge must not reach zero frequency, where offset and drift lie.
    widest = min(
        WIDER_EDGES[-1], max(STEEPEST, (1.0 - CLEARANCE * low / middle) * middle / half - 1)
    )
    edges = [edge for edge in (settings.transition, *WIDER_EDGES) if edge < widest] + [widest]
    shares = [_guard_share(half, edge, settings.stop_db, rate_hz, duration_s) for edge in edges]
    if shares[-1] > STATED_GUARD_SHARE:
        needed_s = duration_s * shares[-1] / STATED_GUARD_SHARE
        raise PhaseError(
            f"band {low:g} to {high:g} Hz needs a record of {needed_s:.3g} s or more, "
            f"got {duration_s:.3g} s; widen the band or record longer"
        )
    # A stated band is kept as it is, so at its widest edge more of the record may go.
    fitting = [edge for edge, share in zip(edges, shares, strict=True) if share <= GUARD_SHARE]
    return Band(
        line_hz=middle,
        half_hz=half,
        transition=fitting[0] if fitting else widest,
        stop_db=settings.stop_db,
    )


def _guard_share(
    half_hz: float, transition: float, stop_db: float, rate_hz: float, duration_s: float
) -> float:
    return 2.0 * _guard_s(half_hz, transition, stop_db, rate_hz) / duration_s


def _guard_s(half_hz: float, transition: float, stop_db: float, rate_hz: float) -> float:
    rows = rows_for(rate_hz, half_hz)
    inner = rate_hz / rows
    return (half_length(transition * half_hz / inner, stop_db) + SPLIT // 2) / inner


def close_beat_hz(
    own: FollowedLine, partner: FollowedLine, order: tuple[int, int] | None, own_is_driven: bool
) -> float | None:
    """Return how far the partner's line, brought to this one's frequency, lies off; else None.

    At order n:m the beat n f_driven - m f_reference moves the driven phase at 1/n of it and
    the reference phase at 1/m. Without a stated order 1:1 is assumed.
    """
    n, m = order or (1, 1)
    ratio = m / n if own_is_driven else n / m
    distance = abs(own.frequency_hz - ratio * partner.frequency_hz)
    return distance if distance <= CLOSE_SHARE * own.frequency_hz else None
