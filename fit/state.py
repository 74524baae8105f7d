"""Locked, drifting, intermittent or undecided: the decision on a whole record.

A pair is locked when one episode covers all valid time without a slip AND two free
oscillators would seldom show that. The second part ("the evidence") comes

- with free-running captures, from any of three tests that share the stated probability alpha:
  the episode is longer than free oscillators stay (``fit.holdtime``); the mean rate differs
  from the free detuning beyond what the free detuning's uncertainty and the diffusion explain;
  or psi wanders less than free oscillators would (``fit.freenull``);
- without them, from a stated spread of free frequencies: the slope of psi contains zero and
  a free pair would have so small a detuning with probability below alpha. No free pair drawn
  from that spread is called locked more often than alpha, whatever the noise.

alpha is divided by the number of orders tried.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from fit.difference import PhaseDifference, valid_runs
from fit.episodes import NET_MOTION_RAD, EpisodeRules
from fit.freenull import confinement_p, outside_baseline
from fit.holdtime import (
    DRAW_SEED,
    EVIDENCE_TESTS,
    HoldChoice,
    closed_form_hold_s,
    draw_free_pairs,
    noise_of,
)
from fit.quantiles import student_above
from fit.rates import Slope, fit_slope, measure_slope, run_values
from fit.records import Baseline, Episode, Slip, State, StateDecision
from rig.angles import hz_from_rad_s, rad_s_from_hz, turns_from_rad
from rig.arrays import BoolArray, FloatArray, median

#: Share of the valid time that episodes must cover to count as all of it: what is trimmed at
#: ends and short noise excursions that come back to the same level.
WHOLE_SHARE = 0.95

#: A locked slope this small against the free detuning counts as none although it stands out
#: of its noise: slow wander of the locked angle.
WANDER_SHARE = 0.05

#: Share of a record without valid phase, the filter's ends apart, from which a lock of the rest
#: is not called a lock of the record: an oscillator that stops must not pass as locked.
LARGEST_LOST_SHARE = 0.25

#: Lost share from which the reason says how much of the record it speaks of.
SAID_LOST_SHARE = 0.05

FREE_SPREAD_NOTE = "assumes free spread"


@dataclass(frozen=True, slots=True, kw_only=True)
class Evidence:
    """Whether free oscillators are ruled out, and the words for it."""

    met: bool
    reason: str
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class Seen:
    """What a record shows before anything is concluded from it."""

    valid_s: float
    longest_run_s: float
    covered_s: float
    longest_s: float
    slope: Slope | None
    trend: Slope | None
    pulled_in_s: float
    whole: bool
    lost_share: float

    @property
    def fraction(self) -> float:
        """Share of the valid time inside episodes."""
        return min(1.0, self.covered_s / self.valid_s) if self.valid_s > 0 else 0.0


def decide_state(
    difference: PhaseDifference,
    episodes: tuple[Episode, ...],
    slips: tuple[Slip, ...],
    *,
    rules: EpisodeRules,
    hold: HoldChoice,
    baseline: Baseline | None = None,
    orders_tried: int = 1,
    lost: float | None = None,
) -> StateDecision:
    """Return the state of a record with its reason in one sentence.

    Parameters
    ----------
    difference : PhaseDifference
    episodes : tuple of Episode
        From ``find_episodes`` with ``hold.hold_s``.
    slips : tuple of Slip
    rules : EpisodeRules
    hold : HoldChoice
        From ``choose_hold``.
    baseline : Baseline, optional
        Free detuning and diffusion of psi.
    orders_tried : int
        How many orders were looked at to find this one, at least 1.
    lost : float, optional
        Share of the record without valid phase, from ``lost_share``; by default that of the
        difference, which counts a settling time that was dropped from it.

    Returns
    -------
    StateDecision
    """
    seen = _look(difference, episodes, slips, hold.hold_s, lost)
    alpha = rules.alpha / orders_tried
    if baseline is not None and baseline.detuning_hz.value is None:
        baseline = None
    state, reason, notes = _conclude(
        difference, (seen, episodes, slips), (rules, alpha), hold, baseline
    )
    if seen.pulled_in_s > 0:
        notes = (*notes, f"lock reached after {seen.pulled_in_s:.3g} s")
    return StateDecision(
        state=state,
        reason=reason,
        locked_fraction=seen.fraction,
        hold_s=hold.hold_s,
        notes=notes,
    )


def _conclude(
    difference: PhaseDifference,
    found: tuple[Seen, tuple[Episode, ...], tuple[Slip, ...]],
    test: tuple[EpisodeRules, float],
    hold: HoldChoice,
    baseline: Baseline | None,
) -> tuple[State, str, tuple[str, ...]]:
    """Return state, reason and notes from what was seen."""
    seen, episodes, slips = found
    if seen.covered_s == 0:
        return _without_episode(seen, slips, hold)
    if slips or not seen.whole:
        needed_s = hold.needed_s
        if baseline is None and hold.reason != "stated":
            needed_s = _free_stay_s(difference, episodes, *test)
        return _with_slips_or_drift(seen, slips, needed_s)
    evidence = (
        _evidence_by_baseline(difference, seen, test[1], hold, baseline)
        if baseline is not None
        else _evidence_by_spread(difference, seen, *test)
    )
    if not evidence.met:
        return "undecided", f"no slip in {seen.valid_s:.3g} s, but {evidence.reason}", ()
    shown_hz = 1.0 / seen.valid_s
    if seen.lost_share > LARGEST_LOST_SHARE:
        return "undecided", _mostly_lost(seen), evidence.notes
    reason = (
        f"no slip in {seen.valid_s:.3g} s{_part(seen)}; the slowest beat this record could have "
        f"shown is {shown_hz:.2g} Hz; {evidence.reason}"
    )
    return "locked", reason, evidence.notes


def _without_episode(
    seen: Seen, slips: tuple[Slip, ...], hold: HoldChoice
) -> tuple[State, str, tuple[str, ...]]:
    """Conclude on a record in which psi never stays."""
    unsettled = _too_short(seen, slips, hold)
    if unsettled or seen.slope is None:
        return "undecided", unsettled, ()
    if slips:
        count = sum(abs(slip.turns) for slip in slips)
        return (
            "drifting",
            f"{_slips(count)} in {seen.valid_s:.3g} s and no stay of {hold.hold_s:.3g} s",
            (),
        )
    rate_hz = hz_from_rad_s(seen.slope.rate_rad_s)
    if seen.slope.moved_rad > NET_MOTION_RAD and seen.slope.differs_from_zero():
        turns = turns_from_rad(seen.slope.moved_rad)
        return (
            "drifting",
            f"psi moved on by {turns:.2g} turn in {seen.valid_s:.3g} s without a stay",
            (),
        )
    return (
        "undecided",
        f"no slip in {seen.valid_s:.3g} s, but psi does not stay either (rate {rate_hz:.2g} Hz); "
        "record longer",
        (),
    )


def _too_short(seen: Seen, slips: tuple[Slip, ...], hold: HoldChoice) -> str:
    """Return why a record is too short to tell anything, or nothing."""
    if 0 < seen.longest_run_s < hold.hold_s and not slips:
        return (
            f"the longest stretch of valid phase, {seen.longest_run_s:.3g} s, is shorter than the "
            f"hold time of {hold.hold_s:.3g} s"
        )
    if seen.valid_s == 0 or seen.slope is None:
        return "too little valid phase to tell anything; record longer"
    return ""


def _with_slips_or_drift(
    seen: Seen, slips: tuple[Slip, ...], needed_s: float | None
) -> tuple[State, str, tuple[str, ...]]:
    """Conclude on a record in which psi stays for some of the time."""
    count = sum(abs(slip.turns) for slip in slips)
    moved = _slips(count) if count else "drift for the rest of it"
    if needed_s is None or seen.longest_s >= needed_s:
        share = 100 * seen.fraction
        reason = f"locked for {share:.0f} % of {seen.valid_s:.3g} s{_part(seen)}, with {moved}"
        return "intermittent", reason, ()
    needed = f"two free oscillators may stay up to {needed_s:.3g} s"
    longest = f"the longest stay is {seen.longest_s:.3g} s"
    if seen.slope is not None and count and seen.slope.differs_from_zero():
        return "drifting", f"{moved} in {seen.valid_s:.3g} s; {longest} and {needed}", ()
    return "undecided", f"{moved}, {longest} and {needed}; record longer", ()


def _free_stay_s(
    difference: PhaseDifference,
    episodes: tuple[Episode, ...],
    rules: EpisodeRules,
    alpha: float,
) -> float | None:
    """Return how long a pair may stay that moves as this one does outside its episodes."""
    outside = outside_baseline(difference, episodes)
    if outside is None:
        return None
    duration_s = np.count_nonzero(difference.valid) / difference.rate_hz
    step_s = 1.0 / difference.rate_hz
    pair = draw_free_pairs(outside, duration_s, step_s, np.random.default_rng(DRAW_SEED))
    return closed_form_hold_s(pair, rules.band_rad, alpha)


def _evidence_by_baseline(
    difference: PhaseDifference, seen: Seen, alpha: float, hold: HoldChoice, baseline: Baseline
) -> Evidence:
    """Test the stay and the mean rate against what the free-running captures predict."""
    free_hz = baseline.detuning_hz.value or 0.0
    if seen.slope is None:
        return Evidence(met=False, reason="too few samples for a rate; record longer")
    still = max(2.0 * seen.slope.u_rad_s, WANDER_SHARE * abs(rad_s_from_hz(free_hz)))
    if abs(seen.slope.rate_rad_s) > still:
        return Evidence(met=False, reason=_still_moves(seen.slope))
    if hold.needed_s is not None and seen.longest_s >= hold.needed_s:
        reason = f"free oscillators would not stay longer than {hold.needed_s:.3g} s"
        return Evidence(met=True, reason=reason)
    share = alpha / EVIDENCE_TESTS
    free_u_hz = _free_rate_u_hz(difference, seen, baseline)
    away_hz = abs(hz_from_rad_s(seen.slope.rate_rad_s) - free_hz)
    factor = _two_sided_factor(share, baseline)
    reason = f"alone the pair beats at {abs(free_hz):.3g} Hz (u {free_u_hz:.2g} Hz)"
    if away_hz > factor * free_u_hz:
        return Evidence(met=True, reason=reason)
    chance = confinement_p(difference, baseline, share, np.random.default_rng(DRAW_SEED))
    if chance < share:
        reason = f"free oscillators would wander so little with probability {chance:.1g}"
        return Evidence(met=True, reason=reason)
    return Evidence(met=False, reason=f"{reason}; {_what_settles(baseline, free_hz, factor)}")


def _free_rate_u_hz(difference: PhaseDifference, seen: Seen, baseline: Baseline) -> float:
    """Return the standard uncertainty of the mean rate that a free pair would show, Hz."""
    noise, _ = noise_of(baseline)
    duration_s = seen.slope.duration_s if seen.slope is not None else seen.valid_s
    measured_rad = median(difference.u_rad[difference.valid])
    diffusion_rad_s = math.sqrt(2.0 * noise / duration_s)
    return math.hypot(
        baseline.detuning_hz.u or 0.0,
        hz_from_rad_s(diffusion_rad_s),
        hz_from_rad_s(math.sqrt(2.0) * measured_rad / duration_s),
    )


def _two_sided_factor(alpha: float, baseline: Baseline) -> float:
    """Return the quantile of |t| whose degrees of freedom say how well D is known."""
    noise, noise_u = noise_of(baseline)
    freedom = 1e6 if noise_u == 0 or noise == 0 else max(2.0 * (noise / noise_u) ** 2, 2.0)
    return student_above(freedom, alpha / 2.0)


def _about(value: float) -> str:
    """Return a number in two digits, without a power of ten while it is short."""
    return f"{float(f'{value:.2g}'):.6g}"


def _what_settles(baseline: Baseline, free_hz: float, factor: float) -> str:
    """Say what would settle an undecided record that has free-running captures."""
    if factor * (baseline.detuning_hz.u or 0.0) >= abs(free_hz):
        return "set the pair further apart, or take longer free-running captures"
    noise, _ = noise_of(baseline)
    left_hz2 = (free_hz / factor) ** 2 - (baseline.detuning_hz.u or 0.0) ** 2
    needed_s = 2.0 * noise / rad_s_from_hz(1.0) ** 2 / left_hz2
    return f"a record of about {_about(needed_s)} s would settle it"


def _evidence_by_spread(
    difference: PhaseDifference, seen: Seen, rules: EpisodeRules, alpha: float
) -> Evidence:
    """Ask how often a free pair would have so small a detuning, given the stated spread."""
    if seen.trend is None or seen.slope is None:
        return Evidence(met=False, reason="too few samples for a rate; record longer")
    order = difference.order
    spread_hz = rules.free_spread * math.hypot(
        order.n * difference.driven_frequency_hz, order.m * difference.reference_frequency_hz
    )
    # The fitted slope is the sharper one; slow wander may upset it where the ends do not.
    still = [each for each in (seen.trend, seen.slope) if not each.differs_from_zero()]
    if not still:
        return Evidence(met=False, reason=_still_moves(seen.slope))
    bound_hz = hz_from_rad_s(min(abs(each.rate_rad_s) + 2.0 * each.u_rad_s for each in still))
    chance = math.erf(bound_hz / spread_hz / math.sqrt(2.0))
    reason = (
        f"a free pair would be within {bound_hz:.2g} Hz with probability {chance:.2g}, "
        f"its spread taken as {spread_hz:.2g} Hz"
    )
    if chance < alpha:
        return Evidence(met=True, reason=reason, notes=(FREE_SPREAD_NOTE,))
    # The probability is proportional to the bound while small, and the bound falls with time.
    longer_s = seen.valid_s * chance / alpha
    settle = f"record about {_about(longer_s)} s or take free-running captures"
    return Evidence(met=False, reason=f"{reason} (needed below {alpha:.2g}); {settle}")


def _look(
    difference: PhaseDifference,
    episodes: tuple[Episode, ...],
    slips: tuple[Slip, ...],
    hold_s: float,
    lost: float | None,
) -> Seen:
    """Return what a record shows; stretches shorter than the hold time cannot be covered."""
    step_s = 1.0 / difference.rate_hz
    lengths_s = [part.stop_s - part.start_s + step_s for part in episodes]
    valid_s = float(np.count_nonzero(difference.valid)) * step_s
    runs = valid_runs(difference.valid)
    pull_in_s = 0.0 if slips else _pull_in_s(difference, episodes, runs)
    covered_s = sum(lengths_s)
    settled = _runs_after(difference, pull_in_s)
    runs_s = [(b - a) * step_s for a, b in runs]
    able_s = sum(length for length in runs_s if length >= hold_s)
    return Seen(
        valid_s=valid_s,
        longest_run_s=max(runs_s, default=0.0),
        covered_s=covered_s,
        longest_s=max(lengths_s, default=0.0),
        slope=measure_slope(settled, difference.rate_hz),
        trend=fit_slope(settled, difference.rate_hz),
        pulled_in_s=pull_in_s,
        lost_share=lost_share(difference.valid) if lost is None else lost,
        whole=able_s >= valid_s / 2 and covered_s >= WHOLE_SHARE * (able_s - pull_in_s),
    )


def lost_share(valid: BoolArray, first: int = 0) -> float:
    """Return the share of a record without valid phase, what filters take at both ends apart.

    Parameters
    ----------
    valid : bool array, shape (n,), of the whole record
    first : int, sample before which nothing was to be judged (a stated settling time)
    """
    at = np.flatnonzero(valid)
    if at.size == 0:
        return 1.0
    guard = min(int(at[0]), valid.size - 1 - int(at[-1]))
    meant = valid[max(first, guard) : valid.size - guard]
    return 1.0 - float(np.mean(meant)) if meant.size else 1.0


def _part(seen: Seen) -> str:
    """Say of how much of the record a sentence speaks, where that is not nearly all."""
    if seen.lost_share < SAID_LOST_SHARE:
        return ""
    return f" of valid phase, {100 * (1 - seen.lost_share):.0f} % of the record"


def _mostly_lost(seen: Seen) -> str:
    """Say that a pair is locked as far as it can be seen, and that this is not far enough."""
    return (
        f"no slip in {seen.valid_s:.3g} s{_part(seen)}: for the rest a signal stopped or is "
        "missing, and whether the pair stayed locked is not known; mend the signal, or cut the "
        "record to the part that is meant"
    )


def _runs_after(difference: PhaseDifference, pull_in_s: float) -> list[FloatArray]:
    """Return psi of each valid stretch, the pull-in left out."""
    runs = run_values(difference)
    if runs:
        runs[0] = runs[0][round(pull_in_s * difference.rate_hz) :]
    return runs


def _pull_in_s(
    difference: PhaseDifference,
    episodes: tuple[Episode, ...],
    runs: tuple[tuple[int, int], ...],
) -> float:
    """Return the time before the first episode of the record, spent on reaching lock."""
    if not episodes or not runs:
        return 0.0
    start_s = difference.start_s + runs[0][0] / difference.rate_hz
    waited_s = episodes[0].start_s - start_s
    # A first stretch without an episode of its own is not a pull-in.
    inside = episodes[0].start_s < difference.start_s + runs[0][1] / difference.rate_hz
    return waited_s if inside and waited_s > 0.5 / difference.rate_hz else 0.0


def _still_moves(slope: Slope) -> str:
    """Say that psi moves on steadily."""
    rate_hz, u_hz = hz_from_rad_s(slope.rate_rad_s), hz_from_rad_s(slope.u_rad_s)
    return f"psi still moves on at {rate_hz:.2g} Hz (u {u_hz:.1g} Hz); record longer"


def _slips(count: int) -> str:
    """Return a count of slips in words."""
    return f"{count} slip" if count == 1 else f"{count} slips"
