"""What one execution of a fuzz target does, and the small files it starts from.

The bytes are written to a file in memory, opened as one format, and read at both ends and
twice with different blocks. Anything but a CaptureError is a finding: another exception, a
warning, a refusal that is no printable line, blocks of the wrong size, or samples that depend
on the size of the block.

Packed formats check sums over their bytes, and a mutated file would mostly end there. For
these, bytes that carry no signature are packed by the harness, so that what is mutated is the
array inside; a COMTRADE pair comes as one input with a mark between its two files.
"""

from __future__ import annotations

import importlib.util
import io
import itertools
import os
import struct
import tempfile
import warnings
import zipfile
import zlib
from pathlib import Path

import h5py
import numpy as np

from rig.captures import Capture
from rig.errors import CaptureError
from rig.readers import ReadOptions, open_capture

ROOT = Path(__file__).resolve().parents[2]
BETWEEN = b"\x1d"  # stands between configuration and data of a COMTRADE pair
SUFFIXES = {
    "wav": ".wav",
    "rf64": ".wav",
    "w64": ".w64",
    "aiff": ".aif",
    "caf": ".caf",
    "flac": ".flac",
    "csv": ".csv",
    "npy": ".npy",
    "npz": ".npz",
    "mat": ".mat",
    "hdf5": ".h5",
    "uff58": ".uff",
    "comtrade": ".cff",
}
LENGTH_BYTES = 2048  # longer inputs cost time and find no more
LONGEST_BYTES = {"csv": 512, "hdf5": 12288, "mat": 4096, "uff58": 4096}
TEXTS = (
    "Model,bench\nPoints,9\n\ntime,left,right,\n(s),(V),(mV),\n",
    "t;a;b\n0,00;1.234,5;-1\n0,01;2,25;3\n0,02;4e-3;\n0,03;5;6\n",
    "2026-12-01 10:00:00.00,1\n2026-12-01 10:00:00.01,2\n2026-12-01 10:00:00.02,3\n",
    "# bench\n0.1 1.5V\n0.2 2.5V\n\n0.3 nan\n0.4 3.5V\nEND\n",
    "time (ms)\tv\n0\t0\n1\t1\n2\t0\n3\t1\n9\t0\n10\t1\n",
    '"t","x"\r\n"0","1"\r\n"1","1"\r\n"2","3"\r\n"3","2"\r\n',
    "T,v\n0.000,1\n0.001,2\n0.003,3\n0.004,4\n0.005,5\n0.006,6",
    "x=1 y=2\nx=3 y=4\nx=5 y=6\nx=7 y=8\n",
)


def seeds_of(target: str) -> list[bytes]:
    """Return small valid files of a format, written by the witness libraries of the tests."""
    path = ROOT / "tests" / "rig" / "test_readers_properties.py"
    spec = importlib.util.spec_from_file_location("witness_writers", path)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    seeds = []
    with tempfile.TemporaryDirectory() as folder:
        for name, write in module.WRITERS.items():
            if name.split()[0].removesuffix("b") == target:
                written = write(Path(folder), module.values_for(name, 12, 2, 1))
                data = written.with_suffix(".dat")
                paired = written.suffix == ".cfg"
                tail = BETWEEN + data.read_bytes() if paired else b""
                seeds.append(written.read_bytes() + tail)
    broken = (ROOT / "fixtures" / "broken").glob(f"{target}-*")
    seeds += [item.read_bytes() for item in broken] + more_seeds(target)
    return [seed for seed in seeds if len(seed) <= LONGEST_BYTES.get(target, LENGTH_BYTES)]


def more_seeds(target: str) -> list[bytes]:
    """Return further starting points: dialects of text, arrays bare of their packing."""
    if target == "csv":
        return [text.encode() for text in TEXTS]
    if target == "caf":
        form = struct.pack(">d4sIIIII", 100.0, b"lpcm", 0, 4, 1, 2, 16)
        head = b"caff\0\1\0\0desc" + struct.pack(">q", len(form)) + form
        return [head + b"data" + struct.pack(">q", 52) + bytes(52)]
    if target == "npz":
        bare = io.BytesIO()
        np.save(bare, np.arange(24.0).reshape(12, 2))
        return [bare.getvalue()]
    if target == "mat":
        return [mat_element("x", 12, 2), hdf5_seed(matlab=True)]
    return [hdf5_seed(matlab=False)] if target == "hdf5" else []


