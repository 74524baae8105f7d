"""The false-lock trap: an unlocked pair that stays and has a high index (A7, A8)."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.episodes import EpisodeRules, find_episodes
from fit.holdtime import longest_stay
from rig.angles import circular_mean_rad, resultant_length

STEP_S = 0.002


def beat(ratio):
    """psi over one beat of a drifting pair, K = 1 rad/s, by RK4; shape (n,), and its period."""
    period_s = 2 * math.pi / math.sqrt(ratio**2 - 1)
    count = round(period_s / STEP_S)
    step, psi = period_s / count, np.empty(count + 1)
    psi[0] = 0.0

    def rate(angle):
        return ratio - math.sin(angle)

    for k in range(count):
        first = rate(psi[k])
        second = rate(psi[k] + step * first / 2)
        third = rate(psi[k] + step * second / 2)
        fourth = rate(psi[k] + step * third)
        psi[k + 1] = psi[k] + step * (first + 2 * second + 2 * third + fourth) / 6
    return psi, period_s


@pytest.fixture(scope="module")
def slow_beat():
    """One beat at dw = 1.25 K."""
    return beat(1.25)


@pytest.mark.parametrize(("ratio", "printed"), [(1.25, 0.5), (1.05, 0.7298), (1.01, 0.8682)])
def test_an_unlocked_pair_has_a_high_resultant_length(ratio, printed):
    """An index of 0.87 without any lock: no index may decide a state."""
    # Source: derived; R = (dw - sqrt(dw^2 - K^2)) / K, preferred phase a quarter turn
    # Read: derived and integrated here
    # Printed: .5 (1.25 K), .7298 (1.05 K), .8682 (1.01 K)
    # Converted: no
    # Tolerance: half a unit of the last printed digit
    psi, _ = beat(ratio)
    assert resultant_length(psi[:-1]) == pytest.approx(printed, abs=5e-5)
    assert circular_mean_rad(psi[:-1]) == pytest.approx(math.pi / 2, abs=1e-4)


@pytest.mark.parametrize(("degrees", "key"), [(60, "60deg"), (90, "90deg"), (30, "30deg")])
def test_share_of_time_near_a_quarter_turn_while_drifting(check_tables, slow_beat, degrees, key):
    """Within 60 degrees two thirds of the time, unlocked: a hold time is needed."""
    # Source: derived; (2/pi) atan(sqrt((dw + K) / (dw - K)) tan(delta / 2))
    # Read: derived and integrated here
    # Printed: 2/3, 0.795167235301, 0.431044187633 at dw = 1.25 K
    # Converted: no
    # Tolerance: two samples of a beat of 4,189
    psi, _ = slow_beat
    share = np.mean(np.abs(psi[:-1] - math.pi / 2) < math.radians(degrees))
    stored = check_tables["drifting_residence"]["values"][key]
    assert share == pytest.approx(stored, abs=2 / psi.size)


def test_no_stay_is_longer_than_the_share_of_a_beat(slow_beat):
    """The stay in a band of half a turn is exactly 0.795 of a beat, never more."""
    # Source: derived; as above with delta = 90 degrees, band of half a turn about c = pi / 2
    # Read: derived and integrated here
    # Printed: 0.795167235301
    # Converted: no
    # Tolerance: two samples of a beat
    psi, _ = slow_beat
    beats = np.concatenate([psi[:-1] + 2 * math.pi * k for k in range(3)])
    stay = longest_stay(beats, math.pi) / (psi.size - 1)
    assert stay == pytest.approx(0.795167235301, abs=2 / psi.size)


@pytest.mark.parametrize(("hold", "expected"), [(0.78, 20), (0.81, 0)])
def test_a_hold_beyond_that_share_finds_no_episode(psi_tools, slow_beat, hold, expected):
    """A hold below the share finds one stay a beat; above it, none in twenty beats."""
    # Source: derived; as above
    # Read: derived and integrated here
    # Printed: 0.795167235301
    # Converted: hold time of 0.78 and 0.81 beats
    # Tolerance: none, a count
    psi, period_s = slow_beat
    start = psi.size // 2
    beats = np.concatenate([psi[:-1] + 2 * math.pi * k for k in range(21)])[start:]
    record = psi_tools.difference(beats[::10], (psi.size - 1) / period_s / 10)
    # Ends are taken back to the level of each stay, which here is the drift's own bottleneck.
    found = find_episodes(record, EpisodeRules(), hold * period_s)
    assert len(found) <= expected
    assert psi_tools.judge(record)[0].state == "drifting"
