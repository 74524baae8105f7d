"""Delimited text (CSV and its relatives) of any length.

Two passes in pieces: the first finds the dialect, counts and checks every row, and fits the
rate through all times; the second hands out blocks. Between them stays one entry a piece
(about a megabyte of text), or the values themselves where the table is small. Frames that
are missing in time are handed out as NaN in their places.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field, replace

import numpy as np

from rig.arrays import FloatArray, IntArray, SampleBlock
from rig.captures import Capture, CaptureChannel
from rig.errors import CaptureError
from rig.readers.cells import ParsedRows, RowForm, parse_rows
from rig.readers.dialect import Dialect, find_dialect
from rig.readers.heldlevels import hold_levels
from rig.readers.lines import Piece, TextCoding, find_coding, read_pieces
from rig.readers.options import ReadOptions
from rig.readers.rebuffer import rebuffer
from rig.readers.refusals import check_file, open_binary, read_head, refusal, settle_rate
from rig.readers.statedlength import FoundRows, compare_rows
from rig.readers.timebase import TimeFit, UnevenError

KEPT_VALUES = 2**21  # up to 16 MB of values stay in memory and are not parsed twice
HEAD_LINES = 2000  # a preamble longer than this is not looked through


def open_delimited(path: str, options: ReadOptions) -> Capture:
    """Return a delimited text as a capture.

    Raises
    ------
    CaptureError
        If no dialect fits, two fit, a row is broken, or the times are no even clock.
    """
    check_file(path)
    coding = find_coding(read_head(path))
    head = next(read_pieces(path, coding, options), None)
    if head is None:
        raise refusal(path, "holds no lines", "Export it again")
    dialect = find_dialect(path, head.lines[:HEAD_LINES], options)
    try:
        index = build_index(path, coding, dialect, options)
    except UnevenError:
        held = _held_capture(path, coding, dialect, options)
        if held is None:
            raise
        return held
    wanted = [c for c in range(dialect.column_count) if c != dialect.time_column]
    if not wanted:
        raise refusal(path, "holds times but no other column", "Export the signal as well")
    source = DelimitedSource(index=index, wanted=tuple(wanted))
    notes = coding.notes + dialect.notes + index.notes
    return Capture(
        path=path,
        format=f"csv, {dialect.text}",
        rate_hz=index.rate_hz,
        rate_u_hz=index.rate_u_hz,
        frame_count=index.frame_count,
        channels=_channels(dialect, wanted),
        source=source,
        notes=notes,
    )


def _held_capture(
    path: str, coding: TextCoding, dialect: Dialect, options: ReadOptions
) -> Capture | None:
    """Return the capture of a list of level changes, None when the rows are anything else."""
    if options.rate_hz is None or dialect.time_column is None:
        return None
    timeless = replace(dialect, time_column=None)
    index = build_index(path, coding, timeless, options)
    if index.kept is None:
        return None
    held = hold_levels(path, index.kept, dialect.time_column, dialect.time_unit_s, options.rate_hz)
    if held is None:
        return None
    wanted = [c for c in range(dialect.column_count) if c != dialect.time_column]
    return Capture(
        path=path,
        format=f"csv, {dialect.text}",
        rate_hz=options.rate_hz,
        frame_count=held.frame_count,
        channels=_channels(dialect, wanted),
        source=held,
        notes=(held.note, *coding.notes, *dialect.notes, *index.notes),
    )


def _channels(dialect: Dialect, wanted: Sequence[int]) -> tuple[CaptureChannel, ...]:
    """Return the channels that are no time; without a header they count from "1"."""
    unnamed = dialect.names == tuple(str(c + 1) for c in range(dialect.column_count))
    return tuple(
        CaptureChannel(
            name=str(place) if unnamed or not dialect.names[c] else dialect.names[c],
            unit=dialect.units[c],
        )
        for place, c in enumerate(wanted, start=1)
    )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RowIndex:
    """Where rows are: for each piece its byte, line and first row; for each run its frame."""

    path: str
    coding: TextCoding
    options: ReadOptions
    form: RowForm
    start_index: int
    piece_offsets: IntArray
    piece_lines: IntArray
    piece_rows: IntArray
    row_count: int
    run_rows: IntArray
    run_frames: IntArray
    frame_count: int
    rate_hz: float
    rate_u_hz: float | None
    kept: FloatArray | None = field(repr=False)
    notes: tuple[str, ...]


@dataclass(slots=True, kw_only=True)
class _Survey:
    """What the first pass has met so far."""

    path: str
    form: RowForm
    fit: TimeFit | None
    time_column: int | None
    pieces: list[tuple[int, int, int]] = field(default_factory=list)
    rows: int = 0
    comments: int = 0
    kept: list[FloatArray] | None = field(default_factory=list)
    footer: ParsedRows | None = None

    def take(self, piece: Piece, lines: list[str], first_line: int) -> None:
        """Check the rows of a piece, feed their times, remember where they stand."""
        parsed = parse_rows(self.path, lines, first_line, self.form)
        if len(parsed.values) and self.footer is not None and self.footer.fault is not None:
            raise self.footer.fault
        if parsed.fault is not None and self.footer is None:
            self.footer = parsed
        self.comments += parsed.comment_count
        self.pieces.append((piece.offset, piece.first_line, self.rows))
        if self.fit is not None and self.time_column is not None:
            self.fit.add(parsed.values[:, self.time_column])
        self.rows += len(parsed.values)
        self._keep(parsed.values)

    def _keep(self, values: FloatArray) -> None:
        if self.kept is not None:
            self.kept.append(values)
            if self.rows * self.form.column_count > KEPT_VALUES:
                self.kept = None


def build_index(path: str, coding: TextCoding, dialect: Dialect, options: ReadOptions) -> RowIndex:
    """Return the index of all rows; every row has been checked on the way.

    Raises
    ------
    CaptureError
        If a row is broken, times are no even clock, or nothing states a rate.
    """
    given_step_s = None if options.rate_hz is None else 1.0 / options.rate_hz
    fit = None
    if dialect.time_column is not None:
        fit = TimeFit(path=path, scale=dialect.time_unit_s, given_step_s=given_step_s)
    survey = _Survey(path=path, form=dialect.form, fit=fit, time_column=dialect.time_column)
    skipped = dialect.start_index
    for piece in read_pieces(path, coding, options):
        survey.take(piece, piece.lines[skipped:], piece.first_line + skipped)
        skipped = 0
    if survey.rows == 0:
        raise refusal(path, "holds no samples", "Export it again")
    return _index_of(coding, dialect, options, survey)


def _index_of(
    coding: TextCoding, dialect: Dialect, options: ReadOptions, survey: _Survey
) -> RowIndex:
    run_rows = run_frames = np.zeros(1, dtype=np.int64)
    frame_count, stated_hz, rate_u_hz = survey.rows, None, None
    notes = _end_notes(survey, options)
    where = "no time column found; --time-column NAME states one"
    if survey.fit is not None:
        times = survey.fit.finish()
        run_rows, run_frames, frame_count = times.run_rows, times.run_frames, times.frame_count
        stated_hz, rate_u_hz, where = times.rate_hz, times.rate_u_hz, "time column"
        notes += times.notes
    channels = dialect.column_count - (dialect.time_column is not None)
    found = FoundRows(rows=survey.rows, frames=frame_count, channels=channels)
    notes += compare_rows(survey.path, dialect.stated_rows, found, options)
    rate_hz, rate_notes = settle_rate(survey.path, stated_hz, options, where)
    places = np.array(survey.pieces, dtype=np.int64).reshape(-1, 3)
    return RowIndex(
        path=survey.path,
        coding=coding,
        options=options,
        form=dialect.form,
        start_index=dialect.start_index,
        piece_offsets=places[:, 0],
        piece_lines=places[:, 1],
        piece_rows=places[:, 2],
        row_count=survey.rows,
        run_rows=run_rows,
        run_frames=run_frames,
        frame_count=frame_count,
        rate_hz=rate_hz,
        rate_u_hz=rate_u_hz if options.rate_hz is None else None,
        kept=None if survey.kept is None else np.concatenate(survey.kept),
        notes=rate_notes + notes,
    )


def _end_notes(survey: _Survey, options: ReadOptions) -> tuple[str, ...]:
    """Return notes on comments and on the end of the file; refuse a row that was cut."""
    notes = [f"{survey.comments} comment lines left out"] if survey.comments else []
    tail = _last_bytes(survey.path)
    open_end = tail.rstrip(b"\0")[-1:] not in (b"\n", b"\r")
    if options.stop_at_nul and tail[-2:] == b"\0\0":
        notes.append("reading stopped at the first NUL byte")
        open_end = False
    footer = survey.footer
    if footer is not None and footer.fault is not None:
        if not footer.fault_is_text and not (open_end and options.allow_truncated):
            raise _cut_row(survey.path, footer.fault) if open_end else footer.fault
        kind = "footer" if footer.fault_is_text else "cut row at the end"
        notes.append(f"{kind} left out: '{footer.fault_text}'")
    elif open_end:
        notes.append("the last line has no line end: if the file was cut, its last value may be")
        notes[-1] += " incomplete"
    return tuple(notes)


def _cut_row(path: str, fault: CaptureError) -> CaptureError:
    what = str(fault).removeprefix(f"{path}: ").rsplit(". ", 1)[0]
    remedy = "Re-copy the file or pass --allow-truncated"
    return refusal(path, f"{what} (last line, without a line end: the file was cut)", remedy)


def _last_bytes(path: str) -> bytes:
    with open_binary(path) as file:
        file.seek(0, 2)
        file.seek(max(file.tell() - 4, 0))
        return file.read()


@dataclass(frozen=True, slots=True, kw_only=True)
class DelimitedSource:
    """Block source over indexed rows; frames missing in time are NaN."""

    index: RowIndex
    wanted: tuple[int, ...]

    def __call__(
        self, columns: Sequence[int], block_frames: int, start_frame: int, stop_frame: int
    ) -> Iterator[SampleBlock]:
        """Yield float64 blocks of the chosen columns."""
        chosen = [self.wanted[c] for c in columns]
        pieces = self._frames(chosen, start_frame, stop_frame, block_frames)
        return rebuffer(pieces, block_frames, stop_frame - start_frame)

    def _frames(self, chosen: list[int], start: int, stop: int, step: int) -> Iterator[FloatArray]:
        """Yield columns over consecutive frames in pieces of any length, gaps included."""
        index = self.index
        run_stops = np.append(index.run_rows[1:], index.row_count)
        first = int(np.searchsorted(index.run_frames, start, side="right")) - 1
        rows: _RowTaker | None = None
        place = start
        for row, row_stop, frame in zip(
            index.run_rows[first:], run_stops[first:], index.run_frames[first:], strict=True
        ):
            yield from _gap(len(chosen), min(int(frame), stop) - place, step)
            place = max(place, min(int(frame), stop))
            low = int(row) + place - int(frame)
            high = min(int(row_stop), int(row) + stop - int(frame))
            if low >= high:
                continue
            rows = rows or _RowTaker(path=index.path, pieces=self._rows_from(low))
            for values in rows.take(high - low):
                yield values[:, chosen].T
            place += high - low
            if place >= stop:
                return

    def _rows_from(self, row: int) -> Iterator[FloatArray]:
        """Yield the values of rows from one on, shape (rows, columns)."""
        index = self.index
        if index.kept is not None:
            yield index.kept[row:]
            return
        piece = int(np.searchsorted(index.piece_rows, row, side="right")) - 1
        skipped = row - int(index.piece_rows[piece])
        offset = int(index.piece_offsets[piece])
        line = int(index.piece_lines[piece])
        for part in read_pieces(
            index.path, index.coding, index.options, offset=offset, first_line=line
        ):
            yield self._parse(part)[skipped:]
            skipped = 0

    def _parse(self, part: Piece) -> FloatArray:
        index = self.index
        # The first piece opens with the preamble.
        above = index.start_index if part.first_line == 1 else 0
        lines, first_line = part.lines[above:], part.first_line + above
        return parse_rows(index.path, lines, first_line, index.form).values


def _gap(columns: int, frames: int, step: int) -> Iterator[FloatArray]:
    while frames > 0:
        yield np.full((columns, min(frames, step)), math.nan)
        frames -= step


@dataclass(slots=True, kw_only=True)
class _RowTaker:
    """Takes counted rows from pieces, keeping what is left over for the next call."""

    path: str
    pieces: Iterator[FloatArray]
    left: FloatArray = field(default_factory=lambda: np.empty((0, 0)))

    def take(self, count: int) -> Iterator[FloatArray]:
        """Yield the next rows, ``count`` in all."""
        while count > 0:
            if len(self.left) == 0:
                self.left = self._next_piece()
            part, self.left = self.left[:count], self.left[count:]
            count -= len(part)
            yield part

    def _next_piece(self) -> FloatArray:
        piece = next(self.pieces, None)
        if piece is None:
            what = "holds fewer rows than when it was opened"
            raise refusal(self.path, what, "Wait until nobody writes to it and run again")
        return piece
