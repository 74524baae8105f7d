"""Hysteresis of the edges: what the sweep direction changes, and what it may change by itself.

Names (Leonov, Kuznetsov, Yuldashev and Yuldashev 2015 for the rigorous definitions): an edge
that the sweep crosses from outside is where lock is gained, the PULL-IN edge; one that it
crosses from inside is where lock is lost, the HOLD-IN edge. Sweeping up, the lower edge is
pull-in and the upper hold-in; sweeping down it is the other way round. So up minus down is
pull-in minus hold-in at the lower edge and hold-in minus pull-in at the upper one: real
hysteresis, which keeps lock too long, makes both positive.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

from fit.quantiles import student_above
from fit.records import Hysteresis, RegionLevel
from rig.angles import TURN_RAD, rad_s_from_hz
from rig.errors import FitError
from rig.quantities import Quantity, undetermined

# A false alarm once in a hundred; at 5 % first-order sweeps gave 7.5-10 %.
SIZE = 0.01
MOST_FREEDOM = 1e5  # Student's law is the normal one from there on
FREEDOM_RATIO = 1.01
# First zero of the Airy function Ai is -2.33810741.
AIRY_ZERO = 2.33810741045977
_NAMES = {
    "lower": "up: pull-in edge (lock gained), down: hold-in edge (lock lost)",
    "upper": "up: hold-in edge (lock lost), down: pull-in edge (lock gained)",
}


@dataclass(frozen=True, slots=True, kw_only=True)
class SweepMotion:
    """How the drive moved while it was swept: ``rate_hz_s`` of a ramp, ``step_hz`` of steps.

    Both 0: every point was a capture of its own that had settled.
    """

    rate_hz_s: float = 0.0
    step_hz: float = 0.0
    order_m: int = 1

    def __post_init__(self) -> None:
        if not (self.rate_hz_s >= 0 and self.step_hz >= 0 and self.order_m >= 1):
            raise FitError(
                "sweep motion: rate and step must be at least 0 and m at least 1, got "
                f"{self.rate_hz_s:g} Hz/s, {self.step_hz:g} Hz, {self.order_m}"
            )


def ramp_delay_hz(rate_hz_s: float, coupling_hz: float) -> float:
    """Return by how much a slow ramp loses lock late when there is no noise, Hz of detuning.

    2.338 (2/K)^(1/3) r^(2/3) with r and K in rad/s: the saddle-node is passed along the Airy
    function, whose first zero is the constant.

    Parameters
    ----------
    rate_hz_s : float, Hz/s, rate of the detuning, >= 0
    coupling_hz : float, Hz, > 0

    Raises
    ------
    FitError
        If the coupling is not above 0 or the rate is negative.

    Notes
    -----
    Good to 2 % at r = 0.01 K^2 and to 0.1 % at 1e-4 K^2. Noise makes the loss of lock EARLY by
    far more than this, so it bounds hysteresis and never corrects an edge.

    References
    ----------
    Jung, Gray, Roy and Mandel 1990, Phys. Rev. Lett. 65, 1873 (exponent, recalled).
    """
    if not coupling_hz > 0 or rate_hz_s < 0:
        raise FitError(
            f"ramp delay: coupling must be above 0 and the rate not negative, got "
            f"{coupling_hz:g} Hz and {rate_hz_s:g} Hz/s"
        )
    coupling = rad_s_from_hz(coupling_hz)
    rate = rad_s_from_hz(rate_hz_s)
    return AIRY_ZERO * math.cbrt(2.0 / coupling) * math.cbrt(rate) ** 2 / TURN_RAD


def edge_hysteresis(
    levels: Sequence[RegionLevel], motion: SweepMotion | None = None
) -> list[Hysteresis]:
    """Return up minus down of each edge at each level that was swept both ways.

    Parameters
    ----------
    levels : sequence of RegionLevel
    motion : SweepMotion, optional
        How the drive moved; what that alone may do to an edge is allowed for.

    Returns
    -------
    list of Hysteresis
        ``p_value`` is two-sided against zero (against the allowance where there is one);
        hysteresis is called real below 0.01, as the note says.
    """
    rules = motion or SweepMotion()
    found: list[Hysteresis] = []
    for up in levels:
        for down in levels:
            if (up.level, up.interval) != (down.level, down.interval):
                continue
            if (up.direction, down.direction) == ("up", "down"):
                found.append(_difference(up, down, "lower", rules))
                found.append(_difference(up, down, "upper", rules))
    return found


def _difference(
    up: RegionLevel, down: RegionLevel, edge: Literal["lower", "upper"], motion: SweepMotion
) -> Hysteresis:
    """Return one edge's difference with its test."""
    first, second = ((one.lower_hz if edge == "lower" else one.upper_hz) for one in (up, down))
    if first.value is None or second.value is None:
        missing = undetermined("Hz", f"the {edge} edge is not known in both directions")
        return Hysteresis(level=up.level, edge=edge, value_hz=missing, note=_NAMES[edge])
    u = math.hypot(first.u or 0.0, second.u or 0.0)
    value = first.value - second.value
    allowed = _allowance_hz(up, down, motion)
    beyond = max(abs(value) - allowed, 0.0)
    p = _two_sided(beyond / u, _freedom((first, second))) if u > 0 else None
    return Hysteresis(
        level=up.level,
        edge=edge,
        value_hz=Quantity(value=value, u=u, unit="Hz"),
        p_value=p,
        note=f"{_NAMES[edge]}; {_verdict(value, p)}{_allowance_text(allowed)}",
    )


