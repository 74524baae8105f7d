"""Reading at sizes that do not belong into the tests: time, rate of reading, resident memory.

    python bench/bench_readers.py --wav 1e9 --csv 1e8

The WAV file is a hole on the disk (nothing but its header is written); the CSV is generated.
Each size is opened and read to its end in a process of its own, whose peak of resident memory
is what the system reports. Nothing here gates a test.
"""

from __future__ import annotations

import argparse
import resource
import struct
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

ROOT = Path(__file__).resolve().parents[1]
sys.path.insert(0, str(ROOT))


def write_wav(path: Path, frames: int) -> None:
    """Write a two-channel 16-bit RF64 file of silence as a hole."""
    size = 4 * frames
    wide = struct.pack("<QQQI", size + 72, size, frames, 0)
    form = struct.pack("<HHIIHH", 1, 2, 51200, 204800, 4, 16)
    with path.open("wb") as file:
        file.write(b"RF64" + b"\xff" * 4 + b"WAVEds64" + struct.pack("<I", 28) + wide)
        file.write(b"fmt " + struct.pack("<I", 16) + form + b"data" + b"\xff" * 4)
        file.truncate(file.tell() + size)


def write_csv(path: Path, rows: int) -> None:
    """Write a table of times and two channels, a million rows at a time."""
    rng = np.random.default_rng(1)
    with path.open("w") as file:
        file.write("time (s),left (V),right (V)\n")
        for first in range(0, rows, 1_000_000):
            count = min(1_000_000, rows - first)
            times = (first + np.arange(count)) / 51200
            values = rng.normal(size=(2, count))
            lines = [f"{t:.7f},{a:.6f},{b:.6f}\n" for t, a, b in zip(times, *values, strict=True)]
            file.writelines(lines)


def read_here(path: str) -> None:
    """Open a file, read all of it, and print frames, seconds and peak memory."""
    from rig.readers import open_capture

    started = time.perf_counter()
    capture = open_capture(path)
    opened = time.perf_counter()
    frames = sum(block.shape[1] for block in capture.blocks([0, 1]))
    done = time.perf_counter()
    assert frames == capture.frame_count
    mega, spent_s = frames / 1e6, done - opened
    print(
        f"{Path(path).suffix}: {mega:.6g} M frames, {Path(path).stat().st_size / 1e9:.3g} GB, "
        f"opened in {opened - started:.2f} s, read in {spent_s:.2f} s "
        f"({mega / spent_s:.4g} M frames/s), peak {peak_mib():.0f} MiB"
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
    parser.add_argument("--wav", type=float, default=1e8, help="frames")
    parser.add_argument("--csv", type=float, default=3e6, help="rows")
    parser.add_argument("--folder", default=tempfile.gettempdir())
    parser.add_argument("--read", help=argparse.SUPPRESS)
    options = parser.parse_args()
    if options.read:
        read_here(options.read)
        return
    with tempfile.TemporaryDirectory(dir=options.folder) as folder:
        for write, name, size in (
            (write_wav, "a.rf64", options.wav),
            (write_csv, "a.csv", options.csv),
        ):
            path = Path(folder, name)
            write(path, int(size))
            subprocess.run([sys.executable, __file__, "--read", str(path)], check=True)
            path.unlink()


if __name__ == "__main__":
    main()
