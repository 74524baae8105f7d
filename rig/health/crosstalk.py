"""How much of the partner's oscillation stands in a channel beside its own.

The partner's line in a spectrum proves nothing: an oscillator that is pulled, or locked for
part of the record, has it by right. What a leak does and pulling does not is to make the
amplitude follow the phase difference: the locus of the amplitude is a circle about the leak
instead of the origin (``rig.health.locus``). Locked stretches say nothing of it, for or
against; a record locked throughout leaves the question open. An oscillator whose amplitude
answers to being pulled (coupling not small against the rate at which the amplitude settles)
draws nearly the same circle: a small shift may be either, and the warning says so.

Measured on 840 honest simulated pairs of 14 kinds (near lock, deep drift, slipping, locked,
ramps, staircases, in and out of lock, five n:m orders, driven amplitudes): 2 faults (0.2 %),
both of oscillators driven so hard that their partner's line outgrows their own; of the 720
whose amplitude does not answer to the drive 5 had a warning (0.7 %). With a real leak into
one channel, of the 360 pairs whose phase difference goes round: +0.8 dB 97 % a fault, -20 dB
90 % a warning; -30 and -40 dB lie below the warning by intent (0.03 rad and less). The
reduced form is ``tests/recovery/test_crosstalk_rates.py``.

Lines too far apart for one band are judged by their row: with the ratio q of each member to
the one before, pulling gives q, 1 - q**2, q (1 - q**2) ... at partner, own, and mirror
frequency. What the mirror line explains is taken off before a leak is stated.

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
from rig.health.locus import SpanTransforms, channel_circle
from rig.spectrum import Line, Spectrum, find_lines, noise_floor

APART_BINS = 4.0  # lines of a Hann window are told apart from 4 bins on
SECOND_SHARE = 0.2  # of the strongest line: a weaker second one is not the own oscillation
PULL_MARGIN = 2.0  # unequal mutual pulling departs from the row by up to this factor
SECOND_REACH = 0.2  # of the frequency: a pair further apart would not be tried for locking
TWO_SIDED = 0.5  # of a line: with one like it on the other side both are a modulation
SURE = 4.0  # standard uncertainties from which a shifted circle is not chance
LARGEST_SCATTER = 0.35  # of the radius: a rougher circle is noise
NEAR_LINES = 12
WEAKEST_SHARE = 0.02  # of the strongest: weaker lines bend the amplitude by less than that
ROOM = 1.25  # of the lines' extent, on either side of its middle
NARROWEST, WIDEST = 0.03, 0.45  # of the frequency, half the band; harmonics begin at 1
NEAR_ORDER = 0.02  # of the frequency: a partner so near a harmonic may be just that
ONE_FREQUENCY = "both channels oscillate at one frequency: a leak cannot be told from locking"
LARGEST_ROW = 0.95  # ratio of a row of lines; nearer to 1 the pair is all but locked


@dataclass(frozen=True, slots=True, kw_only=True)
class Crosstalk:
    """The partner's line in one channel, as shares of the channel's own line.

    ``ratio`` is all that stands at the partner's frequency, None where that is the own line's
    too; ``leak_ratio`` is what pulling does not explain, None when the record cannot tell, and
    ``reason`` then says why.
    """

    own_hz: float
    partner_hz: float
    ratio: float | None
    leak_ratio: float | None
    reason: str | None = None


def find_crosstalk(
    own: ChannelLines,
    partner: ChannelLines,
    own_parts: SpanTransforms,
    partner_parts: SpanTransforms,
    rate_hz: float,
) -> Crosstalk:
    """Return how much of the partner's oscillation stands in a channel.

    Parameters
    ----------
    own, partner : ChannelLines of the channel looked at and of the other one
    own_parts, partner_parts : SpanTransforms, of the same spans of both
    rate_hz : float, Hz
    """
    own_line, partner_line = own_and_partner(own, partner)
    own_hz, partner_hz = own_line.frequency_hz, partner_line.frequency_hz
    if own.is_spiky or partner.is_spiky:
        return _unknown(own_hz, partner_hz, "the power of a train of spikes lies in many lines")
    if not 0 < partner_hz < own.fine.frequency_hz[-1]:
        return _unknown(own_hz, partner_hz, "the partner's line lies outside this spectrum")
    if abs(own_hz - partner_hz) > SECOND_REACH * max(own_hz, partner_hz):
        return _far_crosstalk(own, own_hz, partner_hz)
    band_hz = common_band(own, partner)
    if band_hz is None:
        return _unknown(own_hz, partner_hz, "the lines are too wide to be kept off harmonics")
    circle = channel_circle(own_parts, partner_parts, rate_hz, band_hz)
    is_apart = _are_apart(own_hz, partner_hz, own, partner)
    if circle is None or circle.scatter > LARGEST_SCATTER:
        what = "runs too rough" if circle else "does not go round"
        return _unknown(own_hz, partner_hz, ONE_FREQUENCY if not is_apart else f"psi {what}")
    leak = circle.shift if circle.shift > SURE * circle.u else 0.0
    if leak <= 1.0:
        # The strongest line is the own one after all, however long it lay on the partner's.
        own_hz, partner_hz = own.own.frequency_hz, partner.own.frequency_hz
        is_apart = _are_apart(own_hz, partner_hz, own, partner)
    ratio = _line_ratio(own, own_hz, partner_hz) if is_apart else None
    return Crosstalk(own_hz=own_hz, partner_hz=partner_hz, ratio=ratio, leak_ratio=leak)


def _far_crosstalk(own: ChannelLines, own_hz: float, partner_hz: float) -> Crosstalk:
    """Return the partner's share where its line is too far off to lie in one band."""
    order = round(partner_hz / own_hz)
    if order >= 2 and abs(partner_hz - order * own_hz) <= order * NEAR_ORDER * own_hz:
        reason = f"the partner's line falls on harmonic {order} of the own one"
        return _unknown(own_hz, partner_hz, reason)
    ratio = _line_ratio(own, own_hz, partner_hz)
    if ratio is None:
        return _unknown(own_hz, partner_hz, "the own line does not stand above the floor")
    half = _half_hz(own_hz, partner_hz)
    mirror = band_amplitude(own.fine, 2.0 * own_hz - partner_hz, half)
    row = pulled_ratio(mirror / band_amplitude(own.fine, own_hz, half))
    leak = max(0.0, ratio - PULL_MARGIN * row)
    return Crosstalk(own_hz=own_hz, partner_hz=partner_hz, ratio=ratio, leak_ratio=leak)


