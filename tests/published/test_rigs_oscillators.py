"""One simulated oscillator against published periods, amplitudes and lock widths."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.interpolate import CubicSpline

from rig.synthetic.circuit import TankValues, integrate_tank, quiet_tank, tank_rates
from rig.synthetic.clocks import ClockSettings, clock_rates
from rig.synthetic.edges import QuietRig, find_lock_edges
from rig.synthetic.generator import DriveStep
from rig.synthetic.lanes import LaneGrid, integrate_lanes


def unit_tank(mu: float) -> TankValues:
    """The circuit with L = C = 1 and no loss: its voltage obeys v'' - mu (1 - v^2) v' + v = 0."""
    return TankValues(
        coil_h=1.0,
        capacitor_f=1.0,
        loss_ohm=1e30,
        element_s=mu,
        cubic_s_v2=mu / 3.0,
        injection_ohm=1.0,
        noise_v_s=0.0,
    )


def period_and_peak(wave: np.ndarray, step_s: float) -> tuple[float, float]:
    """Mean period and largest value of a settled wave, by a cubic spline through it."""
    spline = CubicSpline(np.arange(wave.size) * step_s, wave)
    zeros = spline.roots(extrapolate=False)
    upward = zeros[spline(zeros, 1) > 0]
    turning = spline.derivative().roots(extrapolate=False)
    return float(np.mean(np.diff(upward))), float(np.max(spline(turning)))


def unit_tank_wave(mu: float, step_s: float, duration_s: float) -> np.ndarray:
    """Voltage of the unit circuit after it has settled."""
    grid = LaneGrid(
        rate_hz=1.0 / step_s,
        frames=round(duration_s / step_s),
        settle_frames=round((20.0 + 40.0 / mu) / step_s),
        substeps=1,
    )
    start = np.array([[2.0], [0.0]])
    return integrate_lanes(tank_rates(unit_tank(mu)), start, grid=grid, keep=slice(0, 1))[:, 0, 0]


# Source: Hairer, Norsett and Wanner 1993, Solving Ordinary Differential Equations I, the van
#     der Pol period at mu = 1 (origin of the constant carried by public test codes); other
#     mu: Taylor series of order 36 in arbitrary precision, closure below 1e-27
# Read: secondary (public test codes of integrators carry period and amplitude at mu = 1);
#     every digit used here recomputed by the Taylor series
# Printed: T = 6.6632868593231301896996820305 and x_max = 2.00861986087484313 at mu = 1
# Converted: nothing; the circuit has L = C = 1 and its voltage obeys the same equation
# Tolerance: fourth-order step 0.01: relative 1e-10 a step, held at 2e-8 for the stiffer mu;
#     the peak carries the cubic spline's h^4 / 384 as well
@pytest.mark.parametrize(
    ("mu", "period", "peak"),
    [
        (0.2, 6.298876713852454312, 2.000413678992092132),
        (0.5, 6.380675801773586284, 2.002487930447108447),
        (1.0, 6.663286859323130189, 2.008619860874843136),
        (2.0, 7.629874479674841632, 2.019891384667136024),
        (5.0, 11.61223066771957003, 2.021508061562321324),
    ],
)
def test_the_circuit_has_the_periods_of_the_van_der_pol_equation(mu, period, peak):
    """The physics that every injected capture rests on."""
    step_s = 0.01 if mu < 3 else 0.0025
    found_period, found_peak = period_and_peak(unit_tank_wave(mu, step_s, 5 * period), step_s)
    assert found_period == pytest.approx(period, rel=2e-8)
    assert found_peak == pytest.approx(peak, rel=2e-8)


def unit_rig(mu: float) -> QuietRig:
    """The unit circuit on 30 steps a cycle."""
    values = unit_tank(mu)
    quiet = quiet_tank(values, 16.0 * values.tank_hz)
    assert quiet.substeps == 2
    return quiet


