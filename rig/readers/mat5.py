"""The elements of a MAT file of version 5 to 7: names, shapes, and where the numbers stand.

Written here because the usual library brings the process down on damaged files, and loads
every variable whole. Numeric arrays and structures of them are read; anything else is named.
"""

from __future__ import annotations

import struct
from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import BinaryIO

import numpy as np

from rig.readers.parts import WHOLE_FILE, DeflatedPart, Part, open_part, part_faults
from rig.readers.refusals import printable, refusal
from rig.readers.stored import StoredArray, one_number

HEADER_BYTES = 128
ELEMENTS_MAX = 100_000
DEPTH_MAX = 4  # structures within structures
FIELDS_MAX = 4096
_MATRIX, _PACKED = 14, 15
_NUMBER_TYPES = {
    1: "i1",
    2: "u1",
    3: "i2",
    4: "u2",
    5: "i4",
    6: "u4",
    7: "f4",
    9: "f8",
    12: "i8",
    13: "u8",
}
_NUMERIC_CLASSES = range(6, 16)
_STRUCTURE = 2
_OPAQUE = 17
_OBSTACLES = {
    1: "is a cell array",
    3: "is an object, not a numeric array",
    4: "is text",
    5: "is a sparse array",
    16: "is a function, not a numeric array",
}


class DamagedError(Exception):
    """An element contradicts itself; turned into a refusal where the variable is known."""


@dataclass(slots=True, kw_only=True)
class MatContents:
    """What a MAT file holds: arrays by name, obstacles by name, scalars by name."""

    arrays: dict[str, StoredArray] = field(default_factory=dict)
    obstacles: dict[str, str] = field(default_factory=dict)
    scalars: dict[str, float] = field(default_factory=dict)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Element:
    """One data element: its type, where its body starts and ends, and where the next begins."""

    kind: int
    start: int
    size: int
    behind: int


@dataclass(slots=True, kw_only=True)
class _Walker:
    """Reads elements from one part of the file."""

    file: BinaryIO
    part: Part
    order: str
    contents: MatContents

    def element(self, place: int) -> _Element:
        """Return the element at a place; small ones keep their body inside the tag."""
        tag = self.take(place, 8)
        kind, size = struct.unpack(self.order + "II", tag)
        if kind >> 16:
            return _Element(kind=kind & 0xFFFF, start=place + 4, size=kind >> 16, behind=place + 8)
        return _Element(
            kind=kind, start=place + 8, size=size, behind=place + 8 + (size + 7) // 8 * 8
        )

    def take(self, place: int, size: int) -> bytes:
        """Return bytes from a place, all of them."""
        self.file.seek(place)
        body = self.file.read(size)
        if len(body) < size:
            raise DamagedError(f"{size} bytes expected, {len(body)} held")
        return body

    def body(self, element: _Element, limit: int = 65536) -> bytes:
        """Return the body of a short element."""
        if element.size > limit:
            raise DamagedError(f"a header of {element.size} bytes")
        return self.take(element.start, element.size)

    def matrix(self, element: _Element, prefix: str, depth: int = 0) -> None:
        """Take one variable, or one field of a structure."""
        flags = self.element(element.start)
        word = struct.unpack(self.order + "I", self.body(flags)[:4])[0]
        kind, is_complex = word & 0xFF, bool(word & 0x0800)
        if kind == _OPAQUE:
            self._opaque(flags.behind, prefix)
            return
        sizes = self.element(flags.behind)
        shape = self._integers(sizes)
        label = self.element(sizes.behind)
        own = self.body(label).decode("latin-1")
        name = ".".join(text for text in (prefix, own) if text)
        if kind in _NUMERIC_CLASSES:
            self._numbers(label.behind, name, shape, is_complex=is_complex)
        elif kind == _STRUCTURE and int(np.prod(shape, dtype=np.int64)) == 1 and depth < DEPTH_MAX:
            self._structure(label.behind, name, depth)
        else:
            self.contents.obstacles[name] = _OBSTACLES.get(kind, "is an array of structures")

    def _integers(self, element: _Element) -> tuple[int, ...]:
        body = self.body(element, 256)
        count = len(body) // 4
        sizes = struct.unpack(f"{self.order}{count}i", body[: 4 * count])
        if not sizes or any(size < 0 for size in sizes):
            raise DamagedError(f"a shape of {sizes}")
        return tuple(sizes)

    def _numbers(self, place: int, name: str, shape: tuple[int, ...], *, is_complex: bool) -> None:
        if is_complex:
            self.contents.obstacles[name] = "holds complex values, no real numbers"
            return
        values = self.element(place)
        code = _NUMBER_TYPES.get(values.kind)
        if code is None:
            raise DamagedError(f"numbers of unknown type {values.kind}")
        array = StoredArray(
            shape=shape,
            dtype=np.dtype(self.order + code),
            fortran=True,
            data_offset=values.start,
            part=self.part,
        )
        if array.value_count * array.dtype.itemsize != values.size:
            declared, held = array.value_count, values.size // array.dtype.itemsize
            raise DamagedError(f"{declared} values declared, {held} held")
        if array.value_count == 1:
            body = self.take(values.start, array.dtype.itemsize)
            self.contents.scalars[name] = one_number(body, array)
        self.contents.arrays[name] = array

    def _structure(self, place: int, name: str, depth: int) -> None:
        """Take the fields of a structure as "structure.field"."""
        width_element = self.element(place)
        width = struct.unpack(self.order + "i", self.body(width_element)[:4])[0]
        names_element = self.element(width_element.behind)
        names = self.body(names_element)
        if not 0 < width <= 256 or len(names) // width > FIELDS_MAX:
            raise DamagedError(f"field names of {width} bytes")
        place = names_element.behind
        for first in range(0, len(names), width):
            key = names[first : first + width].split(b"\0")[0].decode("latin-1")
            element = self.element(place)
            if element.kind == _MATRIX and element.size > 0:
                self.matrix(element, f"{name}.{key}", depth + 1)
            place = element.behind

    def _opaque(self, place: int, prefix: str) -> None:
        """Name an object: its variable name, the type system, and its class follow each other."""
        texts = []
        for _ in range(3):
            element = self.element(place)
            texts.append(printable(self.body(element).decode("latin-1"), 40))
            place = element.behind
        kind = f"{texts[2]} " if texts[2] else ""
        name = prefix or texts[0]
        self.contents.obstacles[name] = f"is a {kind}object, not a numeric array"


