"""Edges of one level and direction: from the joint fit, or from the points near them.

With K_r = K + s x + d (|x| - K) the detuning at an edge obeys |x| = K_r, so

    x_lower = K (1 - d) / (1 - s - d),   |x_upper| = K (1 - d) / (1 + s - d),

which is K on both sides when s = 0. On the axis of the drive the lower edge lies at
c - |x_upper| ... c is the centre; detuning falls as the drive rises, so the LOWER drive edge
has the POSITIVE detuning: lower = c - x_lower, upper = c + |x_upper|.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np

from fit.joint import (
    ASYMMETRY,
    CENTRE,
    COUPLING,
    DISTANCE,
    OFFSET,
    SLOPE,
    WIDTH,
    JointData,
    JointFit,
    fit_joint,
)
from fit.region_tests import coupling_departures
from rig.arrays import FloatArray

Side = Literal["lower", "upper"]
# Points that tell of an edge by themselves: detuning between these multiples of the edge's.
NEAR, FAR = 0.5, 1.6
LEAST_NEAR = 4


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class AxisEdge:
    """One edge on the axis of ``JointData.drive_rad_s`` with its standard error, rad/s."""

    value_rad_s: float
    u_rad_s: float
    local: bool = False


def axis_edge(fit: JointFit, group: int, side: Side, widen: float = 1.0) -> AxisEdge:
    """Return one edge of one group from the joint fit.

    Parameters
    ----------
    fit : JointFit
    group : int
    side : "lower" or "upper", on the axis of the drive
    widen : float, factor of the standard error
    """
    theta = fit.theta[group]
    slope = np.zeros(WIDTH)
    value = _edge_value(theta, side)
    for column in (CENTRE, COUPLING, ASYMMETRY, DISTANCE):
        # Central difference: the edge is smooth and nearly linear in all four.
        step = 1e-6 * max(abs(theta[COUPLING]), 1e-12) if column in (CENTRE, COUPLING) else 1e-6
        moved = [theta.copy(), theta.copy()]
        moved[0][column] -= step
        moved[1][column] += step
        slope[column] = (_edge_value(moved[1], side) - _edge_value(moved[0], side)) / (2.0 * step)
    variance = float(slope @ fit.covariance[group] @ slope)
    return AxisEdge(value_rad_s=value, u_rad_s=widen * math.sqrt(max(variance, 0.0)))


def _edge_value(theta: FloatArray, side: Side) -> float:
    asymmetry, distance = float(theta[ASYMMETRY]), float(theta[DISTANCE])
    sign = -1.0 if side == "lower" else 1.0
    width = float(theta[COUPLING]) * (1.0 - distance) / (1.0 + sign * asymmetry - distance)
    return float(theta[CENTRE]) + sign * width


def local_edge(data: JointData, fit: JointFit, group: int, side: Side) -> AxisEdge | None:
    """Return one edge from the points near it alone, None when they do not give it.

    The phase equation holds near a saddle-node whatever the oscillator is: with the centre
    held, the coupling that the near points of this side show is the distance of the edge.
    Its error is widened by their scatter.

    Parameters
    ----------
    data : JointData
    fit : JointFit
    group : int
    side : "lower" or "upper"
    """
    value = axis_edge(fit, group, side).value_rad_s
    centre = float(fit.theta[group, CENTRE])
    part = (data.drive_rad_s - centre) / (value - centre)
    rows = np.flatnonzero((data.group == group) & (part > NEAR) & (part < FAR))
    inside = int(np.sum(part[rows] < 1.0))
    if rows.size < LEAST_NEAR or inside in (0, rows.size):
        return None
    near = data.of_records(rows, [rows.size])
    held = np.ones((1, WIDTH), dtype=bool)
    held[0, [COUPLING, OFFSET, SLOPE + 1, SLOPE + 2]] = False
    start = fit.theta[group : group + 1].copy()
    start[0, COUPLING] = abs(value - centre)
    start[0, [ASYMMETRY, DISTANCE]] = 0.0
    own = fit_joint(near, start, held, delta=fit.delta_rad_s[rows])
    if not own.converged[0]:
        return None
    found = coupling_departures(near, own)
    factor = max(1.0, math.sqrt(found.statistic / max(found.freedom, 1)))
    edge = axis_edge(own, 0, side, factor)
    return AxisEdge(value_rad_s=edge.value_rad_s, u_rad_s=edge.u_rad_s, local=True)
