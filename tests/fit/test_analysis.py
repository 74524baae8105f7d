"""The pipeline of one capture, on phases made directly: order, settling, state, health."""

from __future__ import annotations

import math
from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest

from fit.analysis import (
    MeasureSettings,
    drop_start,
    estimate_all,
    measure_pair,
    prepare_pair,
    prepare_tracks,
)
from fit.episodes import EpisodeRules
from fit.records import FreeRun
from rig.captures import Capture, CaptureChannel
from rig.channels import ChannelSetup, wire_channel
from rig.errors import PhaseError
from rig.quantities import Quantity

TURN = 2 * math.pi
RATE_HZ = 20.0
REFERENCE_HZ = 1.9
COUNT = 2400


@pytest.fixture(scope="module")
def channel():
    """A channel of a capture that is never read: it names what the phases are of."""

    def source(columns, block_frames, start_frame, stop_frame):
        raise AssertionError("the phases are given; no sample may be read")

    capture = Capture(
        path="bench/made.wav",
        format="made",
        rate_hz=1000.0,
        frame_count=120_000,
        channels=(CaptureChannel(name="reference"), CaptureChannel(name="driven")),
        source=source,
        notes=("note of the reader",),
    )
    return wire_channel(capture, ChannelSetup(channel="driven"))


@pytest.fixture
def tracks(psi_tools):
    """Makes (reference, driven) of a psi at an order: psi = n phi_driven - m phi_reference."""

    def make(psi_rad, order=(1, 1), reference_hz=REFERENCE_HZ):
        time_s = np.arange(psi_rad.size) / RATE_HZ
        reference = 0.4 + TURN * reference_hz * time_s
        driven = (psi_rad + order[1] * reference) / order[0]
        return (
            psi_tools.track(reference, RATE_HZ, "reference"),
            psi_tools.track(driven, RATE_HZ, "driven"),
        )

    return make


@pytest.fixture
def pulled(psi_tools, rng):
    """psi of a pulled pair, K = 1 rad/s, D = 0.01 rad2/s unless told otherwise."""

    def make(drift_rad_s, noise_rad2_s=0.01, **start):
        return psi_tools.pulled_psi(
            rng,
            drift_rad_s=drift_rad_s,
            coupling_rad_s=1.0,
            noise_rad2_s=noise_rad2_s,
            step_s=1 / RATE_HZ,
            count=COUNT,
            **start,
        )

    return make


def free_run(detuning_hz, noise_rad2_s=0.01):
    """The driven oscillator alone, as a long capture would tell it at order 1:1."""
    return FreeRun(
        role="driven",
        frequency_hz=Quantity(value=REFERENCE_HZ + detuning_hz, u=1e-4, unit="Hz"),
        drift_hz_s=Quantity(value=0.0, u=1e-6, unit="Hz/s"),
        noise_rad2_s=Quantity(value=noise_rad2_s, u=0.1 * noise_rad2_s, unit="rad2/s"),
        duration_s=600.0,
        file="alone.wav",
    )


def finished(pair, channel, settings=None, free_runs=()):
    """Return the measurement of two tracks."""
    settings = settings or MeasureSettings()
    prepared = prepare_tracks(*pair, channel, settings=settings, free_runs=free_runs)
    return estimate_all([prepared], settings=settings)[0]


def test_a_drifting_pair_gives_state_beat_and_equation(tracks, pulled, channel):
    """The whole row of a sweep from one record outside the locking region."""
    found = finished(tracks(pulled(1.25)), channel)
    assert found.decision.state == "drifting"
    assert found.episodes == ()
    beat_hz = 0.75 / TURN
    assert found.mean_rate_hz.value == pytest.approx(beat_hz, abs=4 * found.mean_rate_hz.u)
    assert len(found.slips) == pytest.approx(beat_hz * COUNT / RATE_HZ, abs=2)
    assert all(slip.turns == 1 for slip in found.slips)
    for quantity, true in (
        (found.adler.detuning_hz, 1.25 / TURN),
        (found.adler.coupling_hz, 1.0 / TURN),
        (found.adler.offset_rad, 0.0),
    ):
        assert quantity.value == pytest.approx(true, abs=4 * quantity.u)
        assert quantity.u > 0


