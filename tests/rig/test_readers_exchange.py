"""Exchange formats of test and power engineering: universal files and COMTRADE records."""

from __future__ import annotations

import struct
from pathlib import Path

import numpy as np
import pytest

from rig.captures import Capture
from rig.errors import CaptureError
from rig.readers import ReadOptions, open_capture


def whole(capture: Capture) -> np.ndarray:
    """All samples of a capture, shape (channels, frames)."""
    columns = range(len(capture.channels))
    return np.concatenate([b.copy() for b in capture.blocks(columns, block_frames=11)], axis=1)


def dataset(
    values: list[str], *, points: int, even: int = 1, kind: int = 4, function: int = 1
) -> str:
    """A data set 58 as text; ``values`` are the cells of its rows."""
    head = f"    -1\n    58{'':74}\n" + f"{'point 1':<80}\n" + f"{'NONE':<80}\n" * 4
    head += f"{function:5d}{0:10d}{0:5d}{0:10d} {'NONE':>10}{1:10d}{3:4d}\n"
    head += f"{kind:10d}{points:10d}{even:10d}{0.0:13.5e}{1e-3 * even:13.5e}{0.0:13.5e}\n"
    head += f"{17:10d}{0:5d}{0:5d}{0:5d} {'Time':<20} {'s':<20}\n"
    head += f"{12:10d}{0:5d}{0:5d}{0:5d} {'Level':<20} {'m/s2':<20}\n"
    head += f"{0:10d}{0:5d}{0:5d}{0:5d} {'NONE':<20} {'NONE':<20}\n" * 2
    rows = ["".join(values[k : k + 4]) for k in range(0, len(values), 4)]
    return head + "\n".join(rows) + "\n    -1\n"


COUNT = [f"{k:20.12e}" for k in range(12)]


def opened(folder: Path, text: str, **options: object) -> Capture:
    """The capture in a universal file."""
    path = folder / "a.uff"
    path.write_text(text)
    return open_capture(path, options=ReadOptions(**options))  # type: ignore[arg-type]


@pytest.mark.parametrize(
    "change",
    [
        lambda text: text,
        lambda text: text.replace("e+", "D+"),
        lambda text: text.replace("\n", "\r\n"),
        lambda text: text.replace("\n", "   \n").replace("    -1   \n", "    -1\n"),
        lambda text: "    -1\n   151\nmodel\nmade here\n    -1\n" + text,
        lambda text: text + "\n\n",
    ],
)
def test_a_universal_file_is_read_in_the_forms_it_comes_in(tmp_path: Path, change: object) -> None:
    """Real files have D exponents, other line ends, trailing blanks and other data sets."""
    assert callable(change)
    capture = opened(tmp_path, change(dataset(COUNT, points=12)))
    assert capture.rate_hz == pytest.approx(1000)
    assert capture.channels[0].unit == "m/s2"
    np.testing.assert_array_equal(whole(capture), [np.arange(12)])


def test_columns_that_touch_are_told_apart(tmp_path: Path) -> None:
    """Thirteen columns leave no room before a minus sign and a three-digit exponent."""
    cells = [f"{-(k + 1) * 1.5:.5e}".rjust(13) for k in range(12)]
    text = dataset([cell.strip() for cell in cells], points=12, kind=2)
    capture = opened(tmp_path, text)
    np.testing.assert_allclose(whole(capture), [-(np.arange(12) + 1) * 1.5])


def test_abscissas_that_are_written_out_give_the_rate(tmp_path: Path) -> None:
    """Uneven spacing is declared by many writers that sample evenly."""
    cells = [cell for k in range(12) for cell in (f"{k * 2e-3:13.5e}", f"{k:20.12e}")]
    capture = opened(tmp_path, dataset(cells, points=12, even=0))
    assert capture.rate_hz == pytest.approx(500)
    np.testing.assert_array_equal(whole(capture), [np.arange(12)])


def test_a_rounded_increment_is_said_with_its_uncertainty(tmp_path: Path) -> None:
    """Five decimals of 1/51200 s are wrong by parts in a million."""
    text = dataset(COUNT, points=12).replace("1.00000e-03", "1.95313e-05")
    capture = opened(tmp_path, text)
    assert capture.rate_u_hz == pytest.approx(51200 * 1e-5 / 1.95313 / np.sqrt(12), rel=1e-3)
    assert abs(capture.rate_hz - 51200) < 2 * capture.rate_u_hz
    assert "1.95313e-05 s" in " ".join(capture.notes)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        (dataset(COUNT, points=13), "data set 1: 13 points declared, 12 present"),
        (dataset(COUNT, points=11), "data set 1: 11 points declared, 12 present"),
        (dataset(COUNT, points=0), "0 points declared"),
        (dataset([*COUNT[:-1], "  oops"], points=12), '"oops" is no number'),
        (dataset(COUNT, points=12, function=4), "holds no time function"),
        (dataset(COUNT, points=12).replace("  12", "  1x"), "header is damaged"),
        (dataset(COUNT, points=12) + dataset(COUNT[:8], points=8), "have 12 and 8 points"),
        (dataset(COUNT, points=12) + "rubbish\n", "does not open with -1"),
        (
            dataset(COUNT, points=12)
            + dataset(COUNT, points=12).replace("1.00000e-03", "2.0e-03    "),
            "different times",
        ),
    ],
)
def test_a_universal_file_that_contradicts_itself_is_refused(
    tmp_path: Path, text: str, words: str
) -> None:
    """Readers in use return what they find, or an empty list."""
    with pytest.raises(CaptureError, match=words):
        whole(opened(tmp_path, text))


