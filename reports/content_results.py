"""The tables of results: limits, region, hysteresis, points, free-running captures, budgets."""

from __future__ import annotations

from collections.abc import Sequence

from fit.records import FreeRun, Measurement, RegionLevel
from reports.content_method import rule_text
from reports.content_model import Bullets, Cell, Column, Table, cells, columns
from reports.look import DIRECTION_WORDS
from reports.numbers import (
    NOT_DETERMINED,
    angle_text,
    bounds_text,
    interval_text,
    one_line,
    paper_text,
    plain_number,
    probability_text,
    quantity_text,
    value_text,
    with_unit,
)
from reports.records import BudgetLine, Limit, PointResult, SweepRun, Verdict
from reports.rows import Row, longest_episode, usable_rows
from rig.quantities import Quantity

DASH = "–"


def limit_table(run: SweepRun) -> Table:
    """Return one row a limit: limit, rule, value with U and k, probability met, verdict."""
    heads = ("Quantity", "Limit", "Value ± U", "k", "P met", "Rule", "Verdict")
    return Table(
        caption="Limits and verdicts; U = k u is the expanded uncertainty, P the probability "
        "that the limit is met",
        columns=columns(*heads, shares=(2.3, 1.7, 2.0, 0.5, 0.9, 1.4, 1.3)),
        rows=tuple(_limit_row(verdict) for verdict in run.verdicts),
    )


def _limit_row(verdict: Verdict) -> tuple[Cell, ...]:
    return (
        Cell(text=limit_name(verdict.limit)),
        Cell(text=limit_text(verdict.limit)),
        Cell(text=verdict_value(verdict)),
        Cell(text=plain_number(verdict.coverage_factor) if verdict.expanded_u else DASH),
        Cell(text=probability_text(verdict.probability_met)),
        Cell(text=rule_text(verdict.limit) if verdict.text_value is None else "word"),
        Cell(text=verdict.verdict, verdict=verdict.verdict),
    )


def limit_name(limit: Limit) -> str:
    """Return the name of a limit with the points it applies to."""
    parts = [limit.name or limit.quantity]
    if limit.level is not None:
        parts.append(f"level {plain_number(limit.level)}")
    if limit.direction is not None:
        parts.append(DIRECTION_WORDS.get(limit.direction, limit.direction))
    return ", ".join(one_line(part) for part in parts)


def limit_text(limit: Limit) -> str:
    """Return what is demanded: a range, one bound, or a word."""
    if limit.wanted is not None:
        return f"is {one_line(limit.wanted)}"
    text = interval_text(limit.lower, limit.upper, limit.unit)
    return f"{text}, on the circle" if limit.circular else text


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
            f"{limit_name(verdict.limit)}: {verdict.verdict}; {one_line(_reason(verdict))}"
            for verdict in run.verdicts
        )
    )


def _reason(verdict: Verdict) -> str:
    if verdict.value.value is None and verdict.text_value is None:
        return f"{verdict.reason} {verdict.value.reason or ''}"
    return verdict.reason


def region_table(run: SweepRun) -> Table:
    """Return edges, width and coupling of every level, direction and interval."""
    levels = run.region.levels if run.region else ()
    level_head = _with_axis_unit(run.plan.level.name.capitalize(), run.plan.level.unit)
    heads = (level_head, "Drive", "No.", "Lower edge", "Upper edge", "Width", "Coupling", "Method")
    return Table(
        caption="Locking range by level and direction: edges as drive frequencies, value ± u",
        columns=columns(*heads, shares=(0.8, 0.8, 0.4, 1.5, 1.5, 1.4, 1.4, 1.3)),
        rows=tuple(_region_row(entry) for entry in levels),
    )


def _with_axis_unit(name: str, unit: str) -> str:
    return f"{name} ({unit})" if unit else name


def _region_row(entry: RegionLevel) -> tuple[Cell, ...]:
    return cells(
        plain_number(entry.level),
        _short_way(entry.direction),
        str(entry.interval),
        edge_text(entry.lower_hz),
        edge_text(entry.upper_hz),
        edge_text(entry.width_hz),
        edge_text(entry.coupling_hz),
        one_line(entry.method),
    )


def _short_way(direction: str) -> str:
    return {"up": "rising", "down": "falling"}.get(direction, DASH)


