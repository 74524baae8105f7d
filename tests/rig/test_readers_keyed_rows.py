"""Log lines that name each value, read as the table they are."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from rig.captures import Capture
from rig.errors import CaptureError
from rig.readers import ReadOptions, delimited, open_capture
from rig.readers.growingtext import open_growing_text

ROWS = "".join(f"left={k}.5 right={-k}\n" for k in range(9))


def opened(folder: Path, text: str, rate_hz: float | None = 10.0) -> Capture:
    """The capture in a text."""
    (folder / "a.log").write_text(text)
    return open_capture(folder / "a.log", options=ReadOptions(rate_hz=rate_hz))


def whole(capture: Capture) -> np.ndarray:
    """All samples of a capture, shape (channels, frames)."""
    columns = range(len(capture.channels))
    return np.concatenate([b.copy() for b in capture.blocks(columns, block_frames=4)], axis=1)


def test_names_become_channels_and_values_samples(tmp_path: Path) -> None:
    """The names stand in every row; none of them is a number."""
    capture = opened(tmp_path, ROWS)
    assert [channel.name for channel in capture.channels] == ["left", "right"]
    assert capture.format == "csv, pairs of name and value, decimal '.'"
    np.testing.assert_array_equal(whole(capture), [np.arange(9) + 0.5, -np.arange(9.0)])


@pytest.mark.parametrize("row", ["{}: a={} b={}", "[{}] a={}, b={};", "x {} a = {}  b = {}"])
def test_what_stands_before_the_first_name_is_passed_over(tmp_path: Path, row: str) -> None:
    """Programs put a number of the receiver, or a level of the message there."""
    text = "".join(row.format(k % 2, k, k * k) + "\n" for k in range(9))
    np.testing.assert_array_equal(whole(opened(tmp_path, text))[1], np.arange(9.0) ** 2)


def test_a_time_of_day_in_front_is_the_clock(tmp_path: Path) -> None:
    """It gives rate and gaps; two rows are missing here."""
    rows = [f"2026-12-01 10:00:{k:02d}.25 v={k}\n" for k in range(20) if k not in (7, 8)]
    capture = opened(tmp_path, "".join(rows), None)
    assert capture.rate_hz == pytest.approx(1.0)
    expected = np.arange(20.0)
    expected[7:9] = np.nan
    np.testing.assert_array_equal(whole(capture), [expected])


def test_a_named_time_is_the_clock(tmp_path: Path) -> None:
    """As in any table."""
    capture = opened(tmp_path, "".join(f"t={k / 8} v={k}\n" for k in range(20)), None)
    assert capture.rate_hz == pytest.approx(8.0)
    assert [channel.name for channel in capture.channels] == ["v"]


def test_remarks_between_the_rows_are_left_out_and_counted(tmp_path: Path) -> None:
    """A log has lines of other kinds; how many is said."""
    capture = opened(tmp_path, "start\n" + ROWS.replace("left=4", "-0.2 locked\nleft=4") + "end\n")
    assert capture.frame_count == 9
    assert "2 comment lines left out" in capture.notes


@pytest.mark.parametrize("bad", ["left=3 up=4", "left=3", "left=1,5 right=2,5", "left=x right=3"])
def test_a_row_of_other_pairs_is_refused_with_its_line(tmp_path: Path, bad: str) -> None:
    """A value that is missing or torn apart must not move its neighbours."""
    with pytest.raises(CaptureError, match="line 10"):
        opened(tmp_path, ROWS + bad + "\n" + ROWS)


def test_settings_of_a_preamble_are_no_rows(tmp_path: Path) -> None:
    """Lines such as "gain=5" above a table are not the table."""
    capture = opened(tmp_path, "gain=5\nrange=2\n" + "".join(f"{k}.0,{k}.0\n" for k in range(9)))
    assert capture.format.startswith("csv, delimiter comma")


@settings(
    max_examples=30, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(
    table=st.lists(
        st.tuples(
            st.floats(allow_nan=False, allow_infinity=False, width=32), st.integers(-999, 999)
        ),
        min_size=4,
        max_size=40,
    ),
    between=st.sampled_from([" ", ", ", ";", "\t"]),
    share=st.floats(0, 1),
)
def test_written_rows_come_back_and_a_cut_is_noted(
    tmp_path: Path, table: list[tuple[float, int]], between: str, share: float
) -> None:
    """Round trip, and every cut within a row; long tables go through the index of pieces."""
    text = "".join(f"a={one!r}{between}b={two}\n" for one, two in table)
    np.testing.assert_array_equal(whole(opened(tmp_path, text)).T, np.array(table))
    cut = text[: int(share * (len(text) - 1))]
    if cut.endswith("\n") or not cut:
        return  # between two rows: nothing tells
    try:
        capture = opened(tmp_path, cut)
    except CaptureError:
        return
    assert "incomplete" in " ".join(capture.notes) or "left out" in " ".join(capture.notes)


def test_a_long_log_is_read_in_pieces(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The second pass takes the names off again."""
    monkeypatch.setattr(delimited, "KEPT_VALUES", 100)
    capture = opened(tmp_path, "".join(f"a={k} b={-k}\n" for k in range(500)))
    np.testing.assert_array_equal(whole(capture)[1], -np.arange(500.0))


def test_a_log_that_still_grows_is_followed(tmp_path: Path) -> None:
    """Programs write such lines while they run."""
    path = tmp_path / "a.log"
    path.write_text(ROWS)
    growing = open_growing_text(str(path), ReadOptions(rate_hz=10.0))
    np.testing.assert_array_equal(growing.take()[0], np.arange(9) + 0.5)
    with path.open("a") as file:
        file.write("locked\nleft=9.5 right=-9\nleft=10")
    np.testing.assert_array_equal(growing.take(), [[9.5], [-9.0]])
