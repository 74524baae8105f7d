"""Tables of the locking range: edges, laws over the levels, hysteresis, tests, checks."""

from __future__ import annotations

from fit.records import LockingRegion, RegionLevel
from reports.content_model import DASH, Cell, Table, cells, columns
from reports.numbers import (
    bounds_text,
    one_line,
    plain_number,
    probability_text,
    quantity_text,
    with_unit,
)
from reports.records import SweepRun
from rig.quantities import Quantity


def region_table(run: SweepRun) -> Table:
    """Return edges, width and coupling of every level, direction and interval."""
    levels = run.region.levels if run.region else ()
    methods = {one_line(entry.method) for entry in levels}
    common = f"; method: {methods.pop()}" if len(methods) == 1 else ""
    heads = [level_head(run), "Drive", "No.", "Lower edge", "Upper edge", "Width", "Coupling"]
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
    """Return the notes on the region, then those on its levels, each once with its levels."""
    region = run.region
    if region is None:
        return []
    concerned: dict[str, list[str]] = {}
    for entry in region.levels:
        for note in entry.notes:
            concerned.setdefault(one_line(note), []).append(_entry_name(run, entry))
    return [
        *region.notes,
        *(
            f"{_some_levels(names, len(region.levels))}: {note}"
            for note, names in concerned.items()
        ),
    ]


def _entry_name(run: SweepRun, entry: RegionLevel) -> str:
    level = with_unit(f"{entry.level:g}", one_line(run.plan.level.unit))
    way = short_way(entry.direction)
    return level if way == DASH else f"{level} {way}"


def _some_levels(names: list[str], count: int) -> str:
    return "all levels" if len(names) == count > 1 else ", ".join(dict.fromkeys(names))


def adler_sentence(region: LockingRegion) -> str:
    """Return whether the phase equation holds over the sweep, and which tests stood out."""
    if region.adler_holds is None:
        return "Whether the phase equation holds over the sweep could not be tested."
    if not region.adler_holds:
        return (
            "The phase equation was rejected over the sweep; edges rest on the records near them, "
            "and couplings of single records must not be turned into edges."
        )
    fired = [one_line(test.name) for test in region.tests if test.fired]
    if not fired:
        return "No test rejected the phase equation over the sweep."
    return (
        "The phase equation holds over the sweep as far as its edges need it, though not every "
        f"test was passed ({'; '.join(fired)}): the table of tests says what that means."
    )


def _edge_axis(run: SweepRun) -> str:
    if run.plan.coupling == "mutual":
        return "frequency of the reference minus that of the driven, both alone"
    return "drive frequencies"


def level_head(run: SweepRun) -> str:
    """Return the heading of a column of levels: their name with its unit."""
    name, unit = one_line(run.plan.level.name), one_line(run.plan.level.unit)
    name = name[:1].upper() + name[1:]
    return f"{name} ({unit})" if unit else name


def _region_row(entry: RegionLevel) -> tuple[Cell, ...]:
    return cells(
        plain_number(entry.level),
        short_way(entry.direction),
        str(entry.interval),
        edge_text(entry.lower_hz),
        edge_text(entry.upper_hz),
        edge_text(entry.width_hz),
        edge_text(entry.coupling_hz),
    )


def short_way(direction: str) -> str:
    """Return how the drive moved: up, down, or a dash."""
    return direction if direction in ("up", "down") else DASH


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
        columns=columns(level_head(run), "Drive", "No.", "Lower", "Upper"),
        rows=tuple(
            cells(
                plain_number(entry.level),
                short_way(entry.direction),
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
    """Return the differences of the edges between drive up and drive down, with their test."""
    entries = run.region.hysteresis if run.region else ()
    heads = (level_head(run), "Edge", "Up minus down", "p", "Remark")
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
        caption="Tests of the phase equation over the sweep; a test is rejected when its "
        "statistic exceeds the threshold",
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
