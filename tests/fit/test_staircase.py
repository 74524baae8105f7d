"""Steps of a staircase and maps of lock style over a variable."""

from __future__ import annotations

import re

import numpy as np
import pytest

from fit.staircase import MapPoint, find_steps, map_style, step_regions
from rig.errors import FitError


def test_a_ratio_that_stands_is_a_step_with_its_width():
    """A plateau at 2/3 between moving ratios, edges in the middle of their cells."""
    axis = np.arange(10.0)
    ratio = np.array([0.61, 0.63, 0.65, 2 / 3, 2 / 3, 2 / 3, 2 / 3, 0.70, 0.72, 0.74])
    steps = find_steps(axis, ratio, np.full(10, 1e-4), unit="V")
    (step,) = [one for one in steps if one.order.n == 3]
    assert (step.order.n, step.order.m, step.points) == (3, 2, 4)
    assert step.lower.value == pytest.approx(2.5)
    assert step.width.value == pytest.approx(4.0)
    assert step.width.unit == "V"


def test_a_step_at_the_end_of_the_range_is_open():
    """Its width is not known."""
    (step,) = find_steps(np.arange(4.0), np.array([1.0, 1.0, 1.0, 1.07]), np.full(4, 1e-3))
    assert step.lower.value is None
    assert step.width.value is None


def test_one_point_on_a_fraction_is_no_step():
    """A ratio passes fractions on its way; that is not locking."""
    assert find_steps(np.arange(3.0), np.array([0.45, 0.5, 0.55]), np.full(3, 1e-3)) == []


@pytest.mark.parametrize(
    ("axis", "u", "text"),
    [
        ([0.0, 0.0], [1e-3, 1e-3], "must rise"),
        ([0.0, 1.0], [1e-3, 0.0], "above 0"),
        ([0.0, 1.0, 2.0], [1e-3, 1e-3], "one length"),
    ],
)
def test_arrays_that_do_not_fit_are_refused(axis, u, text):
    """A staircase needs a rising axis and honest uncertainties."""
    with pytest.raises(FitError, match=re.escape(text)):
        find_steps(np.array(axis), np.array([1.0, 1.0]), np.array(u))


def test_steps_measured_by_order_get_edges_by_likelihood(sweeps):
    """Each order its own region, in rising ratio."""
    rng = np.random.default_rng(1)
    first = sweeps.sweep(rng, points=9, length_s=60.0)
    found = step_regions({(1, 1): first, (2, 1): first, (3, 1): []})
    assert list(found) == [(2, 1), (1, 1)]
    edge = found[1, 1].levels[0].upper_hz
    assert edge.value * 6.2831853 == pytest.approx(1.07, abs=4 * edge.u * 6.2831853)


def test_changes_of_style_are_placed_between_their_points(sweeps):
    """In-phase to anti-phase over the spacing of two machines, whatever the order of points."""
    none = sweeps.known(0.0, 0.1, "rad")
    styles = {1.0: "in-phase", 2.0: "in-phase", 4.0: "anti-phase", 5.0: None}
    points = [
        MapPoint(at=at, style=style, offset_rad=none, coupling_hz=none)
        for at, style in reversed(styles.items())
    ]
    ordered, changes = map_style(points, "m")
    assert [point.at for point in ordered] == [1.0, 2.0, 4.0, 5.0]
    assert [(one.before, one.after) for one in changes] == [
        ("in-phase", "anti-phase"),
        ("anti-phase", None),
    ]
    assert changes[0].at.value == pytest.approx(3.0)
    assert (changes[0].at.low, changes[0].at.high) == (2.0, 4.0)
