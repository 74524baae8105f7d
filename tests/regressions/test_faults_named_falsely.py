"""Faults once found in sound signals; each names the symptom."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from rig.channels import ChannelSetup, wire_channel
from rig.health import examine_signals
from rig.phases.estimate import track_one
from rig.phases.leak import _stands_still, find_leak
from rig.readers import ReadOptions, open_capture

RATE_HZ = 1000.0


@pytest.fixture
def time_s() -> np.ndarray:
    """60 s of sampling instants."""
    return np.arange(60_000) / RATE_HZ


def test_pulses_that_rest_at_zero_are_not_clipped(tmp_path: Path, time_s: np.ndarray) -> None:
    """Used to be a fault: '54 % of samples at the same extreme value'."""
    phase = np.mod(2 * np.pi * 4.73 * time_s + np.pi, 2 * np.pi) - np.pi
    file = tmp_path / "pulses.npy"
    np.save(file, np.array([np.exp(-0.5 * (phase / 0.1) ** 2)] * 2, dtype=np.float32))
    capture = open_capture(file, options=ReadOptions(rate_hz=RATE_HZ))
    (health,) = examine_signals(capture, [0])
    assert "clipped" not in [fault.name for fault in health.faults]


def test_a_modulated_amplitude_is_not_a_leak(time_s: np.ndarray) -> None:
    """Used to be noted as added from the partner: the side lines were taken for the own one."""
    vector = (1 + 0.9 * np.sin(2 * np.pi * 0.3 * time_s)).astype(complex)
    found = find_leak(vector, rate_hz=RATE_HZ / 10, carrier_hz=50.0, half_hz=10.0, partner_hz=50.0)
    assert found is None


def test_a_signal_that_stops_is_told_from_a_beat(time_s: np.ndarray) -> None:
    """Used to be refused: 'holds 14.7 times more of the partner's line than of its own'."""
    stopped = np.where(time_s < 30.0, 1.0, 0.0).astype(complex)
    beat = 1.0 + np.exp(2j * np.pi * 0.3 * time_s)
    assert _stands_still(stopped)
    assert not _stands_still(beat)


def test_a_slow_modulation_is_no_step_at_the_end(time_s: np.ndarray, tmp_path: Path) -> None:
    """Used to be a warning: 'level changes 3-fold at 58.9 s and stays'."""
    level = 1 + 0.9 * np.sin(2 * np.pi * 0.3 * time_s)
    file = tmp_path / "modulated.npy"
    np.save(file, np.array([level * np.cos(2 * np.pi * 47.0 * time_s)] * 2, dtype=np.float32))
    capture = open_capture(file, options=ReadOptions(rate_hz=RATE_HZ))
    (health,) = examine_signals(capture, [0])
    assert "level step" not in [fault.name for fault in health.faults]


def test_pulses_counted_as_turns_are_said_to_be(time_s: np.ndarray, tmp_path: Path) -> None:
    """Used to be silent: a wheel of 60 teeth then runs 60 times too fast."""
    file = tmp_path / "tacho.npy"
    pulses = 5.0 * (np.cos(2 * np.pi * 4.73 * time_s) > 0.5)
    np.save(file, np.array([pulses] * 2, dtype=np.float32))
    capture = open_capture(file, options=ReadOptions(rate_hz=RATE_HZ))
    track = track_one(wire_channel(capture, ChannelSetup(channel=1)))
    assert "pulses per turn taken as 1" in track.notes
