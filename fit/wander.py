"""Does the free detuning wander within a record? Batch means beside the white-noise model.

The model error of a detuning assumes white frequency noise. Slow wander breaks it; means over
ten batches of the record, each with the coupling held, show the wander without a model of it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from fit.quantiles import chi_square_above, student_above
from fit.records import PsiSeries
from rig.arrays import FloatArray

BATCHES = 10
# Chance of calling wander where there is none.
WANDER_SIZE = 0.01


@dataclass(frozen=True, slots=True, kw_only=True)
class Wander:
    """Spread of the detuning over batches against what white noise explains.

    ``mean_u_rad_s`` is the batch-means standard error of the record mean (already widened by
    the t quantile), ``spread_rad_s`` the standard deviation of the batch detunings beyond the
    white-noise part (0 when ``fired`` is false), ``ratio`` the variance ratio tested.
    """

    fired: bool
    ratio: float
    threshold: float
    mean_u_rad_s: float
    spread_rad_s: float


def find_wander(record: PsiSeries, theta: FloatArray) -> Wander | None:
    """Return the wander of the detuning within one record, None when it is too short.

    Parameters
    ----------
    record : PsiSeries
    theta : array, shape (5,), (dw, a, b, ln D, ln R)

    Notes
    -----
    The detuning of a batch is (psi(end) - psi(start) - int(a cos psi + b sin psi)) / length.
    White noise gives it the variance (2 D (length - lost) + 2 R)/length^2, lost the time that
    the phase band takes off increments. The ratio of the observed to
    that variance is tested against chi-square over its 9 degrees of freedom at 1 %.
    """
    values, lengths_s = _batch_detunings(record, theta)
    if values.size < BATCHES // 2:
        return None
    seen_s = lengths_s - min(record.lost_s, record.step_s)
    noise = 2.0 * (math.exp(theta[3]) * seen_s + math.exp(theta[4])) / lengths_s**2
    weights = lengths_s / np.sum(lengths_s)
    mean = float(weights @ values)
    freedom = values.size - 1
    ratio = float(np.sum((values - mean) ** 2 / noise)) / freedom
    threshold = chi_square_above(freedom, WANDER_SIZE) / freedom
    fired = ratio > threshold
    spread = float(np.sum((values - mean) ** 2)) / freedom
    wide = student_above(freedom, 0.025) / 1.96
    excess = max(spread - float(np.mean(noise)), 0.0) if fired else 0.0
    return Wander(
        fired=fired,
        ratio=ratio,
        threshold=threshold,
        mean_u_rad_s=wide * math.sqrt(spread / values.size),
        spread_rad_s=math.sqrt(excess),
    )


def _batch_detunings(record: PsiSeries, theta: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return the detuning of each batch (rad/s) and its length (s)."""
    total = sum(max(part.size - 1, 0) for part in record.segments)
    samples = max(total // BATCHES, 1)
    damping = math.exp(0.5 * min(math.exp(theta[4]), 1.0))
    values: list[float] = []
    lengths: list[float] = []
    for y in record.segments:
        pull = damping * (theta[1] * np.cos(y) + theta[2] * np.sin(y))
        for first in range(0, y.size - samples, samples):
            last = first + samples
            inside = float(np.sum(0.5 * (pull[first:last] + pull[first + 1 : last + 1])))
            length_s = samples * record.step_s
            values.append((y[last] - y[first] - inside * record.step_s) / length_s)
            lengths.append(length_s)
    if samples < 8:
        return np.zeros(0), np.zeros(0)
    return np.array(values), np.array(lengths)