def _line_ratio(own: ChannelLines, own_hz: float, partner_hz: float) -> float | None:
    """Return the partner's line over the own one, None where there is no own one."""
    half = _half_hz(own_hz, partner_hz)
    ours, theirs = (band_amplitude(own.fine, hz, half) for hz in (own_hz, partner_hz))
    return theirs / ours if ours > 0 else None


def _half_hz(own_hz: float, partner_hz: float) -> float:
    """Return half the band of a line: up to the middle to the next line or harmonic."""
    half = min(0.5 * abs(own_hz - partner_hz), 0.25 * min(own_hz, partner_hz))
    order = round(partner_hz / own_hz)
    return min(half, 0.5 * abs(partner_hz - order * own_hz)) if order >= 2 else half


def common_band(own: ChannelLines, partner: ChannelLines) -> tuple[float, float] | None:
    """Return the band (Hz) that holds the near lines of both channels with room to spare.

    None where it would reach the harmonics: what is cut off would bend the amplitude.
    """
    centre_hz = own.own.frequency_hz
    edges = [centre_hz]
    for found in (own, partner):
        strongest, *others = find_lines(found.fine, count=NEAR_LINES, floor_db=CLEAR_DB)
        for line in (strongest, *others):
            is_near = abs(line.frequency_hz - centre_hz) <= SECOND_REACH * centre_hz
            if is_near and line.amplitude >= WEAKEST_SHARE * strongest.amplitude:
                edges += [line.frequency_hz + side * 0.5 * line.width_hz for side in (-1, 1)]
    middle_hz = 0.5 * (min(edges) + max(edges))
    half_hz = max(ROOM * (max(edges) - min(edges)), NARROWEST * middle_hz)
    if half_hz > WIDEST * middle_hz:
        return None
    return middle_hz - half_hz, middle_hz + half_hz


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
