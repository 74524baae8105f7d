"""Streaming markers against a loop over samples, and the phase between markers."""

from __future__ import annotations

import math

import numpy as np
import pytest

from rig.phases.crossings import CrossingFinder
from rig.phases.estimate import track_one
from rig.phases.settings import PhaseSettings

TWO_PI = 2.0 * math.pi


@pytest.mark.parametrize("length", [1, 7, 777, 1000, 32768])
@pytest.mark.parametrize("noise", [0.0, 0.3, 3.0])
def test_markers_equal_the_loop_bit_for_bit(slow, rng, length, noise):
    """A stream cut anywhere must give the very markers of the plain loop."""
    count = 2000 if length == 1 else 40_000
    time = np.arange(count)
    samples = np.sin(TWO_PI * time / 37.3) + 0.2 + noise * rng.standard_normal(count)
    samples = samples.astype(np.float32)
    finder = CrossingFinder(0.2, 0.25)
    for start in range(0, count, length):
        finder.feed(samples[start : start + length])
    frames, rising = finder.markers()
    expected, upward = slow.schmitt_markers(samples, 0.2, 0.25)
    assert np.array_equal(frames, expected)
    assert np.array_equal(rising, upward)


def test_search_starts_anew_after_a_gap():
    """A crossing inside missing samples has no time."""
    samples = np.sin(TWO_PI * np.arange(400) / 40.0 + 0.1)
    samples[195:205] = np.nan
    finder = CrossingFinder(0.0, 0.2)
    finder.feed(samples[:199])
    finder.feed(samples[199:])
    frames, _ = finder.markers()
    assert not np.any((frames > 190) & (frames < 206))
    assert np.array_equal(finder.gap_frames, np.arange(195, 205))


@pytest.mark.parametrize("edge", ["rising", "falling", "both"])
def test_marker_phase_is_that_of_the_cosine(slow, edge):
    """Markers and the analytic signal must name the same phase."""
    time = np.arange(60_000) / 2000.0
    phase_rad = TWO_PI * 9.7 * time + 0.3
    (channel,) = slow.memory_channels(np.cos(phase_rad), 2000.0)
    track = track_one(channel, settings=PhaseSettings(method="marker", edge=edge))
    frames = np.rint(track.time_s * 2000.0).astype(int)
    # h**3 / (36 sqrt 3) at 206 samples a cycle, and the level's own rounding.
    assert np.abs(slow.true_errors_rad(track, phase_rad[frames])).max() < 1e-4


def test_marker_phase_never_decreases(slow, rng):
    """A decrease between markers would be a fault of the estimator, whatever the noise."""
    time = np.arange(60_000) / 2000.0
    samples = np.cos(TWO_PI * 20.0 * time) + 0.3 * rng.standard_normal(time.size)
    (channel,) = slow.memory_channels(samples, 2000.0)
    track = track_one(channel, settings=PhaseSettings(method="marker"))
    assert np.all(np.diff(track.phase_rad[track.valid]) > 0)
    assert np.all(np.diff(track.event_s) > 0)


def test_hysteresis_rejects_crossings_by_noise_and_says_how_many(slow, rng):
    """Plain sign changes of 50 cycles with 10 % noise once counted 185."""
    time = np.arange(20_000) / 2000.0
    samples = np.cos(TWO_PI * 5.0 * time) + 0.1 * rng.standard_normal(time.size)
    (channel,) = slow.memory_channels(samples, 2000.0)
    track = track_one(channel, settings=PhaseSettings(method="marker"))
    assert track.event_s.size in (49, 50)
    assert any("rejected" in note for note in track.notes)


def test_missing_markers_are_not_bridged(slow):
    """Ten cycles of silence hold no phase, and no ten slips."""
    time = np.arange(60_000) / 2000.0
    samples = np.cos(TWO_PI * 20.0 * time)
    samples[20_000:21_000] = 0.0
    (channel,) = slow.memory_channels(samples, 2000.0)
    track = track_one(channel, settings=PhaseSettings(method="marker"))
    dead = (track.time_s > 10.06) & (track.time_s < 10.44)
    assert not track.valid[dead].any()
    assert any("not bridged" in note for note in track.notes)


def test_a_wandering_ground_is_taken_off_first(slow, rng):
    """A breath under a pulse moves the level by more than the pulse itself."""
    time = np.arange(120_000) / 1000.0
    phase_rad = TWO_PI * 5.0 * time
    samples = np.cos(phase_rad) + 3.0 * np.sin(TWO_PI * 0.02 * time) + 4.0
    samples += 0.01 * rng.standard_normal(time.size)
    (channel,) = slow.memory_channels(samples, 1000.0)
    track = track_one(channel, settings=PhaseSettings(method="marker"))
    frames = np.rint(track.time_s * 1000.0).astype(int)
    # Slope of the ground, 0.38 a second, over that of the wave: what smoothing leaves of it.
    assert np.abs(slow.true_errors_rad(track, phase_rad[frames])).max() < 0.08
    assert track.event_s.size in (599, 600)
    assert any("slow ground removed" in note for note in track.notes)


def test_a_stated_level_is_in_physical_units(slow):
    """A person states volts, not recorder counts."""
    from rig.channels import ChannelSetup, wire_channel

    time = np.arange(20_000) / 1000.0
    capture = slow.memory_capture(0.1 * np.cos(TWO_PI * 5.0 * time), 1000.0)
    channel = wire_channel(capture, ChannelSetup(channel=1, sensitivity=0.1))
    track = track_one(channel, settings=PhaseSettings(method="marker", level=0.5, edge="falling"))
    # Falling through half the amplitude of a cosine: a sixth of a turn after its top.
    late = np.mod(track.event_s * 5.0, 1.0)
    assert np.abs(late - 1.0 / 6.0).max() < 1e-4
