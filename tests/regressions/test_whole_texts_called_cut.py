"""Whole texts that were refused as cut because a preamble counts something else than rows."""

from __future__ import annotations

from pathlib import Path

import pytest

from rig.errors import CaptureError
from rig.readers.table import open_capture

ROWS = [f"{k / 100:.2f},{k},{k % 7}\n" for k in range(40)]


def table(folder: Path, head: str, rows: list[str]) -> Path:
    """Return a table of two channels below one line of preamble."""
    path = folder / "a.csv"
    path.write_text(f"{head}\n\ntime (s),a (V),b (V)\n{''.join(rows)}")
    return path


def test_a_count_of_the_values_of_all_channels_is_no_cut(tmp_path: Path) -> None:
    """Used to be refused: 40 rows of two channels are 80 samples to many recorders."""
    capture = open_capture(table(tmp_path, "Number of samples,80", ROWS))
    assert capture.frame_count == 40
    assert any("file holds 40 rows of 2 values each" in note for note in capture.notes)


def test_rows_missing_in_between_are_no_cut_at_the_end(tmp_path: Path) -> None:
    """Used to be refused: the last of 40 instants is there, four in the middle are not."""
    capture = open_capture(table(tmp_path, "Points,40", ROWS[:20] + ROWS[24:]))
    assert capture.frame_count == 40
    assert any("file holds 36 rows over a time of 40" in note for note in capture.notes)


@pytest.mark.parametrize("head", ["Waveform size: 32000", "Memory size,1000000"])
def test_a_size_counts_bytes(tmp_path: Path, head: str) -> None:
    """Used to be refused as 32000 rows that are not there."""
    assert open_capture(table(tmp_path, head, ROWS)).frame_count == 40


def test_a_cut_text_is_still_refused(tmp_path: Path) -> None:
    """The rule that was loosened must still bite."""
    with pytest.raises(CaptureError, match=r"file holds 25 rows \(cut short"):
        open_capture(table(tmp_path, "Number of samples,80", ROWS[:25]))
