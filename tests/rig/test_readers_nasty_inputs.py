"""The nastiest inputs a bench produces: each refused in one line that says what to do.

Every file is generated here. A row names the input, the options it is read with, and words
that the one line must hold (or, for those that can be read, words of a note).
"""

from __future__ import annotations

import struct
from collections.abc import Callable
from pathlib import Path

import h5py
import numpy as np
import pytest
import scipy.io
import soundfile

from rig.captures import Capture
from rig.errors import CaptureError
from rig.readers import ReadOptions, open_capture

Maker = Callable[[Path], Path]


def whole(capture: Capture) -> np.ndarray:
    """All samples of a capture, shape (channels, frames)."""
    columns = range(len(capture.channels))
    return np.concatenate([b.copy() for b in capture.blocks(columns)], axis=1)


def wav(folder: Path, frames: int = 1000) -> bytes:
    """A plain two-channel WAV file as bytes."""
    soundfile.write(folder / "plain.wav", np.full((frames, 2), 0.5), 48000, subtype="PCM_16")
    return (folder / "plain.wav").read_bytes()


def patched(data: bytes, place: int, code: str, value: int) -> bytes:
    """The bytes with one number of the header replaced."""
    return data[:place] + struct.pack(code, value) + data[place + struct.calcsize(code) :]


def save(folder: Path, name: str, data: bytes | str) -> Path:
    """Write bytes or text to a file of the folder."""
    path = folder / name
    path.write_bytes(data if isinstance(data, bytes) else data.encode())
    return path


def wav_half(folder: Path) -> Path:
    return save(folder, "half.wav", wav(folder)[:2044])


def wav_unclosed(folder: Path) -> Path:
    return save(folder, "unclosed.wav", patched(wav(folder), 40, "<I", 0))


def wav_streamed(folder: Path) -> Path:
    return save(folder, "streamed.wav", patched(wav(folder), 40, "<I", 0xFFFFFFFF))


def wav_wrapped(folder: Path) -> Path:
    """More than 4 GiB, nearly all of it a hole that takes no room on the disk."""
    data = patched(wav(folder), 40, "<I", 4000)
    path = save(folder, "wrapped.wav", data)
    with open(path, "r+b") as file:
        file.truncate(2**32 + len(data))
    return path


def wav_understated(folder: Path) -> Path:
    data = patched(wav(folder, 20000), 40, "<I", 1000)
    return save(folder, "understated.wav", data)


def wav_of_text(folder: Path) -> Path:
    return save(folder, "text.wav", "time,ch1\n0,1\n1,2\n")


def wav_no_channel(folder: Path) -> Path:
    return save(folder, "none.wav", patched(wav(folder), 22, "<H", 0))


def wav_no_rate(folder: Path) -> Path:
    return save(folder, "norate.wav", patched(wav(folder), 24, "<I", 0))


def wav_no_data(folder: Path) -> Path:
    return save(folder, "nodata.wav", wav(folder)[:36] + b"LIST" + bytes(60))


def csv_two_readings(folder: Path) -> Path:
    return save(folder, "two.csv", "1,5\n2,5\n3,5\n4,5\n")


def csv_thousands(folder: Path) -> Path:
    rows = "".join(f"1.{k:03d};2.{k:03d}\n" for k in range(100, 120))
    return save(folder, "thousands.csv", rows)


def csv_nul_tail(folder: Path) -> Path:
    rows = "".join(f"{k / 100:.2f},{k}\n" for k in range(1002))
    return save(folder, "nul.csv", rows.encode() + bytes(5000))


def csv_broken_row(folder: Path) -> Path:
    rows = [f"{k / 1000:.4f};{k},{k}" for k in range(100)]
    rows[40] = "0.0123;1"
    return save(folder, "broken.csv", "\n".join(f"{r}" for r in rows).replace(",", ";") + "\n")


def csv_word_in_rows(folder: Path) -> Path:
    return save(folder, "word.csv", "t,v\n0,1\n0.1,2\npause\n0.2,3\n0.3,4\n")


def csv_coarse_times(folder: Path) -> Path:
    rows = "".join(f"{k / 51200:.3f},{k % 7}\n" for k in range(500))
    return save(folder, "coarse.csv", "time,v\n" + rows)


