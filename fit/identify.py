"""What a record determines: the fit of one record, and the gates a number must pass.

A number is given only when the record determines it, and else the reason why not. Rates are
rad/s here; quantities in hertz are made in ``fit.adler_record``.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np

from fit.likelihood_start import net_turns
from fit.records import Baseline, PsiSeries
from rig.angles import circular_mean_rad, circular_spread_rad, wrap_angle_rad
from rig.arrays import FloatArray

# Detuning and coupling count as determined when both standard errors are below this part of
# the larger of the two. Judging the coupling of a drifting pair by its own size would let
# through only those that came out too large, and their intervals would not cover.
GATE = 0.2
# The same where the record does not tell drifting from slipping, and with a baseline: at 0.2
# only those whose detuning or coupling came out high by chance would pass (measured coverage
# 84 and 71 %).
GATE_WIDE = 0.35
# Slips that separate detuning from coupling inside the locking region.
LEAST_SLIPS = 5
# A pull-in helps only when it starts this far (rad) from the rest angle.
PULL_IN_RAD = 1.0
LEAST_TURNS = 1.5
# The same while drifting is not told from slipping: a few turns may be chance slips.
LEAST_TURNS_NEAR_EDGE = 2.5
# Coupling zero lies in the region of two parameters when their squared distance is below
# this multiple of the one-parameter threshold (5.99/3.84).
FREE_FACTOR = 1.56
LEAST_SAMPLES_A_BEAT = 4.0
# Least threshold of what a short locked record says: its relaxation rate is biased high, and
# 3.84 covers only 92 % (88 % where measurement noise hides most of the motion).
LOCKED_THRESHOLD = 4.5


@dataclass(frozen=True, slots=True, kw_only=True)
class RecordFacts:
    """What a record shows before any fit: slips both ways, net turns, and a pull-in."""

    slips: int
    turns: float
    pulls_in: bool


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RecordFit:
    """Likelihood fit of one record.

    ``theta`` (5,) as in ``fit.likelihood``, ``covariance`` (5, 5) the inverse expected
    information (prior included), ``ends`` maps (target, side) to the parameters at that end;
    ``thresholds`` of the likelihood ratio by target.
    """

    theta: FloatArray
    covariance: FloatArray
    loglik: float
    converged: bool
    thresholds: dict[str, float]
    ends: dict[tuple[str, float], FloatArray]
    noise_ends: dict[float, float] = field(default_factory=dict)

    @property
    def coupling_rad_s(self) -> float:
        """K = hypot(a, b)."""
        return math.hypot(self.theta[1], self.theta[2])

    @property
    def size_rad_s(self) -> float:
        """K as a divisor: never zero."""
        return max(self.coupling_rad_s, 1e-300)

    @property
    def offset_rad(self) -> float:
        """psi0 = atan2(a, -b)."""
        return math.atan2(self.theta[1], -self.theta[2])

    def u_of(self, slope: FloatArray) -> float:
        """Return the standard error of a quantity with the given gradient."""
        return math.sqrt(max(float(slope @ self.covariance @ slope), 0.0))

    @property
    def coupling_u_rad_s(self) -> float:
        """Standard error of K."""
        return self.u_of(np.array([0.0, *self.theta[1:3], 0.0, 0.0]) / self.size_rad_s)

    def may_be_free(self, factor: float = FREE_FACTOR) -> bool:
        """Whether a coupling of zero lies within factor times the threshold (parabola)."""
        inverse = np.linalg.inv(self.covariance[1:3, 1:3])
        distance = float(self.theta[1:3] @ inverse @ self.theta[1:3])
        return distance < factor * self.thresholds["coupling"]

    @property
    def detuning_u_rad_s(self) -> float:
        """Standard error of dw."""
        return math.sqrt(float(self.covariance[0, 0]))

    @property
    def relaxation_rad_s(self) -> float | None:
        """sqrt(K^2 - dw^2) inside the locking region, None outside."""
        squared = self.coupling_rad_s**2 - float(self.theta[0]) ** 2
        return math.sqrt(squared) if squared > 0.0 else None


@dataclass(frozen=True, slots=True, kw_only=True)
class Identified:
    """What the record determines: all of (dw, K, psi0), or the detuning alone, and why not."""

    all: bool
    detuning: bool
    interval: bool
    reason: str


def unusable(record: PsiSeries, least_samples: int) -> str:
    """Return why a record cannot be fitted at all; empty when it can.

    Parameters
    ----------
    record : PsiSeries
    least_samples : int

    Returns
    -------
    str
    """
    usable = [part for part in record.segments if part.size >= 4]
    samples = sum(part.size for part in usable)
    if samples < least_samples:
        return f"too short: {samples} phase samples, at least {least_samples} needed"
    if not max(float(np.ptp(part)) for part in usable) > 1e-9:
        return "psi does not move at all: a constant phase shows only its angle"
    return ""


def facts_of(record: PsiSeries) -> RecordFacts:
    """Return what the record shows before any fit.

    Parameters
    ----------
    record : PsiSeries

    Returns
    -------
    RecordFacts
        ``pulls_in`` when the start lies further from the angle of the second half than 1 rad
        and four times its spread.
    """
    usable = [part for part in record.segments if part.size]
    tail = usable[-1][usable[-1].size // 2 :]
    away = abs(wrap_angle_rad(float(usable[0][0]) - circular_mean_rad(tail)))
    return RecordFacts(
        slips=sum(_slips(part) for part in usable),
        turns=net_turns(record),
        pulls_in=away > max(PULL_IN_RAD, 4.0 * circular_spread_rad(tail)),
    )


def _slips(psi: FloatArray) -> int:
    """Return whole turns either way: a cell counts once psi is within a quarter turn of it."""
    turns = (psi - circular_mean_rad(psi)) / math.tau
    cells = np.round(turns)
    inside = cells[np.abs(turns - cells) < 0.25]
    return int(np.sum(np.abs(np.diff(inside))))


def is_identified(record: PsiSeries, fit: RecordFit, baseline: Baseline | None) -> Identified:
    """Return which of detuning, coupling and offset the record determines, and why not.

    Parameters
    ----------
    record : PsiSeries
    fit : RecordFit
    baseline : Baseline, optional

    Returns
    -------
    Identified
    """
    facts = facts_of(record)
    coupling, detuning = fit.coupling_rad_s, abs(float(fit.theta[0]))
    reason = _refusal(record, facts, fit, baseline)
    wide = baseline is not None or _near_edge(fit)
    gate = GATE_WIDE if wide else GATE
    scale = gate * max(coupling, detuning)
    whole = not reason and fit.detuning_u_rad_s < scale and fit.coupling_u_rad_s < scale
    alone = not reason and not whole and _drifts_clearly(facts, fit)
    if not reason:
        reason = _remedy(record, fit, detuning > coupling)
    return Identified(all=whole, detuning=whole or alone, interval=whole or alone, reason=reason)


def _near_edge(fit: RecordFit) -> bool:
    """Say whether the margin K - |dw| is within two standard errors of zero."""
    sign = math.copysign(1.0, float(fit.theta[0]))
    slope = np.array([-sign, *(fit.theta[1:3] / fit.size_rad_s), 0.0, 0.0])
    return abs(fit.coupling_rad_s - abs(float(fit.theta[0]))) < 2.0 * fit.u_of(slope)


def _drifts_clearly(facts: RecordFacts, fit: RecordFit) -> bool:
    """Say whether the pair drifts whatever the coupling is within its error."""
    detuning = abs(float(fit.theta[0])) - 2.0 * fit.detuning_u_rad_s
    return abs(facts.turns) >= 2.0 and detuning > fit.coupling_rad_s + 2.0 * fit.coupling_u_rad_s


def _refusal(
    record: PsiSeries, facts: RecordFacts, fit: RecordFit, baseline: Baseline | None
) -> str:
    """Return why nothing of (dw, K, psi0) can be told, empty when something may."""
    rate_hz = abs(facts.turns) / max(record.duration_s, record.step_s)
    if rate_hz * record.step_s * LEAST_SAMPLES_A_BEAT > 1.0:
        return (
            f"{1.0 / (rate_hz * record.step_s):.1f} phase samples a beat, at least "
            f"{LEAST_SAMPLES_A_BEAT:g} needed: take the phase at a higher rate"
        )
    if not fit.converged:
        return "the fit did not settle: the record does not single out one set of values"
    inside = fit.relaxation_rad_s is not None
    known = baseline is not None and baseline.detuning_hz.value is not None
    if inside and not known and facts.slips < LEAST_SLIPS and not facts.pulls_in:
        return (
            "a steady lock shows only the angle and the relaxation rate: "
            f"{facts.slips} slips, at least {LEAST_SLIPS} needed; a free-running capture of each "
            "oscillator, a pull-in from far off, or a longer record with slips determines it"
        )
    least = LEAST_TURNS_NEAR_EDGE if _near_edge(fit) and facts.slips < LEAST_SLIPS else LEAST_TURNS
    if not inside and not known and abs(facts.turns) < least and not facts.pulls_in:
        return (
            f"{abs(facts.turns):.1f} beats and no pull-in: at least {least:g} beats needed; "
            "record longer, or add a free-running capture of each oscillator"
        )
    return ""


def _remedy(record: PsiSeries, fit: RecordFit, drifting: bool) -> str:
    """Return the reason of a quantity whose error is too large, with the record length needed."""
    scale = max(fit.coupling_rad_s, abs(float(fit.theta[0])), 1e-300)
    worst = max(fit.detuning_u_rad_s, fit.coupling_u_rad_s) / scale
    text = (
        f"not separated: the standard error is {worst:.2g} of the larger of detuning and "
        f"coupling (limit {GATE:g})"
    )
    if drifting and worst < 20.0:
        needed_s = record.duration_s * (worst / GATE) ** 2
        return f"{text}; a record of about {needed_s:.2g} s of the same kind would do"
    return f"{text}; a free-running capture of each oscillator or a record with slips would do"
