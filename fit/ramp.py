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
from fit.likelihood import LaneBatch, damped_step, lane_likelihood, make_lanes
from fit.records import PsiSeries
from rig.angles import TURN_RAD, hz_from_rad_s, rad_s_from_hz
from rig.arrays import FloatArray
from rig.errors import FitError
from rig.quantities import Quantity, undetermined

CENTRE, COUPLING, OFFSET, SLOPE, LOG_D, LOG_R, RATE = range(7)
WIDTH = 7
LANE_SAMPLES = 100  # psi0 and a ramped level are held over a lane
ITERATIONS, DECREMENT = 80, 1e-4
WINDOWS = 60  # pieces in which a first look searches for the locked stretch
QUIET_TURNS = 0.6
HOLD_RELAXATIONS = 25.0  # a stay without slips counts as lock from this many 1/K on
NORMAL_95 = 1.959963984540054
_LIMITS = (0.5, 0.5, 1.0, math.inf, 2.0, 2.0, math.inf)  # longest steps; first two in K


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
class LevelRamp:
    """Drive amplitude start + rate_per_s * t at a fixed drive frequency; it stays above 0."""

    start: float
    rate_per_s: float

    def __post_init__(self) -> None:
        if not self.rate_per_s:
            raise FitError("level ramp: rate_per_s must differ from 0, got 0")


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


_Map = Callable[[LaneBatch, FloatArray], tuple[FloatArray, FloatArray]]


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
    fit = _best(series, _frequency_map(place.start), starts, held)
    if fit is None:
        return _undetermined("Hz", "Hz", "the likelihood of the ramp did not settle")
    return _region(series, ramp, fit)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Place:
    """2 pi m drive at t = 0, and its rate, rad/s and rad/s^2."""

    start: float
    rate: float


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _RampFit:
    theta: FloatArray
    covariance: FloatArray
    loglik: float


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


def _frequency_map(start_rad_s: float) -> _Map:
    """Return the map from theta to lane parameters for a ramped drive frequency."""

    def apply(batch: LaneBatch, theta: FloatArray) -> tuple[FloatArray, FloatArray]:
        middle_s = batch.start_s + 0.5 * (batch.count - 1) * batch.step_s
        detuning = theta[CENTRE] - start_rad_s + theta[RATE] * batch.start_s
        centred = theta[CENTRE] - start_rad_s + theta[RATE] * middle_s
        offset = theta[OFFSET] + theta[SLOPE] * centred
        rows, jacobian = _lane_rows(theta, offset, np.ones(offset.size))
        rows[:, 0], rows[:, 5] = detuning, theta[RATE]
        jacobian[:, 0, CENTRE], jacobian[:, 0, RATE], jacobian[:, 5, RATE] = 1.0, batch.start_s, 1.0
        turned = jacobian[:, 1:3, OFFSET]
        jacobian[:, 1:3, SLOPE] = turned * centred[:, None]
        jacobian[:, 1:3, CENTRE] = turned * theta[SLOPE]
        jacobian[:, 1:3, RATE] = turned * (theta[SLOPE] * middle_s)[:, None]
        return rows, jacobian

    return apply


def _level_map(ramp: LevelRamp) -> _Map:
    """Return the map from theta to lane parameters for a ramped level."""

    def apply(batch: LaneBatch, theta: FloatArray) -> tuple[FloatArray, FloatArray]:
        middle_s = batch.start_s + 0.5 * (batch.count - 1) * batch.step_s
        amplitude = ramp.start + ramp.rate_per_s * middle_s
        offset = np.full(amplitude.size, theta[OFFSET])
        rows, jacobian = _lane_rows(theta, offset, amplitude)
        rows[:, 0] = theta[CENTRE]
        jacobian[:, 0, CENTRE] = 1.0
        return rows, jacobian

    return apply


