"""One oscillator alone: mean frequency, drift, phase diffusion, stability; and the baseline.

The phase of a free oscillator is phi(t) = phi0 + 2 pi (f t + drift t^2/2) + w(t) + e, with w
a random walk of diffusion D (Var = 2 D t) and e white measurement noise of variance R. Its
increments over one step h have covariance 2 D h + 2 R on and -R beside the diagonal, whose
eigenvectors are sines: the likelihood is exact and costs one sine transform.

Phases are sampled, never averaged, at steps of at least the smearing time of their band. A
band also smooths the random walk a little, which looks like a negative R; R is therefore not
held above zero, or D would come out low.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np

from fit.allan import describe_noise, stability_table
from fit.difference import Order, valid_runs
from fit.quantiles import chi_square_above, normal_above, student_above
from fit.records import Baseline, FreeRun
from rig.angles import TURN_RAD, hz_from_rad_s
from rig.arrays import FloatArray
from rig.errors import PhaseError
from rig.phases.track import PhaseTrack
from rig.quantities import Quantity, undetermined

MIN_VALUES = 16  # phase values below which noise and drift cannot be told apart
MOST_VALUES = 60_000  # more add time and nothing else
STEP_SMEARS = 1.0  # steps in units of the smearing time of the phase band
NOISE_GATE = 0.5  # relative standard error up to which D is given as a value
LEAST_EIGENVALUE = 0.02  # smallest variance of a sine component, as a share of 2 D h + 2 R
DRIFT_ERRORS = 2.0  # a drift counts from this many standard errors on
WANDERING = {"flicker frequency noise": 0.0, "random-walk frequency noise": 0.5}


@dataclass(frozen=True, slots=True, kw_only=True)
class FreePhase:
    """Maximum of the likelihood of one free phase, rad/s, rad/s^2, rad^2/s, rad^2.

    The mean rate is that of the middle of the record; ``noise_rad2`` below zero means that
    the phase band smooths the walk.
    """

    rate_rad_s: float
    rate_u_rad_s: float
    drift_rad_s2: float
    drift_u_rad_s2: float
    diffusion_rad2_s: float
    diffusion_u_rad2_s: float
    noise_rad2: float


def estimate_free_run(
    track: PhaseTrack, role: Literal["driven", "reference"], *, file: str = ""
) -> FreeRun:
    """Return mean frequency, drift, phase diffusion and stability of one oscillator alone.

    Parameters
    ----------
    track : PhaseTrack of the free-running capture
    role : "driven" or "reference"
    file : str, name of the capture for the report

    Returns
    -------
    FreeRun
        ``allan`` rows are (averaging_s, overlapping Allan deviation of the fractional
        frequency, low, high) at 95 %.

    Raises
    ------
    PhaseError
        If the longest valid stretch holds fewer than 16 phase values.

    Notes
    -----
    The longest valid stretch is used. The uncertainty of the frequency holds white frequency
    noise and measurement noise; slower wander shows in the stability table and in the drift.
    """
    phase_rad, step_s = _sampled(track)
    if phase_rad.size < MIN_VALUES:
        raise PhaseError(
            f"{file or track.channel}: free-running record holds {phase_rad.size} phase values "
            f"in one piece; at least {MIN_VALUES} needed"
        )
    free = fit_free_phase(phase_rad, step_s)
    frequency_hz = hz_from_rad_s(free.rate_rad_s)
    rows = stability_table(phase_rad / (TURN_RAD * abs(frequency_hz)), step_s)
    return FreeRun(
        role=role,
        frequency_hz=Quantity(value=frequency_hz, u=hz_from_rad_s(free.rate_u_rad_s), unit="Hz"),
        drift_hz_s=Quantity(
            value=hz_from_rad_s(free.drift_rad_s2),
            u=hz_from_rad_s(free.drift_u_rad_s2),
            unit="Hz/s",
        ),
        noise_rad2_s=_diffusion(free),
        duration_s=(phase_rad.size - 1) * step_s,
        file=file,
        allan=tuple((row.averaging_s, row.deviation, row.low, row.high) for row in rows),
        noise_type=describe_noise(rows, phase_rad.size),
        notes=track.notes,
    )


def phase_diffusion(phase_rad: FloatArray, step_s: float) -> tuple[float, float, float]:
    """Return (D, its standard uncertainty, measurement-noise variance) of a free phase.

    Parameters and notes as for ``fit_free_phase``.
    """
    free = fit_free_phase(phase_rad, step_s)
    return free.diffusion_rad2_s, free.diffusion_u_rad2_s, free.noise_rad2


def fit_free_phase(phase_rad: FloatArray, step_s: float) -> FreePhase:
    """Return rate, drift, diffusion and measurement noise of a free phase.

    Exact Gaussian likelihood of the increments; rate and drift by generalised least squares,
    (D, R) by Fisher scoring.

    Parameters
    ----------
    phase_rad : array, shape (n,), rad, n >= 4, unwrapped and evenly spaced
    step_s : float, s

    Returns
    -------
    FreePhase

    Notes
    -----
    The likelihood is the restricted one, which pays for the two constants spent on rate and
    drift. D is worth nu = 2 (D/u)^2 degrees of freedom; the errors of rate and drift are
    widened by Student's t with nu (at least 2) over the normal law.
    """
    # Loaded where it is needed: most captures hold no oscillator alone.
    from scipy.fft import dst

    steps = np.diff(np.asarray(phase_rad, dtype=float))
    n = steps.size
    time_s = (np.arange(n) - 0.5 * (n - 1)) * step_s
    columns = np.stack([np.full(n, step_s), step_s * time_s])
    waves = dst(np.concatenate([steps[None], columns]), type=1, norm="ortho", axis=1)
    rise = 2.0 * (1.0 - np.cos(math.pi * np.arange(1, n + 1) / (n + 1)))
    point = _first_guess(steps)
    tiny = (float(np.max(np.abs(phase_rad), initial=1.0)) * 1e-15) ** 2 + 1e-300
    for _ in range(60):
        left, _, _ = _regress(waves, point, rise, tiny)
        move, information = _scoring(left, point, rise, tiny)
        point, done = _advanced(point, move)
        if done:
            break
    left, beta, covariance = _regress(waves, point, rise, tiny)
    _, information = _scoring(left, point, rise, tiny)
    diffusion_u = math.sqrt(max(float(np.linalg.pinv(information, hermitian=True)[0, 0]), 0.0))
    wide = _student_factor(float(point[0]), diffusion_u)
    return FreePhase(
        rate_rad_s=float(beta[0]),
        rate_u_rad_s=wide * math.sqrt(float(covariance[0, 0])),
        drift_rad_s2=float(beta[1]),
        drift_u_rad_s2=wide * math.sqrt(float(covariance[1, 1])),
        diffusion_rad2_s=float(point[0]) / (2.0 * step_s),
        diffusion_u_rad2_s=diffusion_u / (2.0 * step_s),
        noise_rad2=float(point[1]),
    )


def _student_factor(value: float, u: float) -> float:
    """Return how much wider than normal errors are whose variance is known as value +- u."""
    freedom = max(2.0 * (value / max(u, 1e-300)) ** 2, 2.0)
    return student_above(min(freedom, 1e6), 0.025) / 1.959964


def _first_guess(steps: FloatArray) -> FloatArray:
    """Return (2 D h, R) from the variance and the neighbour covariance of the increments."""
    away = steps - steps.mean()
    power = float(away @ away) / away.size
    neighbour = float(away[1:] @ away[:-1]) / max(away.size - 1, 1)
    noise = min(max(-neighbour, -0.2 * power), 0.45 * power)
    return np.array([max(power - 2.0 * noise, 0.05 * power), noise])


def _variances(point: FloatArray, rise: FloatArray, tiny: float) -> FloatArray:
    """Return the variance of each sine component, 2 D h + R (2 - 2 cos), above rounding."""
    return np.asarray(np.maximum(point[0] + point[1] * rise, tiny))


def _regress(
    waves: FloatArray, point: FloatArray, rise: FloatArray, tiny: float
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return (squared residuals, leverages), (rate, drift) and their covariance."""
    variance = _variances(point, rise, tiny)
    weighted = waves[1:] / variance
    covariance = np.asarray(np.linalg.inv(weighted @ waves[1:].T), dtype=float)
    beta = np.asarray(covariance @ (weighted @ waves[0]), dtype=float)
    leverage = np.sum(weighted * (covariance @ waves[1:]), axis=0)
    return np.stack([(waves[0] - beta @ waves[1:]) ** 2, leverage]), beta, covariance


