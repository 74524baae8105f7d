"""Episodes: found all and only, parted where psi moves on, dated, with angle and style."""

from __future__ import annotations

import math
import re

import numpy as np
import pytest

from fit.difference import Order
from fit.episodes import (
    EpisodeRules,
    find_episodes,
    mean_angle_u_rad,
    parse_hold,
    style_of,
)
from fit.windows import qualifying_unions
from rig.errors import FitError

TURN = 2 * math.pi
RATE = 20.0


def motion(rates_hz, stretch_s, rng=None, sigma_rad=0.0):
    """psi that moves at each rate for a stretch, one after another."""
    rate = np.repeat(rates_hz, round(stretch_s * RATE))
    psi = TURN * np.cumsum(rate) / RATE
    return psi if rng is None else psi + sigma_rad * rng.standard_normal(psi.size)


def test_every_true_stretch_is_found_once(psi_tools, rng):
    """Plain loops find 26 and maximal windows 56 of 25 true stretches; a count must be right."""
    psi = motion([0.0, 0.9] * 25, 8.0, rng, 0.15)
    found = find_episodes(psi_tools.difference(psi, RATE), EpisodeRules(), 4.0)
    assert len(found) == 25


@pytest.mark.parametrize("window", [2, 3, 17, 64, 100])
def test_unions_equal_those_of_an_exact_search(psi_tools, rng, window):
    """The running extremes by doubling against a search of every window."""
    for drift in (0.0, 0.05):
        psi = np.cumsum(rng.normal(drift, 0.35, 500))
        assert qualifying_unions(psi, math.pi, window) == psi_tools.exact_unions(
            psi, math.pi, window
        )


@pytest.mark.parametrize("window", [5, 200])
def test_blocks_of_the_search_change_nothing(rng, monkeypatch, window):
    """A long record is searched in blocks; where they begin must not show."""
    psi = np.cumsum(rng.normal(0.02, 0.3, 5000))
    whole = qualifying_unions(psi, math.pi, window)
    for block in (1, 7, 1000):
        monkeypatch.setattr("fit.windows.BLOCK_SAMPLES", block)
        assert qualifying_unions(psi, math.pi, window) == whole


def test_a_record_shorter_than_the_hold_has_no_episode(psi_tools):
    """Nothing can be held longer than it was watched."""
    assert find_episodes(psi_tools.difference(np.zeros(30), RATE), EpisodeRules(), 2.0) == ()


def test_a_slow_steady_drift_is_no_episode(psi_tools, rng):
    """Each window of a slow drift stays in the band; their union must not pass for lock."""
    for rate_hz in (0.01, 0.05, 0.2):
        psi = motion([rate_hz], 150.0, rng, 0.05)
        assert find_episodes(psi_tools.difference(psi, RATE), EpisodeRules(), 0.5) == ()


def test_lock_beside_a_drift_slower_than_the_hold_is_parted_from_it(psi_tools, rng):
    """Two stays joined by a drift of one turn in a minute are two, and the drift is none."""
    psi = motion([0.0, 1 / 60, 0.0], 60.0, rng, 0.1)
    found = find_episodes(psi_tools.difference(psi, RATE), EpisodeRules(), 5.0)
    assert len(found) == 2
    # Two standard deviations of the noise are a tenth of the drift's minute.
    assert found[0].stop_s == pytest.approx(60, abs=4)
    assert found[1].start_s == pytest.approx(120, abs=4)


def test_a_quick_slip_parts_two_episodes(psi_tools):
    """Without noise the windows either side of a slip touch but share no sample."""
    psi = np.where(np.arange(1200) < 600, 0.3, 0.3 + TURN)
    found = find_episodes(psi_tools.difference(psi, RATE), EpisodeRules(), 2.0)
    assert [(part.start_s, part.stop_s) for part in found] == [(0.0, 29.95), (30.0, 59.95)]


