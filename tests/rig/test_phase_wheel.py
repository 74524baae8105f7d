"""Pulses on wheels: gaps, index pulses, uneven teeth, dropouts, and lists of instants."""

from __future__ import annotations

import math

import numpy as np
import pytest

from rig.channels import ChannelSetup
from rig.errors import PhaseError
from rig.phases.estimate import choose_method, track_one
from rig.phases.instants import EventChannel, track_from_events, track_pair_from_events
from rig.phases.settings import PairSettings, PhaseSettings
from rig.phases.wheel import Wheel, place_pulses

TWO_PI = 2.0 * math.pi
LONGEST = 1.6


def run_up(turns):
    """Return the times of turns of a wheel that goes from 5 to 15 turns a second in 20 s."""
    rate, slope = 5.0, 0.5
    return (np.sqrt(rate**2 + 2.0 * slope * np.asarray(turns)) - rate) / slope


def teeth(positions, missing=0, turns=60, uneven=None):
    """Return true turns of the teeth that are there."""
    places = np.arange(positions - missing) / positions
    if uneven is not None:
        places = places + uneven
    return (np.arange(turns)[:, None] + places).ravel()


@pytest.mark.parametrize(("positions", "missing"), [(36, 2), (60, 2), (12, 1), (8, 3)])
def test_missing_teeth_do_not_become_slips(positions, missing):
    """The gap of a wheel is known: it must cost neither a turn nor a stretch."""
    turns = teeth(positions, missing)
    # The record begins in the middle of a turn.
    placed = place_pulses(run_up(turns[7:]), Wheel(positions=positions, missing=missing), LONGEST)
    apart = placed.turns - turns[7:]
    assert np.ptp(apart) < 2e-3
    # Phase 0 is the first tooth after the gap.
    assert abs(apart.mean() - round(apart.mean())) < 2e-3
    assert placed.bridged.all()


def test_an_index_pulse_is_told_from_teeth_and_sets_the_zero():
    """24 teeth and one pulse a turn: it lies between teeth and is no tooth."""
    turns = teeth(24)
    extra = np.arange(60) + 0.4 / 24.0
    events = np.sort(np.concatenate([turns, extra]))
    placed = place_pulses(run_up(events[5:]), Wheel(positions=24, extra=1), LONGEST)
    assert placed.event_s.size == turns.size - 4
    apart = placed.turns - (turns[turns >= events[5]] - 0.4 / 24.0)
    assert np.ptp(apart) < 2e-3
    assert abs(apart.mean() - round(apart.mean())) < 2e-3


def test_uneven_teeth_are_learned_and_removed(rng):
    """A wheel cut by hand is off by a few per cent of a pitch; speed is not."""
    uneven = 0.08 * rng.uniform(-1.0, 1.0, 10) / 10.0
    uneven -= uneven.mean()
    turns = teeth(10, uneven=uneven)
    placed = place_pulses(run_up(turns), Wheel(positions=10), LONGEST)
    raw = np.arange(turns.size) / 10.0
    assert np.std(placed.turns - turns) < 0.05 * np.std(raw - turns)
    assert any("uneven teeth learned" in note for note in placed.notes)


def test_a_tooth_that_is_not_there_is_not_bridged():
    """One pulse lost: the turn it is in cannot be counted, the rest can."""
    turns = teeth(36, 2)
    lost = np.delete(turns, 700)
    placed = place_pulses(run_up(lost), Wheel(positions=36, missing=2), LONGEST)
    assert not placed.bridged.all()
    assert placed.bridged.sum() > 0.95 * placed.bridged.size
    apart = placed.turns - lost
    sure = np.concatenate([placed.bridged, [True]])
    assert np.ptp(apart[sure] - np.round(apart[sure])) < 3e-3


@pytest.mark.parametrize(
    ("wheel", "words"),
    [
        ({"positions": 2, "missing": 2}, "0 <= missing < positions, got 2 of 2"),
        ({"positions": 24, "extra": 2}, "0 or 1 index pulse a turn, got 2"),
        ({"positions": 24, "missing": 1, "extra": 1}, "not both"),
        ({"positions": 4, "missing": 2}, "at least 3 teeth, got 2"),
    ],
)
def test_wheels_that_cannot_be_are_refused(wheel, words):
    """A typing error in the wiring must not become a speed."""
    with pytest.raises(PhaseError, match=words):
        Wheel(**wheel)


