"""How long to record, how many points, and which next: what a plan may promise.

The promise is the information of a record about the phase equation, observed for a time T
(CHECKS: Fisher information of a diffusion),

    I = T / (2 D) <g g'>,  g = (1, -sin q, K cos q) for (detuning, K, psi0), q = psi - psi0,

with the averages of the stationary law under noise (``fit.beatlaw.moments``). Over a sweep
the points add up to the information on centre, K, psi0 and its slope, from which the edges
centre -+ K have their standard errors. What single records cannot tell apart (a steady lock)
comes out as a length beyond reach, not as a refusal.

The order of a campaign: first a coarse pass that surely spans the region, then points near
its provisional edges. Placing points greedily from the first gains little and fails badly
when the first points missed an edge.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from fit.beatlaw import moments
from rig.angles import rad_s_from_hz
from rig.arrays import FloatArray
from rig.errors import FitError

Wanted = Literal["detuning", "coupling", "offset"]
WANTED: tuple[Wanted, ...] = ("detuning", "coupling", "offset")
COARSE_POINTS = 11  # a first pass has at least so many
SPAN = 1.5  # and reaches this many couplings to each side
# Promises are this many times the bound: a finite record tells a little less than its share of
# an endless one. Errors of simulated campaigns came out at 0.87 to 1.03 times the bound
# (bench/plan_region.md, where the margin is in what was promised).
BOUND_MARGIN = 1.1
LEAST_RELAXATIONS = 40.0  # K T below which the state of a point is often undecided
_CENTRE, _COUPLING, _OFFSET, _SLOPE = range(4)


@dataclass(frozen=True, slots=True, kw_only=True)
class Expected:
    """What is expected of a pair at one level.

    ``coupling_hz`` K / 2 pi; ``noise_rad2_s`` D of psi; ``measurement_noise_rad`` of one
    sample of psi; ``wander_hz`` spread of the free detuning from point to point;
    ``order_m`` m of the order n:m.
    """

    coupling_hz: float
    noise_rad2_s: float
    measurement_noise_rad: float = 0.0
    wander_hz: float = 0.0
    order_m: int = 1

    def __post_init__(self) -> None:
        for name in ("coupling_hz", "noise_rad2_s"):
            value = getattr(self, name)
            if not (math.isfinite(value) and value > 0):
                raise FitError(f"plan: {name} must be above 0, got {value:g}")
        for name in ("measurement_noise_rad", "wander_hz"):
            value = getattr(self, name)
            if not (math.isfinite(value) and value >= 0):
                raise FitError(f"plan: {name} must be at least 0, got {value:g}")
        if self.order_m < 1:
            raise FitError(f"plan: m of the order must be at least 1, got {self.order_m}")

    @property
    def coupling_rad_s(self) -> float:
        """K, rad/s."""
        return rad_s_from_hz(self.coupling_hz)


def information_rate(expected: Expected, detuning_rad_s: FloatArray) -> FloatArray:
    """Return the information per second on (detuning, K, psi0), shape (n, 3, 3).

    Parameters
    ----------
    expected : Expected
    detuning_rad_s : array (n,)
    """
    coupling = expected.coupling_rad_s
    first, second = moments(np.asarray(detuning_rad_s, float), coupling, expected.noise_rad2_s)
    sine, cosine = first.imag, first.real
    out = np.empty((*np.shape(sine), 3, 3))
    out[..., 0, 0] = 1.0
    out[..., 0, 1] = out[..., 1, 0] = -sine
    out[..., 0, 2] = out[..., 2, 0] = coupling * cosine
    out[..., 1, 1] = 0.5 * (1.0 - second.real)
    out[..., 1, 2] = out[..., 2, 1] = -0.5 * coupling * second.imag
    out[..., 2, 2] = 0.5 * coupling**2 * (1.0 + second.real)
    return out / (2.0 * expected.noise_rad2_s)


def record_length_s(expected: Expected, detuning_hz: float, wanted: Wanted, within: float) -> float:
    """Return how long one record must be for a standard uncertainty of one quantity.

    Parameters
    ----------
    expected : Expected
    detuning_hz : float
        Detuning of the record.
    wanted : "detuning", "coupling" or "offset"
    within : float, > 0
        Wanted standard uncertainty, Hz (offset: rad).

    Returns
    -------
    float, s; infinite when no record of this kind determines the quantity

    Raises
    ------
    FitError
        If ``wanted`` is unknown or ``within`` is not above 0.
    """
    if wanted not in WANTED:
        raise FitError(f"plan: '{wanted}' is not one of {', '.join(WANTED)}")
    if not within > 0:
        raise FitError(f"plan: the wanted uncertainty must be above 0, got {within:g}")
    detuning = np.array([rad_s_from_hz(detuning_hz)])
    rate = information_rate(expected, detuning)[0]
    scale = 1.0 / np.sqrt(np.diag(rate))
    inner = rate * np.outer(scale, scale)
    if np.linalg.cond(inner) > 1e12:
        return math.inf
    variance = np.linalg.inv(inner) * np.outer(scale, scale)
    column = WANTED.index(wanted)
    goal = within if wanted == "offset" else rad_s_from_hz(within)
    length = float(variance[column, column]) * (BOUND_MARGIN / goal) ** 2
    # Measurement noise at both ends of the record: 2 R / T^2 of the detuning.
    ends = math.sqrt(2.0) * expected.measurement_noise_rad / goal
    return max(length, ends) if wanted == "detuning" else length


def point_information(
    expected: Expected, detuning_rad_s: FloatArray, duration_s: FloatArray | float
) -> FloatArray:
    """Return what points of a sweep tell about (centre, K, psi0, slope), shape (n, 4, 4).

    Parameters
    ----------
    expected : Expected
    detuning_rad_s : array (n,)
    duration_s : array (n,) or float
    """
    detuning = np.asarray(detuning_rad_s, dtype=float)
    return shared_information(expected, detuning, information_rate(expected, detuning), duration_s)


def shared_information(
    expected: Expected, detuning: FloatArray, rate: FloatArray, duration_s: FloatArray | float
) -> FloatArray:
    """Return ``point_information`` from rates worked out before, shape (n, 4, 4).

    Parameters
    ----------
    expected : Expected
    detuning : array (n,), rad/s
    rate : array (n, 3, 3), as from ``information_rate``
    duration_s : array (n,) or float
    """
    single = rate * np.reshape(duration_s, (-1, 1, 1))
    # Wander of the detuning between points takes from what a point says of the centre.
    wander = rad_s_from_hz(expected.wander_hz) ** 2
    share = wander / (1.0 + wander * single[:, 0, 0])
    first = single[:, 0, :]
    single = single - share[:, None, None] * first[:, :, None] * first[:, None, :]
    jacobian = np.zeros((detuning.size, 3, 4))
    jacobian[:, 0, _CENTRE] = jacobian[:, 1, _COUPLING] = jacobian[:, 2, _OFFSET] = 1.0
    jacobian[:, 2, _SLOPE] = detuning
    return np.asarray(np.einsum("nij,nik,nkl->njl", jacobian, single, jacobian))


def edge_u_hz(information: FloatArray, order_m: int) -> tuple[float, float]:
    """Return the standard errors of the lower and upper edge from summed information.

    Parameters
    ----------
    information : array (4, 4)
    order_m : int

    Returns
    -------
    tuple of float, Hz of drive; infinite when the points do not determine them
    """
    diagonal = np.diag(information)
    if not (np.all(np.isfinite(diagonal)) and np.all(diagonal > np.finfo(float).tiny)):
        return math.inf, math.inf
    scale = 1.0 / np.sqrt(diagonal)
    inner = information * np.outer(scale, scale)
    if np.linalg.cond(inner) > 1e12:
        return math.inf, math.inf
    covariance = np.linalg.inv(inner) * np.outer(scale, scale)
    both = covariance[0, 0] + covariance[1, 1]
    cross = 2.0 * covariance[0, 1]
    lower, upper = (math.sqrt(max(float(value), 0.0)) for value in (both - cross, both + cross))
    factor = BOUND_MARGIN / rad_s_from_hz(order_m)
    return lower * factor, upper * factor


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class EdgePlan:
    """A pass over the region: where, how long at each point, and what it promises.

    ``offsets_hz`` are drive frequencies less the expected centre; ``edge_u_hz`` the larger
    promised standard uncertainty of the two edges; ``total_s`` with settling.
    """

    offsets_hz: tuple[float, ...]
    duration_s: float
    edge_u_hz: float
    total_s: float
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class PlanSettings:
    """``settle_s`` between points, ``span`` in couplings each side, ``points`` or None: chosen.

    ``duration_s`` of a point, or None: what the wanted uncertainty needs.
    """

    settle_s: float = 0.0
    span: float = SPAN
    points: int | None = None
    duration_s: float | None = None

    def __post_init__(self) -> None:
        if not (math.isfinite(self.settle_s) and self.settle_s >= 0):
            raise FitError(f"plan: settling must be at least 0 s, got {self.settle_s:g}")
        if not (math.isfinite(self.span) and self.span > 1.0):
            raise FitError(
                f"plan: the span must reach beyond the edges, above 1 coupling, got {self.span:g}"
            )
        if self.points is not None and self.points < COARSE_POINTS:
            raise FitError(
                f"plan: a first pass needs at least {COARSE_POINTS} points, got {self.points}"
            )
        if self.duration_s is not None and not self.duration_s > 0:
            raise FitError(f"plan: a point must last above 0 s, got {self.duration_s:g}")


def plan_edges(
    expected: Expected, within_hz: float, settings: PlanSettings | None = None
) -> EdgePlan:
    """Return an even pass over the region that gives its edges to a wanted uncertainty.

    Parameters
    ----------
    expected : Expected
    within_hz : float, > 0
        Wanted standard uncertainty of each edge, Hz of drive.
    settings : PlanSettings, optional
        With both points and duration given, the plan says what they promise.

    Returns
    -------
    EdgePlan

    Raises
    ------
    FitError
        If ``within_hz`` is not above 0, or wander between points forbids it.
    """
    rules = settings or PlanSettings()
    if not within_hz > 0:
        raise FitError(f"plan: the wanted uncertainty must be above 0 Hz, got {within_hz:g}")
    counts = [rules.points] if rules.points else [COARSE_POINTS, 15, 21, 31, 41, 61, 81, 121, 161]
    plans = [
        plan for count in counts if (plan := _pass(expected, within_hz, rules, count)) is not None
    ]
    if not plans:
        raise FitError(
            f"plan: wander of {expected.wander_hz:g} Hz between points keeps the edges from "
            f"{within_hz:g} Hz with {counts[-1]} points; take more points or repeat the sweep"
        )
    return min(plans, key=lambda plan: plan.total_s)


def _pass(expected: Expected, within_hz: float, rules: PlanSettings, count: int) -> EdgePlan | None:
    """Return an even pass of some points, None when no length of them suffices."""
    detuning = np.linspace(rules.span, -rules.span, count) * expected.coupling_rad_s
    duration = rules.duration_s
    if duration is None:
        duration = _needed_s(expected, detuning, within_hz)
        if duration is None:
            return None
    least = LEAST_RELAXATIONS / expected.coupling_rad_s
    notes = []
    if duration < least and rules.duration_s is None:
        duration = least
        notes.append("length set by the state of single points, not by the edges")
    if duration < least:
        notes.append(f"below {least:.3g} s the state of a point near an edge is often undecided")
    total = point_information(expected, detuning, duration).sum(axis=0)
    u = max(edge_u_hz(total, expected.order_m))
    if u > within_hz * 1.0001:
        notes.append(f"these points give {u:.3g} Hz, more than the {within_hz:.3g} Hz wanted")
    step = 2.0 * rules.span * expected.coupling_hz / expected.order_m / (count - 1)
    offsets = tuple(step * (k - (count - 1) / 2.0) for k in range(count))
    return EdgePlan(
        offsets_hz=offsets,
        duration_s=duration,
        edge_u_hz=u,
        total_s=count * (duration + rules.settle_s),
        notes=tuple(notes),
    )


def _needed_s(expected: Expected, detuning: FloatArray, within_hz: float) -> float | None:
    """Return the length of each point for the wanted uncertainty, None beyond reach."""

    rate = information_rate(expected, detuning)

    def reached(duration: float) -> bool:
        total = shared_information(expected, detuning, rate, duration).sum(axis=0)
        return max(edge_u_hz(total, expected.order_m)) <= within_hz

    low, high = 1e-3 / expected.coupling_rad_s, 1e7 / expected.coupling_rad_s
    if not reached(high):
        return None
    for _ in range(60):
        middle = math.sqrt(low * high)
        low, high = (low, middle) if reached(middle) else (middle, high)
    return high


def at_level(expected: Expected, factor: float) -> Expected:
    """Return what is expected at another amplitude, coupling proportional to it.

    Parameters
    ----------
    expected : Expected
    factor : float, > 0, amplitude over the amplitude that ``expected`` is for
    """
    return replace(expected, coupling_hz=expected.coupling_hz * factor)


def spread_points(
    low_hz: float, high_hz: float, taken_hz: Sequence[float], count: int
) -> list[float]:
    """Return new places that leave the smallest widest gap over a range, one after another.

    Parameters
    ----------
    low_hz, high_hz : float
    taken_hz : sequence of float, places already measured
    count : int
    """
    places = sorted({low_hz, high_hz, *(hz for hz in taken_hz if low_hz <= hz <= high_hz)})
    fresh = [hz for hz in (low_hz, high_hz) if hz not in set(taken_hz)][:count]
    while len(fresh) < count:
        gaps = np.diff(places)
        widest = int(np.argmax(gaps))
        middle = places[widest] + float(gaps[widest]) / 2.0
        places.insert(widest + 1, middle)
        fresh.append(middle)
    return fresh
