"""Edges from one ramped record: never read off the ramp, and lock dated beside them."""

from __future__ import annotations

import math
import re

import numpy as np
import pytest

from fit.difference import Order
from fit.hysteresis import ramp_delay_hz
from fit.ramp import DriveRamp, LevelRamp, level_ramp_edge, ramp_edges
from fit.records import PsiSeries
from rig.errors import FitError

TURN = 2.0 * math.pi
STEP_S, LENGTH_S = 0.2, 800.0
RATE = 4.0 / LENGTH_S  # rad/s of drive per second: from -2 to 2 in units of the coupling


@pytest.fixture(scope="module")
def ramped():
    """Make records psi under a drive ramp (K 1 rad/s, centre 0.07) or any drift of time."""

    def make(slope, *, seed=1, noise=0.03, sigma=0.1, length_s=LENGTH_S):
        rng = np.random.default_rng(seed)
        parts = 8
        step = STEP_S / parts
        psi, seen = 0.7 + math.pi / 2, []
        kicks = math.sqrt(2 * noise * step) * rng.standard_normal((round(length_s / STEP_S), parts))
        for index, row in enumerate(kicks):
            seen.append(psi)
            for part, kick in enumerate(row):
                psi += slope(index * STEP_S + part * step, psi) * step + kick
        values = np.array(seen) + sigma * rng.standard_normal(len(seen))
        return PsiSeries(
            step_s=STEP_S, segments=(values,), start_s=(0.0,), noise_start_rad2=sigma**2
        )

    return make


def drive_slope(time_s, psi):
    """The phase equation under a drive that rises from -2 rad/s."""
    return 0.07 + 2.0 - RATE * time_s - math.sin(psi - 0.7)


@pytest.fixture(scope="module")
def mapped(ramped):
    """One ramp with its known rate."""
    ramp = DriveRamp(start_hz=-2.0 / TURN, rate_hz_s=RATE / TURN, order=Order())
    return ramp_edges(ramped(drive_slope), ramp)


def test_edges_of_a_standing_drive_come_from_the_ramp(mapped):
    """Within 4 u of the truth, with u a fortieth of the coupling."""
    for edge, truth in ((mapped.lower, 0.07 - 1.0), (mapped.upper, 0.07 + 1.0)):
        assert edge.value * TURN == pytest.approx(truth, abs=4 * edge.u * TURN)
        assert edge.u * TURN < 0.03


def test_lock_is_dated_where_it_was_gained_and_lost(mapped):
    """Gained before lost, and both within a fifth of the coupling of the edges."""
    kinds = [event.kind for event in mapped.events]
    assert kinds[0] == "gained"
    assert kinds[-1] == "lost"
    assert mapped.events[0].at * TURN == pytest.approx(-0.93, abs=0.2)
    assert mapped.events[-1].at * TURN == pytest.approx(1.07, abs=0.2)


def test_an_unknown_rate_is_fitted(ramped):
    """The sixth parameter: the ramp rate from the record itself."""
    ramp = DriveRamp(start_hz=-2.0 / TURN, rate_hz_s=None, order=Order())
    found = ramp_edges(ramped(drive_slope, seed=2), ramp)
    assert found.upper.value * TURN == pytest.approx(1.07, abs=4 * found.upper.u * TURN)
    assert found.coupling.value * TURN == pytest.approx(1.0, abs=4 * found.coupling.u * TURN)


def test_a_ramp_that_ends_inside_leaves_the_edge_open(ramped):
    """No edge is made up beyond the end of the ramp."""
    ramp = DriveRamp(start_hz=-2.0 / TURN, rate_hz_s=RATE / TURN, order=Order())
    found = ramp_edges(ramped(drive_slope, length_s=500.0), ramp)
    assert found.upper.value is None
    assert "open on this side" in found.upper.reason


def test_a_level_ramp_gives_the_amplitude_at_which_lock_begins(ramped):
    """|detuning| / kappa: here 1 rad/s over 1 rad/s per unit."""
    ramp = LevelRamp(start=0.2, rate_per_s=1.8 / 600.0)

    def slope(time_s, psi):
        return 1.0 - (0.2 + 0.003 * time_s) * math.sin(psi - 0.7)

    found = level_ramp_edge(ramped(slope, length_s=600.0), ramp, 0.9 / TURN)
    assert found.lower.value == pytest.approx(1.0, abs=4 * found.lower.u)
    assert found.lower.u < 0.05
    assert found.events[0].kind == "gained"


def test_noise_loses_lock_early_where_the_quiet_law_says_late(mapped):
    """Why an edge is never read off a ramp: the law of the quiet ramp has the wrong sign."""
    late_hz = ramp_delay_hz(RATE / TURN, 1.0 / TURN)
    assert late_hz * TURN == pytest.approx(0.086, abs=0.002)
    assert mapped.events[-1].at * TURN < 1.07 + late_hz * TURN


@pytest.mark.parametrize(
    ("call", "text"),
    [
        (lambda: DriveRamp(start_hz=1.0, rate_hz_s=0.0, order=Order()), "must differ from 0 Hz/s"),
        (lambda: LevelRamp(start=1.0, rate_per_s=0.0), "must differ from 0, got 0"),
    ],
)
def test_a_ramp_that_stands_is_refused(call, text):
    """No ramp, no ramp record."""
    with pytest.raises(FitError, match=re.escape(text)):
        call()


def test_a_short_record_is_refused():
    """Fewer than 200 samples cannot show two edges."""
    series = PsiSeries(step_s=1.0, segments=(np.zeros(50),), start_s=(0.0,))
    with pytest.raises(FitError, match="at least 200 phase samples needed, got 50"):
        ramp_edges(series, DriveRamp(start_hz=0.0, rate_hz_s=1.0, order=Order()))
