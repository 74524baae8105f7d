"""MAT files: version 4 to 7 through scipy.io, version 7.3 through ``rig.readers.hdf5``.

Before the library is loaded the elements of the file are walked and their lengths compared
with the file's, so that a cut file is told by its numbers, and none unpacks to more memory
than is allowed.
"""

from __future__ import annotations

import struct
import zlib
from dataclasses import dataclass, field
from typing import Any, BinaryIO

import numpy as np
from numpy.typing import NDArray

from rig.captures import Capture, CaptureChannel
from rig.readers.datasets import (
    CHANNELS_MAX,
    ArrayBox,
    ArrayEntry,
    ArraySignals,
    MemorySource,
    capture_from_box,
)
from rig.readers.hdf5 import open_box
from rig.readers.options import ReadOptions
from rig.readers.refusals import (
    check_file,
    open_binary,
    printable,
    read_head,
    refusal,
    size_text,
)

UNPACKED_BYTES_MAX = 2**28  # scipy loads a variable whole; larger ones belong into version 7.3
HEADER_BYTES = 128
_PACKED = 15
_KNOWN_ELEMENTS = range(1, 19)
_V4_WIDTHS = {0: 8, 1: 4, 2: 4, 3: 2, 4: 2, 5: 1}
_FAULTS = (
    OSError,
    ValueError,
    TypeError,
    KeyError,
    IndexError,
    NotImplementedError,
    EOFError,
    MemoryError,
    OverflowError,
    UnicodeError,
    AttributeError,  # raised by the library for objects of unknown classes
    zlib.error,
    struct.error,
)


def sniff_matlab(head: bytes, path: str) -> int:
    """Return 3 for the header of MAT 5 to 7.3, 2 for a plausible MAT 4 header, 0 otherwise."""
    if head[:7] == b"MATLAB " and head[126:128] in (b"IM", b"MI"):
        return 3
    return 2 if path.lower().endswith(".mat") and _v4_element(head) is not None else 0


def open_matlab(path: str, options: ReadOptions) -> Capture:
    """Return the signals of a MAT file as a capture.

    Raises
    ------
    CaptureError
        If the file is cut short, holds no plain numeric arrays, or no rate is stated.
    """
    length = check_file(path)
    head = read_head(path)
    if head[:7] == b"MATLAB " and head[124:126] in (b"\x00\x02", b"\x02\x00"):
        return open_box(path, options, "mat, version 7.3", matlab=True)
    if sniff_matlab(head, "x.mat") == 0:
        raise refusal(path, "is no MAT file", "Check --format, or leave it out")
    version_4 = head[126:128] not in (b"IM", b"MI")
    with open_binary(path) as file:
        if version_4:
            _walk_v4(file, path, length)
        else:
            _walk_v5(file, path, length, "<" if head[126:128] == b"IM" else ">")
    variables = _load(path)
    survey = _Survey()
    for name, value in variables.items():
        if not name.startswith("__"):
            survey.take(name, value)
    box = ArrayBox(
        path=path,
        format_text=f"mat, version {4 if version_4 else '5 to 7'}",
        entries=tuple(survey.entries),
        scalars=survey.scalars,
        lay_out=lambda entry: _lay_out(path, entry, survey.arrays[entry.name]),
    )
    return capture_from_box(box, options)


def _load(path: str) -> dict[str, Any]:
    """Return all variables; the library's complaints become one line."""
    import warnings

    from scipy.io import loadmat
    from scipy.io.matlab import MatReadError

    try:
        with warnings.catch_warnings():
            # Duplicate names and unreadable functions are of no matter to a signal.
            warnings.simplefilter("ignore")
            variables: dict[str, Any] = loadmat(path, simplify_cells=True)
    except (MatReadError, *_FAULTS) as fault:
        what = f"cannot be read as a MAT file ({printable(str(fault), 100)})"
        raise refusal(path, what, "Re-copy the file, or save it again with -v7") from fault
    return variables


def _walk_v5(file: BinaryIO, path: str, length: int, order: str) -> None:
    """Compare the length of every element with the file's, and unpack to count its size."""
    position, unpacked, number = HEADER_BYTES, 0, 0
    while position < length:
        number += 1
        file.seek(position)
        tag = file.read(8)
        if len(tag) < 8:
            _refuse_cut(path, number, 8, len(tag))
        kind, size = struct.unpack(order + "II", tag)
        if kind not in _KNOWN_ELEMENTS:
            what = f"element {number} is of unknown kind {kind}"
            raise refusal(path, f"{what} (damaged)", "Re-copy the file")
        if position + 8 + size > length:
            _refuse_cut(path, number, size, length - position - 8)
        unpacked += _unpacked_bytes(file, size, path, number) if kind == _PACKED else size
        _refuse_large(path, unpacked)
        position += 8 + size
    if number == 0:
        raise refusal(path, "holds no variable", "Re-copy the file or save it again")


