"""Picture against another sweep variable (spacing, stiffness, supply): phase, rate, coupling."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Sequence

from matplotlib.artist import Artist
from matplotlib.ticker import MultipleLocator

from reports.figures.canvas import Canvas, Picture, add_key, draw_values, mark_handle, stack_panels
from reports.look import STATE_MARKS, WIDTH_IN
from reports.numbers import paper_quantity
from reports.records import SweepRun
from reports.rows import Row, longest_episode, usable_rows
from reports.typeface import picture_text
from rig.angles import wrap_angle_rad
from rig.quantities import Quantity, undetermined

Placed = tuple[float, Row]


def variable_rows(run: SweepRun) -> list[Placed]:
    """Return (value of the variable, row) of all usable points whose column holds a number."""
    variable = run.plan.variable
    if variable is None:
        return []
    column = variable.column or variable.name
    placed = ((_number(dict(row.point.extras).get(column, "")), row) for row in usable_rows(run))
    return [(value, row) for value, row in placed if value is not None]


def _number(text: str) -> float | None:
    try:
        return float(text)
    except ValueError:
        return None


def style_counts(rows: Sequence[Placed]) -> Counter[str]:
    """Return how many records were locked in which style, by their longest episode."""
    episodes = (longest_episode(row.measurement) for _value, row in rows)
    return Counter(episode.style for episode in episodes if episode is not None)


def variable_picture(run: SweepRun) -> Picture:
    """Return phase offset, mean rate and coupling of each record against the variable."""
    rows = variable_rows(run)

    def draw(canvas: Canvas) -> None:
        panels = stack_panels(canvas, 3, top=0.45)
        for axes, (label, value_of) in zip(panels, _PANELS.items(), strict=True):
            axes.set_ylabel(label)
            for state, mark in STATE_MARKS.items():
                values = [(place, value_of(row)) for place, row in rows if row.state == state]
                draw_values(axes, mark, values)
        panels[0].set_ylim(-190.0, 190.0)
        panels[0].yaxis.set_major_locator(MultipleLocator(90.0))
        panels[-1].set_xlabel(variable_label(run))
        add_key(canvas, _key(rows), columns=4)

    return Picture(width_in=WIDTH_IN, height_in=4.6, draw=draw)


def variable_label(run: SweepRun) -> str:
    """Return the label of the variable's axis with its unit."""
    variable = run.plan.variable
    if variable is None:
        return ""
    name, unit = picture_text(variable.name, 40), picture_text(variable.unit, 12)
    return f"{name} ({unit})" if unit else name


def _phase(row: Row) -> Quantity:
    episode = longest_episode(row.measurement)
    if episode is None:
        return undetermined("deg", "no locked stretch")
    angle_rad = wrap_angle_rad(episode.offset_rad)
    return paper_quantity(Quantity(value=angle_rad, u=episode.offset_u_rad, unit="rad"))


_PANELS: dict[str, Callable[[Row], Quantity]] = {
    "phase offset (°)": _phase,
    "mean rate (Hz)": lambda row: row.measurement.mean_rate_hz,
    "coupling (Hz)": lambda row: row.measurement.adler.coupling_hz,
}


def _key(rows: Sequence[Placed]) -> list[Artist]:
    present = {row.state for _value, row in rows}
    return [mark_handle(mark) for state, mark in STATE_MARKS.items() if state in present]
