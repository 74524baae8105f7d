"""Captures taken while they are written: what is there counts, not what a header says."""

from __future__ import annotations

import os
import struct
from pathlib import Path

import numpy as np
import pytest

from rig.errors import CaptureError
from rig.readers import ReadOptions
from rig.readers.growing import RawForm, open_growing, open_pipe

NONE = ReadOptions()


def frames_of(count: int, start: int = 0) -> np.ndarray:
    """Two 16-bit channels whose values name their frame, shape (frames, 2)."""
    number = np.arange(start, start + count)
    return np.column_stack([number, -number]).astype("<i2")


def wav_header(declared: int, rate_hz: int = 1000) -> bytes:
    """A header of 16-bit stereo that declares some bytes of samples."""
    form = struct.pack("<HHIIHH", 1, 2, rate_hz, 4 * rate_hz, 4, 16)
    body = b"WAVEfmt " + struct.pack("<I", 16) + form + b"data" + struct.pack("<I", declared)
    return b"RIFF" + struct.pack("<I", min(declared + 36, 2**32 - 1)) + body


def add(path: Path, data: bytes) -> None:
    """Write on as a recorder does."""
    with path.open("ab") as file:
        file.write(data)


@pytest.mark.parametrize("declared", [0, 0xFFFFFFFF, 40])
def test_a_wav_grows_whatever_its_header_says(tmp_path: Path, declared: int) -> None:
    """Recorders fill the length in when they close the file, or now and then."""
    path = tmp_path / "live.wav"
    path.write_bytes(wav_header(declared) + frames_of(100).tobytes())
    source = open_growing(str(path), NONE)
    first = source.take()
    assert source.take().shape == (2, 0)
    add(path, frames_of(50, start=100).tobytes() + b"\x07")
    second = source.take()
    got = np.concatenate([first, second], axis=1) * 32768
    np.testing.assert_array_equal(got.T, frames_of(150))
    assert source.rate_hz == 1000.0


def test_what_a_closed_wav_holds_behind_its_samples_is_no_sample(tmp_path: Path) -> None:
    """Closing a file adds text chunks: they would be a burst of noise."""
    path = tmp_path / "live.wav"
    path.write_bytes(wav_header(0) + frames_of(100).tobytes())
    source = open_growing(str(path), NONE)
    source.take()
    closed = wav_header(600) + frames_of(150).tobytes()
    path.write_bytes(closed + b"LIST" + struct.pack("<I", 12) + b"INFOISFT\0\0\0\0")
    assert source.take().shape == (2, 50)
    assert source.take().shape == (2, 0)


@pytest.mark.parametrize(
    ("kind", "code", "scale"), [("float32", "<f4", 1.0), ("int16", "<i2", 2**15)]
)
def test_raw_samples_are_taken_by_their_stated_form(
    tmp_path: Path, kind: str, code: str, scale: float
) -> None:
    """A file without a header is what a person says it is."""
    path = tmp_path / "live.raw"
    path.write_bytes(np.arange(12).astype(code).tobytes())
    raw = RawForm(rate_hz=10.0, channel_count=3, sample_type=kind)
    taken = open_growing(str(path), NONE, raw).take()
    np.testing.assert_allclose(taken * scale, np.arange(12).reshape(4, 3).T, atol=0)


def test_a_pipe_is_taken_to_its_end() -> None:
    """Parts of frames wait for the rest of them."""
    out, into = os.pipe()
    data = frames_of(5000).astype("<f4").tobytes()
    with os.fdopen(out, "rb") as reading:
        source = open_pipe(reading, RawForm(rate_hz=10.0, channel_count=2))
        with os.fdopen(into, "wb") as writing:
            for start in range(0, len(data), 999):
                writing.write(data[start : start + 999])
        parts = []
        while not source.ended:
            parts.append(source.take())
    np.testing.assert_array_equal(np.concatenate(parts, axis=1).T, frames_of(5000))


def text_rows(first: int, stop: int) -> str:
    """Rows of a table at 100 Hz."""
    return "".join(f"{k / 100:.2f},{k},{-k}\n" for k in range(first, stop))


def test_text_grows_by_whole_rows(tmp_path: Path) -> None:
    """Half a row is half a number: '1.' of '1.5' is a wrong sample."""
    path = tmp_path / "live.csv"
    path.write_text("t [s],a,b\n" + text_rows(0, 50) + "0.50,5", encoding="utf-8")
    source = open_growing(str(path), NONE)
    first = source.take()
    add(path, b"0,-50\n" + text_rows(51, 80).encode())
    got = np.concatenate([first, source.take()], axis=1)
    np.testing.assert_array_equal(got, [np.arange(80), -np.arange(80)])
    assert [channel.name for channel in source.channels] == ["a", "b"]
    assert source.rate_hz == pytest.approx(100.0, rel=1e-6)


def test_rows_missing_in_time_are_missing_samples(tmp_path: Path) -> None:
    """Index and time never part, as in a finished file."""
    path = tmp_path / "live.csv"
    path.write_text("t [s],a,b\n" + text_rows(0, 50), encoding="utf-8")
    source = open_growing(str(path), NONE)
    source.take()
    add(path, (text_rows(55, 60) + text_rows(62, 70)).encode())
    got = source.take()[0]
    assert got.shape == (20,)
    assert np.flatnonzero(np.isnan(got)).tolist() == [0, 1, 2, 3, 4, 10, 11]
    assert got[-1] == 69


@pytest.mark.parametrize(
    ("name", "content", "added", "text"),
    [
        ("a.csv", "t [s],a,b\n" + text_rows(0, 50), text_rows(3, 9), "times run back"),
        ("a.csv", "t [s],a,b\n" + text_rows(0, 50), "0.50,x y,3\n", "line 52"),
        ("a.csv", "t [s],a,b\n" + text_rows(0, 50), None, "has become shorter"),
    ],
)
def test_what_cannot_go_on_is_refused(
    tmp_path: Path, name: str, content: str, added: str | None, text: str
) -> None:
    """One line says what happened to the file."""
    path = tmp_path / name
    path.write_text(content, encoding="utf-8")
    source = open_growing(str(path), NONE)
    source.take()
    if added is None:
        path.write_text("t [s],a,b\n", encoding="utf-8")
    else:
        add(path, added.encode())
    with pytest.raises(CaptureError, match=text):
        source.take()


def test_a_format_that_cannot_grow_is_refused(tmp_path: Path) -> None:
    """An array file has its shape in its header and is whole or nothing."""
    np.save(tmp_path / "a.npy", np.zeros((100, 2)))
    with pytest.raises(CaptureError, match="an NPY file cannot be followed while it grows"):
        open_growing(str(tmp_path / "a.npy"), NONE)


def test_a_list_of_edges_cannot_be_followed(tmp_path: Path) -> None:
    """Its rows come when something happens, so that silence says nothing."""
    rows = "".join(f"{k**1.5:.6f},{k % 2}\n" for k in range(100))
    (tmp_path / "a.csv").write_text("t,a\n" + rows, encoding="utf-8")
    with pytest.raises(CaptureError, match="list of edges cannot be followed"):
        open_growing(str(tmp_path / "a.csv"), ReadOptions(rate_hz=100.0))