def csv_back_in_time(folder: Path) -> Path:
    half = "".join(f"{k / 1000},{k}\n" for k in range(830))
    return save(folder, "back.csv", "time,v\n" + half + half)


def csv_same_time(folder: Path) -> Path:
    rows = [f"{k / 1000},{k}\n" for k in range(100)]
    rows.insert(50, rows[49])
    return save(folder, "same.csv", "time,v\n" + "".join(rows))


def csv_pairs(folder: Path) -> Path:
    rows = "".join(f"{k / 1000},{-k}\n{k / 1000},{k}\n" for k in range(300))
    return save(folder, "pairs.csv", "time,v\n" + rows)


def csv_events(folder: Path) -> Path:
    times = np.cumsum(np.random.default_rng(5).exponential(0.01, 300))
    rows = "".join(f"{t:.9f},{k % 2}.5\n" for k, t in enumerate(times))
    return save(folder, "events.csv", "time,v\n" + rows)


def csv_empty(folder: Path) -> Path:
    return save(folder, "z.csv", "")


def csv_prose(folder: Path) -> Path:
    return save(folder, "prose.csv", "Dear 1st reader,\nthere are no numbers here\n")


def csv_cut_row(folder: Path) -> Path:
    rows = "".join(f"{k / 1000:.4f};{k}.25;7.5\n" for k in range(100))
    return save(folder, "cutrow.csv", "t;a;b\n" + rows[:-9])


def mat_table(folder: Path) -> Path:
    path = folder / "table.mat"
    with h5py.File(path, "w", userblock_size=512) as file:
        item = file.create_dataset("T", data=np.zeros((1, 6), dtype="u4"))
        item.attrs["MATLAB_class"] = np.bytes_("table")
        item.attrs["MATLAB_object_decode"] = 3
    with open(path, "r+b") as raw:
        raw.write(b"MATLAB 7.3 MAT-file".ljust(124) + b"\x00\x02IM")
    return path


def mat_cut(folder: Path) -> Path:
    scipy.io.savemat(folder / "m.mat", {"x": np.random.default_rng(1).normal(size=(2000, 2))})
    return save(folder, "cut.mat", (folder / "m.mat").read_bytes()[:20000])


def hdf5_cut(folder: Path) -> Path:
    with h5py.File(folder / "h.h5", "w") as file:
        file["x"] = np.zeros((50000, 2))
    return save(folder, "cut.h5", (folder / "h.h5").read_bytes()[:400000])


def hdf5_several(folder: Path) -> Path:
    with h5py.File(folder / "several.h5", "w") as file:
        file["a"] = np.zeros((4000, 4))
        file["b"] = np.zeros((5000, 2))
    return folder / "several.h5"


def npy_objects(folder: Path) -> Path:
    np.save(folder / "o.npy", np.array([{}, 1], dtype=object))
    return folder / "o.npy"


def npy_cut(folder: Path) -> Path:
    np.save(folder / "n.npy", np.zeros(16000))
    return save(folder, "cut.npy", (folder / "n.npy").read_bytes()[: 128 + 218 * 8])


def uff_text(points: int = 100) -> str:
    """A data set 58 of even real values, as its definition lays it out."""
    head = f"    -1\n    58{'':74}\n" + "".join(
        f"{line:<80}\n" for line in ["drive", *["NONE"] * 4]
    )
    head += f"{1:5d}{0:10d}{0:5d}{0:10d} {'NONE':>10}{1:10d}{3:4d} {'NONE':>10}{0:10d}{0:4d}\n"
    head += f"{2:10d}{points:10d}{1:10d}{0.0:13.5e}{1e-3:13.5e}{0.0:13.5e}\n"
    head += "".join(
        f"{kind:10d}{0:5d}{0:5d}{0:5d} {'NONE':<20} {'V':<20}\n" for kind in (17, 1, 0, 0)
    )
    values = [f"{k:13.5e}" for k in range(points)]
    rows = ["".join(values[k : k + 6]) for k in range(0, points, 6)]
    return head + "\n".join(rows) + "\n    -1\n"


def uff_half(folder: Path) -> Path:
    text = uff_text()
    return save(folder, "half.uff", text[: len(text) - 700])


