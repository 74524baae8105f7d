"""The joint fit of a whole sweep: starts, climb, wander between points, departures released.

1. A first climb on a third of the lanes from every start, then all lanes from the best.
2. The spread of the detuning from point to point is measured over the whole sweep and the fit
   made again with it (``fit.region_wander``).
3. The coupling is tested between the sides, between distances, and from record to record.
   Where a test fires, points well inside the region are left out: at strong drive their rest
   angle obeys another curve than the sine, while the passage through the edge is that of the
   phase equation whatever the oscillator is.
4. Where the sides or distances still differ, K may vary with detuning, and the edges come from
   the coupling at the edge.
5. What single records scatter then widens the uncertainties.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from fit.bracket import bracket_runs
from fit.joint import (
    ASYMMETRY,
    CENTRE,
    COUPLING,
    DISTANCE,
    ITERATIONS,
    LOG_D,
    SLOPE,
    WIDTH,
    JointData,
    JointFit,
    fit_joint,
    lay_out,
)
from fit.records import AdequacyTest, RegionPoint
from fit.region_start import starts_of
from fit.region_tests import (
    Departures,
    coupling_departures,
    distance_departures,
    distance_test,
    record_test,
    side_departures,
    side_test,
)
from fit.region_wander import PointSpread, with_spread
from rig.angles import rad_s_from_hz
from rig.arrays import BoolArray, FloatArray, IntArray
from rig.quantities import Quantity

FIRST_STRIDE = 3
FIRST_ITERATIONS = 15
# A departure below this part of the coupling is allowed for in the edges and does not make
# the phase equation wrong: single records agree with the sweep that well.
MATERIAL = 0.05
# Single couplings that scatter by more than this part of the shared one: inertia, or worse.
FAILED = 0.3
WELL_INSIDE = 0.85  # points with |detuning| below this part of K are well inside
LEAST_OUTER = 6  # points that must be left without them
SURE = 2.5758293035489004  # two-sided 99 % quantile of the normal distribution


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SweepFit:
    """Joint fit of all groups with its tests.

    ``outer`` says that points well inside were left out, ``released`` that the coupling may
    vary with detuning; ``widen`` multiplies standard
    errors (1 unless single records scatter more than they should); ``holds`` is the verdict
    on the phase equation, ``scattered`` that single records contradict any smooth coupling;
    ``failed`` that they scatter so much that no edge can be taken from them;
    ``spread`` is that of the detuning between points.
    """

    groups: tuple[tuple[RegionPoint, ...], ...]
    data: JointData
    fit: JointFit
    tests: tuple[AdequacyTest, ...]
    outer: bool
    released: bool
    holds: bool | None
    scattered: bool
    failed: bool
    widen: float
    spread: PointSpread


def axis_rad_s(point: RegionPoint, order_m: int) -> float:
    """Return where a point lies: 2 pi m drive_hz, or minus 2 pi detuning_hz of a mutual pair."""
    if point.drive_hz is not None:
        return rad_s_from_hz(order_m * point.drive_hz)
    return -rad_s_from_hz(point.detuning_hz or 0.0)


def _spread_rad_s(point: RegionPoint, order_m: int) -> float:
    """Return the standard error of where a point lies.

    A detuning that is the record's own estimate tells nothing new about the record: it is
    left free over a range far beyond its value.
    """
    if point.drive_hz is not None:
        return rad_s_from_hz(order_m * point.drive_u_hz)
    if _is_own(point):
        own = abs(point.detuning_hz or 0.0)
        return 10.0 * rad_s_from_hz(own + (point.adler.coupling_hz.value or own))
    return rad_s_from_hz(point.drive_u_hz)


def _is_own(point: RegionPoint) -> bool:
    """Say whether the detuning of a mutual pair is the record's own estimate."""
    own = point.adler.detuning_hz.value
    return point.drive_hz is None and own is not None and own == point.detuning_hz


