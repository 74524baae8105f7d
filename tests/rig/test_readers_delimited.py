"""Dialects of delimited text: what people export, read as they mean it, or refused."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from rig.captures import Capture
from rig.errors import CaptureError
from rig.readers import ReadOptions, delimited, open_capture

STATED = ReadOptions(rate_hz=10.0)


def whole(capture: Capture, block_frames: int = 7) -> np.ndarray:
    """All samples of a capture, shape (channels, frames)."""
    columns = range(len(capture.channels))
    blocks = [b.copy() for b in capture.blocks(columns, block_frames=block_frames)]
    return np.concatenate(blocks, axis=1)


def opened(folder: Path, text: str | bytes, options: ReadOptions = STATED) -> Capture:
    """The capture in a text."""
    path = folder / "a.csv"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return open_capture(path, options=options)


DIALECTS = {
    "plain": "1,-2\n3,-4\n5,-6\n",
    "blanks after commas": "1, -2\n3, -4\n5, -6\n",
    "semicolons": "1;-2\n3;-4\n5;-6\n",
    "tabs": "1\t-2\n3\t-4\n5\t-6\n",
    "bars": "1|-2\n3|-4\n5|-6\n",
    "columns of blanks": "  1    -2\n  3    -4\n  5    -6\n",
    "windows line ends": "1,-2\r\n3,-4\r\n5,-6\r\n",
    "carriage returns alone": "1,-2\r3,-4\r5,-6\r",
    "no line end at the end": "1,-2\n3,-4\n5,-6",
    "blank lines between": "1,-2\n\n3,-4\n   \n5,-6\n\n\n",
    "comment lines": "# pump 3\n1,-2\n3,-4\n# speed changed\n5,-6\n",
    "names": "left,right\n1,-2\n3,-4\n5,-6\n",
    "names in quotes": '"left","right"\n1,-2\n3,-4\n5,-6\n',
    "numbers in quotes": '"1","-2"\n"3","-4"\n"5","-6"\n',
    "trailing commas": "1,-2,\n3,-4,\n5,-6,\n",
    "exponents": "1e0,-2E+0\n3.0e-0,-.4e1\n50e-1,-6.\n",
    "exponents with D": "1D0,-2D+0\n3.0d-0,-.4d1\n50D-1,-6.\n",
    "decimal commas": "1,0;-2,0\n3,0;-4,0\n5,0;-6,0\n",
    "decimal commas and blanks": "1,00 -2,00\n3,00 -4,00\n5,00 -6,00\n",
    "unit behind each number": "1 V,-2 mV\n3 V,-4 mV\n5 V,-6 mV\n",
    "byte-order mark": "\ufeff1,-2\n3,-4\n5,-6\n",
    "preamble": "Model,7\nRange,5,V\nNotes\n\n1,-2\n3,-4\n5,-6\n",
    "footer": "1,-2\n3,-4\n5,-6\nEND\nchecked by nobody\n",
    "signs": "+1,-2\n+3,-4\n+5,-6\n",
}


@pytest.mark.parametrize("name", DIALECTS)
def test_a_dialect_is_read_as_it_is_meant(tmp_path: Path, name: str) -> None:
    """Every one of these comes from some bench program."""
    got = whole(opened(tmp_path, DIALECTS[name]))
    np.testing.assert_array_equal(got, [[1, 3, 5], [-2, -4, -6]])


@pytest.mark.parametrize("coding", ["utf-8-sig", "utf-16", "utf-16-le", "utf-16-be", "latin-1"])
def test_every_coding_of_text_gives_the_same_numbers(tmp_path: Path, coding: str) -> None:
    """A degree sign in the header is all it takes to break a reader."""
    rows = "".join(f"{k},{-2 * k}\n" for k in range(300))
    capture = opened(tmp_path, f"θ\u00b0,µV\n{rows}".replace("θ", "a").encode(coding))
    assert capture.frame_count == 300
    assert whole(capture)[1, -1] == -598


@pytest.mark.parametrize(
    ("cell", "expected"),
    [("", np.nan), ("nan", np.nan), ("NaN", np.nan), ("---", np.nan), ("inf", np.inf)],
)
def test_an_empty_or_named_missing_cell_is_no_sample(
    tmp_path: Path, cell: str, expected: float
) -> None:
    """A recorder that loses a value leaves the place empty: it must stay a gap."""
    got = whole(opened(tmp_path, f"1,-2\n3,{cell}\n5,-6\n7,-8\n"))
    np.testing.assert_array_equal(got, [[1, 3, 5, 7], [-2, expected, -6, -8]])


@pytest.mark.parametrize(
    ("header", "rate_hz", "names"),
    [
        ("time,a", 100.0, ["a"]),
        ("Time [s],a", 100.0, ["a"]),
        ("time (ms),a", 100_000.0, ["a"]),
        ("t_us,a", 1e8, ["a"]),
        ("a,Zeit", 1 / 0.5, ["a"]),
        ("MJD,a", 100 / 86400, ["a"]),
    ],
)
def test_the_time_column_is_found_by_its_name_and_unit(
    tmp_path: Path, header: str, rate_hz: float, names: list[str]
) -> None:
    """Milliseconds taken for seconds would shift every frequency by a thousand."""
    rows = "".join(f"{k / 100:.2f},{k / 2:.1f}\n" for k in range(50))
    capture = opened(tmp_path, f"{header}\n{rows}", ReadOptions())
    assert capture.rate_hz == pytest.approx(rate_hz, rel=1e-9)
    assert [c.name for c in capture.channels] == names


def test_a_first_column_without_a_name_that_rises_evenly_is_time_with_a_note(
    tmp_path: Path,
) -> None:
    """Scopes export such files; the assumption is shown."""
    rows = "".join(f"{k * 0.004:.3f} {k % 3}\n" for k in range(60))
    capture = opened(tmp_path, rows, ReadOptions())
    assert capture.rate_hz == pytest.approx(250)
    assert any("taken as time" in note for note in capture.notes)


def test_a_first_column_of_whole_numbers_is_not_taken_for_time(tmp_path: Path) -> None:
    """It may count rows, days or years: nobody but the person knows."""
    text = "".join(f"{k},{k % 3}.5\n" for k in range(60))
    with pytest.raises(CaptureError, match="states no sample rate"):
        opened(tmp_path, text, ReadOptions())
    assert opened(tmp_path, text, ReadOptions(time_column=1)).rate_hz == 1.0


def test_missing_rows_are_nan_frames_at_any_block_and_start(tmp_path: Path) -> None:
    """Blocks that begin inside a gap, end in it or lie in it must agree."""
    frames = [*range(40), *range(95, 130), *range(131, 200)]
    text = "time,v\n" + "".join(f"{k / 50:.2f},{k}\n" for k in frames)
    capture = opened(tmp_path, text, ReadOptions())
    expected = np.full(200, np.nan)
    expected[frames] = frames
    for block_frames in (1, 13, 64, 1000):
        np.testing.assert_array_equal(whole(capture, block_frames)[0], expected)
    for start in (0, 39, 40, 60, 94, 95, 130, 131, 199):
        blocks = capture.blocks([0], block_frames=9, start_frame=start, stop_frame=start + 30)
        got = np.concatenate([b[0].copy() for b in blocks])
        np.testing.assert_array_equal(got, expected[start : start + 30])
    assert any("55 samples before row 41" in note for note in capture.notes)


def test_a_long_table_is_parsed_again_from_any_row(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Large tables are not kept in memory; small pieces make one of few rows large."""
    monkeypatch.setattr(delimited, "KEPT_VALUES", 100)
    text = "x\ny\n" + "".join(f"{k / 1000:.3f};{k};{-k}\n" for k in range(70_000))
    capture = opened(tmp_path, text, ReadOptions())
    assert capture.frame_count == 70_000
    for start in (0, 1, 33_333, 69_990):
        block = next(iter(capture.blocks([1, 0], block_frames=10, start_frame=start)))
        np.testing.assert_array_equal(block[1], np.arange(start, start + 10))
        np.testing.assert_array_equal(block[0], -np.arange(start, start + 10))


