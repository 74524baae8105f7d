"""Uncertainty budgets: where the uncertainty of a judged value comes from, and what is left out.

Each budget is a table as the GUM wants it: source, standard uncertainty, distribution,
sensitivity coefficient, contribution. The sources are independent of each other, so their
contributions add as squares. An estimate whose stated uncertainty holds a source already has
that part taken out of its statistical line, so that nothing counts twice.

References
----------
JCGM 100:2008 (GUM), 5.1.2 and 5.2.2 (combined uncertainty), 4.3.7 (rectangular bounds).
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Literal

from reports.decision import belief_of
from reports.records import BudgetLine
from rig.quantities import Quantity

Kind = Literal[
    "phase", "edge", "width", "law", "rate", "frequency", "free", "time", "amplitude", "plain"
]


@dataclass(frozen=True, slots=True, kw_only=True)
class PhaseSource:
    """One systematic phase of a channel: name, channel, u in rad, distribution, sensitivity."""

    name: str
    channel: str
    u_rad: float
    distribution: str
    sensitivity: float


@dataclass(frozen=True, slots=True, kw_only=True)
class GainSource:
    """Relative standard uncertainty of a channel's sensitivity."""

    channel: str
    u_rel: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Repeats:
    """Scatter of values taken at one setting: standard deviation, values, degrees of freedom."""

    scatter: float
    count: int
    freedom: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Facts:
    """What is known about the sources that bear on one value.

    ``phases_within`` and ``gains_within`` say that the value's own u holds them already.
    ``clock_rel`` is the relative uncertainty of the sampling clock. ``drift_hz`` is the half
    range of the free frequency over the sweep; ``drift_weight`` what one hertz of it does to
    the value. ``reference_u_hz`` is the uncertainty of one measured drive frequency.
    ``model_doubt`` says what is doubtful about the equation behind the value.
    """

    phases: tuple[PhaseSource, ...] = ()
    phases_within: bool = False
    gains: tuple[GainSource, ...] = ()
    gains_within: bool = True
    clock_rel: float | None = None
    drift_hz: float | None = None
    drift_weight: float = 1.0
    reference_u_hz: float | None = None
    repeats: Repeats | None = None
    model_doubt: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Budget:
    """A value with its combined uncertainty, the lines that make it up, and what is missing."""

    value: Quantity
    lines: tuple[BudgetLine, ...]
    left_out: tuple[str, ...]


def make_budget(kind: Kind, value: Quantity, facts: Facts) -> Budget:
    """Return the budget of one value and the value with its combined uncertainty.

    Parameters
    ----------
    kind : what the value is, which decides the sources that bear on it
    value : Quantity as estimated
    facts : Facts

    Returns
    -------
    Budget; without a value or an uncertainty there are no lines, only what is left out
    """
    if value.value is None:
        return Budget(value=value, lines=(), left_out=())
    found = [source(value, facts) for source in SOURCES[kind]]
    lines = [line for part in found for line in part if isinstance(line, BudgetLine)]
    left_out = [text for part in found for text in part if isinstance(text, str)]
    if facts.model_doubt:
        left_out.append(facts.model_doubt)
    statistical = _statistical(value, facts)
    if statistical is None:
        left_out.insert(0, "statistical: the estimator states no uncertainty")
        return Budget(value=value, lines=tuple(lines), left_out=tuple(left_out))
    return Budget(
        value=_widened(value, statistical, lines),
        lines=(statistical, *lines),
        left_out=tuple(left_out),
    )


def combined_u(
    contributions: Sequence[float], correlations: Mapping[tuple[int, int], float] | None = None
) -> float:
    """Return the combined standard uncertainty of contributions c_i u_i (GUM eq. 16).

    u_c^2 = sum_i (c_i u_i)^2 + 2 sum_{i<j} r_ij (c_i u_i) (c_j u_j)

    Parameters
    ----------
    contributions : sequence of float, c_i u_i with the sign of c_i, all in one unit
    correlations : mapping (i, j) -> r_ij, optional; pairs that are not named are independent

    Raises
    ------
    ValueError
        If a correlation lies outside -1 ... 1.
    """
    total = math.fsum(part**2 for part in contributions)
    for (i, j), r in (correlations or {}).items():
        if not -1.0 <= r <= 1.0:
            raise ValueError(f"correlation of inputs {i} and {j} must lie in -1 ... 1, got {r}")
        total += 2.0 * r * contributions[i] * contributions[j]
    return math.sqrt(max(total, 0.0))


def rectangular_u(half_width: float) -> float:
    """Return the standard uncertainty of a rectangular distribution (GUM 4.3.7)."""
    return half_width / math.sqrt(3.0)


# ---- sources: each gives lines, or texts that say what is left out ----------------------

Told = list[BudgetLine | str]


def _phases(value: Quantity, facts: Facts) -> Told:
    told: Told = [_line_of_phase(part) for part in facts.phases if part.u_rad > 0.0]
    known = {part.name for part in facts.phases if part.u_rad > 0.0}
    told += [f"{name}: no uncertainty stated" for name in PHASE_SOURCES if name not in known]
    return told


def _line_of_phase(part: PhaseSource) -> BudgetLine:
    return BudgetLine(
        source=f"{part.name}, channel '{part.channel}'",
        u=part.u_rad,
        unit="rad",
        distribution=part.distribution,
        sensitivity=part.sensitivity,
        contribution=abs(part.sensitivity) * part.u_rad,
    )