def walk_mat5(file: BinaryIO, path: str, length: int, order: str) -> MatContents:
    """Return the contents of a MAT file of version 5 to 7; every length is compared on the way.

    Raises
    ------
    CaptureError
        If an element is cut short or contradicts itself.
    """
    contents = MatContents()
    for number, element in enumerate(_top_elements(file, path, length, order), start=1):
        if element.kind not in (_MATRIX, _PACKED):
            continue
        try:
            _take_variable(file, path, element, order, contents)
        except part_faults(DamagedError, struct.error) as fault:
            what = f"variable {number} is damaged ({printable(str(fault))})"
            raise refusal(path, what, "Re-copy the file, or save it again") from fault
    return contents


def _take_variable(
    file: BinaryIO, path: str, element: _Element, order: str, contents: MatContents
) -> None:
    if element.kind == _MATRIX:
        walker = _Walker(file=file, part=WHOLE_FILE, order=order, contents=contents)
        walker.matrix(element, "")
        return
    part = DeflatedPart(offset=element.start, size=element.size)
    with open_part(path, part) as unpacked:
        walker = _Walker(file=unpacked, part=part, order=order, contents=contents)
        inner = walker.element(0)
        if inner.kind != _MATRIX:
            raise DamagedError(f"packed element of kind {inner.kind}")
        walker.matrix(inner, "")


def _top_elements(file: BinaryIO, path: str, length: int, order: str) -> Iterator[_Element]:
    """Yield the outermost elements, each compared with the length of the file."""
    place = HEADER_BYTES
    for number in range(1, ELEMENTS_MAX):
        if place >= length:
            return
        file.seek(place)
        tag = file.read(8)
        kind, size = struct.unpack(order + "II", tag) if len(tag) == 8 else (0, 8)
        if place + 8 + size > length:
            held = max(length - place - 8, 0)
            what = f"variable {number} declares {size} bytes, file holds {held}: cut short"
            raise refusal(path, what, "Re-copy the file")
        if kind not in range(1, 19):
            what = f"element {number} is of unknown kind {kind} (damaged)"
            raise refusal(path, what, "Re-copy the file")
        # Packed elements are not padded to eight bytes, all others come out padded.
        yield _Element(kind=kind, start=place + 8, size=size, behind=place + 8 + size)
        place += 8 + size
