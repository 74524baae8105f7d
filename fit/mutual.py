"""Who pulls whom: the coupling of each oscillator of a pair on the other, from both phases.

    phi_d' = w_d - K_d sin(psi - lag_d) + noise,   phi_r' = w_r + K_r sin(psi - lag_r) + noise,

psi = n phi_d - m phi_r as in ``fit.difference``; positive couplings with lags of zero attract
from both sides. Both phases are filtered together (mean and covariance of two phases, the
sine averaged over the Gaussian of psi), which measurement noise does not bias. While psi
stays in one place only the sum of both pulls is seen: a locked pair is not separable.
"""

from __future__ import annotations

import math

import numpy as np

from fit.difference import Order
from fit.likelihood import damped_step
from fit.mutual_phases import MutualPhases, gather_phases
from fit.quantiles import chi_square_above
from fit.records import MutualEstimate, PsiSeries
from rig.angles import TURN_RAD, hz_from_rad_s
from rig.arrays import BoolArray, FloatArray, median
from rig.phases.track import PhaseTrack
from rig.quantities import Quantity, undetermined

MOST_STEP_RAD = math.pi  # a median step beyond half a turn leaves the turns to chance
MOST_DIVISIONS = 64  # sub-steps a sample: parameters that ask for more are far off anyway
LEAST_SAMPLES = 64
LEAST_TURNS = 2.0  # net turns or slips of psi that separate the two couplings
LEAST_SLIPS = 5
ROUNDS = 25
SETTLED = 1e-3  # squared step in standard errors
NUDGE = 1e-4
# What diffusion adds over a sample, over the variance of the measurement noise: from the first
# on that noise has no influence, beyond the second it is not let go.
UNSEEN, LEAST_SEEN = 1e3, 1e4
GATE = 0.3  # standard error of a coupling over the larger coupling up to which it is given
STEP_LIMIT_RAD = 0.4
# Parameters: w_r, a_r, b_r, w_d, a_d, b_d, ln D_r, ln D_d, ln R_r, ln R_d.
WIDTH = 10
SIZE = 0.05


def estimate_mutual(
    reference: PhaseTrack, driven: PhaseTrack, order: Order, series: PsiSeries
) -> MutualEstimate:
    """Return the couplings in both directions with their lags, and the direction index.

    Parameters
    ----------
    reference, driven : PhaseTrack on one grid
    order : Order
    series : PsiSeries
        psi of the pair; its samples say where the phases are taken.

    Returns
    -------
    MutualEstimate
        Undetermined with a reason where the record is too short, locked ("not separable"),
        or the fit does not settle; a coupling that is not told apart from zero at 5 % has an
        upper bound only.

    Notes
    -----
    Sound where turns or slips of psi show the whole coupling function; both channels must
    share one clock, because an error of it enters both phases.
    """
    reason = _refusal(series)
    if reason:
        return no_mutual(reason)
    data = gather_phases(reference, driven, order, series)
    fitted = _fit(data, _start(data))
    if fitted is None:
        return no_mutual("the fit of both phases did not settle")
    theta, covariance = fitted
    return _estimate(theta, covariance)


def _refusal(series: PsiSeries) -> str:
    """Return why the couplings cannot be separated, empty when they can."""
    usable = [part for part in series.segments if part.size >= 8]
    samples = sum(part.size for part in usable)
    if samples < LEAST_SAMPLES:
        return f"{samples} phase samples, at least {LEAST_SAMPLES} needed"
    step_rad = median(np.concatenate([np.abs(np.diff(part)) for part in usable]))
    if step_rad > MOST_STEP_RAD:
        return f"psi moves {step_rad:.3g} rad a sample; more than half a turn cannot be followed"
    turns = abs(math.fsum(float(part[-1] - part[0]) for part in usable)) / TURN_RAD
    slips = sum(int(np.sum(np.abs(np.diff(np.round(part / TURN_RAD))))) for part in usable)
    spread = max(float(np.ptp(part)) for part in usable) / TURN_RAD
    if turns < LEAST_TURNS and (slips < LEAST_SLIPS or spread < 1.0):
        return (
            "not separable: the pair is locked and shows only the sum of both pulls; record it "
            f"where it drifts at least {LEAST_TURNS:g} turns"
        )
    return ""


def no_mutual(reason: str) -> MutualEstimate:
    """Return the estimate that says why there is none."""
    return MutualEstimate(
        on_driven_hz=undetermined("Hz", reason),
        on_reference_hz=undetermined("Hz", reason),
        lag_driven_rad=undetermined("rad", reason),
        lag_reference_rad=undetermined("rad", reason),
        direction=undetermined("1", reason),
        method="none",
    )


