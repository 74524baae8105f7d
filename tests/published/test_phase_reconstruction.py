"""Protophase, products of signals, phase between markers (I1 - I3)."""

from __future__ import annotations

import math

import numpy as np
import pytest

from rig.phases.estimate import track_one
from rig.phases.events import between_instants
from rig.phases.protophase import cycle_coefficients, protophase_to_phase
from rig.phases.settings import PhaseSettings

TWO_PI = 2.0 * math.pi


def test_protophase_of_a_known_density_becomes_its_phase():
    """The one density for which the sum ends after its first term."""
    # Source: Kralemann et al. 2007, Phys. Rev. E 76, 055201; 2008, 77, 066205
    # Read: recalled, derived again
    # Printed: density (1 + .6 cos theta) / 2 pi: S_1 = .3, S_n = 0, phi = theta + .6 sin theta
    # Converted: no
    # Tolerance: 1e-9: the mean over an even phase is exact but for rounding
    even = np.arange(40 * 1000) * TWO_PI / 1000.0
    theta = even.copy()
    for _ in range(60):  # Newton: theta + .6 sin theta = phi
        theta -= (theta + 0.6 * np.sin(theta) - even) / (1.0 + 0.6 * np.cos(theta))
    # The whole of the record's cycles are used, so one more sample closes the last.
    theta = np.append(theta, 40 * TWO_PI)
    means, cycles = cycle_coefficients(theta, np.ones(theta.size, dtype=bool))
    assert cycles == 40
    assert means[0] == pytest.approx(0.3, abs=1e-9)
    assert np.all(np.abs(means[1:]) < 1e-9)
    found = protophase_to_phase(theta, means)
    assert np.abs(found - (theta + 0.6 * np.sin(theta))).max() < 1e-7
    assert np.abs(found[:-1] - even).max() < 1e-7


def test_slow_factor_is_the_amplitude_and_leaves_the_phase(slow):
    """A product whose spectra lie apart keeps the phase of its fast factor."""
    # Source: Bedrosian 1963, Proc. IEEE 51, 868; Boashash 1992, Proc. IEEE 80, 520
    # Read: recalled, derived again; H{f g} = f H{g} to 4e-14 by transform
    # Printed: f = 1 + .5 cos 3, g = cos 40
    # Converted: frequencies taken in Hz
    # Tolerance: rejection of the filter, 80 dB
    time = np.arange(20_000) / 1000.0
    factor = 1.0 + 0.5 * np.cos(TWO_PI * 3.0 * time)
    (channel,) = slow.memory_channels(factor * np.cos(TWO_PI * 40.0 * time), 1000.0)
    track = track_one(channel, settings=PhaseSettings(method="analytic", band_hz=(30.0, 50.0)))
    frames = np.rint(track.time_s * 1000.0).astype(int)
    error = slow.true_errors_rad(track, (TWO_PI * 40.0 * time)[frames])
    assert np.abs(error).max() < 3e-4
    assert np.abs(track.amplitude - factor[frames])[track.valid].max() < 3e-4


def test_a_fast_factor_is_not_the_amplitude(slow):
    """The counter-example: twice the frequency in the factor, and the product is two lines."""
    # Source: Bedrosian 1963, the condition left unmet
    # Read: recalled; error of the wrong form 1.0
    # Printed: f = cos 80, g = cos 40: H{f g} = H{f} g
    # Converted: frequencies taken in Hz; cos 80 cos 40 = (cos 40 + cos 120) / 2
    # Tolerance: rejection of the filter, 80 dB
    time = np.arange(20_000) / 1000.0
    product = np.cos(TWO_PI * 80.0 * time) * np.cos(TWO_PI * 40.0 * time)
    (channel,) = slow.memory_channels(product, 1000.0)
    track = track_one(channel, settings=PhaseSettings(method="analytic", band_hz=(30.0, 50.0)))
    assert np.abs(track.amplitude[track.valid] - 0.5).max() < 3e-4


def test_phase_between_markers_is_one_turn_an_interval():
    """Two pi a marker, straight between, momentary frequency one over the interval."""
    # Source: common practice of marker phases
    # Read: practice
    # Printed: 2 pi per marker, f_i = 1 / T_i
    # Converted: turns
    # Tolerance: exact but for rounding
    event_s = np.array([0.0, 1.0, 1.5, 3.5])
    time_s = np.array([0.25, 1.25, 2.0, 3.0])
    inside, turns = between_instants(event_s, np.arange(4.0), time_s, np.ones(3, dtype=bool))
    assert inside.all()
    assert turns == pytest.approx([0.25, 1.5, 2.25, 2.75], abs=1e-12)
