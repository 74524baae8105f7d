"""psi thinned to the step that the likelihood needs: samples taken, never averaged.

The filter of ``fit.likelihood`` takes psi as point samples with white measurement noise.
Averaging over a step would correlate the increments of a diffusing phase and lower the noise
D found by up to a third (measured on the injected circuit: 0.050 instead of 0.072 rad2/s),
and so does a step much below the smearing time of the phase band. So every q-th sample is
taken, q from three times that want a step and two that forbid it to be shorter.
"""

from __future__ import annotations

import math

import numpy as np

from fit.difference import PhaseDifference, valid_runs
from fit.records import PsiSeries
from rig.angles import TURN_RAD
from rig.arrays import FloatArray, median, quantile

PER_TURN = 30.0  # samples over the fastest turn of psi; 12 are enough, 30 lose nothing
PER_RELAXATION = 8.0  # samples over the time in which a locked psi forgets
# Steps of two smearing times: of one, neighbouring samples still share some of the filter and
# the coupling of 24 locked records of the injected circuit comes out 8 % low on the mean, of
# two 4 %, of three no better.
SMEAR_SHARE = 2.0
FEWEST_PER_TURN = 12.0  # below this a fast drift is followed worse: down to one smearing time
LEAST_SAMPLES = 200  # a short record is not thinned below this
MOST_SAMPLES = 4000  # 300 beats at 12 samples each; more adds time and nothing else
FASTEST_SHARE = 0.995  # quantile of |dpsi/dt| taken as the fastest: single spikes do not count


def thin_difference(difference: PhaseDifference) -> PsiSeries:
    """Return psi at the step that the likelihood needs, each valid stretch apart.

    Parameters
    ----------
    difference : PhaseDifference

    Returns
    -------
    PsiSeries
        Without segments when no valid stretch holds two samples. ``noise_start_rad2`` is the
        median variance that the phases state.

    Notes
    -----
    The step is the shortest of a 30th of the fastest turn and an eighth of the relaxation
    time in lock, but not below two smearing times of the band (one
    where 12 samples of a fast turn ask for it) nor one cycle of the slower
    oscillator for phases that hold one value a cycle, and such that between 200 and 4,000
    samples remain where the record allows it.
    """
    runs = [difference.psi_rad[a:b] for a, b in valid_runs(difference.valid)]
    stride = _stride(difference, runs)
    kept = [
        (difference.start_s + a / difference.rate_hz, difference.psi_rad[a:b:stride].copy())
        for a, b in valid_runs(difference.valid)
        if b - a > stride
    ]
    noise = difference.u_rad[difference.valid]
    return PsiSeries(
        step_s=stride / difference.rate_hz,
        segments=tuple(values for _, values in kept),
        start_s=tuple(start_s for start_s, _ in kept),
        noise_start_rad2=median(noise) ** 2 if noise.size else None,
        lost_s=difference.lost_s,
    )


def _stride(difference: PhaseDifference, runs: list[FloatArray]) -> int:
    """Return how many grid samples one step of the series spans."""
    total = sum(run.size for run in runs)
    if total < 2:
        return 1
    rate_hz = difference.rate_hz
    # smear_s is the time of a whole step; the band passes noise up to half its inverse.
    turn_step_s = _turn_step_s(difference, runs)
    few_s = turn_step_s * PER_TURN / FEWEST_PER_TURN
    apart_s = max(min(SMEAR_SHARE * difference.smear_s, few_s), difference.smear_s)
    shortest_s = max(apart_s, 1.0 / rate_hz)
    if difference.band_half_hz is None:
        shortest_s = max(shortest_s, 1.0 / difference.cycle_rate_hz)
    wanted_s = min(turn_step_s, _relaxation_step_s(runs, rate_hz))
    # A psi that never moves (one signal in both channels) wants no step at all.
    step_s = min(max(wanted_s, shortest_s), total / rate_hz)
    stride = max(1, math.floor(step_s * rate_hz))
    stride = min(stride, max(1, total // LEAST_SAMPLES))
    return max(stride, math.ceil(total / MOST_SAMPLES))


def _turn_step_s(difference: PhaseDifference, runs: list[FloatArray]) -> float:
    """Return a 30th of the time of the fastest turn seen."""
    lag = max(1, round(difference.smear_s * difference.rate_hz))
    moves = [np.abs(run[lag:] - run[:-lag]) for run in runs if run.size > lag]
    if not moves:
        return math.inf
    fastest = quantile(np.concatenate(moves), FASTEST_SHARE) * difference.rate_hz / lag
    return TURN_RAD / (PER_TURN * fastest) if fastest > 0 else math.inf


def _relaxation_step_s(runs: list[FloatArray], rate_hz: float) -> float:
    """Return an eighth of the correlation time of psi in the longest stretch.

    Taken about its mean; a drifting psi gives a long time, which then does not matter.
    """
    longest = max(runs, key=lambda run: run.size)
    away = longest - longest.mean()
    power = float(away @ away)
    if not power > 0:
        return math.inf
    lag = 1
    while lag < away.size // 4 and float(away[lag:] @ away[:-lag]) / power > math.exp(-1.0):
        lag *= 2
    return lag / rate_hz / PER_RELAXATION
