"""The header of a data set 58: eleven lines of text with fields in fixed columns."""

from __future__ import annotations

from dataclasses import dataclass

from rig.readers.refusals import printable, refusal

_KINDS = {8: "displacement", 11: "velocity", 12: "acceleration", 13: "force"}


@dataclass(frozen=True, slots=True, kw_only=True)
class FunctionHeader:
    """The header of one data set 58, and where its values start."""

    number: int
    name: str
    function_type: int
    data_type: int
    point_count: int
    even: bool
    start: float
    increment: float
    increment_text: str
    unit: str
    kind: str
    binary_order: str
    byte_count: int
    data_offset: int

    @property
    def values_a_point(self) -> int:
        """Two where abscissa and value stand side by side, else one."""
        return 1 if self.even else 2


def line_text(line: bytes) -> str:
    """Return a line of the header fit to be shown."""
    return printable(line.decode("latin-1"), 80)


def binary_order(path: str, number: int, words: list[str]) -> str:
    """Return "" for text, else the byte order of a data set 58b."""
    if not words[0].lower().endswith("b"):
        return ""
    if len(words) < 3 or words[1] not in ("1", "2") or words[2] != "2":
        what = f"data set {number}: byte order or number format is not known ({' '.join(words)})"
        raise refusal(path, what, "Export IEEE floats, or text")
    return "<" if words[1] == "1" else ">"


def parse_header(
    path: str, number: int, lines: list[bytes], binary: tuple[str, int], offset: int
) -> FunctionHeader:
    """Return the header from its eleven lines; fields stand in fixed columns."""
    try:
        form, ordinate = lines[6].decode("latin-1"), lines[8].decode("latin-1")
        increment_text = form[43:56]
        kind = int(ordinate[0:10] or 0)
        return FunctionHeader(
            number=number,
            name="" if line_text(lines[0]).upper() == "NONE" else line_text(lines[0]),
            function_type=int(lines[5][0:5]),
            data_type=int(form[0:10]),
            point_count=int(form[10:20]),
            even=int(form[20:30]) == 1,
            start=_number(form[30:43]),
            increment=_number(increment_text),
            increment_text=increment_text.strip(),
            unit=_label(ordinate[47:67]),
            kind=_KINDS.get(kind, ""),
            binary_order=binary[0],
            byte_count=binary[1],
            data_offset=offset,
        )
    except (ValueError, OverflowError) as fault:
        shown = line_text(lines[6])
        what = f'data set {number}: header is damaged (data form "{shown}")'
        raise refusal(path, what, "Export it again, or re-copy the file") from fault


def _number(text: str) -> float:
    """Return a float written with an E or a D exponent; blank counts as zero."""
    return float(text.strip().upper().replace("D", "E") or 0)


def _label(text: str) -> str:
    label = printable(text, 20)
    return "" if label.upper() == "NONE" else label


def last_digit(text: str) -> float:
    """Return the worth of the last digit of a number as written."""
    mantissa, _, exponent = text.upper().replace("D", "E").partition("E")
    decimals = len(mantissa.partition(".")[2])
    return 10.0 ** (int(exponent or 0) - decimals)