def test_lock_drift_and_lock_again_are_dated_within_the_smearing(psi_tools, rng):
    """A wandering pair: a window reaches half a beat into the drift; its end must not."""
    smear_s = 0.25
    psi = motion([0.0, 0.5, 0.0], 40.0, rng, 0.1)
    record = psi_tools.difference(psi, RATE, smear_s=smear_s)
    first, second = find_episodes(record, EpisodeRules(), 6.0)
    for seen, true in ((first.start_s, 0), (first.stop_s, 40), (second.start_s, 80)):
        assert seen == pytest.approx(true, abs=smear_s)


def test_two_breathing_episodes_in_three_minutes_are_found_to_two_seconds(psi_tools, rng):
    """A heartbeat locked 1:3 to breathing twice in 180 s: the shape of real records."""
    time_s = np.arange(0, 180, 0.25)
    locked = ((time_s > 30) & (time_s < 75)) | ((time_s > 110) & (time_s < 160))
    psi = TURN * np.cumsum(np.where(locked, 0.0, 0.12)) * 0.25
    psi += 0.2 * rng.standard_normal(time_s.size)
    record = psi_tools.difference(psi, 4.0, order=(1, 3), hz=(0.75, 0.25))
    decision, found, _, _ = psi_tools.judge(record)
    edges = [edge for part in found for edge in (part.start_s, part.stop_s)]
    assert edges == pytest.approx([30, 75, 110, 160], abs=2.0)
    assert decision.state == "intermittent"


def test_a_gap_parts_episodes(psi_tools):
    """What happened in a gap is not known, however alike its two sides are."""
    psi = np.zeros(1200)
    psi[500:520] = np.nan
    assert len(find_episodes(psi_tools.difference(psi, RATE), EpisodeRules(), 2.0)) == 2


def test_a_short_excursion_that_comes_back_parts_nothing(psi_tools):
    """A spike of noise is no loss of lock as long as psi returns to its level."""
    psi = np.zeros(1200)
    psi[600:603] = 4.0
    (found,) = find_episodes(psi_tools.difference(psi, RATE), EpisodeRules(), 2.0)
    assert found.stop_s == pytest.approx(59.95)


def test_whole_turns_change_no_episode(psi_tools, rng):
    """psi is defined up to whole turns."""
    psi = motion([0.0, 0.7, 0.0], 20.0, rng, 0.2)
    there = find_episodes(psi_tools.difference(psi, RATE), EpisodeRules(), 5.0)
    moved = find_episodes(psi_tools.difference(psi + 7 * TURN, RATE), EpisodeRules(), 5.0)
    spans = [(part.start_s, part.stop_s) for part in there]
    assert spans == [(part.start_s, part.stop_s) for part in moved]


def test_time_reversal_mirrors_the_episodes(psi_tools, rng):
    """The rule knows no direction of time."""
    psi = motion([0.0, 0.7, 0.0], 20.0, rng, 0.2)
    there = find_episodes(psi_tools.difference(psi, RATE), EpisodeRules(), 5.0)
    back = find_episodes(psi_tools.difference(psi[::-1], RATE), EpisodeRules(), 5.0)
    end = (psi.size - 1) / RATE
    mirrored = [(end - part.stop_s, end - part.start_s) for part in reversed(back)]
    # A pair of ends may differ by a sample where a level is a median of an even count.
    assert np.allclose(mirrored, [(part.start_s, part.stop_s) for part in there], atol=0.1)


def test_the_offset_is_a_circular_mean(psi_tools, rng):
    """Angles either side of half a turn average to half a turn, not to zero."""
    psi = math.pi + 0.3 * rng.standard_normal(2000) + 4 * TURN
    (found,) = find_episodes(psi_tools.difference(psi, RATE), EpisodeRules(), 5.0)
    # Four standard errors of 2,000 values.
    assert abs(abs(found.offset_rad) - math.pi) < 4 * 0.3 / math.sqrt(2000)
    assert found.spread_rad == pytest.approx(0.3, rel=0.07)
    assert found.style == "anti-phase"


