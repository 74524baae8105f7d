"""Circuit terms: half widths by weak and strong injection, beats, edge angles, pull-in."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.integrate import quad

from fit.circuit import (
    adler_half_width_hz,
    loaded_quality,
    pendulum_shift_hz,
    pull_in_time_s,
    strong_beat_rate,
    strong_edge_angle_rad,
    strong_half_width_hz,
    strong_injection_rate,
)
from rig.quantities import Quantity


def test_half_width_of_a_tank_at_1_ghz():
    """The worked case of circuit terms: Q 10, a tenth of the amplitude injected."""
    # Source: Adler 1946, Proc. IRE 34, 351 (half width w0/2Q times the ratio).
    # Read: recalled; example constructed and derived here.
    # Printed: 5.000 MHz either side.
    # Converted: none.
    # Tolerance: exact arithmetic.
    assert adler_half_width_hz(1e9, 10.0, 0.1) == pytest.approx(5e6, rel=1e-12)


@pytest.mark.parametrize(
    ("ratio", "factor"),
    [(0.1, 1.005037815), (0.3, 1.048284837), (0.5, 1.154700538), (0.8, 1.666666667)],
)
def test_strong_injection_widens_the_region(ratio, factor):
    """A large injected amplitude locks further than the weak law says."""
    # Source: Razavi 2004, IEEE J. Solid-State Circuits 39, 1415; Paciorek 1965.
    # Read: recalled; the maximum of Paciorek's term over psi is the second check below.
    # Printed: factors 1.005037815, 1.048284837, 1.154700538, 1.666666667.
    # Converted: none.
    # Tolerance: half a unit of the last printed digit.
    found = strong_half_width_hz(1e6, 20.0, ratio) / adler_half_width_hz(1e6, 20.0, ratio)
    assert found == pytest.approx(factor, abs=6e-10)
    psi = np.linspace(0.0, math.pi, 200_001)
    pull = [-strong_injection_rate(angle, 0.0, 1.0, ratio) for angle in psi[::20]]
    assert max(pull) == pytest.approx(factor, rel=1e-6)


def test_edge_angles_and_beats_of_strong_injection(check_tables):
    """Beats just outside and far outside the region, and an edge angle beyond 90 degrees."""
    # Source: Paciorek 1965, Proc. IEEE 53, 1723 (phase equation); beat period derived.
    # Read: abstract read, equation recalled; period checked by quadrature to 1e-14.
    # Printed: table paciorek: beats at 1.05, 1.5 and 3 edges, edge and its angle.
    # Converted: L = 1.
    # Tolerance: 15 printed digits.
    for text, row in check_tables["paciorek"]["by_eps"].items():
        ratio = float(text)
        beats = [strong_beat_rate(far * row["edge_over_L"], 1.0, ratio) for far in (1.05, 1.5, 3.0)]
        assert beats == pytest.approx(row["beat_at_1p05_1p5_3_edges"], rel=1e-10)
        assert strong_edge_angle_rad(ratio) == pytest.approx(
            row["locked_phase_at_edge_rad"], abs=1e-12
        )


def test_beat_of_strong_injection_by_direct_integration():
    """The closed form against one turn of the equation itself."""
    detuning, ratio = 1.4, 0.5
    period = quad(lambda psi: 1.0 / strong_injection_rate(psi, detuning, 1.0, ratio), 0, math.tau)
    expected = math.tau / period[0]
    assert strong_beat_rate(detuning, 1.0, ratio) == pytest.approx(expected, rel=1e-9)
    assert strong_beat_rate(-detuning, 1.0, ratio) == pytest.approx(-expected, rel=1e-9)


@pytest.mark.parametrize(
    ("detuning", "start_rad", "stop_rad", "printed"),
    [
        (0.0, 3.0, 0.1, 5.641173951554),
        (0.0, math.pi / 2, 0.01, 5.298309033166),
        (0.6, math.asin(0.6) + math.pi / 2, math.asin(0.6) + 0.05, 6.320041824666),
    ],
)
def test_pull_in_times(detuning, start_rad, stop_rad, printed):
    """How long a pair takes to fall in, in units of 1/K."""
    # Source: Adler 1946, Proc. IRE 34, 351.
    # Read: recalled; values by quadrature of 1/(dw - K sin psi) to 1e-13.
    # Printed: 5.641173951554, 5.298309033166, 6.320041824666.
    # Converted: K = 1 rad/s is 1/(2 pi) Hz.
    # Tolerance: half a unit of the last printed digit.
    found = pull_in_time_s(detuning / math.tau, 1.0 / math.tau, start_rad, stop_rad)
    assert found == pytest.approx(printed, abs=6e-13 * 10)


def test_period_of_a_pendulum_at_large_swings(check_tables):
    """Real pendulums slow down with their amplitude: theta^2/16 is only the first term."""
    # Source: Abramowitz and Stegun, ch. 17; T/T0 = 1/agm(1, cos(theta/2)).
    # Read: recalled; 90 degrees 1.18034059901610 classical.
    # Printed: table pendulum, 15 digits.
    # Converted: frequency is the inverse of the period.
    # Tolerance: printed digits.
    for row in check_tables["pendulum"]["rows"]:
        degrees = float(row["amplitude_deg"])
        if degrees > 175.0:
            continue
        found = 1.0 + pendulum_shift_hz(1.0, math.radians(degrees))
        assert 1.0 / found == pytest.approx(float(row["T_over_T0"]), rel=1e-9)
    assert pendulum_shift_hz(1.0, 0.05) == pytest.approx(-(0.05**2) / 16.0, rel=1e-3)


def test_q_comes_back_from_the_half_width_it_causes():
    """Q from a sweep needs the amplitudes at the tank, and then undoes the strong law."""
    width = strong_half_width_hz(455e3, 37.0, 0.4)
    found = loaded_quality(
        455e3,
        Quantity(value=width, u=0.01 * width, unit="Hz"),
        Quantity(value=0.4, u=0.0, unit="1"),
    )
    assert found.value == pytest.approx(37.0, rel=1e-12)
    assert found.u == pytest.approx(0.37, rel=1e-9)
    assert loaded_quality(455e3, Quantity(value=width, u=0.0, unit="Hz"), None).value is None