def test_a_locked_pair_gives_angle_jitter_and_state(tracks, pulled, channel):
    """With a capture of the driven oscillator alone, quiet lock is told from chance."""
    found = finished(tracks(pulled(0.6)), channel, free_runs=[free_run(0.6 / TURN)])
    assert found.decision.state == "locked", found.decision.reason
    (episode,) = found.episodes
    # Noise shifts the mean of sin by 1/(1 - var/2); 4 u beside it.
    assert episode.offset_rad == pytest.approx(math.asin(0.6), abs=4 * episode.offset_u_rad + 0.01)
    assert found.jitter_rad.value == pytest.approx(math.sqrt(0.01 / 0.8), rel=0.3)
    assert found.slip_rate_hz.value in (None, 0.0)
    assert found.pull_in_s.value is None


def test_the_capture_is_named_and_its_notes_kept(tracks, pulled, channel):
    """A row of a report must lead back to its file."""
    found = finished(tracks(pulled(1.6)), channel)
    assert (found.path, found.format, found.rate_hz) == ("bench/made.wav", "made", 1000.0)
    assert found.duration_s == pytest.approx(120.0)
    assert found.capture_notes == ("note of the reader",)
    assert (found.reference.channel, found.driven.channel) == ("reference", "driven")
    assert found.reference.frequency_hz.value == pytest.approx(REFERENCE_HZ, rel=1e-9)


def test_the_settling_time_is_kept_out_of_the_state_and_in_the_pull_in(tracks, pulled, channel):
    """A sweep steps its drive as each capture starts: drift there is not the point's state."""
    lead = np.linspace(-7 * TURN, 0.0, 200) + 3.0
    # Ten seconds of beats and the pull-in from 3 rad.
    psi = np.concatenate([lead, pulled(0.0, noise_rad2_s=1e-4, start_rad=3.0)])
    pair = tracks(psi)
    runs = [free_run(0.0)]
    whole, settled = (
        prepare_tracks(
            *pair, channel, settings=MeasureSettings(settle_s=settle_s), free_runs=runs
        ).measurement
        for settle_s in (0.0, 16.0)
    )
    assert len(whole.slips) >= 6
    assert settled.slips == ()
    assert settled.decision.state == "locked", settled.decision.reason
    assert settled.episodes[0].start_s == pytest.approx(16.0, abs=1 / RATE_HZ)
    # From 3 rad to 0.1 rad of rest takes 5.64 relaxation times of 1 s.
    assert settled.pull_in_s.value == pytest.approx(
        200 / RATE_HZ + 5.64, abs=4 * settled.pull_in_s.u + 0.3
    )
    # The estimate keeps the whole record: the way into lock carries what the lock does not.
    assert settled.series.start_s[0] == 0.0
    assert settled.series.duration_s == pytest.approx(psi.size / RATE_HZ, rel=0.02)


def test_dropping_a_start_marks_it_and_changes_nothing_else(psi_tools):
    """Samples keep their times and values; only what counts changes."""
    record = replace(psi_tools.difference(np.arange(100.0), RATE_HZ), start_s=0.5)
    assert drop_start(record, 0.0) is record
    dropped = drop_start(record, 2.0)
    assert int(np.flatnonzero(dropped.valid)[0]) == 30
    np.testing.assert_array_equal(dropped.psi_rad, record.psi_rad)
    assert drop_start(record, 1e3).valid.sum() == 0


def test_a_settling_time_beyond_the_record_leaves_nothing_to_judge(tracks, pulled, channel):
    """No crash, no state: the record is used up."""
    found = finished(tracks(pulled(0.0)), channel, MeasureSettings(settle_s=1e4))
    assert found.decision.state == "undecided"
    assert (found.episodes, found.slips) == ((), ())


def test_the_order_is_searched_for_when_none_is_given(tracks, pulled, channel):
    """A pair locked 2:3 is measured at 2:3 and its rivals are shown."""
    pair = tracks(pulled(0.2), order=(2, 3))
    found = finished(pair, channel, MeasureSettings(order=None))
    assert (found.order.n, found.order.m) == (2, 3)
    assert found.order.source != "given"
    assert (found.order_candidates[0][0], found.order_candidates[0][1]) == (2, 3)


def test_a_given_order_is_used_and_no_other_is_tried(tracks, pulled, channel):
    """What a person states is not second-guessed, and its false-lock rate is not divided."""
    found = finished(tracks(pulled(0.2), order=(1, 3)), channel, MeasureSettings(order=(1, 3)))
    assert (found.order.n, found.order.m, found.order.source) == (1, 3, "given")
    assert found.order_candidates == ()


