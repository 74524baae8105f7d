"""Tables of single captures: points, estimates, oscillators alone, those lost, inputs."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import takewhile

from fit.records import FreeRun, Measurement
from reports.content_model import DASH, Cell, Table, cells, columns
from reports.content_region import level_head, short_way
from reports.gallery import gallery_rows
from reports.numbers import (
    kept_number,
    one_line,
    paper_quantity,
    plain_number,
    quantity_text,
    value_text,
)
from reports.records import PointResult, SweepRun
from reports.rows import Row, longest_episode, usable_rows
from rig.angles import wrap_angle_rad
from rig.quantities import Quantity

# Some twenty pages a table; beyond that paper helps nobody and the machine-readable files do.
ROWS_MOST = 500


def points_table(run: SweepRun, drawn: dict[int, str]) -> Table:
    """Return one row a usable point; ``drawn`` maps its index to the key of its picture."""
    folder = _shared_folder(run)
    heads = ("Capture", "Drive (Hz)", level_head(run), "Drive", "State", "Slips",
             "Mean rate (Hz)", "Phase offset (°)", "Jitter (°)")  # fmt: skip
    return Table(
        caption=f"Usable points, value ± u{_folder_remark(folder)}",
        columns=columns(*heads),
        rows=tuple(
            (
                Cell(text=_short_names(row, folder), target=drawn.get(row.index)),
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
    files = [name for point in run.points for name in (point.file, point.driven_file) if name]
    folders = [name.split("/")[:-1] for name in files]
    shared = takewhile(lambda names: len(set(names)) == 1, zip(*folders, strict=False))
    return "".join(f"{names[0]}/" for names in shared)


def _short_names(row: Row, folder: str) -> str:
    names = filter(None, (row.point.file, row.point.driven_file))
    return " + ".join(name.removeprefix(folder) for name in names)


def _folder_remark(folder: str) -> str:
    return f"; captures lie in {folder}" if folder else ""


def _point_cells(row: Row) -> tuple[Cell, ...]:
    measurement = row.measurement
    return cells(
        plain_number(row.drive_hz),
        plain_number(row.point.level),
        short_way(row.point.direction),
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
        rows=tuple(_estimate_row(row, _short_names(row, folder)) for row in rows),
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
        rows=tuple(cells(*(kept_number(value, 3) for value in row)) for row in free.allan),
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
    return cells(point.names, point.status, one_line(point.message) or "no reason recorded")


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
