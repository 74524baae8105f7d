"""What the phase equation itself leaves out of an edge, added to its uncertainty.

The equation is the first-order average of an oscillator over a cycle; the terms left out are
of relative order K / w0, coupling over frequency. A circuit with K / w0 = 0.004 was found to
have one edge 0.5 % and the other 0.1 % of the half-width away from where the likelihood puts
them, noise apart. Each edge gets a rectangular allowance of that half-width, K^2 / w0.
"""

from __future__ import annotations

import math
from dataclasses import replace

from fit.records import RegionLevel
from rig.quantities import Quantity

NORMAL_95 = 1.959963984540054  # two-sided 95 % quantile of the normal distribution
# The axis is a frequency of oscillation only when it lies well above the coupling; psi of a
# mutual pair, or an axis given as a difference, says nothing about w0.
LEAST_RATIO = 10.0


def allow_for_averaging(level: RegionLevel, order_m: int) -> RegionLevel:
    """Return a level whose edges and width allow for what averaging leaves out.

    Parameters
    ----------
    level : RegionLevel with the uncertainties of its points alone
    order_m : int

    Notes
    -----
    The allowance is common to the sweep directions: hysteresis is worked out before it.
    """
    allowance = _allowance_hz(level, order_m)
    if allowance == 0.0:
        return level
    note = (
        f"edges allow {allowance:.2g} Hz (standard uncertainty) for terms of relative order "
        "coupling over frequency, which the phase equation leaves out"
    )
    return replace(
        level,
        lower_hz=_widened(level.lower_hz, allowance),
        upper_hz=_widened(level.upper_hz, allowance),
        width_hz=_widened(level.width_hz, math.sqrt(2.0) * allowance),
        notes=(*level.notes, note),
    )


def _allowance_hz(level: RegionLevel, order_m: int) -> float:
    """Return the standard uncertainty in Hz of the axis, 0 where no frequency is known."""
    coupling = level.coupling_hz.value
    edges = [one.value for one in (level.lower_hz, level.upper_hz) if one.value is not None]
    if coupling is None or not edges:
        return 0.0
    half_width = coupling / order_m
    frequency = sum(edges) / len(edges)
    if frequency < LEAST_RATIO * half_width:
        return 0.0
    return half_width**2 / frequency / math.sqrt(3.0)


def _widened(quantity: Quantity, extra: float) -> Quantity:
    """Return a quantity with an independent error added."""
    if quantity.value is None:
        return quantity
    u = math.hypot(quantity.u or 0.0, extra)
    if quantity.low is None:
        return replace(quantity, u=u)
    half = math.hypot(quantity.value - quantity.low, NORMAL_95 * extra)
    return replace(quantity, u=u, low=quantity.value - half, high=quantity.value + half)
