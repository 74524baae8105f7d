"""Numbers of rows that a text states of itself, above its rows: "Points,2500".

Text has no length field, so a file cut between two rows looks whole. Many recorders write how
many rows there should be; where they do, it is held against what is there.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass

from rig.readers.options import ReadOptions
from rig.readers.refusals import printable, refusal

_THINGS = r"(?:data\s*)?(?:points?|pts|samples|rows|records|values)"
_LABEL = (
    rf"(?:(?:total\s+)?(?:number|no\.?|nr\.?|count|#)\s*(?:of\s+)?{_THINGS}"
    rf"|{_THINGS}(?:\s*count)?|(?:sample|row|point|record)\s*count"
    r"|(?:record|memory|waveform)\s*length)"  # a size is one of bytes
)
_STATED = re.compile(
    rf'^[\s#%;*"]*{_LABEL}\s*(?:[(\[]\s*{_THINGS}\s*[)\]]\s*)?["\s]*[:=,;\t ]+["\s]*'
    rf'(\d+(?:\.\d*)?(?:e\+?\d+)?)["\s]*(?:[,;\t ]+["\s]*{_THINGS})?["\s,;]*$',
    re.IGNORECASE | re.ASCII,
)
ROWS_MAX = 1e15  # more is no count of rows


@dataclass(frozen=True, slots=True, kw_only=True)
class StatedRows:
    """How many rows a text says it has, and the line that says so."""

    count: int
    text: str


@dataclass(frozen=True, slots=True, kw_only=True)
class FoundRows:
    """What a text holds: rows, frames with those missing in between, channels beside the time.

    A preamble may count any of the first two, or the values of all channels.
    """

    rows: int
    frames: int
    channels: int


def find_stated_rows(lines: Sequence[str]) -> StatedRows | None:
    """Return what the lines above the rows state, None unless exactly one number is stated."""
    found: dict[int, str] = {}
    for line in lines:
        match = _STATED.match(line)
        if match is None:
            continue
        value = float(match.group(1))
        if value == int(min(value, ROWS_MAX)) and 0 < value < ROWS_MAX:
            found.setdefault(int(value), printable(line, 40))
    if len(found) != 1:
        return None
    count, text = found.popitem()
    return StatedRows(count=count, text=text)


def compare_rows(
    path: str, stated: StatedRows | None, counts: FoundRows, options: ReadOptions
) -> tuple[str, ...]:
    """Return the note on a number of rows that is not the stated one.

    Raises
    ------
    CaptureError
        If rows are missing and no option allows it.
    """
    if stated is None or stated.count == counts.rows:
        return ()
    what = f"preamble says '{stated.text}', file holds {counts.rows} rows"
    if stated.count == counts.frames:
        return (f"{what} over a time of {counts.frames}",)
    if counts.channels > 1 and stated.count == counts.rows * counts.channels:
        return (f"{what} of {counts.channels} values each",)
    if counts.rows > stated.count:
        return (what,)
    if not options.allow_truncated:
        remedy = "Re-copy the file; if rows were left out on purpose pass --allow-truncated"
        raise refusal(path, f"{what} (cut short?)", remedy)
    return (f"{what}; truncation accepted",)
