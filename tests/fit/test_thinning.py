"""psi thinned for the likelihood: which samples are taken, and which never."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from fit.thinning import LEAST_SAMPLES, MOST_SAMPLES, PER_TURN, thin_difference

TURN = 2 * math.pi
RATE_HZ = 100.0


def drift(rate_hz, duration_s):
    """psi that turns at a steady rate."""
    return TURN * rate_hz * np.arange(round(duration_s * RATE_HZ)) / RATE_HZ


def test_samples_are_taken_and_never_averaged(psi_tools, rng):
    """A mean over a step would lower the noise D that is found by up to a third."""
    psi = np.cumsum(0.02 * rng.standard_normal(20_000))
    record = replace(psi_tools.difference(psi, RATE_HZ), start_s=2.0)
    series = thin_difference(record)
    stride = round(series.step_s * RATE_HZ)
    assert stride >= 2
    (segment,) = series.segments
    np.testing.assert_array_equal(segment, psi[::stride])
    assert series.start_s == (2.0,)
    assert series.noise_start_rad2 == pytest.approx(1e-6)


@pytest.mark.parametrize("beat_hz", [0.05, 0.2, 0.5])
def test_a_turn_keeps_thirty_samples(psi_tools, beat_hz):
    """Fewer than a dozen a turn and the fit begins to lose what the record holds."""
    series = thin_difference(psi_tools.difference(drift(beat_hz, 200.0), RATE_HZ))
    per_turn = 1.0 / (beat_hz * series.step_s)
    # The step is a whole number of samples.
    assert PER_TURN <= per_turn + 1e-9
    assert per_turn == pytest.approx(PER_TURN, rel=0.2)


def test_the_step_is_no_shorter_than_the_smearing_of_the_band(psi_tools):
    """Samples closer than that share their noise and would count twice."""
    record = replace(
        psi_tools.difference(drift(2.0, 200.0), RATE_HZ), smear_s=0.05, band_half_hz=10.0
    )
    assert thin_difference(record).step_s >= 0.05 - 1e-12


def test_a_phase_of_markers_gives_one_sample_a_cycle(psi_tools):
    """Between two markers of a 2 Hz oscillator the phase is a straight line: no news."""
    record = psi_tools.difference(drift(0.4, 200.0), RATE_HZ, hz=(2.0, 3.0))
    assert thin_difference(record).step_s >= 0.5 - 1e-12
    banded = replace(record, band_half_hz=1.0)
    assert thin_difference(banded).step_s < 0.1


def test_a_short_record_keeps_its_samples(psi_tools):
    """Two hundred are left even where the step asks for fewer."""
    series = thin_difference(psi_tools.difference(drift(0.01, 5.0), RATE_HZ))
    assert series.segments[0].size >= LEAST_SAMPLES


def test_a_long_record_is_bounded(psi_tools):
    """An hour must not take an hour."""
    series = thin_difference(psi_tools.difference(drift(3.0, 3000.0), RATE_HZ))
    assert sum(part.size for part in series.segments) <= MOST_SAMPLES


def test_stretches_stay_apart(psi_tools):
    """Turns lost in a gap cannot be counted."""
    psi = drift(0.2, 100.0)
    psi[4000:4500] = np.nan
    series = thin_difference(psi_tools.difference(psi, RATE_HZ))
    assert len(series.segments) == 2
    assert series.start_s == pytest.approx((0.0, 45.0))
    assert all(np.all(np.isfinite(part)) for part in series.segments)


def test_single_spikes_do_not_set_the_step(psi_tools):
    """One bad sample in a thousand is no fast turn."""
    psi = drift(0.1, 300.0)
    plain = thin_difference(psi_tools.difference(psi, RATE_HZ)).step_s
    psi[::1000] += 2.0
    assert thin_difference(psi_tools.difference(psi, RATE_HZ)).step_s == pytest.approx(plain)


@pytest.mark.parametrize("parts", [1, 2])
def test_a_psi_that_never_moves_is_thinned_too(psi_tools, parts):
    """One signal in both channels gives exactly zero; an infinite step ended the program."""
    psi = np.zeros(10_000)
    if parts == 2:
        psi[5000] = np.nan
    series = thin_difference(psi_tools.difference(psi, RATE_HZ))
    assert len(series.segments) == parts
    assert sum(part.size for part in series.segments) >= LEAST_SAMPLES


@pytest.mark.parametrize("psi", [[math.nan] * 5, [0.3], []])
def test_nothing_gives_no_segment(psi_tools, psi):
    """A record of gaps is no error; the estimator says why it gives nothing."""
    series = thin_difference(psi_tools.difference(np.array(psi, dtype=float), RATE_HZ))
    assert series.segments == ()
    assert series.duration_s == 0
