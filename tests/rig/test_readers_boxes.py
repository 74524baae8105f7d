"""Files of many named arrays: which is the signal, which the time, and where the rate stands."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
import scipy.io

from rig.captures import Capture
from rig.errors import CaptureError
from rig.readers import ReadOptions, open_capture

X = np.arange(200.0).reshape(100, 2)
Saver = Callable[[Path, dict[str, Any]], Path]


def whole(capture: Capture) -> np.ndarray:
    """All samples of a capture, shape (channels, frames)."""
    columns = range(len(capture.channels))
    return np.concatenate([b.copy() for b in capture.blocks(columns, block_frames=33)], axis=1)


def save_npz(folder: Path, content: dict[str, Any]) -> Path:
    np.savez(folder / "a.npz", **content)
    return folder / "a.npz"


def save_mat(folder: Path, content: dict[str, Any]) -> Path:
    scipy.io.savemat(folder / "a.mat", content, do_compression=True, oned_as="column")
    return folder / "a.mat"


def save_mat4(folder: Path, content: dict[str, Any]) -> Path:
    scipy.io.savemat(folder / "a.mat", content, format="4", oned_as="column")
    return folder / "a.mat"


def save_mat73(folder: Path, content: dict[str, Any]) -> Path:
    """Version 7.3 as it is laid out: HDF5 behind 512 bytes, axes turned round."""
    path = folder / "a.mat"
    with h5py.File(path, "w", userblock_size=512) as file:
        for name, value in content.items():
            table = np.atleast_2d(np.asarray(value, dtype=float))
            table = table if np.ndim(value) != 1 else table.T
            item = file.create_dataset(name, data=table.T)
            item.attrs["MATLAB_class"] = np.bytes_("double")
    with open(path, "r+b") as raw:
        raw.write(b"MATLAB 7.3 MAT-file".ljust(124) + b"\x00\x02IM")
    return path


def save_hdf5(folder: Path, content: dict[str, Any]) -> Path:
    with h5py.File(folder / "a.h5", "w") as file:
        for name, value in content.items():
            file[name] = value
    return folder / "a.h5"


SAVERS = [save_npz, save_mat, save_mat4, save_mat73, save_hdf5]


@pytest.mark.parametrize("save", SAVERS)
@pytest.mark.parametrize(
    ("content", "rate_hz"),
    [
        ({"x": X, "fs": 250.0}, 250.0),
        ({"x": X, "dt": 0.004}, 250.0),
        ({"x": X.T.copy(), "sample_rate": 250.0}, 250.0),
        ({"a": X[:, 0], "b": X[:, 1], "t": np.arange(100) / 250}, 250.0),
        ({"a": X[:, 0], "b": X[:, 1], "fs": 250.0, "gain": 3.0}, 250.0),
    ],
)
def test_the_signal_and_its_rate_are_found_where_the_choice_is_forced(
    tmp_path: Path, save: Saver, content: dict[str, Any], rate_hz: float
) -> None:
    """Every laboratory has its own names; the common shapes need no option."""
    capture = open_capture(save(tmp_path, content))
    assert capture.rate_hz == pytest.approx(rate_hz)
    np.testing.assert_array_equal(whole(capture), X.T)


@pytest.mark.parametrize("save", SAVERS)
def test_several_arrays_are_listed_and_chosen_by_name(tmp_path: Path, save: Saver) -> None:
    """A guess between two recordings would be silent."""
    path = save(tmp_path, {"first": X, "second": np.zeros((300, 3)), "fs": 10.0})
    with pytest.raises(
        CaptureError, match=r"choose --dataset: /?first \((100x2|2x100)\), /?second"
    ):
        open_capture(path)
    capture = open_capture(path, options=ReadOptions(dataset="first"))
    np.testing.assert_array_equal(whole(capture), X.T)
    with pytest.raises(CaptureError, match="no dataset 'third'; there is"):
        open_capture(path, options=ReadOptions(dataset="third"))


@pytest.mark.parametrize("save", SAVERS)
def test_two_named_arrays_become_two_channels_of_their_names(tmp_path: Path, save: Saver) -> None:
    """Channels saved one by one are the commonest layout of all."""
    path = save(tmp_path, {"a": X[:, 0], "b": X[:, 1], "fs": 10.0})
    capture = open_capture(path, options=ReadOptions(dataset="b,a"))
    assert [c.name for c in capture.channels] == ["b", "a"]
    np.testing.assert_array_equal(whole(capture), X.T[::-1])


@pytest.mark.parametrize("save", SAVERS)
def test_a_rate_of_another_name_is_found_by_that_name(tmp_path: Path, save: Saver) -> None:
    """--rate-from is for the names nobody foresaw."""
    path = save(tmp_path, {"x": X, "takt": 77.0})
    with pytest.raises(CaptureError, match="states no sample rate"):
        open_capture(path)
    assert open_capture(path, options=ReadOptions(rate_attribute="takt")).rate_hz == 77.0
    with pytest.raises(CaptureError, match="no attribute or scalar 'tkat'"):
        open_capture(path, options=ReadOptions(rate_attribute="tkat"))


@pytest.mark.parametrize("save", [save_npz, save_mat, save_hdf5])
def test_a_gap_in_an_array_of_times_is_refused(tmp_path: Path, save: Saver) -> None:
    """Values and times stand apart here: nothing could be put into the place of the gap."""
    times = np.delete(np.arange(101) / 250, 50)
    with pytest.raises(CaptureError, match=r"times '/?t': gap at 0\.2-0\.204 s: 1 samples"):
        open_capture(save(tmp_path, {"x": X[:, 0], "t": times}))


def test_structures_of_a_mat_file_are_looked_into(tmp_path: Path) -> None:
    """Many programs save one structure with everything in it."""
    path = save_mat(tmp_path, {"run": {"sig": {"y": X}, "fs": 50.0, "operator": "text"}})
    capture = open_capture(path)
    assert capture.rate_hz == 50.0
    np.testing.assert_array_equal(whole(capture), X.T)


@pytest.mark.parametrize("dtype", ["i1", "u1", "i2", "u2", "i4", "u4", "f4", "f8"])
@pytest.mark.parametrize("save", [save_npz, save_mat, save_hdf5])
def test_every_kind_of_number_keeps_its_value(tmp_path: Path, save: Saver, dtype: str) -> None:
    """Short integers leave as float32, which holds them exactly; longer ones as float64."""
    kind = np.dtype(dtype)
    limits = np.iinfo(kind) if kind.kind in "iu" else np.finfo(kind)
    values = np.array([0, 1, limits.max, limits.min, 7, 9], dtype=kind)
    block = whole(open_capture(save(tmp_path, {"x": values, "fs": 1.0})))
    assert block.dtype == (np.float32 if dtype in ("i1", "u1", "i2", "u2", "f4") else np.float64)
    np.testing.assert_array_equal(block[0], values.astype(np.float64))


@pytest.mark.parametrize("save", [save_npz, save_mat, save_hdf5])
def test_what_is_no_array_of_numbers_is_named_as_what_it_is(tmp_path: Path, save: Saver) -> None:
    """The person must know which variable to save differently."""
    with pytest.raises(CaptureError, match=r"complex|no real numbers"):
        open_capture(save(tmp_path, {"z": np.ones(50) * 1j, "fs": 1.0}))


def test_text_cells_and_sparse_arrays_of_a_mat_file_are_named(tmp_path: Path) -> None:
    """Each says what to save instead."""
    cell = np.empty(2, dtype=object)
    cell[:] = [np.ones(9), "a"]
    sparse = scipy.sparse.csc_matrix(np.eye(9))
    for value, word in ((cell, "is a cell array"), ("words", "is text"), (sparse, "is a sparse")):
        with pytest.raises(CaptureError, match=word):
            open_capture(save_mat(tmp_path, {"v": value}), options=ReadOptions(rate_hz=1))


def test_fields_of_an_hdf5_table_are_channels_with_the_units_of_the_dataset(
    tmp_path: Path,
) -> None:
    """Recorders write rows of named fields."""
    table = np.zeros(50, dtype=[("left", "f4"), ("right", "i2")])
    table["left"], table["right"] = np.arange(50) / 4, np.arange(50)
    with h5py.File(tmp_path / "a.h5", "w") as file:
        item = file.create_dataset("run/rows", data=table)
        item.attrs["sample_rate"] = 20.0
        item.attrs["units"] = "mm"
    capture = open_capture(tmp_path / "a.h5")
    assert [(c.name, c.unit) for c in capture.channels] == [("left", "mm"), ("right", "mm")]
    np.testing.assert_array_equal(whole(capture), [np.arange(50) / 4, np.arange(50)])


@pytest.mark.parametrize("chunks", [(7, 1), (64, 4), (1000, 4), (33, 2)])
def test_chunks_of_any_shape_give_the_same_samples(tmp_path: Path, chunks: tuple[int, int]) -> None:
    """Blocks and chunks never end at the same frame."""
    values = np.random.default_rng(1).normal(size=(1000, 4))
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_dataset("x", data=values, chunks=chunks, compression="gzip")
    capture = open_capture(tmp_path / "a.h5", options=ReadOptions(rate_hz=1))
    got = np.concatenate([b.copy() for b in capture.blocks([3, 1], start_frame=5)], axis=1)
    np.testing.assert_array_equal(got, values[5:, [3, 1]].T)


def test_a_mat_file_of_the_other_byte_order_is_read(tmp_path: Path) -> None:
    """Old workstations wrote the big end first; built here from the definition."""
    import struct

    def element(kind: int, body: bytes) -> bytes:
        return struct.pack(">II", kind, len(body)) + body + bytes(-len(body) % 8)

    flags = element(6, struct.pack(">II", 6, 0))
    parts = flags + element(5, struct.pack(">ii", 100, 2)) + element(1, b"x")
    matrix = element(14, parts + element(9, X.T.astype(">f8").tobytes()))
    head = b"MATLAB 5.0 MAT-file".ljust(124) + struct.pack(">H", 0x0100) + b"MI"
    (tmp_path / "b.mat").write_bytes(head + matrix)
    capture = open_capture(tmp_path / "b.mat", options=ReadOptions(rate_hz=1))
    np.testing.assert_array_equal(whole(capture), X.T)


def test_a_missing_hdf5_library_names_the_extra(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The commonest first error of a new installation."""
    import sys

    path = save_hdf5(tmp_path, {"x": X})
    monkeypatch.setitem(sys.modules, "h5py", None)
    with pytest.raises(CaptureError, match=r"needs h5py\. Install lockspan\[formats\]"):
        open_capture(path, options=ReadOptions(rate_hz=1))


def test_a_file_that_another_program_holds_locked_is_read_all_the_same(tmp_path: Path) -> None:
    """A recorder that still runs, or a network share, must not keep a reader out."""
    fcntl = pytest.importorskip("fcntl")
    path = save_hdf5(tmp_path, {"x": X, "fs": 10.0})
    with path.open("rb") as held:
        fcntl.flock(held, fcntl.LOCK_EX)
        np.testing.assert_array_equal(whole(open_capture(path)), X.T)