# Source: averaging of the forced van der Pol equation (textbook result F / 4), exact first
#     order as the first Fourier coefficient of the phase response, by the adjoint equation
# Read: recalled (F / 4); computed (the digits)
# Printed: half-width per unit of forcing 0.250253019 at mu = 0.1, 0.255804088 at mu = 0.5
# Converted: an injected current I cos wt forces v'' by I w, w the free rate, so half-width in
#     Hz is the figure times I w / (2 pi)
# Tolerance: 2 %: terms of second order in F, and a bracket of 0.3 % of the half-width
@pytest.mark.parametrize(
    ("mu", "per_force"),
    [pytest.param(0.1, 0.250253019, marks=pytest.mark.long), (0.5, 0.255804088)],
)
def test_the_lock_half_width_of_the_circuit_is_that_of_the_phase_response(mu, per_force):
    """The true edges that the scenario is judged by."""
    force = 0.02
    quiet = unit_rig(mu)
    edges = find_lock_edges(quiet, drive_v=force, half_width_hz=per_force * force / (2 * np.pi))
    expected_hz = per_force * force * edges.free_hz
    assert edges.upper_hz - edges.free_hz == pytest.approx(expected_hz, rel=0.02)
    assert edges.free_hz - edges.lower_hz == pytest.approx(expected_hz, rel=0.02)


# Source: as above, averaging: lock half-width F / (2 A), A the free amplitude
# Read: recalled; derived again from the energy balance of the cubic element
# Printed: A = 2 for the unit circuit
# Converted: amplitude of the integrated wave against sqrt(4 gain / (3 cubic)), V
# Tolerance: the free wave holds mu^2 / 16 of harmonics and mu^2 / 96 of fundamental
def test_the_free_amplitude_of_the_physical_tank_is_that_of_averaging():
    """Coupling is stated per ampere through this amplitude."""
    values = TankValues()
    step = DriveStep(drive_v=0.0, drive_hz=500.0, before_hz=500.0)
    grid = LaneGrid(rate_hz=8000.0, frames=1600, settle_frames=800)
    volts = integrate_tank(values, [step], grid=grid, rng=None)[:, 0]
    assert np.sqrt(2.0) * np.std(volts) == pytest.approx(values.amplitude_v, rel=2e-3)


# Source: Abramowitz and Stegun 1964, 17.3: complete elliptic integral; pendulum period
#     T / T0 = (2 / pi) K(sin^2(theta / 2)); the value at 90 degrees is classical
# Read: recalled, recomputed to 30 digits
# Printed: 1.00190718814322 (10 deg), 1.01740879759596 (30), 1.07318200714936 (60),
#     1.18034059901610 (90), 1.76220372950376 (150)
# Converted: nothing; one clock with no escapement and a beam that cannot move
# Tolerance: fourth-order step of 0.02: 2e-9 relative a step; 1e-7 held
@pytest.mark.parametrize(
    ("swing_deg", "ratio"),
    [
        (10, 1.00190718814322),
        (30, 1.01740879759596),
        (60, 1.07318200714936),
        (90, 1.18034059901610),
        (150, 1.76220372950376),
    ],
)
def test_a_clock_without_escapement_swings_as_a_pendulum(swing_deg, ratio):
    """Clocks' frequency depends on their swing by this law."""
    settings = ClockSettings(mu=1e-12, beta=0.0)
    swing = np.radians(swing_deg)
    grid = LaneGrid(rate_hz=50.0, frames=2600, substeps=1)
    start = np.array([[swing], [0.0], [0.0], [0.0], [0.0]])
    rates = clock_rates(settings, np.zeros(1), 1.0)
    wave = integrate_lanes(rates, start, grid=grid, keep=slice(0, 1))[:, 0, 0]
    period, _ = period_and_peak(wave, 0.02)
    assert period / (2 * np.pi) == pytest.approx(ratio, rel=1e-7)
