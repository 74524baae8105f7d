"""Measure the speed of lockspan against the same work by hand; write bench/speed.md.

    python bench/run.py                1e6 and 1e7 frames, some minutes
    python bench/run.py --long         also 1e8 frames, and 1e9 for the phase pass
    python bench/run.py --hand-1e8     also the chain by hand at 1e8 frames: 12 GB of memory

Everything is generated from seeds in a temporary folder, which is removed at the end. Every
figure is a ratio of two things timed in the same rounds; see ``bench/measure.py``.
"""

from __future__ import annotations

import argparse
import math
import os
import shutil
import statistics
import sys
import tempfile
from collections.abc import Callable, Sequence
from datetime import date
from pathlib import Path
from typing import Any

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from bench.measure import ROOT, Cost, Ratio, ask_child, ratio_of, run_child

PYTHON = Path(sys.executable)
COMMAND = ("-c", "from reports.cli import main; main()")
BY_HAND = ROOT / "bench" / "byhand.py"
INSIDE = ROOT / "bench" / "inside.py"
LEAN = ROOT / "bench" / "lean.py"
FITS_TIMED = 4
Row = tuple[str, str, str, str]


def lockspan(*words: str | Path) -> Cost:
    """Return the cost of one command of lockspan."""
    return run_child([PYTHON, *COMMAND, *words])


def ratio_text(ratio: Ratio, *, unit: str = "") -> str:
    """Return a ratio as 1/x or x with its spread."""
    if ratio.median < 1.0:
        low, middle, high = (1.0 / value for value in (ratio.high, ratio.median, ratio.low))
        return f"1/{middle:.3g} (1/{low:.3g} to 1/{high:.3g}){unit}"
    return f"{ratio.median:.3g} ({ratio.low:.3g} to {ratio.high:.3g}){unit}"


def row(what: str, ratio: Ratio, goal: str, limit: float) -> Row:
    """Return one line of the table; ``limit`` is the largest ratio that meets the goal."""
    met = "" if math.isinf(limit) else "yes" if ratio.median <= limit else "no"
    return what, ratio_text(ratio), goal, met


def length_text(frames: int) -> str:
    """Return a number of frames as a power of ten."""
    return f"1e{round(math.log10(frames))}"


