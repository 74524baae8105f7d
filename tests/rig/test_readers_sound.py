"""Sound files: what their chunks say besides the samples, and what is done when they lie."""

from __future__ import annotations

import struct
from pathlib import Path

import numpy as np
import pytest
import soundfile

from rig.captures import Capture
from rig.errors import CaptureError
from rig.readers import ReadOptions, open_capture
from rig.readers.bigendian import extended_float
from rig.readers.chunks import SoundHeader
from rig.readers.sound import settle_length


def whole(capture: Capture) -> np.ndarray:
    """All samples of a capture, shape (channels, frames)."""
    columns = range(len(capture.channels))
    return np.concatenate([b.copy() for b in capture.blocks(columns, block_frames=99)], axis=1)


def chunk(name: bytes, body: bytes) -> bytes:
    """One RIFF chunk."""
    return name + struct.pack("<I", len(body)) + body + b"\0" * (len(body) & 1)


def riff(*chunks: bytes) -> bytes:
    """A WAV file of 16-bit pairs with some chunks around the samples."""
    body = b"WAVE" + b"".join(chunks)
    return b"RIFF" + struct.pack("<I", len(body)) + body


FORM = chunk(b"fmt ", struct.pack("<HHIIHH", 1, 2, 1000, 4000, 4, 16))
PAIRS = np.arange(-100, 100, dtype="<i2")
DATA = chunk(b"data", PAIRS.tobytes())


def opened(folder: Path, data: bytes, **options: object) -> Capture:
    """The capture in some bytes."""
    path = folder / "a.wav"
    path.write_bytes(data)
    return open_capture(path, options=ReadOptions(**options))  # type: ignore[arg-type]


def test_text_fields_are_copied_as_found_and_control_characters_taken_out(tmp_path: Path) -> None:
    """They are worth showing, and never to be trusted for scaling."""
    info = b"INFO" + chunk(b"INAM", b"pump\x1b[31m 3\0") + chunk(b"ICMT", "5 µm/V".encode())
    notes = opened(tmp_path, riff(FORM, chunk(b"LIST", info), DATA)).notes
    assert "found in file: title 'pump [31m 3'" in notes
    assert "found in file: comment '5 µm/V'" in notes


def test_the_start_of_a_broadcast_chunk_is_the_start_of_the_capture(tmp_path: Path) -> None:
    """The order of captures in a sweep may have to be told from it."""
    body = bytes(320) + b"2026-02-01" + b"13:45:10" + bytes(264)
    assert opened(tmp_path, riff(chunk(b"bext", body), FORM, DATA)).start_text == (
        "2026-02-01 13:45:10"
    )


def test_zero_filled_and_unknown_chunks_before_the_samples_are_passed_over(tmp_path: Path) -> None:
    """The sound library gives up on some of them."""
    capture = opened(tmp_path, riff(FORM, chunk(b"LIST", bytes(26)), chunk(b"junk", b"x"), DATA))
    np.testing.assert_array_equal(whole(capture) * 32768, PAIRS.reshape(-1, 2).T)


def test_a_cut_behind_the_samples_is_noted_and_the_samples_are_whole(tmp_path: Path) -> None:
    """Nothing of the recording is missing, but the copy is not the file."""
    data = riff(FORM, DATA, chunk(b"LIST", b"INFO" + chunk(b"INAM", b"a" * 40)))
    for cut in (1, 20, 50, 57):
        capture = opened(tmp_path, data[:-cut])
        assert capture.frame_count == 100
        assert any("declares" in note and "file holds" in note for note in capture.notes)


def test_an_odd_byte_at_the_end_of_the_samples_is_left_out_with_a_note(tmp_path: Path) -> None:
    """Half a frame would swap the channels of everything behind it."""
    data = riff(FORM, chunk(b"data", PAIRS.tobytes() + b"abc"))
    capture = opened(tmp_path, data)
    assert capture.frame_count == 100
    assert "3 bytes at the end make no whole frame; left out" in capture.notes


def test_big_endian_riff_and_padding_behind_the_samples_are_read(tmp_path: Path) -> None:
    """RIFX is rare, and a swapped sample is noise; some recorders pad to a block of the disk."""
    form = b"fmt " + struct.pack(">IHHIIHH", 16, 1, 2, 1000, 4000, 4, 16)
    data = b"data" + struct.pack(">I", 400) + PAIRS.astype(">i2").tobytes()
    capture = opened(tmp_path, b"RIFX" + struct.pack(">I", 432) + b"WAVE" + form + data + bytes(99))
    np.testing.assert_array_equal(whole(capture) * 32768, PAIRS.reshape(-1, 2).T)
    assert any("99 bytes behind the samples are no chunk" in note for note in capture.notes)


@pytest.mark.parametrize(
    ("declared", "present", "tail", "words"),
    [
        (400, 200, 0, "declares 100 frames, file holds 50 .50 %."),
        (0, 399_000, 0, "declares 0 bytes but 399 kB follow .recorder stopped without closing"),
        (2**32 - 1, 4000, 0, "never closed"),
        (1000, 2**32 + 1000, 0, "file length modulo 4 GiB"),
        (1000, 3 * 2**32 + 1400, 0, "file length modulo 4 GiB"),
        (1000, 90_000, 89_000, "declares 1000 bytes, but 89 kB follow that are no chunk"),
    ],
)
def test_header_and_file_length_are_compared_and_both_are_said(
    declared: int, present: int, tail: int, words: str
) -> None:
    """The sound library takes each of these for a good file."""
    header = SoundHeader(
        container="wav",
        coding="16-bit integer",
        code="<i2",
        rate_hz=1000.0,
        channel_count=2,
        frame_bytes=4,
        data_offset=44,
        declared_bytes=declared,
        present_bytes=present,
        tail_bytes=tail,
    )
    with pytest.raises(CaptureError, match=words):
        settle_length("a.wav", header, ReadOptions())
    length, notes = settle_length("a.wav", header, ReadOptions(trust_file_length=True))
    assert length == present
    assert "read to the end of the file instead" in notes[0]


