"""The tables of results: limits, region, hysteresis, points, free-running captures, budgets."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import takewhile

from fit.records import FreeRun, Measurement, RegionLevel
from reports.content_model import Bullets, Cell, Table, cells, columns
from reports.decision import rule_text
from reports.gallery import gallery_rows
from reports.look import DIRECTION_WORDS
from reports.numbers import (
    NOT_DETERMINED,
    bounds_text,
    interval_text,
    one_line,
    paper_quantity,
    plain_number,
    probability_text,
    quantity_text,
    unit_text,
    value_text,
    with_unit,
)
from reports.paper_units import paper_verdict
from reports.records import BudgetLine, Limit, PointResult, SweepRun, Verdict
from reports.rows import Row, longest_episode, usable_rows
from rig.angles import wrap_angle_rad
from rig.quantities import Quantity

DASH = "–"
# Some twenty pages a table; beyond that paper helps nobody and the machine-readable files do.
ROWS_MOST = 500


def limit_table(run: SweepRun) -> Table:
    """Return one row a limit: verdict, value with U and k, limit, rule, probability met."""
    return Table(
        caption="Limits and verdicts; U = k u is the expanded uncertainty, P the probability "
        "that the limit is met",
        columns=columns("Quantity", "Verdict", "Value ± U", "Limit", "k", "P met", "Rule"),
        rows=tuple(_limit_row(paper_verdict(verdict)) for verdict in run.verdicts),
    )


def _limit_row(verdict: Verdict) -> tuple[Cell, ...]:
    return (
        Cell(text=limit_name(verdict.limit)),
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
    methods = {one_line(entry.method) for entry in levels}
    common = f"; method: {methods.pop()}" if len(methods) == 1 else ""
    heads = [_level_head(run), "Drive", "No.", "Lower edge", "Upper edge", "Width", "Coupling"]
    return Table(
        caption=f"Locking range by level and direction: edges as {_edge_axis(run)}, value ± u"
        f"{common}",
        columns=columns(*heads, *([] if common else ["Method"])),
        rows=tuple(
            (*_region_row(entry), *(() if common else cells(one_line(entry.method))))
            for entry in levels
        ),
    )


def region_notes(run: SweepRun) -> list[str]:
    """Return the notes on the region and, with level and direction before them, on its levels."""
    region = run.region
    if region is None:
        return []
    return [
        *region.notes,
        *(
            f"{_level_head(run)} {entry.level:g}, drive {_short_way(entry.direction)}: {note}"
            for entry in region.levels
            for note in entry.notes
        ),
    ]


def _edge_axis(run: SweepRun) -> str:
    if run.plan.coupling == "mutual":
        return "frequency of the reference minus that of the driven, both alone"
    return "drive frequencies"


def _level_head(run: SweepRun) -> str:
    name, unit = one_line(run.plan.level.name), one_line(run.plan.level.unit)
    name = name[:1].upper() + name[1:]
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
    return Table(
        caption="Check only: middle between the last locked and the first unlocked point",
        columns=columns(_level_head(run), "Drive", "No.", "Lower", "Upper"),
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
            ("Coupling per unit amplitude (power 1)", region.coupling_per_level),
            ("Power of the amplitude, fitted apart (1: in proportion)", region.level_power),
            ("Centre of the range (drive frequency)", region.centre_hz),
            ("Slope of the centre with amplitude squared", region.centre_slope_hz),
        )
    return Table(
        caption="Laws over the levels",
        columns=columns("Quantity", "Value ± u"),
        rows=tuple(cells(name, quantity_text(value)) for name, value in rows),
    )


def hysteresis_table(run: SweepRun) -> Table:
    """Return the differences of the edges between rising and falling drive, with their test."""
    entries = run.region.hysteresis if run.region else ()
    heads = (_level_head(run), "Edge", "Rising minus falling", "p", "Remark")
    return Table(
        caption="Hysteresis: difference of an edge between the sweep directions, value ± u; p is "
        "the probability of so large a difference without hysteresis",
        columns=columns(*heads),
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
        columns=columns(*heads, numeric=(1, 2)),
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
    folder = _shared_folder(run)
    heads = ("Capture", "Drive (Hz)", _level_head(run), "Drive", "State", "Slips",
             "Mean rate (Hz)", "Phase offset (°)", "Jitter (°)")  # fmt: skip
    return Table(
        caption=f"Usable points, value ± u{_folder_remark(folder)}",
        columns=columns(*heads),
        rows=tuple(
            (
                Cell(text=row.point.file.removeprefix(folder), target=drawn.get(row.index)),
                *_point_cells(row),
            )
            for row in printed_rows(run)
        ),
    )


def printed_rows(run: SweepRun) -> list[Row]:
    """Return the rows that tables print: all, or the most telling ones of a very long run."""
    return sorted(gallery_rows(run, ROWS_MOST), key=lambda row: row.index)


def rows_remark(run: SweepRun) -> str:
    """Return how many usable points the tables leave to points.csv, "" where none."""
    usable = len(usable_rows(run))
    if usable <= ROWS_MOST:
        return ""
    return (
        f"{ROWS_MOST} of {usable} usable points are printed: undecided and intermittent ones, then "
        "those nearest an edge. All stand in points.csv and results.json beside this report."
    )


def _shared_folder(run: SweepRun) -> str:
    """Return the folder that holds every capture, with its closing slash; "" without one."""
    folders = [point.file.split("/")[:-1] for point in run.points]
    shared = takewhile(lambda names: len(set(names)) == 1, zip(*folders, strict=False))
    return "".join(f"{names[0]}/" for names in shared)


def _folder_remark(folder: str) -> str:
    return f"; captures lie in {folder}" if folder else ""


def _point_cells(row: Row) -> tuple[Cell, ...]:
    measurement = row.measurement
    return cells(
        plain_number(row.drive_hz),
        plain_number(row.point.level),
        _short_way(row.point.direction),
        row.state,
        str(len(measurement.slips)),
        bare_text(measurement.mean_rate_hz),
        _offset(measurement),
        bare_text(measurement.jitter_rad),
    )


def bare_text(quantity: Quantity) -> str:
    """Return value ± u in the unit of paper, which the heading gives; a dash where unknown."""
    shown = paper_quantity(quantity)
    return DASH if shown.value is None else value_text(shown.value, shown.u, "")


def _offset(measurement: Measurement) -> str:
    episode = longest_episode(measurement)
    if episode is None:
        return DASH
    return bare_text(
        Quantity(value=wrap_angle_rad(episode.offset_rad), u=episode.offset_u_rad, unit="rad")
    )


def estimates_table(run: SweepRun) -> Table:
    """Return what single records say of the phase equation, where they can say it."""
    folder = _shared_folder(run)
    rows = [row for row in printed_rows(run) if _says_something(row.measurement)]
    heads = ("Capture", "State", "Detuning (Hz)", "Coupling (Hz)", "Offset (°)",
             "Noise (rad²/s)", "Pull-in (s)", "Equation")  # fmt: skip
    return Table(
        caption="Estimates of single records, value ± u; a dash where a record cannot tell. "
        "Equation: whether the phase equation describes the record",
        columns=columns(*heads),
        rows=tuple(_estimate_row(row, row.point.file.removeprefix(folder)) for row in rows),
    )


def _says_something(measurement: Measurement) -> bool:
    adler = measurement.adler
    known = (adler.detuning_hz, adler.coupling_hz, adler.noise_rad2_s, measurement.pull_in_s)
    return any(quantity.value is not None for quantity in known)


def _estimate_row(row: Row, name: str) -> tuple[Cell, ...]:
    adler = row.measurement.adler
    told = (adler.detuning_hz, adler.coupling_hz, adler.offset_rad, adler.noise_rad2_s)
    return cells(
        name,
        row.state,
        *map(bare_text, told),
        bare_text(row.measurement.pull_in_s),
        {True: "holds", False: "rejected", None: "not tested"}[adler.adequate],
    )


def free_table(run: SweepRun) -> Table:
    """Return the free-running captures: frequency, drift, phase diffusion, noise type."""
    heads = ("Capture", "Oscillator", "Length (s)", "Frequency", "Drift", "Phase diffusion",
             "Noise type")  # fmt: skip
    return Table(
        caption="Each oscillator alone, value ± u",
        columns=columns(*heads, numeric=(2,)),
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
        columns=columns("Capture", "Status", "Reason"),
        rows=tuple(_bad_row(point) for point in bad),
    )


def _bad_row(point: PointResult) -> tuple[Cell, ...]:
    return cells(point.file, point.status, one_line(point.message) or "no reason recorded")


def budget_table(verdict: Verdict) -> Table:
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
        caption=f"Uncertainty budget: {limit_name(verdict.limit)}",
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
    return plain_number(value, 2)


def inputs_table(run: SweepRun) -> Table:
    """Return the inputs with size and digest, of a very long run the first ones."""
    inputs = run.provenance.inputs
    cut = f" (the first {ROWS_MOST} of {len(inputs)}; all stand in results.json)"
    return Table(
        caption=f"Inputs and their digests{cut if len(inputs) > ROWS_MOST else ''}",
        columns=columns("Input", "Size (bytes)", "SHA-256", numeric=(1,)),
        rows=tuple(
            cells(entry.file, str(entry.size_bytes), entry.sha256) for entry in inputs[:ROWS_MOST]
        ),
    )


def named_rows(caption: str, heads: tuple[str, str], pairs: Sequence[tuple[str, str]]) -> Table:
    """Return a table of two columns of text."""
    return Table(
        caption=caption, columns=columns(*heads), rows=tuple(cells(*pair) for pair in pairs)
    )
