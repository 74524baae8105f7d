"""Bootstrap intervals of one record: simulate what was fitted, fit that, see how far it strays.

Measured beside the likelihood ratio by bench/coverage_adler.py --bootstrap and not part of the
tool: in short records it holds the truth less often (bench/coverage_bootstrap.md), because what
a record cannot see of its phase noise the simulation does not know either.
"""

from __future__ import annotations

import math

import numpy as np

from fit.adler_fit import AdlerSettings, covariance_of, fit_records, lane_samples
from fit.identify import RecordFit, unusable
from fit.intervals import TARGETS, coupling_rad_s, lifted
from fit.lanes import make_lanes
from fit.likelihood import record_likelihood
from fit.records import PsiSeries
from rig.angles import hz_from_rad_s
from rig.arrays import FloatArray
from rig.quantities import Quantity, undetermined

# Sub-steps of the simulation: no more than this phase in one.
SUBSTEP_RAD = 0.05
# Share of replicates that must settle for the interval to mean something.
LEAST_SETTLED = 0.9
NORMAL_975 = 1.959964


def bootstrap_intervals(
    record: PsiSeries, *, rng: np.random.Generator, replicates: int = 199
) -> dict[str, Quantity]:
    """Return detuning and coupling of one record with 95 % bootstrap-t intervals.

    Parameters
    ----------
    record : PsiSeries
        Without a phase band that smooths (``lost_s`` 0): the simulation knows none.
    rng : numpy Generator
    replicates : int
        Simulated records.

    Returns
    -------
    dict
        "detuning" and "coupling", Hz; undetermined where the record or too many of its
        replicates cannot be fitted. Whether the record determines them is asked of
        ``fit.adler.estimate_adler``.

    Notes
    -----
    t* = (estimate* - estimate)/u* of records simulated from the fit, with the same samples and
    the same first angle; the interval is the estimate minus u times the quantiles of t*.

    References
    ----------
    Efron and Tibshirani 1993, An Introduction to the Bootstrap, section 12.5 (recalled).
    """
    rules = AdlerSettings(intervals=False)
    reason = unusable(record, rules.least_samples)
    if reason:
        return {name: undetermined("Hz", reason) for name in ("detuning", "coupling")}
    fit = fit_records([record], [None], rules)[0]
    made = simulate_fit(record, fit, replicates, rng)
    again = fit_records(made, [None] * replicates, rules)
    settled = [k for k, one in enumerate(again) if one.converged]
    if not fit.converged or len(settled) < LEAST_SETTLED * replicates:
        reason = "the fit or too many of its simulated records did not settle"
        return {name: undetermined("Hz", reason) for name in ("detuning", "coupling")}
    value, u = _values([record], [fit])
    values, us = _values([made[k] for k in settled], [again[k] for k in settled])
    return {
        name: _interval(float(value[0, column]), float(u[0, column]), spread)
        for column, name in enumerate(("detuning", "coupling"))
        for spread in [(values[:, column] - value[0, column]) / us[:, column]]
    }


def simulate_fit(
    record: PsiSeries, fit: RecordFit, replicates: int, rng: np.random.Generator
) -> list[PsiSeries]:
    """Return records like the given one, simulated from its fit.

    Parameters
    ----------
    record : PsiSeries
    fit : RecordFit
    replicates : int
    rng : numpy Generator
    """
    parts = [_paths(part, record.step_s, fit, replicates, rng) for part in record.segments]
    return [
        PsiSeries(
            step_s=record.step_s,
            segments=tuple(part[k] for part in parts),
            start_s=record.start_s,
        )
        for k in range(replicates)
    ]


def _paths(
    part: FloatArray, step_s: float, fit: RecordFit, replicates: int, rng: np.random.Generator
) -> FloatArray:
    """Return simulated segments (replicates, samples) by stochastic Heun steps."""
    dw, a, b, log_diffusion, log_noise = fit.theta.tolist()
    substeps = max(2, math.ceil(step_s * (abs(dw) + math.hypot(a, b)) / SUBSTEP_RAD))
    dt = step_s / substeps
    kick = math.sqrt(2.0 * dt) * math.exp(0.5 * log_diffusion)
    psi = np.full(replicates, float(part[0]) if part.size else 0.0)
    seen = np.empty((replicates, part.size))
    for sample in range(part.size):
        seen[:, sample] = psi
        for _ in range(substeps):
            shock = kick * rng.standard_normal(replicates)
            slope = dw + a * np.cos(psi) + b * np.sin(psi)
            ahead = psi + dt * slope + shock
            psi = psi + 0.5 * dt * (slope + dw + a * np.cos(ahead) + b * np.sin(ahead)) + shock
    return seen + math.exp(0.5 * log_noise) * rng.standard_normal(seen.shape)


def _values(series: list[PsiSeries], fits: list[RecordFit]) -> tuple[FloatArray, FloatArray]:
    """Return detuning and coupling (rad/s) and their standard errors, where D is seen, (M, 2)."""
    theta = np.array([fit.theta for fit in fits])
    step_s = np.array([record.step_s for record in series])
    samples = np.array([sum(part.size for part in record.segments) for record in series])
    seen = lifted(theta, step_s, samples)
    lengths = [
        lane_samples(record, row, AdlerSettings()) for record, row in zip(series, seen, strict=True)
    ]
    covariance = covariance_of(record_likelihood(*make_lanes(series, lengths), seen).information)
    slopes = [TARGETS[name](theta) for name in ("detuning", "coupling")]
    u = [np.sqrt(np.einsum("mi,mij,mj->m", slope, covariance, slope)) for slope in slopes]
    return np.stack([theta[:, 0], coupling_rad_s(theta)], axis=-1), np.stack(u, axis=-1)


def _interval(value: float, u: float, spread: FloatArray) -> Quantity:
    """Return the bootstrap-t interval of one quantity, Hz."""
    low, high = (value - u * float(np.quantile(spread, share)) for share in (0.975, 0.025))
    return Quantity(
        value=hz_from_rad_s(value),
        u=hz_from_rad_s(max(high - low, 0.0) / (2.0 * NORMAL_975)),
        unit="Hz",
        low=hz_from_rad_s(min(low, value)),
        high=hz_from_rad_s(max(high, value)),
        level=0.95,
    )