class Bench:
    """The captures of a run and the table that it fills."""

    def __init__(self, folder: Path, rounds: int, sweeps: int) -> None:
        self.folder, self.rounds, self.sweeps = folder, rounds, sweeps
        self.rows: list[Row] = []
        self.remarks: list[str] = []

    def capture(self, frames: int) -> Path:
        """Return a capture of some frames, made when it is first asked for."""
        path = self.folder / f"a{length_text(frames)}.wav"
        if not path.exists() and frames > 10**8:
            ask_child("repeat", self.capture(10**8), path, frames // 10**8)
        elif not path.exists():
            ask_child("make", path, frames)
        return path

    def compare_pass(self, frames: int, *, hand: bool) -> None:
        """Capture to episodes against reading, transforming, and the chain by hand."""
        rounds = self.rounds if frames <= 10**7 else 1
        words = (self.capture(frames), rounds, "hand" if hand else "no")
        spent = ask_child("pass", *words)
        size = length_text(frames)
        against: list[tuple[str, str, str, str, float]] = [
            ("ours", "read", "soundfile.read to float64 of that file", "<= 0.6", 0.6),
            ("ours", "transforms", "two real FFTs of that length, float32", "<= 1/8", 1 / 8),
            ("ours", "bytes", "bare reading of the bytes", "none set", math.inf),
            ("pass", "read", "soundfile.read (the phase pass alone)", "<= 0.6", 0.6),
            ("pass", "transforms", "two FFTs (the phase pass alone)", "<= 1/8", 1 / 8),
            ("health", "pass", "the phase pass: health of both signals", "none set", math.inf),
        ]
        if hand:
            against.insert(0, ("ours", "hand", "the chain by hand", "<= 1/150", 1 / 150))
            against.insert(
                1, ("pass", "hand", "by hand (the phase pass alone)", "<= 1/150", 1 / 150)
            )
        for ours, theirs, name, goal, limit in against:
            if frames < 10**7:  # the goals are for captures of minutes
                goal, limit = "none set at this length", math.inf
            ratio = ratio_of(spent[ours], spent[theirs])
            self.rows.append(
                row(
                    f"{size} frames: phases and episodes, CPU, against {name}"
                    if ours == "ours"
                    else f"{size} frames: CPU against {name}",
                    ratio,
                    goal,
                    limit,
                )
            )

    def compare_commands(self, frames: int, *, hand: bool) -> None:
        """Whole processes: wall time, processor time and peak of memory."""
        size, path = length_text(frames), self.capture(frames)
        ours = run_child([PYTHON, INSIDE, "ours", path])
        measured = lockspan("measure", path)
        self.rows.append(
            (
                f"{size} frames: `lockspan measure`, everything",
                f"{measured.wall_s:.3g} s wall, {measured.cpu_s:.3g} s CPU, "
                f"{measured.peak_mib:.0f} MiB",
                "memory <= 300 MiB",
                "yes" if measured.peak_mib <= 300 else "no",
            )
        )
        if not hand:
            return
        chain = run_child([PYTHON, BY_HAND, path, "chain"])
        fits = ask_child("fits", path, FITS_TIMED)
        per_fit = fits["spent_s"] / max(1, fits["timed"])
        whole_s = chain.cpu_s + per_fit * fits["stretches"]
        self.remarks.append(
            f"By hand at {size}: chain {chain.cpu_s:.3g} s CPU and {chain.wall_s:.3g} s wall; "
            f"{fits['timed']} of its {fits['stretches']} fits timed ({per_fit:.2g} s each), the "
            "rest scaled."
        )
        lean = run_child([PYTHON, LEAN, path])
        peak, start = (1 / 180, 1 / 400) if frames >= 10**8 else (1.0, 1.0)
        started = "CPU of phases, episodes and start values against by hand with its fits"
        pairs = (
            ("wall, process against process, without fits", ours.wall_s, chain.wall_s, 1.0),
            ("peak memory, process against process", ours.peak_mib, chain.peak_mib, peak),
            (started, lean.cpu_s, whole_s, start),
            ("CPU of `lockspan measure` against the same", measured.cpu_s, whole_s, 1.0),
        )
        for name, mine, theirs, limit in pairs:
            ratio = mine / theirs
            goal = "below 1" if limit == 1.0 else f"<= 1/{1 / limit:.0f}"
            met = "yes" if ratio <= limit else "no"
            self.rows.append((f"{size} frames: {name}", f"1/{1 / ratio:.3g}", goal, met))

    def memory(self, lengths: Sequence[int]) -> None:
        """Peak of memory of phases and episodes over the length."""
        peaks = [run_child([PYTHON, INSIDE, "ours", self.capture(n)]).peak_mib for n in lengths]
        for frames, peak in zip(lengths, peaks, strict=True):
            limit = 128.0 if frames >= 10**9 else 300.0
            self.rows.append(
                (
                    f"{length_text(frames)} frames: peak memory of phases and episodes",
                    f"{peak:.0f} MiB",
                    f"<= {limit:.0f} MiB",
                    "yes" if peak <= limit else "no",
                )
            )
        grown = (peaks[-1] - peaks[0]) * 1024**2 / (lengths[-1] - lengths[0])
        self.rows.append(
            (
                f"growth of that with the length, {length_text(lengths[0])} to "
                f"{length_text(lengths[-1])} frames",
                f"{grown:.2g} bytes a frame",
                "<= 0.1",
                "yes" if grown <= 0.1 else "no",
            )
        )

    def exponent(self, lengths: Sequence[int]) -> None:
        """Exponent of the time of the phase pass alone over the length."""
        # Medians: the smallest of many short rounds beside one long one would bend the slope.
        turns = {10**6: 15, 10**7: 7, 10**8: 3}
        spent = [
            statistics.median(ask_child("time", self.capture(n), turns.get(n, 1))) for n in lengths
        ]
        slope = math.log(spent[-1] / spent[0]) / math.log(lengths[-1] / lengths[0])
        rates = ", ".join(
            f"{length_text(n)}: {2 * n / s / 1e6:.0f}" for n, s in zip(lengths, spent, strict=True)
        )
        self.remarks.append(f"Phase pass alone, million samples of all channels a second: {rates}.")
        self.rows.append(
            (
                f"exponent of the phase pass, {length_text(lengths[0])} to "
                f"{length_text(lengths[-1])} frames",
                f"{slope:.3f}",
                "0.95 to 1.05",
                "yes" if 0.95 <= slope <= 1.05 else "no",
            )
        )

    def codings(self) -> None:
        """Passes over 24-bit and float files against that over a 16-bit one."""
        spent = ask_child("codings", self.folder, 10**7, self.rounds)
        for coding, name, limit in (("PCM_24", "24-bit", 1.5), ("FLOAT", "float32", 1.3)):
            ratio = ratio_of(spent[coding], spent["PCM_16"])
            what = f"1e7 frames: phase pass of a {name} file, CPU, against a 16-bit one"
            self.rows.append(row(what, ratio, f"<= {limit}", limit))

    def start_values(self) -> None:
        """Start value and likelihood of one record against the fit by hand."""
        for points, limit in ((1000, 1 / 800), (4000, 1 / 400)):
            found = ask_child("start", 3, points)
            spent, errors = found["spent"], found["errors"]
            what = f"start value of detuning and coupling, {points} points, against the ODE fit"
            ratio = ratio_of(spent["start"], spent["hand"])
            self.rows.append(row(what, ratio, f"<= 1/{1 / limit:.0f}", limit))
            middle = statistics.median(spent["likelihood"])
            self.rows.append(
                (
                    f"likelihood with intervals, {points} points of one record",
                    f"{middle:.2g} s CPU, "
                    + ratio_text(ratio_of(spent["likelihood"], spent["hand"]))
                    + " of the ODE fit",
                    "<= 0.1 s" if points <= 2000 else "none set at this length",
                    ("yes" if middle <= 0.1 else "no") if points <= 2000 else "",
                )
            )
            told = ", ".join(
                f"{name} {'none' if e is None else f'{e:.1e}'}" for name, e in errors.items()
            )
            self.remarks.append(f"Relative error of the coupling, {points} points: {told}.")

    def startup(self) -> None:
        """Help, version and the imports of the hot path against a bare interpreter."""
        words: dict[str, list[str | Path]] = {
            "bare": [PYTHON, "-c", "pass"],
            "help": [PYTHON, *COMMAND, "--help"],
            "version": [PYTHON, *COMMAND, "--version"],
            "numpy": [PYTHON, "-c", "import numpy"],
            "lean": [PYTHON, LEAN, self.capture(10**6)],
            "measure": [PYTHON, *COMMAND, "measure", self.capture(10**6)],
        }
        spent: dict[str, list[float]] = {name: [] for name in words}
        for _ in range(self.rounds):
            for name, command in words.items():
                spent[name].append(run_child(command).cpu_s)
        for name in ("help", "version"):
            self.rows.append(
                row(
                    f"`--{name}`, CPU, against a bare interpreter",
                    ratio_of(spent[name], spent["bare"]),
                    "<= 8",
                    8.0,
                )
            )
        self.rows.append(
            row(
                "1e6 frames: phases, episodes and start values in a fresh process, CPU, against "
                "importing numpy",
                ratio_of(spent["lean"], spent["numpy"]),
                "<= 1.8",
                1.8,
            )
        )
        self.rows.append(
            row(
                "1e6 frames: `lockspan measure`, everything, against importing numpy",
                ratio_of(spent["measure"], spent["numpy"]),
                "none set",
                math.inf,
            )
        )

    def sweep(self) -> None:
        """Two workers against one, and a run that finds everything done against the first."""
        made = self.folder / "demo"
        lockspan("demo", made, "--quiet")
        plan = made / "campaign" / "SWEEP.toml"
        one, two, again, report = [], [], [], []
        for turn in range(self.sweeps):
            first, second = self.folder / f"one{turn}", self.folder / f"two{turn}"
            one.append(lockspan("sweep", plan, "--out", first, "--workers", "1", "--quiet").wall_s)
            two.append(lockspan("sweep", plan, "--out", second, "--workers", "2", "--quiet").wall_s)
            again.append(lockspan("sweep", plan, "--out", first, "--quiet").wall_s)
            report.append(lockspan("report", first).wall_s)
        gain = ratio_of(one, two)
        # The report is made by one process whatever the number of workers.
        measured = [[x - y for x, y in zip(run, report, strict=True)] for run in (one, two)]
        alone = ratio_of(*measured)
        cores = f"{os.cpu_count()} cores"
        self.rows.append(
            (
                f"sweep of the demo, wall: one worker over two, measuring alone ({cores})",
                ratio_text(alone),
                ">= 1.7",
                "yes" if alone.median >= 1.7 else "no",
            )
        )
        self.rows.append((f"the same with the report ({cores})", ratio_text(gain), "none set", ""))
        self.rows.append(
            row(
                "the same again (everything stored), wall, against the first run",
                ratio_of(again, one),
                "well below 1",
                0.5,
            )
        )

    def table(self, load: float) -> str:
        """Return the table with its head."""
        facts = ask_child("versions")
        head = [
            "# Speed",
            "",
            f"Measured {date.today().isoformat()} by `python bench/run.py`, {os.cpu_count()} cores "
            f"({facts['machine']}), Python {facts['python']}, numpy {facts['numpy']}, scipy "
            f"{facts['scipy']}; one arithmetic thread a process. Load of the machine when it "
            f"began: {load:.1f} (the runs of others; ratios bear it, wall times do not).",
            "",
            "Captures: 2 channels of 1 kHz at 51.2 kHz, 16 bit, a staircase of detunings "
            "(`bench/inputs.py`). Ratios are medians over the rounds, with the smallest and the "
            "largest. By hand: `bench/byhand.py`.",
            "",
            "| what | measured | goal | met |",
            "|---|---|---|---|",
        ]
        lines = [f"| {' | '.join(cells)} |" for cells in self.rows]
        return "\n".join([*head, *lines, "", *(f"- {text}" for text in self.remarks), ""])


def main(words: Sequence[str] | None = None) -> None:
    """Run the sections that are asked for and write the table."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--rounds", type=int, default=7)
    parser.add_argument("--sweeps", type=int, default=2, help="rounds of the sweep")
    parser.add_argument("--long", action="store_true", help="1e8 and 1e9 frames too")
    parser.add_argument("--hand-1e8", action="store_true", help="by hand at 1e8 frames too")
    parser.add_argument("--only", help="sections, by comma: pass,commands,memory,...")
    parser.add_argument("--out", type=Path, default=ROOT / "bench" / "speed.md")
    options = parser.parse_args(words)
    load = os.getloadavg()[0] if hasattr(os, "getloadavg") else math.nan
    folder = Path(tempfile.mkdtemp(prefix="lockspan-bench-"))
    bench = Bench(folder, options.rounds, options.sweeps)
    try:
        for name, section in sections(bench, options).items():
            if options.only is None or name in options.only.split(","):
                print(f"{name} ...", file=sys.stderr, flush=True)
                section()
                # After each section, so that hours are not lost with the last one.
                options.out.write_text(bench.table(load), encoding="utf-8")
    finally:
        shutil.rmtree(folder)
    print(options.out.read_text(encoding="utf-8"))


def sections(bench: Bench, options: Any) -> dict[str, Callable[[], None]]:
    """Return the sections by name, in their order."""
    lengths = [10**6, 10**7] + ([10**8] if options.long else [])
    longest = [*lengths, 10**9] if options.long else lengths

    def passes() -> None:
        for frames in lengths:
            bench.compare_pass(frames, hand=frames <= 10**7)

    def commands() -> None:
        for frames in lengths:
            bench.compare_commands(frames, hand=frames <= 10**7 or options.hand_1e8)

    return {
        "pass": passes,
        "codings": bench.codings,
        "commands": commands,
        "memory": lambda: bench.memory(longest),
        "exponent": lambda: bench.exponent(longest),
        "start": bench.start_values,
        "startup": bench.startup,
        "sweep": bench.sweep,
    }


if __name__ == "__main__":
    main()
