"""Fuzz targets, one a reader; run apart from the tests.

    python tests/fuzz/fuzz_readers.py wav --seconds 120            guided by coverage (atheris)
    python tests/fuzz/fuzz_readers.py wav --own 100000 --seed 7    seeded mutation of our own
    python tests/fuzz/fuzz_readers.py --list

A target writes the bytes to a file, opens it as its format, and reads the first and the last
frames. Anything but a CaptureError is a finding: its input is kept in the folder given by
``--keep`` and belongs, made small, into fixtures/broken with a regression test.

The HDF5 library itself can bring a process down on damaged files; the own engine therefore
runs its inputs in child processes and counts such ends apart.
"""

from __future__ import annotations

import argparse
import importlib
import importlib.util
import multiprocessing
import os
import sys
import tempfile
import time
from pathlib import Path
from typing import Any

import numpy as np

ROOT = Path(__file__).resolve().parents[2]
sys.path.insert(0, str(ROOT))

BATCH = 2000  # inputs a child process: a crash costs at most this many
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
            if name.split()[0].removesuffix("b") == target and not name.endswith(("1991", "32")):
                values = module.values_for(name, 12, 2, 1)
                seeds.append(write(Path(folder), values).read_bytes())
    broken = (ROOT / "fixtures" / "broken").glob(f"{target}-*")
    return seeds + [item.read_bytes() for item in broken]


class Target:
    """Opens bytes as one format and reads both ends of what comes out."""

    def __init__(self, name: str, folder: str) -> None:
        from rig.errors import CaptureError
        from rig.readers import ReadOptions, open_capture

        self.refusal = CaptureError
        self.open = open_capture
        self.path = os.path.join(folder, "input" + SUFFIXES[name])
        self.options = [
            ReadOptions(format=name, rate_hz=1000.0, allow_truncated=True, stop_at_nul=True),
            ReadOptions(format=name),
            ReadOptions(format=name, trust_file_length=True, time_column="none", rate_hz=9.0),
        ]

    def __call__(self, data: bytes) -> None:
        """Try one input; anything but the one refusal comes out."""
        with open(self.path, "wb") as file:
            file.write(data)
        options = self.options[len(data) % len(self.options)]
        line = ""
        try:
            capture = self.open(self.path, options=options)
            columns = range(min(len(capture.channels), 4))
            for block in capture.blocks(columns, block_frames=500, stop_frame=1000):
                assert block.shape[0] == len(columns)
            last = capture.frame_count - 1
            ends = [b.shape[1] for b in capture.blocks(columns, start_frame=last)]
            assert sum(ends) == 1
        except self.refusal as fault:
            line = str(fault)
        assert not line or line.isprintable(), repr(line)


def mutated(rng: np.random.Generator, seeds: list[bytes]) -> bytes:
    """Return a seed with some bytes changed, cut out, doubled, or taken from another seed."""
    data = bytearray(seeds[rng.integers(len(seeds))])
    for _ in range(int(rng.integers(1, 6))):
        if not data:
            return b""
        place = int(rng.integers(len(data)) * rng.random() ** 2)  # headers more than samples
        kind = rng.integers(6)
        if kind == 0:
            data[place] = int(rng.integers(256))
        elif kind == 1:
            data[place] ^= 1 << int(rng.integers(8))
        elif kind == 2:
            del data[place : place + int(rng.integers(1, 16))]
        elif kind == 3:
            data[place:place] = data[place : place + int(rng.integers(1, 16))]
        elif kind == 4:
            extreme = (0, 1, 255, 2**31 - 1, 2**32 - 1, 2**63 - 1)[rng.integers(6)]
            width = (1, 2, 4, 8)[rng.integers(4)]
            body = (extreme % 256**width).to_bytes(width, ("little", "big")[rng.integers(2)])
            data[place : place + width] = body
        else:
            del data[int(rng.integers(len(data))) :]
    return bytes(data)


def run_batch(name: str, seed: int, count: int, keep: str, results: Any) -> None:
    """Try a batch of inputs in this process; findings are kept as files."""
    rng, seeds = np.random.default_rng(seed), seeds_of(name)
    with tempfile.TemporaryDirectory(dir=fast_folder()) as folder:
        target = Target(name, folder)
        for number in range(count):
            data = mutated(rng, seeds)
            Path(keep, f"{name}-now").write_bytes(data)
            try:
                target(data)
            except Exception as fault:
                Path(keep, f"{name}-{seed}-{number}").write_bytes(data)
                results.put(f"{type(fault).__name__}: {fault}")
    results.put(None)


def fast_folder() -> str | None:
    """Return a folder in memory where there is one."""
    return "/dev/shm" if os.path.isdir("/dev/shm") else None


def run_own(name: str, executions: int, seed: int, keep: str) -> None:
    """Run the own engine and print how many inputs were tried and what was found."""
    tried, findings, crashes, started = 0, [], 0, time.monotonic()
    context = multiprocessing.get_context("spawn")
    while tried < executions:
        results = context.Queue()
        batch = min(BATCH, executions - tried)
        child = context.Process(target=run_batch, args=(name, seed + tried, batch, keep, results))
        child.start()
        child.join()
        tried += batch
        while not results.empty():
            finding = results.get()
            if finding is not None:
                findings.append(finding)
        if child.exitcode:
            crashes += 1
            now = Path(keep, f"{name}-now")
            now.rename(now.with_name(f"{name}-crash-{seed + tried}"))
    spent = time.monotonic() - started
    print(
        f"{name}: {tried} inputs at most, {len(findings)} findings, {crashes} ends, {spent:.0f} s"
    )
    for finding in sorted(set(findings))[:20]:
        print("  ", finding[:200])


def run_guided(name: str, seconds: int, keep: str, corpus: str) -> None:
    """Run atheris until the time is over; it prints the number of executions itself."""
    import atheris

    with atheris.instrument_imports(include=["rig"]):
        # All of them: the table loads a reader only when a file needs it, which is too late.
        for path in sorted((ROOT / "rig" / "readers").glob("*.py")):
            importlib.import_module(f"rig.readers.{path.stem}".removesuffix(".__init__"))
    folder = tempfile.mkdtemp(dir=fast_folder())
    target = Target(name, folder)
    os.makedirs(corpus, exist_ok=True)
    for number, seed in enumerate(seeds_of(name)):
        Path(corpus, f"seed-{number}").write_bytes(seed)
    arguments = [sys.argv[0], corpus, f"-max_total_time={seconds}", "-rss_limit_mb=1000"]
    arguments += ["-timeout=20", "-max_len=8192", f"-artifact_prefix={keep}/{name}-"]
    atheris.Setup([*arguments, "-print_final_stats=1"], target)
    atheris.Fuzz()


def main() -> None:
    """Parse the command line and run one target."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("target", nargs="?", choices=sorted(SUFFIXES))
    parser.add_argument("--list", action="store_true")
    parser.add_argument("--seconds", type=int, default=60)
    parser.add_argument("--own", type=int, default=0, metavar="N")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--keep", default=tempfile.gettempdir())
    parser.add_argument("--corpus", default="")
    options = parser.parse_args()
    if options.list or options.target is None:
        print("\n".join(sorted(SUFFIXES)))
    elif options.own:
        run_own(options.target, options.own, options.seed, options.keep)
    else:
        corpus = options.corpus or tempfile.mkdtemp(prefix=f"corpus-{options.target}-")
        run_guided(options.target, options.seconds, options.keep, corpus)


if __name__ == "__main__":
    main()
