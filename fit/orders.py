"""Which order n:m a record speaks for.

Candidates are the coprime n:m near the ratio of the two frequencies. Each is judged by how
much better psi = n phi_driven - m phi_reference is described as staying about a constant
(a stationary first-order process) than as the drift with diffusion of two free oscillators,
less a penalty for its size. A ratio that happens to be whole is no order: the drift of free
oscillators close to it is part of the rival, and the state is decided afterwards with the
false-lock probability divided by the number of candidates.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from fit.difference import Order, PhaseDifference, form_difference, valid_runs
from fit.episodes import EpisodeRules, find_episodes
from fit.freerun import make_baseline
from fit.holdtime import choose_hold
from fit.records import FreeRun
from fit.slips import find_slips
from rig.angles import rad_s_from_hz
from rig.arrays import FloatArray
from rig.errors import PhaseError
from rig.phases.track import PhaseTrack

#: Largest n and m tried: noise of psi grows with them and locking ranges shrink.
MAX_ORDER = 12

#: How near n f_driven and m f_reference must be, relative to their size. Wider than any
#: frequency found with a fault of a few cycles, narrow enough for a handful of candidates.
NEAR = 0.02

#: The ratio of frequencies is looked at over the record and over stretches of this many cycles
#: of the slower oscillator (at most 32 stretches), for a pair that locks for some of the time.
STRETCH_CYCLES = 8
MOST_STRETCHES = 32

#: A constant psi forgets within this share of the stretch; slower is drift.
MEMORY_SHARE = 0.2

#: A free pair off the stated spread may still have any detuning that makes a candidate.
ANY_DETUNING = NEAR

#: Fewest values of psi (one a cycle) for any evidence.
LEAST_VALUES = 6


@dataclass(frozen=True, slots=True, kw_only=True)
class OrderSearch:
    """The order found, all candidates ranked, and whether the evidence settles it.

    ``candidates`` are (n, m, evidence), best first; evidence is the natural logarithm of the
    odds for a constant against a drifting psi, size penalty included. ``settled`` says that
    the best one is above 0 and leads the runner-up by ln(1 / alpha).
    """

    order: Order
    candidates: tuple[tuple[int, int, float], ...]
    settled: bool
    note: str


def find_order(
    driven: PhaseTrack,
    reference: PhaseTrack,
    *,
    rules: EpisodeRules,
    free_runs: Sequence[FreeRun] = (),
    max_order: int = MAX_ORDER,
) -> OrderSearch:
    """Return the order n:m that a record speaks for, with its rivals.

    Parameters
    ----------
    driven, reference : PhaseTrack
        On the same grid.
    rules : EpisodeRules
        ``free_spread`` says how far free frequencies scatter; ``alpha`` what counts as settled.
    free_runs : sequence of FreeRun
        Narrow the drift of the rival where they exist.
    max_order : int
        Largest n and m.

    Returns
    -------
    OrderSearch

    Raises
    ------
    PhaseError
        If a frequency is not known, the grids differ, or ``max_order`` is below 1.
    """
    if max_order < 1:
        raise PhaseError(f"order search: largest order must be 1 or more, got {max_order}")
    pairs = _candidates(driven, reference, max_order)
    judged = [
        (n, m, _judge(driven, reference, Order(n=n, m=m), rules, free_runs)) for n, m in pairs
    ]
    ranked = tuple(sorted(judged, key=lambda item: (-item[2], item[0] * item[1])))
    best = ranked[0]
    lead = best[2] - ranked[1][2] if len(ranked) > 1 else math.inf
    settled = best[2] > 0 and lead > -math.log(rules.alpha)
    return OrderSearch(
        order=Order(n=best[0], m=best[1], source="found"),
        candidates=ranked,
        settled=settled,
        note=_note(ranked, settled),
    )


def near_orders(driven_hz: float, reference_hz: float, max_order: int) -> list[tuple[int, int]]:
    """Return the coprime (n, m) with n f_driven near m f_reference, the nearest if none is.

    Parameters
    ----------
    driven_hz, reference_hz : float, Hz, above 0
    max_order : int

    Returns
    -------
    list of (int, int)
    """
    sizes = range(1, max_order + 1)
    pairs = [(n, m) for n in sizes for m in sizes if math.gcd(n, m) == 1]

    def distance(pair: tuple[int, int]) -> float:
        here, there = pair[0] * driven_hz, pair[1] * reference_hz
        return abs(here - there) / math.hypot(here, there)

    near = [pair for pair in pairs if distance(pair) < NEAR]
    return near or [min(pairs, key=distance)]


def constant_evidence(psi_rad: FloatArray, drifts: Sequence[tuple[float, float]]) -> float:
    """Return the log odds for a psi about a constant against a free drift with diffusion.

    Constant: x_k+1 - c = r (x_k - c) + e with a memory below a fifth of the stretch. Free:
    x_k+1 = x_k + s + e with s normal. Both conditional on the first value; variances at
    their best values; the one further parameter of the first costs ln(N) / 2.

    Parameters
    ----------
    psi_rad : array, shape (n,), rad
        One value a cycle, unwrapped.
    drifts : sequence of (float, float), rad
        Free drift from one value to the next with its standard deviation; the one that suits
        the record best is the rival.

    Returns
    -------
    float
        0 with too few values.
    """
    count = psi_rad.size - 1
    if count < LEAST_VALUES:
        return 0.0
    steps = np.diff(psi_rad)
    free_var = _floor(float(np.var(steps)))
    free = max(_drift_odds(float(np.mean(steps)), free_var / count, *pair) for pair in drifts)
    kept_var = _floor(_constant_variance(psi_rad))
    return 0.5 * count * math.log(free_var / kept_var) - free - 0.5 * math.log(count)


def _drift_odds(mean_rad: float, mean_var: float, drift_rad: float, u_rad: float) -> float:
    """Return the likelihood of a mean step averaged over free drifts, against its best, ln."""
    spread = u_rad**2 + mean_var
    return -0.5 * math.log(spread / mean_var) - 0.5 * (mean_rad - drift_rad) ** 2 / spread


def _candidates(driven: PhaseTrack, reference: PhaseTrack, max_order: int) -> list[tuple[int, int]]:
    """Return the orders near the frequency ratio of the record or of stretches of it."""
    both = driven.valid & reference.valid
    slower_hz = min(_hz(driven), _hz(reference))
    length = max(2, round(STRETCH_CYCLES * driven.rate_hz / slower_hz))
    found = dict.fromkeys(near_orders(_hz(driven), _hz(reference), max_order))
    stretches = [
        (at, at + length)
        for a, b in valid_runs(both)
        for at in range(a, b - length, max(length, (b - a) // MOST_STRETCHES))
    ]
    for a, b in stretches:
        turned = [abs(track.phase_rad[b] - track.phase_rad[a]) for track in (driven, reference)]
        if min(turned) > 0:
            found.update(dict.fromkeys(near_orders(turned[0], turned[1], max_order)))
    return list(found)


def _judge(
    driven: PhaseTrack,
    reference: PhaseTrack,
    order: Order,
    rules: EpisodeRules,
    free_runs: Sequence[FreeRun],
) -> float:
    """Return the evidence for one order: of the record, or of its episodes together."""
    difference = form_difference(driven, reference, order)
    stride = max(1, round(difference.rate_hz / difference.cycle_rate_hz))
    step_rad = rad_s_from_hz(stride / difference.rate_hz)
    size_hz = math.hypot(
        order.n * difference.driven_frequency_hz, order.m * difference.reference_frequency_hz
    )
    drift_hz, drift_u_hz = _free_drift(
        difference, reference, rules.free_spread * size_hz, free_runs
    )
    drifts = [
        (drift_hz * step_rad, drift_u_hz * step_rad),
        (0.0, ANY_DETUNING * size_hz * step_rad),
    ]
    runs = [difference.psi_rad[a:b:stride] for a, b in valid_runs(difference.valid)]
    whole = sum(constant_evidence(run, drifts) for run in runs)
    # An episode is chosen after the fact; where it begins and ends costs two parameters.
    cost = math.log(max(sum(run.size for run in runs), 2))
    stays = [constant_evidence(stay[::stride], drifts) - cost for stay in _stays(difference, rules)]
    parts = sum(odds for odds in stays if odds > 0)
    return max(whole, parts) - math.log(order.n * order.m)


def _stays(difference: PhaseDifference, rules: EpisodeRules) -> list[FloatArray]:
    """Return psi inside each episode that the rules find at this order."""
    slips = find_slips(difference)
    hold = choose_hold(difference, slips, rules)
    spans = [
        (
            round((part.start_s - difference.start_s) * difference.rate_hz),
            round((part.stop_s - difference.start_s) * difference.rate_hz) + 1,
        )
        for part in find_episodes(difference, rules, hold.hold_s)
    ]
    return [difference.psi_rad[a:b][difference.valid[a:b]] for a, b in spans]


def _free_drift(
    difference: PhaseDifference,
    reference: PhaseTrack,
    spread_hz: float,
    free_runs: Sequence[FreeRun],
) -> tuple[float, float]:
    """Return the free detuning at an order and its standard deviation, Hz."""
    baseline = make_baseline(free_runs, difference.order, reference_hz=reference.frequency_hz)
    if baseline is not None and baseline.detuning_hz.value is not None:
        return baseline.detuning_hz.value, baseline.detuning_hz.u or 0.0
    return 0.0, spread_hz


def _constant_variance(psi_rad: FloatArray) -> float:
    """Return the variance of one step of a first-order process about a constant."""
    here, there = psi_rad[:-1] - psi_rad.mean(), psi_rad[1:] - psi_rad.mean()
    power = float(here @ here)
    longest = max(0.0, 1.0 - 1.0 / (MEMORY_SHARE * here.size))
    memory = min(max(float(here @ there) / power, 0.0), longest) if power > 0 else 0.0
    return float(np.mean((there - memory * here) ** 2))


def _floor(variance_rad2: float) -> float:
    """Keep a variance above what a stored phase can resolve (1e-6 rad)."""
    return max(variance_rad2, 1e-12)


def _hz(track: PhaseTrack) -> float:
    """Return the frequency of a track, or refuse."""
    if track.frequency_hz.value is None or track.frequency_hz.value == 0:
        raise PhaseError(f"order search: no frequency of '{track.channel}'; state the order")
    return abs(track.frequency_hz.value)


def _note(ranked: tuple[tuple[int, int, float], ...], settled: bool) -> str:
    """Say which order leads, by how much, and over which."""
    n, m, evidence = ranked[0]
    text = f"order {n}:{m} found among {len(ranked)}, log odds {evidence:.3g}"
    if len(ranked) > 1:
        text += f"; next {ranked[1][0]}:{ranked[1][1]} with {ranked[1][2]:.3g}"
    return text if settled else f"{text}; not settled by this record, state the order"
