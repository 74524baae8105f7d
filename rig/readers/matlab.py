"""MAT files: version 4 and 5 to 7 read here, version 7.3 through ``rig.readers.hdf5``.

The lengths of all elements are compared with the file's; numbers are read in blocks, from
packed variables too.
"""

from __future__ import annotations

from typing import BinaryIO

import numpy as np

from rig.captures import Capture
from rig.readers.datasets import ArrayBox, ArrayEntry, capture_from_box
from rig.readers.hdf5 import open_box
from rig.readers.mat5 import MatContents, walk_mat5
from rig.readers.options import ReadOptions
from rig.readers.refusals import check_file, open_binary, read_head, refusal
from rig.readers.sniffing import sniff_matlab, v4_header
from rig.readers.stored import StoredArray, lay_out, one_number

_V4_OBSTACLES = {1: "is text", 2: "is a sparse array"}
VARIABLES_MAX = 100_000


def open_matlab(path: str, options: ReadOptions) -> Capture:
    """Return the signals of a MAT file as a capture.

    Raises
    ------
    CaptureError
        If the file is cut short, holds no plain numeric arrays, or no rate is stated.
    """
    length = check_file(path)
    head = read_head(path)
    marks = head[126:128]
    if head[:7] == b"MATLAB " and head[124:126] in (b"\x00\x02", b"\x02\x00"):
        return open_box(path, options, "mat, version 7.3", matlab=True)
    if sniff_matlab(head, "x.mat") == 0:
        raise refusal(path, "is no MAT file, or its header is damaged", "Check --format")
    with open_binary(path) as file:
        if marks in (b"IM", b"MI") and head[:7] == b"MATLAB ":
            contents = walk_mat5(file, path, length, "<" if marks == b"IM" else ">")
            return _capture(path, "mat, version 5 to 7", contents, options)
        return _capture(path, "mat, version 4", _walk_v4(file, path, length), options)


def _capture(path: str, format_text: str, contents: MatContents, options: ReadOptions) -> Capture:
    entries = [ArrayEntry(name=name, obstacle=why) for name, why in contents.obstacles.items()]
    entries += [ArrayEntry(name=name, shape=array.shape) for name, array in contents.arrays.items()]
    box = ArrayBox(
        path=path,
        format_text=format_text,
        entries=tuple(entries),
        scalars=contents.scalars,
        lay_out=lambda entry: lay_out(path, contents.arrays[entry.name]),
    )
    return capture_from_box(box, options)


def _walk_v4(file: BinaryIO, path: str, length: int) -> MatContents:
    """Return the contents of a MAT file of version 4; every length is compared on the way."""
    contents = MatContents()
    place = 0
    for number in range(1, VARIABLES_MAX):
        if place >= length:
            break
        file.seek(place)
        found = v4_header(file.read(20))
        if found is None:
            what = f"header of variable {number} is cut short or damaged"
            raise refusal(path, what, "Re-copy the file")
        order, code, kind, shape, is_complex, name_bytes = found
        name = file.read(name_bytes).split(b"\0")[0].decode("latin-1")
        start, size = place + 20 + name_bytes, shape[0] * shape[1] * int(code[1:])
        place = start + size * (2 if is_complex else 1)
        if place > length:
            what = f"variable {number} declares {place - start} bytes, file holds "
            what += f"{max(length - start, 0)}: cut short"
            raise refusal(path, what, "Re-copy the file")
        why = _V4_OBSTACLES.get(kind, "holds complex values, no real numbers" if is_complex else "")
        if why:
            contents.obstacles[name] = why
            continue
        array = StoredArray(
            shape=shape, dtype=np.dtype(order + code), fortran=True, data_offset=start
        )
        contents.arrays[name] = array
        if array.value_count == 1:
            file.seek(start)
            contents.scalars[name] = one_number(file.read(size), array)
    return contents
