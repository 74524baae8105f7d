"""What two free oscillators would show over the same record: the parametric null.

Paths of psi with the drift and diffusion of the free-running captures (their uncertainties
drawn too), measurement noise added, at the times of the record. A record is judged by how
rarely these paths stay as close together as it does. Unlike shuffled or shifted records this
null holds its stated false-alarm rate (see ``fit.surrogates``).
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from fit.difference import PhaseDifference, valid_runs
from fit.holdtime import noise_of
from fit.rates import run_values
from fit.records import Baseline, Episode
from rig.angles import TURN_RAD, rad_s_from_hz
from rig.arrays import FloatArray, IntArray, distinct, median
from rig.quantities import Quantity

#: Points kept of a record: more changes no statistic of a slow motion by a percent.
POINTS = 128

#: Least cycles in a row outside the episodes that tell drift and diffusion there.
OUTSIDE_CYCLES = 4

#: Most paths drawn for one record.
MOST_PATHS = 19_999


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ThinRecord:
    """psi at a few valid samples; ``run`` says to which stretch each belongs."""

    time_s: FloatArray
    psi_rad: FloatArray
    run: IntArray
    u_rad: float


def thin_record(difference: PhaseDifference, points: int = POINTS) -> ThinRecord:
    """Return at most ``points`` valid samples, evenly taken from the valid time.

    Parameters
    ----------
    difference : PhaseDifference
    points : int

    Returns
    -------
    ThinRecord
    """
    kept = np.flatnonzero(difference.valid)
    stride = max(1, -(-kept.size // points))
    at = kept[::stride]
    starts = np.array([start for start, _ in valid_runs(difference.valid)])
    u_rad = median(difference.u_rad[at]) if at.size else 0.0
    return ThinRecord(
        time_s=at / difference.rate_hz,
        psi_rad=np.asarray(difference.psi_rad[at]),
        run=np.searchsorted(starts, at, side="right") - 1,
        u_rad=u_rad,
    )


def draw_free_paths(
    record: ThinRecord, baseline: Baseline, paths: int, rng: np.random.Generator
) -> FloatArray:
    """Return psi of free pairs at the times of a record.

    Parameters
    ----------
    record : ThinRecord
        Of k points.
    baseline : Baseline
        With a detuning; detuning drawn as normal, diffusion as log-normal.
    paths : int
    rng : numpy Generator

    Returns
    -------
    array, shape (paths, k), rad
    """
    noise, noise_u = noise_of(baseline)
    relative = noise_u / noise if noise > 0 else 0.0
    drawn = rng.standard_normal((2, paths, 1))
    value_hz, u_hz = baseline.detuning_hz.value or 0.0, baseline.detuning_hz.u or 0.0
    drift = rad_s_from_hz(value_hz) + rad_s_from_hz(u_hz) * drawn[0]
    diffusion = noise * np.exp(relative * drawn[1])
    steps_s = np.diff(record.time_s, prepend=record.time_s[:1])
    kicks = np.sqrt(2.0 * diffusion * steps_s) * rng.standard_normal((paths, steps_s.size))
    psi = np.cumsum(drift * steps_s + kicks, axis=1)
    return np.asarray(psi + record.u_rad * rng.standard_normal(psi.shape))


def wandering(record: ThinRecord, psi_rad: FloatArray) -> FloatArray:
    """Return the mean square of psi about the mean of its stretch.

    Parameters
    ----------
    record : ThinRecord
    psi_rad : array, shape (paths, k), rad

    Returns
    -------
    array, shape (paths,), rad2
    """
    total = np.zeros(psi_rad.shape[0])
    for run in distinct(record.run):
        part = psi_rad[:, record.run == run]
        total += part.var(axis=1) * part.shape[1]
    return np.asarray(total / psi_rad.shape[1])


def confinement_p(
    difference: PhaseDifference, baseline: Baseline, alpha: float, rng: np.random.Generator
) -> float:
    """Return how probable it is that a free pair wanders as little as this record.

    Parameters
    ----------
    difference : PhaseDifference
    baseline : Baseline
    alpha : float
        Level at which the answer is used; sets the number of paths (at least 4 / alpha).
    rng : numpy Generator

    Returns
    -------
    float, in (0, 1]
        (1 + paths that wander no more) / (1 + paths).
    """
    record = thin_record(difference)
    if record.psi_rad.size < 4:
        return 1.0
    paths = int(min(max(999, 4.0 / alpha), MOST_PATHS))
    free = wandering(record, draw_free_paths(record, baseline, paths, rng))
    seen = wandering(record, record.psi_rad[None, :])[0]
    return float(1 + np.count_nonzero(free <= seen)) / (1 + paths)


def assumed_baseline(difference: PhaseDifference, free_spread: float) -> Baseline:
    """Return a free pair as a stated spread of frequencies and the record's own diffusion say.

    Parameters
    ----------
    difference : PhaseDifference
    free_spread : float
        Relative standard deviation of free frequencies.

    Returns
    -------
    Baseline
        Detuning 0 with the spread as its uncertainty. The diffusion comes from the motion of
        psi within a cycle or two, which coupling hardly changes; measurement noise, told by
        increments that turn back, is taken off.
    """
    order = difference.order
    spread_hz = free_spread * math.hypot(
        order.n * difference.driven_frequency_hz, order.m * difference.reference_frequency_hz
    )
    noise = short_diffusion(difference)
    return Baseline(
        detuning_hz=Quantity(value=0.0, u=spread_hz, unit="Hz"),
        noise_rad2_s=Quantity(value=noise, u=None, unit="rad2/s"),
        source=f"free spread {free_spread:g} assumed",
    )


def outside_baseline(difference: PhaseDifference, episodes: tuple[Episode, ...]) -> Baseline | None:
    """Return drift and diffusion of psi outside its episodes, as of a pair that is free there.

    Parameters
    ----------
    difference : PhaseDifference
    episodes : tuple of Episode

    Returns
    -------
    Baseline or None
        None where less than a few cycles lie outside, as with slips of a locked pair.
    """
    cycle_hz = difference.cycle_rate_hz
    valid = difference.valid.copy()
    for part in episodes:
        first, last = (
            round((edge_s - difference.start_s) * difference.rate_hz)
            for edge_s in (part.start_s, part.stop_s)
        )
        valid[first : last + 1] = False
    outside = replace(difference, valid=valid)
    least = max(OUTSIDE_CYCLES + 1, round(OUTSIDE_CYCLES * difference.rate_hz / cycle_hz))
    runs = [run for run in run_values(outside) if run.size >= least]
    if not runs:
        return None
    steps = sum(run.size - 1 for run in runs)
    rate_hz = sum(float(run[-1] - run[0]) for run in runs) / steps * difference.rate_hz / TURN_RAD
    noise = short_diffusion(outside)
    u_rad_s = math.sqrt(2.0 * noise * difference.rate_hz / steps)
    return Baseline(
        detuning_hz=Quantity(value=rate_hz, u=u_rad_s / TURN_RAD, unit="Hz"),
        noise_rad2_s=Quantity(value=noise, u=None, unit="rad2/s"),
        source="the record outside its episodes",
    )


def short_diffusion(difference: PhaseDifference) -> float:
    """Return the diffusion of psi from its steps over one cycle, rad2/s.

    With increments d over a step h: <d_k d_k+1> = -R and <d^2> = 2 D h + 2 R.

    Parameters
    ----------
    difference : PhaseDifference

    Returns
    -------
    float, rad2/s
        0 where there are too few cycles to tell.
    """
    stride = max(1, round(difference.rate_hz / difference.cycle_rate_hz))
    parts = [
        np.diff(difference.psi_rad[a:b:stride])
        for a, b in valid_runs(difference.valid)
        if b - a > 3 * stride
    ]
    if not parts:
        return 0.0
    parts = [part - part.mean() for part in parts]
    square = float(np.mean(np.concatenate([part**2 for part in parts])))
    turned = -float(np.mean(np.concatenate([part[1:] * part[:-1] for part in parts])))
    noise_rad2 = min(max(turned, 0.0), square / 2)
    return (square - 2 * noise_rad2) * difference.rate_hz / stride / 2
