"""Each format written by a witness library: read back equal, and cut at any byte.

A cut file may be refused, or read with a note; it may never be a quiet shorter record, and
never raise anything but the one refusal a user can repair.
"""

from __future__ import annotations

import os
import warnings
from collections.abc import Callable
from pathlib import Path
from typing import Any

import comtrade
import h5py
import numpy as np
import pytest
import pyuff
import scipy.io
import soundfile
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from rig.captures import Capture
from rig.errors import CaptureError
from rig.readers import READERS, ReadOptions, open_capture

RATE_HZ = 4800.0
STATED = ReadOptions(rate_hz=RATE_HZ)
QUICK = settings(
    max_examples=int(os.environ.get("LOCKSPAN_EXAMPLES", "10")),
    deadline=None,
    # The folder is shared by the examples of a test: each writes its file anew.
    suppress_health_check=[HealthCheck.function_scoped_fixture],
)
Writer = Callable[[Path, np.ndarray], Path]


def whole(capture: Capture, block_frames: int = 37) -> np.ndarray:
    """All samples of a capture, shape (channels, frames)."""
    columns = range(len(capture.channels))
    blocks = [b.copy() for b in capture.blocks(columns, block_frames=block_frames)]
    return np.concatenate(blocks, axis=1)


def sound_writer(container: str, subtype: str) -> Writer:
    """A writer through the sound library; values must be exact in the subtype."""

    def write(folder: Path, values: np.ndarray) -> Path:
        path = folder / f"a.{container.lower()}"
        soundfile.write(path, values, int(RATE_HZ), subtype=subtype, format=container)
        return path

    return write


def write_csv(folder: Path, values: np.ndarray) -> Path:
    times = np.arange(len(values)) / RATE_HZ
    names = ",".join(["time (s)", *(f"ch{c}" for c in range(values.shape[1]))])
    table = np.column_stack([times, values])
    np.savetxt(folder / "a.csv", table, delimiter=",", header=names, comments="")
    return folder / "a.csv"


def write_csv_semicolons(folder: Path, values: np.ndarray) -> Path:
    times = np.arange(len(values)) / RATE_HZ
    names = ";".join(["time (s)", *(f"ch{c}" for c in range(values.shape[1]))])
    rows = [";".join(f"{v:.17g}" for v in row) for row in np.column_stack([times, values])]
    (folder / "d.csv").write_text("\n".join([names, *rows]).replace(".", ",") + "\n")
    return folder / "d.csv"


def write_npy(folder: Path, values: np.ndarray) -> Path:
    np.save(folder / "a.npy", values)
    return folder / "a.npy"


def write_npz(folder: Path, values: np.ndarray) -> Path:
    np.savez_compressed(folder / "a.npz", x=values, fs=RATE_HZ)
    return folder / "a.npz"


def mat_writer(version: str, packed: bool) -> Writer:
    """A writer through scipy.io."""

    def write(folder: Path, values: np.ndarray) -> Path:
        path = folder / "a.mat"
        content = {"fs": RATE_HZ, "x": values}
        scipy.io.savemat(path, content, format=version, do_compression=packed)
        return path

    return write


def hdf5_writer(**packing: Any) -> Writer:
    """A writer through h5py."""

    def write(folder: Path, values: np.ndarray) -> Path:
        with h5py.File(folder / "a.h5", "w") as file:
            item = file.create_dataset("run/x", data=values, chunks=(7, 1), **packing)
            item.attrs["fs"] = RATE_HZ
        return folder / "a.h5"

    return write


def write_mat73(folder: Path, values: np.ndarray) -> Path:
    """Version 7.3 as it is laid out: HDF5 behind 512 bytes, axes turned round."""
    path = folder / "a.mat"
    with h5py.File(path, "w", userblock_size=512) as file:
        for name, table in (("fs", np.array([[RATE_HZ]])), ("x", values.T)):
            file.create_dataset(name, data=table).attrs["MATLAB_class"] = np.bytes_("double")
    with path.open("r+b") as raw:
        raw.write(b"MATLAB 7.3 MAT-file".ljust(124) + b"\x00\x02IM")
    return path


