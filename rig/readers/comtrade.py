"""IEEE C37.111 (COMTRADE) records: .cfg with .dat beside it, or both in one .cff.

Values are gain x number + bias in the unit of the configuration; the marks for a missing
sample become NaN. Skew is handed on per channel, never applied to the samples.
"""

from __future__ import annotations

import math
import os
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np

from rig.arrays import SampleBlock
from rig.captures import BLOCK_FRAMES, BlockSource, Capture, CaptureChannel
from rig.readers.cells import Marks
from rig.readers.comtradecfg import (
    AnalogChannel,
    Configuration,
    parse_configuration,
)
from rig.readers.delimited import DelimitedSource, build_index
from rig.readers.dialect import Dialect
from rig.readers.lines import TextCoding
from rig.readers.options import ReadOptions
from rig.readers.rawblocks import FrameSource, RawColumn
from rig.readers.refusals import check_file, open_binary, printable, refusal, settle_rate
from rig.readers.sniffing import CFF_SECTION, beside
from rig.readers.timebase import TimeFit

CFG_BYTES_MAX = 2**24
_CODES = {"BINARY": "<i2", "BINARY32": "<i4", "FLOAT32": "<f4"}
_MISSING = {"BINARY": -(2**15), "BINARY32": -(2**31), "FLOAT32": None}
_ASCII_MISSING = 99999.0


@dataclass(frozen=True, slots=True, kw_only=True)
class DataPlace:
    """Where the data of a record stand: file, first byte, and byte behind.

    ``opened`` is the file that was asked for; it stands in front of what is refused.
    """

    opened: str
    path: str
    offset: int
    stop: int


def open_comtrade(path: str, options: ReadOptions) -> Capture:
    """Return a COMTRADE record as a capture.

    Raises
    ------
    CaptureError
        If configuration and data disagree, a part is missing, or there are several rates.
    """
    configuration, place = _find_parts(path)
    if configuration.file_type == "ASCII":
        frames, source, notes = _text_source(place, configuration, options)
    else:
        frames, source, notes = _binary_source(place, configuration, options)
    rate_hz, rate_u_hz, rate_notes = _settle_rate(path, configuration, source, frames, options)
    gains = [_side_gain(channel, options) for channel in configuration.channels]
    notes += _channel_notes(configuration, options)
    return Capture(
        path=path,
        format=f"comtrade, revision {configuration.revision}, {configuration.file_type.lower()}",
        rate_hz=rate_hz,
        rate_u_hz=rate_u_hz,
        frame_count=frames,
        channels=tuple(
            CaptureChannel(name=channel.name, unit=channel.unit, skew_s=channel.skew_s)
            for channel in configuration.channels
        ),
        source=ScaledSource(
            source=source,
            scales=tuple(
                (channel.gain * gain, channel.bias * gain)
                for channel, gain in zip(configuration.channels, gains, strict=True)
            ),
            missing=_ASCII_MISSING if configuration.file_type == "ASCII" else None,
        ),
        start_text=configuration.start_text or None,
        notes=rate_notes + configuration.notes + notes,
    )


def _find_parts(path: str) -> tuple[Configuration, DataPlace]:
    length = check_file(path)
    with open_binary(path) as file:
        head = file.read(64).lstrip(b"\xef\xbb\xbf")
    if CFF_SECTION.match(head):
        return _combined_parts(path, length)
    cfg, dat = path, path
    if path.lower().endswith(".dat"):
        cfg = beside(path, ".cfg") or ""
    else:
        dat = beside(path, ".dat") or ""
    if not cfg or not dat:
        wanted, given = (".dat", path) if not dat else (".cfg", path)
        stem = os.path.splitext(os.path.basename(path))[0]
        what = f"{printable(stem + wanted)} not found beside {printable(os.path.basename(given))}"
        raise refusal(path, what, "Copy both files of the record into one folder")
    with open_binary(cfg) as file:
        configuration = parse_configuration(cfg, _decoded(file.read(CFG_BYTES_MAX)))
    return configuration, DataPlace(opened=path, path=dat, offset=0, stop=check_file(dat))


def _decoded(body: bytes) -> str:
    try:
        return body.decode("utf-8-sig")
    except UnicodeDecodeError:
        return body.decode("latin-1")


