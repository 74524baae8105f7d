"""The chunks of AIFF and CAF, the sound files that count from the big end of the word."""

from __future__ import annotations

import math
import struct
from collections.abc import Iterator
from dataclasses import replace
from typing import BinaryIO

from rig.readers.chunks import (
    CHUNKS_MAX,
    TEXT_BYTES_MAX,
    Chunk,
    SoundHeader,
    coding_text,
    found_text,
    is_name,
    read_at,
)
from rig.readers.refusals import printable, refusal

# Compression names of AIFF-C that are linear samples all the same: number kind and byte order.
_AIFF_LINEAR = {
    b"NONE": ("i", ">"),
    b"twos": ("i", ">"),
    b"in24": ("i", ">"),
    b"in32": ("i", ">"),
    b"sowt": ("i", "<"),
    b"fl32": ("f", ">"),
    b"FL32": ("f", ">"),
    b"fl64": ("f", ">"),
    b"FL64": ("f", ">"),
}
_AIFF_TEXTS = {b"NAME": "title", b"AUTH": "recorded by", b"ANNO": "comment", b"(c) ": "rights"}
_CAF_TEXTS = ("title", "artist", "comments", "recorded date")
_KNOWN_CODES = frozenset({"i1", "i2", "i3", "i4", "f4", "f8"})


def walk_aiff(file: BinaryIO, path: str, length: int) -> SoundHeader:
    """Return the header of an AIFF or AIFF-C file.

    Raises
    ------
    CaptureError
        If the chunk of sizes or the chunk of samples is missing or damaged.
    """
    magic = file.read(12)
    notes = _total_note(int.from_bytes(magic[4:8], "big") + 8, length)
    common: bytes | None = None
    data: Chunk | None = None
    tail_bytes = 0
    for chunk in _chunks(file, length, ">I"):
        if not is_name(chunk.name):
            tail_bytes = length - chunk.begin
            break
        body = _body(file, chunk, length)
        if chunk.name == b"COMM" and common is None:
            common = body
        elif chunk.name == b"SSND" and data is None and len(body) >= 8:
            skip = 8 + int.from_bytes(body[:4], "big")
            data = Chunk(
                name=chunk.name,
                begin=chunk.begin,
                start=chunk.start + skip,
                size=max(chunk.size - skip, 0),
            )
        elif chunk.name in _AIFF_TEXTS and body.strip(b"\0 "):
            notes.append(found_text(_AIFF_TEXTS[chunk.name], body.split(b"\0")[0]))
        notes += _cut_note(chunk, length, after=data is not None and chunk.name != b"SSND")
    if common is None or len(common) < 18 or data is None:
        what = "no usable chunk of sizes (COMM) or of samples (SSND) in the AIFF file"
        raise refusal(path, what, "Re-copy the file or export it again")
    header = _aiff_header(path, length, common, data, notes)
    return replace(header, tail_bytes=tail_bytes)


def _aiff_header(
    path: str, length: int, common: bytes, data: Chunk, notes: list[str]
) -> SoundHeader:
    channels, frames, bits = struct.unpack(">HIH", common[:8])
    compression = common[18:22] if len(common) >= 22 else b"NONE"
    width = (bits + 7) // 8
    kind, order = _AIFF_LINEAR.get(compression, ("", ">"))
    code = f"{kind}{width}"
    linear = code in _KNOWN_CODES
    name = printable(compression.decode("latin-1"))
    frame_bytes = channels * width
    declared = frames * frame_bytes if linear else data.size
    if linear and declared != data.size:
        notes.append(
            f"chunk of samples declares {data.size} bytes, {frames} frames need {declared}"
        )
    return SoundHeader(
        container="aiff",
        coding=coding_text(code) if linear else f"coding {name}",
        code=order + code if linear else "",
        rate_hz=extended_float(common[8:18]),
        channel_count=channels,
        frame_bytes=frame_bytes,
        data_offset=data.start,
        declared_bytes=declared,
        present_bytes=max(length - data.start, 0),
        notes=tuple(notes),
    )


def extended_float(body: bytes) -> float:
    """Return the value of an 80-bit extended float: sign, 15-bit exponent, 64-bit fraction."""
    head, fraction = struct.unpack(">HQ", body)
    sign = -1.0 if head & 0x8000 else 1.0
    exponent = head & 0x7FFF
    if exponent == 0x7FFF:
        return math.nan
    return (
        math.ldexp(sign * fraction, exponent - 16383 - 63) if exponent < 16383 + 900 else math.inf
    )


