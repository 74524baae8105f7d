"""The table of pictures: name -> function of a run; an unknown name is refused with the list."""

from __future__ import annotations

from collections.abc import Callable, Mapping

from reports.content_model import ReportContent
from reports.figures.canvas import Picture
from reports.figures.coupling import coupling_picture
from reports.figures.limits import limits_picture
from reports.figures.rates import offset_picture, residual_picture, staircase_picture
from reports.figures.records import card_picture, record_picture
from reports.figures.region import hysteresis_picture, region_picture
from reports.figures.steps import steps_picture
from reports.figures.timing import pull_in_picture, stability_picture
from reports.figures.variable import variable_picture
from reports.gallery import typical_row, worst_row
from reports.records import SweepRun
from reports.rows import Row
from rig.errors import LockspanError

_CARD = "record-"


def worst_picture(run: SweepRun) -> Picture:
    """Return psi of the record that held lock worst."""
    return _drawn(worst_row(run), "worst")


def typical_picture(run: SweepRun) -> Picture:
    """Return psi of the locked record of median spread."""
    return _drawn(typical_row(run), "typical")


FIGURES: Mapping[str, Callable[[SweepRun], Picture]] = {
    "limits": limits_picture,
    "region": region_picture,
    "staircase": staircase_picture,
    "offset": offset_picture,
    "residuals": residual_picture,
    "coupling": coupling_picture,
    "hysteresis": hysteresis_picture,
    "pull-in": pull_in_picture,
    "variable": variable_picture,
    "steps": steps_picture,
    "worst": worst_picture,
    "typical": typical_picture,
    "stability": stability_picture,
}


def picture_of(run: SweepRun, key: str) -> Picture:
    """Return the picture of a key: a name of ``FIGURES``, or "record-N" for point N from 1.

    Raises
    ------
    LockspanError
        If there is no such picture.
    """
    if key in FIGURES:
        return FIGURES[key](run)
    number = key.removeprefix(_CARD)
    if key.startswith(_CARD) and number.isdigit() and 1 <= int(number) <= len(run.points):
        measurement = run.points[int(number) - 1].measurement
        if measurement is not None:
            return card_picture(measurement)
    known = ", ".join([*FIGURES, "record-N"])
    raise LockspanError(f"picture '{key}': there is none of that name; known: {known}")


def report_pictures(run: SweepRun, content: ReportContent) -> dict[str, Picture]:
    """Return every picture that a report refers to, by key."""
    return {key: picture_of(run, key) for key in content.figure_keys()}


def _drawn(row: Row | None, name: str) -> Picture:
    if row is None:
        raise LockspanError(f"picture '{name}': no record of this run was locked")
    return record_picture(row.measurement)