def uff_of_other_sets(folder: Path) -> Path:
    return save(folder, "other.uff", "    -1\n   151\nmodel\n" + "x\n" * 6 + "    -1\n")


def comtrade_cfg(samples: int = 200, rates: str = "1\n4800,200", kind: str = "ASCII") -> str:
    """A configuration of two analog channels."""
    lines = ["bench,recorder,1999", "2,2A,0D"]
    lines += [f"{n},U{n},,,V,0.5,1.0,{s},-32767,32767,1,1,P" for n, s in ((1, "0"), (2, "26.0"))]
    lines += ["50", rates.replace("200", str(samples)), "01/02/2026,00:00:00.000000"]
    return "\n".join([*lines, "01/02/2026,00:00:00.010000", kind, "1"]) + "\n"


def comtrade_dat(samples: int = 200) -> str:
    return "".join(f"{k + 1},{round(k * 1e6 / 4800)},{k},{-k}\n" for k in range(samples))


def comtrade_short(folder: Path) -> Path:
    save(folder, "s.dat", comtrade_dat(100))
    return save(folder, "s.cfg", comtrade_cfg())


def comtrade_alone(folder: Path) -> Path:
    return save(folder, "c.cfg", comtrade_cfg())


def comtrade_two_rates(folder: Path) -> Path:
    save(folder, "r.dat", comtrade_dat())
    return save(folder, "r.cfg", comtrade_cfg(rates="2\n1200,100\n4800,200"))


def flac_cut(folder: Path) -> Path:
    noise = np.random.default_rng(3).uniform(-0.5, 0.5, (20000, 2))
    soundfile.write(folder / "f.flac", noise, 48000)
    return save(folder, "cut.flac", (folder / "f.flac").read_bytes()[:40000])


def zeros_only(folder: Path) -> Path:
    return save(folder, "zeros.bin", bytes(5000))


RATE = ReadOptions(rate_hz=1000)
REFUSED: list[tuple[Maker, ReadOptions, str]] = [
    (wav_half, RATE, "data chunk declares 1000 frames, file holds 500 (50 %)|--allow-truncated"),
    (wav_unclosed, RATE, "declares 0 bytes but 4.0 kB follow|without closing|--trust-file-length"),
    (wav_streamed, RATE, "never closed|--trust-file-length"),
    (wav_wrapped, RATE, "file length modulo 4 GiB|--trust-file-length or re-save as RF64 or W64"),
    (wav_understated, RATE, "declares 1000 bytes|follow that are no chunk|--trust-file-length"),
    (wav_of_text, RATE, 'not a WAV file (starts with "time,ch1"); looks like CSV|--format csv'),
    (wav_no_channel, RATE, "header gives 0 channels"),
    (wav_no_rate, ReadOptions(), "sample rate 0 Hz|--rate"),
    (wav_no_data, RATE, "no data chunk"),
    (flac_cut, RATE, "declares 20000 frames, and the last cannot be read|--allow-truncated"),
    (csv_two_readings, RATE, 'ambiguous: delimiter "," decimal "."|decimal ","|--decimal'),
    (csv_thousands, RATE, 'ambiguous: delimiter ";" decimal "."|decimal ","|--decimal'),
    (csv_nul_tail, RATE, "line 1003: NUL bytes after line 1002|pre-allocated|--stop-at-nul"),
    (csv_broken_row, RATE, 'line 41: 2 fields, 3 expected: "0.0123;1"'),
    (csv_word_in_rows, RATE, "line 4: 1 fields, 2 expected"),
    (csv_coarse_times, ReadOptions(), "too coarse to give the rate|--rate"),
    (csv_back_in_time, RATE, "row 831: time 0 s after 0.829 s|not in time order (two channels"),
    (csv_same_time, RATE, "row 51: time 0.049 s stands twice"),
    (csv_pairs, RATE, "every time stamp occurs twice: peak-detect export|single values"),
    (csv_events, RATE, "not evenly spaced in time"),
    (csv_empty, RATE, "is empty (0 bytes)"),
    (csv_prose, RATE, "no rows of numbers found (starts with"),
    (csv_cut_row, RATE, "2 fields, 3 expected|the file was cut|--allow-truncated"),
    (mat_table, RATE, '"T" is a table object, not a numeric array'),
    (mat_cut, RATE, "variable 1 declares|cut short"),
    (hdf5_cut, RATE, "cut short: 400 kB of 802 kB"),
    (hdf5_several, RATE, "choose --dataset: /a (4000x4), /b (5000x2)"),
    (npy_objects, RATE, "contains Python objects; refused (unsafe)"),
    (npy_cut, RATE, "declares 16000 values, holds 218"),
    (uff_half, RATE, "data set 1: 100 points declared,|present"),
    (uff_of_other_sets, RATE, "holds no time function (data set 58)"),
    (comtrade_short, RATE, ".dat holds 100 of 200 samples|--allow-truncated"),
    (comtrade_alone, RATE, "c.dat not found beside c.cfg"),
    (comtrade_two_rates, RATE, "two sample rates (1200, 4800 Hz): not supported"),
    (zeros_only, RATE, "is of no known format (starts with 00 00"),
]