def _scoring(
    left: FloatArray, point: FloatArray, rise: FloatArray, tiny: float
) -> tuple[FloatArray, FloatArray]:
    """Return the scoring step of (2 D h, R) and their expected information."""
    variance = _variances(point, rise, tiny)
    free = np.maximum(1.0 - left[1], 0.0)
    slopes = np.stack([1.0 / variance, rise / variance])
    information = 0.5 * (slopes * free) @ slopes.T
    score = 0.5 * slopes @ (left[0] / variance - free)
    size = np.sqrt(np.diag(information))
    scaled = information / np.outer(size, size) + 1e-10 * np.eye(2)
    return np.linalg.solve(scaled, score / size) / size, information


def _advanced(point: FloatArray, move: FloatArray) -> tuple[FloatArray, bool]:
    """Return the next point and whether the search has settled.

    2 D h stays above 1e-6 of R, R above the value at which a component would lose its
    variance; no step more than halves or trebles the diffusion.
    """
    total = point[0] + 2.0 * abs(point[1])
    limit = 0.5 * total / max(float(np.max(np.abs(move))), 1e-300)
    ahead = point + min(1.0, limit) * move
    ahead[0] = max(ahead[0], 0.3 * point[0], 1e-6 * abs(ahead[1]))
    ahead[1] = max(ahead[1], -0.25 * (1.0 - LEAST_EIGENVALUE) * ahead[0])
    return ahead, bool(np.max(np.abs(ahead - point)) < 1e-7 * total)


