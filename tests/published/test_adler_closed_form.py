"""Published and tabulated values of the phase equation without noise."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.lmfit_models import DriftingPhaseModel
from fit.models import (
    PhaseEquation,
    beat_rate_rad_s,
    pull_in_time_s,
    relaxation_rate_rad_s,
    rest_angle_rad,
    trajectory,
)
from fit.noise_inverse import invert_rate_and_length
from fit.records import PsiSeries
from fit.two_number import two_number_check

CASES = [
    "adler_closed_locked_3-4-5",
    "adler_closed_locked_3-4-5_from_below",
    "adler_closed_locked_3-4-5_past_saddle_stress",
    "adler_closed_drift_3-4-5",
    "adler_closed_edge",
    "adler_closed_locked_dw0",
    "adler_closed_rig_scale",
]


def pair(dw: float, k: float = 1.0) -> PhaseEquation:
    """Short form of the record, offset 0."""
    return PhaseEquation(detuning_rad_s=dw, coupling_rad_s=k)


def test_beat_frequency_of_the_3_4_5_pair():
    """The beat is what an instrument shows first of an unlocked pair."""
    # Source: Adler 1946, Proc. IRE 34, 351-357, beat frequency
    # Read: recalled; period 2 pi/sqrt(dw^2 - K^2) read in a secondary text quoting the paper
    # Printed: Om = 0.75, T = 8.377580409572782 for dw = 1.25, K = 1; 4/3 for 5/3
    # Converted: none
    # Tolerance: rounding of a float
    assert beat_rate_rad_s(pair(1.25)) == pytest.approx(0.75, rel=1e-15)
    assert beat_rate_rad_s(pair(5.0 / 3.0)) == pytest.approx(4.0 / 3.0, rel=1e-14)
    moved = trajectory(pair(1.25), 0.4, np.array([0.0, 8.377580409572782]))
    assert moved[1] - moved[0] == pytest.approx(math.tau, abs=1e-12)


def test_rest_angle_and_relaxation_of_the_locked_3_4_5_pair():
    """A lock is described by these two, and a fit of a locked record gives only them."""
    # Source: Adler 1946, Proc. IRE 34, 351-357, locked phase and pull-in
    # Read: recalled; derived again from the phase equation
    # Printed: asin(0.6) = 0.643501108793284 rad, rate 0.8 for dw = 0.6, K = 1
    # Converted: none
    # Tolerance: printed digits
    assert rest_angle_rad(pair(0.6)) == pytest.approx(0.643501108793284, abs=1e-14)
    assert relaxation_rate_rad_s(pair(0.6)) == pytest.approx(0.8, abs=1e-15)
    late = trajectory(pair(0.6), 1.0, np.array([20.0, 21.0])) - math.asin(0.6)
    assert math.log(late[0] / late[1]) == pytest.approx(0.8, abs=1e-6)


@pytest.mark.parametrize("case", CASES)
def test_trajectories_equal_the_tabulated_closed_form(check_tables, case):
    """Seven cases from locked to drifting, one at rig scale and one past the unstable point."""
    # Source: closed form of the phase equation as a Moebius map of exp(i psi)
    # Read: own table (fixtures/check_tables.json), computed with 30 digits and by DOP853
    # Printed: 15 significant digits
    # Converted: none
    # Tolerance: 1e-9 rad; past the unstable point errors grow by exp(0.8 * 10)
    table = check_tables["adler_closed_form"][case]
    equation = pair(float(table["dw"]), float(table["K"]))
    psi = trajectory(equation, float(table["phi_i"]), np.array(table["t"], dtype=float))
    np.testing.assert_allclose(psi, [float(value) for value in table["phi"]], atol=1e-9)


@pytest.mark.parametrize(
    ("dw", "start", "within", "printed"),
    [
        (0.0, 3.0, 0.1, 5.6411739515544115),
        (0.0, math.pi / 2, 0.01, 5.298309033166092),
        (0.6, math.asin(0.6) + math.pi / 2, 0.05, 6.320041824665706),
        (0.6, 2.398091544797, 0.05, 7.725120920463256),
        (-0.6, 2.0, 0.05, 4.628668643224644),
    ],
)
def test_pull_in_times(dw, start, within, printed):
    """How long a pair takes to lock is a limit in acceptance tests."""
    # Source: integral of dphi/(dw - K sin phi), closed form
    # Read: own table, checked by quadrature to 1e-13
    # Printed: as above, K = 1
    # Converted: none
    # Tolerance: starts are printed to 12 decimals
    assert pull_in_time_s(pair(dw), start, within) == pytest.approx(printed, abs=1e-9)


def test_beat_slows_down_as_the_edge_comes_near():
    """Critical slowing: the beat period grows like the inverse root of the distance."""
    # Source: saddle-node scaling T -> pi sqrt(2/e)/K at dw = K (1 + e)
    # Read: derived
    # Printed: e = 0.01: exact 44.31817210, asymptote 44.42882938
    # Converted: none
    # Tolerance: printed digits
    period = math.tau / beat_rate_rad_s(pair(1.01))
    assert period == pytest.approx(44.31817210, abs=5e-9)
    assert math.pi * math.sqrt(2.0 / 0.01) == pytest.approx(44.42882938, abs=5e-9)


def test_two_numbers_give_detuning_and_coupling():
    """Beat and resultant length use none of the timing of the fit: an independent witness."""
    # Source: algebra of the beat-note spectrum (line at zero R = (dw - Om)/K)
    # Read: derived
    # Printed: (Om, R) = (0.75, 0.5) gives (dw, K) = (1.25, 1.0) exactly
    # Converted: Hz in the record check, times 2 pi
    # Tolerance: rounding for the algebra; 1e-6 for a sampled clean record (trapezoids)
    assert invert_rate_and_length(0.75, 0.5, 0.0) == pytest.approx((1.25, 1.0), rel=1e-14)
    psi = trajectory(pair(1.25), 0.3, np.arange(0.0, 200.0, 0.002))
    record = PsiSeries(step_s=0.002, segments=(psi,), start_s=(0.0,))
    found = dict(two_number_check(record, 0.0, 0.0))
    detuning = found["detuning by rate and resultant"].value * math.tau
    coupling = found["coupling by rate and resultant"].value * math.tau
    assert (detuning, coupling) == pytest.approx((1.25, 1.0), abs=2e-6)


@pytest.mark.parametrize("step", ["0.1", "0.5"])
def test_the_fit_has_none_of_the_bias_of_regressions(check_tables, step):
    """Regression of increments is off by up to 0.25 rad in the offset at these steps."""
    # Source: least squares of forward differences on (1, -sin, cos), dw 1.25, K 1, 20 beats
    # Read: own table
    # Printed: h = 0.1: K = 0.999174, offset -0.04996; h = 0.5: dw 1.2251, K 0.97993, -0.2471
    # Converted: none
    # Tolerance: the regression to 1e-3 (one sample more or less); the guess has five digits
    h = float(step)
    time_s = np.arange(0.0, 20.0 * math.tau / 0.75, h)
    psi = trajectory(pair(1.25), 0.0, time_s)
    printed = check_tables["regression_discretisation_bias"]["by_h"][step]["forward"]
    matrix = np.stack([np.ones(psi.size - 1), -np.sin(psi[:-1]), np.cos(psi[:-1])], axis=1)
    dw, c, s = np.linalg.lstsq(matrix, np.diff(psi) / h, rcond=None)[0]
    assert (dw, math.hypot(c, s)) == pytest.approx((printed["dw"], printed["K"]), abs=1e-3)
    assert math.atan2(s, c) == pytest.approx(printed["phi0"], abs=2e-3)
    guess = DriftingPhaseModel().guess(psi, time_s).valuesdict()
    assert guess["detuning_hz"] * math.tau == pytest.approx(1.25, rel=1e-4)
    assert guess["coupling_hz"] * math.tau == pytest.approx(1.0, rel=1e-4)
    assert guess["offset_rad"] == pytest.approx(0.0, abs=1e-4)
