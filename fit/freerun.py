"""One oscillator alone: mean frequency, drift, phase diffusion; and the baseline of a pair.

The phase of a free oscillator is phi(t) = phi0 + 2 pi f t + w(t) + e, with w a random walk
of diffusion D (Var = 2 D t) and e white measurement noise of variance R. The mean frequency
of a record of length T then has variance 2 D / T + 2 R / T^2 (in rad/s squared), however
many samples there are.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Literal

import numpy as np

from fit.difference import Order
from fit.records import Baseline, FreeRun
from rig.angles import TURN_RAD, hz_from_rad_s
from rig.arrays import FloatArray
from rig.errors import PhaseError
from rig.phases.track import PhaseTrack
from rig.quantities import Quantity, undetermined

MIN_VALUES = 16  # phase values (one a cycle) below which noise and drift cannot be told apart
DRIFT_HALVES = 2  # the drift is the difference of the mean frequency of the two halves


def estimate_free_run(
    track: PhaseTrack, role: Literal["driven", "reference"], *, file: str = ""
) -> FreeRun:
    """Return mean frequency, drift and phase diffusion of one oscillator alone.

    Parameters
    ----------
    track : PhaseTrack of the free-running capture
    role : "driven" or "reference"
    file : str, name of the capture for the report

    Raises
    ------
    PhaseError
        If the longest valid stretch holds fewer than 16 cycles.

    Notes
    -----
    The longest valid stretch is used, thinned to about one value a cycle. The uncertainty of
    the frequency holds diffusion and measurement noise; a frequency that wanders more slowly
    than the record shows up as drift, which is reported beside it.
    """
    phase_rad, step_s = _one_value_a_cycle(track)
    if phase_rad.size < MIN_VALUES:
        raise PhaseError(
            f"{file or track.channel}: free-running record holds {phase_rad.size} cycles in one "
            f"piece; at least {MIN_VALUES} needed"
        )
    duration_s = (phase_rad.size - 1) * step_s
    diffusion, diffusion_u, noise_rad2 = phase_diffusion(phase_rad, step_s)
    rate_rad_s = (phase_rad[-1] - phase_rad[0]) / duration_s
    variance = 2.0 * diffusion / duration_s + 2.0 * noise_rad2 / duration_s**2
    return FreeRun(
        role=role,
        frequency_hz=Quantity(
            value=hz_from_rad_s(rate_rad_s), u=hz_from_rad_s(math.sqrt(variance)), unit="Hz"
        ),
        drift_hz_s=_drift(phase_rad, step_s, diffusion, noise_rad2),
        noise_rad2_s=Quantity(value=diffusion, u=diffusion_u, unit="rad2/s"),
        duration_s=duration_s,
        file=file,
        notes=track.notes,
    )


def phase_diffusion(phase_rad: FloatArray, step_s: float) -> tuple[float, float, float]:
    """Return (D, its standard uncertainty, measurement-noise variance) of a free phase.

    Var[phi(t + k h) - phi(t) - mean] = 2 D k h + 2 R, fitted over the lags k = 1, 2, 4 ...

    Parameters
    ----------
    phase_rad : array, shape (n,), rad, unwrapped and evenly spaced
    step_s : float, s

    Notes
    -----
    D is held at zero or above. The uncertainty is sqrt(2 / n_eff) of the variance at the lag
    that carries the estimate, n_eff the number of non-overlapping increments at that lag.
    """
    lags = _lags(phase_rad.size)
    slope = (phase_rad[-1] - phase_rad[0]) / (phase_rad.size - 1)
    values = np.array(
        [np.mean((phase_rad[k:] - phase_rad[:-k] - slope * k) ** 2) for k in lags], dtype=float
    )
    relative = np.sqrt(2.0 * lags / phase_rad.size)
    # Overlapping increments at lag k carry about n / k independent values: weights 1 / u^2.
    weights = 1.0 / np.maximum(values * relative, np.finfo(float).tiny)
    design = np.column_stack([2.0 * lags * step_s, np.full(lags.size, 2.0)])
    solved, *_ = np.linalg.lstsq(design * weights[:, None], values * weights, rcond=None)
    spread = np.sqrt(
        np.diag(np.linalg.pinv((design * weights[:, None]).T @ (design * weights[:, None])))
    )
    diffusion = max(float(solved[0]), 0.0)
    return diffusion, float(spread[0]), max(float(solved[1]), 0.0)


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
    """
    driven = _mean_of_runs([run for run in free_runs if run.role == "driven"])
    alone = _mean_of_runs([run for run in free_runs if run.role == "reference"])
    if driven is None:
        return None
    if reference_hz is not None and reference_hz.value is not None:
        reference = (reference_hz.value, reference_hz.u or 0.0, alone[2] if alone else 0.0)
    elif alone is not None:
        reference = alone
    else:
        return None
    detuning_hz = order.n * driven[0] - order.m * reference[0]
    return Baseline(
        detuning_hz=Quantity(
            value=detuning_hz,
            u=math.hypot(order.n * driven[1], order.m * reference[1]),
            unit="Hz",
        ),
        noise_rad2_s=Quantity(
            value=order.n**2 * driven[2] + order.m**2 * reference[2], u=None, unit="rad2/s"
        ),
        source=", ".join(run.file for run in free_runs if run.file) or "free-running captures",
    )


