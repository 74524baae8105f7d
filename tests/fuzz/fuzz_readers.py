"""Fuzzing of the readers; run apart from the tests.

    python tests/fuzz/fuzz_readers.py wav --runs 1000000           guided by coverage (atheris)
    python tests/fuzz/fuzz_readers.py wav --seconds 120
    python tests/fuzz/fuzz_readers.py wav --own 100000 --seed 7    seeded mutation of our own
    python tests/fuzz/fuzz_readers.py --list

What one execution does, and what counts as a finding, stands in ``fuzz_targets.py``. The input
of a finding is kept in the folder given by ``--keep`` and belongs, made small, into
fixtures/broken with a regression test.

The libraries behind some formats can bring a process down on damaged files. Inputs are
therefore tried in a child process that is started again when it ends early; such ends are
counted apart.

``--corpus DIR`` keeps what guided runs find worth keeping; the own engine, which is the faster
one where a library does most of the work, starts from it. ``--log FILE`` adds the outcome to a
table.
"""

from __future__ import annotations

import argparse
import importlib
import mmap
import os
import subprocess
import sys
import tempfile
import time
import traceback
from datetime import date
from pathlib import Path

import numpy as np

ROOT = Path(__file__).resolve().parents[2]
sys.path[:0] = [str(ROOT), str(Path(__file__).parent)]

NAMES = [
    "wav",
    "rf64",
    "w64",
    "aiff",
    "caf",
    "flac",
    "csv",
    "npy",
    "npz",
    "mat",
    "hdf5",
    "uff58",
    "comtrade",
]
COUNTS = ("tried", "read", "findings")
STILL_S = 60.0  # an input that takes longer hangs, even on a busy machine
ENDS_MAX = 200  # a target that ends its process more often than this is not worth going on
TABLE_HEAD = (
    "| date | reader | engine | executions | a second | read through | findings | ends |\n"
    "|---|---|---|---|---|---|---|---|\n"
)


class Tally:
    """Counts that outlive the process: they stand in a file mapped into memory."""

    def __init__(self, path: Path) -> None:
        if not path.exists():
            path.write_bytes(bytes(8 * len(COUNTS)))
        with path.open("r+b") as file:
            self.counts = memoryview(mmap.mmap(file.fileno(), 8 * len(COUNTS))).cast("Q")

    def add(self, name: str) -> None:
        """Add one."""
        self.counts[COUNTS.index(name)] += 1

    def get(self, name: str) -> int:
        """Return a count."""
        return int(self.counts[COUNTS.index(name)])


class Watched:
    """Tries inputs and keeps those that are findings, one of each place in the code."""

    def __init__(self, name: str, keep: str, tally: Tally) -> None:
        from fuzz_targets import Target

        folder = tempfile.mkdtemp(dir=fast_folder())
        self.target, self.tally = Target(name, folder), tally
        self.name, self.keep = name, Path(keep)

    def __call__(self, data: bytes) -> None:
        """Try one input."""
        self.tally.counts[0] += 1
        try:
            if self.target(data):
                self.tally.counts[1] += 1
        except Exception as fault:
            self.note(fault, data)

    def note(self, fault: Exception, data: bytes) -> None:
        """Keep the input of a fault unless the same place has shown it already."""
        frames = traceback.extract_tb(fault.__traceback__)
        ours = [frame for frame in frames if "/rig/" in frame.filename] or list(frames)
        place = f"{Path(ours[-1].filename).stem}-{ours[-1].lineno}"
        path = self.keep / f"{self.name}-{type(fault).__name__}-{place}"
        if not path.exists():
            path.write_bytes(data)
            self.tally.add("findings")
            print(f"FINDING {path.name}: {str(fault)[:300]}", flush=True)


def fast_folder() -> str | None:
    """Return a folder in memory where there is one."""
    return "/dev/shm" if os.path.isdir("/dev/shm") else None


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


def run_own(options: argparse.Namespace) -> None:
    """Try inputs of the own engine in this process, the last one kept in case it ends."""
    from fuzz_targets import seeds_of

    tally = Tally(Path(options.tally))
    seed = options.seed + tally.get("tried")
    rng, seeds = np.random.default_rng(seed), seeds_of(options.target)
    seeds += [path.read_bytes() for path in sorted(Path(options.corpus).iterdir())]
    watched = Watched(options.target, options.keep, tally)
    now = os.open(Path(options.keep, f"{options.target}-now"), os.O_RDWR | os.O_CREAT)
    while tally.get("tried") < options.own:
        data = mutated(rng, seeds)
        os.ftruncate(now, 0)
        os.pwrite(now, data, 0)
        watched(data)


