"""What a capture is and what is wrong with it: in one screen for a person, as JSON for a script.

Levels are in the units of the file: what a sensor makes of them is stated in a sweep file.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

from reports.numbers import one_line, plain_number, with_unit
from rig.captures import Capture
from rig.health import Fault, SignalHealth, examine_signals, named_lines

SCHEMA = "lockspan.inspection/1.0"
SHOWN_LINES = 4  # lines of a channel in the text; the JSON holds all that were found
SHOWN_NOTES = 5
SHOWN_SPANS = 20
# Times that a program wrote as k/rate scatter by rounding alone: that is no knowledge of a clock.
NEGLIGIBLE_RATE_U = 1e-12


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Inspection:
    """A capture's facts, and the health of each of its channels."""

    path: str
    format: str
    rate_hz: float
    rate_u_hz: float | None
    frame_count: int
    start_text: str | None
    notes: tuple[str, ...]
    channels: tuple[SignalHealth, ...]

    @property
    def duration_s(self) -> float:
        """Length of the capture, s."""
        return self.frame_count / self.rate_hz

    @property
    def faults(self) -> tuple[Fault, ...]:
        """All faults and warnings, the faults first."""
        found = [fault for channel in self.channels for fault in channel.faults]
        return tuple(sorted(found, key=lambda fault: fault.severity != "fault"))


def inspect_capture(capture: Capture) -> Inspection:
    """Return what a capture is and the health of all its channels, read once.

    Parameters
    ----------
    capture : Capture

    Raises
    ------
    CaptureError
        If the file turns out to be damaged while it is read.
    """
    return Inspection(
        path=capture.path,
        format=capture.format,
        rate_hz=capture.rate_hz,
        rate_u_hz=capture.rate_u_hz,
        frame_count=capture.frame_count,
        start_text=capture.start_text,
        notes=capture.notes,
        channels=examine_signals(capture),
    )


def inspection_text(inspection: Inspection) -> str:
    """Return an inspection as plain text: facts, a table of channels, lines, findings."""
    parts = [
        _facts(inspection),
        _table(inspection),
        _line_rows(inspection),
        _findings(inspection),
        _notes(inspection.notes),
    ]
    return "\n\n".join("\n".join(part) for part in parts if part) + "\n"


def _facts(inspection: Inspection) -> list[str]:
    uncertain = ""
    if inspection.rate_u_hz and inspection.rate_u_hz > NEGLIGIBLE_RATE_U * inspection.rate_hz:
        uncertain = f" (standard uncertainty {plain_number(inspection.rate_u_hz, 2)} Hz)"
    facts = [
        one_line(inspection.path),
        f"  format    {inspection.format}",
        f"  rate      {plain_number(inspection.rate_hz, 10)} Hz{uncertain}",
        f"  length    {duration_text(inspection.duration_s)}, {inspection.frame_count} frames, "
        f"{len(inspection.channels)} channel{'s' if len(inspection.channels) != 1 else ''}",
    ]
    if inspection.start_text:
        facts.append(f"  started   {one_line(inspection.start_text)}")
    return facts


def duration_text(duration_s: float) -> str:
    """Return a length of time in seconds, with hours and minutes when it is long."""
    seconds = with_unit(plain_number(duration_s), "s")
    if duration_s < 120:
        return seconds
    minutes, rest = divmod(round(duration_s), 60)
    return f"{seconds} ({minutes // 60} h {minutes % 60} min {rest} s)"


HEADS = ("channel", "unit", "lowest", "highest", "mean", "rms", "line", "amplitude", "SNR")


def _table(inspection: Inspection) -> list[str]:
    rows = [HEADS, *(_row(channel) for channel in inspection.channels)]
    widths = [max(len(row[column]) for row in rows) for column in range(len(HEADS))]
    # Names stand left, numbers right, so that their decimals can be compared.
    return [
        "  ".join(
            cell.ljust(width) if column < 2 else cell.rjust(width)
            for column, (cell, width) in enumerate(zip(row, widths, strict=True))
        ).rstrip()
        for row in rows
    ]


def _row(channel: SignalHealth) -> tuple[str, ...]:
    survey = channel.survey
    digits = _range_digits(survey.bottom.value, survey.top.value)
    return (
        _named(channel),
        channel.unit or "–",
        plain_number(survey.bottom.value, digits),
        plain_number(survey.top.value, digits),
        plain_number(survey.mean, 3),
        plain_number(survey.rms, 4),
        "–" if channel.frequency_hz is None else f"{plain_number(channel.frequency_hz, 6)} Hz",
        plain_number(channel.amplitude, 4),
        "–" if channel.snr_db is None else f"{round(channel.snr_db)} dB",
    )


