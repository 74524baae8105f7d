"""Edges from one long record in which the drive frequency, or its level, is ramped.

Lock is lost and gained on the way, early or late: without noise the loss is late by
2.338 (2/K)^(1/3) r^(2/3) (``fit.hysteresis.ramp_delay_hz``), with noise it is early by far
more. So an edge is never read off the ramp: it comes from the likelihood of the whole record

    dpsi = (d0 + r t - K sin(psi - psi0)) dt + sqrt(2 D) dW      (frequency ramp)
    dpsi = (dw - kappa A(t) sin(psi - psi0)) dt + sqrt(2 D) dW   (level ramp)

with lanes of ``fit.likelihood`` that carry their own start of the ramp. When lock was gained
and lost is dated from the slips, beside the edges.

Columns of theta: centre (d0 of the axis) in rad/s, K or kappa, psi0, its slope over detuning,
ln D, ln R, and the ramp rate r of the detuning in rad/s^2 (held when it is known).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from itertools import pairwise
from typing import Literal

import numpy as np

from fit.difference import Order
from fit.ramp_fit import (
    CENTRE,
    COUPLING,
    LANE_SAMPLES,
    LOG_D,
    LOG_R,
    OFFSET,
    RATE,
    SLOPE,
    WIDTH,
    LevelRamp,
    RampFit,
    best_ramp_fit,
    frequency_map,
    level_map,
)
from fit.records import PsiSeries
from rig.angles import TURN_RAD, hz_from_rad_s, rad_s_from_hz
from rig.arrays import FloatArray
from rig.errors import FitError
from rig.quantities import Quantity, undetermined

WINDOWS = 60  # pieces in which a first look searches for the locked stretch
QUIET_TURNS = 0.6
HOLD_RELAXATIONS = 25.0  # a stay without slips counts as lock from this many 1/K on
NORMAL_95 = 1.959963984540054


@dataclass(frozen=True, slots=True, kw_only=True)
class DriveRamp:
    """Drive frequency start_hz + rate_hz_s * t; the rate is fitted when it is None."""

    start_hz: float
    rate_hz_s: float | None
    order: Order

    def __post_init__(self) -> None:
        if self.rate_hz_s is not None and not self.rate_hz_s:
            raise FitError("drive ramp: rate_hz_s must differ from 0 Hz/s, got 0")


@dataclass(frozen=True, slots=True, kw_only=True)
class RampEvent:
    """Lock gained or lost at a time, with what the ramped variable was then."""

    kind: Literal["gained", "lost"]
    time_s: float
    at: float


@dataclass(frozen=True, slots=True, kw_only=True)
class RampRegion:
    """What one ramp says: edges on the ramped variable, coupling, noise, dates of lock.

    ``lower`` and ``upper`` are drive frequencies in Hz; of a level ramp ``lower`` is the
    amplitude at which lock begins and ``upper`` has no value. ``coupling`` is in Hz, of a
    level ramp in Hz per unit amplitude.
    """

    lower: Quantity
    upper: Quantity
    coupling: Quantity
    centre: Quantity
    noise_rad2_s: Quantity
    events: tuple[RampEvent, ...]
    notes: tuple[str, ...] = ()


def ramp_edges(series: PsiSeries, ramp: DriveRamp) -> RampRegion:
    """Return the edges of the locking region from one record with a ramped drive frequency.

    Parameters
    ----------
    series : PsiSeries
    ramp : DriveRamp

    Returns
    -------
    RampRegion
        An edge that the ramp did not pass has no value, and a reason.

    Raises
    ------
    FitError
        If the record has fewer than 200 samples.
    """
    _refuse_short(series)
    m = ramp.order.m
    guess = ramp.rate_hz_s if ramp.rate_hz_s is not None else _rate_guess(series) / m
    place = _Place(start=rad_s_from_hz(m * ramp.start_hz), rate=rad_s_from_hz(m * guess))
    held = (RATE,) if ramp.rate_hz_s is not None else ()
    starts = [_start(series, place, share, turn) for share in (1.0, 0.7) for turn in (0, math.pi)]
    fit = best_ramp_fit(series, frequency_map(place.start), starts, held)
    if fit is None:
        return _undetermined("Hz", "Hz", "the likelihood of the ramp did not settle")
    return _region(series, ramp, fit)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Place:
    """2 pi m drive at t = 0, and its rate, rad/s and rad/s^2."""

    start: float
    rate: float


def _refuse_short(series: PsiSeries) -> None:
    samples = sum(part.size for part in series.segments)
    if samples < 200:
        raise FitError(f"ramp: at least 200 phase samples needed, got {samples}")


def _rate_guess(series: PsiSeries) -> float:
    """Return the rate of the drive times m, Hz/s, from the curvature of psi far from lock."""
    psi = max(series.segments, key=lambda part: part.size)
    tenth = psi.size // 10
    first, last = psi[:tenth], psi[-tenth:]
    rates = [(part[-1] - part[0]) / ((part.size - 1) * series.step_s) for part in (first, last)]
    return -hz_from_rad_s((rates[1] - rates[0]) / (0.9 * psi.size * series.step_s))


def _quiet_span(series: PsiSeries) -> tuple[float, float, float] | None:
    """Return (start, stop, mean angle) of the longest stretch in which psi hardly moves."""
    longest = max(range(len(series.segments)), key=lambda k: series.segments[k].size)
    psi, begin_s = series.segments[longest], series.start_s[longest]
    window = max(psi.size // WINDOWS, 2)
    pieces = psi[: psi.size // window * window].reshape(-1, window)
    quiet = np.ptp(pieces, axis=1) < QUIET_TURNS * TURN_RAD
    best, run = (0, 0), 0
    for index, flag in enumerate([*quiet, False]):
        if flag:
            run += 1
            continue
        if run > best[1] - best[0]:
            best = (index - run, index)
        run = 0
    if best[0] == best[1]:
        return None
    middle = pieces[(best[0] + best[1]) // 2 - (best[1] == quiet.size)]
    angle = float(np.angle(np.mean(np.exp(1j * middle))))
    step_s = window * series.step_s
    return begin_s + best[0] * step_s, begin_s + best[1] * step_s, angle


def _start(series: PsiSeries, place: _Place, share: float, turn: float) -> FloatArray:
    """Return a starting point: centre and K from the quiet stretch."""
    times = [
        time
        for begin_s, part in zip(series.start_s, series.segments, strict=True)
        for time in (begin_s, begin_s + part.size * series.step_s)
    ]
    span = _quiet_span(series)
    first, last, angle = span or (
        min(times) + 0.4 * (max(times) - min(times)),
        min(times) + 0.6 * (max(times) - min(times)),
        0.0,
    )
    theta = np.zeros(WIDTH)
    theta[CENTRE] = place.start + place.rate * (first + last) / 2.0
    theta[COUPLING] = share * abs(place.rate) * (last - first) / 2.0
    theta[OFFSET] = angle + turn
    theta[LOG_D] = math.log(0.03 * theta[COUPLING])
    theta[LOG_R] = math.log(series.noise_start_rad2 or 1e-4)
    theta[RATE] = -place.rate
    return theta


def _linear(fit: RampFit, weights: dict[int, float], scale: float, unit: str) -> Quantity:
    """Return a weighted sum of parameters with its interval."""
    slope = np.zeros(WIDTH)
    for column, weight in weights.items():
        slope[column] = weight
    value = float(slope @ fit.theta) * scale
    u = math.sqrt(max(float(slope @ fit.covariance @ slope), 0.0)) * abs(scale)
    return Quantity(
        value=value,
        u=u,
        unit=unit,
        low=value - NORMAL_95 * u,
        high=value + NORMAL_95 * u,
        level=0.95,
    )


def _noise(fit: RampFit) -> Quantity:
    value = math.exp(float(fit.theta[LOG_D]))
    log_u = math.sqrt(max(float(fit.covariance[LOG_D, LOG_D]), 0.0))
    return Quantity(value=value, u=value * log_u, unit="rad^2/s")


def _region(series: PsiSeries, ramp: DriveRamp, fit: RampFit) -> RampRegion:
    """Return edges and dates of a frequency ramp."""
    scale = 1.0 / (TURN_RAD * ramp.order.m)
    rate_hz_s = -float(fit.theta[RATE]) * scale
    times = _span_s(series)
    low, high = sorted(ramp.start_hz + rate_hz_s * time for time in times)
    edges = [_linear(fit, {CENTRE: 1.0, COUPLING: side}, scale, "Hz") for side in (-1.0, 1.0)]
    for index, edge in enumerate(edges):
        if edge.value is not None and not low < edge.value < high:
            edges[index] = undetermined(
                "Hz",
                f"open on this side: the ramp ran from {low:.6g} to {high:.6g} Hz",
                low=high if index else None,
                high=None if index else low,
            )
    events = _events(series, fit, 1.0, lambda time: ramp.start_hz + rate_hz_s * time)
    notes = [f"drive ramped at {rate_hz_s:.4g} Hz/s; edges are those of a standing drive"]
    return RampRegion(
        lower=edges[0],
        upper=edges[1],
        coupling=_linear(fit, {COUPLING: 1.0}, 1.0 / TURN_RAD, "Hz"),
        centre=_linear(fit, {CENTRE: 1.0}, scale, "Hz"),
        noise_rad2_s=_noise(fit),
        events=events,
        notes=tuple(notes),
    )


def _span_s(series: PsiSeries) -> tuple[float, float]:
    ends = [
        begin_s + (part.size - 1) * series.step_s
        for begin_s, part in zip(series.start_s, series.segments, strict=True)
    ]
    return min(series.start_s), max(ends)


def _events(
    series: PsiSeries, fit: RampFit, amplitude: float, at: Callable[[float], float]
) -> tuple[RampEvent, ...]:
    """Return when lock was gained and lost: ends of stays without slips that last."""
    hold_s = HOLD_RELAXATIONS / max(float(fit.theta[COUPLING]) * amplitude, 1e-300)
    events: list[RampEvent] = []
    for begin_s, psi in zip(series.start_s, series.segments, strict=True):
        turns = (psi - float(fit.theta[OFFSET])) / TURN_RAD
        cells = np.round(turns)
        sure = np.flatnonzero(np.abs(turns - cells) < 0.25)
        changes = sure[1:][np.diff(cells[sure]) != 0]
        marks = [0, *(int(change) for change in changes), psi.size - 1]
        for first, last in pairwise(marks):
            if (last - first) * series.step_s < hold_s:
                continue
            for kind, index, edge in (("gained", first, 0), ("lost", last, psi.size - 1)):
                if index != edge:
                    time_s = begin_s + index * series.step_s
                    name: Literal["gained", "lost"] = "gained" if kind == "gained" else "lost"
                    events.append(RampEvent(kind=name, time_s=time_s, at=at(time_s)))
    return tuple(events)


def level_ramp_edge(series: PsiSeries, ramp: LevelRamp, detuning_hz: float) -> RampRegion:
    """Return the amplitude at which lock begins from one record with a ramped level.

    Parameters
    ----------
    series : PsiSeries
    ramp : LevelRamp
    detuning_hz : float, Hz, not 0
        First value of the free detuning; it is fitted.

    Returns
    -------
    RampRegion
        ``lower`` is |detuning| / kappa, ``coupling`` kappa, ``centre`` the detuning in Hz.

    Raises
    ------
    FitError
        If the record has fewer than 200 samples or the detuning is 0.
    """
    _refuse_short(series)
    if not detuning_hz:
        raise FitError("level ramp: detuning must differ from 0 Hz, got 0; detune the drive")
    first_s, last_s = _span_s(series)
    levels = sorted((ramp.start + ramp.rate_per_s * first_s, ramp.start + ramp.rate_per_s * last_s))
    if not levels[0] >= 0.0:
        raise FitError(f"level ramp: amplitude must stay at or above 0, got {levels[0]:g}")
    detuning = rad_s_from_hz(detuning_hz)
    starts = []
    for share in (0.35, 0.65):
        for turn in (0.0, 0.5 * math.pi, math.pi, 1.5 * math.pi):
            theta = np.zeros(WIDTH)
            theta[CENTRE], theta[OFFSET] = detuning, turn
            theta[COUPLING] = abs(detuning) / (levels[0] + share * (levels[1] - levels[0]))
            theta[LOG_D] = math.log(0.03 * abs(detuning))
            theta[LOG_R] = math.log(series.noise_start_rad2 or 1e-4)
            starts.append(theta)
    fit = best_ramp_fit(series, level_map(ramp), starts, (SLOPE, RATE))
    if fit is None:
        return _undetermined("1", "Hz", "the likelihood of the ramp did not settle")
    return _level_region(series, ramp, fit, levels)


def _level_region(
    series: PsiSeries, ramp: LevelRamp, fit: RampFit, levels: list[float]
) -> RampRegion:
    """Return the edge and dates of a level ramp."""
    detuning, kappa = float(fit.theta[CENTRE]), float(fit.theta[COUPLING])
    value = abs(detuning) / kappa
    slope = np.zeros(WIDTH)
    slope[CENTRE], slope[COUPLING] = math.copysign(1.0 / kappa, detuning), -value / kappa
    u = math.sqrt(max(float(slope @ fit.covariance @ slope), 0.0))
    edge = Quantity(
        value=value,
        u=u,
        unit="1",
        low=value - NORMAL_95 * u,
        high=value + NORMAL_95 * u,
        level=0.95,
    )
    if not levels[0] < value < levels[1]:
        edge = undetermined("1", f"the level ran from {levels[0]:.6g} to {levels[1]:.6g} only")
    reason = "a level ramp has one edge"
    return RampRegion(
        lower=edge,
        upper=undetermined("1", reason),
        coupling=_linear(fit, {COUPLING: 1.0}, 1.0 / TURN_RAD, "Hz per unit amplitude"),
        centre=_linear(fit, {CENTRE: 1.0}, 1.0 / TURN_RAD, "Hz"),
        noise_rad2_s=_noise(fit),
        events=_events(series, fit, value, lambda time: ramp.start + ramp.rate_per_s * time),
        notes=(f"level held within lanes of {LANE_SAMPLES} samples",),
    )


def _undetermined(axis_unit: str, unit: str, reason: str) -> RampRegion:
    missing = undetermined(axis_unit, reason)
    return RampRegion(
        lower=missing,
        upper=missing,
        coupling=undetermined(unit, reason),
        centre=undetermined("Hz", reason),
        noise_rad2_s=undetermined("rad^2/s", reason),
        events=(),
        notes=(reason,),
    )
