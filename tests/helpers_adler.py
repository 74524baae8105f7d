"""Noisy phase equation integrated step by step: truth for tests and benchmarks.

Shares nothing with the package: stochastic Heun steps much finer than the samples.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True, slots=True, kw_only=True)
class Pair:
    """A pair with known truth; rates in rad/s (or in units of the coupling)."""

    detuning: float
    coupling: float = 1.0
    offset: float = 0.7
    diffusion: float = 0.03
    noise: float = 0.1


def simulate_psi(
    pair: Pair, shape: tuple[int, int], step: float, rng: np.random.Generator
) -> np.ndarray:
    """Return psi of shape (records, samples) with measurement noise.

    Drifting records start anywhere, locked ones at the rest angle.
    """
    records, samples = shape
    ratio = pair.detuning / pair.coupling if pair.coupling else math.inf
    start = rng.uniform(-math.pi, math.pi, records)
    if abs(ratio) < 1.0:
        start = np.full(records, pair.offset + math.asin(ratio))
    return simulate_from(pair, start, samples, step, rng)


def simulate_from(
    pair: Pair, start: np.ndarray, samples: int, step: float, rng: np.random.Generator
) -> np.ndarray:
    """Return psi of shape (len(start), samples) from given starting angles."""
    fastest = abs(pair.detuning) + pair.coupling
    substeps = max(2, math.ceil(step * fastest / 0.06), math.ceil(step * pair.coupling / 0.025))
    dt = step / substeps
    kick = math.sqrt(2.0 * pair.diffusion * dt)
    psi = np.array(start, dtype=float)
    seen = np.empty((psi.size, samples))
    for index in range(samples):
        seen[:, index] = psi
        for _ in range(substeps):
            shock = kick * rng.standard_normal(psi.size)
            slope = pair.detuning - pair.coupling * np.sin(psi - pair.offset)
            ahead = psi + dt * slope + shock
            slope += pair.detuning - pair.coupling * np.sin(ahead - pair.offset)
            psi += 0.5 * dt * slope + shock
    return seen + pair.noise * rng.standard_normal(seen.shape)
