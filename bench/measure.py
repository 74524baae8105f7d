"""How the benchmarks measure: interleaved rounds, ratios with their spread, cost of a child.

Absolute times of a shared machine vary by half from minute to minute; the ratio of two things
timed right after one another does not. So everything is timed in rounds, one of each kind a
round in turn, and what is reported is the median of the ratios within the rounds, with the
smallest and the largest. The module imports nothing heavy: the peak memory the system states
for a child starts from the size of its parent.
"""

from __future__ import annotations

import json
import os
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parents[1]
SINGLE = dict.fromkeys(("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"), "1")
# What is installed is compiled; where compiling is switched off, each start would do it again.
COMPILED = {"PYTHONDONTWRITEBYTECODE": ""}
EXITS = (0, 1, 4)  # done, a limit failed, undecided: each is an answer
MIB = 1024.0 if sys.platform != "darwin" else 1024.0**2  # unit of the peak the system states


@dataclass(frozen=True, slots=True, kw_only=True)
class Cost:
    """Wall time, processor time (user and system) and peak of resident memory of a child."""

    wall_s: float
    cpu_s: float
    peak_mib: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Ratio:
    """Median of the ratios of all rounds, the smallest and the largest."""

    median: float
    low: float
    high: float
    rounds: int


def run_child(words: Sequence[str | Path]) -> Cost:
    """Return what a process cost from its start to its end.

    Parameters
    ----------
    words : sequence of str, the command

    Raises
    ------
    RuntimeError
        If it ends with a fault; that nothing can be decided is an answer.
    """
    began = time.perf_counter()
    with tempfile.TemporaryFile() as output:
        child = subprocess.Popen(
            [str(word) for word in words],
            stdout=output,
            stderr=output,
            env={**os.environ, **SINGLE, **COMPILED},
            cwd=ROOT,
        )
        _, status, usage = os.wait4(child.pid, 0)
        wall_s = time.perf_counter() - began
        child.returncode = os.waitstatus_to_exitcode(status)
        if child.returncode not in EXITS:
            output.seek(0)
            said = output.read()[-1000:].decode(errors="replace")
            raise RuntimeError(f"{words} ended with exit code {child.returncode}: {said}")
    return Cost(
        wall_s=wall_s, cpu_s=usage.ru_utime + usage.ru_stime, peak_mib=usage.ru_maxrss / MIB
    )


def ask_child(name: str, *words: str | int | Path) -> Any:
    """Return what one of the comparisons of ``inside.py`` prints, made in its own process."""
    command = [sys.executable, ROOT / "bench" / "inside.py", name, *words]
    found = subprocess.run(
        [str(word) for word in command],
        env={**os.environ, **SINGLE, **COMPILED},
        stdout=subprocess.PIPE,
        check=True,
    )
    return json.loads(found.stdout)


def time_rounds(actions: Mapping[str, Callable[[], object]], rounds: int) -> dict[str, list[float]]:
    """Return the processor seconds of each action in each round, all in turn.

    A round without timing goes first: caches, imports and pages are warm for all alike.
    """
    for action in actions.values():
        action()
    spent: dict[str, list[float]] = {name: [] for name in actions}
    for _ in range(rounds):
        for name, action in actions.items():
            began = time.process_time()
            action()
            spent[name].append(time.process_time() - began)
    return spent


def ratio_of(numerators: Sequence[float], denominators: Sequence[float]) -> Ratio:
    """Return the ratio of two things timed in the same rounds."""
    ratios = [a / b for a, b in zip(numerators, denominators, strict=True)]
    return Ratio(
        median=statistics.median(ratios), low=min(ratios), high=max(ratios), rounds=len(ratios)
    )
