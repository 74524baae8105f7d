"""Pairs of which a measurement once said something untrue; each names the symptom."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.analysis import MeasureSettings, measure_pair
from fit.records import Measurement
from rig.captures import Capture, CaptureChannel
from rig.channels import ChannelSetup, wire_channel
from rig.errors import PhaseError
from rig.phases.settings import PairSettings, PhaseSettings

TURN = 2 * math.pi
RATE_HZ = 1000.0
TIME_S = np.arange(30_000) / RATE_HZ


def measured(
    reference: np.ndarray, driven: np.ndarray, settings: MeasureSettings | None = None, **wiring
) -> Measurement:
    """Return the measurement of two columns that stand in memory; wiring is the reference's."""
    rows = np.stack([reference, driven]).astype(np.float32)

    def source(columns, block_frames, start_frame, stop_frame):
        for start in range(start_frame, stop_frame, block_frames):
            yield rows[list(columns), start : min(start + block_frames, stop_frame)]

    capture = Capture(
        path="bench/made.wav",
        format="made",
        rate_hz=RATE_HZ,
        frame_count=rows.shape[1],
        channels=(CaptureChannel(name="1"), CaptureChannel(name="2")),
        source=source,
    )
    setups = ChannelSetup(channel=1, **wiring), ChannelSetup(channel=2)
    pair = [wire_channel(capture, setup) for setup in setups]
    return measure_pair(*pair, settings=settings or MeasureSettings())


def noise(seed: int, size: float = 0.01) -> np.ndarray:
    """Return a small noise, the same for a seed."""
    return size * np.random.default_rng(seed).standard_normal(TIME_S.size)


def square_and_sine() -> tuple[np.ndarray, np.ndarray]:
    """Return a square wave and a sine whose crests fall together but for 0.1 rad."""
    phase = TURN * 4.73 * TIME_S
    return np.sign(np.cos(phase)), np.cos(phase + 0.1) + noise(1)


def test_a_square_wave_against_a_sine_has_no_style_unless_the_angle_is_stated() -> None:
    """Used to print an offset a quarter turn off, as if the edge of a pulse were its crest."""
    found = measured(*square_and_sine())
    assert {part.style for part in found.episodes} == {"offset"}
    assert any("starts at the edge of its pulse" in note for note in found.notes)


def test_a_stated_mark_angle_restores_the_style_of_a_square_wave() -> None:
    """The remedy of the note must work: the crest stands a quarter turn behind the edge."""
    found = measured(*square_and_sine(), mark_angle_rad=-math.pi / 2, mark_angle_u_rad=0.01)
    assert {part.style for part in found.episodes} == {"in-phase"}
    assert not any("edge of its pulse" in note for note in found.notes)
    # 0.03 rad: an edge is known to half a sample, 0.015 rad at 4.73 Hz.
    assert found.episodes[0].offset_rad == pytest.approx(0.1, abs=0.03)


def free_pair_under_mains() -> tuple[np.ndarray, np.ndarray]:
    """Return two free oscillators, each under three times as much mains."""
    mains = 3 * np.cos(TURN * 50.0 * TIME_S)
    return (
        np.cos(TURN * 47.3 * TIME_S) + mains + noise(1),
        np.cos(TURN * 46.1 * TIME_S) + mains + noise(2),
    )


def test_a_free_pair_under_mains_is_not_called_locked() -> None:
    """Used to be locked: the strongest line of both channels was the mains."""
    found = measured(*free_pair_under_mains())
    assert found.decision.state == "undecided"
    assert "mains" in found.decision.reason
    assert "46.1" in found.decision.reason


def test_stated_bands_keep_the_mains_out_of_the_decision() -> None:
    """The remedy of the refusal must work: the bands hold the oscillators alone."""
    band = PhaseSettings(band_hz=(44.0, 49.0))
    settings = MeasureSettings(phases=PairSettings(reference=band, driven=band))
    assert measured(*free_pair_under_mains(), settings).decision.state == "drifting"


def test_a_pair_that_runs_at_mains_frequency_stays_locked() -> None:
    """A generator on the grid has one line a channel; it must not be barred."""
    phase = TURN * 50.0 * TIME_S
    found = measured(np.cos(phase) + noise(1), np.cos(phase + 0.4) + noise(2))
    assert found.decision.state == "locked"


def test_one_signal_in_both_channels_is_told() -> None:
    """Used to be a perfect lock without a word: one sensor fed both inputs."""
    signal = np.cos(TURN * 47.3 * TIME_S) + noise(1)
    found = measured(signal, -0.9 * signal)
    assert any("one signal in both channels" in note for note in found.notes)


def test_two_sensors_of_a_locked_pair_are_not_called_copies() -> None:
    """Noise of their own tells two sensors apart, however well the pair locks."""
    phase = TURN * 47.3 * TIME_S
    found = measured(np.cos(phase) + noise(1), np.cos(phase) + noise(2))
    assert not any("one signal in both channels" in note for note in found.notes)


@pytest.mark.parametrize("size", [1e25, 1e38])
@pytest.mark.parametrize("band_hz", [None, (40.0, 55.0)])
@pytest.mark.filterwarnings("ignore::RuntimeWarning")
def test_numbers_near_the_end_of_the_number_range_are_refused(
    size: float, band_hz: tuple[float, float] | None
) -> None:
    """Used to end in a traceback: an uncertainty was not a number."""
    phase = TURN * 47.3 * TIME_S
    band = PhaseSettings(band_hz=band_hz)
    settings = MeasureSettings(phases=PairSettings(reference=band, driven=band))
    with pytest.raises(PhaseError, match="channel '1' holds numbers up to"):
        measured(size * np.cos(phase), size * np.cos(phase + 0.4), settings)
