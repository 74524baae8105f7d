"""Memory while reading is bounded by blocks, not by the length of the capture."""

from __future__ import annotations

import struct
import tracemalloc
from pathlib import Path

import h5py
import numpy as np
import pytest
import scipy.io

from rig.readers import ReadOptions, delimited, open_capture, ufftext

STATED = ReadOptions(rate_hz=1000.0)
MEGABYTE = 2**20


def peak_bytes(path: Path) -> int:
    """The most memory that opening and reading a capture held at once."""
    tracemalloc.start()
    try:
        capture = open_capture(path, options=STATED)
        frames = sum(block.shape[1] for block in capture.blocks(range(len(capture.channels))))
        assert frames == capture.frame_count
        return tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()


def wav_of_silence(folder: Path, frames: int) -> Path:
    """A WAV file that is a hole on the disk but for its header."""
    form = struct.pack("<HHIIHH", 1, 2, 48000, 192000, 4, 16)
    head = b"WAVEfmt " + struct.pack("<I", 16) + form + b"data" + struct.pack("<I", 4 * frames)
    path = folder / f"{frames}.wav"
    with path.open("wb") as file:
        file.write(b"RIFF" + struct.pack("<I", 4 * frames + 36) + head)
        file.truncate(44 + 4 * frames)
    return path


def csv_of(folder: Path, rows: int) -> Path:
    """A table with times, long enough not to be kept in memory."""
    path = folder / f"{rows}.csv"
    path.write_text("time,v\n" + "".join(f"{k / 1000:.3f},{k % 10}.5\n" for k in range(rows)))
    return path


def npy_of(folder: Path, frames: int) -> Path:
    path = folder / f"{frames}.npy"
    np.save(path, np.zeros((frames, 2), dtype=np.int16))
    return path


def hdf5_of(folder: Path, frames: int) -> Path:
    path = folder / f"{frames}.h5"
    with h5py.File(path, "w") as file:
        file.create_dataset("x", data=np.zeros((frames, 2)), chunks=(4096, 2))
    return path


def mat_of(folder: Path, frames: int) -> Path:
    path = folder / f"{frames}.mat"
    scipy.io.savemat(path, {"x": np.zeros((frames, 2))}, do_compression=True)
    return path


def uff_of(folder: Path, frames: int) -> Path:
    """One data set of text, six values a line."""
    lines = [f"    -1\n    58{'':74}\n", *[f"{'NONE':<80}\n"] * 5]
    lines += [f"{1:5d}{0:10d}{0:5d}{0:10d} {'NONE':>10}\n"]
    lines += [f"{2:10d}{frames:10d}{1:10d}{0.0:13.5e}{1e-3:13.5e}{0.0:13.5e}\n"]
    lines += [f"{0:10d}{0:5d}{0:5d}{0:5d} {'NONE':<20} {'V':<20}\n"] * 4
    row = "".join(f"{k / 7:13.5e}" for k in range(6)) + "\n"
    path = folder / f"{frames}.uff"
    path.write_text("".join(lines) + row * (frames // 6) + "    -1\n")
    return path


@pytest.mark.parametrize(
    ("make", "small", "ceiling_mb"),
    [
        (wav_of_silence, 1_000_000, 2),
        (csv_of, 120_000, 24),
        (npy_of, 1_000_000, 2),
        (hdf5_of, 600_000, 16),
        (mat_of, 600_000, 8),
        (uff_of, 96_000, 24),
    ],
)
def test_four_times_the_length_takes_no_more_memory(
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    make: object,
    small: int,
    ceiling_mb: int,
) -> None:
    """A record of an hour must run where one of a minute does."""
    # Small tables are kept on purpose; here nothing may be.
    monkeypatch.setattr(delimited, "KEPT_VALUES", 1000)
    monkeypatch.setattr(ufftext, "KEPT_VALUES", 1000)
    assert callable(make)
    one, four = (peak_bytes(make(tmp_path, count)) for count in (small, 4 * small))
    assert four < ceiling_mb * MEGABYTE
    # A tenth of slack: the index of pieces grows by some bytes a megabyte.
    assert four < 1.1 * one + MEGABYTE


def test_a_header_that_claims_a_huge_frame_takes_no_huge_memory(tmp_path: Path) -> None:
    """65,535 channels of a damaged header must not set gigabytes aside."""
    form = struct.pack("<HHIIHH", 3, 65000, 48000, 0, 65000 * 4 % 65536, 32)
    data = b"RIFF" + struct.pack("<I", 2**20) + b"WAVEfmt " + struct.pack("<I", 16) + form
    path = tmp_path / "wide.wav"
    path.write_bytes(data + b"data" + struct.pack("<I", 65000 * 4) + bytes(65000 * 4))
    tracemalloc.start()
    try:
        with pytest.raises(ValueError, match=r"wide\.wav"):
            open_capture(path)
        assert tracemalloc.get_traced_memory()[1] < 4 * MEGABYTE
    finally:
        tracemalloc.stop()
