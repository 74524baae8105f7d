"""Chunks of HDF5 datasets: read equal to the library, and measured where the library trusts."""

from __future__ import annotations

import tracemalloc
import zlib
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import h5py
import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from rig.captures import Capture
from rig.errors import CaptureError
from rig.readers import ReadOptions, open_capture
from rig.readers.hdf5chunks import _Walk, chunk_index

STATED = ReadOptions(rate_hz=1000.0, dataset="x")
SHARED_FOLDER = [HealthCheck.function_scoped_fixture]


def whole(capture: Capture, start_frame: int = 0) -> np.ndarray:
    """All samples of a capture from a frame on, shape (channels, frames)."""
    columns = range(len(capture.channels))
    blocks = capture.blocks(columns, block_frames=33, start_frame=start_frame)
    return np.concatenate([b.copy() for b in blocks], axis=1)


@settings(max_examples=30, deadline=None, suppress_health_check=SHARED_FOLDER)
@given(
    frames=st.integers(5, 120),
    channels=st.integers(1, 4),
    steps=st.tuples(st.integers(1, 50), st.integers(1, 4)),
    packing=st.sampled_from(
        [{}, {"compression": 4}, {"compression": 1, "shuffle": True}, {"compression": "lzf"}]
    ),
    code=st.sampled_from(["<f8", ">f4", "<i2", ">i4", "u1"]),
    turned=st.booleans(),
    start=st.integers(0, 4),
)
def test_chunks_of_every_shape_packing_and_type_are_read_as_they_were_written(
    tmp_path: Path,
    frames: int,
    channels: int,
    steps: tuple[int, int],
    packing: dict[str, Any],
    code: str,
    turned: bool,
    start: int,
) -> None:
    """Chunks stick out over the edges of a dataset; none of what sticks out is a sample."""
    values = (np.arange(frames * channels) % 120).reshape(frames, channels).astype(code)
    table, chunks = (values.T, steps[::-1]) if turned else (values, steps)
    chunks = tuple(min(c, s) for c, s in zip(chunks, table.shape, strict=True))
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_dataset("x", data=table, chunks=chunks, **packing)
    expected = values.T if frames >= channels else values
    got = whole(open_capture(tmp_path / "a.h5", options=STATED), start)
    np.testing.assert_array_equal(got, expected[:, start:].astype(float))


@pytest.mark.parametrize("packing", [{}, {"compression": "gzip"}, {"shuffle": True}])
def test_a_chunk_that_holds_too_little_is_refused(tmp_path: Path, packing: dict[str, Any]) -> None:
    """The library hands out whatever stands behind it in memory, other with each reading."""
    with h5py.File(tmp_path / "a.h5", "w") as file:
        item = file.create_dataset("x", shape=(400,), dtype="f8", chunks=(200,), **packing)
        few, many = np.ones(3).tobytes(), np.ones(200).tobytes()
        for place, body in ((0, few), (200, many)):
            item.id.write_direct_chunk((place,), zlib.compress(body) if packing else body)
    with pytest.raises(CaptureError, match=r"cannot be read as HDF5 \(.*chunk"):
        whole(open_capture(tmp_path / "a.h5", options=STATED))


def test_chunks_that_were_set_aside_but_never_written_are_counted(tmp_path: Path) -> None:
    """A recorder that stopped early leaves them; what is read there is no measurement."""
    with h5py.File(tmp_path / "a.h5", "w") as file:
        item = file.create_dataset("x", shape=(400,), dtype="f8", chunks=(100,), fillvalue=7.0)
        item[100:300] = np.arange(200.0)
        file.create_dataset("y", shape=(400,), dtype="f8")
        file.create_dataset("z", shape=(400,), dtype="f8", chunks=(100,), compression=1)
    capture = open_capture(tmp_path / "a.h5", options=STATED)
    assert "/x (400): 2 of 4 chunks were never written" in capture.notes
    np.testing.assert_array_equal(whole(capture)[0, [0, 99, 100, 299, 300]], [7, 7, 0, 199, 7])
    for name in ("y", "z"):
        options = ReadOptions(rate_hz=1000.0, dataset=name)
        with pytest.raises(CaptureError, match=rf"/{name} \(400\): no sample was ever written"):
            open_capture(tmp_path / "a.h5", options=options)


def test_a_length_set_aside_far_beyond_what_was_written_is_refused(tmp_path: Path) -> None:
    """A damaged shape of 1e13 frames would be read as missing samples for a year."""
    with h5py.File(tmp_path / "a.h5", "w") as file:
        item = file.create_dataset("x", shape=(10**13,), dtype="f8", chunks=(100,))
        item[:200] = 1.0
    with pytest.raises(CaptureError, match="99999999998 of 100000000000 chunks were never"):
        open_capture(tmp_path / "a.h5", options=STATED)


