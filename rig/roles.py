"""Which channel of some captures drives and which follows: a guess from names and signals.

In a sweep the drive changes from capture to capture, so its frequency spreads most, and its
line is the sharper one; where a channel is called by its part, the name decides. Every guess
carries the sentence that says what it rests on.
"""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from rig.arrays import median
from rig.captures import Capture
from rig.channels import QuantityKind
from rig.spectrum import Line, clear_line

GLANCE_SAMPLES = 262_144  # samples transformed a channel: 25 ms, and 0.1 Hz at 25 kHz
QUIET_SHARE = 0.02  # of a channel's usual amplitude: weaker, its oscillator is off
SPREAD_RATIO = 1.5  # of frequency spreads: nearer to 1 they say nothing
LARGEST_ORDER = 6
ORDER_REACH = 0.1  # relative detuning within which an order is believed
REFERENCE_WORDS = ("ref", "drive", "inj", "gen", "source", "exc", "tone", "master", "clock", "pump")
DRIVEN_WORDS = ("driven", "osc", "resp", "follow", "slave", "cell", "out", "probe", "dut")
UNIT_QUANTITIES: dict[str, QuantityKind] = {
    "v": "voltage",
    "mv": "voltage",
    "a": "current",
    "ma": "current",
    "m": "displacement",
    "mm": "displacement",
    "um": "displacement",
    "m/s": "velocity",
    "mm/s": "velocity",
    "m/s2": "acceleration",
    "m/s^2": "acceleration",
    "m/s²": "acceleration",
    "g": "acceleration",
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Glance:
    """One capture at a glance: per channel its line, None where none stands out."""

    file: str
    names: tuple[str, ...]
    units: tuple[str, ...]
    lines: tuple[Line | None, ...]
    start_text: str | None
    format: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Roles:
    """Columns (from 0) of reference and driven, and what the guess rests on."""

    reference: int
    driven: int
    reason: str


def glance_at(capture: Capture, file: str) -> Glance:
    """Return the line of each channel of a capture, from a part of its samples.

    Parameters
    ----------
    capture : Capture
    file : str, name of the capture in the table of points

    Raises
    ------
    CaptureError
        If the file turns out to be damaged while it is read.
    """
    columns = range(len(capture.channels))
    return Glance(
        file=file,
        names=tuple(channel.name for channel in capture.channels),
        units=tuple(channel.unit for channel in capture.channels),
        lines=tuple(clear_line(capture, column, max_samples=GLANCE_SAMPLES) for column in columns),
        start_text=capture.start_text,
        format=capture.format,
    )


def guess_roles(glances: Sequence[Glance]) -> Roles:
    """Return which columns are reference and driven in captures of equal channels.

    Parameters
    ----------
    glances : sequence of Glance, at least one, all with the same count of channels
    """
    columns = _two_strongest(glances)
    if len(columns) == 1:
        reason = "one channel only: it serves both roles, so two bands are needed"
        return Roles(reference=columns[0], driven=columns[0], reason=reason)
    return _by_name(glances[0], columns) or _by_spread(glances, columns)


def _two_strongest(glances: Sequence[Glance]) -> list[int]:
    """Return the two columns that show a line in most captures, in their own order."""
    count = len(glances[0].names)
    seen = [sum(glance.lines[column] is not None for glance in glances) for column in range(count)]
    return sorted(sorted(range(count), key=lambda column: -seen[column])[:2])


def _by_name(glance: Glance, columns: Sequence[int]) -> Roles | None:
    sides = [_side(glance.names[column]) for column in columns]
    if "reference" in sides and sides.count("reference") == 1:
        first = sides.index("reference")
    elif sides.count("driven") == 1:
        first = 1 - sides.index("driven")
    else:
        return None
    reference, driven = columns[first], columns[1 - first]
    reason = f"by the channel names '{glance.names[reference]}' and '{glance.names[driven]}'"
    return Roles(reference=reference, driven=driven, reason=reason)


def _side(name: str) -> str:
    """Return the role that a channel name hints at; 'driven' is not 'drive'."""
    words = re.findall(r"[a-z]+", name.lower())
    if any(word.startswith(DRIVEN_WORDS) for word in words):
        return "driven"
    return "reference" if any(word.startswith(REFERENCE_WORDS) for word in words) else ""


def _by_spread(glances: Sequence[Glance], columns: Sequence[int]) -> Roles:
    spreads = [_spread(glances, column) for column in columns]
    widths = [_mean_width(glances, column) for column in columns]
    if max(spreads) > SPREAD_RATIO * min(spreads):
        first = int(spreads[1] > spreads[0])
        reason = "its frequency changes most from capture to capture"
    elif max(widths) > SPREAD_RATIO * min(widths):
        first = int(widths[1] < widths[0])
        reason = "its line is the sharper one"
    else:
        first, reason = 0, "nothing tells the channels apart; the first is taken"
    return Roles(reference=columns[first], driven=columns[1 - first], reason=reason)


def _spread(glances: Sequence[Glance], column: int) -> float:
    """Return the relative spread of a channel's frequency over the captures."""
    hz = [line.frequency_hz for glance in glances if (line := glance.lines[column]) is not None]
    return float(np.ptp(hz) / median(hz)) if hz else 0.0


def _mean_width(glances: Sequence[Glance], column: int) -> float:
    widths = [line.width_hz for glance in glances if (line := glance.lines[column]) is not None]
    return median(widths) if widths else math.inf


def usual_amplitude(glances: Sequence[Glance], column: int) -> float:
    """Return the median amplitude of a channel's line over the captures, 0 if it has none."""
    found = [line.amplitude for glance in glances if (line := glance.lines[column]) is not None]
    return median(found) if found else 0.0


def is_running(glance: Glance, column: int, usual: float) -> bool:
    """Tell whether the oscillator of a channel runs in a capture."""
    line = glance.lines[column]
    return line is not None and line.amplitude > QUIET_SHARE * usual


def guess_order(reference_hz: float, driven_hz: float) -> tuple[int, int] | None:
    """Return the smallest n:m with n f_driven near m f_reference, None when there is none.

    Parameters
    ----------
    reference_hz, driven_hz : float, Hz
    """
    orders = [
        (n, m)
        for n in range(1, LARGEST_ORDER + 1)
        for m in range(1, LARGEST_ORDER + 1)
        if math.gcd(n, m) == 1
        and abs(n * driven_hz / (m * reference_hz) - 1.0) < ORDER_REACH / max(n, m)
    ]
    return min(orders, key=sum, default=None)


def guess_quantity(unit: str) -> QuantityKind:
    """Return the kind of quantity that a unit belongs to, "unstated" when it says nothing."""
    return UNIT_QUANTITIES.get(unit.strip().lower(), "unstated")
