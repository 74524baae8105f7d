"""How much of the partner's oscillation stands in a channel beside its own.

A leak between sensors adds one line at the partner's frequency. An oscillator that really is
pulled shows that line too, but as the first of a row spaced by the beat: with the ratio q of
each member to the one before, the amplitudes are q, 1 - q**2, q (1 - q**2) ... at partner,
own, and mirror frequency. What the mirror line explains is taken off before a leak is stated.

References
----------
Adler 1946, Proc. IRE 34, 351 (closed form of the beat; the row follows from its Fourier
series, derived here: z = (q + w) / (1 + q w) with w = exp(i beat t)).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from rig.health.channel_lines import CLEAR_DB, ChannelLines, is_mains
from rig.spectrum import Line, Spectrum, find_lines, noise_floor

APART_BINS = 4.0  # lines of a Hann window are told apart from 4 bins on
SECOND_SHARE = 0.2  # of the strongest line: a weaker second one is not the own oscillation
PULL_MARGIN = 2.0  # unequal mutual pulling departs from the row by up to this factor
SECOND_REACH = 0.2  # of the frequency: a pair further apart would not be tried for locking
TWO_SIDED = 0.5  # of a line: with one like it on the other side both are a modulation
LARGEST_ROW = 0.95  # ratio of a row of lines; nearer to 1 the pair is all but locked


@dataclass(frozen=True, slots=True, kw_only=True)
class Crosstalk:
    """The partner's line in one channel, as shares of the channel's own line.

    ``ratio`` is all that stands at the partner's frequency, ``leak_ratio`` what pulling does
    not explain; both None when the record cannot tell, and ``reason`` then says why.
    """

    own_hz: float
    partner_hz: float
    ratio: float | None
    leak_ratio: float | None
    reason: str | None = None


def find_crosstalk(own: ChannelLines, partner: ChannelLines) -> Crosstalk:
    """Return how much of the partner's oscillation stands in a channel.

    Parameters
    ----------
    own, partner : ChannelLines of the channel looked at and of the other one
    """
    own_line, partner_line = own_and_partner(own, partner)
    own_hz, partner_hz = own_line.frequency_hz, partner_line.frequency_hz
    if not _are_apart(own_hz, partner_hz, own, partner):
        reason = "both channels oscillate at one frequency: a leak cannot be told from locking"
        return _unknown(own_hz, partner_hz, reason)
    if not 0 < partner_hz < own.fine.frequency_hz[-1]:
        return _unknown(own_hz, partner_hz, "the partner's line lies outside this spectrum")
    half = 0.5 * abs(own_hz - partner_hz)
    bands = [band_amplitude(own.fine, hz, half) for hz in (own_hz, partner_hz)]
    mirror = band_amplitude(own.fine, 2.0 * own_hz - partner_hz, half)
    if not bands[0] > 0:
        return _unknown(own_hz, partner_hz, "the own line does not stand above the floor")
    ratio = bands[1] / bands[0]
    leak = max(0.0, ratio - PULL_MARGIN * pulled_ratio(mirror / bands[0]))
    return Crosstalk(own_hz=own_hz, partner_hz=partner_hz, ratio=ratio, leak_ratio=leak)


def _unknown(own_hz: float, partner_hz: float, reason: str) -> Crosstalk:
    return Crosstalk(
        own_hz=own_hz, partner_hz=partner_hz, ratio=None, leak_ratio=None, reason=reason
    )


def own_and_partner(own: ChannelLines, partner: ChannelLines) -> tuple[Line, Line]:
    """Return the line of each channel's own oscillation.

    Where both are strongest at one frequency, a second strong line in just one of them is
    taken for that channel's own: a leak may be stronger than what it leaks into.
    """
    ours, theirs = own.own, partner.own
    if _are_apart(ours.frequency_hz, theirs.frequency_hz, own, partner):
        return ours, theirs
    second, other_second = second_line(own), second_line(partner)
    if second and not other_second:
        return second, theirs
    if other_second and not second:
        return ours, other_second
    return ours, theirs


def _are_apart(first_hz: float, second_hz: float, own: ChannelLines, partner: ChannelLines) -> bool:
    resolution = max(own.fine.resolution_hz, partner.fine.resolution_hz)
    return abs(first_hz - second_hz) > APART_BINS * resolution


def second_line(found: ChannelLines) -> Line | None:
    """Return the strongest further line that may be an oscillation of its own, if any.

    It is near the strongest, not far weaker, not mains, and stands on one side only.
    """
    strongest, *others = find_lines(found.fine, count=6, floor_db=CLEAR_DB)
    for line in others:
        if line.amplitude < SECOND_SHARE * strongest.amplitude:
            return None
        if _is_own_oscillation(found, line, strongest):
            return line
    return None


def _is_own_oscillation(found: ChannelLines, line: Line, strongest: Line) -> bool:
    distance_hz = abs(line.frequency_hz - strongest.frequency_hz)
    is_near = distance_hz <= SECOND_REACH * strongest.frequency_hz
    is_apart = distance_hz > APART_BINS * found.fine.resolution_hz
    if not (is_near and is_apart) or is_mains(line.frequency_hz, found.fine.resolution_hz):
        return False
    opposite_hz = 2.0 * strongest.frequency_hz - line.frequency_hz
    half_hz = min(0.25 * distance_hz, APART_BINS * found.fine.resolution_hz)
    opposite = band_amplitude(found.fine, opposite_hz, half_hz)
    return opposite < TWO_SIDED * line.amplitude


def band_amplitude(spectrum: Spectrum, centre_hz: float, half_hz: float) -> float:
    """Return the amplitude of a sine with the power of a band above the floor.

    Bands rather than lines, because noise widens the lines of a pulled oscillator but not
    the one at the partner's frequency. A band outside the spectrum holds nothing.
    """
    inside = np.abs(spectrum.frequency_hz - centre_hz) <= half_hz
    if not inside.any() or not 0 < centre_hz < spectrum.frequency_hz[-1]:
        return 0.0
    floor = noise_floor(spectrum, round(centre_hz / spectrum.resolution_hz))
    power = float(np.sum(spectrum.density[inside] - floor)) * spectrum.resolution_hz
    return math.sqrt(2.0 * max(0.0, power))


def pulled_ratio(row: float) -> float:
    """Return the partner's line over the own line that pulling makes: q / (1 - q**2).

    Parameters
    ----------
    row : float, q, mirror line over own line
    """
    held = min(LARGEST_ROW, row)
    return held / (1.0 - held**2)
