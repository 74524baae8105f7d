"""Arrays saved by numpy: NPY (one array) and NPZ (several under names).

The longer axis is time. Python objects are refused: loading them runs code from the file.
"""

from __future__ import annotations

import ast
import operator
import re
import zipfile
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, BinaryIO

import numpy as np

from rig.captures import Capture
from rig.errors import CaptureError
from rig.readers.datasets import ArrayBox, ArrayEntry, capture_from_box
from rig.readers.options import ReadOptions
from rig.readers.parts import WHOLE_FILE, Part, ZipPart, open_part, part_faults
from rig.readers.refusals import (
    check_file,
    open_binary,
    printable,
    refusal,
    settle_rate,
)
from rig.readers.stored import REAL_KINDS, StoredArray, is_planes, lay_out, one_number

NPY_MAGIC = b"\x93NUMPY"
ROW_BYTES_MAX = 2**20  # a structured row longer than this is no frame of samples
HEADER_BYTES_MAX = 65536
HEADER_FAULTS = (ValueError, KeyError, TypeError, SyntaxError, RecursionError, MemoryError)
_OLD_TEXT = re.compile(r"[<>=|]?a\d*")
_LONG_INTEGER = re.compile(r"(?<=[\s(,])(\d+)L(?=[\s,)])")


def open_npy(path: str, options: ReadOptions) -> Capture:
    """Return an NPY file as a capture; its rate comes from the options.

    Raises
    ------
    CaptureError
        If the array holds Python objects, is cut short, or has no axis for time.
    """
    length = check_file(path)
    with open_binary(path) as file:
        header = read_npy_header(file, path)
    rate_hz, notes = settle_rate(path, None, options, "an NPY file has no place for one")
    present = length - header.data_offset
    short = _settle_length(path, header, present, options)
    surplus = present - header.value_count * header.dtype.itemsize
    if surplus > 0:
        notes += (f"{surplus} bytes behind the array are left unread",)
    layout = lay_out(path, header, short)
    return Capture(
        path=path,
        format=f"npy, {header.dtype.name}",
        rate_hz=rate_hz,
        frame_count=layout.frame_count,
        channels=layout.channels,
        source=layout.source,
        notes=notes + layout.notes,
    )


def read_npy_header(file: BinaryIO, path: str, part: Part = WHOLE_FILE) -> StoredArray:
    """Return the header that stands at the file's position.

    Raises
    ------
    CaptureError
        If it is damaged, or the array holds Python objects.
    """
    try:
        head = _header_of(file)
        shape, fortran = tuple(head["shape"]), bool(head["fortran_order"])
        dtype = _dtype_of(head["descr"])
        sizes = [operator.index(size) for size in shape]
    except HEADER_FAULTS as fault:
        what = "header of the NPY array is damaged"
        raise refusal(path, what, "Save the array again with numpy.save") from fault
    if dtype.hasobject:
        what = "contains Python objects; refused (unsafe)"
        raise refusal(path, what, "Save a plain array of numbers")
    if dtype.itemsize > ROW_BYTES_MAX:
        what = f"declares rows of {dtype.itemsize} bytes"
        raise refusal(path, what, "Save a plain array of numbers")
    if any(size < 0 for size in sizes):
        raise refusal(path, f"declares the shape {shape}", "Save the array again with numpy.save")
    return StoredArray(
        shape=tuple(sizes),
        dtype=dtype,
        fortran=fortran,
        data_offset=file.tell(),
        part=part,
    )


def _dtype_of(descr: Any) -> np.dtype[Any]:
    """Return the type a header describes; an old name of texts, which numpy warns of, is none."""
    if _has_old_name(descr):
        raise ValueError("texts under their old name")
    dtype: np.dtype[Any] = np.lib.format.descr_to_dtype(descr)
    return dtype


def _has_old_name(descr: Any) -> bool:
    if isinstance(descr, str):
        return _OLD_TEXT.fullmatch(descr) is not None
    if isinstance(descr, tuple):
        return any(_has_old_name(part) for part in descr[:1])
    if isinstance(descr, list):
        return any(_has_old_name(field[1]) for field in descr if len(field) > 1)
    return False