def _combined_parts(path: str, length: int) -> tuple[Configuration, DataPlace]:
    """Return configuration and place of the data in a combined file (.cff)."""
    with open_binary(path) as file:
        text: list[bytes] = []
        section = b""
        while file.tell() < CFG_BYTES_MAX:
            line = file.readline(65536)
            if not line:
                break
            found = CFF_SECTION.match(line.lstrip(b"\xef\xbb\xbf"))
            if found is None:
                if section == b"CFG":
                    text.append(line)
                continue
            section = found.group(1).upper()
            if section == b"DAT":
                configuration = parse_configuration(path, _decoded(b"".join(text)))
                return configuration, _combined_data(path, file.tell(), length, found.group(3))
    what = "combined file holds no data section (cut short?)"
    raise refusal(path, what, "Re-copy the file")


def _combined_data(path: str, offset: int, length: int, stated: bytes | None) -> DataPlace:
    if stated is None or len(stated) > 18:
        return DataPlace(opened=path, path=path, offset=offset, stop=length)
    # A shorter file is found out, and said in samples, where the samples are counted.
    return DataPlace(opened=path, path=path, offset=offset, stop=min(offset + int(stated), length))


def _binary_source(
    place: DataPlace, configuration: Configuration, options: ReadOptions
) -> tuple[int, BlockSource, tuple[str, ...]]:
    """Return frames, source of raw numbers (time stamps last), and notes."""
    code = _CODES[configuration.file_type]
    width, analog = int(code[2:]), len(configuration.channels)
    frame_bytes = 8 + width * analog + 2 * math.ceil(configuration.status_count / 16)
    held, rest = divmod(place.stop - place.offset, frame_bytes)
    frames, notes = _settle_count(place, configuration, held, options)
    if rest:
        notes += (f"{rest} bytes behind the last sample left out",)
    columns = [
        RawColumn(offset=8 + width * c, code=code, missing=_MISSING[configuration.file_type])
        for c in range(analog)
    ]
    columns += [RawColumn(offset=4, code="<u4"), RawColumn(offset=0, code="<u4")]
    source = FrameSource(
        path=place.path,
        data_offset=place.offset,
        frame_bytes=frame_bytes,
        columns=tuple(columns),
    )
    return frames, source, notes


def _settle_count(
    place: DataPlace, configuration: Configuration, held: int, options: ReadOptions
) -> tuple[int, tuple[str, ...]]:
    """Return the samples to read: as many as declared, or what options allow instead."""
    declared = configuration.sample_count
    if held == 0:
        raise refusal(place.opened, "holds no samples", "Re-copy the file")
    if declared is None or declared == held:
        return held, ()
    part = "data section" if place.offset else ".dat"
    what = f"{part} holds {held} of {declared} samples"
    if held < declared:
        if not options.allow_truncated:
            raise refusal(place.opened, what, "Re-copy the file or pass --allow-truncated")
        return held, (f"{what}; truncation accepted",)
    if not options.trust_file_length:
        what = f"configuration declares {declared} samples, {part} holds {held}"
        raise refusal(place.opened, what, "Pass --trust-file-length or export it again")
    return held, (f"configuration declares {declared} samples; {held} read",)


def _text_source(
    place: DataPlace, configuration: Configuration, options: ReadOptions
) -> tuple[int, BlockSource, tuple[str, ...]]:
    """Return frames, source of raw numbers (time stamps last), and notes."""
    analog = len(configuration.channels)
    count = 2 + analog + configuration.status_count
    blank = ("",) * count
    dialect = Dialect(
        marks=Marks(delimiter=",", decimal="."),
        start_index=0,
        column_count=count,
        trailing=0,
        suffixes=blank,
        names=blank,
        units=blank,
        time_column=None,
        time_unit_s=1.0,
        notes=(),
    )
    coding = TextCoding(codec="latin-1", mark_bytes=place.offset)
    # The rate is settled by the configuration; any will do to count and check the rows.
    index = build_index(place.path, coding, dialect, replace(options, rate_hz=1.0))
    frames, notes = _settle_count(place, configuration, index.row_count, options)
    wanted = (*range(2, 2 + analog), 1, 0)
    return frames, DelimitedSource(index=index, wanted=wanted), index.notes + notes


