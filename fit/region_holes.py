"""Holes in a locking region: one level and direction with several intervals of lock.

Two runs of locked points with drifting points between them are two intervals only when two
regions, each with its own centre and coupling, explain all points much better than one:
noise makes single points near an edge slip, and a slipping point is no hole.
"""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise

from fit.bracket import Bracket, axis_hz, bracket_runs
from fit.records import RegionPoint
from fit.region_fit import climb_groups, lay_groups

# Six parameters more and a choice of places: chance gives 11.2 once in a thousand at a fixed
# place (half the chi-square quantile of 6 degrees of freedom).
GAIN = 15.0
# One region over two is a bad fit that climbs long; it need not arrive to be seen as worse.
ITERATIONS = 20


def split_at_holes(
    group: Sequence[RegionPoint], order_m: int, min_points: int
) -> list[list[RegionPoint]]:
    """Return the points of one level and direction, parted where the region has a hole.

    Parameters
    ----------
    group : sequence of RegionPoint of one level and direction, each with samples
    order_m : int
    min_points : int
        Distinct places that a part needs; a thinner part is not split off.

    Returns
    -------
    list of lists, rising along the axis; one list when there is no hole
    """
    ordered = sorted(group, key=lambda point: (axis_hz(point), point.key))
    for place in _gaps(ordered, bracket_runs(ordered)):
        parts = [
            [point for point in ordered if axis_hz(point) < place],
            [point for point in ordered if axis_hz(point) >= place],
        ]
        if min(len({axis_hz(point) for point in part}) for part in parts) < min_points:
            continue
        if _gain([*parts, ordered], order_m) > GAIN:
            rest = split_at_holes(parts[1], order_m, min_points)
            return [parts[0], *rest]
    return [list(group)]


def _gaps(points: Sequence[RegionPoint], runs: Sequence[Bracket]) -> list[float]:
    """Return the middle of each gap between locked runs that holds a drifting point."""
    places = []
    for before, after in pairwise(runs):
        inside = [
            axis_hz(point)
            for point in points
            if before.last_locked_hz < axis_hz(point) < after.first_locked_hz
            and point.state == "drifting"
        ]
        if inside:
            places.append((before.last_locked_hz + after.first_locked_hz) / 2.0)
    return places


def _gain(groups: Sequence[Sequence[RegionPoint]], order_m: int) -> float:
    """Return how much better the first two groups are than the third, which is both."""
    fit = climb_groups(lay_groups(groups, order_m), groups, order_m, ITERATIONS)
    if not fit.converged[:2].all():
        return 0.0
    return float(fit.loglik[0] + fit.loglik[1] - fit.loglik[2])
