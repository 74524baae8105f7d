"""Errors and stated uncertainties against the bounds, seeded."""

from __future__ import annotations

import math

import numpy as np
import pytest

from rig.phases.estimate import track_one, track_pair
from rig.phases.settings import PairSettings, PhaseSettings

TWO_PI = 2.0 * math.pi
RATE_HZ = 51_200.0
HALF_HZ = 100.0


@pytest.mark.parametrize("ratio_db", [-10, 0, 20, 40, 60])
def test_phase_error_is_that_of_the_bound_and_so_stated(slow, ratio_db):
    """No accuracy is given away from -10 dB over the whole rate on, 11 dB in the band."""
    rng = np.random.default_rng(4)
    time = np.arange(round(20.0 * RATE_HZ)) / RATE_HZ
    phases = np.array([TWO_PI * 1000.0 * time, TWO_PI * 1003.0 * time + 1.0])
    noise = math.sqrt(0.5 * 10.0 ** (-ratio_db / 10.0))
    samples = np.cos(phases).astype(np.float32)
    samples += np.float32(noise) * rng.standard_normal(samples.shape, dtype=np.float32)
    settings = PairSettings(
        reference=PhaseSettings(method="analytic", band_hz=(900.0, 1100.0)),
        driven=PhaseSettings(method="analytic", band_hz=(903.0, 1103.0)),
    )
    tracks = track_pair(*slow.memory_channels(samples, RATE_HZ), settings=settings)
    # Noise across the vector in a band of 2 x 100 Hz: sigma^2 x 200 / (rate / 2).
    bound = noise * math.sqrt(2.0 * HALF_HZ / (RATE_HZ / 2.0))
    squares, stated = [], []
    for track, phase_rad in zip(tracks, phases, strict=True):
        frames = np.rint(track.time_s * RATE_HZ).astype(int)
        squares.append(np.mean(slow.true_errors_rad(track, phase_rad[frames]) ** 2))
        stated.append(np.mean(track.u_rad[track.valid] ** 2))
    # 8e3 independent values: 0.8 % of scatter; expected 1.02 - 1.05.
    assert math.sqrt(np.mean(squares)) <= 1.06 * bound
    assert math.sqrt(np.mean(stated)) == pytest.approx(math.sqrt(np.mean(squares)), rel=0.1)
    for track in tracks:
        assert track.snr_db == pytest.approx(ratio_db + 10 * math.log10(128.0), abs=0.7)


def test_frequency_error_is_that_of_the_bound(slow):
    """A mean frequency wants the whole record and no more."""
    rng = np.random.default_rng(8)
    count, rate_hz, noise = 80_000, 2000.0, 0.05
    time, errors, stated = np.arange(count) / rate_hz, [], []
    for _ in range(120):
        line_hz = 250.0 + rng.uniform(-1.0, 1.0)
        tone = np.cos(TWO_PI * line_hz * time + rng.uniform(0.0, TWO_PI))
        noisy = (tone + noise * rng.standard_normal(count)).astype(np.float32)
        (channel,) = slow.memory_channels(noisy, rate_hz)
        found = track_one(channel, settings=PhaseSettings(method="analytic")).frequency_hz
        errors.append(found.value - line_hz)
        stated.append(found.u)
    bound = noise * math.sqrt(24.0 / (count * (count**2 - 1.0))) * rate_hz / TWO_PI
    # 120 draws scatter a deviation by 6.5 %; guards of 2.3 % cost 3.5 %.
    assert np.std(errors) <= 1.1 * bound
    assert np.median(stated) == pytest.approx(1.03 * bound, rel=0.1)


@pytest.mark.parametrize("walk_rad2_s", [0.001, 0.1])
def test_frequency_of_a_wandering_oscillator_is_not_overstated(slow, walk_rad2_s):
    """Phase diffusion, not sensor noise, limits a real oscillator's mean frequency."""
    rng = np.random.default_rng(9)
    count, rate_hz, scores = 30_000, 1000.0, []
    time = np.arange(count) / rate_hz
    for _ in range(60):
        walk = np.cumsum(rng.standard_normal(count)) * math.sqrt(2.0 * walk_rad2_s / rate_hz)
        samples = np.cos(TWO_PI * 100.0 * time + walk) + 0.05 * rng.standard_normal(count)
        (channel,) = slow.memory_channels(samples.astype(np.float32), rate_hz)
        found = track_one(channel).frequency_hz
        scores.append((found.value - 100.0) / found.u)
    # 60 draws: 9 % of scatter, and the walk is judged from 32 modes.
    assert 0.7 < math.sqrt(np.mean(np.square(scores))) < 1.35


