"""Long rows in temporary files that gave wrong numbers or faults; each names the symptom."""

from __future__ import annotations

import tempfile
import threading
from typing import Any

import numpy as np
import pytest

from rig.errors import PhaseError
from rig.longarrays import SampleRow


@pytest.fixture
def row(monkeypatch: pytest.MonkeyPatch) -> Any:
    """Return a long row of 5000 numbers, each its own place."""
    monkeypatch.setattr("rig.longarrays.LONG_SAMPLES", 1000)
    row = SampleRow(5000, float)
    row.append(np.arange(5000.0))
    return row.row()


def test_threads_read_their_own_numbers(row: Any) -> None:
    """Used to give one thread the numbers another had asked for: both moved one file."""
    wrong: list[int] = []

    def look(seed: int) -> None:
        for start in np.random.default_rng(seed).integers(0, 4900, 3000).tolist():
            if row[start : start + 50][0] != start:
                wrong.append(start)

    threads = [threading.Thread(target=look, args=(seed,)) for seed in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert wrong == []


@pytest.mark.parametrize("place", [5000, -5001, [5000], [-5001]])
def test_a_place_beyond_the_row_is_an_index_error(row: Any, place: object) -> None:
    """Lists of places used to be told as a file that was cut off."""
    with pytest.raises(IndexError):
        row[place]


def test_no_folder_for_temporary_files_is_told(monkeypatch: pytest.MonkeyPatch) -> None:
    """Used to end in the fault of tempfile itself, raised while the message was made."""

    def nowhere() -> str:
        raise FileNotFoundError(2, "No usable temporary directory found in ['/a', '/b']")

    monkeypatch.setattr(tempfile, "tempdir", None)
    monkeypatch.setattr(tempfile, "_get_default_tempdir", nowhere)
    monkeypatch.setattr("rig.longarrays.LONG_SAMPLES", 10)
    with pytest.raises(PhaseError, match="need a temporary file, got 'No usable"):
        SampleRow(11, float)
