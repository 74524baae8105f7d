"""Pictures: each draws whatever the run holds, with units on its axes and its key apart."""

from __future__ import annotations

from dataclasses import replace
from types import ModuleType

import numpy as np
import pytest
from matplotlib.figure import Figure

from fit.difference import Order
from reports.content_figures import SKETCHES
from reports.figures.canvas import envelope, half_widths
from reports.figures.catalogue import FIGURES, picture_of
from reports.figures.limits import guard_width
from reports.figures.records import draw_record
from reports.records import SweepRun
from rig.errors import LockspanError
from rig.quantities import Quantity, undetermined
from rig.sweepfile import LevelAxis, VariableAxis


@pytest.fixture(scope="module")
def run(made: ModuleType) -> SweepRun:
    """A run of two levels up and down, one verdict of each kind, and a variable of its own."""
    run = made.make_run(verdicts=tuple(map(made.make_verdict, ("pass", "fail", "undecided"))))
    points = tuple(
        replace(point, extras=(("spacing_mm", str(index % 7)),))
        for index, point in enumerate(run.points)
    )
    axis = VariableAxis(name="spacing", unit="mm", column="spacing_mm")
    return replace(run, points=points, plan=replace(run.plan, variable=axis))


def _drawn(figure: Figure) -> Figure:
    """Lay a figure out so that sizes of texts are known."""
    figure.draw_without_rendering()
    return figure


def test_every_picture_has_its_title_and_caption_and_the_other_way_round() -> None:
    """A picture without a sentence, or a sentence without a picture, would be lost."""
    assert set(FIGURES) == set(SKETCHES)


@pytest.mark.parametrize("name", FIGURES)
def test_axes_say_quantity_and_unit(run: SweepRun, name: str) -> None:
    """A number without unit says nothing; the limit bars carry theirs beside the name."""
    figure = _drawn(picture_of(run, name).figure())
    labels = [axes.get_xlabel() for axes in figure.axes]
    if name == "limits":
        assert all("(Hz)" in axes.texts[0].get_text() for axes in figure.axes)
    elif name == "residuals":
        assert labels[-1] == "detuning / coupling"
    else:
        assert "(" in labels[-1]


@pytest.mark.parametrize("name", FIGURES)
def test_the_key_never_covers_data(run: SweepRun, name: str) -> None:
    """A key over data hides the very points that matter."""
    figure = _drawn(picture_of(run, name).figure())
    for key in figure.legends:
        box = key.get_window_extent()
        assert not any(box.overlaps(axes.get_window_extent()) for axes in figure.axes)
        assert box.x1 <= figure.bbox.x1
        assert box.y1 <= figure.bbox.y1 + 0.5


@pytest.mark.parametrize("name", FIGURES)
def test_no_text_is_cut_by_the_rim_of_its_picture(run: SweepRun, name: str) -> None:
    """Tick labels and names at the rim are the first to be lost."""
    figure = _drawn(picture_of(run, name).figure())
    rim = figure.bbox
    for axes in figure.axes:
        box = axes.get_tightbbox()
        assert box.x0 >= rim.x0 - 0.5
        assert box.y0 >= rim.y0 - 0.5
        assert box.x1 <= rim.x1 + 0.5
        assert box.y1 <= rim.y1 + 0.5


def test_an_unknown_picture_is_refused_with_the_known_ones(run: SweepRun) -> None:
    """A silent fallback would show the wrong picture."""
    with pytest.raises(LockspanError, match=r"'map'.*region.*record-N"):
        picture_of(run, "map")
    with pytest.raises(LockspanError, match="record-999"):
        picture_of(run, "record-999")


def test_sweeps_up_and_down_have_panels_of_their_own(run: SweepRun) -> None:
    """Hysteresis would vanish in a common panel."""
    figure = picture_of(run, "region").figure()
    assert [axes.get_title(loc="left") for axes in figure.axes] == ["drive up", "drive down"]


def test_a_side_left_open_by_the_points_is_drawn_as_open(run: SweepRun) -> None:
    """An edge that was not measured must not look like one."""
    assert run.region is not None
    open_edge = undetermined("Hz", "no point above", low=25.5)
    levels = tuple(replace(level, upper_hz=open_edge) for level in run.region.levels)
    opened = replace(run, region=replace(run.region, levels=levels))
    figure = picture_of(opened, "region").figure()
    assert "open on this side" in [text.get_text() for text in figure.legends[0].get_texts()]