def edge_text(edge: Quantity) -> str:
    """Return an edge, or "open on this side" with the bound that the points give."""
    if edge.value is not None:
        return quantity_text(edge)
    bound = bounds_text(edge)
    return f"open on this side; {bound}" if bound else "open on this side"


def bracket_table(run: SweepRun) -> Table:
    """Return the plausibility check: where the states change between neighbouring points."""
    levels = run.region.levels if run.region else ()
    level_head = _with_axis_unit(run.plan.level.name.capitalize(), run.plan.level.unit)
    return Table(
        caption="Check only: middle between the last locked and the first unlocked point",
        columns=columns(level_head, "Drive", "No.", "Lower", "Upper", shares=(1, 1, 0.5, 2, 2)),
        rows=tuple(
            cells(
                plain_number(entry.level),
                _short_way(entry.direction),
                str(entry.interval),
                quantity_text(entry.bracket_lower_hz),
                quantity_text(entry.bracket_upper_hz),
            )
            for entry in levels
        ),
    )


def law_table(run: SweepRun) -> Table:
    """Return what holds over all levels: coupling per level, power, centre and its slope."""
    region = run.region
    rows: tuple[tuple[str, Quantity], ...] = ()
    if region is not None:
        rows = (
            ("Coupling per unit of amplitude", region.coupling_per_level),
            ("Power of the amplitude", region.level_power),
            ("Centre of the range (drive frequency)", region.centre_hz),
            ("Slope of the centre with amplitude", region.centre_slope_hz),
        )
    return Table(
        caption="Laws over the levels; coupling = factor × amplitude to a power",
        columns=columns("Quantity", "Value ± u", shares=(1.0, 1.4)),
        rows=tuple(cells(name, quantity_text(value)) for name, value in rows),
    )


def hysteresis_table(run: SweepRun) -> Table:
    """Return the differences of the edges between rising and falling drive, with their test."""
    entries = run.region.hysteresis if run.region else ()
    heads = ("Level", "Edge", "Rising minus falling", "p", "Remark")
    return Table(
        caption="Hysteresis: difference of an edge between the sweep directions, value ± u; p is "
        "the probability of so large a difference without hysteresis",
        columns=columns(*heads, shares=(0.7, 0.7, 1.6, 0.9, 2.0)),
        rows=tuple(
            cells(
                plain_number(entry.level),
                entry.edge,
                quantity_text(entry.value_hz),
                probability_text(entry.p_value),
                one_line(entry.note) or DASH,
            )
            for entry in entries
        ),
    )


def tests_table(run: SweepRun) -> Table:
    """Return the tests of the phase equation over the sweep."""
    tests = run.region.tests if run.region else ()
    heads = ("Test", "Statistic", "Threshold", "Outcome", "Meaning")
    return Table(
        caption="Tests of the phase equation over the sweep",
        columns=columns(*heads, numeric=(1, 2), shares=(1.6, 0.9, 0.9, 1.0, 2.6)),
        rows=tuple(
            cells(
                one_line(test.name),
                plain_number(test.statistic, 4),
                plain_number(test.threshold, 4),
                "rejected" if test.fired else "not rejected",
                one_line(test.meaning) or DASH,
            )
            for test in tests
        ),
    )


def points_table(run: SweepRun, drawn: dict[int, str]) -> Table:
    """Return one row a usable point; ``drawn`` maps its index to the key of its picture."""
    heads = ("Capture", "Drive (Hz)", "Level", "Drive", "State", "Slips", "Mean rate (Hz)",
             "Phase offset", "Jitter")  # fmt: skip
    return Table(
        caption="All usable points, value ± u; the capture's name leads to its picture",
        columns=columns(*heads, shares=(2.3, 1.1, 0.7, 0.8, 1.2, 0.6, 1.6, 1.4, 1.2)),
        rows=tuple(_point_row(row, drawn.get(row.index)) for row in usable_rows(run)),
    )


def _point_row(row: Row, target: str | None) -> tuple[Cell, ...]:
    measurement = row.measurement
    return (
        Cell(text=row.point.file, target=target),
        *cells(
            plain_number(row.drive_hz),
            plain_number(row.point.level),
            _short_way(row.point.direction),
            row.state,
            str(len(measurement.slips)),
            _bare(measurement.mean_rate_hz),
            _offset(measurement),
            short_text(measurement.jitter_rad),
        ),
    )


