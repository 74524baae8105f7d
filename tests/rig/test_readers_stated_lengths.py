"""Lengths a file states, held against what it holds, where the format itself has no check."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import soundfile
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from rig.captures import find_column
from rig.errors import CaptureError, ChannelError
from rig.readers import ReadOptions, open_capture
from rig.readers.flacframes import last_block_end
from rig.readers.statedlength import find_stated_rows

ROWS = "".join(f"{k / 100:.2f},{k}\n" for k in range(40))
STATEMENTS = [
    "Points,40",
    "Record Length,4.000000E+01,Points",
    '"Record Length","40"',
    "# number of samples: 40",
    "No. of points = 40",
    "Memory length:40 pts",
    "sample count\t40",
]
OTHER_NUMBERS = ["Sample Rate,40", "samples/s,40", "Points per second,40", "Length,40", "N,40"]
OTHER_NUMBERS += ["Sample interval,40", "Record length,40 s", "Samples,0.5", "time,points"]


def table(folder: Path, head: str, rows: str = ROWS) -> Path:
    """A table below one line of preamble."""
    path = folder / "a.csv"
    path.write_text(f"{head}\n\ntime (s),v\n{rows}")
    return path


@pytest.mark.parametrize("head", STATEMENTS)
def test_a_table_cut_between_rows_is_refused_where_its_preamble_counts_them(
    tmp_path: Path, head: str
) -> None:
    """Text has no length field; the line of the recorder is all there is."""
    assert open_capture(table(tmp_path, head)).frame_count == 40
    cut = table(tmp_path, head, ROWS[: ROWS.index("0.25")])
    with pytest.raises(CaptureError, match=r"preamble says '.*', file holds 25 rows \(cut short"):
        open_capture(cut)
    capture = open_capture(cut, options=ReadOptions(allow_truncated=True))
    assert capture.frame_count == 25
    assert "file holds 25 rows; truncation accepted" in " ".join(capture.notes)


@pytest.mark.parametrize("head", OTHER_NUMBERS)
def test_other_numbers_of_a_preamble_count_no_rows(tmp_path: Path, head: str) -> None:
    """A rate of 40 samples a second is no promise of 40 rows."""
    capture = open_capture(table(tmp_path, head, ROWS + "0.40,40\n"))
    assert "preamble says" not in " ".join(capture.notes)


def test_more_rows_than_stated_are_read_and_noted(tmp_path: Path) -> None:
    """Two records in one file, or a count of something else: a person should look."""
    capture = open_capture(table(tmp_path, "Points,39"))
    assert capture.frame_count == 40
    assert "preamble says 'Points,39', file holds 40 rows" in capture.notes


def test_two_different_counts_are_no_statement() -> None:
    """A preamble that counts two things says nothing certain of the rows."""
    assert find_stated_rows(["Points,40", "Record length,50"]) is None
    assert find_stated_rows(["Points,40", "Record length,40"]) is not None


def test_a_last_row_without_line_end_is_noted_as_a_possible_cut(tmp_path: Path) -> None:
    """A number may have lost its last digits there."""
    capture = open_capture(table(tmp_path, "bench", ROWS.rstrip()))
    assert "if the file was cut, its last value may be incomplete" in " ".join(capture.notes)


@settings(
    max_examples=25,
    deadline=None,
    suppress_health_check=[HealthCheck.function_scoped_fixture],
)
@given(
    frames=st.integers(1, 30000),
    channels=st.integers(1, 3),
    rate_hz=st.sampled_from([8000, 44100, 48001, 192000]),
    code=st.sampled_from(["PCM_S8", "PCM_16", "PCM_24"]),
    loud=st.booleans(),
)
def test_the_last_block_of_a_sound_file_tells_its_length(
    tmp_path: Path, frames: int, channels: int, rate_hz: int, code: str, loud: bool
) -> None:
    """The witness library writes the header and the blocks; both must say the same."""
    noise = np.random.default_rng(frames).uniform(-1, 1, (frames, channels)) * loud
    soundfile.write(tmp_path / "a.flac", noise, rate_hz, subtype=code)
    assert last_block_end(str(tmp_path / "a.flac")) == frames


def test_a_header_that_understates_a_packed_sound_file_is_noted(tmp_path: Path) -> None:
    """A decoder stops at the stated end without a word; the rest of the record is lost."""
    path = tmp_path / "a.flac"
    soundfile.write(path, np.random.default_rng(1).uniform(-1, 1, (20000, 2)), 48000)
    assert not [note for note in open_capture(path).notes if "last block" in note]
    data = bytearray(path.read_bytes())
    data[22:26] = (9000).to_bytes(4, "big")
    path.write_bytes(data)
    capture = open_capture(path)
    assert capture.frame_count == 9000
    note = "header declares 9000 frames, the last block ends at frame 20000: 11000 frames are left"
    assert note in " ".join(capture.notes)
    assert sum(block.shape[1] for block in capture.blocks([0, 1])) == 9000


@pytest.mark.parametrize("size", [0, 30, 42, 60, 5000])
def test_a_packed_sound_file_without_a_whole_last_block_tells_no_length(
    tmp_path: Path, size: int
) -> None:
    """A cut block confirms nothing, and a guess would be worse than none."""
    path = tmp_path / "a.flac"
    soundfile.write(path, np.random.default_rng(1).uniform(-1, 1, (20000, 2)), 48000)
    path.write_bytes(path.read_bytes()[:size])
    assert last_block_end(str(path)) is None


def test_a_universal_file_cut_between_data_sets_has_no_second_channel(tmp_path: Path) -> None:
    """The format counts no data sets: what is missing shows when the channel is asked for."""
    head = f"    -1\n    58{'':74}\n" + "".join(f"{t:<80}\n" for t in ["a", *["NONE"] * 4])
    head += f"{1:5d}{0:10d}{0:5d}{0:10d} {'NONE':>10}\n"
    head += f"{2:10d}{12:10d}{1:10d}{0.0:13.5e}{1e-3:13.5e}{0.0:13.5e}\n"
    head += f"{0:10d}{0:5d}{0:5d}{0:5d} {'NONE':<20} {'V':<20}\n" * 4
    row = "".join(f"{k:13.5e}" for k in range(6)) + "\n"
    path = tmp_path / "a.uff"
    path.write_text(head + 2 * row + "    -1\n")
    with pytest.raises(ChannelError, match=r"no channel '2'; channels are 1 'a'"):
        find_column(open_capture(path), 2)