def mat_element(name: str, rows: int, columns: int) -> bytes:
    """Return the body of one numeric variable of MAT 5 to 7, bare of header and packing."""
    parts = [struct.pack("<IIII", 6, 8, 6, 0), struct.pack("<IIii", 5, 8, rows, columns)]
    label = name.encode()
    parts.append(struct.pack("<HH", 1, len(label)) + label.ljust(4, b"\0"))
    values = np.arange(float(rows * columns)).tobytes()
    parts.append(struct.pack("<II", 9, len(values)) + values)
    body = b"".join(parts)
    return struct.pack("<II", 14, len(body)) + body


def hdf5_seed(*, matlab: bool) -> bytes:
    """Return a file of arrays of several layouts: packed chunks, fields, times, attributes."""
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder, "a.h5")
        with h5py.File(path, "w", userblock_size=512 if matlab else 0) as file:
            if matlab:
                item = file.create_dataset("x", data=np.arange(24.0).reshape(2, 12))
                item.attrs["MATLAB_class"] = np.bytes_("double")
            else:
                file.create_dataset("t", data=np.arange(12) / 100)
                file.create_dataset("x", data=np.arange(12.0), chunks=(5,), compression="gzip")
                file["x"].attrs["units"] = "V"
            file.attrs["fs"] = 100.0
        data = bytearray(path.read_bytes())
    if matlab:
        data[:128] = b"MATLAB 7.3 MAT-file".ljust(124) + b"\x00\x02IM"
    return bytes(data)


class Target:
    """Opens bytes as one format and reads both ends of what comes out."""

    def __init__(self, name: str, folder: str) -> None:
        warnings.simplefilter("error")
        self.name = name
        self.path = os.path.join(folder, "input" + SUFFIXES[name])
        self.file = os.open(self.path, os.O_RDWR | os.O_CREAT)
        self.pair = os.path.join(folder, "pair.cfg")
        self.options = [
            ReadOptions(format=name, rate_hz=1000.0, allow_truncated=True, stop_at_nul=True),
            ReadOptions(format=name),
            ReadOptions(format=name, trust_file_length=True, time_column="none", rate_hz=9.0),
        ]

    def __call__(self, data: bytes) -> bool:
        """Try one input and tell whether it could be read; any fault but a refusal comes out."""
        path = self.place(data)
        line = ""
        try:
            capture = open_capture(path, options=self.options[len(data) % len(self.options)])
            read_ends(capture)
        except CaptureError as fault:
            line = str(fault)
        assert not line or line.isprintable(), repr(line)
        return not line

    def place(self, data: bytes) -> str:
        """Write the input where it is to be read, packed where it has to be."""
        if self.name == "comtrade" and BETWEEN in data:
            head, _, tail = data.partition(BETWEEN)
            for path, part in ((self.pair, head), (self.pair[:-3] + "dat", tail)):
                with open(path, "wb") as file:
                    file.write(part)
            return self.pair
        data = packed(self.name, data)
        os.ftruncate(self.file, 0)
        os.pwrite(self.file, data, 0)
        return self.path


def read_ends(capture: Capture) -> None:
    """Read the first and the last frames; the size of a block must not change a sample."""
    columns = range(min(len(capture.channels), 4))
    frames = min(capture.frame_count, 1000)
    blocks = [b.copy() for b in capture.blocks(columns, block_frames=500, stop_frame=frames)]
    assert [b.shape[0] for b in blocks] == [len(columns)] * len(blocks)
    assert sum(b.shape[1] for b in blocks) == frames
    last = [b.copy() for b in capture.blocks(columns, start_frame=capture.frame_count - 1)]
    assert [b.shape for b in last] == [(len(columns), 1)]
    few = min(frames, 40)
    steps = capture.blocks(columns, block_frames=7, start_frame=3, stop_frame=few)
    small = [b.copy() for b in steps]
    if few > 3:
        again = np.concatenate(small, axis=1)
        assert np.array_equal(again, blocks[0][:, 3:few], equal_nan=True), "blocks differ"
    texts = itertools.chain(*((c.name, c.unit) for c in capture.channels))
    for text in itertools.chain(capture.notes, texts):
        assert text.isprintable(), repr(text)


def packed(name: str, data: bytes) -> bytes:
    """Return the file of a format: as it is, or packed where the bytes carry no signature."""
    if name == "npz" and not data.startswith(b"PK"):
        body = io.BytesIO()
        with zipfile.ZipFile(body, "w") as archive:
            archive.writestr(zipfile.ZipInfo("x.npy"), data)
        return body.getvalue()
    if name == "mat" and data[1:4] == b"\0\0\0":
        element = zlib.compress(data, 1)
        head = b"MATLAB 5.0 MAT-file".ljust(124) + b"\x00\x01IM"
        return head + struct.pack("<II", 15, len(element)) + element
    return data
