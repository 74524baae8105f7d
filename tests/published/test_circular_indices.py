"""Synchronisation indices and surrogates: expectations, densities, invariants (H7 to H10)."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.circular import bin_count, conditional_index, expected_resultant, shannon_index
from fit.surrogates import randomise_phases

TURN = 2 * math.pi


@pytest.mark.parametrize(("count", "counted"), [(10, 0.2818), (50, 0.1254)])
def test_random_directions_have_a_resultant_above_zero(rng, count, counted):
    """An index of 0.28 over ten cycles is what no coupling at all gives."""
    # Source: derived; E[R^2] = 1/N, E[R] near sqrt(pi / 4N); counted over 400,000 draws
    # Read: computed
    # Printed: .2818 (N = 10), .1254 (N = 50)
    # Converted: no
    # Tolerance: 1 % for the law at N = 10, four standard errors of 20,000 draws for the mean
    drawn = np.abs(np.exp(1j * rng.uniform(0, TURN, (20_000, count))).mean(axis=1))
    assert expected_resultant(count) == pytest.approx(counted, rel=0.01)
    assert drawn.mean() == pytest.approx(counted, abs=4 * drawn.std() / math.sqrt(20_000) + 5e-5)
    assert (drawn**2).mean() == pytest.approx(1 / count, rel=0.04)


@pytest.mark.parametrize(("samples", "classes"), [(1000, 29.6275), (10_000, 74.4476)])
def test_number_of_classes(samples, classes):
    """The entropy index depends on it, so it is fixed by the sample size."""
    # Source: Otnes and Enochson via Le Van Quyen et al. 2001, exp(.626 + .4 ln(M - 1))
    # Read: in a secondary source
    # Printed: 29.6275 (M = 1,000), 74.4476 (M = 10,000)
    # Converted: rounded to whole classes
    # Tolerance: none, an integer
    assert bin_count(samples) == round(classes)


@pytest.mark.parametrize("bins", [16, 32])
@pytest.mark.parametrize("kappa", ["0.5", "1", "2", "5"])
def test_entropy_index_of_a_von_mises_density(check_tables, kappa, bins):
    """A density known in closed form gives the index without chance."""
    # Source: Tass et al. 1998, PRL 81, 3291, rho = (ln N - S) / ln N
    # Read: recalled; class probabilities by quadrature
    # Printed: stored table, 12 digits (kappa 1, 16 classes: .0748853853)
    # Converted: no
    # Tolerance: 2e-4, angles at the middles of 20,000 equal shares of the density
    rows = check_tables["circular"]["tass_entropy_index_vonMises"]["rows"]
    row = next(row for row in rows if float(row["kappa"]) == float(kappa))
    grid = np.linspace(-math.pi, math.pi, 200_001)
    density = np.exp(float(kappa) * (np.cos(grid) - 1))
    share = np.concatenate(([0.0], np.cumsum((density[1:] + density[:-1]) / 2)))
    angles = np.interp((np.arange(20_000) + 0.5) / 20_000, share / share[-1], grid)
    assert float(shannon_index(angles, bins)[0]) == pytest.approx(float(row[f"N{bins}"]), abs=2e-4)


def test_entropy_index_runs_from_zero_to_one():
    """Even is 0, all in one class is 1."""
    # Source: Tass et al. 1998, PRL 81, 3291
    # Read: recalled
    # Printed: limits 0 and 1
    # Converted: no
    # Tolerance: rounding
    even = (np.arange(1600) + 0.5) / 1600 * TURN
    assert float(shannon_index(even, 16)[0]) == pytest.approx(0.0, abs=1e-12)
    assert float(shannon_index(np.full(100, 1.0), 16)[0]) == pytest.approx(1.0, abs=1e-12)


def test_conditional_index_runs_from_its_bias_to_one(rng):
    """A perfect lock falls short of 1 only by the width of a class."""
    # Source: Tass et al. 1998, PRL 81, 3291
    # Read: recalled
    # Printed: limits 1 (perfect lock) and 0 (independent)
    # Converted: class width sin(pi/N) / (pi/N); bias sqrt(pi / 4n) with n values in a class
    # Tolerance: 1e-3 and 5 %
    phase = rng.uniform(0, TURN, 40_000)
    narrow = math.sin(math.pi / 16) / (math.pi / 16)
    locked = float(conditional_index(phase, phase + 0.7, 16)[0])
    free = float(conditional_index(phase, rng.uniform(0, TURN, 40_000), 16)[0])
    assert locked == pytest.approx(narrow, abs=1e-3)
    # The mean over 16 classes of a Rayleigh variable has a deviation of 13 %.
    assert free == pytest.approx(expected_resultant(40_000 / 16), rel=4 * 0.13)


@pytest.mark.parametrize("count", [255, 256])
def test_a_phase_randomised_record_keeps_its_periodogram(rng, count):
    """All that is linear is kept; only the relation between frequencies goes."""
    # Source: Theiler et al. 1992, Physica D 58, 77
    # Read: recalled
    # Printed: periodogram kept
    # Converted: no
    # Tolerance: 1e-12 of the largest line
    values = np.cumsum(rng.standard_normal(count))
    there, here = (np.abs(np.fft.rfft(part)) for part in (values, randomise_phases(values, rng)))
    np.testing.assert_allclose(here, there, atol=1e-12 * there.max())
