"""Coverage and efficiency of the single-record estimate over the whole grid.

Run from the project root: python bench/coverage_adler.py [--records 1000] [--longest 300]
Each finished cell goes to bench/coverage_adler.json, so a stopped run resumes; the table is
bench/coverage_adler.md. Several runs share the cells with --share 0/2 and --share 1/2, each
with a --store of its own; --merge FILE ... joins such stores into one table. --bootstrap
measures the bootstrap of a few short cells instead (bench/coverage_bootstrap.md). Truth comes
from tests/helpers_adler.py (fine-step integration). Units: coupling 1 rad/s.
"""

from __future__ import annotations

import argparse
import datetime
import json
import math
import sys
import time
import zlib
from itertools import product
from pathlib import Path

import numpy as np

ROOT = Path(__file__).resolve().parent.parent
sys.path.insert(0, str(ROOT))

from bench.bootstrap_adler import bootstrap_intervals  # noqa: E402 - needs the path above
from fit.adler import estimate_adler  # noqa: E402
from fit.likelihood import make_lanes, record_likelihood  # noqa: E402
from fit.records import AdlerEstimate, PsiSeries  # noqa: E402
from tests.helpers_adler import Pair, simulate_psi  # noqa: E402

RATIOS = (0.0, 0.5, 0.9, 1.1, 1.5, 3.0, 10.0)
DIFFUSIONS = (0.003, 0.03, 0.3)
NOISES = (0.0, 0.1)
BEATS = (3, 10, 30, 100, 300)
BLOCK = 250
QUANTITIES = ("detuning_hz", "coupling_hz", "offset_rad", "noise_rad2_s")


def step_of(ratio: float, beats: int) -> float:
    """Return the sampling step: 20-30 samples a beat, 10-20 in long records."""
    if beats < 100:
        return min(0.2, 0.5 / max(1.0, ratio))
    return min(0.25, 0.39 / (0.5 * ratio + 1.0), 0.5 / max(1.0, ratio))


def duration_of(ratio: float, beats: int) -> float:
    """Return the record length: beats of the noise-free beat or relaxation period."""
    return beats * math.tau / math.sqrt(abs(ratio**2 - 1.0))


def measure_cell(pair: Pair, beats: int, records: int, seed: int) -> dict[str, object]:
    """Return counts, coverages and errors of one cell."""
    rng = np.random.default_rng(seed)
    step = step_of(pair.detuning, beats)
    samples = int(duration_of(pair.detuning, beats) / step) + 1
    estimates: list[AdlerEstimate] = []
    used_s, bound = 0.0, None
    for first in range(0, records, BLOCK):
        psi = simulate_psi(pair, (min(BLOCK, records - first), samples), step, rng)
        series = [PsiSeries(step_s=step, segments=(row,), start_s=(0.0,)) for row in psi]
        if bound is None:
            bound = bound_of(pair, series[:100])
        begin = time.process_time()
        estimates += estimate_adler(series)
        used_s += time.process_time() - begin
    cell: dict[str, object] = {"samples": samples, "ms": 1e3 * used_s / records, "bound": bound}
    for name in QUANTITIES:
        cell[name] = _score(estimates, name, pair)
    return cell


def bound_of(pair: Pair, series: list[PsiSeries]) -> list[float]:
    """Return the error bounds of detuning and coupling: mean information at the truth."""
    a = pair.coupling * math.sin(pair.offset)
    b = -pair.coupling * math.cos(pair.offset)
    noise = max(pair.noise**2, 1e-3 * 2.0 * pair.diffusion * series[0].step_s)
    theta = np.array([pair.detuning, a, b, math.log(pair.diffusion), math.log(noise)])
    batch, owner = make_lanes(series)
    found = record_likelihood(batch, owner, np.tile(theta, (len(series), 1)))
    covariance = np.linalg.inv(np.mean(found.information, axis=0))
    slope = np.array([0.0, a, b, 0.0, 0.0]) / pair.coupling
    return [math.sqrt(covariance[0, 0]), math.sqrt(slope @ covariance @ slope)]