def _mean_of_runs(runs: Sequence[FreeRun]) -> tuple[float, float, float] | None:
    """Return (frequency, its u with drift between runs, diffusion) of one role."""
    values = [(run.frequency_hz.value, run.frequency_hz.u or 0.0) for run in runs]
    known = [(value, u) for value, u in values if value is not None]
    if not known:
        return None
    frequencies = np.array([value for value, _ in known])
    u_hz = math.sqrt(sum(u**2 for _, u in known)) / len(known)
    # The frequency at the time of a point lies anywhere between the runs before and after:
    # half their range is the half-width of a rectangular distribution.
    drift_hz = float(np.ptp(frequencies)) / 2.0 / math.sqrt(3.0)
    noise = [run.noise_rad2_s.value for run in runs if run.noise_rad2_s.value is not None]
    return float(frequencies.mean()), math.hypot(u_hz, drift_hz), float(np.mean(noise or [0.0]))


def _one_value_a_cycle(track: PhaseTrack) -> tuple[FloatArray, float]:
    """Return the longest valid stretch thinned to about one phase value a cycle."""
    edges = np.flatnonzero(np.diff(np.concatenate([[0], track.valid.view(np.int8), [0]])))
    if edges.size == 0:
        return np.empty(0), 1.0 / track.rate_hz
    starts, stops = edges[::2], edges[1::2]
    longest = int(np.argmax(stops - starts))
    piece = track.phase_rad[starts[longest] : stops[longest]]
    cycles = abs(float(piece[-1] - piece[0])) / TURN_RAD
    stride = max(1, round(piece.size / max(cycles, 1.0)))
    return np.asarray(piece[::stride]), stride / track.rate_hz


def _lags(count: int) -> FloatArray:
    """Return lags 1, 2, 4 ... up to an eighth of the record."""
    top = max(count // 8, 2)
    return np.array([1 << k for k in range(int(math.log2(top)) + 1)], dtype=np.int64)


def _drift(phase_rad: FloatArray, step_s: float, diffusion: float, noise_rad2: float) -> Quantity:
    """Return the drift of the frequency from its two half means."""
    half = phase_rad.size // DRIFT_HALVES
    span_s = (half - 1) * step_s
    if half < MIN_VALUES // DRIFT_HALVES:
        return undetermined("Hz/s", f"only {phase_rad.size} cycles; {MIN_VALUES} needed")
    rates = [(part[-1] - part[0]) / span_s for part in (phase_rad[:half], phase_rad[-half:])]
    between_s = (phase_rad.size - half) * step_s
    variance = 2.0 * (2.0 * diffusion / span_s + 2.0 * noise_rad2 / span_s**2)
    return Quantity(
        value=hz_from_rad_s((rates[1] - rates[0]) / between_s),
        u=hz_from_rad_s(math.sqrt(variance) / between_s),
        unit="Hz/s",
    )