def _settle_rate(
    path: str,
    configuration: Configuration,
    source: BlockSource,
    frames: int,
    options: ReadOptions,
) -> tuple[float, float | None, tuple[str, ...]]:
    """Return rate, uncertainty and notes: from the configuration, else from time stamps."""
    stamps = len(configuration.channels)
    notes = _check_numbers(path, source, stamps + 1, frames)
    tick_s = 1e-6 * configuration.time_factor
    if configuration.rate_hz is not None:
        rate_hz, rate_notes = settle_rate(path, configuration.rate_hz, options, "configuration")
        ends = [_at(source, stamps, place) * tick_s for place in (0, frames - 1)]
        span_s, stated_s = ends[1] - ends[0], (frames - 1) / configuration.rate_hz
        if span_s > 0 and abs(span_s - stated_s) > 1e-3 * stated_s + 1e-6:
            notes += (f"time stamps span {span_s:.6g} s, the stated rate gives {stated_s:.6g} s",)
        return rate_hz, None, rate_notes + notes
    given_step_s = None if options.rate_hz is None else 1.0 / options.rate_hz
    fit = TimeFit(path=path, scale=tick_s, given_step_s=given_step_s)
    for block in source([stamps], BLOCK_FRAMES, 0, frames):
        fit.add(block[0].astype(np.float64))
    base = fit.finish()
    if base.frame_count != frames:
        raise refusal(path, f"time stamps have a gap ({base.notes[-1]})", "Export the part without")
    rate_hz, rate_notes = settle_rate(path, base.rate_hz, options, "time stamps")
    u_hz = base.rate_u_hz if options.rate_hz is None else None
    return rate_hz, u_hz, rate_notes + base.notes + notes


def _at(source: BlockSource, column: int, frame: int) -> float:
    """Return one raw number."""
    return float(next(iter(source([column], 1, frame, frame + 1)))[0, 0])


def _check_numbers(path: str, source: BlockSource, column: int, frames: int) -> tuple[str, ...]:
    """Refuse sample numbers that skip; note numbers that do not count at all."""
    first, last = _at(source, column, 0), _at(source, column, frames - 1)
    if last - first == frames - 1:
        return ()
    if last - first > frames - 1:
        what = f"sample numbers run from {first:.0f} to {last:.0f} over {frames} samples"
        raise refusal(path, f"{what}: samples are missing", "Export the part without gaps")
    return ("sample numbers do not count up; not used",)


def _side_gain(channel: AnalogChannel, options: ReadOptions) -> float:
    """Return the factor from the recorded side to the wanted side of the transformer."""
    wanted = options.transformer_side
    if wanted is None or not channel.side or not (channel.primary and channel.secondary):
        return 1.0
    ratio = channel.primary / channel.secondary
    if wanted == "primary" and channel.side == "S":
        return ratio
    return 1.0 / ratio if wanted == "secondary" and channel.side == "P" else 1.0


def _channel_notes(configuration: Configuration, options: ReadOptions) -> tuple[str, ...]:
    """Return notes on skew and on the side of the transformer the values belong to."""
    notes = []
    for number, channel in enumerate(configuration.channels, start=1):
        if channel.skew_s:
            notes.append(f"channel {number}: skew {channel.skew_s * 1e6:.6g} us, from the file")
        if channel.side and channel.primary != channel.secondary:
            side = {"P": "primary", "S": "secondary"}[channel.side]
            ratio = f"{channel.primary:.6g}:{channel.secondary:.6g}"
            shown = options.transformer_side or side
            notes.append(f"channel {number}: {shown} values, recorded as {side} ({ratio})")
    return tuple(notes)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ScaledSource:
    """Block source that scales the raw numbers of another: (gain, bias) a column."""

    source: BlockSource
    scales: tuple[tuple[float, float], ...]
    missing: float | None = None

    def __call__(
        self, columns: Sequence[int], block_frames: int, start_frame: int, stop_frame: int
    ) -> Iterator[SampleBlock]:
        """Yield float64 blocks of the chosen columns."""
        for block in self.source(columns, block_frames, start_frame, stop_frame):
            scaled = block.astype(np.float64)
            if self.missing is not None:
                scaled[scaled == self.missing] = np.nan
            for row, column in enumerate(columns):
                gain, bias = self.scales[column]
                scaled[row] *= gain
                scaled[row] += bias
            yield scaled