def lay_groups(groups: Sequence[Sequence[RegionPoint]], order_m: int) -> JointData:
    """Return the records of all groups as lanes.

    Parameters
    ----------
    groups : sequence of sequences of RegionPoint, each with samples
    order_m : int
    """
    points = [point for group in groups for point in group]
    return lay_out(
        [point.series for point in points],
        np.array([axis_rad_s(point, order_m) for point in points]),
        np.array([_spread_rad_s(point, order_m) for point in points]),
        [len(group) for group in groups],
    )


def climb_groups(
    data: JointData,
    groups: Sequence[Sequence[RegionPoint]],
    order_m: int,
    iterations: int = ITERATIONS,
) -> JointFit:
    """Return the joint fit of all groups with one coupling each.

    Parameters
    ----------
    data : JointData
    groups : sequence of sequences of RegionPoint, the same
    order_m : int
    iterations : int, most of the last climb
    """
    held = held_columns(groups)
    fit = fit_joint(data, _first_climb(data, groups, order_m, False), held, iterations=iterations)
    if fit.converged.all():
        return fit
    other = fit_joint(data, _first_climb(data, groups, order_m, True), held, iterations=iterations)
    better = other.converged & ~fit.converged
    better |= (other.converged == fit.converged) & (other.loglik > fit.loglik)
    start = np.where(better[:, None], other.theta, fit.theta)
    return fit_joint(data, start, held, iterations=iterations)


def _first_climb(
    data: JointData, groups: Sequence[Sequence[RegionPoint]], order_m: int, thorough: bool
) -> FloatArray:
    """Return where the best start of each group gets to on a part of the lanes (G, 8)."""
    starts, of = _starts(data, groups, order_m, thorough)
    held = held_columns(groups)
    starts[held[of, CENTRE], CENTRE] = 0.0
    rough = fit_joint(
        data.every(FIRST_STRIDE).of_groups(of), starts, held[of], iterations=FIRST_ITERATIONS
    )
    best = [_best(np.flatnonzero(of == group), rough.loglik) for group in range(len(groups))]
    return np.asarray(rough.theta[best])


def _best(rows: IntArray, loglik: FloatArray) -> int:
    return int(rows[int(np.argmax(loglik[rows]))])


def _starts(
    data: JointData, groups: Sequence[Sequence[RegionPoint]], order_m: int, thorough: bool
) -> tuple[FloatArray, IntArray]:
    """Return all starts (k, 8) and the group of each."""
    starts, of = [], []
    for index, group in enumerate(groups):
        drive = data.drive_rad_s[data.group == index]
        starts.append(starts_of(group, drive, bracket_runs(group), order_m, thorough=thorough))
        of.extend([index] * len(starts[-1]))
    return np.concatenate(starts), np.array(of)


def held_columns(groups: Sequence[Sequence[RegionPoint]]) -> BoolArray:
    """Return the columns that the plain fit leaves alone (G, 8).

    Parameters
    ----------
    groups : sequence of sequences of RegionPoint
    """
    held = np.zeros((len(groups), WIDTH), dtype=bool)
    held[:, [ASYMMETRY, DISTANCE]] = True
    for index, group in enumerate(groups):
        if group[0].drive_hz is None:
            held[index, SLOPE] = True  # no cable delay without a drive
            # Detunings that are free themselves leave no centre to find: it is zero.
            held[index, CENTRE] = any(_is_own(point) for point in group)
    return held