def _lane_rows(
    theta: FloatArray, offset: FloatArray, amplitude: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return rows (L, 6) with a, b, ln D, ln R filled, and their derivatives (L, 6, 7)."""
    sine, cosine = amplitude * np.sin(offset), amplitude * np.cos(offset)
    rows = np.zeros((offset.size, 6))
    jacobian = np.zeros((offset.size, 6, WIDTH))
    rows[:, 1], rows[:, 2] = theta[COUPLING] * sine, -theta[COUPLING] * cosine
    rows[:, 3], rows[:, 4] = theta[LOG_D], theta[LOG_R]
    jacobian[:, 1, COUPLING], jacobian[:, 2, COUPLING] = sine, -cosine
    jacobian[:, 1, OFFSET] = theta[COUPLING] * cosine
    jacobian[:, 2, OFFSET] = theta[COUPLING] * sine
    jacobian[:, 3, LOG_D] = 1.0
    jacobian[:, 4, LOG_R] = 1.0
    return rows, jacobian


def _best(
    series: PsiSeries, mapped: _Map, starts: list[FloatArray], held: tuple[int, ...]
) -> _RampFit | None:
    """Return the best settled maximum over the starts."""
    batch, _ = make_lanes([series], LANE_SAMPLES)
    fits = [fit for start in starts if (fit := _climb(batch, mapped, start, held)) is not None]
    return max(fits, key=lambda fit: fit.loglik) if fits else None


def _evaluate(
    batch: LaneBatch, mapped: _Map, theta: FloatArray
) -> tuple[float, FloatArray, FloatArray]:
    rows, jacobian = mapped(batch, theta)
    found = lane_likelihood(batch, rows)
    score = np.einsum("lij,li->j", jacobian, found.score)
    information = np.einsum("lij,lik,lkm->jm", jacobian, found.information, jacobian)
    return float(found.loglik.sum()), score, information


def _climb(
    batch: LaneBatch, mapped: _Map, start: FloatArray, held: tuple[int, ...]
) -> _RampFit | None:
    """Damped Fisher scoring from one start; None when it does not settle."""
    theta = start.copy()
    fixed = np.zeros((1, WIDTH), dtype=bool)
    fixed[0, list(held)] = True
    loglik, score, information = _evaluate(batch, mapped, theta)
    damping = 1e-3
    for _ in range(ITERATIONS):
        if not math.isfinite(loglik) or damping > 1e6:
            return None
        plain = damped_step(score[None], information[None], np.zeros(1), fixed)[0]
        if abs(float(plain @ score)) < (DECREMENT if damping < 1.0 else 100 * DECREMENT):
            return _RampFit(
                theta=_folded(theta), covariance=_inverse(information, fixed[0]), loglik=loglik
            )
        step = damped_step(score[None], information[None], np.array([damping]), fixed)[0]
        trial = theta + _shortened(step, theta)
        found = _evaluate(batch, mapped, trial)
        if found[0] > loglik:
            theta, (loglik, score, information) = trial, found
            damping = max(0.1 * damping, 1e-9)
        else:
            damping *= 10.0
    return None


def _shortened(step: FloatArray, theta: FloatArray) -> FloatArray:
    limits = np.array(_LIMITS)
    limits[:2] *= max(abs(float(theta[COUPLING])), 1e-12)
    return step * min(1.0, float(np.min(limits / np.maximum(np.abs(step), 1e-300))))


def _inverse(information: FloatArray, fixed: FloatArray) -> FloatArray:
    """Return the inverse over the free columns that have influence, zero elsewhere."""
    free = np.flatnonzero(~np.asarray(fixed, dtype=bool) & (np.diag(information) > 0.0))
    scale = 1.0 / np.sqrt(np.diag(information)[free])
    inner = information[np.ix_(free, free)] * np.outer(scale, scale)
    out = np.zeros_like(information)
    out[np.ix_(free, free)] = np.linalg.pinv(inner, hermitian=True) * np.outer(scale, scale)
    return out


def _folded(theta: FloatArray) -> FloatArray:
    """Return the same curve with K >= 0."""
    if theta[COUPLING] >= 0.0:
        return theta
    out = theta.copy()
    out[COUPLING] *= -1.0
    out[OFFSET] += math.pi
    return out


def _linear(fit: _RampFit, weights: dict[int, float], scale: float, unit: str) -> Quantity:
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


def _noise(fit: _RampFit) -> Quantity:
    value = math.exp(float(fit.theta[LOG_D]))
    log_u = math.sqrt(max(float(fit.covariance[LOG_D, LOG_D]), 0.0))
    return Quantity(value=value, u=value * log_u, unit="rad^2/s")


def _region(series: PsiSeries, ramp: DriveRamp, fit: _RampFit) -> RampRegion:
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
    series: PsiSeries, fit: _RampFit, amplitude: float, at: Callable[[float], float]
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
    fit = _best(series, _level_map(ramp), starts, (SLOPE, RATE))
    if fit is None:
        return _undetermined("1", "Hz", "the likelihood of the ramp did not settle")
    return _level_region(series, ramp, fit, levels)


def _level_region(
    series: PsiSeries, ramp: LevelRamp, fit: _RampFit, levels: list[float]
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
