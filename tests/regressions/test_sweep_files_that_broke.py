"""Sweep files that once ended in a fault of the program; each names the symptom."""

from __future__ import annotations

import os
from pathlib import Path

import pytest

from reports.provenance import file_digest
from rig.errors import SweepFileError
from rig.sweepfile.read import read_sweep_file
from rig.sweepfile.table import points_from_blocks, points_from_bytes


@pytest.mark.parametrize(
    ("kind", "level"),
    [
        # used to end in OverflowError when the decibels became an amplitude
        ("decibel", "7000"),
        ("decibel", "1e6"),
        ("decibel", "-1e6"),
        # used to end in ZeroDivisionError when a square overflowed or vanished
        ("amplitude", "1e300"),
        ("power", "1e-300"),
    ],
)
def test_a_level_out_of_this_world_is_refused_with_its_place(kind: str, level: str) -> None:
    """One slip of a finger in a table must not cost the whole sweep."""
    table = f"file,drive_hz,level\na.wav,20,1\nb.wav,21,{level}\n".encode()
    with pytest.raises(SweepFileError, match=r"points.csv line 3 level: must lie"):
        points_from_bytes("points.csv", table, kind)


@pytest.mark.parametrize("level", ["-300", "0", "120"])
def test_decibels_in_use_are_read(level: str) -> None:
    """dBm of a receiver and dB of a sound lie far inside the limits."""
    points = points_from_bytes("points.csv", f"file,level\na.wav,{level}\n".encode(), "decibel")
    assert points[0].level == float(level)


def test_a_name_with_a_nul_is_refused_with_its_place() -> None:
    """Used to end in ValueError: no path of the system can hold a NUL."""
    with pytest.raises(SweepFileError, match=r"point.* 1 file: must hold no NUL"):
        points_from_blocks("s.toml", [{"file": "a\0b.wav", "drive_hz": 20}], "amplitude")


@pytest.mark.parametrize(
    ("text", "words"),
    [
        # used to end in RecursionError, out of the text that showed the value
        ("[" + "a." * 3000 + "b]", "unknown block or key 'a'"),
        # used to end in ValueError of the parser, or of the text that showed the value
        ("[level]\nname = " + "9" * 5000, "thousands of digits"),
        ("[level]\nname = 0x" + "f" * 5000, "name: must be a text"),
        # used to end in OverflowError: a whole number need not fit into a float
        ("[measure]\nsettle_s = " + "9" * 400, "settle_s: must be a number of at most"),
        ("[reference]\nchannel = " + "9" * 400, "channel: must be a channel number"),
    ],
)
def test_a_sweep_file_beyond_measure_is_refused_with_its_place(
    tmp_path: Path, text: str, words: str
) -> None:
    """Whatever stands in a file, the answer is one line that says where."""
    wiring = "" if "[reference]" in text else "[reference]\nchannel = 1\n"
    file = tmp_path / "s.toml"
    file.write_text(f'{wiring}[driven]\nchannel = 2\n{text}\n[[point]]\nfile = "a.wav"\n')
    with pytest.raises(SweepFileError, match=f"s.toml.*{words}") as caught:
        read_sweep_file(file)
    assert len(str(caught.value)) < 2000


def test_a_pipe_named_as_a_capture_is_refused_at_once(tmp_path: Path) -> None:
    """Used to hang for ever: the digest waited for a writer, or read a device without end."""
    pipe = tmp_path / "pipe.wav"
    os.mkfifo(pipe)
    for path in (pipe, Path("/dev/zero")):
        with pytest.raises(OSError, match="no regular file"):
            file_digest(path)


def test_a_device_named_as_a_sweep_file_is_refused() -> None:
    """Used to read /dev/zero until the memory was gone: a device states no size."""
    with pytest.raises(SweepFileError, match=r"/dev/zero: .* bytes, at most"):
        read_sweep_file(Path("/dev/zero"))
