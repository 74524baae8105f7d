"""Tables of limits: what was demanded, what was found, the verdict with its ground, the budget."""

from __future__ import annotations

import math

from reports.content_model import DASH, Bullets, Cell, Table, cells, columns
from reports.decision import rule_text
from reports.look import DIRECTION_WORDS
from reports.numbers import (
    NOT_DETERMINED,
    interval_text,
    kept_number,
    one_line,
    plain_number,
    probability_text,
    unit_text,
    value_text,
    with_unit,
)
from reports.paper_units import paper_verdict
from reports.records import BudgetLine, Limit, SweepRun, Verdict
from rig.angles import rad_from_deg


def limit_table(run: SweepRun) -> Table:
    """Return one row a limit: verdict, value with U and k, limit, rule, probability met."""
    return Table(
        caption="Limits and verdicts; U = k u is the expanded uncertainty, P the probability "
        "that the limit is met",
        columns=columns("Quantity", "Verdict", "Value ± U", "Limit", "k", "P met", "Rule"),
        rows=tuple(
            _limit_row(paper_verdict(verdict), run.plan.level.unit) for verdict in run.verdicts
        ),
    )


def _limit_row(verdict: Verdict, unit: str) -> tuple[Cell, ...]:
    return (
        Cell(text=limit_name(verdict.limit, unit)),
        Cell(text=verdict.verdict, verdict=verdict.verdict),
        Cell(text=verdict_value(verdict)),
        Cell(text=limit_text(verdict.limit)),
        Cell(text=plain_number(verdict.coverage_factor) if verdict.expanded_u else DASH),
        Cell(text=probability_text(verdict.probability_met)),
        Cell(text=_rule(verdict)),
    )


def _rule(verdict: Verdict) -> str:
    """Return the decision rule; k has a column of its own."""
    if verdict.text_value is not None or verdict.limit.wanted is not None:
        return "word"
    return "guard band w = U" if verdict.limit.rule == "guard" else rule_text(verdict.limit)


def limit_name(limit: Limit, unit: str = "") -> str:
    """Return the name of a limit with the points it applies to; ``unit`` is that of the level."""
    parts = [limit.name or limit.quantity]
    level = with_unit(plain_number(limit.level), one_line(unit))
    if limit.level is not None and f"at {level}" not in parts[0]:
        parts.append(f"level {level}")
    if limit.direction is not None:
        parts.append(DIRECTION_WORDS.get(limit.direction, limit.direction))
    return ", ".join(one_line(part) for part in parts)


def limit_text(limit: Limit) -> str:
    """Return what is demanded: a range, one bound, or a word."""
    if limit.wanted is not None:
        return f"is {one_line(limit.wanted)}"
    text = interval_text(limit.lower, limit.upper, limit.unit)
    if limit.unit == "deg":
        text = _angle_limit(limit, text)
    return f"{text}, on the circle" if limit.circular else text


def _angle_limit(limit: Limit, text: str) -> str:
    """Return a limit on an angle in radians, with degrees behind, where it was stated so.

    A limit is exact: 0.1 rad must not read as a rounded number of degrees.
    """
    ends = [end for end in (limit.lower, limit.upper) if end is not None]
    if all(math.isclose(end, round(end, 3), abs_tol=1e-9) for end in ends):
        return text
    low, high = (None if end is None else rad_from_deg(end) for end in (limit.lower, limit.upper))
    degrees = " to ".join(plain_number(end, 3) for end in ends)
    return f"{interval_text(low, high, 'rad')} ({degrees}°)"


def verdict_value(verdict: Verdict) -> str:
    """Return the judged value with its expanded uncertainty, or the word, or the reason."""
    if verdict.text_value is not None:
        return one_line(verdict.text_value)
    if verdict.value.value is None:
        return NOT_DETERMINED
    return value_text(verdict.value.value, verdict.expanded_u, verdict.value.unit)


def verdict_reasons(run: SweepRun) -> Bullets:
    """Return one line for each verdict that says why it came out so."""
    return Bullets(
        items=tuple(
            f"{limit_name(verdict.limit, run.plan.level.unit)}: {verdict.verdict}; "
            f"{one_line(_reason(verdict))}"
            for verdict in run.verdicts
        )
    )


def _reason(verdict: Verdict) -> str:
    if verdict.value.value is None and verdict.text_value is None:
        return f"{verdict.reason} {verdict.value.reason or ''}"
    return verdict.reason


def budget_table(verdict: Verdict, level_unit: str = "") -> Table:
    """Return the uncertainty budget of one limit's quantity (GUM form)."""
    verdict = paper_verdict(verdict)
    lines = [_budget_row(line) for line in verdict.budget]
    # The value's own u holds correlations between the sources as well, so it comes first.
    total = verdict.value.u or sum(line.contribution**2 for line in verdict.budget) ** 0.5
    unit = verdict.value.unit
    lines.append(cells("Combined, k = 1", "", "", "", _digits(total), ""))
    if verdict.expanded_u is not None:
        factor = f"Expanded, k = {plain_number(verdict.coverage_factor)}"
        lines.append(cells(factor, "", "", "", _digits(verdict.expanded_u), ""))
    contribution = f"Contribution ({unit_text(unit)})" if unit_text(unit) else "Contribution"
    heads = ("Source", "u", "Distribution", "Sensitivity", contribution, "Remark")
    return Table(
        caption=f"Uncertainty budget: {limit_name(verdict.limit, level_unit)}",
        columns=columns(*heads),
        rows=tuple(lines),
    )


def _budget_row(line: BudgetLine) -> tuple[Cell, ...]:
    return cells(
        one_line(line.source),
        with_unit(_digits(line.u), line.unit),
        line.distribution,
        plain_number(line.sensitivity, 3),
        _digits(line.contribution),
        one_line(line.note) or DASH,
    )


def _digits(value: float) -> str:
    """Return an uncertainty in two significant digits."""
    return kept_number(value, 2)