def _bare(quantity: Quantity) -> str:
    """Return value ± u without the unit, which the heading gives."""
    return DASH if quantity.value is None else value_text(quantity.value, quantity.u, "")


def short_text(quantity: Quantity) -> str:
    """Return a quantity, a dash where it is undetermined (its reason stands elsewhere)."""
    return DASH if quantity.value is None else paper_text(quantity)


def _offset(measurement: Measurement) -> str:
    episode = longest_episode(measurement)
    return DASH if episode is None else angle_text(episode.offset_rad, episode.offset_u_rad)


def free_table(run: SweepRun) -> Table:
    """Return the free-running captures: frequency, drift, phase diffusion, noise type."""
    heads = ("Capture", "Oscillator", "Length (s)", "Frequency", "Drift", "Phase diffusion",
             "Noise type")  # fmt: skip
    return Table(
        caption="Each oscillator alone, value ± u",
        columns=columns(*heads, numeric=(2,), shares=(1.6, 0.9, 0.7, 1.5, 1.5, 1.5, 1.1)),
        rows=tuple(_free_row(free) for free in run.free_runs),
    )


def _free_row(free: FreeRun) -> tuple[Cell, ...]:
    return cells(
        free.file or DASH,
        free.role,
        plain_number(free.duration_s),
        quantity_text(free.frequency_hz),
        quantity_text(free.drift_hz_s),
        quantity_text(free.noise_rad2_s),
        free.noise_type,
    )


def stability_table(free: FreeRun) -> Table:
    """Return the stability of one free-running capture against averaging time."""
    return Table(
        caption=f"Allan deviation of {free.role} in {free.file or 'its capture'}",
        columns=columns("Averaging time (s)", "Deviation", "From", "To", numeric=(0, 1, 2, 3)),
        rows=tuple(cells(*(plain_number(value, 3) for value in row)) for row in free.allan),
    )


def bad_points(run: SweepRun) -> Table:
    """Return the captures that gave no measurement, each with its reason."""
    bad = [point for point in run.points if point.measurement is None]
    return Table(
        caption=f"Captures without a measurement: {len(bad)} of {len(run.points)}",
        columns=columns("Capture", "Status", "Reason", shares=(1.4, 0.7, 3.0)),
        rows=tuple(_bad_row(point) for point in bad),
    )


def _bad_row(point: PointResult) -> tuple[Cell, ...]:
    return cells(point.file, point.status, one_line(point.message) or "no reason recorded")


def budget_table(verdict: Verdict) -> Table:
    """Return the uncertainty budget of one limit's quantity (GUM form)."""
    lines = [_budget_row(line) for line in verdict.budget]
    # The value's own u holds correlations between the sources as well, so it comes first.
    total = verdict.value.u or sum(line.contribution**2 for line in verdict.budget) ** 0.5
    unit = verdict.value.unit
    lines.append(cells("Combined, k = 1", "", "", "", with_unit(_digits(total), unit), ""))
    if verdict.expanded_u is not None:
        factor = f"Expanded, k = {plain_number(verdict.coverage_factor)}"
        lines.append(cells(factor, "", "", "", with_unit(_digits(verdict.expanded_u), unit), ""))
    heads = ("Source", "u", "Distribution", "Sensitivity", "Contribution", "Remark")
    return Table(
        caption=f"Uncertainty budget: {limit_name(verdict.limit)}",
        columns=columns(*heads, shares=(1.7, 1.1, 1.1, 0.9, 1.2, 1.6)),
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
    return plain_number(value, 2)


def provenance_columns() -> tuple[Column, ...]:
    """Return the columns of the table of inputs."""
    return columns("Input", "Size (bytes)", "SHA-256", numeric=(1,), shares=(1.5, 0.7, 3.2))


def inputs_table(run: SweepRun) -> Table:
    """Return every input with its size and digest."""
    return Table(
        caption="Inputs and their digests",
        columns=provenance_columns(),
        rows=tuple(
            cells(entry.file, str(entry.size_bytes), entry.sha256)
            for entry in run.provenance.inputs
        ),
    )


def named_rows(caption: str, heads: tuple[str, str], pairs: Sequence[tuple[str, str]]) -> Table:
    """Return a table of two columns of text."""
    return Table(
        caption=caption, columns=columns(*heads), rows=tuple(cells(*pair) for pair in pairs)
    )