@pytest.mark.parametrize(
    "axis",
    [
        LevelAxis(name="power", unit="W", kind="power"),
        LevelAxis(name="level $x_1$ \u4e2d", unit="dB", kind="decibel"),
    ],
)
def test_level_axes_of_any_kind_and_name_are_drawn(run: SweepRun, axis: LevelAxis) -> None:
    """A dollar sign is no formula and a missing glyph is no warning."""
    changed = replace(run, plan=replace(run.plan, level=axis))
    for name in ("region", "staircase", "offset", "pull-in", "hysteresis"):
        _drawn(picture_of(changed, name).figure())


def test_a_mutual_pair_is_drawn_against_its_detuning(run: SweepRun) -> None:
    """There is no drive frequency where each pulls the other."""
    mutual = replace(run, plan=replace(run.plan, coupling="mutual"))
    figure = picture_of(mutual, "region").figure()
    assert figure.axes[-1].get_xlabel() == "reference minus driven, both alone (Hz)"


def test_steps_of_several_orders_are_named_at_their_ratio(made: ModuleType, run: SweepRun) -> None:
    """On a staircase the reader looks for the order of each step."""
    half = made.make_measurement(order=Order(n=2, m=1), driven=made.make_role("rotor", 12.55))
    points = (replace(run.points[3], measurement=half), *run.points[1:])
    figure = _drawn(picture_of(replace(run, points=points), "steps").figure())
    assert [text.get_text() for text in figure.axes[0].texts] == ["2:1", "1:1"]


def test_pictures_survive_a_run_without_a_region(run: SweepRun) -> None:
    """A failed region must not cost the report."""
    bare = replace(run, region=None)
    for name in ("region", "staircase", "offset"):
        _drawn(picture_of(bare, name).figure())


def test_envelope_keeps_extremes_and_gaps() -> None:
    """Thinning must not lose the one spike that is a slip, nor bridge a gap."""
    x = np.arange(10_000.0)
    y = np.zeros(10_000)
    y[4321] = 7.0
    y[6000:7000] = np.nan
    _centres, low, high = envelope(x, y, 100)
    assert low.size == 100
    assert np.nanmax(high) == 7.0
    assert np.count_nonzero(np.isnan(high)) == 10


def test_dense_records_cost_no_more_than_their_width(made: ModuleType) -> None:
    """A million samples as a line cost seconds and megabytes; an envelope does not."""
    time_s = np.linspace(0.0, 60.0, 200_000)
    dense = made.make_measurement()
    dense = replace(dense, trace_s=time_s, trace_psi_rad=np.sin(400.0 * time_s))
    figure = draw_record(dense)
    drawn = sum(len(path.vertices) for shape in figure.axes[0].collections
                for path in shape.get_paths())  # fmt: skip
    assert 0 < drawn < 3000


def test_slips_and_locked_stretches_are_named_in_the_key(made: ModuleType) -> None:
    """A shaded area means nothing unless it is named."""
    locked = [t.get_text() for t in draw_record(made.make_measurement()).legends[0].get_texts()]
    drifting = made.make_measurement(detuning_hz=0.6)
    slipping = [t.get_text() for t in draw_record(drifting).legends[0].get_texts()]
    assert locked == ["locked stretch"]
    assert slipping == ["slip of whole turns"]


def test_bars_follow_the_interval_and_not_only_u() -> None:
    """Likelihood intervals are not symmetric; a symmetric bar would hide that."""
    uneven = Quantity(value=1.0, u=0.1, unit="Hz", low=0.9, high=1.4, level=0.95)
    assert half_widths(uneven) == pytest.approx((0.1, 0.4))
    assert half_widths(Quantity(value=1.0, u=0.1, unit="Hz")) == pytest.approx((0.2, 0.2))


def test_guard_bands_are_those_of_the_rule(made: ModuleType) -> None:
    """The picture must not show another rule than the one that decided."""
    verdict = made.make_verdict("pass")
    assert guard_width(verdict) == verdict.expanded_u
    stated = replace(verdict, limit=replace(verdict.limit, rule="guard-width", guard_width=0.07))
    assert guard_width(stated) == 0.07
    simple = replace(verdict, limit=replace(verdict.limit, rule="simple"))
    assert guard_width(simple) == 0.0


@pytest.mark.parametrize(
    "name", ["region", "staircase", "offset", "residuals", "pull-in", "variable"]
)
def test_the_number_of_artists_does_not_grow_with_the_points(run: SweepRun, name: str) -> None:
    """One artist a point made a picture of ten thousand points take a minute."""

    def artists(points: SweepRun) -> int:
        figure = picture_of(points, name).figure()
        return sum(len(axes.get_children()) for axes in figure.axes)

    assert artists(replace(run, points=run.points * 10)) == artists(run)
