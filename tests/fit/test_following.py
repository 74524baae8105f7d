"""A pair followed while it grows, against the same record measured whole."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.analysis import MeasureSettings, measure_pair
from fit.episodes import EpisodeRules
from fit.following import FollowedPair, LockEvent, LockFollower
from fit.records import Measurement
from rig.captures import CaptureChannel
from rig.channels import ChannelSetup, wire_channel
from rig.errors import ChannelError, FitError
from rig.memory import held_capture

RATE_HZ, CARRIER_HZ = 1000, 50.0
CHANNELS = (CaptureChannel(name="1"), CaptureChannel(name="2"))
ROLES = ChannelSetup(channel=1), ChannelSetup(channel=2)
# Detuning in Hz over stretches of s, at a coupling of 0.5 Hz: locked, slipping, locked ...
STRETCHES = ((15.0, 0.1), (5.0, 1.5), (15.0, 0.0), (5.0, -1.2), (12.0, 0.1))


def record(seed: int = 1, stretches: tuple = STRETCHES) -> np.ndarray:
    """Two channels (2, frames): psi stepped with noise, D = 0.02 rad2/s."""
    rng = np.random.default_rng(seed)
    psi, out, step_s = 0.3, [], 1.0 / RATE_HZ
    for duration_s, detuning_hz in stretches:
        for kick in math.sqrt(0.04 * step_s) * rng.standard_normal(int(duration_s * RATE_HZ)):
            psi += 2 * math.pi * (detuning_hz - 0.5 * math.sin(psi)) * step_s + kick
            out.append(psi)
    carrier = 2 * math.pi * CARRIER_HZ * np.arange(len(out)) / RATE_HZ
    return 0.5 * np.array([np.cos(carrier), np.cos(carrier + np.array(out))])


def pair(settings: MeasureSettings | None = None, **more) -> FollowedPair:
    """What is followed."""
    stated = {
        "path": "memory",
        "rate_hz": RATE_HZ,
        "channels": CHANNELS,
        "reference": ROLES[0],
        "driven": ROLES[1],
        "settings": settings or MeasureSettings(),
    }
    return FollowedPair(**{**stated, **more})


def followed(samples: np.ndarray, part: int = 777, **more) -> tuple[list[LockEvent], LockFollower]:
    """All events of a record fed in parts."""
    follower, events = LockFollower(pair(**more)), []
    for start in range(0, samples.shape[1], part):
        events += follower.feed(samples[:, start : start + part])
    return events + follower.finish(), follower


@pytest.fixture(scope="module")
def samples() -> np.ndarray:
    """A pair that is locked three times, with seven or so slips before and after."""
    return record()


@pytest.fixture(scope="module")
def whole(samples: np.ndarray) -> Measurement:
    """The finished record."""
    capture = held_capture(samples, RATE_HZ, CHANNELS, "memory")
    reference, driven = (wire_channel(capture, setup) for setup in ROLES)
    return measure_pair(reference, driven, settings=MeasureSettings())


@pytest.fixture(scope="module")
def live(samples: np.ndarray) -> tuple[list[LockEvent], LockFollower]:
    """The same, followed."""
    return followed(samples)


def times(events: list[LockEvent], kind: str) -> list[float]:
    """Times of one kind of event."""
    return [event.time_s for event in events if event.kind == kind]


def test_lock_is_gained_and_lost_when_the_finished_record_says_so(live, whole) -> None:
    """Who acts on the line must not find another time in the report; within the smearing."""
    events, follower = live
    starts = [episode.start_s for episode in whole.episodes]
    stops = [episode.stop_s for episode in whole.episodes]
    assert len(starts) == 3
    # The filter of the whole record is longer: its first stretch begins later.
    assert times(events, "gained")[1:] == pytest.approx(starts[1:], abs=follower.smear_s)
    assert times(events, "lost") == pytest.approx(stops[:-1], abs=follower.smear_s)
    assert follower.locked


def test_slips_are_those_of_the_finished_record(live, whole) -> None:
    """None told twice where windows overlap, none lost between two."""
    events, follower = live
    slips = [event for event in events if event.kind == "slip"]
    assert [slip.turns for slip in slips] == [slip.turns for slip in whole.slips]
    expected = [slip.time_s for slip in whole.slips]
    assert times(events, "slip") == pytest.approx(expected, abs=follower.smear_s)


def test_slow_slips_beside_the_edge_are_counted_once_each() -> None:
    """At a detuning of 0.56 to a coupling of 0.5 psi dwells between two cells."""
    samples = record(2, ((25.0, 0.1), (15.0, 0.8), (30.0, 0.0), (12.0, -0.56), (20.0, -0.42)))
    capture = held_capture(samples, RATE_HZ, CHANNELS, "memory")
    reference, driven = (wire_channel(capture, setup) for setup in ROLES)
    expected = measure_pair(reference, driven, settings=MeasureSettings()).slips
    events, follower = followed(samples)
    assert [event.turns for event in events if event.kind == "slip"] == [s.turns for s in expected]
    told = times(events, "slip")
    assert told == pytest.approx([slip.time_s for slip in expected], abs=2.0 * follower.smear_s)


def test_events_do_not_depend_on_how_the_samples_come(samples, live) -> None:
    """A pipe hands out what it has; the answer is that of the samples."""
    assert followed(samples, part=20_011)[0] == live[0]


def test_memory_is_that_of_a_window(samples) -> None:
    """A watch of days must not grow."""
    follower = LockFollower(pair(window_s=8.0))
    for start in range(0, samples.shape[1], 500):
        follower.feed(samples[:, start : start + 500])
        held = sum(part.shape[1] for part in [*follower._kept, *follower._fresh])
        assert held <= 1.25 * 8.0 * RATE_HZ


def test_a_signal_that_goes_and_comes_back_is_told() -> None:
    """A pulled cable is neither a lock nor a slip."""
    samples = record(stretches=((15.0, 0.1),))
    gone = 1e-3 * np.random.default_rng(5).standard_normal((2, 30 * RATE_HZ))
    events, follower = followed(np.concatenate([samples, gone, samples], axis=1), window_s=8.0)
    kinds = [event.kind for event in events if event.kind != "slip"]
    assert kinds[:2] == ["gained", "lost"]
    assert "no phase" in kinds
    assert kinds[-2:] == ["phase back", "gained"]
    assert times(events, "lost")[0] == pytest.approx(15.0, abs=1.0)
    assert follower.locked


def test_a_method_once_taken_is_kept(samples) -> None:
    """Two methods date the phase zero differently: a change of method would be a step of psi."""
    follower = followed(samples[:, :30_000])[1]
    assert (follower._phases.reference.method, follower._phases.driven.method) == ("analytic",) * 2


def test_a_window_of_too_few_cycles_says_that_it_may_be_too_short() -> None:
    """'Record longer' is no help to who watches."""
    slow = np.cos(2 * math.pi * 0.2 * np.arange(40 * RATE_HZ) / RATE_HZ)
    events, _ = followed(np.array([slow, slow]), window_s=20.0)
    assert events[0].kind == "no phase"
    assert events[0].reason.endswith("--window may be too short")


def test_a_stated_hold_time_is_used(samples) -> None:
    """The rule of the report is the rule of the watch."""
    settings = MeasureSettings(rules=EpisodeRules(hold_s=0.7))
    assert followed(samples, settings=settings)[1].hold_s == 0.7


def test_a_window_too_short_for_the_hold_time_says_so() -> None:
    """Else a slow drift would be told as one lock after the other."""
    drifting = record(stretches=((40.0, 0.53),))
    assert followed(drifting, window_s=8.0)[1].hold_capped


def test_an_open_order_is_refused() -> None:
    """A search over orders needs a record, not a window."""
    with pytest.raises(FitError, match="stated order"):
        pair(MeasureSettings(order=None))


def test_a_window_without_samples_is_refused() -> None:
    """A window of a microsecond holds nothing."""
    with pytest.raises(FitError, match="window must hold samples"):
        pair(window_s=1e-6)


def test_a_channel_that_is_not_there_is_refused(samples) -> None:
    """The wrong channel number is no reason to wait for a phase."""
    with pytest.raises(ChannelError, match="no channel '5'"):
        followed(samples, driven=ChannelSetup(channel=5))