def write_csv_keyed(folder: Path, values: np.ndarray) -> Path:
    rows = (
        " ".join([f"t={k / RATE_HZ!r}", *(f"ch{c}={v!r}" for c, v in enumerate(row))])
        for k, row in enumerate(values.tolist())
    )
    (folder / "k.csv").write_text("\n".join(rows) + "\n")
    return folder / "k.csv"


def uff_writer(binary: int) -> Writer:
    """A writer through pyuff: one data set a channel."""

    def write(folder: Path, values: np.ndarray) -> Path:
        path = folder / "a.uff"
        path.unlink(missing_ok=True)
        common = UFF_FIELDS | {"binary": binary, "x": np.arange(len(values)) / RATE_HZ}
        sets = [
            common | {"id1": f"channel {c}", "rsp_node": c + 1, "data": values[:, c]}
            for c in range(values.shape[1])
        ]
        with warnings.catch_warnings():
            # The library leaves its files unclosed.
            warnings.simplefilter("ignore", ResourceWarning)
            pyuff.UFF(str(path)).write_sets(sets, mode="add")
        return path

    return write


UFF_FIELDS = {
    "type": 58,
    "func_type": 1,
    "rsp_dir": 3,
    "ref_node": 0,
    "ref_dir": 0,
    "ord_data_type": 4,
    "abscissa_spacing": 1,
    "abscissa_spec_data_type": 17,
    "ordinate_spec_data_type": 0,
    "orddenom_spec_data_type": 0,
    "z_axis_spec_data_type": 0,
    "ordinate_axis_units_lab": "V",
    "rsp_ent_name": "NONE",
    "ref_ent_name": "NONE",
}


def comtrade_writer(kind: str, revision: str = "1999", *, combined: bool = False) -> Writer:
    """A writer of power-system records; values must be whole numbers of a 16-bit word."""

    def write(folder: Path, values: np.ndarray) -> Path:
        text = comtrade_configuration(values, kind, revision)
        data = comtrade_data(values, kind)
        if combined:
            head = f"--- file type: CFG ---\n{text}--- file type: INF ---\n"
            size = "" if kind == "ASCII" else f": {len(data)}"
            head += f"--- file type: HDR ---\n--- file type: DAT {kind}{size} ---\n"
            (folder / "a.cff").write_bytes(head.encode() + data)
            return folder / "a.cff"
        (folder / "a.cfg").write_text(text)
        (folder / "a.dat").write_bytes(data)
        return folder / "a.cfg"

    return write


def comtrade_configuration(values: np.ndarray, kind: str, revision: str) -> str:
    """A configuration with a status channel; scale 0.25 and offset 1 keep values exact."""
    channels = values.shape[1]
    station = "bench,recorder" if revision == "1991" else f"bench,recorder,{revision}"
    ends = "" if revision == "1991" else ",100,1,P"
    lines = [station, f"{channels + 1},{channels}A,1D"]
    lines += [
        f"{c + 1},U{c + 1},,,V,0.25,1.0,{c * 5.0},-32767,32767{ends}" for c in range(channels)
    ]
    lines += ["1,on,,,0", "50", "1", f"{RATE_HZ:.0f},{len(values)}"]
    lines += ["01/02/2026,00:00:00.000000", "01/02/2026,00:00:00.010000", kind]
    lines += [] if revision == "1991" else ["1"]
    lines += ["0,0", "0,0"] if revision == "2013" else []
    return "\n".join(lines) + "\n"