def test_searching_orders_asks_for_more_than_a_given_one(tracks, pulled, channel):
    """Each order tried is one more chance for a free pair; the hold time grows with them."""
    pair = tracks(pulled(0.2), order=(9, 11))
    rules = EpisodeRules()
    given, search = (
        prepare_tracks(
            *pair, channel, settings=MeasureSettings(rules=rules, order=order)
        ).measurement
        for order in ((9, 11), None)
    )
    # 5:6 is 1.9 % away.
    assert {(n, m) for n, m, _ in search.order_candidates} >= {(9, 11), (5, 6)}
    assert search.decision.hold_s >= given.decision.hold_s


def test_a_gap_stays_a_gap_all_the_way(tracks, pulled, channel):
    """Turns lost in a hole cannot be counted, so nothing may be joined across it."""
    psi = pulled(1.5)
    reference, driven = tracks(psi)
    valid = np.ones(psi.size, dtype=bool)
    valid[1000:1100] = False
    driven = replace(driven, valid=valid)
    found = finished((reference, driven), channel)
    assert len(found.series.segments) == 2
    assert np.isnan(found.trace_psi_rad).any()
    inside = [slip for slip in found.slips if 1000 / RATE_HZ <= slip.time_s < 1100 / RATE_HZ]
    assert inside == []


def test_the_trace_has_no_more_points_than_a_picture_shows(tracks, pulled, channel):
    """An hour at a high rate must not end up in a page of vector graphics."""
    found = finished(tracks(pulled(1.5)), channel)
    assert found.trace_s.size == found.trace_psi_rad.size <= 1501
    assert np.all(np.diff(found.trace_s) > 0)


def test_estimates_do_not_depend_on_their_neighbours(tracks, pulled, channel):
    """A sweep is estimated as one array; one capture alone must give the same digits."""
    settings = MeasureSettings()
    prepared = [
        prepare_tracks(*tracks(pulled(drift)), channel, settings=settings)
        for drift in (1.25, -1.7, 0.3)
    ]
    together = estimate_all(prepared, settings=settings)
    for part, beside in zip(prepared, together, strict=True):
        alone = estimate_all([part], settings=settings)[0]
        for name in ("detuning_hz", "coupling_hz", "offset_rad", "noise_rad2_s"):
            one, other = getattr(alone.adler, name), getattr(beside.adler, name)
            assert (one.value, one.u) == (other.value, other.u)


def test_the_seed_alone_decides_the_drawn_numbers(tracks, pulled, channel):
    """Same capture, same settings, same report."""
    pair = tracks(pulled(1.25))
    first, again, other = (
        finished(pair, channel, MeasureSettings(seed=seed)).indices for seed in (1, 1, 2)
    )
    assert first == again
    assert [one.value for one in first[:3]] == [one.value for one in other[:3]]
    assert first != other


class FoundHealth(SimpleNamespace):
    """Stands in for what the examination of two signals found."""

    mains_reason = staticmethod(lambda *_: None)


@pytest.fixture
def with_health(monkeypatch, tracks, pulled):
    """Makes prepare_pair see given phases and a given health."""

    def use(reason, notes):
        pair = tracks(pulled(1.25))
        monkeypatch.setattr("fit.analysis.track_pair", lambda *_, **__: pair)
        found = FoundHealth(no_state_reason=reason, notes=notes)
        monkeypatch.setattr("fit.analysis.examine_pair", lambda *_: found)

    return use


def test_a_fault_that_forbids_a_state_takes_it_away(with_health, channel):
    """Crosstalk makes any pair look locked; what it shows is its wiring."""
    with_health("the driven channel holds the reference", ("fault: crosstalk",))
    found = prepare_pair(channel, channel, settings=MeasureSettings()).measurement
    assert found.decision.state == "undecided"
    assert found.decision.reason == "the driven channel holds the reference"
    assert "fault: crosstalk" in found.notes


def test_a_warning_is_a_note_and_leaves_the_state(with_health, channel):
    """Clipping of 0.1 % is worth a line, not the measurement."""
    with_health(None, ("warning: clipped",))
    found = measure_pair(channel, channel, settings=MeasureSettings())
    assert found.decision.state == "drifting"
    assert "warning: clipped" in found.notes
    assert found.adler.detuning_hz.value == pytest.approx(1.25 / TURN, rel=0.2)


def test_two_grids_are_refused(tracks, pulled, channel):
    """Phases of two captures differ by an unknown time."""
    reference, driven = tracks(pulled(0.0))
    with pytest.raises(PhaseError, match="must stand on one grid"):
        prepare_tracks(replace(reference, start_s=0.5), driven, channel, settings=MeasureSettings())
