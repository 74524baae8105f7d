"""Lines of a text file of any length, in pieces, with the byte and line each piece starts at.

Encoding and line ends are settled here, so that nothing further on meets a byte-order mark,
UTF-16, a carriage return alone, or a NUL.
"""

from __future__ import annotations

import codecs
from collections.abc import Iterator
from dataclasses import dataclass

from rig.readers.options import ReadOptions
from rig.readers.refusals import open_binary, refusal, size_text

PIECE_BYTES = 2**20  # one piece: some 30,000 rows of three columns
LINE_CHARACTERS_MAX = 2**20  # a longer line is no row of a table

_MARKS = (
    (codecs.BOM_UTF8, "utf-8"),
    (codecs.BOM_UTF16_LE, "utf-16-le"),
    (codecs.BOM_UTF16_BE, "utf-16-be"),
)


@dataclass(frozen=True, slots=True, kw_only=True)
class TextCoding:
    """How bytes become characters: codec, bytes of the byte-order mark, and what to note."""

    codec: str
    mark_bytes: int
    notes: tuple[str, ...] = ()

    @property
    def errors(self) -> str:
        """Error scheme under which decoding and encoding are exact inverses."""
        return "surrogatepass" if self.codec.startswith("utf-16") else "surrogateescape"


@dataclass(frozen=True, slots=True, kw_only=True)
class Piece:
    """Some whole lines: where they start, and their text without line ends."""

    offset: int
    first_line: int
    lines: list[str]


def find_coding(head: bytes) -> TextCoding:
    """Return the coding of a text file from its first bytes."""
    for mark, codec in _MARKS:
        if head.startswith(mark):
            notes = () if codec == "utf-8" else (f"text is {codec} with a byte-order mark",)
            return TextCoding(codec=codec, mark_bytes=len(mark), notes=notes)
    pairs = len(head) // 2
    odd, even = head[1::2].count(0), head[0::2].count(0)
    if pairs > 4 and max(odd, even) > 0.8 * pairs and min(odd, even) == 0:
        codec = "utf-16-le" if odd > even else "utf-16-be"
        return TextCoding(codec=codec, mark_bytes=0, notes=(f"text is {codec}, unmarked",))
    try:
        codecs.getincrementaldecoder("utf-8")("strict").decode(head)
    except UnicodeDecodeError:
        return TextCoding(
            codec="latin-1", mark_bytes=0, notes=("text is not UTF-8; taken as Latin-1",)
        )
    return TextCoding(codec="utf-8", mark_bytes=0)


def read_pieces(
    path: str,
    coding: TextCoding,
    options: ReadOptions,
    *,
    offset: int | None = None,
    first_line: int = 1,
    piece_bytes: int = PIECE_BYTES,
) -> Iterator[Piece]:
    """Yield the lines from a byte offset on, in pieces that end at line ends.

    Raises
    ------
    CaptureError
        At a NUL (unless reading is to stop there), or at a line too long to be a row.
    """
    start = coding.mark_bytes if offset is None else offset
    decoder = codecs.getincrementaldecoder(coding.codec)(coding.errors)
    carried, line = "", first_line
    with open_binary(path) as file:
        file.seek(start)
        ended = False
        while not ended:
            data = file.read(piece_bytes)
            ended = not data
            text = carried + _decoded(path, decoder, data, line)
            nul = text.find("\0")
            if nul >= 0:
                _refuse_nul(path, text[:nul], line, options)
                text, ended = text[:nul], True
            whole = len(text) if ended else _whole_lines(text)
            carried = text[whole:]
            if len(carried) > LINE_CHARACTERS_MAX:
                what = f"line {line} is longer than {size_text(LINE_CHARACTERS_MAX)}"
                raise refusal(path, f"{what}; no table of numbers", "Pass --format if it is one")
            lines = split_lines(text[:whole])
            if lines:
                yield Piece(offset=start, first_line=line, lines=lines)
            start += len(text[:whole].encode(coding.codec, coding.errors))
            line += len(lines)


def _decoded(path: str, decoder: codecs.IncrementalDecoder, data: bytes, line: int) -> str:
    try:
        return decoder.decode(data, final=not data)
    except UnicodeDecodeError as fault:
        what = f"text near line {line} is damaged ({fault.reason})"
        raise refusal(path, what, "Re-copy the file or save it as UTF-8") from fault


def split_lines(text: str) -> list[str]:
    """Return the lines of a text whose ends are LF, CR LF or CR; form feeds are no ends."""
    if not text:
        return []
    if "\r" in text:
        text = text.replace("\r\n", "\n").replace("\r", "\n")
    lines = text.split("\n")
    if not lines[-1]:
        lines.pop()
    return lines


def _whole_lines(text: str) -> int:
    """Return the length of the text up to its last certain line end."""
    # A CR at the very end may be half of CR LF: wait for the next piece.
    return max(text.rfind("\n"), text.rfind("\r", 0, len(text) - 1)) + 1


def _refuse_nul(path: str, before: str, line: int, options: ReadOptions) -> None:
    if options.stop_at_nul:
        return
    last = line + len(split_lines(before))
    what = f"line {last}: NUL bytes after line {last - 1}; file was pre-allocated"
    raise refusal(path, what, "Pass --stop-at-nul")