def _clock(value: Quantity, facts: Facts) -> Told:
    if facts.clock_rel is None:
        return ["clock and sampling rate: no uncertainty stated (clock_u_ppm)"]
    span = abs(value.value or 0.0)
    line = BudgetLine(
        source="clock, sampling rate",
        u=facts.clock_rel,
        unit="1",
        distribution="normal",
        sensitivity=span,
        contribution=span * facts.clock_rel,
        note="acts on all frequencies and times alike",
    )
    return [line]


def _reference(value: Quantity, facts: Facts) -> Told:
    if facts.reference_u_hz is None:
        return ["reference frequency: not measured"]
    line = BudgetLine(
        source="reference frequency",
        u=facts.reference_u_hz,
        unit="Hz",
        distribution="normal",
        sensitivity=1.0,
        contribution=facts.reference_u_hz,
        note="of one point, taken as common to all",
    )
    return [line]


def _drift(value: Quantity, facts: Facts) -> Told:
    if facts.drift_hz is None:
        return ["drift during the sweep: fewer than two free-running captures of the driven"]
    u = rectangular_u(facts.drift_hz)
    line = BudgetLine(
        source="drift during the sweep",
        u=u,
        unit="Hz",
        distribution="rectangular",
        sensitivity=facts.drift_weight,
        contribution=abs(facts.drift_weight) * u,
        note="half range of the free-running captures",
    )
    return [line]


def _repeatability(value: Quantity, facts: Facts) -> Told:
    if facts.repeats is None:
        return ["repeatability: no point was repeated"]
    beyond = math.sqrt(max(facts.repeats.scatter**2 - own_u(value, facts) ** 2, 0.0))
    line = BudgetLine(
        source="repeatability",
        u=beyond,
        unit=value.unit,
        distribution="normal",
        sensitivity=1.0,
        contribution=beyond,
        note=f"scatter of {facts.repeats.count} values beyond the statistical part, "
        f"degrees of freedom {facts.repeats.freedom}",
    )
    return [line]


def _fit_repeatability(value: Quantity, facts: Facts) -> Told:
    return ["repeatability of a whole sweep: one sweep was made"]


def _gains(value: Quantity, facts: Facts) -> Told:
    size = abs(value.value or 0.0)
    told: Told = [
        BudgetLine(
            source=f"sensitivity, channel '{part.channel}'",
            u=part.u_rel,
            unit="1",
            distribution="normal",
            sensitivity=size,
            contribution=size * part.u_rel,
            note="relative",
        )
        for part in facts.gains
        if part.u_rel > 0.0
    ]
    silent = [part.channel for part in facts.gains if not part.u_rel > 0.0]
    told += [f"sensitivity, channel '{name}': no uncertainty stated" for name in silent]
    return told


Source = Callable[[Quantity, Facts], Told]

PHASE_SOURCES = ("sensor phase", "skew", "AC coupling")

SOURCES: dict[Kind, tuple[Source, ...]] = {
    "phase": (_phases, _repeatability),
    "edge": (_clock, _reference, _drift, _fit_repeatability),
    "width": (_clock, _drift, _fit_repeatability),
    "law": (_fit_repeatability,),
    "rate": (_clock, _repeatability),
    "frequency": (_clock, _repeatability),
    "free": (_clock, _drift),
    "time": (_clock, _repeatability),
    "amplitude": (_gains, _repeatability),
    "plain": (_repeatability,),
}


# ---- putting together ---------------------------------------------------------------------


def own_u(value: Quantity, facts: Facts) -> float:
    """Return the statistical part of an estimate's uncertainty: less what else it holds.

    Parameters
    ----------
    value : Quantity with a value and an uncertainty or interval
    facts : Facts, which say what the uncertainty holds besides the statistical part
    """
    belief = belief_of(value)
    if belief is None:
        return 0.0
    held = 0.0
    if facts.phases_within:
        held += math.fsum((part.sensitivity * part.u_rad) ** 2 for part in facts.phases)
    if facts.gains_within:
        held += math.fsum((belief.value * part.u_rel) ** 2 for part in facts.gains)
    return math.sqrt(max(max(belief.down, belief.up) ** 2 - held, 0.0))


def _statistical(value: Quantity, facts: Facts) -> BudgetLine | None:
    """Return the first line of a budget: what the estimator itself says."""
    belief = belief_of(value)
    if belief is None:
        return None
    own = own_u(value, facts)
    note = "" if belief.down == belief.up else "larger side of an interval that is not symmetric"
    return BudgetLine(
        source="statistical",
        u=own,
        unit=value.unit,
        distribution="normal",
        sensitivity=1.0,
        contribution=own,
        note=note,
    )


def _widened(value: Quantity, statistical: BudgetLine, lines: Sequence[BudgetLine]) -> Quantity:
    """Return the value with its combined uncertainty; an interval is widened by as much."""
    belief = belief_of(value)
    assert belief is not None
    total = combined_u([statistical.contribution, *(line.contribution for line in lines)])
    stated = max(belief.down, belief.up)
    grown = math.sqrt(max(total**2 - stated**2, 0.0))
    if grown == 0.0:
        return value
    widened = replace(value, u=math.hypot(value.u, grown) if value.u is not None else None)
    if value.low is None or value.high is None:
        return widened
    # each end moves out as the standard deviation of its side grows
    low = value.low - (belief.value - value.low) * _growth(belief.down, grown)
    high = value.high + (value.high - belief.value) * _growth(belief.up, grown)
    return replace(widened, low=low, high=high)


def _growth(side: float, grown: float) -> float:
    return math.hypot(side, grown) / side - 1.0 if side > 0.0 else 0.0