def _freedom(edges: Sequence[Quantity]) -> float:
    """Return the degrees of freedom of a difference (Welch and Satterthwaite).

    Those of an edge are told by its 95 % interval: where the spread of the free frequency from
    point to point was estimated from few points, it is Student's, wider than 1.96 u.
    """
    whole = sum((edge.u or 0.0) ** 2 for edge in edges)
    parts = sum((edge.u or 0.0) ** 4 / _edge_freedom(edge) for edge in edges)
    return whole**2 / parts if parts > 0 else MOST_FREEDOM


def _edge_freedom(edge: Quantity) -> float:
    if edge.low is None or edge.high is None or not edge.u:
        return MOST_FREEDOM
    quantile = 0.5 * (edge.high - edge.low) / edge.u
    low, high = 1.0, MOST_FREEDOM
    while high / low > FREEDOM_RATIO:
        middle = math.sqrt(low * high)
        low, high = (middle, high) if student_above(middle, 0.025) > quantile else (low, middle)
    return math.sqrt(low * high)


def _two_sided(ratio: float, freedom: float) -> float:
    """Return the probability that Student's t lies further from zero than a ratio."""
    from scipy.special import stdtr

    return float(2.0 * stdtr(min(freedom, MOST_FREEDOM), -ratio))


def _allowance_hz(up: RegionLevel, down: RegionLevel, motion: SweepMotion) -> float:
    """Return what ramp and steps may do to a difference by themselves, Hz of drive."""
    couplings = [one.coupling_hz.value for one in (up, down) if one.coupling_hz.value is not None]
    late = 0.0
    if motion.rate_hz_s > 0 and couplings and min(couplings) > 0:
        detuning_rate = motion.order_m * motion.rate_hz_s
        late = ramp_delay_hz(detuning_rate, min(couplings)) / motion.order_m
    return late + motion.step_hz


def _allowance_text(allowed_hz: float) -> str:
    if allowed_hz == 0.0:
        return ""
    return f"; {allowed_hz:.2g} Hz allowed for the motion of the drive"


def _verdict(value: float, p: float | None) -> str:
    if p is None or p >= SIZE:
        return f"no hysteresis shown at p < {SIZE:g}"
    if value > 0:
        return f"hysteresis at p < {SIZE:g}: lock is held further than it is gained"
    return (
        f"differs at p < {SIZE:g}, but lock is gained further out than it is held: "
        "look for drift of the free frequency between the sweeps"
    )
