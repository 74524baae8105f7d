"""What each line of a channel is taken for: own, harmonic, partner, beat, mains, or other."""

from __future__ import annotations

from dataclasses import dataclass

from rig.health.channel_lines import ChannelLines, is_mains, reach_hz
from rig.health.crosstalk import Crosstalk
from rig.spectrum import Line

NEAR_BINS = 2.0  # bins within which two frequencies are one line


@dataclass(frozen=True, slots=True, kw_only=True)
class NamedLine:
    """A line with what it is taken for."""

    line: Line
    kind: str
    label: str


def named_lines(found: ChannelLines, crosstalk: Crosstalk | None = None) -> tuple[NamedLine, ...]:
    """Return the lines of a channel with what each is taken for, strongest first.

    Parameters
    ----------
    found : ChannelLines
    crosstalk : Crosstalk of the channel with its partner, if it has one
    """
    return tuple(_named(found, line, crosstalk) for line in found.lines)


def _named(found: ChannelLines, line: Line, crosstalk: Crosstalk | None) -> NamedLine:
    hz, reach = line.frequency_hz, NEAR_BINS * found.coarse.resolution_hz
    if crosstalk is not None and crosstalk.ratio is not None:
        own_hz, partner_hz = crosstalk.own_hz, crosstalk.partner_hz
        if abs(hz - own_hz) > reach and abs(hz - partner_hz) <= reach:
            return NamedLine(line=line, kind="partner", label="partner's line")
        if line is not found.own and _is_beat(hz, own_hz, partner_hz, reach):
            return NamedLine(line=line, kind="beat", label="beat with partner")
    if line is found.own:
        label = "spikes a second" if found.is_spiky else "own line"
        return NamedLine(line=line, kind="own", label=label)
    return _named_alone(found, line)


def _is_beat(hz: float, own_hz: float, partner_hz: float, reach_hz: float) -> bool:
    """Tell whether a line stands a few whole beats from the own line."""
    beat_hz = own_hz - partner_hz
    beats = round((hz - own_hz) / beat_hz)
    return 0 < abs(beats) <= 4 and abs(hz - own_hz - beats * beat_hz) <= reach_hz


def _named_alone(found: ChannelLines, line: Line) -> NamedLine:
    own_hz = found.own.frequency_hz
    order = round(line.frequency_hz / own_hz)
    reach = reach_hz(found.coarse, found.own, max(1, order))
    if order >= 2 and abs(line.frequency_hz - order * own_hz) <= reach:
        return NamedLine(line=line, kind="harmonic", label=f"harmonic {order}")
    if is_mains(line.frequency_hz, found.coarse.resolution_hz):
        return NamedLine(line=line, kind="mains", label="mains")
    if found.fundamental and abs(line.frequency_hz - found.fundamental.frequency_hz) <= reach:
        return NamedLine(line=line, kind="fundamental", label="fundamental?")
    return NamedLine(line=line, kind="other", label="other")