def walk_caf(file: BinaryIO, path: str, length: int) -> SoundHeader:
    """Return the header of a CAF file; a data size of -1 reaches to the end of the file.

    Raises
    ------
    CaptureError
        If the description or the data chunk is missing or damaged.
    """
    file.read(8)
    description: bytes | None = None
    data: Chunk | None = None
    notes: list[str] = []
    tail_bytes = 0
    for chunk in _chunks(file, length, ">q"):
        if not is_name(chunk.name):
            tail_bytes = length - chunk.begin
            break
        body = _body(file, chunk, length)
        if chunk.name == b"desc" and description is None:
            description = body
        elif chunk.name == b"data" and data is None:
            data = chunk
        elif chunk.name == b"info":
            notes += _caf_texts(body)
        notes += _cut_note(chunk, length, after=data is not None and chunk.name != b"data")
    if description is None or len(description) < 32 or data is None:
        what = "no usable description or data chunk in the CAF file"
        raise refusal(path, what, "Re-copy the file or export it again")
    return replace(_caf_header(path, length, description, data, notes), tail_bytes=tail_bytes)


def _caf_header(
    path: str, length: int, description: bytes, data: Chunk, notes: list[str]
) -> SoundHeader:
    rate_hz, coding, flags, packet_bytes, _, channels, bits = struct.unpack(
        ">d4sIIIII", description[:32]
    )
    kind, order = ("f" if flags & 1 else "i"), ("<" if flags & 2 else ">")
    code = f"{kind}{packet_bytes // channels if channels else 0}"
    linear = coding == b"lpcm" and code in _KNOWN_CODES and bits <= 8 * int(code[1:])
    linear = linear and packet_bytes == int(code[1:]) * channels
    if coding == b"lpcm" and not linear and channels:
        what = f"header contradicts itself ({channels} channels of {bits} bits in {packet_bytes} "
        raise refusal(path, what + "bytes a frame)", "Export it again")
    name = printable(coding.decode("latin-1"))
    # The data chunk opens with a 4-byte count of edits.
    return SoundHeader(
        container="caf",
        coding=coding_text(code) if linear else f"coding {name}",
        code=order + code if linear else "",
        rate_hz=rate_hz,
        channel_count=channels,
        frame_bytes=packet_bytes,
        data_offset=data.start + 4,
        declared_bytes=None if data.size < 0 else max(data.size - 4, 0),
        present_bytes=max(length - data.start - 4, 0),
        notes=tuple(notes),
    )


def _chunks(file: BinaryIO, length: int, code: str) -> Iterator[Chunk]:
    """Yield the chunks: AIFF counts in 32 bits and pads to even bytes, CAF does neither."""
    aiff = code == ">I"
    position, head_bytes = (12, 8) if aiff else (8, 12)
    for _ in range(CHUNKS_MAX):
        head = read_at(file, position, head_bytes, length)
        if len(head) < head_bytes:
            return
        size = int(struct.unpack(code, head[4:])[0])
        yield Chunk(name=head[:4], begin=position, start=position + head_bytes, size=size)
        if size < 0:
            return
        position += head_bytes + size + (size & 1 if aiff else 0)


def _body(file: BinaryIO, chunk: Chunk, length: int) -> bytes:
    return read_at(file, chunk.start, min(chunk.size, TEXT_BYTES_MAX), length)


def _total_note(total: int, length: int) -> list[str]:
    return [f"file header declares {total} bytes, file holds {length}"] if length < total else []


def _cut_note(chunk: Chunk, length: int, *, after: bool) -> list[str]:
    if not after or chunk.start + chunk.size <= length:
        return []
    name = printable(chunk.name.decode("latin-1"))
    present = max(length - chunk.start, 0)
    text = f"chunk '{name}' behind the samples is cut short ({present} of {chunk.size} bytes)"
    return [text]


def _caf_texts(body: bytes) -> list[str]:
    words = body[4:].split(b"\0")
    pairs = zip(words[0::2], words[1::2], strict=False)
    return [
        found_text(key.decode("latin-1"), value)
        for key, value in pairs
        if key.decode("latin-1") in _CAF_TEXTS and value.strip()
    ]
