"""Lists of level changes (tachometer edges, logic recorders) held at a stated rate."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from rig.captures import Capture
from rig.errors import CaptureError
from rig.readers import ReadOptions, open_capture


def edges(folder: Path, times: np.ndarray) -> Path:
    """A list of changes: one wheel changes at each time, a second one at every third."""
    rows = [f"{t:.9f},{k % 2},{k // 3 % 2}\n" for k, t in enumerate(times)]
    path = folder / "wheel.csv"
    path.write_text("Time [s],crank,cam\n" + "".join(rows))
    return path


def whole(capture: Capture, block_frames: int) -> np.ndarray:
    """All samples of a capture, shape (channels, frames)."""
    blocks = [b.copy() for b in capture.blocks([0, 1], block_frames=block_frames)]
    return np.concatenate(blocks, axis=1)


@pytest.fixture
def times(rng: np.random.Generator) -> np.ndarray:
    """Times of a wheel that runs up, with an uneven start."""
    return 2.5 + np.cumsum(rng.uniform(0.2e-3, 3e-3, 400))


def test_levels_are_held_and_every_edge_stands_in_its_frame(
    tmp_path: Path, times: np.ndarray
) -> None:
    """Compared sample by sample with the slow and obvious way."""
    capture = open_capture(edges(tmp_path, times), options=ReadOptions(rate_hz=20_000))
    stamps = np.round(times, 9)
    expected = []
    for frame in range(capture.frame_count):
        last = np.flatnonzero(stamps - stamps[0] <= frame / 20_000 + 1e-12)[-1]
        expected.append((last % 2, last // 3 % 2))
    for block_frames in (1000, 37, 10**6):
        np.testing.assert_array_equal(whole(capture, block_frames), np.transpose(expected))
    assert [c.name for c in capture.channels] == ["crank", "cam"]
    assert "edges placed to 5e-05 s" in capture.notes[0]


def test_without_a_rate_the_refusal_says_what_to_do(tmp_path: Path, times: np.ndarray) -> None:
    """No rate can be guessed from edges."""
    with pytest.raises(
        CaptureError, match=r"not evenly spaced .* changes between 0 and 1 pass --rate"
    ):
        open_capture(edges(tmp_path, times))


def test_uneven_rows_of_other_values_stay_refused(tmp_path: Path, times: np.ndarray) -> None:
    """A voltage between two rows is not known: holding it would invent samples."""
    path = tmp_path / "v.csv"
    path.write_text("t,v\n" + "".join(f"{t:.9f},{t:.3f}\n" for t in times))
    with pytest.raises(CaptureError, match="not evenly spaced"):
        open_capture(path, options=ReadOptions(rate_hz=1000))


def test_a_rate_typed_wrongly_is_refused(tmp_path: Path, times: np.ndarray) -> None:
    """A million frames a row is no tachometer."""
    with pytest.raises(CaptureError, match=r"frames of 400 rows\. Pass a lower --rate"):
        open_capture(edges(tmp_path, times), options=ReadOptions(rate_hz=1e12))
