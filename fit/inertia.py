"""Does psi have inertia? The phase equation with a time constant, beside the plain one.

    tau psi'' + psi' = dw + a cos psi + b sin psi + noise.

State (psi, psi') is carried by a Gaussian filter: over each step the drift is linear about
the middle of the predicted path, with the sine averaged over the Gaussian; mean, covariance
and noise of the linear system are exact, so that tau may be far below or above the step.
The search compares the likelihood at time constants above a quarter of the step with that
at a quarter: the phase band smooths psi over up to one step, and what lies below that looks
the same.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from fit.likelihood import damped_step, make_lanes
from fit.records import PsiSeries
from rig.arrays import FloatArray, IntArray

NULL_SHARE = 0.25  # tau / step of the null
SHARES = (0.8, 2.5)  # tau / step at which the search starts
MOST_SAMPLES = 1500  # more adds time; inertia shows in every sample
LANE_SAMPLES = 250
# Rise of twice the log-likelihood from which the search is refined.
PROMISING = 1.0
ROUNDS = 2  # scoring steps of every trial
REFINEMENTS = 3
# Steps of the numerical derivatives: rates times the step in rad, logarithms of variances.
NUDGE = 1e-4


@dataclass(frozen=True, slots=True, kw_only=True)
class InertiaFit:
    """Twice the rise of the log-likelihood by a time constant, and that constant.

    ``log_u`` is the standard error of ln tau, infinite where the search was not refined.
    """

    rise: float
    tau_s: float
    log_u: float
    coupling_rad_s: float


def find_inertia(
    series: Sequence[PsiSeries], theta: Sequence[FloatArray]
) -> list[InertiaFit | None]:
    """Return the fit with a time constant for each record, None where it cannot be followed.

    Parameters
    ----------
    series : sequence of PsiSeries
    theta : sequence of arrays, shape (5,)
        (dw, a, b, ln D, ln R) of the plain fit of each record.

    Returns
    -------
    list of InertiaFit or None
    """
    shortened = [_shortened(record) for record in series]
    batch, owner = make_lanes(shortened, LANE_SAMPLES)
    if owner.size == 0:
        return [None] * len(series)
    data = _Data(np.ascontiguousarray(batch.y.T), batch.step_s, owner, len(series))
    step_s = np.array([record.step_s for record in series])
    points = np.array(theta, dtype=float)
    shares = (NULL_SHARE, *SHARES)
    # All shares side by side: a step of the filter costs calls, hardly their width.
    started = np.concatenate([_started(points, step_s, share) for share in shares])
    found, levels = _profiled(data.times(len(shares)), started, ROUNDS)
    tries = found.reshape(len(shares), *points.shape[:1], -1)
    loglik = levels.reshape(len(shares), -1)
    best = 1 + np.argmax(loglik[1:], axis=0)
    rows = np.arange(len(series))
    rise = 2.0 * (loglik[best, rows] - loglik[0])
    fits: list[InertiaFit | None] = []
    chosen = tries[best, rows]
    refined = _refined(data, tries[0], chosen, np.flatnonzero(rise > PROMISING))
    for row in rows:
        if not math.isfinite(rise[row]):
            fits.append(None)
        elif int(row) in refined:
            fits.append(refined[int(row)])
        else:
            tau_s = math.exp(float(chosen[row, 5]))
            coupling = math.hypot(chosen[row, 1], chosen[row, 2])
            fits.append(
                InertiaFit(
                    rise=max(float(rise[row]), 0.0),
                    tau_s=tau_s,
                    log_u=math.inf,
                    coupling_rad_s=coupling,
                )
            )
    return fits


def _shortened(record: PsiSeries) -> PsiSeries:
    """Return at most the first 1,500 samples of a record."""
    left = MOST_SAMPLES
    kept = []
    for part in record.segments:
        kept.append(part[:left])
        left -= kept[-1].size
        if left <= 1:
            break
    return PsiSeries(
        step_s=record.step_s,
        segments=tuple(kept),
        start_s=record.start_s[: len(kept)],
        lost_s=record.lost_s,
    )


@dataclass(frozen=True, slots=True)
class _Data:
    """Samples (N, L), step of each lane, record of each lane, number of records."""

    y: FloatArray
    step_s: FloatArray
    owner: IntArray
    records: int

    def rows(self, rows: IntArray) -> _Data:
        """Return the lanes of the given records, renumbered."""
        number = np.full(self.records, -1)
        number[rows] = np.arange(rows.size)
        lanes = np.flatnonzero(number[self.owner] >= 0)
        return _Data(self.y[:, lanes], self.step_s[lanes], number[self.owner[lanes]], rows.size)

    def times(self, copies: int) -> _Data:
        """Return all records some times over, one copy behind the other."""
        shift = np.repeat(np.arange(copies) * self.records, self.owner.size)
        return _Data(
            np.tile(self.y, (1, copies)),
            np.tile(self.step_s, copies),
            np.tile(self.owner, copies) + shift,
            copies * self.records,
        )


def _started(points: FloatArray, step_s: FloatArray, share: float) -> FloatArray:
    """Return (dw, a, b, ln D, ln R, ln tau) to start from at tau = share * step.

    A velocity that remembers takes the share tau (1 - exp(-h/tau))/h from the variance of an
    increment; D starts higher by it.
    """
    lost = share * -math.expm1(-1.0 / share)
    moved = np.column_stack([points, np.log(share * step_s)])
    moved[:, 3] -= math.log(max(1.0 - lost, 0.05))
    return np.asarray(moved)


def _profiled(
    data: _Data, start: FloatArray, rounds: int, held: int | None = None
) -> tuple[FloatArray, FloatArray]:
    """Return points and log-likelihoods after scoring steps.

    The time constant moves too, but in the last ``held`` records; in none where that is None.
    """
    best = start
    columns = 5 if held is None else 6
    fixed = slice(data.records if held is None else data.records - held, None)
    level, score, information = _evaluated(data, best, columns)
    shrink = np.ones(data.records)
    for left in range(rounds, 0, -1):
        point = best + shrink[:, None] * _limited_step(data, score, information, fixed)
        # The last point needs its level only.
        found = _evaluated(data, point, columns if left > 1 else 0)
        better = found[0] > level
        best = np.where(better[:, None], point, best)
        level = np.where(better, found[0], level)
        shrink = np.where(better, 1.0, 0.25 * shrink)
        if left > 1:
            score = np.where(better[:, None], found[1], score)
            information = np.where(better[:, None, None], found[2], information)
    return best, level


def _limited_step(
    data: _Data, score: FloatArray, information: FloatArray, fixed: slice
) -> FloatArray:
    """Return the scoring step of all six columns, shortened where it would leap.

    The time constant of the ``fixed`` records does not move.
    """
    damping = np.full(data.records, 1e-3)
    step = np.zeros((data.records, 6))
    for own, columns in ((slice(fixed.start), score.shape[1]), (fixed, 5)):
        step[own, :columns] = damped_step(
            score[own, :columns], information[own, :columns, :columns], damping[own]
        )
    step_s = np.full(data.records, np.inf)
    np.minimum.at(step_s, data.owner, data.step_s)
    limits = np.ones_like(step)
    limits[:, :3] = 0.5 / step_s[:, None]
    factor = np.min(limits / np.maximum(np.abs(step), 1e-300), axis=1)
    return np.asarray(step * np.minimum(1.0, factor)[:, None])


def _refined(
    data: _Data, null: FloatArray, chosen: FloatArray, rows: IntArray
) -> dict[int, InertiaFit]:
    """Return the refined fits of the records where a time constant may help."""
    if rows.size == 0:
        return {}
    own = data.rows(rows)
    started = np.concatenate([chosen[rows], null[rows]])
    found, levels = _profiled(own.times(2), started, REFINEMENTS, held=rows.size)
    point, (above, below) = found[: rows.size], levels.reshape(2, -1)
    _, _, information = _evaluated(own, point, 6)
    fits = {}
    for place, row in enumerate(rows):
        errors = np.diag(np.linalg.pinv(information[place], hermitian=True))
        fits[int(row)] = InertiaFit(
            rise=max(2.0 * float(above[place] - below[place]), 0.0),
            tau_s=math.exp(float(point[place, 5])),
            log_u=math.sqrt(max(float(errors[5]), 0.0)),
            coupling_rad_s=math.hypot(point[place, 1], point[place, 2]),
        )
    return fits


def _evaluated(
    data: _Data, point: FloatArray, columns: int
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return log-likelihood (M,), score (M, C) and expected information (M, C, C)."""
    lanes = data.owner.size
    theta = point[data.owner]
    nudge = np.full((lanes, 6), NUDGE)
    nudge[:, :3] /= data.step_s[:, None]
    spread = np.tile(theta, (1 + columns, 1, 1))
    for column in range(columns):
        spread[1 + column, :, column] += nudge[:, column]
    with np.errstate(all="ignore"):
        v, s = _filter(data, spread.reshape(-1, 6), 1 + columns)
        v, s = v.reshape(-1, 1 + columns, lanes), s.reshape(-1, 1 + columns, lanes)
        there = np.isfinite(data.y[1:])
        v0, s0 = np.where(there, v[:, 0], 0.0), np.where(there, s[:, 0], 1.0)
        dv = np.where(there[:, None], v[:, 1:] - v[:, :1], 0.0) / nudge.T[:columns]
        ds = np.where(there[:, None], s[:, 1:] - s[:, :1], 0.0) / nudge.T[:columns]
        chi = v0**2 / s0
        level = -0.5 * np.sum(np.where(there, np.log(2.0 * np.pi * s0) + chi, 0.0), axis=0)
        rise = -dv * (v0 / s0)[:, None] - ds * (0.5 * (1.0 - chi) / s0)[:, None]
        dv /= np.sqrt(s0)[:, None]
        ds /= (s0 * math.sqrt(2.0))[:, None]
        squares = np.einsum("nil,njl->lij", dv, dv) + np.einsum("nil,njl->lij", ds, ds)
    loglik = np.zeros(data.records)
    score = np.zeros((data.records, columns))
    information = np.zeros((data.records, columns, columns))
    np.add.at(loglik, data.owner, np.where(np.isfinite(level), level, -np.inf))
    np.add.at(score, data.owner, np.nan_to_num(rise.sum(axis=0).T))
    np.add.at(information, data.owner, np.nan_to_num(squares))
    return loglik, score, information