def test_a_stated_rate_overrides_the_header_with_a_note(tmp_path: Path) -> None:
    """Headers hold whole numbers only, and limits make people store a thousandth."""
    capture = opened(tmp_path, riff(FORM, DATA), rate_hz=1000.25)
    assert capture.rate_hz == 1000.25
    assert "header says 1000 Hz; overridden by 1000.25 Hz" in capture.notes


@pytest.mark.parametrize("frames", [1, 98, 99, 100, 4096])
@pytest.mark.parametrize("kind", ["flac", "caf"])
def test_packed_sound_is_read_in_blocks_of_any_length(
    tmp_path: Path, frames: int, kind: str
) -> None:
    """Records shorter than, equal to and one longer than a block are where readers slip."""
    subtype = {"flac": "PCM_24", "caf": "ALAC_24"}[kind]
    values = np.random.default_rng(1).uniform(-0.5, 0.5, (frames, 2))
    soundfile.write(tmp_path / f"a.{kind}", values, 48000, subtype=subtype)
    capture = open_capture(tmp_path / f"a.{kind}")
    expected = soundfile.read(tmp_path / f"a.{kind}", always_2d=True)[0].T
    np.testing.assert_array_equal(whole(capture), expected.astype(np.float32))
    assert capture.channels[0].full_scale == (1.0 if kind == "flac" else None)


def test_flac_without_a_stated_length_is_refused(tmp_path: Path) -> None:
    """A recorder that streams leaves the number of samples at zero."""
    soundfile.write(tmp_path / "a.flac", np.zeros((5000, 1)), 48000)
    data = bytearray((tmp_path / "a.flac").read_bytes())
    data[21] &= 0xF0
    data[22:26] = bytes(4)
    (tmp_path / "a.flac").write_bytes(data)
    with pytest.raises(CaptureError, match="states no length"):
        open_capture(tmp_path / "a.flac")


def test_a_damaged_flac_is_refused_where_it_is_read(tmp_path: Path) -> None:
    """The library returns silence or stops; neither may pass for samples."""
    noise = np.random.default_rng(2).uniform(-0.5, 0.5, (60_000, 2))
    soundfile.write(tmp_path / "a.flac", noise, 48000)
    data = bytearray((tmp_path / "a.flac").read_bytes())
    data[60_000] ^= 0xFF
    (tmp_path / "a.flac").write_bytes(data)
    with pytest.raises(CaptureError, match="damaged behind frame"):
        whole(open_capture(tmp_path / "a.flac"))


@pytest.mark.parametrize("rate_hz", [1, 8000, 44100, 48000, 51200, 96000, 655350])
def test_the_ten_byte_float_of_aiff_gives_whole_rates_exactly(rate_hz: int) -> None:
    """Written here from its definition: exponent bias 16383, the leading one stands in full."""
    exponent = rate_hz.bit_length() - 1
    body = struct.pack(">HQ", 16383 + exponent, rate_hz << (63 - exponent))
    assert extended_float(body) == rate_hz


def test_caf_whose_length_is_left_open_is_read_to_the_end_with_a_note(tmp_path: Path) -> None:
    """The format allows -1 while recording."""
    soundfile.write(tmp_path / "a.caf", np.full((70, 1), 0.25), 48000, subtype="PCM_16")
    data = bytearray((tmp_path / "a.caf").read_bytes())
    place = data.index(b"data")
    data[place + 4 : place + 12] = b"\xff" * 8
    (tmp_path / "a.caf").write_bytes(data[: place + 12 + 4 + 140])
    capture = open_capture(tmp_path / "a.caf")
    assert capture.frame_count == 70
    assert any("leaves the length open" in note for note in capture.notes)


@pytest.mark.parametrize("kind", ["aiff", "caf"])
def test_a_header_that_understates_the_samples_is_refused_in_every_container(
    tmp_path: Path, kind: str
) -> None:
    """What follows the data chunk is more samples, and no chunk: a quiet shorter record."""
    path = tmp_path / f"a.{kind}"
    noise = np.random.default_rng(1).uniform(-0.9, 0.9, (9000, 2))
    soundfile.write(path, noise, 48000, subtype="PCM_16")
    data = path.read_bytes()
    if kind == "aiff":
        place = data.index(b"SSND") + 4
        frames = data.index(b"COMM") + 10
        data = data[:place] + struct.pack(">I", 8 + 400) + data[place + 4 :]
        data = data[:frames] + struct.pack(">I", 100) + data[frames + 4 :]
    else:
        place = data.index(b"data") + 4
        data = data[:place] + struct.pack(">q", 4 + 400) + data[place + 8 :]
    path.write_bytes(data)
    with pytest.raises(CaptureError, match=r"declares 400 bytes, but .* follow that are no chunk"):
        open_capture(path)