def fit_sweep(groups: Sequence[Sequence[RegionPoint]], order_m: int) -> SweepFit:
    """Return the joint fit of a sweep with its tests and what they made of it.

    Parameters
    ----------
    groups : sequence of sequences of RegionPoint
        Points of one level and direction each, every one with samples.
    order_m : int
    """
    data = lay_groups(groups, order_m)
    held = held_columns(groups)
    fit = climb_groups(data, groups, order_m)
    data, fit, wander, spread = with_spread(data, fit, held)
    first = _departures(data, fit)
    tests = _tests(first)
    outer = released = False
    if any(test.fired for test in tests):
        data, fit, outer = _outer(data, fit, held)
        released = any(test.fired for test in _tests(_departures(data, fit))[:2])
    if released:
        held = held.copy()
        held[:, [ASYMMETRY, DISTANCE]] = False
        fit = fit_joint(data, fit.theta, held, delta=fit.delta_rad_s)
    records = coupling_departures(data, fit)
    fired = record_test(records).fired
    scattered = fired and records.excess > MATERIAL
    widen = max(1.0, (records.statistic / max(records.freedom, 1)) ** 0.5) if fired else 1.0
    return SweepFit(
        groups=tuple(tuple(group) for group in groups),
        data=data,
        fit=fit,
        tests=(*tests, wander),
        outer=outer,
        released=released,
        holds=_holds(first, scattered),
        scattered=scattered,
        failed=scattered and records.excess > FAILED,
        widen=widen,
        spread=spread,
    )


_Found = tuple[Departures, Departures, Departures]  # sides, distances, records


def _departures(data: JointData, fit: JointFit) -> _Found:
    return (
        side_departures(data, fit),
        distance_departures(data, fit),
        coupling_departures(data, fit),
    )


def _tests(found: _Found) -> list[AdequacyTest]:
    return [side_test(found[0]), distance_test(found[1]), record_test(found[2])]


def _outer(data: JointData, fit: JointFit, held: BoolArray) -> tuple[JointData, JointFit, bool]:
    """Return data and fit without the points well inside, where enough points are left."""
    centre, coupling = fit.theta[data.group, CENTRE], fit.theta[data.group, COUPLING]
    kept = np.abs(centre - data.drive_rad_s) >= WELL_INSIDE * coupling
    sizes = np.bincount(data.group[kept], minlength=data.groups)
    if sizes.min() < LEAST_OUTER:
        return data, fit, False
    rows = np.flatnonzero(kept)
    part = data.of_records(rows, [int(size) for size in sizes])
    return part, fit_joint(part, fit.theta, held, delta=fit.delta_rad_s[rows]), True


def _holds(found: _Found, scattered: bool) -> bool | None:
    """Return whether the phase equation holds over the sweep, None when nothing tests it."""
    sides, distances, records = found
    if max(one.freedom for one in found) < 1:
        return None
    if record_test(records).fired and records.excess > MATERIAL:
        return False
    return not (scattered or _is_material(sides) or _is_material(distances))


def _is_material(found: Departures) -> bool:
    """Say whether a departure is both sure and large at any level."""
    if not found.freedom or not found.statistic > found.threshold:
        return False
    sure = np.abs(found.values) > SURE * np.sqrt(found.variances)
    return bool(np.any(sure & (np.abs(found.values) > MATERIAL)))


def coupling_of(fit: JointFit, group: int) -> float:
    """Return K at the edge of one group, rad/s."""
    return float(fit.theta[group, COUPLING])


def offset_slope(sweep: SweepFit, number: int) -> Quantity:
    """Return how far psi0 turns with the detuning: the delay of cables, filters, the tank."""
    u = math.sqrt(max(float(sweep.fit.covariance[number, SLOPE, SLOPE]), 0.0))
    value = float(sweep.fit.theta[number, SLOPE])
    return Quantity(value=rad_s_from_hz(value), u=rad_s_from_hz(u), unit="rad/Hz")


def shared_noise(sweep: SweepFit, number: int) -> Quantity:
    """Return the noise that the points of one interval share."""
    value = math.exp(float(sweep.fit.theta[number, LOG_D]))
    log_u = math.sqrt(max(float(sweep.fit.covariance[number, LOG_D, LOG_D]), 0.0))
    return Quantity(value=value, u=value * log_u, unit="rad^2/s")
