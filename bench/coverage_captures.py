"""Coverage of the estimate through whole captures: waveforms, phases, then the estimate.

Run from the project root: python bench/coverage_captures.py [--pairs 360]
psi is integrated step by step at coupling 0.5 Hz, put on a carrier of 50 Hz with recorder noise
of 3 % and measured over 60 s; locked pairs come with a free-running capture of their own. Each
finished block goes to bench/coverage_captures.json, so a stopped run resumes; the table is
bench/coverage_captures.md.
"""

from __future__ import annotations

import argparse
import datetime
import json
import math
import sys
from collections import Counter
from dataclasses import replace
from itertools import product
from pathlib import Path

import numpy as np

ROOT = Path(__file__).resolve().parent.parent
sys.path.insert(0, str(ROOT))

from fit.analysis import MeasureSettings, estimate_all, prepare_tracks  # noqa: E402 - path above
from fit.freerun import estimate_free_run  # noqa: E402
from rig.angles import wrap_angle_rad  # noqa: E402
from rig.phases.estimate import track_one, track_pair  # noqa: E402
from tests.helpers_adler import Pair, simulate_psi  # noqa: E402
from tests.helpers_rigs import channels_of, pair_of  # noqa: E402

RATIOS = (0.5, 0.8, 1.1, 1.5, 2.0, 3.0)
DIFFUSIONS = (0.01, 0.03, 0.1)
RATE_HZ, CARRIER_HZ, COUPLING_HZ, SIGMA = 1000.0, 50.0, 0.5, 0.03
LENGTH_S, LEAD_S = 60.0, 4.0
BLOCK = 5  # captures of a cell simulated together
QUANTITIES = ("detuning_hz", "coupling_hz", "offset_rad", "noise_rad2_s")


def waves(psi: np.ndarray, rng: np.random.Generator):
    """Return reference and driven channel of a phase difference as a capture."""
    turning = math.tau * CARRIER_HZ * np.arange(psi.size) / RATE_HZ + 1.0
    rows = np.stack([np.cos(turning), np.cos(turning + psi)])
    return pair_of(rows + SIGMA * rng.standard_normal(rows.shape), RATE_HZ)


def measure(ratio: float, diffusion: float, count: int, seed: int) -> list[dict[str, object]]:
    """Return how each of some simulated captures of one cell came out."""
    rng = np.random.default_rng(seed)
    pair = Pair(detuning=ratio, diffusion=diffusion, noise=0.0, offset=rng.uniform(-3.0, 3.0))
    step = math.tau * COUPLING_HZ / RATE_HZ
    lead, frames = round(LEAD_S * RATE_HZ), round(LENGTH_S * RATE_HZ)
    psi = simulate_psi(pair, (count, lead + frames), step, rng)[:, lead:]
    alone = replace(pair, coupling=0.0)
    walks = simulate_psi(alone, psi.shape, step, rng) if ratio < 1.0 else [None] * count
    return [_row(pair, one, walk, rng) for one, walk in zip(psi, walks, strict=True)]


def _row(pair: Pair, psi: np.ndarray, walk: np.ndarray | None, rng) -> dict[str, object]:
    """Return value over truth and coverage of each quantity of one capture."""
    channels = channels_of(waves(psi, rng))
    free_runs = []
    if walk is not None:
        free_runs = [estimate_free_run(track_one(channels_of(waves(walk, rng))[1]), "driven")]
    settings = MeasureSettings()
    phases = replace(settings.phases, order=settings.order)
    tracks = track_pair(channels[0], channels[1], settings=phases)
    prepared = prepare_tracks(*tracks, channels[1], settings=settings, free_runs=free_runs)
    found = estimate_all([prepared], settings=settings)[0]
    truth = {
        "detuning_hz": pair.detuning * COUPLING_HZ,
        "coupling_hz": COUPLING_HZ,
        "offset_rad": pair.offset,
        "noise_rad2_s": pair.diffusion * math.tau * COUPLING_HZ,
    }
    row: dict[str, object] = {
        "ratio": pair.detuning,
        "diffusion": pair.diffusion,
        "tests": [test.name for test in found.adler.tests],
        "fired": [test.name for test in found.adler.tests if test.fired],
    }
    for name, value in truth.items():
        row[name] = _score(getattr(found.adler, name), value, angle=name == "offset_rad")
    return row


def _score(quantity, truth: float, *, angle: bool) -> list[float] | None:
    """Return (value over truth, covered), None without a value."""
    if quantity.value is None:
        return None
    if angle:
        truth = quantity.value + wrap_angle_rad(truth - quantity.value)
    return [quantity.value / truth, float(quantity.low <= truth <= quantity.high)]


def table(rows: list[dict]) -> str:
    """Return the tables in markdown."""
    lines = [
        "# Coverage through whole captures",
        "",
        f"Measured {datetime.date.today():%Y-%m-%d} by bench/coverage_captures.py: {len(rows)} "
        "captures of 60 s, beats and recorder noise as stated there; 95 % intervals. D in units "
        "of the coupling, locked pairs (ratio below 1) with a free-running capture.",
        "",
        "| ratio | captures | detuning | coupling | offset | D | D over truth |",
        "|---|---|---|---|---|---|---|",
    ]
    for ratio in (*RATIOS, None):
        own = [row for row in rows if ratio in (None, row["ratio"])]
        if not own:
            continue
        cells = []
        for name in QUANTITIES:
            given = [row[name][1] for row in own if row[name]]
            cells.append(f"{100 * np.mean(given):.1f} % of {len(given)}" if given else "-")
        shares = np.array([row["noise_rad2_s"][0] for row in own if row["noise_rad2_s"]])
        error = np.std(shares) / math.sqrt(max(shares.size, 1))
        name = "all" if ratio is None else f"{ratio:g}"
        lines.append(
            f"| {name} | {len(own)} | {' | '.join(cells)} | {np.mean(shares):.3f} ± {error:.3f} |"
        )
    fired = Counter(name for row in rows for name in row["fired"])
    tried = Counter(name for row in rows for name in row["tests"])
    lines += ["", "| adequacy test (size 1 %) | fired | of |", "|---|---|---|"]
    lines += [f"| {name} | {fired[name]} | {tried[name]} |" for name in sorted(tried)]
    return "\n".join(lines) + "\n"


def main() -> None:
    """Measure the blocks that are not in the store yet and write the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--pairs", type=int, default=360)
    parser.add_argument("--store", type=Path, default=ROOT / "bench" / "coverage_captures.json")
    options = parser.parse_args()
    store = json.loads(options.store.read_text()) if options.store.exists() else {}
    cells = [(ratio, diffusion) for ratio in RATIOS for diffusion in DIFFUSIONS]
    blocks = range(math.ceil(options.pairs / len(cells) / BLOCK))
    for seed, (_, cell) in enumerate(product(blocks, cells)):
        if str(seed) in store:
            continue
        store[str(seed)] = measure(*cell, BLOCK, seed)
        options.store.write_text(json.dumps(store, sort_keys=True) + "\n")
        rows = [row for block in store.values() for row in block]
        options.store.with_suffix(".md").write_text(table(rows))


if __name__ == "__main__":
    main()
