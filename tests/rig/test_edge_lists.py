"""Edge lists of crank and cam wheels, measured from the times of their rows."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest

from fit.analysis import MeasureSettings, measure_pair
from fit.episodes import EpisodeRules
from fit.records import Measurement
from rig.channels import Channel, ChannelSetup, wire_channel
from rig.errors import LockspanError
from rig.phases.estimate import track_one
from rig.phases.listed import is_edge_list, listed_events
from rig.phases.settings import PairSettings, PhaseSettings
from rig.readers import ReadOptions, open_capture

PULSES = PairSettings(reference=PhaseSettings(method="pulse"), driven=PhaseSettings(method="pulse"))
CRANK = ChannelSetup(channel="crank", pulses_per_turn=35, missing_pulses=1)
CAM = ChannelSetup(channel="cam", pulses_per_turn=3)


def wheel_turns(positions: int, missing: int, turns: int) -> np.ndarray:
    """Turns at which a wheel's teeth begin; the last ones of each turn are left out."""
    teeth = np.arange(positions - missing) / positions
    return (np.arange(turns)[:, None] + teeth).ravel()


def times_of(turns: np.ndarray, start_hz: float, gain_hz_s: float) -> np.ndarray:
    """When a crank that runs up evenly has made so many turns: f t + g t^2 / 2 = turns."""
    return (np.sqrt(start_hz**2 + 2.0 * gain_hz_s * turns) - start_hz) / gain_hz_s


def write_edges(path: Path, *, start_hz: float = 20.0, gain_hz_s: float = 2.0) -> Path:
    """A crank of 34 teeth and a gap, and a cam of 3 teeth geared 1:2 to it, as a row an edge."""
    crank, cam = wheel_turns(35, 1, 80), 2.0 * (wheel_turns(3, 0, 40) + 0.11)
    rows = sorted(
        (float(t), column, level)
        for times, column, level in (
            (times_of(crank, start_hz, gain_hz_s), 0, 1),
            (times_of(crank + 0.5 / 35, start_hz, gain_hz_s), 0, 0),
            (times_of(cam, start_hz, gain_hz_s), 1, 1),
            (times_of(cam + 0.2, start_hz, gain_hz_s), 1, 0),
        )
        for t in times
    )
    levels, lines = [0, 0], ["Time [s],crank,cam"]
    for time_s, column, level in rows:
        levels[column] = level
        lines.append(f"{time_s:.9f},{levels[0]},{levels[1]}")
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path


@pytest.fixture(scope="module")
def wheels(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Channel]:
    """Both wheels of the list, sampled at a rate far too low for the teeth."""
    path = write_edges(tmp_path_factory.mktemp("edges") / "wheels.csv")
    capture = open_capture(path, options=ReadOptions(rate_hz=1000.0))
    return {str(setup.channel): wire_channel(capture, setup) for setup in (CRANK, CAM)}


@pytest.fixture(scope="module")
def measured(wheels: dict[str, Channel]) -> Measurement:
    """The list measured at 2:1, as a person who knows nothing of free wheels would."""
    settings = MeasureSettings(order=(2, 1), phases=PULSES, rules=EpisodeRules(free_spread=0.1))
    return measure_pair(wheels["crank"], wheels["cam"], settings=settings)


def test_a_cam_geared_to_its_crank_is_locked_without_slips(measured: Measurement) -> None:
    """The gap of each turn used to be a slip when teeth were counted as turns."""
    assert measured.slips == ()
    assert measured.decision.state == "locked"
    assert measured.decision.locked_fraction == pytest.approx(1.0, abs=0.02)


def test_the_mean_rate_of_geared_wheels_is_zero(measured: Measurement) -> None:
    """2 f_cam = f_crank at every instant, also while both run up."""
    assert measured.mean_rate_hz.value == pytest.approx(0.0, abs=0.02)


def test_edges_stand_where_their_rows_say_however_low_the_rate(wheels) -> None:
    """At 1 kHz a frame is 7 degrees of this crank; the rows are good to a nanosecond."""
    edges_s = listed_events(wheels["crank"], PhaseSettings()).event_s
    expected = times_of(wheel_turns(35, 1, 80), 20.0, 2.0)
    # The first row is the start of the capture and no change that anyone saw.
    assert edges_s == pytest.approx(expected[1:], abs=2e-9)


def test_falling_edges_are_half_a_tooth_later(wheels) -> None:
    """The edge that is asked for is the one that is taken."""
    falling = listed_events(wheels["crank"], PhaseSettings(edge="falling")).event_s
    expected = times_of(wheel_turns(35, 1, 80) + 0.5 / 35, 20.0, 2.0)
    assert falling == pytest.approx(expected, abs=2e-9)


def test_the_frequency_of_a_wheel_alone_is_that_of_its_turns(wheels) -> None:
    """Free-running captures of wheels are edge lists too: 80 turns take 3.66 s."""
    track = track_one(wheels["crank"], settings=PhaseSettings(method="pulse"))
    duration_s = float(times_of(np.array([80.0]), 20.0, 2.0)[0])
    assert track.frequency_hz.value == pytest.approx(80.0 / duration_s, rel=0.01)


def test_a_method_for_samples_still_takes_samples(wheels) -> None:
    """A person who asks for markers gets markers of the held levels."""
    assert is_edge_list(wheels["cam"].capture)
    assert listed_events(wheels["cam"], PhaseSettings(method="marker")) is None
    assert listed_events(wheels["cam"], PhaseSettings(band_hz=(1.0, 2.0))) is None


def test_a_note_says_where_the_phases_are_from(measured: Measurement) -> None:
    """The reader's note on the rate would else be taken as the accuracy of the phases."""
    assert any("from the times of the rows" in note for note in measured.notes)


def test_a_wheel_with_too_few_edges_is_refused(tmp_path: Path) -> None:
    """Three edges are no wheel."""
    rows = "".join(f"{math.sqrt(k):.6f},{k % 2},{1 if k in (3, 7, 11) else 0}\n" for k in range(40))
    path = tmp_path / "few.csv"
    path.write_text("t,a,b\n" + rows, encoding="utf-8")
    capture = open_capture(path, options=ReadOptions(rate_hz=1000.0))
    channels = [wire_channel(capture, ChannelSetup(channel=k)) for k in (1, 2)]
    with pytest.raises(LockspanError, match="'b': 3 instants, at least 4 needed"):
        measure_pair(*channels, settings=MeasureSettings(phases=PULSES))
