"""Inputs that once broke a reader; each names the symptom it used to show."""

from __future__ import annotations

from pathlib import Path

import pytest

from rig.errors import CaptureError
from rig.readers import ReadOptions, open_capture

BROKEN = Path(__file__).resolve().parents[2] / "fixtures" / "broken"
STATED = ReadOptions(rate_hz=1000.0)


@pytest.mark.parametrize(
    ("name", "words"),
    [
        # used to end in OSError: the walk sought a place that no file can have
        ("caf-chunk-size-near-2-63.caf", "no usable description or data chunk"),
        # used to end in TokenError, out of numpy's parser of headers
        ("npy-unbalanced-header.npy", "header of the NPY array is damaged"),
        # used to warn on the standard error stream, out of numpy
        ("npy-texts-under-their-old-name.npy", "header of the NPY array is damaged"),
        # used to end in ZeroDivisionError: the step of the clock was no normal number
        ("csv-times-smaller-than-any-clock.csv", "too coarse|stands twice"),
        # used to warn on the standard error stream: a row had no cell left to read
        ("csv-row-of-nothing-but-a-comma.csv", "3 fields, 1 expected"),
        # used to end the whole process inside the library that read MAT files before
        ("mat-that-ended-the-process.mat", "damaged|cut short|no MAT file|states no|no array"),
        # used to end in KeyError: the listing had worked, the opening did not
        ("hdf5-object-past-the-end.h5", "cannot be read as HDF5"),
        ("hdf5-object-of-no-type.h5", "cannot be read as HDF5"),
        # used to keep the library busy for ever: an object of no size in a heap of texts
        ("hdf5-heap-walked-for-ever.h5", "heap of texts at byte 6192 is damaged"),
        # used to hand out foreign memory: the index named one chunk twice, once with no bytes
        ("hdf5-index-of-chunks-with-one-twice.h5", "index of chunks|holds 0 of 56 bytes"),
        # used to take two gigabytes of memory: an object's header declared so many bytes
        ("mat-header-of-two-gigabytes.mat", "2281701376 bytes declared"),
        # used to end in OSError: the archive placed a part where no file can be read
        ("npz-part-at-no-place.npz", "of the archive cannot be read|damaged"),
        # used to end in ValueError: a superscript two counts as a digit, but not as a number
        ("uff58-superscript-for-a-count.uff", "data set 1"),
    ],
)
def test_an_input_that_once_broke_a_reader_is_refused(name: str, words: str) -> None:
    """The corpus keeps a repaired fault repaired."""
    stated = not name.startswith("csv")
    with pytest.raises(CaptureError, match=words):
        list(open_capture(BROKEN / name, options=STATED if stated else ReadOptions()).blocks([0]))


def test_every_broken_input_has_its_row() -> None:
    """An input without a test would be kept for nothing."""
    tested = Path(__file__).read_text(encoding="utf-8")
    for path in BROKEN.iterdir():
        assert path.name in tested


def test_a_square_of_whole_numbers_with_commas_used_to_be_guessed(tmp_path: Path) -> None:
    """Used to read "1,5" at its comma without a word; two readings fit, so it is refused."""
    path = tmp_path / "a.csv"
    path.write_text("1,5\n2,5\n3,5\n")
    with pytest.raises(CaptureError, match="ambiguous"):
        open_capture(path, options=STATED)


def test_a_repeated_row_at_full_digits_used_to_pass_as_rounding(tmp_path: Path) -> None:
    """Used to shift every later row by one sample: times of whole steps looked like rounding."""
    rows = [f"{k / 1000},{k}\n" for k in range(100)]
    rows.insert(50, rows[49])
    path = tmp_path / "a.csv"
    path.write_text("time,v\n" + "".join(rows))
    with pytest.raises(CaptureError, match=r"row 51: time 0\.049 s stands twice"):
        open_capture(path)


def test_a_column_of_years_used_to_pass_as_time(tmp_path: Path) -> None:
    """Used to give 365 Hz for a table of days whose first column is the year."""
    rows = "".join(f"{1962 + k // 365} {k % 365 // 31 + 1} {k * 0.1:.3f}\n" for k in range(2000))
    path = tmp_path / "a.txt"
    path.write_text(rows)
    with pytest.raises(CaptureError, match="states no sample rate"):
        open_capture(path)


def test_single_precision_universal_files_written_as_double_used_to_read_as_noise(
    tmp_path: Path,
) -> None:
    """Used to hand out garbage with a note; the closing -1 is not where the header puts it."""
    lines = [f"    -1\n    58b{1:6d}{2:6d}{11:12d}{400:12d}{0:6d}{0:6d}{0:12d}{0:12d}\n"]
    lines += [f"{'NONE':<80}\n"] * 5 + [f"{1:5d}{0:10d}{0:5d}{0:10d} {'NONE':>10}\n"]
    lines += [f"{2:10d}{100:10d}{1:10d}{0.0:13.5e}{1e-3:13.5e}{0.0:13.5e}\n"]
    lines += [f"{0:10d}{0:5d}{0:5d}{0:5d} {'NONE':<20} {'V':<20}\n"] * 4
    path = tmp_path / "a.uff"
    path.write_bytes("".join(lines).encode() + bytes(800) + b"    -1\n")
    with pytest.raises(CaptureError, match="100 points of 4 bytes are not followed by"):
        open_capture(path)
