"""The phase difference: signs, uncertainties, gaps, refusals."""

from __future__ import annotations

import math
import re
from dataclasses import replace

import numpy as np
import pytest

from fit.difference import Order, form_difference, valid_runs
from fit.slips import find_slips
from fit.windows import qualifying_unions
from rig.errors import PhaseError
from rig.phases.track import PhaseComponent
from rig.quantities import Quantity, undetermined

TURN = 2 * math.pi
TIME = np.arange(0, 60, 0.05)


def pair(tools, driven_hz=3.0, reference_hz=1.0, **changes):
    """Two even phases on one grid."""
    return (
        replace(tools.track(TURN * driven_hz * TIME, 20.0, "driven"), **changes),
        tools.track(TURN * reference_hz * TIME, 20.0, "reference"),
    )


def test_psi_is_n_driven_minus_m_reference(psi_tools):
    """The sign of every detuning and slip rests on this one line."""
    driven, reference = pair(psi_tools, 3.1, 1.0)
    psi = form_difference(driven, reference, Order(n=1, m=3)).psi_rad
    # Rounding of phases of about 1,000 rad.
    np.testing.assert_allclose(psi, TURN * 0.1 * TIME, atol=1e-9)


def test_swapping_the_roles_at_one_to_one_flips_the_sign(psi_tools):
    """Roles of a mutual pair fix signs and nothing else."""
    driven, reference = pair(psi_tools, 1.1, 1.0)
    there = form_difference(driven, reference, Order()).psi_rad
    np.testing.assert_array_equal(there, -form_difference(reference, driven, Order()).psi_rad)


def test_noise_adds_in_quadrature_with_the_weights(psi_tools):
    """An order 2:3 triples the noise of the reference."""
    driven, reference = pair(psi_tools, u_rad=np.full(TIME.size, 0.004))
    u_rad = form_difference(driven, reference, Order(n=2, m=3)).u_rad
    np.testing.assert_allclose(u_rad, math.hypot(0.008, 0.003), rtol=1e-12)


def test_systematic_parts_combine_with_the_weights(psi_tools):
    """A sensor's phase error is common to all samples and must not average out."""
    parts = tuple(PhaseComponent(name=k, correction_rad=0, u_rad=0.03) for k in ("skew", "corner"))
    driven, reference = pair(psi_tools, systematic=parts)
    found = form_difference(driven, reference, Order(n=2, m=3)).systematic_u_rad
    assert found == pytest.approx(2 * 0.03 * math.sqrt(2), rel=1e-12)


def test_a_gap_in_either_phase_parts_psi(psi_tools):
    """Turns lost in a gap cannot be counted, so nothing may join its two sides."""
    phase = TURN * TIME
    phase[400:500] = np.nan
    reference = psi_tools.track(TURN * TIME, 20.0)
    found = form_difference(psi_tools.track(phase, 20.0), reference, Order())
    assert valid_runs(found.valid) == ((0, 400), (500, 1200))
    assert np.all(np.isnan(found.psi_rad[400:500]))


def test_the_slower_cycle_and_the_longer_smearing_are_kept(psi_tools):
    """One independent phase a cycle: the slower oscillator sets what psi can show."""
    driven, reference = pair(psi_tools, smear_s=0.7, correlation_samples=3.0)
    found = form_difference(driven, reference, Order(n=1, m=3))
    assert found.cycle_rate_hz == pytest.approx(1.0, rel=1e-9)
    assert (found.smear_s, found.correlation_samples) == (0.7, 3.0)


def test_the_narrower_band_limits_what_psi_can_show(psi_tools):
    """A driven phase n times pulled leaves its band at n times the offset of its edge."""
    driven, reference = pair(psi_tools, band_hz=(2.5, 3.2))
    found = form_difference(driven, reference, Order(n=2, m=6))
    assert found.band_half_hz == pytest.approx(2 * 0.2, rel=1e-9)


def test_weak_signals_are_noted(psi_tools):
    """Below 10 dB in band noise makes slips of its own."""
    driven, reference = pair(psi_tools, snr_db=7.5)
    assert "slips are not reliable" in form_difference(driven, reference, Order()).notes[0]


@pytest.mark.parametrize(
    ("changes", "wording"),
    [
        ({"rate_hz": 21.0}, "both phases must stand on one grid"),
        ({"start_s": 0.02}, "both phases must stand on one grid"),
        ({"frequency_hz": undetermined("Hz", "no line found")}, "no frequency (no line found)"),
    ],
)
def test_unequal_grids_and_unknown_frequencies_are_refused(psi_tools, changes, wording):
    """Samples of different times subtract to nonsense."""
    driven, reference = pair(psi_tools, **changes)
    with pytest.raises(PhaseError, match=re.escape(wording)):
        form_difference(driven, reference, Order())


def test_a_frequency_of_either_sign_gives_a_positive_rate(psi_tools):
    """A counter-rotating phase falls; its cycle rate does not."""
    driven, reference = pair(psi_tools, frequency_hz=Quantity(value=-3.0, u=0.0, unit="Hz"))
    assert form_difference(driven, reference, Order()).driven_frequency_hz == 3.0


def test_one_turn_lost_by_the_driven_is_one_slip_at_one_to_three(psi_tools):
    """psi in turns of the driven phase counts a slip once, whatever the order."""
    step = 1 / (1 + np.exp(-(TIME - 30) * 3))
    driven = psi_tools.track(TURN * (3 * TIME + step), 20.0, "driven")
    reference = psi_tools.track(TURN * TIME, 20.0, "reference")
    slips = find_slips(form_difference(driven, reference, Order(n=1, m=3)))
    assert [slip.turns for slip in slips] == [1]


def test_both_forms_of_the_difference_give_the_same_episodes(psi_tools, rng):
    """n phi1 - m phi2 has modulus 2 pi, (n/m) phi1 - phi2 has 2 pi / m: one rule, two scales."""
    psi = np.cumsum(rng.normal(0.02, 0.2, 3000))
    whole = qualifying_unions(psi, math.pi, 60)
    assert whole
    assert whole == qualifying_unions(psi / 3, math.pi / 3, 60)
