"""Laws over the levels of a region: coupling against amplitude, centre against level."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from fit.records import RegionLevel
from rig.errors import FitError
from rig.quantities import Quantity, undetermined

Row = tuple[float, float, float]  # amplitude, value, standard uncertainty


def coupling_law(levels: Sequence[RegionLevel]) -> tuple[Quantity, Quantity]:
    """Return (kappa, p) of coupling_hz = kappa * amplitude ** p.

    kappa is the weighted mean of coupling / amplitude (p = 1); p is fitted apart on
    logarithms, so that p = 1 can be tested and is not assumed.

    Parameters
    ----------
    levels : sequence of RegionLevel; those without a coupling are left out
    """
    rows = [
        (level.amplitude, level.coupling_hz.value, level.coupling_hz.u or 0.0)
        for level in levels
        if level.coupling_hz.value is not None and level.coupling_hz.value > 0
    ]
    if not rows:
        reason = "no level of the region has a coupling"
        return undetermined("Hz per unit amplitude", reason), undetermined("1", reason)
    ratios = [(k / a, _floored(u / a, k / a)) for a, k, u in rows]
    kappa, kappa_u = _weighted_mean(ratios)
    per_level = Quantity(value=kappa, u=kappa_u, unit="Hz per unit amplitude")
    return per_level, _power(rows)


def pooled(rows: Sequence[Row]) -> tuple[Quantity, Quantity]:
    """Return (mean, slope with amplitude squared) of a value over levels.

    The mean's uncertainty is widened by the spread between levels where that is larger than
    the stated uncertainties explain (Birge ratio).

    Parameters
    ----------
    rows : sequence of (amplitude, value in Hz, its standard uncertainty)
    """
    if not rows:
        reason = "no level of the region has both edges"
        return undetermined("Hz", reason), undetermined("Hz per unit amplitude squared", reason)
    mean, u = _weighted_mean([(value, _floored(u, value)) for _, value, u in rows])
    unit = "Hz per unit amplitude squared"
    if len({amplitude for amplitude, _, _ in rows}) < 2:
        return Quantity(value=mean, u=u, unit="Hz"), undetermined(unit, "only one level")
    slope, slope_u = _weighted_slope([(a**2, value, _floored(s, value)) for a, value, s in rows])
    return Quantity(value=mean, u=u, unit="Hz"), Quantity(value=slope, u=slope_u, unit=unit)


def _power(rows: Sequence[Row]) -> Quantity:
    """Return the exponent of a power law through the rows."""
    if len({amplitude for amplitude, _, _ in rows}) < 2:
        return undetermined("1", "only one level; a power law needs two")
    logs = [(math.log(a), math.log(k), _floored(u / k, 1.0)) for a, k, u in rows]
    slope, slope_u = _weighted_slope(logs)
    return Quantity(value=slope, u=slope_u, unit="1")


def _floored(u: float, value: float) -> float:
    """Return u, kept above rounding so that a weight stays finite."""
    return max(u, 1e-12 * abs(value), 1e-300)


def _weighted_mean(pairs: Sequence[tuple[float, float]]) -> tuple[float, float]:
    values = np.array([value for value, _ in pairs])
    weights = np.array([1.0 / u**2 for _, u in pairs])
    mean = float(np.sum(weights * values) / np.sum(weights))
    u = 1.0 / math.sqrt(float(np.sum(weights)))
    if len(pairs) > 1:
        birge = math.sqrt(float(np.sum(weights * (values - mean) ** 2)) / (len(pairs) - 1))
        u *= max(1.0, birge)
    return mean, u


def _weighted_slope(rows: Sequence[Row]) -> tuple[float, float]:
    """Return the slope of a straight line and its uncertainty, widened by the Birge ratio."""
    x, y, u = (np.array(column) for column in zip(*rows, strict=True))
    design = np.column_stack([np.ones_like(x), x]) / u[:, None]
    solved, *_ = np.linalg.lstsq(design, y / u, rcond=None)
    covariance = np.linalg.pinv(design.T @ design)
    slope_u = math.sqrt(max(float(covariance[1, 1]), 0.0))
    if len(rows) > 2:
        chi2 = float(np.sum((y / u - design @ solved) ** 2))
        slope_u *= max(1.0, math.sqrt(chi2 / (len(rows) - 2)))
    return float(solved[1]), slope_u


def amplitude_of_level(level: float, kind: str) -> float:
    """Return the amplitude a drive level stands for, in units of its own reference.

    amplitude: the level; power: its square root; decibel: 10 ** (level / 20).

    Parameters
    ----------
    level : float
    kind : "amplitude", "power" or "decibel"

    Raises
    ------
    FitError
        If the kind is another, or an amplitude or power is not above 0.
    """
    if kind == "decibel":
        return math.pow(10.0, level / 20.0)
    if not level > 0:
        raise FitError(f"level of kind {kind} must be above 0, got {level:g}")
    if kind == "amplitude":
        return level
    if kind == "power":
        return math.sqrt(level)
    raise FitError(f"level kind '{kind}' is not one of amplitude, power, decibel")
