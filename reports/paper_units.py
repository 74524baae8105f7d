"""Verdicts as people read them: angles in degrees, everything else in the unit it is kept in."""

from __future__ import annotations

from dataclasses import replace

from reports.numbers import paper_quantity
from reports.records import BudgetLine, Limit, Verdict
from rig.angles import deg_from_rad


def paper_verdict(verdict: Verdict) -> Verdict:
    """Return a verdict with its limit, value, U and contributions in degrees if in radians."""
    if verdict.limit.unit != "rad" and verdict.value.unit != "rad":
        return verdict
    return replace(
        verdict,
        limit=_paper_limit(verdict.limit),
        value=paper_quantity(verdict.value),
        expanded_u=_deg(verdict.expanded_u),
        budget=tuple(_paper_line(line) for line in verdict.budget),
    )


def _paper_limit(limit: Limit) -> Limit:
    return replace(
        limit,
        unit="deg",
        lower=_deg(limit.lower),
        upper=_deg(limit.upper),
        guard_width=_deg(limit.guard_width),
    )


def _paper_line(line: BudgetLine) -> BudgetLine:
    """Return a line whose contribution is in degrees; a source that is an angle is so too."""
    if line.unit == "rad":
        return replace(line, u=deg_from_rad(line.u), unit="deg",
                       contribution=deg_from_rad(line.contribution))  # fmt: skip
    return replace(
        line,
        sensitivity=deg_from_rad(line.sensitivity),
        contribution=deg_from_rad(line.contribution),
    )


def _deg(angle_rad: float | None) -> float | None:
    return None if angle_rad is None else deg_from_rad(angle_rad)