def comtrade_data(values: np.ndarray, kind: str) -> bytes:
    """The samples of a record, with one status word."""
    numbers = np.rint((values - 1.0) / 0.25).astype(np.int64)
    stamps = np.rint(np.arange(len(values)) * 1e6 / RATE_HZ).astype(np.int64)
    if kind == "ASCII":
        rows = np.column_stack([np.arange(1, len(values) + 1), stamps, numbers, stamps % 2])
        return "".join(",".join(map(str, row)) + "\n" for row in rows).encode()
    code = {"BINARY": "<i2", "BINARY32": "<i4", "FLOAT32": "<f4"}[kind]
    form = [("n", "<i4"), ("t", "<u4"), ("a", code, (values.shape[1],)), ("d", "<u2")]
    table = np.zeros(len(values), dtype=form)
    table["n"], table["t"], table["a"] = np.arange(1, len(values) + 1), stamps, numbers
    return table.tobytes()


WRITERS: dict[str, Writer] = {
    "wav 16": sound_writer("WAV", "PCM_16"),
    "wav 24": sound_writer("WAV", "PCM_24"),
    "wav float": sound_writer("WAV", "FLOAT"),
    "wav companded": sound_writer("WAV", "ULAW"),
    "rf64": sound_writer("RF64", "PCM_16"),
    "w64": sound_writer("W64", "PCM_24"),
    "aiff": sound_writer("AIFF", "PCM_24"),
    "caf": sound_writer("CAF", "PCM_16"),
    "flac": sound_writer("FLAC", "PCM_16"),
    "csv": write_csv,
    "csv semicolons": write_csv_semicolons,
    "csv keyed": write_csv_keyed,
    "npy": write_npy,
    "npz": write_npz,
    "mat 4": mat_writer("4", packed=False),
    "mat 5": mat_writer("5", packed=False),
    "mat 7": mat_writer("5", packed=True),
    "mat 7.3": write_mat73,
    "hdf5": hdf5_writer(),
    "hdf5 packed": hdf5_writer(compression=1, shuffle=True),
    "uff58": uff_writer(0),
    "uff58b": uff_writer(1),
    "comtrade ascii 1991": comtrade_writer("ASCII", "1991"),
    "comtrade ascii 2013": comtrade_writer("ASCII", "2013"),
    "comtrade binary": comtrade_writer("BINARY"),
    "comtrade binary32": comtrade_writer("BINARY32", "2013"),
    "comtrade float32": comtrade_writer("FLOAT32", "2013"),
    "comtrade combined ascii": comtrade_writer("ASCII", "2013", combined=True),
    "comtrade combined binary": comtrade_writer("BINARY", "2013", combined=True),
}


def values_for(name: str, frames: int, channels: int, seed: int) -> np.ndarray:
    """Random values that the format holds exactly: whole 16-bit steps, scaled where due."""
    steps = np.random.default_rng(seed).integers(-32000, 32000, (frames, channels))
    if name.startswith("comtrade"):
        return steps * 0.25 + 1.0
    return steps / 32768


@pytest.mark.parametrize("name", WRITERS)
@QUICK
@given(frames=st.integers(8, 300), channels=st.integers(1, 3), seed=st.integers(0, 2**31))
def test_what_a_witness_wrote_is_read_back_equal(
    tmp_path: Path, name: str, frames: int, channels: int, seed: int
) -> None:
    """Length, rate, order of channels and every value survive, whatever the format."""
    values = values_for(name, frames, channels, seed)
    path = WRITERS[name](tmp_path, values)
    expected = witnessed(name, path, values)
    capture = open_capture(path, options=STATED if name == "npy" else ReadOptions())
    # Rounded time stamps and five-digit increments limit what a file can say of its rate.
    assert capture.rate_hz == pytest.approx(RATE_HZ, rel=1e-5)
    # Text of a universal file has twelve digits; everything else is exact.
    tolerance = 1e-11 if name == "uff58" else 0.0
    np.testing.assert_allclose(whole(capture), expected, rtol=tolerance, atol=0)


def witnessed(name: str, path: Path, values: np.ndarray) -> np.ndarray:
    """What the witness library reads from the file, shape (channels, frames)."""
    if name == "wav companded":
        return soundfile.read(path, always_2d=True)[0].T
    return values.T