@pytest.mark.parametrize(
    ("make", "options", "words"), REFUSED, ids=lambda v: getattr(v, "__name__", "")
)
def test_a_nasty_input_is_refused_in_one_line_with_its_remedy(
    tmp_path: Path, make: Maker, options: ReadOptions, words: str
) -> None:
    """The line is all a person sees at the bench: file, fault, evidence, remedy."""
    path = make(tmp_path)
    with pytest.raises(CaptureError) as caught:
        whole(open_capture(path, options=options))
    line = str(caught.value)
    assert line.startswith(f"{path}: ")
    assert line.endswith(".")
    assert line.isprintable()
    for word in words.split("|"):
        assert word in line


ACCEPTED: list[tuple[Maker, ReadOptions, int, str]] = [
    (wav_half, ReadOptions(allow_truncated=True), 500, "truncation accepted"),
    (wav_unclosed, ReadOptions(trust_file_length=True), 1000, "read to the end of the file"),
    (wav_streamed, ReadOptions(trust_file_length=True), 1000, "read to the end of the file"),
    (wav_no_rate, ReadOptions(rate_hz=44100), 1000, "overridden by 44100 Hz"),
    (csv_two_readings, ReadOptions(rate_hz=1, decimal=","), 4, ""),
    (csv_thousands, ReadOptions(rate_hz=1, decimal="."), 20, ""),
    (csv_nul_tail, ReadOptions(stop_at_nul=True), 1002, "stopped at the first NUL byte"),
    (csv_coarse_times, ReadOptions(rate_hz=51200), 500, "overridden by 51200 Hz"),
    (csv_cut_row, ReadOptions(allow_truncated=True), 99, "cut row at the end left out"),
    (csv_events, ReadOptions(rate_hz=1, time_column="none"), 300, ""),
    (hdf5_several, ReadOptions(rate_hz=1, dataset="a"), 4000, ""),
    (npy_cut, ReadOptions(rate_hz=1, allow_truncated=True), 218, "truncation accepted"),
    (uff_half, ReadOptions(allow_truncated=True), 47, "truncation accepted"),
    (comtrade_short, ReadOptions(allow_truncated=True), 100, "truncation accepted"),
]


@pytest.mark.parametrize(
    ("make", "options", "frames", "note"), ACCEPTED, ids=lambda v: getattr(v, "__name__", "")
)
def test_the_remedy_a_refusal_names_really_works(
    tmp_path: Path, make: Maker, options: ReadOptions, frames: int, note: str
) -> None:
    """A remedy that does not help is worse than none; what was accepted stands in the notes."""
    capture = open_capture(make(tmp_path), options=options)
    assert capture.frame_count == frames
    assert whole(capture).shape[1] == frames
    assert note in " ".join(capture.notes)


def test_utf16_text_with_a_mark_is_read_with_a_note(tmp_path: Path) -> None:
    """Office programs save "Unicode text" this way."""
    rows = "".join(f"{k / 100:.2f}\t{k}\n" for k in range(50))
    path = save(tmp_path, "u.txt", ("time\tv\n" + rows).encode("utf-16"))
    capture = open_capture(path)
    assert capture.rate_hz == pytest.approx(100)
    assert "utf-16-le" in " ".join(capture.notes)