def test_a_table_that_shrinks_while_it_is_read_is_refused(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Another program may write the same file."""
    monkeypatch.setattr(delimited, "KEPT_VALUES", 10)
    capture = opened(tmp_path, "".join(f"{k},-1\n" for k in range(100)))
    (tmp_path / "a.csv").write_text("1,1\n2,1\n")
    with pytest.raises(CaptureError, match="fewer rows than when it was opened"):
        whole(capture)


@pytest.mark.parametrize(
    ("options", "expected"),
    [
        (ReadOptions(rate_hz=1, decimal=","), [[1.5, 2.5, 3.5]]),
        (ReadOptions(rate_hz=1, delimiter=","), [[1, 2, 3], [5, 5, 5]]),
        (ReadOptions(rate_hz=1, decimal="."), [[1, 2, 3], [5, 5, 5]]),
    ],
)
def test_an_ambiguous_text_is_read_as_it_is_stated(
    tmp_path: Path, options: ReadOptions, expected: list[list[float]]
) -> None:
    """The person decides, not a guess."""
    np.testing.assert_array_equal(whole(opened(tmp_path, "1,5\n2,5\n3,5\n", options)), expected)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("1,-2\n3,-4\n5\n6,-7\n", "line 3: 1 fields, 2 expected"),
        ("1,-2\n3,-4\n5,x\n6,-7\n", 'line 3: "x" is no number'),
        ("1,-2\n3,-4\n5,6,7\n6,-7\n", "line 3: 3 fields, 2 expected"),
        ("1 V,-2\n3 mV,-4\n5 V,-6\n", "line 2: unit 'mV' where the column has 'V'"),
        ("1,-2\n3,-4\n5,-6\n7\n", "line 4: 1 fields, 2 expected"),
        ("\n\n\n", "not delimited text"),
        ("1.5.2;3\n" * 3, "no rows of numbers"),
    ],
)
def test_a_broken_row_is_refused_with_its_line(tmp_path: Path, text: str, words: str) -> None:
    """Skipping a row would shift everything after it in time."""
    with pytest.raises(CaptureError, match=words):
        whole(opened(tmp_path, text))


def test_a_time_column_that_is_not_there_is_refused_with_those_that_are(tmp_path: Path) -> None:
    """A typing error must not fall back to a guess."""
    with pytest.raises(CaptureError, match=r"no time column 'tiem' \(columns: time, v\)"):
        opened(tmp_path, "time,v\n0,1\n1,2\n", ReadOptions(time_column="tiem"))


number_texts = st.floats(-1e6, 1e6, allow_nan=False).map(lambda v: f"{v:.7g}")


@settings(
    max_examples=60,
    deadline=None,
    # The folder is shared by the examples: each writes its file anew.
    suppress_health_check=[HealthCheck.function_scoped_fixture],
)
@given(
    rows=st.lists(st.lists(number_texts, min_size=3, max_size=3), min_size=3, max_size=30),
    delimiter=st.sampled_from([",", ";", "\t", "|"]),
    decimal=st.sampled_from([".", ","]),
    header=st.booleans(),
    end=st.sampled_from(["\n", "\r\n"]),
)
def test_any_table_reads_back_whatever_its_marks(
    tmp_path: Path, rows: list[list[str]], delimiter: str, decimal: str, header: bool, end: str
) -> None:
    """Either the very numbers, or a refusal for two readings: never other numbers."""
    if delimiter == decimal:
        return
    lines = [delimiter.join(row).replace(".", decimal) for row in rows]
    names = [delimiter.join(["left", "mid", "right"])] if header else []
    try:
        stated = ReadOptions(rate_hz=10.0, time_column="none")
        got = whole(opened(tmp_path, end.join([*names, *lines]) + end, stated))
    except CaptureError as fault:
        refused = str(fault)
        assert "ambiguous" in refused
        return
    np.testing.assert_array_equal(got.T, np.array(rows, dtype=float))


@pytest.mark.parametrize(
    "form",
    ["2026-02-01 23:59:{:09.6f}", "2026/02/01T23:59:{:09.6f}Z", "23:59:{:09.6f}", "7:05:{:09.6f}"],
)
def test_times_of_day_and_dates_are_times(tmp_path: Path, form: str) -> None:
    """Loggers write the clock on the wall; only differences count."""
    rows = "".join(f"{form.format(k / 50)},{k % 3},{-k}\n" for k in range(200))
    capture = opened(tmp_path, "when,a,b\n" + rows, ReadOptions())
    # Seconds since 1970 keep seven decimals in a float64; the line averages over 200 rows.
    assert capture.rate_hz == pytest.approx(50, rel=1e-8)
    assert [c.name for c in capture.channels] == ["a", "b"]
    np.testing.assert_array_equal(whole(capture)[1], -np.arange(200.0))


@pytest.mark.parametrize("cell", ["2026-13-01 00:00:00", "25:61:00", "12:00", "2026-02-01"])
def test_what_is_no_time_of_day_is_no_number_either(tmp_path: Path, cell: str) -> None:
    """A date that does not exist must not become a sample."""
    with pytest.raises(CaptureError, match="no rows of numbers"):
        opened(tmp_path, f"{cell},1.5\n" * 20)
