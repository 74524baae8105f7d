"""Laws over levels: power tested and not assumed, conversions of levels."""

from __future__ import annotations

import re

import pytest

from fit.laws import amplitude_of_level, coupling_law, pooled
from fit.records import RegionLevel
from rig.errors import FitError
from rig.quantities import undetermined


@pytest.fixture
def levels(sweeps):
    """Make levels from (amplitude, coupling, u) rows."""

    def make(rows):
        none = undetermined("Hz", "not of interest")
        return [
            RegionLevel(
                level=amplitude,
                amplitude=amplitude,
                direction="up",
                interval=1,
                lower_hz=none,
                upper_hz=none,
                width_hz=none,
                coupling_hz=sweeps.known(coupling, u),
                offset_rad=none,
                method="",
                bracket_lower_hz=none,
                bracket_upper_hz=none,
            )
            for amplitude, coupling, u in rows
        ]

    return make


def test_a_proportional_coupling_passes_the_test_of_its_power(levels):
    """kappa is the coupling per amplitude and p = 1 stands."""
    law = coupling_law(levels([(1, 0.5, 0.01), (2, 1.01, 0.01), (4, 1.99, 0.01)]))
    assert law.kappa.value == pytest.approx(0.5, abs=0.01)
    assert law.proportional is not None
    assert not law.proportional.fired


def test_a_square_law_rejects_proportionality_and_says_so(levels):
    """Power 2 (second-order locking) must come out as 2, with kappa for that power."""
    law = coupling_law(levels([(1, 0.5, 0.001), (2, 2.0, 0.004), (3, 4.5, 0.009)]))
    assert law.power.value == pytest.approx(2.0, abs=0.01)
    assert law.proportional is not None
    assert law.proportional.fired
    assert law.kappa.value == pytest.approx(0.5, abs=0.01)
    assert "power 2" in law.notes[0]


def test_one_level_has_a_kappa_and_no_power(levels):
    """A power law needs two amplitudes."""
    law = coupling_law(levels([(2, 1.0, 0.01)]))
    assert law.kappa.value == pytest.approx(0.5)
    assert law.power.value is None
    assert law.proportional is None


def test_no_coupling_gives_reasons(levels):
    """Nothing to fit: both quantities say why."""
    law = coupling_law([])
    assert law.kappa.value is None
    assert "no level" in law.power.reason


def test_scatter_between_levels_widens_the_mean(levels):
    """Stated errors that the levels contradict are not believed (Birge ratio)."""
    mean, slope = pooled([(1.0, 10.0, 0.01), (1.0, 11.0, 0.01)])
    assert mean.u == pytest.approx(0.5, rel=0.01)
    assert slope.value is None


@pytest.mark.parametrize(
    ("level", "kind", "amplitude"),
    [(4.0, "power", 2.0), (20.0, "decibel", 10.0), (3, "amplitude", 3)],
)
def test_levels_become_amplitudes(level, kind, amplitude):
    """Power and decibel levels are converted before any law."""
    assert amplitude_of_level(level, kind) == pytest.approx(amplitude)


@pytest.mark.parametrize(
    ("level", "kind", "text"),
    [(0.0, "power", "must be above 0, got 0"), (1.0, "loudness", "not one of amplitude, power")],
)
def test_levels_that_mean_nothing_are_refused(level, kind, text):
    """A level of zero or of an unknown kind has no amplitude."""
    with pytest.raises(FitError, match=re.escape(text)):
        amplitude_of_level(level, kind)
