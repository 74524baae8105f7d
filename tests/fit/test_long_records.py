"""Records of hours: the same episodes and slips from rows that are read in blocks."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit import surrogates
from fit.analysis import MeasureSettings, drop_start, prepare_tracks
from fit.difference import Order, form_difference
from fit.episodes import EpisodeRules, find_episodes
from fit.slips import find_slips
from fit.windows import qualifying_unions
from rig.captures import CaptureChannel
from rig.channels import ChannelSetup, wire_channel
from rig.longarrays import LongArray
from rig.memory import held_capture
from rig.phases.fewer import fewer_samples
from rig.phases.track import PhaseTrack
from rig.quantities import Quantity

RATE_HZ = 50.0


def staircase(count: int, rng: np.random.Generator) -> np.ndarray:
    """Return psi that locks for 20 s and drifts for 10 s in turn, with some noise."""
    time = np.arange(count) / RATE_HZ
    drifts = np.mod(time, 30.0) > 20.0
    psi = np.cumsum(np.where(drifts, 2.0 * math.pi * 0.6, 0.0)) / RATE_HZ
    # Drifts of six turns end where they began, so that each lock stands at its own level.
    return psi + 0.02 * rng.standard_normal(count)


def track(phase_rad, valid, wrap) -> PhaseTrack:
    """Return a track of a phase, its rows as ``wrap`` makes them."""
    count = phase_rad.size
    return PhaseTrack(
        channel="1",
        unit="V",
        method="analytic",
        start_s=2.0,
        rate_hz=RATE_HZ,
        phase_rad=wrap(phase_rad),
        amplitude=wrap(np.ones(count)),
        valid=valid,
        u_rad=np.broadcast_to(np.float64(0.01), (count,)),
        frequency_hz=Quantity(value=10.0, u=0.001, unit="Hz"),
        amplitude_mean=Quantity(value=1.0, u=0.1, unit="V"),
        snr_db=40.0,
        band_hz=None,
        smear_s=0.1,
        samples_per_cycle=100.0,
    )


def pair(psi, valid, wrap):
    """Return the phase difference of a pair."""
    turning = 2.0 * math.pi * 10.0 * np.arange(psi.size) / RATE_HZ
    tracks = track(turning + psi, valid, wrap), track(turning, valid, wrap)
    return form_difference(tracks[0], tracks[1], Order())


def lengthy(values):
    """Return values as a row that is read in blocks."""
    return LongArray(values.size, values.dtype, lambda a, b: values[a:b].copy())


def test_rows_read_in_blocks_give_the_same_episodes_and_slips(rng, monkeypatch):
    """Where psi is kept may not move an edge, an angle or a slip by a digit."""
    psi = staircase(100_000, rng)
    valid = np.ones(psi.size, dtype=bool)
    valid[:40] = valid[31_000:31_700] = False
    found = []
    for wrap, most in ((np.asarray, 10**6), (lengthy, 1000)):
        monkeypatch.setattr("rig.longarrays.LONG_SAMPLES", most)
        difference = pair(psi, valid, wrap)
        assert isinstance(difference.psi_rad, LongArray) == (most == 1000)
        assert difference.u_rad.strides == (0,)
        episodes = find_episodes(difference, EpisodeRules(), 5.0)
        found.append((episodes, find_slips(difference)))
    assert found[0] == found[1]
    assert len(found[0][0]) > 60
    assert len(found[0][1]) > 300


def test_a_stretch_looked_at_every_few_samples_keeps_its_episodes(rng, monkeypatch):
    """Of a lock of hours the level is that of some of its samples: the same to their scatter."""
    psi = staircase(60_000, rng)
    difference = pair(psi, np.ones(psi.size, dtype=bool), np.asarray)
    exact = find_episodes(difference, EpisodeRules(), 5.0)
    monkeypatch.setattr("fit.episodes.LONG_SAMPLES", 200)
    thinned = find_episodes(difference, EpisodeRules(), 5.0)
    assert len(exact) == len(thinned) == 40
    for one, other in zip(exact, thinned, strict=True):
        # The spread of the level decides the last samples of an end: 0.02 rad of noise at
        # 3.8 rad/s is a quarter of a sample, its estimate from 200 is known to 10 %.
        assert other.start_s == pytest.approx(one.start_s, abs=2.0 / RATE_HZ)
        assert other.stop_s == pytest.approx(one.stop_s, abs=2.0 / RATE_HZ)


def test_windows_of_hours_are_found_to_their_own_coarseness(rng, monkeypatch):
    """Extremes of some samples each stand for the samples where a window is very long."""
    psi = staircase(60_000, rng)
    exact = qualifying_unions(psi, math.pi, 700)
    monkeypatch.setattr("fit.windows.LONGEST_WINDOW", 100)
    coarse = qualifying_unions(psi, math.pi, 700)
    assert len(exact) == len(coarse) == 40
    assert np.abs(np.array(exact) - np.array(coarse)).max() <= 2 * 8


def test_many_cycles_shuffled_together_scatter_as_one_by_one(monkeypatch):
    """The bridge stands in for 20,000 shuffled cycles: the same law of the resultant length."""
    rng = np.random.default_rng(11)
    rates = 20.0 * (1.0 + 0.02 * np.cumsum(rng.standard_normal(1000)) / 30.0)
    driven = 2.0 * math.pi * np.cumsum(rates)
    reference = np.linspace(driven[0], driven[-1], driven.size)
    lengths = {}
    for most in (10**6, 1000):
        monkeypatch.setattr(surrogates, "MOST_CYCLES", most)
        lengths[most] = np.sort(
            [
                abs(np.mean(np.exp(1j * (surrogates.shuffle_cycles(driven, rng) - reference))))
                for _ in range(300)
            ]
        )
    exact, drawn = lengths.values()
    places = np.sort(np.concatenate([exact, drawn]))
    apart = np.abs(np.searchsorted(exact, places) - np.searchsorted(drawn, places)).max() / 300
    # Smirnov: 0.133 is passed by two samples of 300 of one law once in a hundred.
    assert apart < 0.133
    assert 0.02 < exact.std() < 0.5


def test_fewer_samples_keep_turns_and_never_join_over_a_gap(rng, monkeypatch):
    """What is left of a day may miss no turn, and no gap between two samples."""
    psi = staircase(30_000, rng)
    valid = np.ones(psi.size, dtype=bool)
    valid[20_003] = False
    whole = track(psi, valid, np.asarray)
    assert fewer_samples(whole) is whole
    monkeypatch.setattr("rig.phases.fewer.LONG_SAMPLES", 1000)
    monkeypatch.setattr("rig.phases.fewer.FEWER_SAMPLES", 3000)
    fewer = fewer_samples(whole)
    assert fewer.rate_hz == RATE_HZ / 10
    assert np.array_equal(fewer.phase_rad, psi[::10])
    assert np.flatnonzero(~fewer.valid).tolist() == [2000]
    assert np.array_equal(fewer.time_s, whole.time_s[::10])


@pytest.mark.parametrize("settle_s", [0.0, 2.02, 2.1, 3.7, 1e4])
def test_the_settling_time_is_left_out_to_the_sample(rng, settle_s):
    """The sample at the settling time counts, the one before does not."""
    psi = staircase(1000, rng)
    whole = pair(psi, np.ones(psi.size, dtype=bool), np.asarray)
    times = whole.start_s + np.arange(psi.size) / RATE_HZ
    assert np.array_equal(drop_start(whole, settle_s).valid, times >= settle_s)


def test_a_long_record_is_judged_as_a_short_one(rng, monkeypatch):
    """Episodes and slips to the digit; state, rate and psi from fewer samples agree."""
    psi = staircase(100_000, rng)
    valid = np.ones(psi.size, dtype=bool)
    held = held_capture(np.zeros((2, 10)), 1000.0, (CaptureChannel(name="1"),) * 2, "made")
    channel = wire_channel(held, ChannelSetup(channel=1))
    turning = 2.0 * math.pi * 10.0 * np.arange(psi.size) / RATE_HZ
    found = []
    for wrap, most in ((np.asarray, 10**6), (lengthy, 1000)):
        monkeypatch.setattr("rig.longarrays.LONG_SAMPLES", most)
        monkeypatch.setattr("rig.phases.fewer.LONG_SAMPLES", most)
        monkeypatch.setattr("rig.phases.fewer.FEWER_SAMPLES", 20_000)
        tracks = track(turning, valid, wrap), track(turning + psi, valid, wrap)
        prepared = prepare_tracks(*tracks, channel, settings=MeasureSettings())
        found.append(prepared.measurement)
    short, long = found
    assert (short.episodes, short.slips) == (long.episodes, long.slips)
    assert len(short.slips) > 300
    assert short.decision.state == long.decision.state
    assert short.slip_rate_hz.value == pytest.approx(long.slip_rate_hz.value, rel=1e-4)
    apart_hz = abs(short.mean_rate_hz.value - long.mean_rate_hz.value)
    assert apart_hz < 0.1 * short.mean_rate_hz.u
    assert short.indices[0].value == pytest.approx(long.indices[0].value, abs=0.02)
    # The series holds at most 4,000 samples of either.
    assert long.series.step_s == pytest.approx(short.series.step_s, rel=0.2)
