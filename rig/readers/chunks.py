"""The chunks of a sound file: where the samples start and how many the header declares.

RIFF and its two 64-bit forms (RF64, W64) are walked here; AIFF and CAF, which count from the
other end of the word, in ``rig.readers.bigendian``. Nothing here reads samples, and nothing
decides whether header or file length is to be believed: that is ``rig.readers.sound``.
"""

from __future__ import annotations

import struct
from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import BinaryIO

from rig.readers.refusals import printable, refusal

TEXT_BYTES_MAX = 65536  # text chunks longer than this are not copied into notes
CHUNKS_MAX = 10_000  # a file of more chunks is damaged

_W64_TAIL = bytes.fromhex("f3acd3118cd100c04f8edb8a")
_W64_RIFF = b"riff" + bytes.fromhex("2e91cf11a5d628db04c10000")
_TEXT_KEYS = {
    b"INAM": "title",
    b"ICMT": "comment",
    b"ICRD": "date",
    b"IART": "recorded by",
    b"ISFT": "software",
    b"ISBJ": "subject",
}


@dataclass(frozen=True, slots=True, kw_only=True)
class SoundHeader:
    """What a sound file says of itself.

    ``code`` is the raw number code ("<i2" ...) or "" where only the sound library can decode.
    ``declared_bytes`` is None where the format allows "to the end of the file";
    ``present_bytes`` counts from the first sample byte to the end of the file.
    ``tail_bytes`` counts the bytes behind the data chunk that are no chunk.
    """

    container: str
    coding: str
    code: str
    rate_hz: float
    channel_count: int
    frame_bytes: int
    data_offset: int
    declared_bytes: int | None
    present_bytes: int
    tail_bytes: int = 0
    start_text: str | None = None
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class Chunk:
    """One chunk: its four-letter name, where it and its body start, the size it claims."""

    name: bytes
    begin: int
    start: int
    size: int


def walk_riff(file: BinaryIO, path: str, length: int) -> SoundHeader:
    """Return the header of a RIFF, RIFX, RF64, BW64 or W64 file."""
    magic = file.read(40)
    found = _Found()
    if magic[:16] == _W64_RIFF:
        found.note_total(magic[16:24], "<Q", 0, length)
        return _gather(file, path, length, "w64", found)
    order = ">" if magic[:4] == b"RIFX" else "<"
    if magic[:4] in (b"RF64", b"BW64"):
        found.note_total(magic[20:28], "<Q", 8, length)
        return _gather(file, path, length, "rf64", found)
    found.note_total(magic[4:8], order + "I", 8, length)
    return _gather(file, path, length, "wav", found, order)


def _riff_chunks(file: BinaryIO, length: int, order: str) -> Iterator[Chunk]:
    position, wide = 12, {}
    for _ in range(CHUNKS_MAX):
        head = read_at(file, position, 8, length)
        if len(head) < 8:
            return
        name, size = head[:4], struct.unpack(order + "I", head[4:])[0]
        if name == b"ds64":
            wide = {b"data": _ds64_data_bytes(file.read(28))}
        if size == 0xFFFFFFFF and name in wide:
            size = wide[name]
        yield Chunk(name=name, begin=position, start=position + 8, size=size)
        position += 8 + size + (size & 1)


def _ds64_data_bytes(body: bytes) -> int:
    return int(struct.unpack("<Q", body[8:16])[0]) if len(body) >= 16 else 0xFFFFFFFF


