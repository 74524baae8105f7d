"""Universal file, data set 58 (ASCII) and 58b (binary): functions at nodal points.

Each data set is one channel. The number of points a header declares is compared with what
follows it; other data sets of the file are passed over and noted.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import BinaryIO

import numpy as np

from rig.captures import BLOCK_FRAMES, Capture, CaptureChannel
from rig.errors import CaptureError
from rig.readers.datasets import ArraySignals, JoinedSource
from rig.readers.options import ReadOptions
from rig.readers.rawblocks import PlaneSource, RawColumn
from rig.readers.refusals import check_file, open_binary, printable, refusal, settle_rate
from rig.readers.timebase import TimeFit
from rig.readers.uffheader import (
    FunctionHeader,
    binary_order,
    last_digit,
    line_text,
    parse_header,
)
from rig.readers.ufftext import TextValues, survey_text

HEADER_LINES = 11
LINE_BYTES_MAX = 512  # header lines have 80 characters
PADDING_BYTES_MAX = 16  # more between the last value and the closing -1 is no padding
DATASETS_MAX = 100_000
_SIZES = {2: 4, 4: 8}
_TIME_RESPONSE = (0, 1)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class FunctionData:
    """One channel: its header, the points present, where they come from, what to note."""

    header: FunctionHeader
    present: int
    source: PlaneSource | TextValues
    notes: tuple[str, ...] = ()


def open_uff58(path: str, options: ReadOptions) -> Capture:
    """Return the time functions of a universal file as the channels of a capture.

    Raises
    ------
    CaptureError
        If a data set is cut short or damaged, there is none of type 58 with real values over
        time, or lengths and rates differ.
    """
    length = check_file(path)
    functions, notes = _read_all(path, length, options)
    if not functions:
        what = f"holds no time function (data set 58){'; ' + notes[0] if notes else ''}"
        raise refusal(path, what, "Export time histories as data set 58")
    _refuse_unequal(path, functions)
    frames = min(function.present for function in functions)
    if frames <= 0:
        raise refusal(path, "holds no samples", "Export it again")
    rate_hz, rate_u_hz, rate_notes = _settle_rate(path, functions, frames, options)
    for function in functions:
        notes += function.notes
    parts = [_signals(function) for function in functions]
    return Capture(
        path=path,
        format=f"uff58, {'binary' if functions[0].header.binary_order else 'text'}",
        rate_hz=rate_hz,
        rate_u_hz=rate_u_hz,
        frame_count=frames,
        channels=_channels(functions),
        source=JoinedSource(parts=tuple(parts)),
        notes=rate_notes + notes,
    )


def _signals(function: FunctionData) -> ArraySignals:
    channel = CaptureChannel(name=str(function.header.number))
    return ArraySignals(frame_count=function.present, channels=(channel,), source=function.source)


def _channels(functions: Sequence[FunctionData]) -> tuple[CaptureChannel, ...]:
    """Return the channels, called after their first header line where these differ."""
    names = [function.header.name for function in functions]
    named = len(set(names)) == len(names) and all(names)
    return tuple(
        CaptureChannel(name=name if named else str(place), unit=function.header.unit)
        for place, (name, function) in enumerate(zip(names, functions, strict=True), start=1)
    )


def _read_all(
    path: str, length: int, options: ReadOptions
) -> tuple[list[FunctionData], tuple[str, ...]]:
    """Return the time functions of the file, in order, and notes on what was passed over."""
    functions: list[FunctionData] = []
    passed: dict[str, int] = {}
    notes: tuple[str, ...] = ()
    with open_binary(path) as file:
        for number in range(1, DATASETS_MAX):
            kind = _next_dataset(file, path, number)
            if kind is None:
                break
            try:
                function = _read_one(file, path, length, number, kind, options)
            except CaptureError as fault:
                if not (options.allow_truncated and functions and "cut short" in str(fault)):
                    raise
                notes += (f"data set {number} is cut short and left out",)
                break
            if function is None:
                passed[kind] = passed.get(kind, 0) + 1
            else:
                functions.append(function)
    for kind, count in passed.items():
        notes += (f"{count} data sets of type {printable(kind)} passed over",)
    return functions, notes


def _next_dataset(file: BinaryIO, path: str, number: int) -> str | None:
    """Return the type text of the next data set, None at the end of the file."""
    line = _line(file)
    while line and not line.strip(b"\r\n \0\x1a"):
        line = _line(file)
    if not line:
        return None
    if line.strip() != b"-1":
        what = f'data set {number} does not open with -1 (has "{line_text(line)}")'
        raise refusal(path, what, "Export it again, or re-copy the file")
    words = line_text(_line(file)).split()
    if not words:
        raise refusal(path, f"data set {number}: header is cut short", "Re-copy the file")
    return " ".join(words)


def _line(file: BinaryIO) -> bytes:
    return file.readline(LINE_BYTES_MAX)


def _read_one(
    file: BinaryIO, path: str, length: int, number: int, kind: str, options: ReadOptions
) -> FunctionData | None:
    """Return one data set, positioned behind its end; None when it is no time function."""
    words = kind.split()
    if words[0].lower() not in ("58", "58b"):
        _skip_to_end(file)
        return None
    order = binary_order(path, number, words)
    stated = int(words[4]) if len(words) > 4 and words[4].isascii() and words[4].isdigit() else 0
    lines = [_line(file) for _ in range(HEADER_LINES)]
    if not lines[-1]:
        raise refusal(path, f"data set {number}: header is cut short", "Re-copy the file")
    header = parse_header(path, number, lines, (order, stated), file.tell())
    usable = header.function_type in _TIME_RESPONSE and header.data_type in _SIZES
    if not usable and not order:
        _skip_to_end(file)
        return None
    if order:
        data = _binary_data(file, path, length, header, options)
        return data if usable else None
    return _text_data(file, path, header, options)


def _skip_to_end(file: BinaryIO) -> None:
    for line in iter(lambda: _line(file), b""):
        if line.strip() == b"-1" and line[:1] == b" ":
            return


def _short(
    path: str, header: FunctionHeader, present: int, options: ReadOptions
) -> tuple[str, ...]:
    """Return the note for a data set that holds fewer points than declared, or refuse it."""
    if header.point_count <= 0:
        what = f"data set {header.number}: {header.point_count} points declared"
        raise refusal(path, what, "Export it again")
    if present >= header.point_count:
        return ()
    what = f"data set {header.number}: {header.point_count} points declared, {present} present"
    if not options.allow_truncated:
        raise refusal(path, what, "Re-copy the file or pass --allow-truncated")
    return (f"{what}; truncation accepted",)


def _binary_data(
    file: BinaryIO, path: str, length: int, header: FunctionHeader, options: ReadOptions
) -> FunctionData:
    width = _SIZES.get(header.data_type, 8)
    ahead = _abscissa_width(header, width)
    # Complex values (types 5 and 6) are passed over: two numbers a point.
    point_bytes = {5: 8, 6: 16}.get(header.data_type, width) + ahead
    held = max(length - header.data_offset, 0) // point_bytes
    notes = _short(path, header, held, options)
    present = min(held, header.point_count)
    file.seek(header.data_offset + present * point_bytes)
    if not notes:
        notes = _end_of_binary(file, path, header, point_bytes)
    order, start = header.binary_order, header.data_offset
    columns = (
        RawColumn(offset=start + ahead, code=f"{order}f{width}", step=point_bytes),
        RawColumn(offset=start, code=f"{order}f{ahead or 8}", step=point_bytes),
    )
    return FunctionData(
        header=header,
        present=present,
        source=PlaneSource(path=path, columns=columns),
        notes=notes + _found(header),
    )


def _abscissa_width(header: FunctionHeader, width: int) -> int:
    """Return the bytes of an abscissa beside each value: writers differ, the byte count tells."""
    if header.even:
        return 0
    stated = header.byte_count // max(header.point_count, 1) - width
    return stated if stated in (4, 8) else width


def _end_of_binary(
    file: BinaryIO, path: str, header: FunctionHeader, point_bytes: int
) -> tuple[str, ...]:
    """Move behind the closing -1 and return what to note; refuse where it stands elsewhere.

    Some writers put a line end or a few bytes of padding before it.
    """
    start = file.tell()
    ahead = file.read(PADDING_BYTES_MAX + 6)
    place = ahead.find(b"    -1")
    if place < 0 and len(ahead) > PADDING_BYTES_MAX:
        what = f"data set {header.number}: {header.point_count} points of {point_bytes} bytes are "
        what += f"not followed by the closing -1 ({header.byte_count} bytes of data declared)"
        raise refusal(path, what, "Export it again: the header contradicts the data")
    if place < 0:
        return (f"data set {header.number} is not closed by -1",)
    file.seek(start + place)
    _line(file)
    padding = len(ahead[:place].strip(b"\r\n"))
    return (f"data set {header.number}: {padding} bytes of padding left out",) if padding else ()


def _text_data(
    file: BinaryIO, path: str, header: FunctionHeader, options: ReadOptions
) -> FunctionData:
    values = survey_text(file, path, header.number, header.data_offset, header.values_a_point)
    excess = values.count - header.point_count * header.values_a_point
    if excess > 0 or (values.closed and values.count % header.values_a_point):
        what = f"data set {header.number}: {header.point_count} points declared, "
        what += f"{values.count / header.values_a_point:.10g} present"
        raise refusal(path, what, "Export it again, or re-copy the file")
    present = values.count // header.values_a_point
    if values.open_end and present < header.point_count:
        # The last value may have lost digits where the file was cut.
        present = (values.count - 1) // header.values_a_point
    notes = _short(path, header, present, options)
    if not notes and not values.closed:
        notes = (
            f"data set {header.number} is not closed by -1: if the file was cut, its last value "
            "may be incomplete",
        )
    return FunctionData(
        header=header,
        present=present,
        source=replace(values, point_count=present),
        notes=notes + _found(header),
    )


def _found(header: FunctionHeader) -> tuple[str, ...]:
    if not header.kind:
        return ()
    return (f"found in file: data set {header.number} is {header.kind}",)


def _refuse_unequal(path: str, functions: Sequence[FunctionData]) -> None:
    first = functions[0].header
    for function in functions[1:]:
        header = function.header
        if header.point_count != first.point_count or header.even != first.even:
            what = f"data sets {first.number} and {header.number} have {first.point_count} and "
            raise refusal(path, f"{what}{header.point_count} points", "Export one recording a file")
        if header.even and (header.increment, header.start) != (first.increment, first.start):
            what = f"data sets {first.number} and {header.number} have different times "
            what += f"(increments {first.increment:.6g} s and {header.increment:.6g} s)"
            raise refusal(path, what, "Export one recording a file")


def _settle_rate(
    path: str, functions: Sequence[FunctionData], frames: int, options: ReadOptions
) -> tuple[float, float | None, tuple[str, ...]]:
    """Return rate, its uncertainty from the digits written, and notes."""
    header = functions[0].header
    if not header.even:
        return _rate_of_pairs(path, functions[0], frames, options)
    if not (math.isfinite(header.increment) and header.increment > 0):
        stated = None if header.increment == 0 else header.increment
        where = f"data set {header.number}: increment {header.increment:.6g} s"
        rate_hz, notes = settle_rate(path, stated, options, where)
        return rate_hz, None, notes
    rate_hz, notes = settle_rate(path, 1.0 / header.increment, options, "increment of the header")
    if options.rate_hz is not None:
        return rate_hz, None, notes
    relative = last_digit(header.increment_text) / header.increment / math.sqrt(12.0)
    if relative > 1e-9:
        note = f"increment is written as {header.increment_text} s: the rate {rate_hz:.10g} Hz is "
        notes += (f"{note}uncertain by {relative * 1e6:.2g} ppm; state --rate if it is known",)
    return rate_hz, rate_hz * relative, notes


def _rate_of_pairs(
    path: str, function: FunctionData, frames: int, options: ReadOptions
) -> tuple[float, float | None, tuple[str, ...]]:
    """Return the rate of abscissas that are written out; gaps in them are refused."""
    if options.sets_times_aside:
        rate_hz, notes = settle_rate(path, None, options, "abscissas set aside")
        return rate_hz, None, notes
    given_step_s = None if options.rate_hz is None else 1.0 / options.rate_hz
    fit = TimeFit(path=path, given_step_s=given_step_s)
    for block in function.source([1], BLOCK_FRAMES, 0, frames):
        fit.add(block[0].astype(np.float64))
    base = fit.finish()
    if base.frame_count != frames:
        what = f"data set {function.header.number}: {base.notes[-1] if base.notes else 'a gap'}"
        raise refusal(path, what, "Export one data set a piece")
    rate_hz, notes = settle_rate(path, base.rate_hz, options, "abscissas")
    return rate_hz, base.rate_u_hz if options.rate_hz is None else None, notes + base.notes