@pytest.mark.parametrize("noise", [0.02, 0.07])
def test_marker_error_is_near_the_limit_of_crossings(slow, noise):
    """Markers cannot average within a cycle, but must not lose more than that."""
    rng = np.random.default_rng(10)
    per_cycle = 25.0 + 1.0 / math.sqrt(5.0)
    rate_hz, line_hz = 1000.0, 1000.0 / per_cycle
    time = np.arange(100_000) / rate_hz
    samples = np.cos(TWO_PI * line_hz * time) + noise * rng.standard_normal(time.size)
    (channel,) = slow.memory_channels(samples, rate_hz)
    track = track_one(channel, settings=PhaseSettings(method="marker"))
    turns = track.event_s * line_hz + 0.25
    error_rad = TWO_PI * (turns - np.round(turns))
    # 4e3 crossings: 1.1 % of scatter.
    assert np.std(error_rad) <= 1.2 * math.sqrt(2.0 / 3.0) * noise
    on_grid = slow.true_errors_rad(
        track, (TWO_PI * line_hz * time)[np.rint(track.time_s * rate_hz).astype(int)]
    )
    assert np.sqrt(np.mean(track.u_rad**2)) == pytest.approx(np.std(on_grid), rel=0.1)


IMPAIRED = {
    "strong tone outside the stop edge": lambda t, p: np.cos(p) + np.cos(1.4 * p),
    "ten times the amplitude of offset": lambda t, p: np.cos(p) + 10.0,
    "second harmonic of one half": lambda t, p: np.cos(p) + 0.5 * np.cos(2.0 * p),
    "hum of one half": lambda t, p: np.cos(p) + 0.5 * np.cos(TWO_PI * 50.0 * t),
    "amplitude modulated": lambda t, p: (1.0 + 0.3 * np.cos(TWO_PI * 7.0 * t)) * np.cos(p),
}


@pytest.mark.parametrize("name", IMPAIRED)
def test_what_lies_outside_the_band_adds_no_error(slow, name):
    """Hum, offset and harmonics are the rule on a bench."""
    rng = np.random.default_rng(11)
    time = np.arange(round(8.0 * RATE_HZ)) / RATE_HZ
    phase_rad = TWO_PI * 1000.0 * time + 0.3
    noise = 0.00707 * rng.standard_normal(time.size)
    rules = PhaseSettings(method="analytic", band_hz=(900.0, 1100.0))
    spread = []
    for clean in (np.cos(phase_rad), IMPAIRED[name](time, phase_rad)):
        (channel,) = slow.memory_channels((clean + noise).astype(np.float32), RATE_HZ)
        track = track_one(channel, settings=rules)
        frames = np.rint(track.time_s * RATE_HZ).astype(int)
        spread.append(np.std(slow.true_errors_rad(track, phase_rad[frames])))
    # 1.05 by goal; modulation of 30 % alone makes the mean of 1 / a^2 1.15.
    assert spread[1] <= (1.1 if "modulated" in name else 1.05) * spread[0]


def test_a_step_is_smeared_no_longer_than_stated(slow):
    """The band's smearing time bounds what a sudden step can look like."""
    time = np.arange(160_000) / 8000.0
    step = np.where(time > 10.0, 1.0, 0.0)
    (channel,) = slow.memory_channels(np.cos(TWO_PI * 500.0 * time + step), 8000.0)
    track = track_one(channel, settings=PhaseSettings(method="analytic", band_hz=(450.0, 550.0)))
    frames = np.rint(track.time_s * 8000.0).astype(int)
    bent = np.abs((track.phase_rad - (TWO_PI * 500.0 * time)[frames])[track.valid] - 0.5) < 0.4
    span_s = np.ptp(track.time_s[track.valid][bent])
    assert 0.0 < span_s <= track.smear_s


@pytest.mark.parametrize(("ratio_db", "slips"), [(10.5, 0), (5.0, 5)])
def test_noise_makes_no_slip_from_ten_decibels_on(slow, ratio_db, slips):
    """A slip counted that never was ends in a verdict; below the limit a note says so."""
    rng = np.random.default_rng(13)
    time = np.arange(200_000) / 2000.0
    noise = math.sqrt(0.5 / (10.0 ** (ratio_db / 10.0) * 0.25))
    samples = np.cos(TWO_PI * 500.0 * time) + noise * rng.standard_normal(time.size)
    (channel,) = slow.memory_channels(samples.astype(np.float32), 2000.0)
    rules = PhaseSettings(method="analytic", band_hz=(375.0, 625.0))
    track = track_one(channel, settings=rules)
    frames = np.rint(track.time_s * 2000.0).astype(int)
    error = (track.phase_rad - TWO_PI * 500.0 * time[frames])[track.valid] / TWO_PI
    smooth = np.convolve(error, np.ones(9) / 9.0, mode="valid")
    counted = int(np.abs(np.diff(np.round(smooth))).sum())
    assert counted == 0 if slips == 0 else counted >= slips
    assert any("unreliable" in note for note in track.notes) == (ratio_db < 10.0)