def test_preamble_units_row_trailing_commas_and_footer_are_read_as_what_they_are(
    tmp_path: Path,
) -> None:
    """A scope export has all four at once; none of them is a sample."""
    text = "Model,bench 7\nPoints,40\n\ntime,left,right,\n(s),(V),(mV),\n"
    text += "".join(f"{k / 100:.2f},{k},{-k},\n" for k in range(40)) + "END\n"
    capture = open_capture(save(tmp_path, "p.csv", text))
    assert [(c.name, c.unit) for c in capture.channels] == [("left", "V"), ("right", "mV")]
    assert capture.frame_count == 40
    assert "delimiter comma" in capture.format
    assert "footer left out: 'END'" in capture.notes
    np.testing.assert_array_equal(whole(capture), [np.arange(40), -np.arange(40)])


def test_semicolons_decimal_commas_and_thousands_dots_are_read_right(tmp_path: Path) -> None:
    """Half of Europe writes numbers this way: 1.234,5 is more than a thousand."""
    rows = "".join(f"{k / 100:.2f};1.234,{k:02d};{k}\n".replace("0.", "0,", 1) for k in range(90))
    capture = open_capture(save(tmp_path, "de.csv", "Zeit;Weg;n\n" + rows))
    assert "delimiter semicolon, decimal ','" in capture.format
    assert whole(capture)[0, :3] == pytest.approx([1234.00, 1234.01, 1234.02])


def test_times_rounded_to_a_millisecond_give_the_rate_by_a_line_through_all(tmp_path: Path) -> None:
    """At 51.2 kHz most of the differences are zero: no single one of them gives the rate."""
    rows = "".join(f"{k / 51200:.3f},{k % 5}\n" for k in range(60000))
    capture = open_capture(save(tmp_path, "ms.csv", "time (s),v\n" + rows))
    # The stated uncertainty is one standard deviation of white rounding; rounding of a steady
    # clock is kinder than that, so three of them are ample.
    assert abs(capture.rate_hz - 51200) < 3 * capture.rate_u_hz < 1
    assert "rounded to 0.001 s" in " ".join(capture.notes)


def test_blank_skew_and_control_z_of_a_power_record_are_noted(tmp_path: Path) -> None:
    """Real configurations deviate in these two ways more often than not."""
    save(tmp_path, "z.dat", comtrade_dat() + "\x1a")
    text = comtrade_cfg().replace("1.0,0,", "1.0,,") + "\x1a"
    capture = open_capture(save(tmp_path, "z.cfg", text))
    notes = " ".join(capture.notes)
    assert "channel 1: skew is blank; taken as 0" in notes
    assert "control-Z" in notes
    assert capture.channels[1].skew_s == pytest.approx(26e-6)
    np.testing.assert_allclose(whole(capture)[0], 0.5 * np.arange(200) + 1.0)


@pytest.mark.parametrize("name", ["run[/red]ü 1.csv", "a\nb.csv", "çé%20;.csv"])
def test_odd_file_names_stay_on_one_line(tmp_path: Path, name: str) -> None:
    """A name is shown as it is, but never breaks the line or the mark-up of a terminal."""
    path = tmp_path / name.replace("/", "∕")
    path.write_text("no numbers\n")
    with pytest.raises(CaptureError) as caught:
        open_capture(path)
    assert "\n" not in str(caught.value)


def test_a_missing_file_a_folder_and_a_pipe_are_refused_without_waiting(tmp_path: Path) -> None:
    """Opening a pipe would wait for ever."""
    import os

    os.mkfifo(tmp_path / "pipe.wav")
    for name, word in (
        ("none.wav", "cannot be opened"),
        (".", "is a folder"),
        ("pipe.wav", "no reg"),
    ):
        with pytest.raises(CaptureError, match=word):
            open_capture(tmp_path / name)


def test_an_unknown_format_is_refused_with_the_known_ones(tmp_path: Path) -> None:
    """Never a silent fallback."""
    path = save(tmp_path, "a.csv", "1\n2\n3\n")
    with pytest.raises(CaptureError, match=r"format 'xls' is not known\. Known are wav, "):
        open_capture(path, options=ReadOptions(format="xls"))
