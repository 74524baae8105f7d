"""Normal modes of a passive pair are named, self-sustained pairs are left alone."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.modes import find_modes

RATE_HZ = 4.0
TIME_S = np.arange(960) / RATE_HZ


def pair(tools, first, second, rng, noise=0.003):
    """Return two tracks of complex oscillations, a little noise on both."""
    tracks = []
    for name, wave in (("reference", first), ("driven", second)):
        scale = noise * np.max(np.abs(wave))
        seen = wave + scale * (rng.standard_normal((2, wave.size)).T @ [1.0, 1j])
        # Phases step by about an eighth of a turn, so that unwrapping is safe.
        phase = np.unwrap(np.angle(seen))
        tracks.append(tools.track(phase, RATE_HZ, name, amplitude=np.abs(seen)))
    return tracks


def turning(hz, decay=0.0):
    """Return exp((i 2 pi f - decay) t)."""
    return np.exp((2j * math.pi * hz - decay) * TIME_S)


@pytest.mark.parametrize("start", [0.0, 0.4, -0.3])
def test_beating_modes_are_found_with_their_lines(psi_tools, rng, start):
    """Two pendulums on a spring: in phase and against, let go at unequal heights."""
    # Two coupled pendulums: w_s^2 = g/l, w_a^2 = g/l + 2 k/m, textbook; g = 9.80665, l = 1,
    # k/m = 0.5 give 0.498402795 and 0.523197518 Hz.
    together, against = turning(0.498402795, 1 / 300), turning(0.523197518, 1 / 300)
    first = (1.0 + start) / 2.0 * together + (1.0 - start) / 2.0 * against
    second = (1.0 + start) / 2.0 * together - (1.0 - start) / 2.0 * against
    found = find_modes(*pair(psi_tools, first, second, rng))
    assert found.kind == "beating modes"
    assert found.lines_hz == pytest.approx((0.498402795, 0.523197518), abs=2e-5)
    assert found.decay_1_s == pytest.approx(1 / 300, rel=0.05)
    assert found.correlation < -0.9
    assert "no synchronisation" in found.reason


def test_one_mode_that_dies_away_is_no_lock(psi_tools, rng):
    """Both let go together: constant phase, falling amplitudes."""
    wave = turning(0.5, 1 / 200)
    found = find_modes(*pair(psi_tools, wave, 0.7 * wave, rng))
    assert found.kind == "one decaying mode"
    assert found.decay_1_s == pytest.approx(1 / 200, rel=0.02)


@pytest.mark.parametrize(
    ("first_hz", "second_hz", "modulation"), [(0.5, 0.5, 0.0), (0.5, 0.5, 0.1), (0.5, 0.52, 0.2)]
)
def test_self_sustained_pairs_are_left_alone(psi_tools, rng, first_hz, second_hz, modulation):
    """Locked or drifting, with amplitudes that the pull modulates a little."""
    beat = 2.0 * math.pi * 0.02 * TIME_S
    first = turning(first_hz) * (1.0 + modulation * np.cos(beat))
    second = turning(second_hz) * (1.0 - modulation * np.cos(beat))
    assert find_modes(*pair(psi_tools, first, second, rng)) is None


def test_pairs_of_different_rhythm_are_left_alone(psi_tools, rng):
    """Modes of one system stand in both channels; 1:2 does not."""
    assert find_modes(*pair(psi_tools, turning(0.3), turning(0.6), rng)) is None


def test_short_records_say_nothing(psi_tools):
    """Too few samples for two lines."""
    tracks = [psi_tools.track(np.linspace(0.0, 20.0, 30), 4.0, name) for name in ("a", "b")]
    assert find_modes(*tracks) is None


def test_envelope_that_only_one_channel_loses_is_no_mode(psi_tools, rng):
    """One oscillator runs down, the other does not: nothing is exchanged."""
    assert find_modes(*pair(psi_tools, turning(0.5), turning(0.5, 1 / 100), rng)) is None
