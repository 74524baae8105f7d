"""Steps of n:m locking over a wide drive range, and maps against any sweep variable.

On an n:m step the driven frequency is m/n of the drive: the ratio driven / drive stands still
while the drive moves (a step of the devil's staircase). ``find_steps`` reads the steps off the
ratio, with no model; ``step_regions`` gives their edges by the joint likelihood when the
points of each order were measured as such. ``map_style`` follows lock style, offset and
coupling over any variable of a sweep: spacing, stiffness, supply.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from itertools import pairwise

import numpy as np

from fit.difference import Order
from fit.records import LockingRegion, RegionPoint, Style
from fit.region import RegionRules, fit_region
from rig.arrays import FloatArray
from rig.errors import FitError
from rig.quantities import Quantity, undetermined

LARGEST_DENOMINATOR = 8
LEAST_POINTS = 2  # points that stand on a step before it counts as one


@dataclass(frozen=True, slots=True, kw_only=True)
class Step:
    """One step of a staircase: order n:m, its edges along the axis, and its width.

    The edges are the middles between the last point on the step and the first off it, with
    the rectangular uncertainty of half a cell; an edge without a point beyond is open.
    """

    order: Order
    ratio: float
    lower: Quantity
    upper: Quantity
    width: Quantity
    points: int


def find_steps(
    axis: FloatArray,
    ratio: FloatArray,
    ratio_u: FloatArray,
    *,
    unit: str = "Hz",
    largest: int = LARGEST_DENOMINATOR,
) -> list[Step]:
    """Return the steps at which a frequency ratio stands at a fraction m/n.

    Parameters
    ----------
    axis : array (n,), rising
        The swept variable: drive frequency, or any that moves the ratio.
    ratio : array (n,)
        Driven over reference frequency, or winding number.
    ratio_u : array (n,), above 0
        Standard uncertainty of the ratio; two of them may part it from a fraction.
    unit : str, unit of the axis
    largest : int
        Largest n of the fractions m/n looked for.

    Returns
    -------
    list of Step, rising along the axis

    Raises
    ------
    FitError
        If the arrays differ in length, the axis does not rise, or an uncertainty is not
        above 0.

    Notes
    -----
    One point on a fraction may be chance; two neighbours at the same fraction, in a place
    where the ratio else moves by more than its uncertainty from point to point, are a step.
    """
    axis, ratio, ratio_u = (np.asarray(one, dtype=float) for one in (axis, ratio, ratio_u))
    if not axis.shape == ratio.shape == ratio_u.shape or axis.ndim != 1:
        raise FitError("staircase: axis, ratio and uncertainty must be of one length")
    if axis.size and not (np.all(np.diff(axis) > 0) and np.all(ratio_u > 0)):
        raise FitError("staircase: the axis must rise and uncertainties be above 0")
    nearest = [_fraction(value, u, largest) for value, u in zip(ratio, ratio_u, strict=True)]
    steps: list[Step] = []
    first = 0
    while first < axis.size:
        last = first
        while last + 1 < axis.size and nearest[last + 1] == nearest[first]:
            last += 1
        fraction = nearest[first]
        if fraction is not None and last - first + 1 >= LEAST_POINTS:
            steps.append(_step(axis, first, last, fraction, unit))
        first = last + 1
    return steps


def _fraction(value: float, u: float, largest: int) -> Fraction | None:
    """Return the fraction with the smallest denominator within two uncertainties, or None."""
    for denominator in range(1, largest + 1):
        nearest = Fraction(round(value * denominator), denominator)
        if nearest > 0 and abs(float(nearest) - value) <= 2.0 * u:
            return nearest
    return None


def _step(axis: FloatArray, first: int, last: int, fraction: Fraction, unit: str) -> Step:
    lower = _edge(axis, first - 1, first, unit)
    upper = _edge(axis, last + 1, last, unit)
    return Step(
        order=Order(n=fraction.denominator, m=fraction.numerator),
        ratio=float(fraction),
        lower=lower,
        upper=upper,
        width=_width(lower, upper, unit),
        points=last - first + 1,
    )


def _edge(axis: FloatArray, outside: int, inside: int, unit: str) -> Quantity:
    """Return the middle of the cell between a point off the step and one on it."""
    within = float(axis[inside])
    if not 0 <= outside < axis.size:
        below = outside < 0
        return undetermined(
            unit,
            "open on this side: the step reaches the end of the range",
            low=None if below else within,
            high=within if below else None,
        )
    beyond = float(axis[outside])
    low, high = sorted((within, beyond))
    return Quantity(
        value=(low + high) / 2.0,
        u=(high - low) / 2.0 / math.sqrt(3.0),
        unit=unit,
        low=low,
        high=high,
        level=1.0,
    )


def _width(lower: Quantity, upper: Quantity, unit: str) -> Quantity:
    """Return upper less lower."""
    if lower.value is None or upper.value is None:
        return undetermined(unit, "the step is open on one side")
    u = math.hypot(lower.u or 0.0, upper.u or 0.0)
    return Quantity(value=upper.value - lower.value, u=u, unit=unit)


def step_regions(
    points: Mapping[tuple[int, int], Sequence[RegionPoint]],
) -> dict[tuple[int, int], LockingRegion]:
    """Return the locking region of each order, edges by the joint likelihood.

    Parameters
    ----------
    points : mapping (n, m) -> points measured at that order

    Returns
    -------
    dict (n, m) -> LockingRegion, in rising m/n
    """
    ordered = sorted(points, key=lambda pair: (pair[1] / pair[0], pair))
    return {
        (n, m): fit_region(points[n, m], RegionRules(order=Order(n=n, m=m)))
        for n, m in ordered
        if points[n, m]
    }


@dataclass(frozen=True, slots=True, kw_only=True)
class MapPoint:
    """One point of a map: the swept variable, lock style (None: not locked), offset, coupling."""

    at: float
    style: Style | None
    offset_rad: Quantity
    coupling_hz: Quantity


@dataclass(frozen=True, slots=True, kw_only=True)
class StyleChange:
    """A place where the lock style changes, as the middle of the cell between two points."""

    at: Quantity
    before: Style | None
    after: Style | None


def map_style(points: Sequence[MapPoint], unit: str) -> tuple[list[MapPoint], list[StyleChange]]:
    """Return the points in rising order of the variable, and where the style changes.

    Parameters
    ----------
    points : sequence of MapPoint, any order; repeats at one place are allowed
    unit : str, unit of the variable

    Returns
    -------
    points : list of MapPoint
    changes : list of StyleChange
        ``before`` or ``after`` None: not locked there. Two styles at one place make a change
        without width: the pair is bistable there, or the place decides.
    """
    ordered = sorted(points, key=lambda point: (point.at, point.style or ""))
    changes = []
    for first, second in pairwise(ordered):
        if first.style == second.style:
            continue
        half = (second.at - first.at) / 2.0
        place = Quantity(
            value=first.at + half,
            u=half / math.sqrt(3.0),
            unit=unit,
            low=first.at,
            high=second.at,
            level=1.0,
        )
        changes.append(StyleChange(at=place, before=first.style, after=second.style))
    return ordered, changes