def _score(estimates: list[AdlerEstimate], name: str, pair: Pair) -> dict[str, float]:
    """Return how many records gave the quantity, how many covered, and the errors."""
    truth = {
        "detuning_hz": pair.detuning / math.tau,
        "coupling_hz": pair.coupling / math.tau,
        "offset_rad": pair.offset,
        "noise_rad2_s": pair.diffusion,
    }[name]
    given = [getattr(one, name) for one in estimates if getattr(one, name).value is not None]
    if not given:
        return {"given": 0, "covered": 0, "rms": 0.0, "bias": 0.0}
    error = np.array([one.value - truth for one in given])
    covered = sum(one.low <= truth <= one.high for one in given)
    below = sum(truth < one.low for one in given)
    # Trimmed like the study behind the goals: the worst 2 % say nothing of the bound.
    kept = np.sort(np.abs(error))[: max(1, int(0.98 * error.size))]
    return {
        "given": len(given),
        "covered": int(covered),
        "truth_below": int(below),
        "rms": float(np.sqrt(np.mean(kept**2))),
        "bias": float(np.median(error / np.array([one.u for one in given]))),
    }


def main() -> None:
    """Measure the cells that are not in the store yet, shortest first, and write the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--records", type=int, default=1000)
    parser.add_argument("--longest", type=int, default=300)
    parser.add_argument("--store", type=Path, default=ROOT / "bench" / "coverage_adler.json")
    parser.add_argument("--share", default="0/1", help="which of how many shares of the cells")
    parser.add_argument("--merge", type=Path, nargs="*", default=[], help="stores to join")
    parser.add_argument("--bootstrap", action="store_true", help="a few short cells by bootstrap")
    options = parser.parse_args()
    if options.bootstrap:
        measure_bootstraps(ROOT / "bench" / "coverage_bootstrap.md")
        return
    store = json.loads(options.store.read_text()) if options.store.exists() else {}
    for other in options.merge:
        store.update(json.loads(other.read_text()))
    if options.merge:
        write(options.store, store)
        return
    share, shares = (int(part) for part in options.share.split("/"))
    cells = list(product(BEATS, RATIOS, DIFFUSIONS, NOISES))
    for beats, ratio, diffusion, noise in cells[share::shares]:
        key = f"{ratio:g}/{diffusion:g}/{beats}/{noise:g}/{options.records}"
        if beats > options.longest or key in store:
            continue
        pair = Pair(detuning=ratio, diffusion=diffusion, noise=noise)
        store[key] = measure_cell(pair, beats, options.records, zlib.crc32(key.encode()))
        write(options.store, store)


# Short records whose ratio interval leans most on what it knows of D: x, D, sigma; 3 beats.
SHORT_CELLS = ((1.5, 0.03, 0.0), (3.0, 0.03, 0.1), (3.0, 0.003, 0.1), (10.0, 0.03, 0.1))
SHORT_RECORDS, REPLICATES = 200, 99


def measure_bootstraps(path: Path) -> None:
    """Write the coverage of both intervals over short cells, after each cell."""
    rows = []
    for cell in SHORT_CELLS:
        rows.append(bootstrap_row(*cell))
        path.write_text("\n".join([*BOOTSTRAP_HEAD, *rows]) + "\n")


def bootstrap_row(ratio: float, diffusion: float, noise: float) -> str:
    """Return the row of one short cell: coverage of the ratio's and the bootstrap's intervals."""
    pair = Pair(detuning=ratio, diffusion=diffusion, noise=noise)
    step = step_of(ratio, 3)
    samples = int(duration_of(ratio, 3) / step) + 1
    rng = np.random.default_rng([3, zlib.crc32(f"{ratio:g}/{diffusion:g}/{noise:g}".encode())])
    psi = simulate_psi(pair, (SHORT_RECORDS, samples), step, rng)
    series = [PsiSeries(step_s=step, segments=(row,), start_s=(0.0,)) for row in psi]
    plain = estimate_adler(series)
    strapped = [bootstrap_intervals(one, rng=rng, replicates=REPLICATES) for one in series]
    shares = []
    for name, truth in (("detuning", ratio), ("coupling", 1.0)):
        ratios = [getattr(one, f"{name}_hz") for one in plain]
        for found in (ratios, [one[name] for one in strapped]):
            shares.append(_share(found, truth / math.tau))
    return f"| {ratio:g} | {diffusion:g} | {noise:g} | {samples} | " + " | ".join(shares) + " |"


def _share(found: list, truth: float) -> str:
    """Return the share of given intervals that hold the truth, and how many were given."""
    given = [one for one in found if one.value is not None]
    inside = sum(one.low <= truth <= one.high for one in given)
    return f"{100.0 * inside / max(len(given), 1):.1f} ({len(given)})"


BOOTSTRAP_HEAD = [
    "# Bootstrap and likelihood ratio in short records",
    "",
    f"Made by bench/coverage_adler.py --bootstrap on {datetime.date.today().isoformat()}: coverage "
    f"in per cent of 95 % intervals over {SHORT_RECORDS} records of three beats (one figure is "
    "known to 1.5 %), in brackets how many records gave a value; the bootstrap "
    f"(bench/bootstrap_adler.py, bootstrap-t, {REPLICATES} replicates) asks no record whether it "
    "determines anything. It holds the truth less often than the ratio: where the record does not "
    "show its phase noise the simulated records have none, so the tool does not offer it.",
    "",
    "| x | D | sigma | samples | dw, ratio | dw, bootstrap | K, ratio | K, bootstrap |",
    "|---|---|---|---|---|---|---|---|",
]


def write(path: Path, store: dict[str, dict]) -> None:
    """Write the store and its table."""
    path.write_text(json.dumps(store, indent=0, sort_keys=True) + "\n")
    path.with_suffix(".md").write_text(table(store))


def table(store: dict[str, dict]) -> str:
    """Return the table in markdown, with what was asked and what was found on top."""
    rows = sorted(store.items(), key=lambda item: [float(part) for part in item[0].split("/")])
    lines = [_row(key, cell) for key, cell in rows]
    return "\n".join([*_head(store), *lines]) + "\n"


def _row(key: str, cell: dict) -> str:
    ratio, diffusion, beats, noise, records = key.split("/")
    parts = []
    for place, name in enumerate(("detuning_hz", "coupling_hz")):
        score = cell[name]
        bound = cell["bound"][place]
        meaning = bound < 0.25 and score["given"] > 0.9 * int(records)
        ratio_text = f"{score['rms'] * math.tau / bound:.2f}" if meaning else "-"
        parts += [_percent(score), ratio_text]
    parts += [_percent(cell["offset_rad"]), _percent(cell["noise_rad2_s"])]
    null = 100.0 * (1.0 - cell["coupling_hz"]["given"] / int(records))
    front = [ratio, diffusion, noise, beats, records, str(cell["samples"]), f"{null:.1f}"]
    return "| " + " | ".join([*front, *parts, f"{cell['ms']:.1f}"]) + " |"


def _percent(score: dict) -> str:
    """Return the coverage in per cent with a mark where 95 % is rejected at p < 0.001."""
    if not score["given"]:
        return "-"
    mark = {-1: " low", 0: "", 1: " high"}[verdict(score)]
    return f"{100.0 * score['covered'] / score['given']:.1f}{mark}"


def verdict(score: dict) -> int:
    """Return -1 or 1 where the binomial test rejects 95 % coverage at p < 0.001, else 0."""
    from scipy.stats import binom

    given, covered = int(score["given"]), int(score["covered"])
    if not given:
        return 0
    if binom.cdf(covered, given, 0.95) < 0.0005:
        return -1
    return 1 if binom.sf(covered - 1, given, 0.95) < 0.0005 else 0


REMARKS = (
    "One test in a thousand rejects by chance: the offset of x 3, D 0.003, sigma 0.1, 30 beats "
    "held in 95.5 % of 2,000 fresh records. Cells too high, and why:",
    "",
    "- D of steady locks of three beats (95 and 109 samples): the relaxation rate, D and the "
    "measurement noise are told apart by the same few samples; both ends lie too far out, and a "
    "quarter of the records, those with the largest error of D, give none.",
    "- D where measurement noise nearly hides it and only part of the records pass its gate (D "
    "0.03 at 3 and 10 beats, D 0.003 at 30 and 100, sigma 0.1): the lower end allows for the luck "
    "of having passed, and the upper end is not drawn in.",
    "- Detuning of x 10, D 0.003, sigma 0.1, 3 beats (38 samples): D is not seen there, nor in "
    "many records with ten times that D, and no record tells which of the two it is; the "
    "interval that is right for the larger D (94 to 96 %) is too wide for the smaller.",
    "- Detuning and offset inside the locking region by slips (x 0.5 and 0.9, D 0.3): intervals "
    "allow for the luck of having slipped often enough to give a value; they stand at the limit.",
    "",
    "Without measurement noise most intervals of D that fail lie below the truth: the measurement "
    "noise is bounded by zero on one side. At 100 and 300 beats they hold in 92.5 to 96 %: the "
    "cell that is too low is of these. For the detuning of x 10, D 0.003, sigma 0.1, 100 beats no "
    "reason was found.",
    "",
    "Cells with x from 1.5 on, with D 0.3 and those of 10 beats and more without measurement noise "
    "were measured just before locked records got longer lanes, which those do not need: of ten "
    "such cells run again, 0 to 5 of 1,000 values of D changed, and nothing else.",
)


def _missing(store: dict[str, dict]) -> str:
    """Return how many cells of which lengths have not been run."""
    cells = len(RATIOS) * len(DIFFUSIONS) * len(NOISES)
    left = {n: cells - sum(key.split("/")[2] == str(n) for key in store) for n in BEATS}
    parts = [f"{count} of {cells} at {beats} beats" for beats, count in left.items() if count]
    return ", ".join(parts) or "none"


def _head(store: dict[str, dict]) -> list[str]:
    """Return the title, the pooled figures and the head of the table."""
    lines = [
        "# Coverage of the single-record estimate",
        "",
        f"Made by bench/coverage_adler.py on {datetime.date.today().isoformat()}; "
        f"{len(store)} cells measured. Coupling 1 rad/s; x = detuning/coupling; D in units of "
        "the coupling; sigma in rad; a beat is 2 pi/sqrt|detuning^2 - coupling^2|.",
        "Records whose coupling is null are counted apart (column null %); coverage is of the "
        "95 % intervals of the others. low/high: the binomial test rejects 95 % at p < 0.001. "
        "rms/bound: root-mean-square error (worst 2 % left out) over the bound, where the bound "
        "is below a quarter of the coupling and nine tenths of the records give a value. "
        f"Cells run shortest records first; not run: {_missing(store)}.",
        "",
        *REMARKS,
        "",
    ]
    for name in QUANTITIES:
        scores = [cell[name] for cell in store.values()]
        given, covered = (sum(score[k] for score in scores) for k in ("given", "covered"))
        low, high = (sum(verdict(score) == side for score in scores) for side in (-1, 1))
        if given:
            lines.append(
                f"- {name}: pooled {100.0 * covered / given:.2f} % of {given} intervals; "
                f"cells too low {low}, too high {high}"
            )
    names = "x,D,sigma,beats,records,samples,null %,dw cover,dw rms/bound,K cover,K rms/bound"
    columns = [*names.split(","), "psi0 cover", "D cover", "ms a record"]
    return [*lines, "", "| " + " | ".join(columns) + " |", "|" + "---|" * len(columns)]


if __name__ == "__main__":
    main()