def _unpacked_bytes(file: BinaryIO, size: int, path: str, number: int) -> int:
    unpacker, total, left = zlib.decompressobj(), 0, size
    try:
        while left > 0 and not unpacker.eof:
            data = file.read(min(left, 2**16))
            left -= len(data)
            while data:
                total += len(unpacker.decompress(data, 2**20))
                data = unpacker.unconsumed_tail
                _refuse_large(path, total)
    except zlib.error as fault:
        what = f"variable {number} is damaged ({printable(str(fault))})"
        raise refusal(path, what, "Re-copy the file") from fault
    return total


def _refuse_cut(path: str, number: int, declared: int, held: int) -> None:
    what = f"variable {number} declares {declared} bytes, file holds {max(held, 0)}: cut short"
    raise refusal(path, what, "Re-copy the file")


def _refuse_large(path: str, total: int) -> None:
    if total > UNPACKED_BYTES_MAX:
        what = f"unpacks to more than {size_text(UNPACKED_BYTES_MAX)}, loaded whole"
        raise refusal(path, what, "Save it with -v7.3, which is read in blocks")


def _v4_element(head: bytes) -> tuple[str, int, int] | None:
    """Return (byte order, header bytes, value bytes) of a MAT 4 variable, None if it is none."""
    if len(head) < 20:
        return None
    for order in "<>":
        kind, rows, columns, imaginary, name_bytes = struct.unpack(order + "iiiii", head[:20])
        thousands, rest = divmod(kind, 1000)
        numbers, matrix = divmod(rest % 100, 10)
        plain = thousands in (0, 1) and rest < 100 and numbers in _V4_WIDTHS and matrix <= 2
        sized = rows >= 0 and columns >= 0 and imaginary in (0, 1) and 1 <= name_bytes <= 1000
        if plain and sized:
            values = rows * columns * (1 + imaginary) * _V4_WIDTHS[numbers]
            return order, 20 + name_bytes, values
    return None


def _walk_v4(file: BinaryIO, path: str, length: int) -> None:
    position, number = 0, 0
    while position < length:
        number += 1
        file.seek(position)
        found = _v4_element(file.read(20))
        if found is None:
            what = f"header of variable {number} is cut short or damaged"
            raise refusal(path, what, "Re-copy the file")
        _, header_bytes, value_bytes = found
        if position + header_bytes + value_bytes > length:
            _refuse_cut(path, number, value_bytes, length - position - header_bytes)
        _refuse_large(path, position + value_bytes)
        position += header_bytes + value_bytes


@dataclass(slots=True, kw_only=True)
class _Survey:
    """Sorts loaded variables into arrays, scalars and things that are neither."""

    entries: list[ArrayEntry] = field(default_factory=list)
    arrays: dict[str, NDArray[Any]] = field(default_factory=dict)
    scalars: dict[str, float] = field(default_factory=dict)

    def take(self, name: str, value: Any, depth: int = 0) -> None:
        """Take one variable; the fields of a structure become "structure.field"."""
        if isinstance(value, dict) and depth < 4:
            for key, inner in value.items():
                self.take(f"{name}.{key}", inner, depth + 1)
            return
        array = np.asarray(value) if np.isscalar(value) or isinstance(value, np.ndarray) else None
        if array is None or array.dtype.kind not in "biuf":
            self.entries.append(ArrayEntry(name=name, obstacle=_obstacle(value)))
            return
        if array.size == 1:
            self.scalars[name] = float(array.reshape(-1)[0])
        self.arrays[name] = array
        self.entries.append(ArrayEntry(name=name, shape=array.shape))


def _obstacle(value: Any) -> str:
    if isinstance(value, str):
        return "is text"
    if isinstance(value, np.ndarray) and value.dtype.kind == "c":
        return "holds complex values, no real numbers"
    kind = (
        "table or other" if type(value).__name__ in ("MatlabOpaque", "ndarray") else "cell or other"
    )
    return f"is a {kind} object, not a numeric array"


def _lay_out(path: str, entry: ArrayEntry, array: NDArray[Any]) -> ArraySignals:
    """Return the channels of a loaded array; time is the longer axis."""
    values = array.reshape(len(array), -1)
    swapped = values.shape[0] < values.shape[1]
    values = values.T if swapped else values
    frames, channels = values.shape
    if channels > CHANNELS_MAX:
        raise refusal(path, f"{entry.text} would be {channels} channels", "Save the signals alone")
    note = f"{entry.text}: the longer axis is taken as time"
    return ArraySignals(
        frame_count=frames,
        channels=tuple(CaptureChannel(name=str(c + 1)) for c in range(channels)),
        source=MemorySource(values=values),
        notes=(note,) if swapped and channels > 1 else (),
    )
