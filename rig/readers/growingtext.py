"""Delimited text that is still being written, row by row."""

from __future__ import annotations

import os
from dataclasses import dataclass, replace

import numpy as np

from rig.arrays import FloatArray, SampleBlock
from rig.captures import CaptureChannel
from rig.readers.cells import RowForm, parse_rows
from rig.readers.delimited import HEAD_LINES, open_delimited
from rig.readers.dialect import find_dialect
from rig.readers.heldlevels import HeldLevels
from rig.readers.lines import TextCoding, find_coding, read_pieces, split_lines
from rig.readers.options import ReadOptions
from rig.readers.refusals import open_binary, read_head, refusal
from rig.readers.timebase import decimal_quantum

TAKE_BYTES = 2**22
GAP_FRAMES = 1.5  # a step of time longer than this, beyond rounding, means missing rows
ON_GRID_FRAMES = 0.05  # times as near as this to whole frames are not rounded
LONGEST_GAP_S = 3600.0  # a longer one is a clock that was set, not missing rows


@dataclass(slots=True, kw_only=True)
class GrowingText:
    """Rows as they are added; rows missing in time are NaN in their places."""

    path: str
    rate_hz: float
    channels: tuple[CaptureChannel, ...]
    coding: TextCoding
    form: RowForm
    wanted: tuple[int, ...]
    time_column: int | None
    time_unit_s: float
    offset: int
    line: int
    last_frame: float | None = None
    ended: bool = False

    def take(self) -> SampleBlock:
        """Return the frames of the whole rows that were added.

        Raises
        ------
        CaptureError
            If the file has become shorter, a row is broken, or times run back.
        """
        size = os.stat(self.path).st_size
        if size < self.offset:
            what = f"has become shorter ({size} bytes, read up to {self.offset})"
            raise refusal(self.path, what, "Start again")
        with open_binary(self.path) as file:
            file.seek(self.offset)
            data = file.read(TAKE_BYTES)
        ending = "\n".encode(self.coding.codec)
        whole = data.rfind(ending) + len(ending) if ending in data else 0
        self.offset += whole
        lines = split_lines(data[:whole].decode(self.coding.codec, self.coding.errors))
        if not lines:
            return np.empty((len(self.wanted), 0))
        parsed = parse_rows(self.path, lines, self.line, self.form)
        if parsed.fault is not None:
            raise parsed.fault
        self.line += len(lines)
        return self._placed(parsed.values)

    def _placed(self, values: FloatArray) -> SampleBlock:
        """Return the rows with NaN where times leave rows out, shape (channels, frames)."""
        rows = values[:, list(self.wanted)].T
        if self.time_column is None or not len(values):
            return rows
        frames = values[:, self.time_column] * self.time_unit_s * self.rate_hz
        before = frames[0] - 1.0 if self.last_frame is None else self.last_frame
        steps = np.diff(frames, prepend=before)
        if (steps < 0).any():
            raise refusal(self.path, "times run back while it grows", "Save rows in order")
        self.last_frame = float(frames[-1])
        limit = GAP_FRAMES + self._rounding(values[:, self.time_column], steps)
        missing = np.where(steps > limit, np.rint(steps) - 1, 0).astype(np.int64)
        if missing.max(initial=0) > LONGEST_GAP_S * self.rate_hz:
            raise refusal(self.path, "times jump by more than an hour", "Start again")
        placed = np.full((len(rows), len(frames) + int(missing.sum())), np.nan)
        placed[:, np.arange(len(frames)) + np.cumsum(missing)] = rows
        return placed

    def _rounding(self, times: FloatArray, steps: FloatArray) -> float:
        """Return by how many frames rounding of the times may lengthen a step."""
        if steps.min() > 0.5 and np.abs(steps - np.rint(steps)).max() < ON_GRID_FRAMES:
            return 0.0  # every time stands on a frame: nothing was rounded
        return decimal_quantum(times) * self.time_unit_s * self.rate_hz


def open_growing_text(path: str, options: ReadOptions) -> GrowingText:
    """Return a delimited text that is still being written.

    Dialect and rate come from what is there already, as for a finished file.

    Raises
    ------
    CaptureError
        If that is too little, or not what it should be.
    """
    options = replace(options, allow_truncated=True)
    capture = open_delimited(path, options)
    if isinstance(capture.source, HeldLevels):
        raise refusal(path, "a list of edges cannot be followed", "Measure it when finished")
    coding = find_coding(read_head(path))
    head = next(read_pieces(path, coding, options))
    dialect = find_dialect(path, head.lines[:HEAD_LINES], options)
    wanted = tuple(c for c in range(dialect.column_count) if c != dialect.time_column)
    return GrowingText(
        path=path,
        rate_hz=capture.rate_hz,
        channels=capture.channels,
        coding=coding,
        form=dialect.form,
        wanted=wanted,
        time_column=dialect.time_column,
        time_unit_s=dialect.time_unit_s,
        offset=_bytes_of(path, coding, dialect.start_index),
        line=dialect.start_index + 1,
    )


def _bytes_of(path: str, coding: TextCoding, lines: int) -> int:
    """Return the byte at which a line (from 0) begins."""
    ending = "\n".encode(coding.codec)
    head = read_head(path)
    place = coding.mark_bytes
    for _ in range(lines):
        found = head.find(ending, place)
        if found < 0:
            raise refusal(path, "preamble too long to be followed", "Measure it when finished")
        place = found + len(ending)
    return place
