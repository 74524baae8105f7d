"""The picture of the coupling function: which record it takes, and what it says of it."""

from __future__ import annotations

from dataclasses import replace
from types import ModuleType

import numpy as np
import pytest

from fit.records import PsiSeries
from reports.figures.coupling import coupling_picture, coupling_row, curve_of, share_inside

COUPLING_HZ, DETUNING_HZ = 0.3, 0.5  # the helper's level 1, drifting at 1.67 of the edge


def psi_series(seconds: float, seed: int = 4) -> PsiSeries:
    """psi of the phase equation stepped finely with noise (D = 0.02 rad2/s), every 0.05 s."""
    rng = np.random.default_rng(seed)
    step_s, psi, out = 0.005, 0.0, []
    for k in range(int(seconds / step_s)):
        if k % 10 == 0:
            out.append(psi)
        kick = np.sqrt(2 * 0.02 * step_s) * rng.standard_normal()
        psi += 2 * np.pi * (DETUNING_HZ - COUPLING_HZ * np.sin(psi - 0.2)) * step_s + kick
    return PsiSeries(step_s=0.05, segments=(np.array(out),), start_s=(0.0,))


@pytest.fixture
def run(made: ModuleType):
    """A run in which one record goes round and carries its estimate, the others do not."""
    whole = made.make_run()
    adler = made.make_adler(DETUNING_HZ, COUPLING_HZ)
    points = list(whole.points)
    still = psi_series(2.0)
    for place, point in enumerate(points):
        if point.measurement is not None:
            points[place] = replace(point, measurement=replace(point.measurement, series=still))
    first = points[0]
    points[0] = replace(
        first, measurement=replace(first.measurement, series=psi_series(60.0), adler=adler)
    )
    return replace(whole, points=tuple(points))


def test_the_record_that_goes_round_is_taken_and_its_sine_lies_in_the_band(run) -> None:
    """The curve without a model must agree with the equation the record was made by."""
    row = coupling_row(run)
    assert row is not None
    assert row.index == 0
    curve = curve_of(run, row)
    assert curve is not None
    assert curve.order == 1
    # one record in twenty leaves its 95 % band; this seed does not
    assert share_inside(row, curve) > 0.95


def test_no_record_goes_round_and_no_picture_is_promised(run) -> None:
    """A report must not show an empty frame."""
    still = replace(run, points=run.points[1:])
    assert coupling_row(still) is None


def test_the_picture_names_its_axes_with_units(run) -> None:
    """A picture without units is no evidence."""
    axes = coupling_picture(run).figure().axes
    labels = {axis.get_xlabel() for axis in axes} | {axis.get_ylabel() for axis in axes}
    assert {"phase difference ψ (°)", "rate of ψ (Hz)"} <= labels
