"""Spikes: peaks in a stream, refractory time, and the choice of the method by the signal."""

from __future__ import annotations

import math

import numpy as np
import pytest

from rig.phases.estimate import choose_method, track_one
from rig.phases.peaks import PeakFinder
from rig.phases.settings import PhaseSettings
from rig.phases.spike import after_refractory

TWO_PI = 2.0 * math.pi


def beats(rng, count=120, usual_s=0.8, spread_s=0.02):
    """Return instants of spikes that wander."""
    return 0.5 + np.cumsum(usual_s + spread_s * rng.standard_normal(count))


def spiky(time_s, event_s, width_s=0.012):
    """Return bumps of unit height at instants, with a slow wave after each."""
    signal = np.zeros(time_s.size)
    for at in event_s:
        signal += np.exp(-0.5 * ((time_s - at) / width_s) ** 2)
        signal += 0.2 * np.exp(-0.5 * ((time_s - at - 0.25) / 0.04) ** 2)
    return signal


@pytest.mark.parametrize("length", [1, 7, 500, 5000])
def test_peaks_do_not_depend_on_blocks(rng, length):
    """A peak on a block boundary is one peak."""
    time = np.arange(12_000) / 250.0
    samples = spiky(time, beats(rng, 50)) + 0.03 * rng.standard_normal(time.size)
    whole = PeakFinder(0.5, 0.25)
    whole.feed(samples)
    parts = PeakFinder(0.5, 0.25)
    for start in range(0, samples.size, length):
        parts.feed(samples[start : start + length])
    assert np.array_equal(parts.peaks()[0], whole.peaks()[0])
    assert np.array_equal(parts.peaks()[1], whole.peaks()[1])


@pytest.mark.parametrize("sign", [1.0, -1.0])
def test_beats_are_found_in_noise(slow, rng, sign):
    """Each beat once, to a part of a sample, whichever way the electrode is wired."""
    time = np.arange(25_000) / 250.0
    true = beats(rng)
    samples = sign * spiky(time, true) + 0.03 * rng.standard_normal(time.size)
    (channel,) = slow.memory_channels(samples, 250.0)
    assert choose_method(channel, PhaseSettings()).method == "spike"
    track = track_one(channel)
    true = true[true < time[-1] - 0.02]
    assert track.event_s.size == true.size
    assert np.std(track.event_s - true) < 0.002
    assert np.all(np.diff(track.phase_rad[track.valid]) > 0)


def test_a_missing_beat_is_not_bridged(slow, rng):
    """Two beats' time without one is unknown, not a slow beat."""
    time = np.arange(25_000) / 250.0
    true = np.delete(beats(rng), 60)
    samples = spiky(time, true) + 0.01 * rng.standard_normal(time.size)
    (channel,) = slow.memory_channels(samples, 250.0)
    track = track_one(channel)
    inside = (track.time_s > true[59] + 0.1) & (track.time_s < true[60] - 0.1)
    assert not track.valid[inside].any()
    assert track.valid.mean() > 0.9


def test_of_two_near_peaks_the_higher_stays():
    """A notch in a beat makes two peaks of one."""
    events = np.array([0.0, 1.0, 1.1, 2.0, 2.05, 3.0, 4.0])
    height = np.array([1.0, 0.7, 1.0, 1.0, 0.6, 1.0, 1.0])
    kept = after_refractory(events, height, 0.4)
    assert events[kept].tolist() == [0.0, 1.1, 2.0, 3.0, 4.0]


@pytest.mark.parametrize(
    ("shape", "method"),
    [
        (lambda p: np.cos(p), "analytic"),
        (lambda p: np.cos(p) + 0.4 * np.cos(2 * p), "analytic"),
        (lambda p: (np.cos(p) > 0).astype(float), "pulse"),
        (lambda p: np.exp(40.0 * (np.cos(p) - 1.0)), "spike"),
    ],
)
def test_method_follows_the_shape_of_the_signal(slow, rng, shape, method):
    """A person need not know which estimator suits."""
    phase_rad = TWO_PI * 3.0 * np.arange(40_000) / 1000.0
    noise = 0.02 * rng.standard_normal(phase_rad.size)
    (channel,) = slow.memory_channels(shape(phase_rad) + noise, 1000.0)
    assert choose_method(channel, PhaseSettings()).method == method


def test_plain_noise_is_not_taken_for_spikes(slow, rng):
    """A weak sine deep in noise is followed by its line."""
    time = np.arange(80_000) / 8000.0
    samples = np.cos(TWO_PI * 500.0 * time) + 2.2 * rng.standard_normal(time.size)
    (channel,) = slow.memory_channels(samples, 8000.0)
    assert choose_method(channel, PhaseSettings()).method == "analytic"
