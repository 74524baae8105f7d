"""The values of a data set 58 written as text: counted and checked once, then read in blocks."""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from typing import BinaryIO

import numpy as np

from rig.arrays import FloatArray, SampleBlock
from rig.readers.rebuffer import rebuffer
from rig.readers.refusals import open_binary, printable, refusal

PIECE_BYTES = 2**20
KEPT_VALUES = 2**20  # up to 8 MB of values a data set stay in memory and are not parsed twice
LINE_BYTES_MAX = 2**16
_CLOSE = re.compile(rb"^ {4}-1[ \t]*\r?$", re.MULTILINE)
_TOUCHING = re.compile(rb"(?<=[0-9.])(?=[+-])")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TextValues:
    """Block source over the values of one data set; column 0 is the ordinate, 1 the abscissa.

    ``pieces`` holds (byte, byte behind, first value) of each stretch of text.
    """

    path: str
    number: int
    values_a_point: int
    count: int
    closed: bool
    open_end: bool
    pieces: tuple[tuple[int, int, int], ...]
    kept: FloatArray | None = field(repr=False)
    point_count: int = 0

    def __call__(
        self, columns: Sequence[int], block_frames: int, start_frame: int, stop_frame: int
    ) -> Iterator[SampleBlock]:
        """Yield float64 blocks of ordinates (column 0) or abscissas (column 1)."""
        pieces = self._points(columns, start_frame, stop_frame)
        return rebuffer(pieces, block_frames, stop_frame - start_frame)

    def _points(self, columns: Sequence[int], start: int, stop: int) -> Iterator[FloatArray]:
        width = self.values_a_point
        # The ordinate stands last in a point.
        chosen = [width - 1 - column for column in columns]
        left = np.empty(0)
        for values in self._values(start * width, stop * width):
            joined = np.concatenate([left, values]) if len(left) else values
            whole = len(joined) // width * width
            yield joined[:whole].reshape(-1, width)[:, chosen].T
            left = joined[whole:]

    def _values(self, start: int, stop: int) -> Iterator[FloatArray]:
        if self.kept is not None:
            yield self.kept[start:stop]
            return
        starts = [first for _, _, first in self.pieces]
        with open_binary(self.path) as file:
            for place in range(int(np.searchsorted(starts, start, side="right")) - 1, len(starts)):
                begin, end, first = self.pieces[place]
                if first >= stop:
                    return
                file.seek(begin)
                values = parse_values(self.path, self.number, file.read(end - begin), begin)
                yield values[max(start - first, 0) : max(stop - first, 0)]


def survey_text(
    file: BinaryIO, path: str, number: int, offset: int, values_a_point: int
) -> TextValues:
    """Return the values between a byte and the closing -1, and move behind it.

    Raises
    ------
    CaptureError
        If something between them is no number.
    """
    pieces: list[tuple[int, int, int]] = []
    kept: list[FloatArray] | None = []
    count, closed, place, open_end = 0, False, offset, False
    while not closed:
        file.seek(place)
        data = file.read(PIECE_BYTES)
        if not data:
            break
        whole = len(data) if len(data) < PIECE_BYTES else data.rfind(b"\n") + 1
        if whole == 0:
            what = f"data set {number}: no line end within {PIECE_BYTES} bytes at byte {place}"
            raise refusal(path, what, "Export it again, or re-copy the file")
        close = _CLOSE.search(data, 0, whole)
        stop = close.start() if close else whole
        values = parse_values(path, number, data[:stop], place)
        pieces.append((place, place + stop, count))
        count += len(values)
        kept = _keep(kept, values, count)
        closed = close is not None
        open_end = not closed and not data[stop - 1 : stop].isspace()
        place += whole if close is None else close.end() + 1
    file.seek(place)
    return TextValues(
        path=path,
        number=number,
        values_a_point=values_a_point,
        count=count,
        closed=closed,
        open_end=open_end,
        pieces=tuple(pieces),
        kept=None if kept is None else np.concatenate([np.empty(0), *kept]),
    )


def _keep(kept: list[FloatArray] | None, values: FloatArray, count: int) -> list[FloatArray] | None:
    if kept is None or count > KEPT_VALUES:
        return None
    return [*kept, values]


def parse_values(path: str, number: int, text: bytes, place: int) -> FloatArray:
    """Return the numbers of a stretch of text; D exponents and touching columns are read too."""
    text = text.replace(b"D", b"E").replace(b"d", b"e")
    try:
        return np.array(text.split(), dtype=np.float64)
    except ValueError:
        apart = _TOUCHING.sub(b" ", text)
    try:
        return np.array(apart.split(), dtype=np.float64)
    except ValueError as fault:
        wrong = next((word for word in apart.split() if not _is_number(word)), b"")
        at = place + max(text.find(wrong), 0)
        what = f'data set {number}: "{printable(wrong.decode("latin-1"), 30)}" is no number '
        raise refusal(path, f"{what}(byte {at})", "Export it again, or re-copy the file") from fault


def _is_number(word: bytes) -> bool:
    try:
        float(word)
    except ValueError:
        return False
    return True