def test_the_offset_uncertainty_holds_for_noise_with_memory(rng):
    """Successive phases are alike; counting them as independent shrinks u sixfold here."""
    means, said = [], []
    for _ in range(300):
        kicks = 0.1 * rng.standard_normal(2000)
        psi = np.zeros(2000)
        for k in range(1, 2000):
            psi[k] = 0.95 * psi[k - 1] + kicks[k]
        means.append(psi.mean())
        said.append(mean_angle_u_rad(psi))
    # Two standard errors of a spread from 300 draws, and batches that still touch.
    assert np.mean(said) == pytest.approx(np.std(means), rel=0.15)


def test_the_systematic_uncertainty_joins_the_offset(psi_tools):
    """A sensor's phase error does not average out over an episode."""
    from dataclasses import replace

    record = replace(psi_tools.difference(np.zeros(400), RATE), systematic_u_rad=0.02)
    (found,) = find_episodes(record, EpisodeRules(), 2.0)
    assert found.offset_u_rad == pytest.approx(0.02, rel=1e-6)


@pytest.mark.parametrize(
    ("order", "angle_deg", "u_deg", "style"),
    [
        ((1, 1), 29.0, 0.1, "in-phase"),
        ((1, 1), -29.0, 0.1, "in-phase"),
        ((1, 1), 29.0, 1.0, "offset"),
        ((1, 1), 151.0, 0.1, "anti-phase"),
        ((1, 1), -179.0, 0.1, "anti-phase"),
        ((1, 1), 90.0, 0.1, "offset"),
        ((1, 1), 0.0, 20.0, "offset"),
        ((1, 3), 0.0, 0.1, "offset"),
        ((2, 1), 180.0, 0.1, "offset"),
    ],
)
def test_a_style_needs_the_whole_interval_inside(order, angle_deg, u_deg, style):
    """In phase is a statement about the angle with its expanded uncertainty, at 1:1 only."""
    found = style_of(Order(n=order[0], m=order[1]), math.radians(angle_deg), math.radians(u_deg))
    assert found == style


@pytest.mark.parametrize(
    ("text", "hold_s", "beats"),
    [("0.5", 0.5, 3.0), ("0.5s", 0.5, 3.0), ("2beats", None, 2.0), (" 1.5 Beats ", None, 1.5)],
)
def test_hold_times_are_read_in_seconds_or_beats(text, hold_s, beats):
    """A hold time in beats follows the pair; in seconds it is the user's word."""
    rules = parse_hold(text)
    assert (rules.hold_s, rules.hold_beats) == (hold_s, beats)


@pytest.mark.parametrize("text", ["", "beats", "two", "-1", "0", "nan", "inf", "3 cycles"])
def test_other_hold_times_are_refused_with_what_is_wanted(text):
    """The refusal shows both forms."""
    with pytest.raises(FitError, match=re.escape(f"hold time '{text}': need seconds above 0")):
        parse_hold(text)


@pytest.mark.parametrize(
    ("changes", "wording"),
    [
        ({"eps_turns": 0.5}, "below 0.5 turn, got 0.5; half a turn or more accepts every"),
        ({"eps_turns": 0.0}, "above 0 and below 0.5 turn, got 0"),
        ({"eps_turns": math.nan}, "got nan"),
        ({"hold_s": 0.0}, "hold time must be above 0 s, got 0"),
        ({"hold_beats": 0.0}, "hold time must be above 0 beats, got 0"),
        ({"alpha": 1.0}, "false-lock probability must lie in (0, 1), got 1"),
        ({"free_spread": 0.0}, "free spread must be above 0, got 0"),
        ({"style_deg": 90.0}, "style angle must lie in (0, 90) degrees, got 90"),
    ],
)
def test_rules_that_accept_everything_or_nothing_are_refused(changes, wording):
    """Wrapped differences satisfy any eps of half a turn or more."""
    with pytest.raises(FitError, match=re.escape(wording)):
        EpisodeRules(**changes)


def test_a_hold_time_of_zero_is_refused(psi_tools):
    """Without a hold time every sample is an episode."""
    with pytest.raises(FitError, match="hold time must be above 0 s"):
        find_episodes(psi_tools.difference(np.zeros(9), RATE), EpisodeRules(), 0.0)