@pytest.mark.parametrize("body", [bytes(16), b"\2\0\1\0" + bytes(4) + b"\xff" * 7 + b"\xf8"])
def test_a_heap_of_texts_that_never_ends_is_refused(tmp_path: Path, body: bytes) -> None:
    """The library walks it by sizes: none, or one that runs over, and it walks for ever."""
    path = tmp_path / "a.h5"
    with h5py.File(path, "w") as file:
        file["x"] = np.arange(100.0)
        for name in ("units", "comment", "place"):
            file["x"].attrs[name] = "texts of any length stand in a heap"
    assert open_capture(path, options=STATED).frame_count == 100
    data = bytearray(path.read_bytes())
    second = data.index(b"GCOL") + 16 + 16 + 40
    data[second : second + 16] = body
    path.write_bytes(data)
    with pytest.raises(CaptureError, match=r"heap of texts at byte .* is damaged"):
        open_capture(path, options=STATED)


@pytest.mark.parametrize("way", ["virtual", "external"])
def test_samples_that_stand_in_another_file_are_refused(tmp_path: Path, way: str) -> None:
    """Where that file is missing or short the library hands out zeros without a word."""
    with h5py.File(tmp_path / "source.h5", "w") as file:
        file["s"] = np.arange(100.0)
    with h5py.File(tmp_path / "a.h5", "w") as file:
        if way == "virtual":
            layout = h5py.VirtualLayout(shape=(100,), dtype="f8")
            layout[:] = h5py.VirtualSource("source.h5", "s", shape=(100,))
            file.create_virtual_dataset("x", layout)
        else:
            places = [(str(tmp_path / "source.h5"), 2048, 800)]
            file.create_dataset("x", shape=(100,), dtype="f8", external=places)
    with pytest.raises(CaptureError, match=r"has its samples in other files \('.+'\)\. Give"):
        open_capture(tmp_path / "a.h5", options=STATED)


def test_a_virtual_dataset_over_its_own_file_is_read(tmp_path: Path) -> None:
    """A view over two parts of one file is one record."""
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["p"] = np.arange(50.0)
        layout = h5py.VirtualLayout(shape=(100,), dtype="f8")
        for first in (0, 50):
            layout[first : first + 50] = h5py.VirtualSource(".", "p", shape=(50,))
        file.create_virtual_dataset("x", layout)
    got = whole(open_capture(tmp_path / "a.h5", options=STATED))
    np.testing.assert_array_equal(got[0], np.tile(np.arange(50.0), 2))


def test_a_million_tiny_chunks_would_cost_a_byte_each(tmp_path: Path) -> None:
    """Recorders that write sample by sample leave files of such chunks, and longer ones."""
    count = 20_000
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_dataset("x", data=np.arange(count), chunks=(1,))
    with h5py.File(tmp_path / "a.h5") as file:
        tracemalloc.start()
        index = chunk_index(file["x"])
        peak_bytes = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
    assert index is not None
    assert index.written == index.declared == count
    assert peak_bytes < 2 * count  # a byte a chunk, and what one visit needs


def test_a_length_that_no_file_has_costs_no_memory(tmp_path: Path) -> None:
    """A damaged header of 3 kB used to make the library fill two gigabytes with zeros."""
    resource = pytest.importorskip("resource")
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    broken = Path(__file__).resolve().parents[2] / "fixtures" / "broken"
    with pytest.raises(CaptureError, match="2281701376 bytes declared at byte 783, file ends"):
        open_capture(broken / "mat-header-of-two-gigabytes.mat", options=STATED)
    # In kB; the file is of 3 kB, and all the library sets aside for one stays below 100 MB.
    assert resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before < 200_000


def test_a_chunk_that_ends_behind_the_file_is_told_before_memory_is_set_aside(
    tmp_path: Path,
) -> None:
    """The size of a packed chunk is what the index says: four gigabytes, if it is damaged."""
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_dataset("x", data=np.arange(20.0), chunks=(10,), compression=1)
    with h5py.File(tmp_path / "a.h5") as file:
        walk = _Walk(item=file["x"], filters=(1,), counts=(2,))
    info = SimpleNamespace(chunk_offset=(10,), filter_mask=0, byte_offset=2000, size=2**32 - 1)
    assert walk.take(info)
    assert walk.fault == "chunk at (10,) ends behind the file"
