"""Limits of frequency and phase from noisy tones and crossings (G1 - G5, rule 2)."""

from __future__ import annotations

import math

import numpy as np
import pytest

from rig.phases.crossings import CrossingFinder
from rig.phases.estimate import track_one
from rig.phases.events import between_instants
from rig.phases.rates import mean_frequency
from rig.phases.settings import PhaseSettings

TWO_PI = 2.0 * math.pi


def test_stated_uncertainty_of_a_frequency_is_the_bound_of_a_complex_tone():
    """White phase noise leaves the bound and nothing else."""
    # Source: Rife and Boorstyn 1974, IEEE Trans. IT-20, 591: 12 s^2 / (b^2 N (N^2 - 1))
    # Read: recalled; the information matrix gives it again
    # Printed: var w = 12 sigma^2 / (b^2 N (N^2 - 1)) per sample^2, sigma^2 per component
    # Converted: to Hz: times rate / 2 pi
    # Tolerance: 1e-9 relative, rounding
    count, rate_hz, noise = 1000, 1000.0, 0.1
    rng = np.random.default_rng(3)
    phase_rad = TWO_PI * 100.0 * np.arange(count) / rate_hz + noise * rng.standard_normal(count)
    found = mean_frequency(
        phase_rad,
        np.ones(count, dtype=bool),
        np.full(count, noise),
        rate_hz=rate_hz,
        correlation_samples=1.0,
    )
    bound = noise * math.sqrt(12.0 / (count * (count**2 - 1.0))) * rate_hz / TWO_PI
    assert found.u == pytest.approx(bound, rel=1e-9)
    assert abs(found.value - 100.0) < 4.0 * bound


@pytest.mark.parametrize(
    ("noise", "rate_hz", "count", "printed_hz"),
    [(0.1, 1000.0, 1000, 2.46562e-3), (0.01, 5000.0, 5000, 1.10266e-4)],
)
def test_frequency_of_a_real_tone_comes_near_its_bound(slow, noise, rate_hz, count, printed_hz):
    """A second of samples: only what the guards at its ends take is lost."""
    # Source: Rife and Boorstyn 1974, 24 in place of 12 for a real tone
    # Read: recalled; information matrix over all phases within 1.2 %
    # Printed: 2.46562 mHz (sigma .1, 1 kHz, N 1000); .110266 mHz (sigma .01, 5 kHz, N 5000)
    # Converted: mHz to Hz
    # Tolerance: bound to its digits; ours up to 1.35 of it: 12 % of a second is guard
    bound = noise * math.sqrt(24.0 / (count * (count**2 - 1.0))) * rate_hz / TWO_PI
    assert bound == pytest.approx(printed_hz, abs=0.5e-8)
    time, errors = np.arange(count) / rate_hz, []
    rng = np.random.default_rng(12)
    for _ in range(60):
        line_hz = 200.0 + rng.uniform(-5.0, 5.0)
        tone = np.cos(TWO_PI * line_hz * time + rng.uniform(0.0, TWO_PI))
        (channel,) = slow.memory_channels(tone + noise * rng.standard_normal(count), rate_hz)
        errors.append(track_one(channel).frequency_hz.value - line_hz)
    # 60 draws scatter the deviation by 9 %.
    assert 0.75 < np.std(errors) / bound < 1.35


def test_noise_of_a_linearly_interpolated_crossing(rng):
    """Two samples share the error, so it is a fifth smaller than that of one."""
    # Source: slope rule of a crossing; sqrt(2/3) for random alignment
    # Read: textbook slope rule, factor derived
    # Printed: sigma_phi = (sigma / A) sqrt(2/3) = .816497 sigma / A (Monte Carlo .8176)
    # Converted: no
    # Tolerance: 2e4 crossings scatter by .5 %; 4 of that
    per_cycle, noise = 50.0 + 1.0 / math.sqrt(7.0), 0.001
    time = np.arange(round(20_000 * per_cycle))
    samples = np.sin(TWO_PI * time / per_cycle) + noise * rng.standard_normal(time.size)
    finder = CrossingFinder(0.0, 0.2)
    finder.feed(samples)
    frames, rising = finder.markers()
    turns = frames[rising] / per_cycle
    error_rad = TWO_PI * (turns - np.round(turns))
    assert np.std(error_rad) / noise == pytest.approx(0.816497, rel=0.02)


