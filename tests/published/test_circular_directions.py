"""Directions: means, spreads and tests against Zar's examples and tables (H1 to H6)."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import special

from fit.circular import (
    angular_deviation_rad,
    corrected_mean_length,
    grouping_factor,
    rayleigh_p,
    rayleigh_p_exact,
    rayleigh_p_zar,
    v_test,
)
from rig.angles import circular_mean_rad, circular_spread_rad, resultant_length
from rig.errors import FitError

EIGHT = np.radians([45, 55, 81, 96, 110, 117, 132, 154])
TEN = np.radians([66, 75, 86, 88, 88, 93, 97, 101, 118, 130])
SIX = np.radians([51, 67, 40, 109, 31, 358])
GROUPS = np.repeat(np.radians(np.arange(15, 360, 30)), [0, 6, 9, 13, 15, 22, 17, 12, 8, 3, 0, 0])


def test_mean_and_spread_of_eight_directions():
    """Every offset and spread in a report is made by these functions."""
    # Source: Zar 2010, Biostatistical Analysis, Example 26.4
    # Read: in a secondary source (tests of a circular-statistics library)
    # Printed: mean 99 deg, r = .82522, s = 34 deg, s0 = 36 deg
    # Converted: degrees to radians
    # Tolerance: half a unit of the last printed digit
    assert math.degrees(circular_mean_rad(EIGHT)) == pytest.approx(99, abs=0.5)
    assert resultant_length(EIGHT) == pytest.approx(0.82522, abs=5e-6)
    assert math.degrees(angular_deviation_rad(resultant_length(EIGHT))) == pytest.approx(
        34, abs=0.5
    )
    assert math.degrees(circular_spread_rad(EIGHT)) == pytest.approx(36, abs=0.5)


def test_rayleigh_test_of_eight_directions(check_tables):
    """The exact integral and the closed form, with the printed bracket of the tables."""
    # Source: Zar 2010, Biostatistical Analysis, Example 27.1
    # Read: in a secondary source (tests of a circular-statistics library)
    # Printed: z = 5.448, .001 < P < .002
    # Converted: no
    # Tolerance: half a unit of the last digit; the bracket; 1e-8 against the stored integral
    length = resultant_length(EIGHT)
    stored = check_tables["circular"]["zar_8"]
    assert 8 * length**2 == pytest.approx(5.448, abs=5e-4)
    assert 0.001 < rayleigh_p_exact(length, 8) < 0.002
    assert rayleigh_p_exact(length, 8) == pytest.approx(stored["p_exact_kluyver"], abs=1e-8)
    assert rayleigh_p_zar(length, 8) == pytest.approx(stored["p_zar"], rel=1e-12)


def test_grouped_directions_are_corrected_for_their_classes(check_tables):
    """Grouping shortens the resultant; the factor undoes it."""
    # Source: Zar 2010, Biostatistical Analysis, Example 26.5
    # Read: in a secondary source (tests of a circular-statistics library)
    # Printed: mean 162 deg, r = .55064, c = 1.0115, corrected s = 54 deg
    # Converted: degrees to radians
    # Tolerance: half a unit of the last printed digit
    assert math.degrees(circular_mean_rad(GROUPS)) == pytest.approx(162, abs=0.5)
    assert resultant_length(GROUPS) == pytest.approx(0.55064, abs=5e-6)
    assert grouping_factor(math.radians(30)) == pytest.approx(1.0115, abs=5e-5)
    corrected = corrected_mean_length(GROUPS, math.radians(30))
    assert corrected == pytest.approx(check_tables["circular"]["zar_grouped"]["R_corrected"])
    assert math.degrees(angular_deviation_rad(corrected)) == pytest.approx(54, abs=0.5)


def test_v_test_against_a_stated_direction():
    """A direction known beforehand makes a sharper test."""
    # Source: Zar 2010, Biostatistical Analysis, Example 27.2
    # Read: in a secondary source (tests of a circular-statistics library)
    # Printed: V = 9.498, u = 4.248
    # Converted: degrees to radians
    # Tolerance: 1e-3, the book rounds intermediate results (unrounded 9.497612 and 4.247461)
    toward, normal = v_test(TEN, math.radians(90))
    assert toward == pytest.approx(9.498, abs=1e-3)
    assert normal == pytest.approx(4.248, abs=1e-3)


def test_strong_data_keep_a_probability_above_zero():
    """A textbook series goes negative (-1.01e-5) on these data."""
    # Source: Zar 2010, Biostatistical Analysis, Example 27.2 (data)
    # Read: in a secondary source (tests of a circular-statistics library)
    # Printed: P < .0005
    # Converted: no
    # Tolerance: the printed bound
    assert 0 < rayleigh_p(TEN) < 5e-4
    assert 0 < rayleigh_p_zar(resultant_length(TEN), 10) < 5e-4


def test_mean_and_variance_of_six_directions():
    """A second source for mean and spread."""
    # Source: Jammalamadaka and SenGupta 2001, Topics in Circular Statistics, six directions
    # Read: in a secondary source (tests of an astronomy library against R)
    # Printed: mean .8487044 rad, variance .1635635
    # Converted: degrees to radians
    # Tolerance: half a unit of the last printed digit
    assert circular_mean_rad(SIX) == pytest.approx(0.8487044, abs=5e-8)
    assert 1 - resultant_length(SIX) == pytest.approx(0.1635635, abs=5e-8)


def test_rayleigh_test_of_ten_angles(check_tables):
    """The exact value stands apart from the series that R prints."""
    # Source: R package CircStats, r.test on ten angles
    # Read: in a secondary source (tests of an astronomy library against R)
    # Printed: R = .774055, p = .0009917748 (series; the exact value is .00100308)
    # Converted: no
    # Tolerance: 5e-7 for R; 1.2 % between series and exact value; 1e-8 for the stored integral
    stored = check_tables["circular"]["circstats_rtest10"]
    angles = np.array(stored["data_rad"])
    assert resultant_length(angles) == pytest.approx(0.774055, abs=5e-7)
    assert rayleigh_p(angles) == pytest.approx(0.0009917748, rel=0.012)
    assert rayleigh_p(angles) == pytest.approx(stored["p_exact_kluyver"], abs=1e-8)


@pytest.mark.parametrize("count", [3, 5, 20])
def test_the_exact_test_agrees_with_random_directions(rng, count):
    """A witness that shares nothing with the integral."""
    # Source: derived; counted over seeded random directions
    # Read: computed here
    # Printed: -
    # Converted: no
    # Tolerance: four standard errors of 40,000 draws
    lengths = np.abs(np.exp(1j * rng.uniform(0, 2 * math.pi, (40_000, count))).mean(axis=1))
    at = float(np.quantile(lengths, 0.95))
    assert rayleigh_p_exact(at, count) == pytest.approx(0.05, abs=4.4e-3)


@pytest.mark.parametrize(
    ("kappa", "printed"),
    [(1, 0.446389965897), (2, 0.697774657964), (5, 0.893383137044), (10, 0.948599825955)],
)
def test_resultant_of_a_von_mises_density(kappa, printed):
    """The stationary psi of a noisy pair at zero detuning has this density, kappa = K/D."""
    # Source: Mardia and Jupp 2000, Directional Statistics, A(kappa) = I1/I0
    # Read: recalled; digits computed with multiple precision
    # Printed: as in the table, 12 digits
    # Converted: no
    # Tolerance: 5e-5, the middles of 4,000 equal shares cut the tails short (3e-5 at kappa 5)
    grid = np.linspace(-math.pi, math.pi, 200_001)
    density = np.exp(kappa * (np.cos(grid) - 1))
    share = np.concatenate(([0.0], np.cumsum((density[1:] + density[:-1]) / 2)))
    angles = np.interp((np.arange(4000) + 0.5) / 4000, share / share[-1], grid)
    assert resultant_length(angles) == pytest.approx(printed, abs=5e-5)
    assert special.i1(kappa) / special.i0(kappa) == pytest.approx(printed, abs=1e-12)
    assert circular_spread_rad(angles) == pytest.approx(math.sqrt(-2 * math.log(printed)), rel=1e-3)


@pytest.mark.parametrize(("resultant", "count"), [(-0.1, 5), (1.1, 5), (math.nan, 5), (0.5, 2)])
def test_what_is_no_resultant_of_several_directions_is_refused(resultant, count):
    """A probability of nonsense would look like one."""
    with pytest.raises(FitError):
        rayleigh_p_exact(resultant, count)
    with pytest.raises(FitError):
        rayleigh_p_zar(resultant, count)