def run_guided(options: argparse.Namespace) -> None:
    """Run atheris in this process until the runs or the time are over."""
    import atheris

    # Check sums go byte by byte: watched, they would take most of the time.
    with atheris.instrument_imports(include=["rig"], exclude=["rig.readers.flacframes"]):
        # All of them: the table loads a reader only when a file needs it, which is too late.
        for path in sorted((ROOT / "rig" / "readers").glob("*.py")):
            importlib.import_module(f"rig.readers.{path.stem}".removesuffix(".__init__"))
    from fuzz_targets import LENGTH_BYTES, LONGEST_BYTES, seeds_of

    name, tally = options.target, Tally(Path(options.tally))
    for number, seed in enumerate(seeds_of(name)):
        Path(options.corpus, f"seed-{number}").write_bytes(seed)
    arguments = [sys.argv[0], options.corpus, "-rss_limit_mb=1000", "-timeout=20"]
    arguments += [f"-max_len={LONGEST_BYTES.get(name, LENGTH_BYTES)}", "-verbosity=0"]
    arguments += [f"-artifact_prefix={options.keep}/{name}-"]
    if options.runs:
        arguments.append(f"-runs={max(options.runs - tally.get('tried'), 1)}")
    if options.seconds:
        arguments.append(f"-max_total_time={options.seconds}")
    atheris.Setup(arguments, Watched(name, options.keep, tally))
    atheris.Fuzz()


def supervise(options: argparse.Namespace) -> None:
    """Run a target in child processes until its inputs or its time are over, and say what came."""
    os.makedirs(options.keep, exist_ok=True)
    folder = Path(tempfile.mkdtemp(prefix=f"fuzz-{options.target}-"))
    corpus = options.corpus or str(folder)
    os.makedirs(corpus, exist_ok=True)
    tally_path = Path(tempfile.mkdtemp(dir=fast_folder())) / "tally"
    tally = Tally(tally_path)
    command = [sys.executable, __file__, *sys.argv[1:], "--corpus", corpus]
    command += ["--tally", str(tally_path)]
    ends, started = 0, time.monotonic()
    while ends < ENDS_MAX:
        before = tally.get("tried")
        code = run_child(command, tally)
        if code == 0:
            break
        ends += 1
        kept = Path(options.keep, f"{options.target}-end-{ends}-code{code}")
        now = Path(options.keep, f"{options.target}-now")
        if now.exists():
            now.rename(kept)
        print(f"END {ends}: code {code} after {tally.get('tried') - before} inputs", flush=True)
    report(options, tally, ends, time.monotonic() - started)


def run_child(command: list[str], tally: Tally) -> int:
    """Run a command and return its code; end it when its counts stand still."""
    child = subprocess.Popen(command)
    last, since = -1, time.monotonic()
    while child.poll() is None:
        time.sleep(0.5)
        now = tally.get("tried")
        if now != last or now == 0:
            last, since = now, time.monotonic()
        elif time.monotonic() - since > STILL_S:
            child.kill()
    return child.wait()


def report(options: argparse.Namespace, tally: Tally, ends: int, spent_s: float) -> None:
    """Print the outcome as a row, and add it to the table if there is to be one."""
    tried = max(tally.get("tried"), 1)
    engine = "own" if options.own else "guided"
    cells = [date.today().isoformat(), options.target, engine, f"{tried:,}"]
    cells += [f"{tried / spent_s:,.0f}", f"{100 * tally.get('read') / tried:.0f} %"]
    row = "| " + " | ".join([*cells, str(tally.get("findings")), str(ends)]) + " |\n"
    print(row, end="")
    if options.log:
        path = Path(options.log)
        head = path.read_text() if path.exists() else TABLE_HEAD
        path.write_text(head + row)


def main() -> None:
    """Parse the command line and run one target."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("target", nargs="?", choices=sorted(NAMES))
    parser.add_argument("--list", action="store_true")
    parser.add_argument("--runs", type=int, default=0, metavar="N")
    parser.add_argument("--seconds", type=int, default=0)
    parser.add_argument("--own", type=int, default=0, metavar="N")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--keep", default=os.path.join(tempfile.gettempdir(), "findings"))
    parser.add_argument("--corpus", default="")
    parser.add_argument("--log", default="")
    parser.add_argument("--tally", default="", help=argparse.SUPPRESS)
    options = parser.parse_args()
    if not (options.runs or options.own or options.seconds):
        options.seconds = 60
    if options.list or options.target is None:
        print("\n".join(NAMES))
    elif not options.tally:
        supervise(options)
    elif options.own:
        run_own(options)
    else:
        run_guided(options)


if __name__ == "__main__":
    main()
