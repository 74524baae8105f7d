"""A sweep of a pair in which both pull, from captures to edges, width and both couplings.

Two phases pull each other unequally; the free frequency of the driven one is stepped. No
record tells more than its own detuning, and the locked ones not even that: the edges lie
where |detuning| is the sum of both pulls.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.analysis import MeasureSettings
from fit.bracket import own_place_hz
from fit.difference import Order
from fit.records import RegionPoint
from fit.region import RegionRules, fit_region

RATE_HZ, DURATION_S, FREE_HZ = 1000.0, 14.0, 100.0
ON_DRIVEN_HZ, ON_REFERENCE_HZ = 0.65, 0.35
DETUNINGS_HZ = np.linspace(-1.6, 1.6, 15) + 0.03
NOISE_RAD2_S = (0.03, 0.05)  # D of reference and driven


def integrated(rng):
    """Voltages (points, 2, samples) of all pairs at once, by Euler steps of a millisecond."""
    count, step_s = round(RATE_HZ * DURATION_S), 1.0 / RATE_HZ
    kick = np.sqrt(2.0 * np.array(NOISE_RAD2_S) * step_s)[:, None]
    free = math.tau * np.stack([np.full(DETUNINGS_HZ.size, FREE_HZ), FREE_HZ + DETUNINGS_HZ])
    pull = math.tau * np.array([ON_REFERENCE_HZ, -ON_DRIVEN_HZ])[:, None]
    phases = rng.uniform(0.0, math.tau, free.shape)
    out = np.empty((count, *free.shape))
    for k in range(count):
        out[k] = phases
        rate = free + pull * np.sin(phases[1] - phases[0])
        phases = phases + step_s * rate + kick * rng.standard_normal(free.shape)
    volts = np.cos(out) + 1e-3 * rng.standard_normal(out.shape)
    return volts.transpose(2, 1, 0)


@pytest.fixture(scope="module")
def measured(rigs):
    """One measurement a capture."""
    rng = np.random.default_rng(3)
    settings = MeasureSettings(one_way=False)
    return [rigs.measured(rigs.pair_of(rows, RATE_HZ), settings) for rows in integrated(rng)]


def region_of(measured):
    """The region as a sweep file of a mutual pair gives it."""
    points = [
        RegionPoint(
            key=f"{number:03d}",
            drive_hz=None,
            drive_u_hz=0.0,
            detuning_hz=own_place_hz(one.adler),
            level=1.0,
            amplitude=1.0,
            direction="none",
            state=one.decision.state,
            mean_rate_hz=one.mean_rate_hz.value,
            mean_rate_u_hz=one.mean_rate_hz.u,
            adler=one.adler,
            series=one.series,
        )
        for number, one in enumerate(measured)
    ]
    return fit_region(points, RegionRules(order=Order()))


def test_edges_and_width_are_the_sum_of_both_pulls(measured):
    """The half-width on the axis of the free detuning is K12 + K21, whoever pulls harder."""
    region = region_of(measured)
    (level,) = region.levels
    both = ON_DRIVEN_HZ + ON_REFERENCE_HZ
    for quantity, truth in (
        (level.lower_hz, -both),
        (level.upper_hz, both),
        (level.width_hz, 2.0 * both),
        (level.coupling_hz, both),
    ):
        assert quantity.value == pytest.approx(truth, abs=3.5 * quantity.u)
        assert quantity.u < 0.03 * both
    assert level.noise_rad2_s.value == pytest.approx(sum(NOISE_RAD2_S), rel=0.3)
    assert region.adler_holds is True


def test_no_locked_record_is_placed_by_a_vague_detuning(measured):
    """A lock that guesses its detuning stood far outside the region among drifting points."""
    both = ON_DRIVEN_HZ + ON_REFERENCE_HZ
    for one, true_hz in zip(measured, DETUNINGS_HZ, strict=True):
        place_hz = own_place_hz(one.adler)
        if place_hz is not None:
            assert place_hz == pytest.approx(true_hz, abs=0.5 * both)
    drifting = [one for one in measured if one.decision.state == "drifting"]
    assert len(drifting) >= 4
    assert all(own_place_hz(one.adler) is not None for one in drifting)


def test_both_couplings_come_from_the_drifting_records(measured):
    """Each is given where psi turns, and their errors are honest over the sweep."""
    found = [one.mutual for one in measured if one.mutual.on_driven_hz.value is not None]
    assert len(found) >= 4
    for pick, truth in (("on_driven_hz", ON_DRIVEN_HZ), ("on_reference_hz", ON_REFERENCE_HZ)):
        scores = [(getattr(one, pick).value - truth) / getattr(one, pick).u for one in found]
        # Root mean square of at least four normal scores: beyond 2.2 once in a thousand.
        assert math.sqrt(np.mean(np.square(scores))) < 2.2