def _range_digits(low: float, high: float) -> int:
    """Return digits that tell two ends apart: four, more where a small range rides on an offset."""
    size, span = max(abs(low), abs(high)), high - low
    if not (math.isfinite(size) and span > 0):
        return 4
    return min(4 + max(round(math.log10(size / span)), 0), 12)


def _named(channel: SignalHealth) -> str:
    """Return number and name of a channel; the number alone where it has no other name."""
    number, name = str(channel.column + 1), one_line(channel.channel)
    return number if name == number else f"{number} {name}"[:24]


def _line_rows(inspection: Inspection) -> list[str]:
    rows = []
    for channel in inspection.channels:
        if channel.lines is None or len(channel.lines.lines) < 2:
            continue
        found = named_lines(channel.lines, channel.crosstalk)[:SHOWN_LINES]
        texts = [
            f"{plain_number(part.line.frequency_hz, 6)} Hz ({part.label}, "
            f"{plain_number(part.line.amplitude / channel.lines.own.amplitude, 2)}x)"
            for part in found[1:]
        ]
        rows.append(f"further lines, channel {channel.column + 1}: {', '.join(texts)}")
    return rows


def _findings(inspection: Inspection) -> list[str]:
    if not inspection.faults:
        return ["nothing wrong found"]
    return [f"{fault.severity + ':':9}{one_line(fault.text)}" for fault in inspection.faults]


def _notes(notes: tuple[str, ...]) -> list[str]:
    shown = [f"note:    {one_line(note)}" for note in notes[:SHOWN_NOTES]]
    left = len(notes) - len(shown)
    return [*shown, f"note:    and {left} more"] if left else shown


def inspection_json(inspection: Inspection) -> dict[str, Any]:
    """Return an inspection as plain values for JSON; a number that is not there is null."""
    return {
        "schema": SCHEMA,
        "capture": {
            "path": inspection.path,
            "format": inspection.format,
            "rate_hz": inspection.rate_hz,
            "rate_u_hz": inspection.rate_u_hz,
            "duration_s": inspection.duration_s,
            "frame_count": inspection.frame_count,
            "start": inspection.start_text,
            "notes": list(inspection.notes),
        },
        "channels": [_channel_json(channel) for channel in inspection.channels],
    }


def _channel_json(channel: SignalHealth) -> dict[str, Any]:
    survey = channel.survey
    return {
        "number": channel.column + 1,
        "name": channel.channel,
        "unit": channel.unit,
        "lowest": _number(survey.bottom.value),
        "highest": _number(survey.top.value),
        "mean": _number(survey.mean),
        "rms": _number(survey.rms),
        "missing_share": 1.0 - survey.finite_count / survey.frame_count,
        "frequency_hz": channel.frequency_hz,
        "amplitude": channel.amplitude,
        "snr_db": channel.snr_db,
        "samples_per_cycle": channel.rate_hz / channel.frequency_hz
        if channel.frequency_hz
        else None,
        "lines": _lines_json(channel),
        "crosstalk": _crosstalk_json(channel),
        "gaps": [
            {"start_s": span.start / channel.rate_hz, "stop_s": span.stop / channel.rate_hz}
            for span in survey.gaps[:SHOWN_SPANS]
        ],
        "gap_count": survey.gap_count,
        "faults": [_fault_json(fault) for fault in channel.faults],
    }


def _number(value: float) -> float | None:
    return value if math.isfinite(value) else None


def _lines_json(channel: SignalHealth) -> list[dict[str, Any]]:
    if channel.lines is None:
        return []
    return [
        {
            "frequency_hz": part.line.frequency_hz,
            "amplitude": part.line.amplitude,
            "snr_db": part.line.snr_db,
            "kind": part.kind,
        }
        for part in named_lines(channel.lines, channel.crosstalk)
    ]


def _crosstalk_json(channel: SignalHealth) -> dict[str, Any] | None:
    talk = channel.crosstalk
    if talk is None:
        return None
    return {
        "own_hz": talk.own_hz,
        "partner_hz": talk.partner_hz,
        "ratio": talk.ratio,
        "leak_ratio": talk.leak_ratio,
        "reason": talk.reason,
    }


def _fault_json(fault: Fault) -> dict[str, Any]:
    return {
        "name": fault.name,
        "severity": fault.severity,
        "value": fault.value,
        "threshold": fault.threshold,
        "unit": fault.unit,
        "text": fault.text,
        "reason": fault.reason,
    }
