"""Sound files: WAV, RF64, W64, AIFF, CAF, FLAC.

The header is compared with the file's length before anything is read: a sound library opens
half a file as a shorter recording, and a header of size zero as an empty one. Linear samples
are then read directly (``rig.readers.rawblocks``); other codings go through soundfile.

Integer samples are scaled so that full scale is 1.0: the highest code reads one step below.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import BinaryIO

from rig.captures import Capture, CaptureChannel
from rig.readers.bigendian import walk_aiff, walk_caf
from rig.readers.chunks import SoundHeader, walk_riff
from rig.readers.options import ReadOptions
from rig.readers.rawblocks import FrameSource, RawColumn
from rig.readers.refusals import (
    check_file,
    open_binary,
    read_head,
    refusal,
    refuse_empty,
    settle_rate,
    shown,
    size_text,
)
from rig.readers.sniffing import (
    sniff_aiff,
    sniff_caf,
    sniff_flac,
    sniff_rf64,
    sniff_riff,
    sniff_w64,
)
from rig.readers.soundlib import open_library_sound

Walk = Callable[[BinaryIO, str, int], SoundHeader]

WRAP_BYTES = 2**32  # a 32-bit size field starts again at zero here
TAIL_BYTES_ALLOWED = 4096  # padding behind the samples that is not worth a refusal


def open_riff(path: str, options: ReadOptions) -> Capture:
    """Return a WAV, RF64 or W64 file as a capture.

    Raises
    ------
    CaptureError
        If header and file length disagree, or the header is damaged.
    """
    return _open_walked(path, options, walk_riff, sniff_riff, sniff_rf64, sniff_w64)


def open_aiff(path: str, options: ReadOptions) -> Capture:
    """Return an AIFF file as a capture; refuses as for WAV."""
    return _open_walked(path, options, walk_aiff, sniff_aiff)


def open_caf(path: str, options: ReadOptions) -> Capture:
    """Return a CAF file as a capture; refuses as for WAV."""
    return _open_walked(path, options, walk_caf, sniff_caf)


def open_flac(path: str, options: ReadOptions) -> Capture:
    """Return a FLAC file as a capture.

    Raises
    ------
    CaptureError
        If the last frame it declares cannot be read.
    """
    _refuse_stranger(path, sniff_flac)
    return open_library_sound(path, "flac", options)


def _refuse_stranger(path: str, *sniffs: Callable[[bytes, str], int]) -> None:
    head = read_head(path)
    if not any(sniff(head, path) for sniff in sniffs):
        what = f"not the sound file it should be (starts with {shown(head)})"
        raise refusal(path, what, "Check --format, or leave it out")


def _open_walked(
    path: str, options: ReadOptions, walk: Walk, *sniffs: Callable[[bytes, str], int]
) -> Capture:
    length = check_file(path)
    _refuse_stranger(path, *sniffs)
    with open_binary(path) as file:
        header = walk(file, path, length)
    refuse_empty(path, 1, header.channel_count)
    data_bytes, length_notes = settle_length(path, header, options)
    if not header.code:
        return open_library_sound(path, header.container, options, length_notes + header.notes)
    return _linear_capture(path, header, options, data_bytes, length_notes)


def _linear_capture(
    path: str,
    header: SoundHeader,
    options: ReadOptions,
    data_bytes: int,
    length_notes: tuple[str, ...],
) -> Capture:
    """Return the capture of linear samples behind a header that was checked."""
    rate_hz, rate_notes = settle_rate(path, header.rate_hz, options, "header")
    frames, rest = divmod(data_bytes, header.frame_bytes)
    refuse_empty(path, frames, header.channel_count)
    if rest:
        length_notes += (f"{rest} bytes at the end make no whole frame; left out",)
    return Capture(
        path=path,
        format=f"{header.container}, {header.coding}",
        rate_hz=rate_hz,
        frame_count=frames,
        channels=sound_channels(header),
        source=FrameSource(
            path=path,
            data_offset=header.data_offset,
            frame_bytes=header.frame_bytes,
            columns=linear_columns(header),
        ),
        start_text=header.start_text,
        notes=rate_notes + length_notes + header.notes,
    )


def sound_channels(header: SoundHeader) -> tuple[CaptureChannel, ...]:
    """Return the channels "1", "2", ...; float files state no full scale."""
    full_scale = None if header.code[1:2] == "f" else 1.0
    return tuple(
        CaptureChannel(name=str(number), full_scale=full_scale)
        for number in range(1, header.channel_count + 1)
    )


def linear_columns(header: SoundHeader) -> tuple[RawColumn, ...]:
    """Return the columns of linear samples, integers scaled to full scale 1.0."""
    kind, width = header.code[1], int(header.code[2:])
    gain = 1.0 if kind == "f" else 2.0 ** (1 - 8 * width)
    bias = -1.0 if kind == "u" else 0.0  # 8-bit samples of WAV are offset by half the range
    return tuple(
        RawColumn(offset=column * width, code=header.code, gain=gain, bias=bias)
        for column in range(header.channel_count)
    )


def settle_length(
    path: str, header: SoundHeader, options: ReadOptions
) -> tuple[int, tuple[str, ...]]:
    """Return how many sample bytes to read and the note that goes with it.

    Raises
    ------
    CaptureError
        If the header declares more or less than the file holds and no option allows it.
    """
    declared, present = header.declared_bytes, header.present_bytes
    if declared is None:
        return present, ("header leaves the length open; read to the end of the file",)
    if options.trust_file_length and declared != present:
        note = f"header declares {declared} bytes of samples; read to the end of the file instead"
        return present, (f"{note} ({present} bytes)",)
    if declared > present:
        return _settle_short(path, header, declared, options)
    _refuse_understated(path, header, declared)
    if header.tail_bytes:
        return declared, (f"{header.tail_bytes} bytes behind the samples are no chunk; left out",)
    return declared, ()


def _settle_short(
    path: str, header: SoundHeader, declared: int, options: ReadOptions
) -> tuple[int, tuple[str, ...]]:
    present, frame_bytes = header.present_bytes, max(header.frame_bytes, 1)
    frames, held = declared // frame_bytes, present // frame_bytes
    share = 100 * present / declared
    if declared == WRAP_BYTES - 1:
        what = f"data chunk was never closed (declares no length, {size_text(present)} follow)"
        raise refusal(path, what, "Pass --trust-file-length")
    what = f"data chunk declares {frames} frames, file holds {held} ({share:.0f} %)"
    if not options.allow_truncated:
        raise refusal(path, what, "Re-copy the file or pass --allow-truncated")
    return present, (f"{what}; truncation accepted",)


def _refuse_understated(path: str, header: SoundHeader, declared: int) -> None:
    """Refuse a size field that says less than follows: never closed, wrapped, or wrong."""
    surplus = header.present_bytes - declared
    if declared == 0 and surplus > 0:
        what = f"data chunk declares 0 bytes but {size_text(surplus)} follow "
        what += "(recorder stopped without closing?)"
        raise refusal(path, what, "Pass --trust-file-length")
    if surplus >= WRAP_BYTES:
        what = f"declared length is file length modulo 4 GiB ({declared} bytes declared, "
        what += f"{header.present_bytes} present)"
        raise refusal(path, what, "Pass --trust-file-length or re-save as RF64 or W64")
    if header.tail_bytes > max(TAIL_BYTES_ALLOWED, declared // 100):
        what = f"data chunk declares {declared} bytes, but {size_text(header.tail_bytes)} follow "
        what += "that are no chunk"
        raise refusal(path, what, "Pass --trust-file-length or re-copy the file")
