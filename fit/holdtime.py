"""How long psi must stay in the band before two free oscillators seldom do the same.

Two free oscillators differ by a drift dw and a diffusion D. Drift or diffusion, whichever is
sooner, ends a stay in a band of width W = 4 pi eps; the hold time T is the (1 - alpha)
quantile of the longest stay in a record of this length. The closed form below is the default
(it is never more than 2 % short of the simulation that stands beside it as its check).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from fit.difference import PhaseDifference, valid_runs
from fit.episodes import EpisodeRules
from fit.records import Baseline, Slip
from rig.angles import TURN_RAD, rad_s_from_hz
from rig.arrays import FloatArray, median, quantile
from rig.errors import FitError

#: Least hold without any other knowledge, in cycles of the slower oscillator: fewer hold
#: fewer than five independent phases.
FLOOR_CYCLES = 5.0

#: Largest share of the longest stretch that a hold time may take and still find an episode.
LONGEST_SHARE = 0.9

#: Draws of the baselines' uncertainty.
DRAWS = 200

#: Relative uncertainty of a diffusion that comes without one: as of some thirty batches.
NOISE_RELATIVE_U = 0.25

#: Tests that may each find a lock where free-running captures exist; alpha is shared evenly.
EVIDENCE_TESTS = 3

#: Seed of those draws: the same record must give the same hold time every time.
DRAW_SEED = 20_403


@dataclass(frozen=True, slots=True, kw_only=True)
class FreePair:
    """Two free oscillators as psi sees them, over ``record_s`` sampled every ``step_s``."""

    detuning_rad_s: FloatArray
    noise_rad2_s: FloatArray
    record_s: float
    step_s: float


@dataclass(frozen=True, slots=True, kw_only=True)
class HoldChoice:
    """Hold time used, the one needed at the stated false-lock rate, and where it came from.

    ``needed_s`` is None when no free-running capture says how two free oscillators behave.
    """

    hold_s: float
    needed_s: float | None
    reason: str


def required_hold_s(
    baseline: Baseline,
    rules: EpisodeRules,
    *,
    record_s: float,
    step_s: float,
    orders_tried: int = 1,
) -> float:
    """Return the hold time that free oscillators exceed with the stated probability only.

    Parameters
    ----------
    baseline : Baseline
        Free detuning and diffusion; their uncertainties are drawn.
    rules : EpisodeRules
    record_s, step_s : float, s
        Length of the record and sampling step of psi.
    orders_tried : int
        The probability is divided by it.

    Returns
    -------
    float, s
        Infinite where nothing ends a stay. Never less than ``hold_beats`` beat periods where
        the detuning is resolved (beyond twice its uncertainty).
    """
    pair = draw_free_pairs(baseline, record_s, step_s, np.random.default_rng(DRAW_SEED))
    hold_s = closed_form_hold_s(pair, rules.band_rad, rules.alpha / orders_tried)
    return max(hold_s, rules.hold_beats * _resolved_beat_s(baseline))


def draw_free_pairs(
    baseline: Baseline, record_s: float, step_s: float, rng: np.random.Generator
) -> FreePair:
    """Return free pairs as the baselines allow them.

    Parameters
    ----------
    baseline : Baseline
    record_s, step_s : float, s
    rng : numpy Generator

    Returns
    -------
    FreePair
        With DRAWS values of detuning (normal) and diffusion (log-normal).

    Raises
    ------
    FitError
        If the baseline has no detuning.
    """
    if baseline.detuning_hz.value is None:
        raise FitError(f"hold time: no free detuning ({baseline.detuning_hz.reason})")
    spread = rng.standard_normal((2, DRAWS))
    detuning_hz = baseline.detuning_hz.value + (baseline.detuning_hz.u or 0.0) * spread[0]
    noise, noise_u = noise_of(baseline)
    relative = noise_u / noise if noise > 0 else 0.0
    return FreePair(
        detuning_rad_s=np.asarray(detuning_hz * TURN_RAD),
        noise_rad2_s=noise * np.exp(relative * spread[1]),
        record_s=record_s,
        step_s=step_s,
    )


def noise_of(baseline: Baseline) -> tuple[float, float]:
    """Return diffusion of psi and its standard uncertainty, rad2/s.

    Where only an upper bound is known, that; a missing uncertainty is taken as a quarter.

    Parameters
    ----------
    baseline : Baseline

    Returns
    -------
    (float, float)
    """
    noise = baseline.noise_rad2_s
    if noise.value is None:
        return noise.high or 0.0, 0.0
    value = max(noise.value, 0.0)
    return value, NOISE_RELATIVE_U * value if noise.u is None else noise.u


def closed_form_hold_s(pair: FreePair, band_rad: float, alpha: float) -> float:
    """Return the stay that free pairs exceed with probability alpha, by a closed form.

    With several drawn pairs the probability is averaged over them.

    Parameters
    ----------
    pair : FreePair
    band_rad : float, rad
        Full width of the band.
    alpha : float

    Returns
    -------
    float, s
    """
    levels = np.concatenate((np.geomspace(1e-9, alpha, 24), np.geomspace(alpha, 1.0, 16)[1:]))
    stays = stay_quantile_s(pair, band_rad, levels[:, None])
    if np.allclose(stays, stays[:, :1], rtol=1e-9):
        return float(stay_quantile_s(pair, band_rad, np.array([[alpha]]))[0, 0])
    return _mixture_quantile(stays, levels, alpha)


def stay_quantile_s(pair: FreePair, band_rad: float, alpha: FloatArray) -> FloatArray:
    """Return the (1 - alpha) quantile of the longest stay of each free pair.

    W_e = W + 1.165 sqrt(2 D h); mu = dw^2/4D + pi^2 D/W_e^2;
    s = (D/dw) ln(max(L/T_b, 1)/alpha);
    drift ends it: T1 = (W + 2 s + 2 sqrt(s (s + W)))/dw;
    diffusion: T2 = (ln(max(L mu, 1)/alpha) + 2.5 + dw W_e/(2 D))/mu; the smaller counts.

    Parameters
    ----------
    pair : FreePair
        Arrays of shape (m,).
    band_rad : float, rad
    alpha : array broadcasting against (m,)

    Returns
    -------
    array, s

    Notes
    -----
    Against simulation 0.98 to 1.33 over D/dw 0.001 to 3, eps 0.1 to 0.49, records of 30 and
    300 beats, alpha 1 and 5 %; 0.99 to 1.24 for equal frequencies.
    """
    drift = np.maximum(np.abs(pair.detuning_rad_s), 1e-300)
    noise = np.maximum(pair.noise_rad2_s, 1e-300)
    wide = band_rad + 1.165 * np.sqrt(2.0 * noise * pair.step_s)
    beats = np.maximum(pair.record_s * drift / TURN_RAD, 1.0)
    with np.errstate(over="ignore", divide="ignore", invalid="ignore"):
        reach = noise / drift * np.log(beats / alpha)
        by_drift = (band_rad + 2 * reach + 2 * np.sqrt(reach * (reach + band_rad))) / drift
        decay = drift**2 / (4 * noise) + math.pi**2 * noise / wide**2
        trials = np.log(np.maximum(pair.record_s * decay, 1.0) / alpha)
        by_diffusion = (trials + 2.5 + drift * wide / (2 * noise)) / decay
    # Where one law overflows (no drift, or no noise) the other one stands.
    return np.asarray(np.fmin(by_drift, by_diffusion))


def simulated_hold_s(
    pair: FreePair, band_rad: float, alpha: float, rng: np.random.Generator, paths: int = 2000
) -> float:
    """Return the same quantile by simulation, one drawn pair after another.

    Parameters
    ----------
    pair : FreePair
    band_rad : float, rad
    alpha : float
    rng : numpy Generator
    paths : int
        Simulated records.

    Returns
    -------
    float, s
        No longer than the record.
    """
    count = max(2, round(pair.record_s / pair.step_s))
    stays = np.empty(paths)
    for k in range(paths):
        which = k % pair.detuning_rad_s.size
        drift = pair.detuning_rad_s[which] * pair.step_s
        kick = math.sqrt(2.0 * pair.noise_rad2_s[which] * pair.step_s)
        psi_rad = np.cumsum(drift + kick * rng.standard_normal(count))
        stays[k] = longest_stay(psi_rad, band_rad) * pair.step_s
    return quantile(stays, 1.0 - alpha)


def longest_stay(psi_rad: FloatArray, band_rad: float) -> int:
    """Return the largest number of steps in which psi spans less than the band.

    Parameters
    ----------
    psi_rad : array, shape (n,), rad
    band_rad : float, rad

    Returns
    -------
    int
        0 when even neighbours differ by more.

    Notes
    -----
    Doubling: extremes of windows of 2^j samples are kept on the way up, then the width is
    built from its binary digits on the way down; some 2 log2(n) passes over the array.
    """
    if psi_rad.size == 0:
        return 0
    ladder = [(psi_rad, psi_rad)]
    while 2 ** len(ladder) <= psi_rad.size:
        step = 2 ** (len(ladder) - 1)
        low, high = ladder[-1]
        low, high = np.minimum(low[:-step], low[step:]), np.maximum(high[:-step], high[step:])
        if not np.any(high - low < band_rad):
            break
        ladder.append((low, high))
    width = 2 ** (len(ladder) - 1)
    low, high = ladder[-1]
    for power in range(len(ladder) - 2, -1, -1):
        step_low, step_high = ladder[power]
        if low.size <= 2**power:
            continue
        keep = low.size - 2**power
        wider_low = np.minimum(low[:keep], step_low[width : width + keep])
        wider_high = np.maximum(high[:keep], step_high[width : width + keep])
        if np.any(wider_high - wider_low < band_rad):
            low, high, width = wider_low, wider_high, width + int(2**power)
    return int(width - 1)


def choose_hold(
    difference: PhaseDifference,
    slips: tuple[Slip, ...],
    rules: EpisodeRules,
    *,
    baseline: Baseline | None = None,
    orders_tried: int = 1,
) -> HoldChoice:
    """Return the hold time for a record and where it came from.

    Stated hold times are used as they are. With free-running captures it is the one that two
    free oscillators exceed with probability alpha / 3 (the rest is that of the two other tests
    of ``fit.state``); where that is longer than the record, half the record. Else it is
    ``hold_beats`` times the median time between slips (a pair that drifts cannot stay so
    long), at least five cycles of the slower oscillator and four times the smearing time.

    Parameters
    ----------
    difference : PhaseDifference
    slips : tuple of Slip
    rules : EpisodeRules
    baseline : Baseline, optional
    orders_tried : int

    Returns
    -------
    HoldChoice
    """
    needed_s = None
    if baseline is not None and baseline.detuning_hz.value is not None:
        needed_s = required_hold_s(
            baseline,
            rules,
            record_s=np.count_nonzero(difference.valid) / difference.rate_hz,
            step_s=1.0 / difference.rate_hz,
            orders_tried=EVIDENCE_TESTS * orders_tried,
        )
    if rules.hold_s is not None:
        return HoldChoice(hold_s=rules.hold_s, needed_s=needed_s, reason="stated")
    longest_s = _longest_run_s(difference)
    if needed_s is None:
        return _hold_by_record(difference, slips, rules, longest_s)
    if needed_s <= LONGEST_SHARE * longest_s:
        return HoldChoice(hold_s=needed_s, needed_s=needed_s, reason="free-running captures")
    reason = "half the record: free oscillators may stay in the band for all of it"
    return HoldChoice(
        hold_s=_at_least_a_step(longest_s / 2, difference), needed_s=needed_s, reason=reason
    )


def _hold_by_record(
    difference: PhaseDifference, slips: tuple[Slip, ...], rules: EpisodeRules, longest_s: float
) -> HoldChoice:
    """Return the hold time that the record itself suggests."""
    floor_s = max(FLOOR_CYCLES / difference.cycle_rate_hz, 4.0 * difference.smear_s)
    between_s = np.diff([slip.time_s for slip in slips])
    beats_s = rules.hold_beats * median(between_s) if between_s.size else 0.0
    hold_s = min(max(floor_s, beats_s), longest_s / 2)
    reason = "time between slips" if beats_s > floor_s else "five cycles of the slower oscillator"
    if longest_s / 2 < max(floor_s, beats_s):
        reason = "half the record"
    return HoldChoice(hold_s=_at_least_a_step(hold_s, difference), needed_s=None, reason=reason)


def _at_least_a_step(hold_s: float, difference: PhaseDifference) -> float:
    """Return a hold time above zero however short the record."""
    return max(hold_s, 1.0 / difference.rate_hz)


def _longest_run_s(difference: PhaseDifference) -> float:
    """Return the duration of the longest valid stretch, s."""
    runs = valid_runs(difference.valid)
    return float(max((b - a - 1 for a, b in runs), default=0)) / difference.rate_hz


def _resolved_beat_s(baseline: Baseline) -> float:
    """Return the free beat period, s; 0 where the detuning does not stand out of its u."""
    detuning = baseline.detuning_hz
    if detuning.value is None or abs(detuning.value) <= 2.0 * (detuning.u or 0.0):
        return 0.0
    return TURN_RAD / abs(rad_s_from_hz(detuning.value))


def _mixture_quantile(stays: FloatArray, levels: FloatArray, alpha: float) -> float:
    """Return T with the mean over pairs of P(stay > T) = alpha; stays (levels, pairs) fall."""
    low, high = math.log(float(np.min(stays))), math.log(float(np.max(stays)))
    log_stays, log_levels = np.log(stays[::-1]), np.log(levels[::-1])
    for _ in range(40):
        middle = (low + high) / 2
        exceed = float(np.mean(np.exp(_levels_at(log_stays, log_levels, middle))))
        low, high = (middle, high) if exceed > alpha else (low, middle)
    return math.exp(high)


def _levels_at(rising: FloatArray, levels: FloatArray, at: float) -> FloatArray:
    """Return the level at which each column (k, pairs) reaches a value, ends held."""
    above = np.clip(np.count_nonzero(rising < at, axis=0), 1, rising.shape[0] - 1)
    pairs = np.arange(rising.shape[1])
    left, right = rising[above - 1, pairs], rising[above, pairs]
    gap = np.where(right > left, right - left, 1.0)
    part = np.clip((at - left) / gap, 0.0, 1.0)
    return np.asarray(levels[above - 1] + part * (levels[above] - levels[above - 1]))
