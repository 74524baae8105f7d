"""Modulus and phase of a noisy phasor near zero: GUM supplement 2, and what lockspan makes of it.

Coupling and offset of a pair are modulus and phase of (a, b); near zero the first-order
uncertainty of the phase goes to infinity while the phase itself knows only one turn.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.adler_record import record_estimate
from fit.identify import RecordFit
from fit.records import PsiSeries

U = 0.01
# Source: JCGM 102:2011 (GUM supplement 2), 9.3, tables 6 and 7, u = 0.01 of both parts
# Read: secondary; moments recomputed by polar quadrature, all printed digits agree
# Printed: (real part, correlation): modulus, its u, phase, its u
# Converted: none
# Tolerance: half a unit of the last digit given (quadrature), 4 errors (draws)
MOMENTS = {
    (0.001, 0.0): (0.012564455, 0.006567684, 0.0, 1.744127193),
    (0.001, 0.9): (None, None, -0.556312, 1.598787),
    (0.010, 0.0): (0.015485725, 0.007758372, 0.0, 1.117546850),
    (0.010, 0.9): (0.015289077, None, -0.342927, 0.903080),
    (0.100, 0.0): (0.100501269, 0.009974711, 0.0, 0.100512661),
}


def phasor_moments(real: float, correlation: float) -> tuple[float, float, float, float]:
    """Mean and deviation of modulus and phase of a Gaussian phasor, by quadrature."""
    angle = (np.arange(4096) + 0.5) / 4096 * 2 * math.pi - math.pi
    size = (np.arange(4000) + 0.5) / 4000 * (real + 12 * U)
    r, phi = np.meshgrid(size, angle, indexing="ij")
    x, y = (r * np.cos(phi) - real) / U, r * np.sin(phi) / U
    weight = r * np.exp(-0.5 * (x**2 - 2 * correlation * x * y + y**2) / (1 - correlation**2))
    weight /= weight.sum()
    of_size, of_angle = weight.sum(axis=1), weight.sum(axis=0)
    modulus, phase = float(of_size @ size), float(of_angle @ angle)
    return (
        modulus,
        math.sqrt(float(of_size @ (size - modulus) ** 2)),
        phase,
        math.sqrt(float(of_angle @ (angle - phase) ** 2)),
    )


@pytest.mark.parametrize("case", sorted(MOMENTS))
def test_the_moments_are_those_of_the_supplement(case):
    """First order would give the phase at (0.001, 0) an uncertainty of 10 rad."""
    for found, printed in zip(phasor_moments(*case), MOMENTS[case], strict=True):
        if printed is not None:
            assert found == pytest.approx(printed, abs=2e-6)


def estimated(real: float, correlation: float):
    """Estimate of a drifting record whose (a, b) are such a phasor, in rad/s."""
    covariance = np.diag([U**2, U**2, U**2, 0.01, 0.01])
    covariance[1, 2] = covariance[2, 1] = correlation * U**2
    time_s = 0.2 * np.arange(2000)
    series = PsiSeries(step_s=0.2, segments=(0.5 * time_s + 0.1 * np.sin(time_s),), start_s=(0.0,))
    fit = RecordFit(
        theta=np.array([0.5, real, 0.0, math.log(1e-3), math.log(1e-4)]),
        covariance=covariance,
        loglik=0.0,
        converged=True,
        thresholds={"detuning": 3.84, "coupling": 3.84, "offset": 3.84},
        ends={},
    )
    return record_estimate(series, fit, None)


@pytest.mark.parametrize("case", [key for key in sorted(MOMENTS) if key[0] < 0.05])
def test_no_offset_is_given_where_its_uncertainty_is_of_the_order_of_a_turn(case):
    """At 0.1 and 1 standard errors from zero the phase is all but unknown, and so it is said."""
    assert MOMENTS[case][3] > 0.9
    found = estimated(*case)
    assert found.offset_rad.value is None
    assert "too near zero" in found.offset_rad.reason
    assert found.coupling_hz.low == 0.0


def test_an_offset_that_is_given_has_the_uncertainty_of_the_supplement():
    """At 10 standard errors first order (0.1 rad) and the exact law agree to half a per cent."""
    found = estimated(0.1, 0.0)
    exact = MOMENTS[0.1, 0.0][3]
    assert found.offset_rad.value == pytest.approx(math.pi / 2, abs=1e-9)
    assert found.offset_rad.u == pytest.approx(exact, rel=0.01)
    assert found.coupling_hz.u * 2 * math.pi == pytest.approx(MOMENTS[0.1, 0.0][1], rel=0.01)
