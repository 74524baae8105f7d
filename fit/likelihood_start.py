"""Starting values of the likelihood fit, from the record itself.

Each candidate is a vector (dw, a, b, ln D, ln R) as in ``fit.likelihood``. None of them is an
answer: the regressions are biased by the step and by measurement noise, and serve only to
begin the search on the right side of the hill.
"""

from __future__ import annotations

import math

import numpy as np

from fit.records import PsiSeries
from rig.arrays import FloatArray

# Lags (samples) of the regressions: 1 follows fast motion, 4 stands above measurement noise.
LAGS = (1, 4)
# Branches of the locked start, rad: psi0 = rest angle - branch, sin(branch) = detuning/coupling.
BRANCHES_RAD = (0.0, 0.9, -0.9)


def start_candidates(record: PsiSeries, detuning_rad_s: float | None = None) -> FloatArray:
    """Return candidate starting points of one record, shape (S, 5).

    Parameters
    ----------
    record : PsiSeries
        At least one segment of 8 samples.
    detuning_rad_s : float, rad/s, optional
        Detuning known from free-running captures.

    Notes
    -----
    Weak form: y(k+q) - y(k) = dw q h + a int cos y + b int sin y, integrals by trapezoids,
    solved with the instruments (1, cos y, sin y) at k-1, which no noise of the increment
    touches. Beside it ordinary regression, the mean slope without coupling, and for records
    that turn by less than about three turns an autoregressive start around the rest angle.
    """
    drifts = [weak_form(record, lag) for lag in LAGS]
    drifts.append(_regression(record))
    drifts.append(np.array([_mean_slope(record), 0.0, 0.0]))
    points = [_with_noise(record, drift) for drift in drifts if _usable(drift, record.step_s)]
    if abs(net_turns(record)) < 3.0:
        points.extend(_locked_points(record, detuning_rad_s))
    # Motion too fast for the step: the fit will refuse it, and needs a point to refuse.
    return np.array(points or [_with_noise(record, drifts[-1])])


def steady_start(record: PsiSeries) -> FloatArray:
    """Return the one start of a record that only sits at its angle, shape (1, 5); dw is 0."""
    return np.array(_locked_points(record, None)[:1])


def net_turns(record: PsiSeries) -> float:
    """Return the turns that psi went from start to stop, summed over the segments."""
    return math.fsum(part[-1] - part[0] for part in record.segments if part.size) / math.tau


def weak_form(record: PsiSeries, lag: int) -> FloatArray:
    """Return (dw, a, b) by the weak form with instruments; NaN where it has no solution."""
    rows: list[FloatArray] = []
    tools: list[FloatArray] = []
    ends: list[FloatArray] = []
    for y in record.segments:
        if y.size < lag + 3:
            continue
        waves = np.stack([np.ones_like(y), np.cos(y), np.sin(y)])
        area = np.zeros_like(waves)
        np.cumsum(0.5 * record.step_s * (waves[:, 1:] + waves[:, :-1]), axis=1, out=area[:, 1:])
        rows.append(area[:, 1 + lag :] - area[:, 1:-lag])
        tools.append(waves[:, : -1 - lag])
        ends.append(y[1 + lag :] - y[1:-lag])
    return _solve(rows, tools, ends)


def _regression(record: PsiSeries) -> FloatArray:
    """Return (dw, a, b) by regression of two-sample increments on the middle sample."""
    rows: list[FloatArray] = []
    ends: list[FloatArray] = []
    for y in record.segments:
        middle = y[1:-1]
        rows.append(np.stack([np.ones_like(middle), np.cos(middle), np.sin(middle)]))
        ends.append((y[2:] - y[:-2]) / (2.0 * record.step_s))
    return _solve(rows, rows, ends)