def _start(data: MutualPhases) -> FloatArray:
    """Return starting parameters: weak form with instruments for each phase."""
    psi, h = data.psi, data.step_s
    theta = np.zeros(WIDTH)
    waves = np.stack([np.ones_like(psi), np.cos(psi), np.sin(psi)])
    area = 0.5 * h * (waves[:, 2:] + waves[:, 1:-1])
    tools = waves[:, :-2]
    for which in range(2):
        moved = np.diff(data.phases[which], axis=0)[1:]
        good = np.isfinite(moved)
        x, z, y = area[:, good], tools[:, good], moved[good]
        beta = np.linalg.lstsq(z @ x.T, z @ y, rcond=None)[0]
        theta[3 * which : 3 * which + 3] = beta
        away = y - beta @ x
        power = max(float(np.mean(away**2)), 1e-18)
        neighbour = float(np.mean(away[1:] * away[:-1]))
        noise = min(max(-neighbour, 1e-3 * power), 0.45 * power)
        theta[6 + which] = math.log(max(power - 2.0 * noise, 0.05 * power) / (2.0 * h))
        theta[8 + which] = math.log(noise)
    return theta


def _fit(data: MutualPhases, start: FloatArray) -> tuple[FloatArray, FloatArray] | None:
    """Return the maximum and the inverse information, None where it is not reached."""
    theta, damping = start, 1e-3
    level, score, information = _evaluated(data, theta)
    if not math.isfinite(level):
        return None
    for _ in range(ROUNDS):
        held = _unseen(data, theta, score)
        step = damped_step(score[None], information[None], np.array([damping]), held[None])[0]
        if abs(float(step @ score)) < SETTLED:
            return theta, _inverse(information)
        step[6:] = np.clip(step[6:], -1.5, 1.5)
        limit = 1.0 / data.step_s / max(float(np.max(np.abs(step[:6]))), 1e-300)
        trial = theta + min(1.0, limit) * step
        floor = trial[6:8] + math.log(2.0 * data.step_s) - math.log(LEAST_SEEN)
        trial[8:] = np.maximum(trial[8:], floor)
        found = _evaluated(data, trial)
        if found[0] > level:
            gain = found[0] - level
            theta, (level, score, information), damping = trial, found, max(0.1 * damping, 1e-9)
            if gain < SETTLED and damping < 1e-3:
                return theta, _inverse(information)
        else:
            damping *= 10.0
            if damping > 1e6:
                return None
    return None


def _unseen(data: MutualPhases, theta: FloatArray, score: FloatArray) -> BoolArray:
    """Return which measurement noises are too small to be seen and want to go on down (10,).

    Left free they take ever longer steps down that the floor then cuts, and nothing settles.
    """
    held = np.zeros(WIDTH, dtype=bool)
    ratio = theta[6:8] + math.log(2.0 * data.step_s) - theta[8:]
    held[8:] = (ratio > math.log(UNSEEN)) & (score[8:] < 0.0)
    return held


def _inverse(information: FloatArray) -> FloatArray:
    """Return the inverse of the information, scaled so that units do not matter."""
    size = np.sqrt(np.maximum(np.diag(information), 1e-300))
    scaled = information / np.outer(size, size) + 1e-10 * np.eye(WIDTH)
    return np.asarray(np.linalg.inv(scaled) / np.outer(size, size))


def _evaluated(data: MutualPhases, theta: FloatArray) -> tuple[float, FloatArray, FloatArray]:
    """Return log-likelihood, score and expected information at one point."""
    nudge = np.full(WIDTH, NUDGE)
    nudge[:6] /= data.step_s
    copies = np.tile(theta, (1 + WIDTH, 1))
    copies[1:] += np.diag(nudge)
    with np.errstate(all="ignore"):
        v, s = _filter(data, copies)
    there = np.isfinite(data.phases[0, 1:])
    if not np.all(np.isfinite(v[:, :, there])):
        return -math.inf, np.zeros(WIDTH), np.zeros((WIDTH, WIDTH))
    # (copies, components, samples)
    v, s = v[..., there], s[..., there]
    determinant = s[0, 0] * s[0, 2] - s[0, 1] ** 2
    inverse = np.stack([s[0, 2], -s[0, 1], s[0, 0]]) / determinant
    pulled = np.stack(
        [inverse[0] * v[0, 0] + inverse[1] * v[0, 1], inverse[1] * v[0, 0] + inverse[2] * v[0, 1]]
    )
    level = -0.5 * float(np.sum(np.log(determinant) + np.sum(pulled * v[0], axis=0)))
    dv = (v[1:] - v[:1]) / nudge[:, None, None]
    ds = (s[1:] - s[:1]) / nudge[:, None, None]
    # W dS with W the inverse variance: its trace and products give score and information.
    w = np.stack(
        [
            np.stack(
                [
                    inverse[0] * ds[:, 0] + inverse[1] * ds[:, 1],
                    inverse[0] * ds[:, 1] + inverse[1] * ds[:, 2],
                ],
                axis=1,
            ),
            np.stack(
                [
                    inverse[1] * ds[:, 0] + inverse[2] * ds[:, 1],
                    inverse[1] * ds[:, 1] + inverse[2] * ds[:, 2],
                ],
                axis=1,
            ),
        ],
        axis=1,
    )
    spread = ds[:, 0] * pulled[0] ** 2 + 2.0 * ds[:, 1] * pulled[0] * pulled[1]
    spread += ds[:, 2] * pulled[1] ** 2
    score = -np.sum(dv * pulled, axis=(1, 2))
    score += 0.5 * np.sum(spread - w[:, 0, 0] - w[:, 1, 1], axis=1)
    weighted = np.stack(
        [
            inverse[0] * dv[:, 0] + inverse[1] * dv[:, 1],
            inverse[1] * dv[:, 0] + inverse[2] * dv[:, 1],
        ],
        axis=1,
    )
    information = np.einsum("icn,jcn->ij", dv, weighted)
    information += 0.5 * np.einsum("iabn,jban->ij", w, w)
    return level, score, information


