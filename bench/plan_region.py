"""Does a plan keep its promise, and what does refinement save? Simulated campaigns.

Run from the project root: python bench/plan_region.py [--sweeps 60]
Compares, at equal dwell, 21 even points, 11 even points, and 11 even points followed by 8
that `lockspan plan` proposes from the region fitted to the first 11. Truth as in
bench/coverage_region.py. The table is bench/plan_region.md. Units: coupling 1 rad/s.
"""

from __future__ import annotations

import argparse
import datetime
import math
import sys
import zlib
from pathlib import Path

import numpy as np

ROOT = Path(__file__).resolve().parent.parent
sys.path.insert(0, str(ROOT))

from bench.coverage_region import (  # noqa: E402 - needs the path above
    CENTRE,
    edge_errors,
    simulate_points,
)
from fit.difference import Order  # noqa: E402
from fit.plan_next import NextGoal, next_points  # noqa: E402
from fit.planning import Expected, edge_u_hz, point_information  # noqa: E402
from fit.records import RegionPoint  # noqa: E402
from fit.region import RegionRules, fit_region  # noqa: E402

CELLS = ((0.03, 100.0), (0.01, 100.0))
SIGMA = 0.1
RULES = RegionRules(order=Order(n=1, m=1))
# Wider than the default: before a campaign nobody knows the coupling to a tenth.
SPANS = {"even 11": (11, 1.8), "even 21": (21, 1.8)}


def take(
    drives: list[float], cell: tuple[float, float], rng: np.random.Generator, first: int = 0
) -> list[RegionPoint]:
    """Return points measured at some drives."""
    return simulate_points(np.array(drives), (*cell, SIGMA, 0.0), rng, first)


def refine(
    points: list[RegionPoint], cell: tuple[float, float], rng: np.random.Generator
) -> list[RegionPoint]:
    """Return the points with eight more, placed by the plan, each of the usual dwell."""
    goal = NextGoal(edge_u_hz=1e-9, most_points=8)
    proposed = next_points(points, fit_region(points, RULES), goal)
    drives = [point.drive_hz * math.tau for point in proposed]
    return [*points, *take(drives, cell, rng, first=len(points))]


def promise(points: list[RegionPoint], diffusion: float) -> float:
    """Return what the plan promises for these places, in units of the coupling."""
    expected = Expected(
        coupling_hz=1.0 / math.tau, noise_rad2_s=diffusion, measurement_noise_rad=SIGMA
    )
    detuning = np.array([CENTRE - point.drive_hz * math.tau for point in points])
    lengths = np.array([point.series.duration_s for point in points])
    total = point_information(expected, detuning, lengths).sum(axis=0)
    return max(edge_u_hz(total, 1)) * math.tau


def main() -> None:
    """Simulate all campaigns and write the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--sweeps", type=int, default=60)
    parser.add_argument("--cells", type=int, default=len(CELLS), help="how many of the cells")
    options = parser.parse_args()
    rows = []
    for cell in CELLS[: options.cells]:
        rng = np.random.default_rng(zlib.crc32(repr(cell).encode()))
        errors: dict[str, list[float]] = {}
        scores: dict[str, list[float]] = {}
        promised: dict[str, list[float]] = {}
        for _ in range(options.sweeps):
            runs = {
                name: take(list(np.linspace(-span, span, count)), cell, rng)
                for name, (count, span) in SPANS.items()
            }
            runs["even 11 + 8 planned"] = refine(runs["even 11"], cell, rng)
            for name, points in runs.items():
                found = edge_errors(fit_region(points, RULES))
                errors.setdefault(name, []).extend(error for error, _, _ in found)
                scores.setdefault(name, []).extend(error / u for error, u, _ in found)
                promised.setdefault(name, []).append(promise(points, cell[0]))
        for name, values in errors.items():
            rms = float(np.sqrt(np.mean(np.square(values))))
            z = float(np.sqrt(np.mean(np.square(scores[name]))))
            said = float(np.mean(promised[name]))
            worst = float(np.max(np.abs(values)))
            rows.append(
                f"| {cell[0]:g} | {cell[1]:g} | {name} | {len(values)} | {rms:.4f} | {said:.4f} "
                f"| {rms / said:.2f} | {z:.2f} | {worst:.3f} |"
            )
    head = [
        "# Does a plan keep its promise?",
        "",
        f"Made by bench/plan_region.py on {datetime.date.today().isoformat()}, "
        f"{options.sweeps} campaigns a cell, one level; coupling 1 rad/s, sigma {SIGMA} rad, even "
        "points over +-1.8 couplings. promised: the standard uncertainty of an edge that the "
        "plan states (its margin included); z rms: error over the u of the fit.",
        "",
        "| D | dwell | points | edges | edge rms | promised | rms/promised | z rms | worst |",
        "|" + "---|" * 9,
    ]
    (ROOT / "bench" / "plan_region.md").write_text("\n".join([*head, *rows]) + "\n")


if __name__ == "__main__":
    main()