def _w64_chunks(file: BinaryIO, length: int) -> Iterator[Chunk]:
    position = 40
    for _ in range(CHUNKS_MAX):
        head = read_at(file, position, 24, length)
        if len(head) < 24:
            return
        size = struct.unpack("<Q", head[16:])[0]
        name = head[:4] if head[4:16] == _W64_TAIL else b"\0\0\0\0"
        yield Chunk(name=name, begin=position, start=position + 24, size=max(size - 24, 0))
        position += max((size + 7) // 8 * 8, 24)


@dataclass(slots=True)
class _Found:
    """What the walk has met so far."""

    fmt: bytes | None = None
    data: Chunk | None = None
    tail_bytes: int = 0
    start_text: str | None = None
    notes: list[str] = field(default_factory=list)

    def note_total(self, body: bytes, code: str, extra: int, length: int) -> None:
        """Keep a note when the file is shorter than its first header says."""
        if len(body) < struct.calcsize(code):
            return
        total = struct.unpack(code, body)[0] + extra
        if length < total and total != 0xFFFFFFFF + extra:
            self.notes.append(f"file header declares {total} bytes, file holds {length}")


def _gather(
    file: BinaryIO, path: str, length: int, container: str, found: _Found, order: str = "<"
) -> SoundHeader:
    walk = _w64_chunks(file, length) if container == "w64" else _riff_chunks(file, length, order)
    for chunk in walk:
        if not is_name(chunk.name):
            found.tail_bytes = length - chunk.begin
            break
        _take(file, chunk, found, order, length)
    _refuse_missing(path, container, found)
    assert found.fmt is not None
    assert found.data is not None
    coding, code, channels, rate_hz, frame_bytes = _read_format(path, found.fmt, order)
    return SoundHeader(
        container=container,
        coding=coding,
        code=code,
        rate_hz=rate_hz,
        channel_count=channels,
        frame_bytes=frame_bytes,
        data_offset=found.data.start,
        declared_bytes=found.data.size,
        present_bytes=max(length - found.data.start, 0),
        tail_bytes=found.tail_bytes,
        start_text=found.start_text,
        notes=tuple(found.notes),
    )


def read_at(file: BinaryIO, place: int, size: int, length: int) -> bytes:
    """Return bytes from a place; none when it lies behind the end, however far."""
    if place >= length or size <= 0:
        return b""
    file.seek(place)
    return file.read(size)


def is_name(name: bytes) -> bool:
    """Tell whether four bytes can be the name of a chunk: printable characters only."""
    return all(32 <= byte < 127 for byte in name)


def _take(file: BinaryIO, chunk: Chunk, found: _Found, order: str, length: int) -> None:
    """Keep what a chunk says; a second format or data chunk is ignored, but noted."""
    name = printable(chunk.name.decode("ascii"))
    if chunk.name == b"data":
        if found.data is None:
            found.data = chunk
            return
        found.notes.append("a second data chunk is left unread")
    if found.data is not None and chunk.start + chunk.size > length:
        present = max(length - chunk.start, 0)
        found.notes.append(
            f"chunk '{name}' behind the samples is cut short ({present} of {chunk.size} bytes)"
        )
    body = read_at(file, chunk.start, min(chunk.size, TEXT_BYTES_MAX), length)
    if chunk.name == b"fmt " and found.fmt is None:
        found.fmt = body
    elif chunk.name == b"LIST" and body[:4] == b"INFO":
        found.notes.extend(_info_texts(body[4:], order))
    elif chunk.name == b"bext":
        found.start_text = _broadcast_start(body)


def _info_texts(body: bytes, order: str) -> list[str]:
    """Return the known text fields of a LIST chunk as notes."""
    texts, position = [], 0
    while position + 8 <= len(body):
        key = body[position : position + 4]
        size = struct.unpack(order + "I", body[position + 4 : position + 8])[0]
        value = body[position + 8 : position + 8 + size].split(b"\0")[0]
        if key in _TEXT_KEYS and value.strip():
            texts.append(found_text(_TEXT_KEYS[key], value))
        position += 8 + size + (size & 1)
    return texts


def found_text(label: str, value: bytes) -> str:
    """Return the note for a text field of the file; such fields are never used for scaling."""
    return f"found in file: {label} '{printable(value.decode('utf-8', 'replace'), 200)}'"


def _broadcast_start(body: bytes) -> str | None:
    """Return date and time of the broadcast chunk (bytes 320-337), None when left blank."""
    date = printable(body[320:330].decode("ascii", "replace"))
    time = printable(body[330:338].decode("ascii", "replace"))
    return f"{date} {time}".strip() or None


def _refuse_missing(path: str, container: str, found: _Found) -> None:
    if found.fmt is None or len(found.fmt) < 16:
        got = 0 if found.fmt is None else len(found.fmt)
        what = f"no usable format chunk in the {container.upper()} file ({got} bytes, 16 needed)"
        raise refusal(path, what, "Re-copy the file or export it again")
    if found.data is None:
        what = f"no data chunk in the {container.upper()} file (cut short, or a damaged chunk)"
        raise refusal(path, what, "Re-copy the file or export it again")


def _read_format(path: str, fmt: bytes, order: str) -> tuple[str, str, int, float, int]:
    """Return (coding, raw code, channels, rate, bytes a frame) of a RIFF format chunk."""
    tag, channels, rate, _, frame_bytes, bits = struct.unpack(order + "HHIIHH", fmt[:16])
    if tag == 0xFFFE and len(fmt) >= 26:
        tag = struct.unpack(order + "H", fmt[24:26])[0]
    if channels == 0:
        raise refusal(path, "header gives 0 channels", "Record or export it again")
    width = frame_bytes // channels
    if tag not in (1, 3):
        return f"coding {tag}", "", channels, float(rate), frame_bytes
    if frame_bytes != width * channels or bits > 8 * width or bits == 0:
        what = f"header contradicts itself ({channels} channels of {bits} bits in {frame_bytes} "
        raise refusal(path, what + "bytes a frame)", "Export it again")
    kind = {1: "i", 3: "f"}[tag]
    return *_plain_code(path, kind, width, order), channels, float(rate), frame_bytes


def _plain_code(path: str, kind: str, width: int, order: str) -> tuple[str, str]:
    code = "u1" if (kind, width) == ("i", 1) else f"{kind}{width}"
    if code not in ("u1", "i2", "i3", "i4", "f4", "f8"):
        what = f"samples of {8 * width} bits ({'integer' if kind == 'i' else 'float'})"
        raise refusal(path, what + " are not known", "Export 16-, 24- or 32-bit samples")
    return coding_text(code), order + code


def coding_text(code: str) -> str:
    """Return how a raw number code is said: "16-bit integer", "32-bit float"."""
    return f"{8 * int(code[1:])}-bit {'float' if code[0] == 'f' else 'integer'}"
