"""Where the last block of a FLAC file ends, from the file itself and not from its header.

The header states a number of frames, and decoders stop there. Each block carries its own
number and two check sums, so the last one tells how far the recording really goes.
"""

from __future__ import annotations

import re
from dataclasses import dataclass

from rig.readers.refusals import open_binary

WINDOW_BYTES = 2**17  # where the header leaves the largest block open
WINDOW_BYTES_MAX = 2**22
_SYNC = re.compile(rb"\xff[\xf8\xf9]")
_BLOCK_SIZES = {1: 192, **{k: 576 << (k - 2) for k in range(2, 6)}}
_BLOCK_SIZES |= {k: 256 << (k - 8) for k in range(8, 16)}


@dataclass(frozen=True, slots=True, kw_only=True)
class StreamInfo:
    """What the header says of blocks: frames in each but the last, bytes of the largest."""

    block_frames: int
    block_bytes_max: int


def last_block_end(path: str) -> int | None:
    """Return how many frames a FLAC file holds up to the end of its last block.

    None where the last bytes of the file are no block that both its check sums confirm.
    """
    with open_binary(path) as file:
        info = _stream_info(file.read(42))
        if info is None:
            return None
        length = file.seek(0, 2)
        file.seek(max(length - min(info.block_bytes_max, WINDOW_BYTES_MAX), 42))
        tail = file.read()
    for start in reversed([found.start() for found in _SYNC.finditer(tail)]):
        end = _block_end(tail[start:], info)
        if end is not None:
            return end
    return None


def _stream_info(head: bytes) -> StreamInfo | None:
    if len(head) < 42 or head[:4] != b"fLaC" or head[4] & 0x7F:
        return None
    largest = int.from_bytes(head[15:18], "big")
    return StreamInfo(
        block_frames=int.from_bytes(head[8:10], "big"),
        block_bytes_max=largest if largest else WINDOW_BYTES,
    )


def _block_end(block: bytes, info: StreamInfo) -> int | None:
    """Return the frame behind a block that reaches to the end of the bytes, None for no block."""
    if len(block) < 8:
        return None
    number = _coded_number(block[4:11])
    if number is None:
        return None
    value, place = number[0], 4 + number[1]
    size_code, rate_code = block[2] >> 4, block[2] & 15
    extra = {6: 1, 7: 2}.get(size_code, 0)
    frames = _BLOCK_SIZES.get(size_code, int.from_bytes(block[place : place + extra], "big") + 1)
    place += extra + {12: 1, 13: 2, 14: 2}.get(rate_code, 0)
    known = size_code != 0 and len(block) > place
    if not known or _check8(block[:place]) != block[place] or _check16(block) != 0:
        return None
    first = value if block[1] & 1 else value * info.block_frames
    return first + frames


def _coded_number(data: bytes) -> tuple[int, int] | None:
    """Return a number coded like a character of UTF-8, and how many bytes it takes."""
    if not data or data[0] < 0x80:
        return (data[0], 1) if data else None
    count = 8 - (~data[0] & 0xFF).bit_length()
    tail = data[1:count]
    if not 2 <= count <= 7 or len(tail) != count - 1 or any(b >> 6 != 2 for b in tail):
        return None
    value = data[0] & (0x7F >> count)
    for byte in tail:
        value = value << 6 | byte & 0x3F
    return value, count


def _table(polynomial: int, width: int) -> list[int]:
    """Return the check sums of all bytes."""
    top, mask = 1 << (width - 1), (1 << width) - 1
    table = []
    for byte in range(256):
        value = byte << (width - 8)
        for _ in range(8):
            value = (value << 1 ^ (polynomial if value & top else 0)) & mask
        table.append(value)
    return table


_TABLE8, _TABLE16 = _table(0x07, 8), _table(0x8005, 16)


def _check8(data: bytes) -> int:
    value = 0
    for byte in data:
        value = _TABLE8[value ^ byte]
    return value


def _check16(data: bytes) -> int:
    value = 0
    for byte in data:
        value = (value << 8 & 0xFFFF) ^ _TABLE16[value >> 8 ^ byte]
    return value