def _solve(rows: list[FloatArray], tools: list[FloatArray], ends: list[FloatArray]) -> FloatArray:
    """Return the solution of tools rows' beta = tools ends, NaN when there is none."""
    if not rows:
        return np.full(3, np.nan)
    x, z, y = np.hstack(rows), np.hstack(tools), np.concatenate(ends)
    try:
        return np.asarray(np.linalg.solve(z @ x.T, z @ y))
    except np.linalg.LinAlgError:
        return np.full(3, np.nan)


def _mean_slope(record: PsiSeries) -> float:
    """Return the mean rate of psi in rad/s."""
    return net_turns(record) * math.tau / max(record.duration_s, record.step_s)


def _usable(drift: FloatArray, step_s: float) -> bool:
    """Say whether the drift can be followed at this step."""
    return bool(np.all(np.isfinite(drift)) and np.sum(np.abs(drift)) * step_s < 3.0)


def _with_noise(record: PsiSeries, drift: FloatArray) -> FloatArray:
    """Return the point with D and R from what the drift leaves of the increments.

    Measurement noise makes neighbouring increments anticorrelated: -g1 is its variance.
    """
    residuals = []
    for y in record.segments:
        middle = 0.5 * (y[1:] + y[:-1])
        rate = drift[0] + drift[1] * np.cos(middle) + drift[2] * np.sin(middle)
        residuals.append(np.diff(y) - record.step_s * rate)
    power = math.fsum(float(part @ part) for part in residuals)
    size = sum(part.size for part in residuals)
    neighbour = math.fsum(float(part[1:] @ part[:-1]) for part in residuals)
    g0 = max(power / max(size, 1), _smallest_variance(record))
    g1 = neighbour / max(size - len(residuals), 1)
    noise = min(max(-g1, 1e-3 * g0), 0.49 * g0)
    diffusion = max(g0 - 2.0 * noise, 0.02 * g0) / (2.0 * record.step_s)
    return np.array([*drift, math.log(diffusion), math.log(noise)])


def _smallest_variance(record: PsiSeries) -> float:
    """Return the variance that rounding of psi leaves: no noise below it can be seen."""
    largest = max(float(np.max(np.abs(part), initial=1.0)) for part in record.segments)
    return float((largest * 1e-13) ** 2 + 1e-26)


def _locked_points(record: PsiSeries, detuning_rad_s: float | None) -> list[FloatArray]:
    """Return starts around the rest angle, one a branch of the offset."""
    tail = max(record.segments, key=lambda part: part.size)
    tail = tail[tail.size // 3 :]
    rest = float(np.mean(tail))
    rate, diffusion, noise = relaxation(tail - rest, record.step_s)
    branches = list(BRANCHES_RAD)
    if detuning_rad_s is not None:
        branches.append(math.atan2(detuning_rad_s, rate))
    points = []
    for branch in branches:
        coupling, offset = rate / math.cos(branch), rest - branch
        drift = (coupling * math.sin(branch), coupling * math.sin(offset))
        points.append([*drift, -coupling * math.cos(offset), math.log(diffusion), math.log(noise)])
    return [np.array(point) for point in points]


def relaxation(away: FloatArray, step_s: float) -> tuple[float, float, float]:
    """Return relaxation rate (1/s), D (rad^2/s), R (rad^2) of psi around its rest angle.

    From the autocovariances at lags 0, 1, 2 of an exponentially correlated process seen
    through white noise: c2/c1 = exp(-rate h). Held to what the record can show.
    """
    size = away.size
    c0, c1, c2 = (float(away[lag:] @ away[: size - lag]) / max(size - lag, 1) for lag in (0, 1, 2))
    c0 = max(c0, 1e-26)
    c1 = min(max(c1, 1e-3 * c0), 0.999 * c0)
    ratio = min(max(c2 / c1, 0.3), 1.0 - 1.0 / max(size, 4))
    rate = -math.log(ratio) / step_s
    spread = min(c1 / ratio, 0.999 * c0)
    return rate, max(rate * spread, 1e-30), max(c0 - spread, 1e-3 * c0)