@pytest.mark.parametrize(
    ("per_cycle", "printed", "tolerance"),
    [(10, 4.058e-3, 5e-7), (20, 4.997e-4, 5e-8), (50, 3.185e-5, 5e-9), (100, 3.979e-6, 5e-10)],
)
def test_bias_of_linear_interpolation_follows_the_cube_of_the_step(per_cycle, printed, tolerance):
    """Between two samples of a sine the straight line meets zero at another place."""
    # Source: derived; largest error h^3 / (36 sqrt 3), h = 2 pi / samples a cycle
    # Read: derived here, maximised directly
    # Printed: 10: 4.058e-3, 20: 4.997e-4, 50: 3.185e-5, 100: 3.979e-6 rad
    # Converted: no
    # Tolerance: half a unit of the last printed digit
    step = TWO_PI / per_cycle
    largest = 0.0
    for part in np.linspace(0.0, 1.0, 2001):
        samples = np.sin(step * (np.arange(-3, 4) - part))
        finder = CrossingFinder(0.0, 0.3 * step)
        finder.feed(samples)
        (frame,), _ = finder.markers()
        largest = max(largest, abs(step * (frame - 3 - part)))
    assert largest == pytest.approx(printed, abs=tolerance)
    if per_cycle >= 20:
        assert largest == pytest.approx(step**3 / (36 * math.sqrt(3)), rel=5e-3)


def test_straight_phase_between_markers_of_a_chirp():
    """A frequency that runs bends the phase between markers by a quarter pi a T squared."""
    # Source: derived; largest error pi a T^2 / 4
    # Read: derived here
    # Printed: a = .1 Hz/s, T = 1 s: .0785398 rad
    # Converted: no
    # Tolerance: half a unit of the last digit, and what T changes within the record
    slope, first_hz = 0.1, 1.0
    turns = np.arange(4)
    # Instants of whole turns: f t + a t^2 / 2 = k.
    event_s = (np.sqrt(first_hz**2 + 2.0 * slope * turns) - first_hz) / slope
    time_s = np.linspace(event_s[0], event_s[1], 10_001)
    _, found = between_instants(event_s, turns.astype(float), time_s, np.ones(3, dtype=bool))
    exact = first_hz * time_s + 0.5 * slope * time_s**2
    interval_s = event_s[1] - event_s[0]
    largest = TWO_PI * np.abs(found - exact).max()
    assert largest == pytest.approx(math.pi * slope * interval_s**2 / 4.0, rel=1e-6)
    assert largest / interval_s**2 == pytest.approx(0.0785398, abs=1e-6)


def test_both_edges_give_the_phase_of_one(slow):
    """Half a swing is pi: counting both crossings doubles the markers, not the phase."""
    # Source: common practice
    # Read: rule of thumb 2; half a swing between two crossings of one period
    # Printed: 2 pi a turn, pi half a swing
    # Converted: no
    # Tolerance: interpolation bias h^3 / (36 sqrt 3) of both, 50 samples a cycle
    time = np.arange(50_000) / 1000.0
    (channel,) = slow.memory_channels(np.cos(TWO_PI * 20.0 * time + 0.2), 1000.0)
    tracks = [
        track_one(channel, settings=PhaseSettings(method="marker", edge=edge))
        for edge in ("rising", "falling", "both")
    ]
    assert tracks[2].event_s.size == tracks[0].event_s.size + tracks[1].event_s.size
    held = tracks[0].valid & tracks[1].valid & tracks[2].valid
    for track in tracks[:2]:
        apart = (track.phase_rad - tracks[2].phase_rad)[held]
        apart -= TWO_PI * np.round(apart.mean() / TWO_PI)
        assert np.abs(apart).max() < 2.0 * 3.2e-5
