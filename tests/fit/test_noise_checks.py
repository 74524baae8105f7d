"""Cross-checks put on an estimate: what the equation predicts, and notes where it fails."""

from __future__ import annotations

import math
import tracemalloc
from dataclasses import replace

import numpy as np
import pytest

from fit.adler import AdlerSettings, estimate_adler
from fit.noise_checks import with_checks, without_hidden_noise
from fit.noise_inverse import invert_rate_and_length
from fit.noise_physics import mean_rate_rad_s, resultant_length
from fit.records import AdequacyTest, PsiSeries
from rig.quantities import Quantity, undetermined


def simulated(seed, detuning, *, diffusion=0.05, count=1500):
    """Return psi of a pair with K = 1 rad/s by small Euler steps, and its estimate."""
    rng = np.random.default_rng(seed)
    psi, seen = 0.0, np.empty(count)
    kicks = math.sqrt(2.0 * diffusion * 0.02) * rng.standard_normal((count, 5))
    for sample in range(count):
        seen[sample] = psi
        for kick in kicks[sample]:
            psi += 0.02 * (detuning - math.sin(psi)) + kick
    record = PsiSeries(step_s=0.1, segments=(seen,), start_s=(0.0,))
    return record, estimate_adler([record], settings=AdlerSettings(intervals=False))[0]


def test_a_good_fit_agrees_with_its_own_predictions():
    """Rate within its error, spread of the right size, no note."""
    record, estimate = simulated(1, 1.25)
    found = with_checks(record, estimate)
    checks = dict(found.checks)
    seen_hz = (record.segments[0][-1] - record.segments[0][0]) / record.duration_s / math.tau
    predicted = checks["mean rate predicted"]
    assert predicted.value == pytest.approx(seen_hz, abs=3.0 * predicted.u)
    assert checks["resultant length predicted"].value == pytest.approx(
        abs(np.mean(np.exp(1j * record.segments[0]))), abs=0.05
    )
    assert checks["effective diffusion predicted"].value > 0.05
    assert found.notes == estimate.notes


def test_slips_are_predicted_inside_the_region():
    """Both directions, with the ratio exp(2 pi detuning/D)."""
    record, estimate = simulated(2, 0.85, diffusion=0.1)
    checks = dict(with_checks(record, estimate).checks)
    forward, backward = (checks[f"slips {way} predicted"].value for way in ("forward", "backward"))
    ratio = math.tau**2 * estimate.detuning_hz.value / estimate.noise_rad2_s.value
    assert math.log(forward / backward) == pytest.approx(ratio, rel=1e-6)


def test_a_wrong_estimate_is_found_out():
    """An estimate that does not belong to the record: the mean rate tells."""
    record, estimate = simulated(3, 1.25)
    wrong = replace(estimate, detuning_hz=Quantity(value=0.5, u=0.01, unit="Hz"))
    notes = with_checks(record, wrong).notes
    assert any("standard errors from" in note for note in notes)


def test_an_independent_estimate_that_disagrees_is_noted():
    """Any check named "... by ..." is held against the fit."""
    record, estimate = simulated(4, 1.25)
    odd = ("coupling by rate and resultant", Quantity(value=0.5, u=0.01, unit="Hz"))
    found = with_checks(record, replace(estimate, checks=(odd,)))
    assert any(note.startswith("coupling by rate and resultant is 0.5 Hz") for note in found.notes)


def test_without_a_coupling_nothing_is_predicted():
    """An undetermined estimate stays as it is."""
    record, estimate = simulated(5, 1.25)
    missing = replace(estimate, coupling_hz=undetermined("Hz", "steady lock"))
    assert with_checks(record, missing) == missing


@pytest.mark.parametrize("pair", [(1.05, 1.0, 0.01), (1.25, 1.0, 0.1), (3.0, 1.0, 0.3)])
def test_two_numbers_give_the_pair_back(pair):
    """The inversion against the laws it inverts, and its sign."""
    rate, length = mean_rate_rad_s(*pair), resultant_length(*pair)
    assert invert_rate_and_length(rate, length, pair[2]) == pytest.approx(pair[:2], rel=1e-8)
    assert invert_rate_and_length(-rate, length, pair[2])[0] == pytest.approx(-pair[0], rel=1e-8)


def test_two_numbers_without_noise_are_exact():
    """Beat 0.75 and length 0.5 are detuning 1.25 and coupling 1; nonsense gives nothing."""
    assert invert_rate_and_length(0.75, 0.5, 0.0) == pytest.approx((1.25, 1.0), rel=1e-14)
    assert invert_rate_and_length(0.0, 0.5, 0.1) is None
    assert invert_rate_and_length(1.0, 1.0, 0.1) is None


@pytest.mark.parametrize("length", [1e-12, 0.3, 0.9, 0.999999, 1.0 - 1e-15])
@pytest.mark.parametrize("rate_rad_s", [5e-324, 1e-200, 1e-9, 1.0, 1e6, 1e11, 1e200, 1.7e308])
@pytest.mark.parametrize("noise_rad2_s", [0.0, 5e-324, 1e-30, 1.0, 1e11, 1e308])
def test_two_numbers_of_any_size_are_inverted_with_bounded_work(rate_rad_s, length, noise_rad2_s):
    """Used to ask for gigabytes (MemoryError) near the edge at 1e11 rad/s and unit noise."""
    tracemalloc.start()
    found = invert_rate_and_length(rate_rad_s, length, noise_rad2_s)
    _, most = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert most < 20e6
    assert found is None or all(math.isfinite(value) for value in found)


def test_noise_is_not_given_where_the_signal_drowns():
    """At 6 dB noise makes slips of its own: D used to come out ten times too high."""
    record, estimate = simulated(6, 1.25)
    found = without_hidden_noise(record, estimate, snr_db=6.0)
    assert found.noise_rad2_s.value is None
    assert "6.0 dB" in found.noise_rad2_s.reason
    assert found.coupling_hz == estimate.coupling_hz
    assert without_hidden_noise(record, estimate, snr_db=12.0) == estimate


def test_noise_is_not_given_from_shreds():
    """Between many gaps psi is sampled within the smearing: D used to come out at half."""
    record, estimate = simulated(7, 1.25)
    shreds = replace(record, lost_s=0.4 * record.step_s)
    found = without_hidden_noise(shreds, estimate, snr_db=40.0)
    assert "between its gaps" in found.noise_rad2_s.reason
    whole = replace(record, lost_s=0.1 * record.step_s)
    assert without_hidden_noise(whole, estimate, snr_db=40.0) == estimate


def test_noise_is_not_given_where_coloured_sensor_noise_may_be_it():
    """Innovations that are not white beside a loud sensor do not show D; a quiet one may."""
    record, estimate = simulated(8, 1.25)
    fired = AdequacyTest(
        name="whiteness of innovations",
        statistic=60.0,
        threshold=37.6,
        fired=True,
        size=0.01,
        meaning="innovations are not white",
    )
    coloured = replace(estimate, tests=(fired,))
    step_rad2 = 2.0 * estimate.noise_rad2_s.value * record.step_s
    loud = replace(record, noise_start_rad2=0.3 * step_rad2)
    quiet = replace(record, noise_start_rad2=0.02 * step_rad2)
    assert without_hidden_noise(loud, coloured, snr_db=40.0).noise_rad2_s.value is None
    assert without_hidden_noise(loud, estimate, snr_db=40.0) == estimate
    assert without_hidden_noise(quiet, coloured, snr_db=40.0) == coloured
