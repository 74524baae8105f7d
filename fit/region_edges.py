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
    SLOPE,
    WIDTH,
    JointData,
    JointFit,
    fit_joint,
)
from fit.region_tests import coupling_departures
from rig.arrays import FloatArray

Side = Literal["lower", "upper"]
# Points that tell of an edge by themselves: detuning between these parts of the edge's.
WINDOWS = ((0.8, 1.3), (0.6, 1.6))
LEAST_NEAR = 4
ROUNDS = 4
SETTLED = 0.02  # a window has settled when the edge moves by less than this part, or u
LEAP = 0.3  # an edge that moves by more than this part of the half-width was not near


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class AxisEdge:
    """One edge on the axis of ``JointData.drive_rad_s`` with its standard error, rad/s.

    ``local``: from the points near it; ``states``: from locked and unlocked alone.
    """

    value_rad_s: float
    u_rad_s: float
    local: bool = False
    states: bool = False


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


def local_edge(
    data: JointData, fit: JointFit, group: int, side: Side, guess_rad_s: float | None = None
) -> AxisEdge | None:
    """Return one edge from the points near it alone, None when they do not give it.

    Near a saddle-node every oscillator obeys the same equation, up to its curvature: centre
    and coupling are both free, so that the place of the edge and the curvature are, and only
    the sum that is the edge is used. The window is centred anew on what was found. The error
    is widened by the scatter of the points.

    Parameters
    ----------
    data : JointData
    fit : JointFit
    group : int
    side : "lower" or "upper"
    guess_rad_s : float, optional
        Where to look first, such as the middle of the bracket; the joint fit's edge if None.
    """
    place = axis_edge(fit, group, side).value_rad_s if guess_rad_s is None else guess_rad_s
    for window in WINDOWS:
        looked, found = place, None
        for _ in range(ROUNDS):
            found = _window_edge(data, fit, group, looked, window)
            if found is None:
                break
            moved = abs(found.value_rad_s - looked)
            looked = found.value_rad_s
            if moved < max(found.u_rad_s, SETTLED * abs(looked - float(fit.theta[group, CENTRE]))):
                return found
    return None


def _window_edge(
    data: JointData, fit: JointFit, group: int, place: float, window: tuple[float, float]
) -> AxisEdge | None:
    """Return the edge from the points in one window about a place, in parts of its distance."""
    centre = float(fit.theta[group, CENTRE])
    if place == centre:
        return None
    part = (data.drive_rad_s - centre) / (place - centre)
    rows = np.flatnonzero((data.group == group) & (part > window[0]) & (part < window[1]))
    inside = int(np.sum(part[rows] < 1.0))
    if rows.size < LEAST_NEAR or inside in (0, rows.size):
        return None
    near = data.of_records(rows, [rows.size])
    held = np.zeros((1, WIDTH), dtype=bool)
    held[0, [SLOPE, ASYMMETRY, DISTANCE]] = True
    start = fit.theta[group : group + 1].copy()
    start[0, COUPLING] = abs(place - centre)
    start[0, [ASYMMETRY, DISTANCE]] = 0.0
    own = fit_joint(near, start, held, delta=fit.delta_rad_s[rows])
    if not own.converged[0]:
        return None
    found = coupling_departures(near, own)
    factor = max(1.0, math.sqrt(found.statistic / max(found.freedom, 1)))
    edge = axis_edge(own, 0, "lower" if place < centre else "upper", factor)
    reach = abs(place - centre)
    if not (abs(edge.value_rad_s - place) < LEAP * reach and edge.u_rad_s < LEAP * reach):
        return None
    return AxisEdge(value_rad_s=edge.value_rad_s, u_rad_s=edge.u_rad_s, local=True)