def _filter(data: _Data, theta: FloatArray, copies: int) -> tuple[FloatArray, FloatArray]:
    """Return innovations and their variances (N - 1, copies * L) of the two-state filter."""
    lanes = theta.shape[0]
    step = np.tile(data.step_s, copies)
    samples = np.tile(data.y, (1, copies))
    dw, a, b = theta[:, 0], theta[:, 1], theta[:, 2]
    noise, tau = np.exp(theta[:, 4]), np.exp(theta[:, 5])
    drive = 2.0 * np.exp(theta[:, 3]) / tau**2
    mean, p11 = samples[0].copy(), noise.copy()
    cosine, sine = np.cos(mean), np.sin(mean)
    speed = dw + a * cosine + b * sine
    p12, p22 = np.zeros(lanes), 0.5 * drive * tau
    half = 0.5 * step
    lag = -np.expm1(-half / tau) * tau
    respond = _Response(tau, step)
    v = np.empty((samples.shape[0] - 1, lanes))
    s = np.empty_like(v)
    for sample in range(1, samples.shape[0]):
        damping = np.exp(-0.5 * p11)
        f = dw + damping * (a * np.cos(mean) + b * np.sin(mean))
        # Where the path will be in the middle of the step, to first order.
        away = f * half + (speed - f) * lag
        middle = mean + away
        cosine, sine = damping * np.cos(middle), damping * np.sin(middle)
        g = b * cosine - a * sine
        f = dw + a * cosine + b * sine - g * away
        u1, u2, area, q11, q12, q22 = respond(g)
        # psi response: 1 + (g/tau) area on psi itself, u1 on the speed.
        m11, m21 = 1.0 + g / tau * area, g / tau * u1
        mean = mean + u1 * speed + f / tau * area
        speed = u2 * speed + f / tau * u1
        n11 = m11 * m11 * p11 + 2.0 * m11 * u1 * p12 + u1 * u1 * p22 + drive * q11
        n12 = m11 * m21 * p11 + (m11 * u2 + u1 * m21) * p12 + u1 * u2 * p22 + drive * q12
        n22 = m21 * m21 * p11 + 2.0 * m21 * u2 * p12 + u2 * u2 * p22 + drive * q22
        total = n11 + noise
        innovation = samples[sample] - mean
        v[sample - 1], s[sample - 1] = innovation, total
        gain, gain2 = n11 / total, n12 / total
        mean = mean + gain * innovation
        speed = speed + gain2 * innovation
        p11, p12, p22 = gain * noise, (1.0 - gain) * n12, n22 - gain2 * n12
    return v, s