def _diffusion(free: FreePhase) -> Quantity:
    """Return D with its interval, or the bound where the record does not show it."""
    value, u = free.diffusion_rad2_s, free.diffusion_u_rad2_s
    if not u < NOISE_GATE * value:
        reason = "the measurement noise hides the diffusion of the phase; record longer"
        return undetermined("rad2/s", reason, low=0.0, high=value + 2.0 * u)
    freedom = 2.0 * (value / u) ** 2
    low, high = (freedom * value / chi_square_above(freedom, tail) for tail in (0.025, 0.975))
    return Quantity(value=value, u=u, unit="rad2/s", low=low, high=high, level=0.95)


def _sampled(track: PhaseTrack) -> tuple[FloatArray, float]:
    """Return the longest valid stretch at steps of the smearing time, and that step."""
    runs = valid_runs(track.valid)
    if not runs:
        return np.empty(0), 1.0 / track.rate_hz
    first, stop = max(runs, key=lambda run: run[1] - run[0])
    size = stop - first
    step_s = STEP_SMEARS * track.smear_s
    if track.band_hz is None:
        # A marker phase holds one value a cycle and straight lines between.
        cycles = abs(float(track.phase_rad[stop - 1] - track.phase_rad[first])) / TURN_RAD
        step_s = max(step_s, size / max(cycles, 1.0) / track.rate_hz)
    stride = max(1, math.ceil(step_s * track.rate_hz - 1e-9), size // MOST_VALUES)
    return np.asarray(track.phase_rad[first:stop:stride]), stride / track.rate_hz


def make_baseline(
    free_runs: Sequence[FreeRun], order: Order, *, reference_hz: Quantity | None
) -> Baseline | None:
    """Return what the free-running captures say of a pair, or None if they say too little.

    Parameters
    ----------
    free_runs : sequence of FreeRun; several of one role are averaged, their spread is drift
    order : Order
    reference_hz : Quantity or None
        Frequency of the reference in the pair's own capture, where the coupling is one-way
        and the reference therefore runs free in it; used when no capture of it alone exists
        and preferred when it does, because a swept drive differs from point to point.

    Returns
    -------
    Baseline or None

    Notes
    -----
    The uncertainty of the detuning holds, beside the captures' own, what the frequencies may
    have done between them and the pair's capture: half the range of several captures (taken
    as rectangular), a drift seen within one, and flicker or random-walk frequency noise
    from one record length to the next.
    """
    driven = _mean_of_runs([run for run in free_runs if run.role == "driven"])
    alone = _mean_of_runs([run for run in free_runs if run.role == "reference"])
    if driven is None:
        return None
    if reference_hz is not None and reference_hz.value is not None:
        quiet = _Alone(
            frequency_hz=0.0, u_hz=0.0, noise_rad2_s=0.0, noise_u_rad2_s=0.0, wander_hz=0.0
        )
        reference = alone or quiet
        known_hz, known_u_hz = reference_hz.value, reference_hz.u or 0.0
    elif alone is not None:
        reference, known_hz, known_u_hz = alone, alone.frequency_hz, alone.u_hz
    else:
        return None
    return Baseline(
        detuning_hz=Quantity(
            value=order.n * driven.frequency_hz - order.m * known_hz,
            u=math.hypot(order.n * driven.u_hz, order.m * known_u_hz),
            unit="Hz",
        ),
        noise_rad2_s=_joint_noise(driven, reference, order),
        source=", ".join(run.file for run in free_runs if run.file) or "free-running captures",
        wander_hz=math.hypot(order.n * driven.wander_hz, order.m * reference.wander_hz),
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class _Alone:
    """Mean of the captures of one role: frequency with wander, and diffusion."""

    frequency_hz: float
    u_hz: float
    noise_rad2_s: float
    noise_u_rad2_s: float
    wander_hz: float


def _joint_noise(driven: _Alone, reference: _Alone, order: Order) -> Quantity:
    """Return n^2 D_driven + m^2 D_reference."""
    return Quantity(
        value=order.n**2 * driven.noise_rad2_s + order.m**2 * reference.noise_rad2_s,
        u=math.hypot(order.n**2 * driven.noise_u_rad2_s, order.m**2 * reference.noise_u_rad2_s),
        unit="rad2/s",
    )


def _mean_of_runs(runs: Sequence[FreeRun]) -> _Alone | None:
    """Return the mean of the captures of one role, None without any."""
    known = [run for run in runs if run.frequency_hz.value is not None]
    if not known:
        return None
    frequencies = np.array([run.frequency_hz.value for run in known], dtype=float)
    own_u_hz = math.sqrt(sum((run.frequency_hz.u or 0.0) ** 2 for run in known)) / len(known)
    # The frequency at the time of a point lies anywhere between the runs before and after:
    # half their range is the half-width of a rectangular distribution.
    spread_hz = float(np.ptp(frequencies)) / 2.0
    drift_hz = max([spread_hz, *(_drift_reach_hz(run) for run in known)]) / math.sqrt(3.0)
    wander_hz = max(_wander_hz(run) for run in known)
    noise, noise_u = zip(*(_noise_with_u(run) for run in known), strict=True)
    return _Alone(
        frequency_hz=float(frequencies.mean()),
        u_hz=math.sqrt(own_u_hz**2 + drift_hz**2 + wander_hz**2),
        noise_rad2_s=float(np.mean(noise)),
        noise_u_rad2_s=math.sqrt(sum(u**2 for u in noise_u)) / len(noise_u),
        wander_hz=max(math.hypot(drift_hz, wander_hz), _spread_hz(known)),
    )


def _spread_hz(known: Sequence[FreeRun]) -> float:
    """Return the spread of the captures' frequencies beyond their own errors, Hz.

    Told by k captures it is known with k - 1 degrees of freedom: wider by Student's t.
    """
    if len(known) < 2:
        return 0.0
    own = sum((run.frequency_hz.u or 0.0) ** 2 for run in known) / len(known)
    excess = float(np.var([run.frequency_hz.value or 0.0 for run in known], ddof=1)) - own
    wide = student_above(len(known) - 1.0, 0.025) / normal_above(0.025)
    return wide * math.sqrt(max(excess, 0.0))


def _noise_with_u(run: FreeRun) -> tuple[float, float]:
    """Return D and its standard error; where it is hidden, the middle of what it may be."""
    noise = run.noise_rad2_s
    if noise.value is not None:
        return noise.value, noise.u or 0.0
    high = noise.high or 0.0
    return 0.5 * high, high / math.sqrt(12.0)


def _drift_reach_hz(run: FreeRun) -> float:
    """Return how far a drift seen in a capture leads over one more record length, Hz."""
    drift = run.drift_hz_s
    if drift.value is None or not drift.u or abs(drift.value) < DRIFT_ERRORS * drift.u:
        return 0.0
    return abs(drift.value) * run.duration_s


def _wander_hz(run: FreeRun) -> float:
    """Return the standard change of frequency from one record length to the next, Hz.

    Only noise slower than white counts: sqrt(2) times the Allan deviation carried to the
    length of the record by the slope of its type.
    """
    named = run.noise_type.split(", ")[-1].split(" from ")[0]
    if named not in WANDERING or not run.allan or run.frequency_hz.value is None:
        return 0.0
    averaging_s, deviation, _, _ = run.allan[-1]
    carried = math.pow(run.duration_s / averaging_s, WANDERING[named])
    return math.sqrt(2.0) * deviation * carried * abs(run.frequency_hz.value)
