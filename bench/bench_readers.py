"""Reading at sizes that do not belong into the tests: time, rate of reading, resident memory.

    python bench/bench_readers.py --wav 1e9 --csv-gb 10
    python bench/bench_readers.py --csv-gb 0.1 --dialects

The WAV file is a hole on the disk (nothing but its header is written); the CSV is generated:
its times go on from row to row, its values are those of one million rows again and again.
Each file is opened and read to its end in a process of its own, then looked at by
``lockspan inspect``; the peak of resident memory is what the system reports, the speed is in
seconds of processor time. Nothing here gates a test.
"""

from __future__ import annotations

import argparse
import resource
import struct
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from functools import partial
from pathlib import Path

import numpy as np

ROOT = Path(__file__).resolve().parents[1]
sys.path.insert(0, str(ROOT))

ROWS_AT_ONCE = 1_000_000
# What stands before and behind a cell, and the marks between cells and before decimals.
DIALECTS = {
    "plain": (b"", b",.", b""),
    "semicolons": (b"", b";,", b""),
    "quoted": (b'"', b",.", b'"'),
    "units": (b"", b",.", b" V"),
}


def write_wav(path: Path, frames: int) -> None:
    """Write a two-channel 16-bit RF64 file of silence as a hole."""
    size = 4 * frames
    wide = struct.pack("<QQQI", size + 72, size, frames, 0)
    form = struct.pack("<HHIIHH", 1, 2, 51200, 204800, 4, 16)
    with path.open("wb") as file:
        file.write(b"RF64" + b"\xff" * 4 + b"WAVEds64" + struct.pack("<I", 28) + wide)
        file.write(b"fmt " + struct.pack("<I", 16) + form + b"data" + b"\xff" * 4)
        file.truncate(file.tell() + size)


def write_csv(path: Path, gigabytes: float, dialect: str = "plain") -> None:
    """Write a table of times and two channels, 34 bytes a row or somewhat more, at 50 kHz."""
    opening, marks, closing = DIALECTS[dialect]
    size = int(gigabytes * 1e9)
    values = value_texts(ROWS_AT_ONCE)
    with path.open("wb") as file:
        file.write(b"time (s)%bleft%bright\n" % (marks[:1], marks[:1]))
        first = 0
        while file.tell() < size:
            rows = min(ROWS_AT_ONCE, (size - file.tell()) // 34 + 1)
            cells = [time_texts(first, rows), *(text[:rows] for text in values)]
            if b"," in marks[1:]:
                for cell in cells:
                    cell[cell == ord(".")] = ord(",")
            parts = [ends(opening, rows), cells[0]]
            for cell in cells[1:]:
                parts += [ends(closing + marks[:1] + opening, rows), cell]
            file.write(np.hstack([*parts, ends(closing + b"\n", rows)]).tobytes())
            first += rows


def ends(text: bytes, rows: int) -> np.ndarray:
    """Return the same text in every row, shape (rows, characters)."""
    return np.broadcast_to(np.frombuffer(text, dtype=np.uint8), (rows, len(text)))


def time_texts(first: int, rows: int) -> np.ndarray:
    """Return times of 20 microseconds a row as text of 12 characters, blanks in front."""
    numbers = (first + np.arange(rows, dtype=np.int64)) * 2
    digits = np.empty((rows, 11), dtype=np.uint8)
    for place in range(10, -1, -1):
        numbers, digit = np.divmod(numbers, 10)
        digits[:, place] = digit + ord("0")
    leading = np.logical_and.accumulate(digits[:, :5] == ord("0"), axis=1)
    digits[:, :5][leading] = ord(" ")
    return np.hstack([digits[:, :6], ends(b".", rows), digits[:, 6:]])


def value_texts(rows: int) -> list[np.ndarray]:
    """Return two columns of noise as text of 9 characters."""
    values = np.random.default_rng(1).normal(size=2 * rows)
    text = "".join([f"{value:9.6f}" for value in values]).encode()
    return list(np.frombuffer(text, dtype=np.uint8).reshape(2, rows, 9).copy())


def read_here(path: str) -> None:
    """Open a file, read all of it, and print frames, processor seconds and peak memory."""
    from rig.readers import open_capture

    started = time.process_time()
    capture = open_capture(path)
    opened = time.process_time()
    frames = sum(block.shape[1] for block in capture.blocks([0, 1]))
    done = time.process_time()
    assert frames == capture.frame_count
    mega, size_mb = frames / 1e6, Path(path).stat().st_size / 1e6
    print(
        f"{Path(path).name}: {mega:.6g} M frames, {size_mb / 1e3:.3g} GB, "
        f"opened in {opened - started:.2f} s of processor time "
        f"({size_mb / (opened - started):.4g} MB/s), read in {done - opened:.2f} s "
        f"({size_mb / (done - opened):.4g} MB/s, {mega / (done - opened):.4g} M frames/s), "
        f"rate {capture.rate_hz:.10g} Hz, peak {peak_mib():.0f} MiB",
        flush=True,
    )


def inspect_here(path: str) -> None:
    """Do what ``lockspan inspect`` does and print processor seconds and peak memory."""
    from reports.inspection import inspect_capture, inspection_text
    from rig.readers import open_capture

    started = time.process_time()
    text = inspection_text(inspect_capture(open_capture(path)))
    spent_s, size_mb = time.process_time() - started, Path(path).stat().st_size / 1e6
    print(
        f"{Path(path).name}: inspected in {spent_s:.2f} s of processor time "
        f"({size_mb / spent_s:.4g} MB/s), {len(text.splitlines())} lines, "
        f"peak {peak_mib():.0f} MiB",
        flush=True,
    )


def peak_mib() -> float:
    """Return the peak of resident memory of this process alone.

    The usage record of the system starts from the size of the parent; the status file, where
    there is one, does not.
    """
    status = Path("/proc/self/status")
    if status.exists():
        line = next(x for x in status.read_text().splitlines() if x.startswith("VmHWM"))
        return int(line.split()[1]) / 1024
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024


def main() -> None:
    """Write the asked sizes and read each in a process of its own."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--wav", type=float, default=1e8, help="frames; 0 for none")
    parser.add_argument("--csv-gb", type=float, default=0.1, help="size in 1e9 bytes; 0 for none")
    parser.add_argument("--dialects", action="store_true", help="the CSV in other dialects, too")
    parser.add_argument("--folder", default=tempfile.gettempdir())
    parser.add_argument("--read", help=argparse.SUPPRESS)
    parser.add_argument("--inspect", help=argparse.SUPPRESS)
    options = parser.parse_args()
    if options.read:
        read_here(options.read)
        return
    if options.inspect:
        inspect_here(options.inspect)
        return
    if options.wav:
        measure(options.folder, "a.rf64", lambda path: write_wav(path, int(options.wav)))
    if options.csv_gb:
        for dialect in DIALECTS if options.dialects else ["plain"]:
            write = partial(write_csv, gigabytes=options.csv_gb, dialect=dialect)
            measure(options.folder, f"{dialect}.csv", write)


def measure(folder: str, name: str, write: Callable[[Path], None]) -> None:
    """Write one file, look at it both ways, and take it away again."""
    with tempfile.TemporaryDirectory(dir=folder) as inner:
        path = Path(inner, name)
        write(path)
        for way in ("--read", "--inspect"):
            subprocess.run([sys.executable, __file__, way, str(path)], check=True)


if __name__ == "__main__":
    main()