class _Response:
    """The response to a push of the speed over one step, and its integrals, for slopes g.

    u1, u2: psi and speed after a unit speed; area: integral of u1; q11, q12, q22: integrals
    of u1^2, u1 u2, u2^2. They follow from u1 and u2 because both obey the linear system;
    where the slope g of the drift is next to zero, it is taken a hair away from it.
    """

    def __init__(self, tau: FloatArray, step: FloatArray) -> None:
        self._tau, self._step = tau, step
        self._least = 1e-5 / step
        self._quarter = 0.25 / tau
        self._fading = np.exp(-0.5 * step / tau)

    def __call__(
        self, g: FloatArray
    ) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray, FloatArray, FloatArray]:
        """Return (u1, u2, area, q11, q12, q22)."""
        tau = self._tau
        g = np.where(np.abs(g) < self._least, self._least, g)
        squared = (self._quarter + g) / tau
        root = np.sqrt(np.abs(squared))
        angle = np.minimum(root * self._step, 300.0)
        even, odd = np.cosh(angle), np.sinh(angle)
        curved = squared < 0.0
        if curved.any():
            even = np.where(curved, np.cos(angle), even)
            odd = np.where(curved, np.sin(angle), odd)
        odd /= np.maximum(root, 1e-12)
        u1 = self._fading * odd
        u2 = self._fading * (even - 0.5 * odd / tau)
        area = (tau * (u2 - 1.0) + u1) / g
        q12 = 0.5 * u1 * u1
        q22 = 0.5 * tau * (1.0 - u2 * u2) + g * q12
        q11 = (u1 * u2 + q12 / tau - q22) * tau / g
        return u1, u2, area, q11, q12, q22