@pytest.mark.parametrize("kind", ["ASCII", "BINARY", "BINARY32", "FLOAT32"])
@QUICK
@given(seed=st.integers(0, 2**31), channels=st.integers(1, 3))
def test_power_records_agree_with_a_second_reader(
    tmp_path: Path, kind: str, seed: int, channels: int
) -> None:
    """Our own writer and reader could share a misreading of the standard; a witness does not."""
    values = values_for("comtrade", 50, channels, seed)
    path = comtrade_writer(kind, "2013")(tmp_path, values)
    witness = comtrade.Comtrade()
    witness.load(str(path), str(path.with_suffix(".dat")))
    np.testing.assert_allclose(whole(open_capture(path)), witness.analog, rtol=1e-6)


@pytest.mark.parametrize("name", WRITERS)
@QUICK
@given(share=st.floats(0, 1), allow=st.booleans(), seed=st.integers(0, 1000))
def test_a_file_cut_at_any_byte_is_refused_or_noted(
    tmp_path: Path, name: str, share: float, allow: bool, seed: int
) -> None:
    """Half a copy must never pass for a shorter recording."""
    values = values_for(name, 60, 2, seed)
    path = WRITERS[name](tmp_path, values)
    options = ReadOptions(rate_hz=RATE_HZ, allow_truncated=allow)
    full = open_capture(path, options=options)
    expected, known = whole(full), set(full.notes)
    cut = path.with_suffix(".dat") if path.suffix == ".cfg" and seed % 2 else path
    data = cut.read_bytes()
    cut.write_bytes(data[: int(share * (len(data) - 1))])
    if name.startswith("csv") and cut.read_bytes()[-1:] == b"\n":
        return  # text declares no length: a cut between two rows cannot be told from an end
    try:
        capture = open_capture(path, options=options)
        got = whole(capture)
    except CaptureError:
        return
    # A universal file that ends between two data sets is whole: it declares no number of them.
    few = expected[: len(got)] if name.startswith("uff58") else expected
    complete = got.shape == few.shape and np.array_equal(got, few)
    assert complete or set(capture.notes) - known, f"quiet cut: {got.shape}"


@pytest.mark.parametrize("name", WRITERS)
@QUICK
@given(
    places=st.lists(st.tuples(st.floats(0, 1), st.integers(0, 255)), min_size=1, max_size=6),
    head=st.booleans(),
)
def test_damaged_bytes_raise_nothing_but_the_one_refusal(
    tmp_path: Path, name: str, places: list[tuple[float, int]], head: bool
) -> None:
    """A flipped bit in a header must not become a traceback, a hang or a heap of memory."""
    path = WRITERS[name](tmp_path, values_for(name, 60, 2, 1))
    data = bytearray(path.read_bytes())
    reach = min(len(data), 200) if head else len(data)
    for share, value in places:
        data[int(share * (reach - 1))] = value
    path.write_bytes(data)
    try:
        capture = open_capture(path, options=STATED)
        for _ in capture.blocks(range(min(len(capture.channels), 8)), stop_frame=1000):
            pass
    except CaptureError:
        return


def test_every_reader_has_a_witness() -> None:
    """A reader that no other library has checked only agrees with itself."""
    assert {name.split()[0].removesuffix("b") for name in WRITERS} == set(READERS)


@pytest.mark.parametrize("name", READERS)
def test_no_other_reader_gives_the_same_samples(
    tmp_path: Path, name: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The round trips above would fail without the row of the reader they are there for."""
    writer = next(w for w in WRITERS if w.split()[0].removesuffix("b") == name)
    values = values_for(writer, 40, 2, 1)
    path = WRITERS[writer](tmp_path, values)
    np.testing.assert_allclose(whole(open_capture(path, options=STATED)), values.T, rtol=1e-11)
    monkeypatch.delitem(READERS, name)
    try:
        got = whole(open_capture(path, options=STATED))
    except CaptureError:
        return
    assert got.shape != values.T.shape or not np.allclose(got, values.T)