@pytest.mark.parametrize(
    ("wheel", "words"),
    [
        (Wheel(positions=36, missing=2), "no gap of 2 teeth every 34 pulses"),
        (Wheel(positions=24, extra=1), "no index pulse every 25 pulses"),
    ],
)
def test_a_wheel_other_than_stated_is_refused(wheel, words):
    """An even train cannot be a wheel with a gap."""
    with pytest.raises(PhaseError, match=words):
        place_pulses(run_up(teeth(20)), wheel, LONGEST)


def test_sampled_pulses_give_the_phase_of_the_shaft(slow, rng):
    """A recorded tacho is a pulse train in noise; its method is found without being named."""
    time = np.arange(200_000) / 20_000.0
    turns = 6.0 * time + 0.05 * np.sin(TWO_PI * 0.7 * time) + 0.013
    place = np.mod(turns * 12.0, 12.0)
    high = (np.mod(place, 1.0) < 0.5) & (place < 11.0)
    samples = 5.0 * high + 0.05 * rng.standard_normal(time.size)
    (channel,) = slow.memory_channels(samples, 20_000.0, pulses_per_turn=12, missing_pulses=1)
    assert choose_method(channel, PhaseSettings()).method == "pulse"
    track = track_one(channel)
    frames = np.rint(track.time_s * 20_000.0).astype(int)
    error = (track.phase_rad - TWO_PI * turns[frames])[track.valid]
    # A pulse is placed to a sample: 6 turns/s x 50 us = 2e-3 rad a sample.
    assert np.abs(error - TWO_PI * np.round(error.mean() / TWO_PI)).max() < 8e-3
    assert track.valid.mean() > 0.95


def test_geared_wheels_keep_their_angle_through_a_run_up():
    """Cam to crank is 2:1 by gears at any speed: no slip may appear."""
    crank = run_up(teeth(36, 2, turns=80))
    cam_turns = np.arange(0.31, 80.0, 2.0 / 3.0) / 2.0
    cam = run_up(2.0 * cam_turns)
    reference, driven = track_pair_from_events(
        EventChannel(
            name="crank",
            event_s=crank,
            setup=ChannelSetup(channel=1, pulses_per_turn=36, missing_pulses=2),
        ),
        EventChannel(name="cam", event_s=cam, setup=ChannelSetup(channel=2, pulses_per_turn=3)),
    )
    held = reference.valid & driven.valid
    psi_turns = (2.0 * driven.phase_rad - reference.phase_rad)[held] / TWO_PI
    # Straight between pulses of the cam: pi a T^2 / 4 at 5 turns/s.
    assert np.ptp(psi_turns) < 0.02
    assert held.mean() > 0.98


def test_instants_keep_their_clock(rng):
    """Times of a list are those of the track."""
    events = 100.0 + np.arange(50) * 0.5
    track = track_from_events(
        EventChannel(name="tick", event_s=events, setup=ChannelSetup(channel=1))
    )
    assert track.frequency_hz.value == pytest.approx(2.0, abs=1e-9)
    expected = TWO_PI * 2.0 * (track.time_s - 100.0)
    assert np.abs(track.phase_rad - expected)[track.valid].max() < 1e-9
    assert np.array_equal(track.event_s, events)


@pytest.mark.parametrize(
    ("events", "words"),
    [
        ([0.0, 1.0, 2.0], "3 instants, at least 4"),
        ([0.0, 1.0, 1.0, 2.0], "instant 3 at 1 s does not follow 1 s"),
        ([0.0, 1.0, np.nan, 2.0], "finite"),
    ],
)
def test_lists_that_are_no_instants_are_refused(events, words):
    """A list out of order is a wrong file."""
    with pytest.raises(PhaseError, match=words):
        EventChannel(name="tick", event_s=np.array(events), setup=ChannelSetup(channel=1))


def test_lists_that_share_no_time_are_refused():
    """Two counters on two clocks have no common phase."""
    pair = [
        EventChannel(name=name, event_s=start + np.arange(10.0), setup=ChannelSetup(channel=1))
        for name, start in (("a", 0.0), ("b", 100.0))
    ]
    with pytest.raises(PhaseError, match="share no time"):
        track_pair_from_events(*pair, settings=PairSettings())
