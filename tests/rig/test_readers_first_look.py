"""The way in: WAV, CSV and NPY through one function, read back as they were written."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import soundfile

from rig.captures import Capture
from rig.errors import CaptureError
from rig.readers import READERS, ReadOptions, open_capture


def whole(capture: Capture, block_frames: int = 1000) -> np.ndarray:
    """All samples of a capture, shape (channels, frames); blocks may be reused, so copied."""
    columns = range(len(capture.channels))
    blocks = [b.copy() for b in capture.blocks(columns, block_frames=block_frames)]
    return np.concatenate(blocks, axis=1)


@pytest.mark.parametrize("subtype", ["PCM_U8", "PCM_16", "PCM_24", "PCM_32", "FLOAT", "DOUBLE"])
@pytest.mark.parametrize("container", ["WAV", "WAVEX", "RF64", "W64"])
@pytest.mark.parametrize("channels", [1, 2, 3])
def test_linear_sound_reads_equal_to_the_sound_library(
    tmp_path: Path, rng: np.random.Generator, subtype: str, container: str, channels: int
) -> None:
    """Our own fast reading must not differ from the library in a single bit."""
    path = tmp_path / f"a.{container.lower()}"
    soundfile.write(
        path, rng.uniform(-1, 1, (2500, channels)), 51200, subtype=subtype, format=container
    )
    capture = open_capture(path)
    expected = soundfile.read(path, always_2d=True)[0].T
    got = whole(capture)
    assert capture.rate_hz == 51200
    assert [c.name for c in capture.channels] == [str(c + 1) for c in range(channels)]
    np.testing.assert_array_equal(got, expected.astype(got.dtype))


def test_integer_sound_states_its_full_scale_and_float_sound_none(tmp_path: Path) -> None:
    """Clipping can only be found where full scale is known."""
    for subtype, full_scale in (("PCM_16", 1.0), ("PCM_24", 1.0), ("FLOAT", None)):
        soundfile.write(tmp_path / "a.wav", np.zeros(9), 100, subtype=subtype)
        assert open_capture(tmp_path / "a.wav").channels[0].full_scale == full_scale


def test_csv_with_a_time_column_gives_rate_and_values(
    tmp_path: Path, rng: np.random.Generator
) -> None:
    """The commonest export of a scope must need no option at all."""
    values = rng.normal(size=(3000, 2))
    table = np.column_stack([np.arange(3000) / 51200, values])
    path = tmp_path / "a.csv"
    np.savetxt(path, table, delimiter=",", header="time (s),left (V),right", comments="")
    capture = open_capture(path)
    assert capture.rate_hz == pytest.approx(51200, rel=1e-11)
    assert [(c.name, c.unit) for c in capture.channels] == [("left", "V"), ("right", "")]
    np.testing.assert_array_equal(whole(capture), values.T)


def test_csv_without_times_needs_a_stated_rate(tmp_path: Path) -> None:
    """A column of values alone says nothing about time; guessing would be silent."""
    path = tmp_path / "a.csv"
    path.write_text("-280\n-363\n-428\n-475\n")
    with pytest.raises(CaptureError, match=r"a\.csv: states no sample rate .*Pass --rate HZ\."):
        open_capture(path)
    capture = open_capture(path, options=ReadOptions(rate_hz=40))
    assert (capture.rate_hz, capture.frame_count) == (40, 4)
    np.testing.assert_array_equal(whole(capture), [[-280, -363, -428, -475]])


@pytest.mark.parametrize("order", ["C", "F"])
@pytest.mark.parametrize("shape", [(500, 2), (2, 500)])
def test_npy_takes_the_longer_axis_as_time(
    tmp_path: Path, rng: np.random.Generator, order: str, shape: tuple[int, int]
) -> None:
    """Half of all scripts save channels first: the samples must not be mixed up by it."""
    values = np.asarray(rng.normal(size=shape), order=order)
    np.save(tmp_path / "a.npy", values)
    capture = open_capture(tmp_path / "a.npy", options=ReadOptions(rate_hz=48000))
    expected = values if shape[0] < shape[1] else values.T
    np.testing.assert_array_equal(whole(capture, 77), expected)


@pytest.mark.parametrize("block_frames", [1, 999, 1000, 1001, 5000])
def test_blocks_hold_the_asked_number_of_frames(tmp_path: Path, block_frames: int) -> None:
    """Records shorter than, equal to and one longer than a block are where readers slip."""
    np.save(tmp_path / "a.npy", np.arange(1000.0))
    np.savetxt(tmp_path / "a.csv", np.arange(1000.0))
    soundfile.write(tmp_path / "a.wav", np.arange(1000) / 1000, 100, subtype="DOUBLE")
    for name in ("a.npy", "a.csv", "a.wav"):
        capture = open_capture(tmp_path / name, options=ReadOptions(rate_hz=100))
        lengths = [b.shape[1] for b in capture.blocks([0], block_frames=block_frames)]
        assert lengths[:-1] == [block_frames] * (len(lengths) - 1)
        assert sum(lengths) == 1000


def test_opening_sound_text_and_arrays_loads_numpy_only(tmp_path: Path) -> None:
    """Every heavy import is paid by every run of a sweep."""
    np.save(tmp_path / "a.npy", np.arange(10.0))
    np.savetxt(tmp_path / "a.csv", np.arange(10.0))
    soundfile.write(tmp_path / "a.wav", np.zeros(10), 100)
    code = (
        "import sys; from rig.readers import open_capture, ReadOptions\n"
        f"for n in ('a.npy', 'a.csv', 'a.wav'):\n"
        f"    c = open_capture({str(tmp_path)!r} + '/' + n, options=ReadOptions(rate_hz=9))\n"
        "    list(c.blocks([0]))\n"
        "print([m for m in ('scipy', 'h5py', 'soundfile', 'matplotlib') if m in sys.modules])"
    )
    root = Path(__file__).resolve().parents[2]
    done = subprocess.run([sys.executable, "-c", code], cwd=root, capture_output=True, text=True)
    assert done.stdout.strip() == "[]", done.stderr


def test_every_format_has_a_name_a_label_and_a_suffix() -> None:
    """The table feeds the help text and the refusals."""
    for name, reader in READERS.items():
        assert reader.name == name
        assert reader.label
        assert all(suffix.startswith(".") for suffix in reader.suffixes)


def test_bytes_behind_an_array_are_noted(tmp_path: Path) -> None:
    """Two arrays saved into one file: the second is not part of the record."""
    with (tmp_path / "two.npy").open("wb") as file:
        np.save(file, np.arange(10.0))
        np.save(file, np.arange(20.0))
    capture = open_capture(tmp_path / "two.npy", options=ReadOptions(rate_hz=1))
    assert capture.frame_count == 10
    assert "288 bytes behind the array are left unread" in capture.notes


def test_control_characters_of_a_file_reach_no_name_and_no_unit(tmp_path: Path) -> None:
    """A name goes to the terminal and into reports: an escape sequence must not come along."""
    path = tmp_path / "a.csv"
    path.write_text("time (s),l\x1beft (m\x07V)\n" + "".join(f"{k / 8},{k}\n" for k in range(9)))
    capture = open_capture(path, options=ReadOptions(format="csv"))
    assert [(c.name, c.unit) for c in capture.channels] == [("l eft", "m V")]
    np.testing.assert_array_equal(whole(capture), [np.arange(9)])