def _header_of(file: BinaryIO) -> dict[str, Any]:
    """Return the dictionary in front of an array.

    Not numpy's own reader: that one warns on the standard error stream about old headers.
    """
    magic = file.read(8)
    if magic[:6] != NPY_MAGIC or magic[6:] not in (b"\x01\x00", b"\x02\x00", b"\x03\x00"):
        raise ValueError("no signature of an NPY array")
    size_bytes = 2 if magic[6] == 1 else 4
    size = int.from_bytes(file.read(size_bytes), "little")
    if size > HEADER_BYTES_MAX:
        raise ValueError(f"header of {size} bytes")
    text = file.read(size).decode("utf-8" if magic[6] == 3 else "latin-1")
    # Headers written by Python 2 carry long integers: (100L, 2L).
    found = ast.literal_eval(_LONG_INTEGER.sub(r"\1", text.strip()))
    if not isinstance(found, dict):
        raise ValueError("header is no dictionary")
    return found


def _settle_length(
    path: str, header: StoredArray, present: int, options: ReadOptions
) -> int | None:
    """Return the number of values held when a cut file is accepted, None for a whole one."""
    width = max(header.dtype.itemsize, 1)
    if present >= header.value_count * width:
        return None
    held = max(present, 0) // width
    what = f"declares {header.value_count} values, holds {held}"
    remedy = "Re-copy the file or pass --allow-truncated"
    if not options.allow_truncated or is_planes(header):
        raise refusal(path, what, remedy)
    return held


@dataclass(slots=True, kw_only=True)
class _Archive:
    """The parts of an NPZ file: headers of its arrays, and the values of its scalars."""

    path: str
    headers: dict[str, StoredArray] = field(default_factory=dict)
    scalars: dict[str, float] = field(default_factory=dict)
    entries: list[ArrayEntry] = field(default_factory=list)

    def take(self, name: str, packed_bytes: int) -> None:
        """Read the header of one part, and its value if it is a single number."""
        key = name.removesuffix(".npy")
        try:
            part = ZipPart(name=name)
            with open_part(self.path, part) as file:
                header = read_npy_header(file, self.path, part)
                if header.value_count == 1 and header.dtype.kind in REAL_KINDS:
                    self.scalars[key] = one_number(file.read(header.dtype.itemsize), header)
        except CaptureError as fault:
            if "Python objects" not in str(fault):
                raise
            obstacle = "contains Python objects; refused (unsafe)"
            self.entries.append(ArrayEntry(name=key, obstacle=obstacle))
            return
        held = (packed_bytes - header.data_offset) // max(header.dtype.itemsize, 1)
        if held < header.value_count:
            what = f"array '{printable(key)}' declares {header.value_count} values, holds {held}"
            raise refusal(self.path, what, "Re-copy the file")
        self.headers[key] = header
        plain = header.dtype.names is not None or header.dtype.kind in REAL_KINDS
        obstacle = "" if plain else f"holds {header.dtype.name} values, no real numbers"
        self.entries.append(ArrayEntry(name=key, shape=header.shape, obstacle=obstacle))


def open_npz(path: str, options: ReadOptions) -> Capture:
    """Return the signals of an NPZ file as a capture.

    Raises
    ------
    CaptureError
        If the archive is damaged, the choice of arrays is not forced, or no rate is stated.
    """
    check_file(path)
    box = _Archive(path=path)
    for name, size in _parts(path).items():
        if name.endswith(".npy"):
            box.take(name, size)
    signals = ArrayBox(
        path=path,
        format_text="npz",
        entries=tuple(box.entries),
        scalars=box.scalars,
        lay_out=lambda entry: lay_out(path, box.headers[entry.name]),
    )
    return capture_from_box(signals, options)


def _parts(path: str) -> Mapping[str, int]:
    """Return the names and unpacked sizes of the parts of a zip archive."""
    try:
        with zipfile.ZipFile(path) as archive:
            return {info.filename: info.file_size for info in archive.infolist()}
    except part_faults(OSError, ValueError) as fault:
        what = f"archive is cut short or damaged ({printable(str(fault))})"
        raise refusal(path, what, "Re-copy the file or save it again") from fault
