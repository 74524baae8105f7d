"""The noisy phase equation against its published laws: rate, diffusion, slips, edge, spread."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.special import iv

from fit.noise_physics import (
    EDGE_RATE,
    asymptotic_errors,
    effective_diffusion_rad2_s,
    kramers_rate_rad_s,
    mean_rate_rad_s,
    preferred_angle_rad,
    resultant_length,
    slip_rates,
    stationary_moments,
)
from rig.errors import FitError


def test_all_96_rows_of_the_table_of_rate_diffusion_and_spread(check_tables):
    """Eight noise levels by twelve detunings: the whole range from quiet lock to free drift."""
    # Source: Stratonovich 1967, Topics in the Theory of Random Noise, vol. 2, ch. 9 (rate);
    #   Reimann et al. 2001, Phys. Rev. Lett. 87, 010602 (diffusion).
    # Read: laws recalled; the table was computed with 160 digits by three routes.
    # Printed: fixtures/check_tables.json, noisy_adler, 12 significant digits.
    # Converted: rates in units of K = 1 rad/s.
    # Tolerance: 12 printed digits leave 5e-12; the diffusion loses up to 2e-9 to rounding where
    #   slips are rare.
    rows = check_tables["noisy_adler"]["rows"]
    assert len(rows) == 96
    for row in rows:
        pair = float(row["dw_over_K"]), 1.0, float(row["D_over_K"])
        assert mean_rate_rad_s(*pair) == pytest.approx(float(row["v_over_K"]), rel=1e-11)
        diffusion = effective_diffusion_rad2_s(*pair)
        assert diffusion == pytest.approx(float(row["Deff_over_K"]), rel=3e-9)
        assert resultant_length(*pair) == pytest.approx(float(row["R"]), rel=1e-11)
        assert preferred_angle_rad(*pair) == pytest.approx(float(row["arg_mean"]), rel=1e-10)


def test_asymptotic_errors_follow_the_same_table(check_tables):
    """What a record of given length can tell at best about detuning, coupling and offset."""
    # Source: Fisher information of a diffusion, (1/2D) <g g'>, textbook.
    # Read: derived; checked against seeded simulation where the table was made.
    # Printed: columns se3_dw, se3_K, se3_Kphi0 in units of sqrt(2 D/T).
    # Converted: T = 2 D makes the unit 1.
    # Tolerance: 12 printed digits, inverse of a 3 x 3 matrix.
    for row in check_tables["noisy_adler"]["rows"]:
        diffusion = float(row["D_over_K"])
        found = asymptotic_errors(float(row["dw_over_K"]), 1.0, diffusion, 2.0 * diffusion)
        expected = [float(row[name]) for name in ("se3_dw", "se3_K", "se3_Kphi0")]
        assert found == pytest.approx(expected, rel=1e-10)


def test_rows_in_units_of_junction_noise(check_tables):
    """The same law as printed for junctions: gamma = 2 K/D, x = detuning over coupling."""
    # Source: Ambegaokar and Halperin 1969, Phys. Rev. Lett. 22, 1364.
    # Read: recalled formula; values recomputed by four integrals.
    # Printed: v(0.5, 4) = 0.175593406037, v(0.2, 50) = 4.5464522392e-16 and the table.
    # Converted: D = 2/gamma in units of K.
    # Tolerance: half a unit of the last printed digit is 3e-12 relative.
    for row in check_tables["ambegaokar_halperin_v"]["rows"]:
        found = mean_rate_rad_s(float(row["x"]), 1.0, 2.0 / float(row["gamma"]))
        assert found == pytest.approx(float(row["v"]), rel=2e-11)
    assert mean_rate_rad_s(0.2, 1.0, 2.0 / 50.0) == pytest.approx(4.5464522392e-16, rel=2e-11)


def test_slip_rate_below_the_edge_follows_kramers(check_tables):
    """Deep in lock the classic escape law must come out, with its known overestimate."""
    # Source: Kramers 1940; Ambegaokar and Halperin 1969, low-temperature limit.
    # Read: recalled; recomputed.
    # Printed: ratio to the exact rate at dw = K/2: 1.0245239 at D = 0.05 K, 1.0558285 at 0.1.
    # Converted: none.
    # Tolerance: the table prints 10 digits of the rate.
    for row in check_tables["kramers_slip"]["rows"]:
        pair = float(row["dw_over_K"]), 1.0, float(row["D_over_K"])
        assert kramers_rate_rad_s(*pair) == pytest.approx(float(row["kramers_v"]), rel=1e-9)
        assert mean_rate_rad_s(*pair) == pytest.approx(float(row["exact_v"]), rel=1e-9)
    ratio = kramers_rate_rad_s(0.5, 1.0, 0.05) / mean_rate_rad_s(0.5, 1.0, 0.05)
    assert ratio == pytest.approx(1.02452, abs=5e-6)


def test_rate_at_the_edge_grows_with_the_cube_root_of_the_noise(check_tables):
    """At |detuning| = coupling noise alone moves psi: a pure number times K (D/K)^(1/3)."""
    # Source: passage-time law at a saddle-node; constant 2 pi / [(sqrt(2 pi)/3) G(1/6) 24^(1/6)].
    # Read: derived; checked against the exact rate to D/K = 1e-5.
    # Printed: 0.795441278045.
    # Converted: none.
    # Tolerance: printed digits of the constant; 12 digits of the rates.
    constant = math.tau / (math.sqrt(math.tau) / 3.0 * math.gamma(1 / 6) * 24.0 ** (1 / 6))
    assert pytest.approx(constant, abs=1e-12) == EDGE_RATE
    for row in check_tables["threshold_scaling"]["rows"]:
        found = mean_rate_rad_s(1.0, 1.0, float(row["D_over_K"]))
        assert found == pytest.approx(float(row["v_over_K"]), rel=1e-11)
    assert mean_rate_rad_s(1.0, 1.0, 1e-5) == pytest.approx(EDGE_RATE * 1e-5 ** (1 / 3), rel=1e-8)


def test_slips_of_a_loop_without_detuning(check_tables):
    """Cycle slips of a first-order loop: D/(2 pi^2 I0(alpha)^2) both ways together."""
    # Source: Viterbi 1963, Proc. IEEE 51, 1737.
    # Read: recalled; identity with the diffusion law checked.
    # Printed: table first_order_loop_viterbi, 12 digits.
    # Converted: alpha = K/D.
    # Tolerance: 12 printed digits.
    for row in check_tables["first_order_loop_viterbi"]["rows"]:
        alpha = float(row["alpha"])
        slips = slip_rates(0.0, alpha, 1.0)
        total = slips.forward_hz + slips.backward_hz
        assert total == pytest.approx(float(row["slip_rate_over_D"]), rel=1e-10)
        assert resultant_length(0.0, alpha, 1.0) == pytest.approx(float(row["R"]), rel=1e-11)


@pytest.mark.parametrize("pair", [(0.5, 1.0, 0.3), (1.2, 1.0, 0.5), (-2.0, 1.0, 1.0)])
def test_rate_agrees_with_direct_quadrature_of_the_stationary_law(pair):
    """A witness that shares no formula: flux of the stationary density by two nested integrals."""
    detuning, coupling, noise = pair

    def potential(psi: float) -> float:
        return (-detuning * psi - coupling * math.cos(psi)) / noise

    def inner(psi: float) -> float:
        rising = quad(
            lambda ahead: math.exp(potential(ahead) - potential(psi)), psi, psi + math.tau
        )
        return rising[0]

    area = quad(inner, 0.0, math.tau)[0]
    flux = noise * -math.expm1(-math.tau * detuning / noise) / area
    assert mean_rate_rad_s(*pair) == pytest.approx(math.tau * flux, rel=1e-7)


def test_without_detuning_the_diffusion_is_that_of_lifson_and_jackson():
    """D / I0(K/D)^2, a closed form for the whole range of noise."""
    for noise in (0.05, 0.3, 2.0, 50.0):
        expected = noise / iv(0, 1.0 / noise) ** 2
        assert effective_diffusion_rad2_s(0.0, 1.0, noise) == pytest.approx(expected, rel=3e-9)


def test_moments_approach_a_von_mises_law_without_detuning():
    """The stationary law of a pair without detuning is von Mises with kappa = K/D."""
    kappa = 3.0
    found = stationary_moments(0.0, kappa, 1.0, 4)
    assert found.real == pytest.approx([iv(k, kappa) / iv(0, kappa) for k in range(5)], rel=1e-10)
    assert np.max(np.abs(found.imag)) < 1e-14


def test_noise_free_limits_are_the_deterministic_ones():
    """Nothing breaks where D is zero or so small that its effect is lost."""
    assert mean_rate_rad_s(1.25, 1.0, 0.0) == pytest.approx(0.75)
    assert mean_rate_rad_s(-1.25, 1.0, 1e-7) == pytest.approx(-0.75, rel=1e-6)
    assert mean_rate_rad_s(0.5, 1.0, 0.0) == 0.0
    assert mean_rate_rad_s(0.5, 0.0, 0.1) == 0.5
    assert 0.0 <= mean_rate_rad_s(0.5, 1.0, 1e-4) < 1e-300


@pytest.mark.parametrize("bad", [(math.nan, 1.0, 0.1), (0.1, -1.0, 0.1), (0.1, 1.0, -0.1)])
def test_values_without_meaning_are_refused(bad):
    """A NaN or a negative strength gives one line, no number."""
    with pytest.raises(FitError):
        mean_rate_rad_s(*bad)
    with pytest.raises(FitError):
        effective_diffusion_rad2_s(*bad)
