"""The configuration of an IEEE C37.111 (COMTRADE) record: revisions 1991, 1999 and 2013.

Configurations deviate from the standard in many small ways; a deviation that leaves the
meaning clear is noted, anything else is refused with its line.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from rig.readers.refusals import printable, refusal

CHANNELS_MAX = 100_000
REVISIONS = ("1991", "1999", "2013")
FILE_TYPES = ("ASCII", "BINARY", "BINARY32", "FLOAT32")


@dataclass(frozen=True, slots=True, kw_only=True)
class AnalogChannel:
    """One analog channel: value = gain x number + bias, in ``unit``, taken ``skew_s`` late."""

    name: str
    unit: str
    gain: float
    bias: float
    skew_s: float
    primary: float
    secondary: float
    side: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Configuration:
    """What a configuration says of its data; a rate of None means time stamps give it."""

    revision: str
    channels: tuple[AnalogChannel, ...]
    status_count: int
    rate_hz: float | None
    sample_count: int | None
    start_text: str
    file_type: str
    time_factor: float
    notes: tuple[str, ...]


@dataclass(slots=True, kw_only=True)
class _Lines:
    """The lines of a configuration, handed out one by one, split at commas."""

    path: str
    lines: list[str]
    place: int = 0

    def next(self, what: str) -> list[str]:
        """Return the fields of the next line."""
        if self.place >= len(self.lines):
            text = f"configuration ends before {what} (line {self.place + 1})"
            raise refusal(self.path, text, "Re-copy the .cfg, or export the record again")
        self.place += 1
        return [field.strip() for field in self.lines[self.place - 1].split(",")]

    def fault(self, what: str) -> Exception:
        """Return the refusal for the line handed out last."""
        shown = printable(self.lines[self.place - 1]) if self.lines else ""
        text = f'line {self.place} of the configuration: {what} ("{shown}")'
        return refusal(self.path, text, "Repair the line, or export the record again")

    def whole(self, text: str, what: str) -> int:
        """Return a whole number from a field."""
        if not (text.isascii() and text.isdigit() and len(text) < 19):
            raise self.fault(f"{what} must be a whole number")
        return int(text)

    def number(self, text: str, what: str) -> float:
        """Return a finite number from a field."""
        try:
            value = float(text)
        except ValueError:
            value = math.nan
        if not math.isfinite(value):
            raise self.fault(f"{what} must be a number")
        return value


def parse_configuration(path: str, text: str) -> Configuration:
    """Return what a configuration says.

    Raises
    ------
    CaptureError
        If a line is missing or damaged, or the record has several sample rates.
    """
    notes: list[str] = []
    kept = text.split("\x1a")[0].rstrip()
    if "\x1a" in text:
        notes.append("control-Z at the end of the configuration left out")
    lines = _Lines(path=path, lines=kept.splitlines())
    station = lines.next("the station")
    revision = _revision(station, notes)
    analog, status = _counts(lines)
    channels = tuple(_analog(lines, number, notes) for number in range(1, analog + 1))
    for number in range(1, status + 1):
        lines.next(f"status channel {number}")
    lines.next("the line frequency")
    rate_hz, sample_count = _rates(lines)
    start_text = " ".join(lines.next("the start time"))
    lines.next("the trigger time")
    file_type = lines.next("the file type")[0].upper()
    if file_type not in FILE_TYPES:
        raise lines.fault(f"file type must be one of {', '.join(FILE_TYPES)}")
    time_factor = 1.0
    if lines.place < len(lines.lines):
        time_factor = lines.number(lines.next("the time factor")[0] or "1", "time factor")
    if status:
        notes.append(f"{status} status channels left out")
    return Configuration(
        revision=revision,
        channels=channels,
        status_count=status,
        rate_hz=rate_hz,
        sample_count=sample_count,
        start_text=start_text,
        file_type=file_type,
        time_factor=time_factor,
        notes=tuple(notes),
    )


def _revision(station: list[str], notes: list[str]) -> str:
    revision = station[2] if len(station) > 2 else ""
    if revision in REVISIONS:
        return revision
    if revision:
        notes.append(f"revision '{printable(revision, 20)}' is not known; read as 1999")
        return "1999"
    return "1991"


def _counts(lines: _Lines) -> tuple[int, int]:
    fields = lines.next("the number of channels")
    if len(fields) < 3 or fields[1][-1:].upper() != "A" or fields[2][-1:].upper() != "D":
        raise lines.fault("must read like 4,2A,2D")
    analog = lines.whole(fields[1][:-1], "number of analog channels")
    status = lines.whole(fields[2][:-1], "number of status channels")
    if analog == 0:
        raise lines.fault("holds 0 analog channels")
    if analog + status > CHANNELS_MAX:
        raise lines.fault(f"declares more than {CHANNELS_MAX} channels")
    return analog, status


def _analog(lines: _Lines, number: int, notes: list[str]) -> AnalogChannel:
    """Return one analog channel; blank skew counts as zero and is noted."""
    fields = lines.next(f"analog channel {number}")
    if len(fields) < 8:
        raise lines.fault(f"analog channel {number} has {len(fields)} fields, 10 or 13 expected")
    if not fields[7]:
        notes.append(f"channel {number}: skew is blank; taken as 0")
    side = fields[12].upper() if len(fields) > 12 else ""
    primary, secondary = 1.0, 1.0
    if len(fields) > 11 and fields[10] and fields[11]:
        primary = lines.number(fields[10], "primary ratio")
        secondary = lines.number(fields[11], "secondary ratio")
    return AnalogChannel(
        name=printable(fields[1], 64) or str(number),
        unit=printable(fields[4], 32),
        gain=lines.number(fields[5] or "1", "multiplier a"),
        bias=lines.number(fields[6] or "0", "offset b"),
        skew_s=lines.number(fields[7] or "0", "skew") * 1e-6,
        primary=primary,
        secondary=secondary,
        side=side if side in ("P", "S") else "",
    )


def _rates(lines: _Lines) -> tuple[float | None, int | None]:
    """Return the sample rate and the number of the last sample; several rates are refused."""
    count = lines.whole(lines.next("the number of rates")[0], "number of rates")
    rates: list[float] = []
    last = 0
    for _ in range(max(count, 1)):
        fields = lines.next("a sample rate")
        if len(fields) < 2:
            raise lines.fault("must read like 4800,200000")
        rates.append(lines.number(fields[0], "sample rate"))
        last = lines.whole(fields[1], "number of the last sample")
    different = sorted(set(rates))
    if len(different) > 1:
        listed = ", ".join(f"{rate:.10g}" for rate in different)
        words = {2: "two", 3: "three"}.get(len(different), str(len(different)))
        what = f"{words} sample rates ({listed} Hz): not supported"
        raise refusal(lines.path, what, "Export the part with one rate")
    stated = different[0] if count > 0 and different[0] > 0 else None
    return stated, last or None