def _filter(data: MutualPhases, copies: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return innovations (C, 2, N - 1, L) and their covariance (C, 3, N - 1, L)."""
    count, lanes = copies.shape[0], data.phases.shape[2]
    law = copies.T[:, :, None]
    reach = data.step_s * float(np.abs(data.turn) @ np.abs(copies[0, :6]).reshape(2, 3).sum(axis=1))
    divisions = min(max(1, math.ceil(reach / STEP_LIMIT_RAD)), MOST_DIVISIONS)
    h = data.step_s / divisions
    # As in fit.lane_filter: the band takes D lost_s off the measurement noise.
    noise = np.exp(law[8:10]) - np.exp(law[6:8]) * data.lost_s[:, None, None]
    push = 2.0 * np.exp(law[6:8]) * h
    mean = [np.repeat(data.phases[k, 0][None], count, axis=0) for k in range(2)]
    cov = [np.repeat(noise[0], lanes, 1), np.zeros((count, lanes)), np.repeat(noise[1], lanes, 1)]
    size = data.phases.shape[1] - 1
    v = np.empty((count, 2, size, lanes))
    s = np.empty((count, 3, size, lanes))
    for sample in range(size):
        for _ in range(divisions):
            mean, cov = _advanced(data.turn, law, h, push, mean, cov)
        total = [cov[0] + noise[0], cov[1], cov[2] + noise[1]]
        away = [data.phases[k, sample + 1] - mean[k] for k in range(2)]
        v[:, 0, sample], v[:, 1, sample] = away
        s[:, 0, sample], s[:, 1, sample], s[:, 2, sample] = total
        mean, cov = _updated(mean, cov, total, away)
    return v, s


def _updated(
    mean: list[FloatArray], cov: list[FloatArray], total: list[FloatArray], away: list[FloatArray]
) -> tuple[list[FloatArray], list[FloatArray]]:
    """Return mean and covariance after a sample of both phases."""
    determinant = total[0] * total[2] - total[1] ** 2
    g00 = (cov[0] * total[2] - cov[1] * total[1]) / determinant
    g01 = (cov[1] * total[0] - cov[0] * total[1]) / determinant
    g10 = (cov[1] * total[2] - cov[2] * total[1]) / determinant
    g11 = (cov[2] * total[0] - cov[1] * total[1]) / determinant
    ahead = [
        mean[0] + g00 * away[0] + g01 * away[1],
        mean[1] + g10 * away[0] + g11 * away[1],
    ]
    left = [
        cov[0] - g00 * cov[0] - g01 * cov[1],
        cov[1] - g00 * cov[1] - g01 * cov[2],
        cov[2] - g10 * cov[1] - g11 * cov[2],
    ]
    return ahead, left


def _advanced(
    turn: FloatArray,
    law: FloatArray,
    h: float,
    push: FloatArray,
    mean: list[FloatArray],
    cov: list[FloatArray],
) -> tuple[list[FloatArray], list[FloatArray]]:
    """Return mean and covariance one sub-step on, by the midpoint rule."""
    slope = _slopes(turn, law, mean, cov)
    half_mean = [mean[k] + 0.5 * h * slope[k] for k in range(2)]
    half_cov = [cov[k] + 0.5 * (h * slope[2 + k]) for k in range(3)]
    half_cov[0] = half_cov[0] + 0.5 * push[0]
    half_cov[2] = half_cov[2] + 0.5 * push[1]
    slope = _slopes(turn, law, half_mean, half_cov)
    ahead = [mean[k] + h * slope[k] for k in range(2)]
    spread = [cov[k] + h * slope[2 + k] for k in range(3)]
    spread[0] = spread[0] + push[0]
    spread[2] = spread[2] + push[1]
    return ahead, spread


def _slopes(
    turn: FloatArray, law: FloatArray, mean: list[FloatArray], cov: list[FloatArray]
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray, FloatArray]:
    """Return the rates of both means and of the covariance without the noise."""
    psi = turn[0] * mean[0] + turn[1] * mean[1]
    # Covariance of each phase with psi, and the variance of psi.
    with_r = turn[0] * cov[0] + turn[1] * cov[1]
    with_d = turn[0] * cov[1] + turn[1] * cov[2]
    damping = np.exp(-0.5 * (turn[0] * with_r + turn[1] * with_d))
    cosine, sine = damping * np.cos(psi), damping * np.sin(psi)
    rate_r = law[0] + law[1] * cosine + law[2] * sine
    rate_d = law[3] + law[4] * cosine + law[5] * sine
    steep_r = law[2] * cosine - law[1] * sine
    steep_d = law[5] * cosine - law[4] * sine
    mixed = steep_r * with_d + steep_d * with_r
    return rate_r, rate_d, 2.0 * steep_r * with_r, mixed, 2.0 * steep_d * with_d


def _estimate(theta: FloatArray, covariance: FloatArray) -> MutualEstimate:
    """Return the quantities of a fit."""
    pulls = [_pull(theta[at : at + 2], covariance[at : at + 2, at : at + 2]) for at in (4, 1)]
    largest = max(size for size, _, _ in pulls)
    found = []
    for size, u, bound in pulls:
        value = Quantity(
            value=hz_from_rad_s(size),
            u=hz_from_rad_s(u),
            unit="Hz",
            low=hz_from_rad_s(max(size - 1.96 * u, 0.0)),
            high=hz_from_rad_s(size + 1.96 * u),
            level=0.95,
        )
        if bound:
            high = hz_from_rad_s(size + 1.96 * u)
            value = undetermined("Hz", "not told apart from zero at 5 %", low=0.0, high=high)
        if u > GATE * largest:
            value = undetermined("Hz", "the record is too short to tell the two pulls apart")
        found.append(value)
    lag_d = math.atan2(theta[4], -theta[5])
    lag_r = math.atan2(-theta[1], theta[2])
    lags = [
        _lag(lag, size, u, value)
        for lag, (size, u, _), value in zip((lag_d, lag_r), pulls, found, strict=True)
    ]
    return MutualEstimate(
        on_driven_hz=found[0],
        on_reference_hz=found[1],
        lag_driven_rad=lags[0],
        lag_reference_rad=lags[1],
        direction=_direction(theta, covariance, largest),
        method="likelihood of both phases, assumed-density filter",
    )


def _pull(pair: FloatArray, covariance: FloatArray) -> tuple[float, float, bool]:
    """Return (amplitude, its standard error, whether zero is not excluded)."""
    size = max(math.hypot(pair[0], pair[1]), 1e-300)
    slope = pair / size
    distance = float(pair @ np.linalg.solve(covariance, pair))
    u = math.sqrt(max(float(slope @ covariance @ slope), 0.0))
    return size, u, distance < chi_square_above(2.0, SIZE)


def _lag(lag_rad: float, size: float, u: float, coupling: Quantity) -> Quantity:
    """Return a lag, whose error is that of the coupling across its own direction."""
    if coupling.value is None:
        return undetermined("rad", f"the coupling has no value: {coupling.reason}")
    return Quantity(value=lag_rad, u=u / size, unit="rad")


def _direction(theta: FloatArray, covariance: FloatArray, largest: float) -> Quantity:
    """Return (K_d - K_r)/(K_d + K_r): 1 when only the driven is pulled, -1 the other way.

    The squared amplitudes are lowered by their noise, because a length is never negative.

    References
    ----------
    Rosenblum and Pikovsky 2001, Phys. Rev. E 64, 045202 (recalled).
    """
    sizes, errors = [], []
    for at in (4, 1):
        own = covariance[at : at + 2, at : at + 2]
        squared = float(theta[at : at + 2] @ theta[at : at + 2]) - float(np.trace(own))
        sizes.append(math.sqrt(max(squared, 0.0)))
        errors.append(math.sqrt(0.5 * float(np.trace(own))))
    total = sizes[0] + sizes[1]
    if not total > 0.0 or max(errors) > GATE * largest:
        return undetermined("1", "neither coupling is told apart from zero")
    value = (sizes[0] - sizes[1]) / total
    u = 2.0 * math.hypot(sizes[1] * errors[0], sizes[0] * errors[1]) / total**2
    return Quantity(
        value=value,
        u=u,
        unit="1",
        low=max(value - 1.96 * u, -1.0),
        high=min(value + 1.96 * u, 1.0),
        level=0.95,
    )