CFG = """Umspannwerk Süd,recorder,1999
4,3A,1D
1,UL1,A,,kV,0.01,0.5,0,-32767,32767,110000,100,S
2,IL1,A,,A,0.1,0,12.5,-32767,32767,600,5,P
3,IL2,A,,A,0.1,0,,-32767,32767,600,5,P
1,trip,,,0
50.02
1
1000,6
01/02/2026,00:00:00.000000
01/02/2026,00:00:00.002000
ASCII
1
"""
DAT = "".join(f"{k + 1},{k * 1000},{10 * k},{-k},{99999 if k == 3 else k},0\n" for k in range(6))


def record(
    folder: Path, cfg: str = CFG, dat: str | bytes = DAT, names: str = "r.cfg r.dat"
) -> Path:
    """A record in a folder; the configuration's path."""
    cfg_name, dat_name = names.split()
    (folder / cfg_name).write_bytes(cfg.encode("latin-1"))
    (folder / dat_name).write_bytes(dat if isinstance(dat, bytes) else dat.encode())
    return folder / cfg_name


def test_values_skew_units_and_missing_samples_of_a_record(tmp_path: Path) -> None:
    """Value = a x number + b; 99999 is no sample; skew is handed on, never applied."""
    capture = open_capture(record(tmp_path))
    expected = [
        0.01 * 10 * np.arange(6) + 0.5,
        0.1 * -np.arange(6),
        [0, 0.1, 0.2, np.nan, 0.4, 0.5],
    ]
    np.testing.assert_allclose(whole(capture), expected)
    assert [c.unit for c in capture.channels] == ["kV", "A", "A"]
    assert [c.skew_s for c in capture.channels] == pytest.approx([0, 12.5e-6, 0])
    assert capture.start_text == "01/02/2026 00:00:00.000000"
    notes = " ".join(capture.notes)
    for words in (
        "skew is blank",
        "1 status channels left out",
        "skew 12.5 us",
        "secondary values",
    ):
        assert words in notes


@pytest.mark.parametrize(
    ("side", "factors"), [(None, (1, 1)), ("primary", (1100, 1)), ("secondary", (1, 5 / 600))]
)
def test_values_are_converted_to_the_wanted_side_of_the_transformer(
    tmp_path: Path, side: str | None, factors: tuple[float, float]
) -> None:
    """Recorded side S needs its ratio for primary values, P for secondary ones."""
    options = ReadOptions(transformer_side=side)  # type: ignore[arg-type]
    got = whole(open_capture(record(tmp_path), options=options))
    assert got[0, 5] == pytest.approx(1.0 * factors[0])
    assert got[1, 5] == pytest.approx(-0.5 * factors[1])


@pytest.mark.parametrize("names", ["R.CFG R.DAT", "r.cfg r.DAT", "a.b.cfg a.b.dat"])
def test_both_files_are_found_in_any_case_and_from_either_side(tmp_path: Path, names: str) -> None:
    """Systems that do not care about case have left all mixtures behind."""
    record(tmp_path, names=names)
    for name in names.split():
        if "DAT" not in name or "CFG" in names:
            assert open_capture(tmp_path / name).frame_count == 6


def test_a_binary_record_marks_missing_samples_by_the_lowest_number(tmp_path: Path) -> None:
    """Hexadecimal 8000 is no voltage."""
    cfg = CFG.replace("ASCII", "BINARY")
    dat = b"".join(
        struct.pack("<iIhhhH", k + 1, k * 1000, -32768 if k == 2 else k, k, k, 0) for k in range(6)
    )
    got = whole(open_capture(record(tmp_path, cfg, dat)))
    np.testing.assert_allclose(got[0], 0.5 + 0.01 * np.array([0, 1, np.nan, 3, 4, 5]))


def test_without_a_stated_rate_the_time_stamps_give_it(tmp_path: Path) -> None:
    """Zero rates mean "see the stamps"; their factor counts too."""
    cfg = CFG.replace("\n1\n1000,6\n", "\n0\n0,6\n").replace("ASCII\n1\n", "ASCII\n2\n")
    assert open_capture(record(tmp_path, cfg)).rate_hz == pytest.approx(500)


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ("1000,6", "1000,9", r"\.dat holds 6 of 9 samples"),
        ("1000,6", "1000,4", r"declares 4 samples, \.dat holds 6"),
        ("\n1\n1000,6", "\n2\n1000,3\n4000,6", r"two sample rates \(1000, 4000 Hz\)"),
        ("4,3A,1D", "4,x3A,1D", "line 2 of the configuration: number of analog channels"),
        ("4,3A,1D", "4,4A,1D", "line"),
        ("4,3A,1D", "1,0A,1D", "0 analog channels"),
        ("0.01,0.5", "zero,0.5", "multiplier a must be a number"),
        ("ASCII", "PACKED", "file type must be one of ASCII, BINARY, BINARY32, FLOAT32"),
        ("01/02/2026,00:00:00.002000\nASCII\n1\n", "", "configuration ends before the"),
    ],
)
def test_a_record_that_contradicts_itself_is_refused_with_the_line(
    tmp_path: Path, old: str, new: str, words: str
) -> None:
    """A reader in use fills what is missing with zeros."""
    assert old in CFG
    with pytest.raises(CaptureError, match=words):
        whole(open_capture(record(tmp_path, CFG.replace(old, new))))


def test_sample_numbers_that_skip_are_refused(tmp_path: Path) -> None:
    """The rate alone would close the gap without a word."""
    dat = DAT.replace("\n6,", "\n8,")
    with pytest.raises(CaptureError, match="sample numbers run from 1 to 8 over 6 samples"):
        open_capture(record(tmp_path, dat=dat))
