"""The state of a record, its evidence and the sentence that gives the reason."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fit.episodes import EpisodeRules
from fit.freenull import (
    assumed_baseline,
    confinement_p,
    draw_free_paths,
    outside_baseline,
    short_diffusion,
    thin_record,
)
from fit.rates import mean_rate, measure_slope
from fit.records import Baseline, Episode
from rig.quantities import Quantity, undetermined

TURN = 2 * math.pi
TIME = np.arange(0, 60, 1 / 37)


def baseline(hz, u_hz=0.001, noise=0.01, noise_u=0.001):
    """Free-running captures that said this."""
    return Baseline(
        detuning_hz=Quantity(value=hz, u=u_hz, unit="Hz"),
        noise_rad2_s=Quantity(value=noise, u=noise_u, unit="rad2/s"),
        source="test",
    )


def test_sixty_quiet_seconds_at_37_hz_are_locked(psi_tools, rng):
    """A slope of 1e-7 Hz: two free pairs of the stated spread never come so near."""
    psi = TURN * 1e-7 * TIME + 1e-4 * rng.standard_normal(TIME.size)
    decision, episodes, _, _ = psi_tools.judge(psi_tools.difference(psi, 37.0))
    assert decision.state == "locked"
    assert decision.notes == ("assumes free spread",)
    assert (len(episodes), decision.locked_fraction) == (1, 1.0)
    assert decision.reason.startswith(
        "no slip in 60 s; the slowest beat this record could have shown is 0.017 Hz"
    )


def test_two_free_tickers_at_five_to_three_over_six_seconds_are_undecided(psi_tools, rng):
    """Index 0.98 by mere coincidence of the ratio: the record does not settle it."""
    time_s = np.arange(0, 6, 0.1)
    psi = 0.3 * time_s / 6 + 0.05 * rng.standard_normal(time_s.size)
    record = psi_tools.difference(psi, 10.0, order=(5, 3), hz=(1.5, 2.5))
    decision, _, _, _ = psi_tools.judge(record, orders_tried=3)
    assert decision.state == "undecided"
    assert "take free-running captures" in decision.reason or "record longer" in decision.reason


def test_a_fast_drift_is_drifting(psi_tools):
    """Sixty beats and no stay."""
    decision, episodes, _, _ = psi_tools.judge(psi_tools.difference(TURN * TIME, 37.0))
    assert (decision.state, decision.locked_fraction, episodes) == ("drifting", 0.0, ())
    assert "60 slips in 60 s" in decision.reason


def test_less_than_half_a_turn_of_steady_drift_is_undecided(psi_tools):
    """It may be a slow pull-in as well as a slow beat."""
    decision, _, _, _ = psi_tools.judge(psi_tools.difference(TURN * 0.2 * TIME / 60, 37.0))
    assert decision.state == "undecided"
    assert "psi still moves on at 0.0033 Hz" in decision.reason


@pytest.mark.parametrize("ratio", [1.05, 1.25, 3.0])
def test_a_pair_just_outside_lock_drifts(psi_tools, rng, ratio):
    """psi dwells near a quarter turn for most of each beat, which is no lock."""
    psi = psi_tools.pulled_psi(
        rng,
        drift_rad_s=2 * ratio,
        coupling_rad_s=2.0,
        noise_rad2_s=1e-4,
        step_s=0.05,
        count=1200,
        start_rad=0.0,
    )
    assert psi_tools.judge(psi_tools.difference(psi, 20.0))[0].state == "drifting"


def test_a_lock_with_a_slip_is_intermittent(psi_tools, rng):
    """One slip is enough to take the name of lock from a record."""
    psi = 0.05 * rng.standard_normal(TIME.size) + TURN * (TIME > 31)
    decision, episodes, slips, _ = psi_tools.judge(psi_tools.difference(psi, 37.0))
    assert (decision.state, len(episodes), len(slips)) == ("intermittent", 2, 1)
    assert "with 1 slip" in decision.reason


def test_a_pull_in_belongs_to_the_lock_and_is_said(psi_tools, rng):
    """A record begun out of lock is locked from there on, and says from when."""
    psi = psi_tools.pulled_psi(
        rng,
        drift_rad_s=0.2,
        coupling_rad_s=2.0,
        noise_rad2_s=1e-5,
        step_s=0.05,
        count=1200,
        start_rad=2.9,
    )
    decision, _, _, _ = psi_tools.judge(psi_tools.difference(psi, 20.0))
    assert decision.state == "locked"
    assert decision.notes[-1].startswith("lock reached after")


def test_lock_lost_without_a_whole_slip_is_not_locked(psi_tools, rng):
    """A drift to the end of the record is a drift, before it makes a turn."""
    psi = 0.02 * rng.standard_normal(TIME.size) + np.maximum(0, TIME - 40) * 0.13
    assert psi_tools.judge(psi_tools.difference(psi, 37.0))[0].state == "intermittent"


def test_captures_settle_what_the_spread_leaves_open(psi_tools, rng):
    """The case for always taking free-running captures."""
    psi = psi_tools.pulled_psi(
        rng, drift_rad_s=1.0, coupling_rad_s=2.0, noise_rad2_s=0.1, step_s=0.1, count=600
    )
    record = psi_tools.difference(psi, 10.0, hz=(1.0, 1.0))
    assert psi_tools.judge(record)[0].state == "undecided"
    known = baseline(1 / TURN, noise=0.1, noise_u=0.02)
    assert psi_tools.judge(record, baseline=known)[0].state == "locked"


def test_a_quiet_lock_shorter_than_a_beat_is_told_by_its_rate(psi_tools, rng):
    """A tenth of a beat: the hold rule is powerless, the frequency is not."""
    psi = 0.01 * rng.standard_normal(TIME.size)
    known = baseline(0.1 / 60, u_hz=1e-5, noise=1e-7, noise_u=1e-8)
    decision, _, _, _ = psi_tools.judge(psi_tools.difference(psi, 37.0), baseline=known)
    assert decision.state == "locked"
    assert "alone the pair beats at 0.00167 Hz" in decision.reason


def test_equal_free_frequencies_are_told_apart_by_diffusion(psi_tools, rng):
    """Without a difference of frequency only wandering can tell, given long enough."""
    psi = psi_tools.pulled_psi(
        rng, drift_rad_s=0.0, coupling_rad_s=2.0, noise_rad2_s=0.1, step_s=0.1, count=600
    )
    known = baseline(0.0, u_hz=1e-4, noise=0.1, noise_u=0.02)
    decision, _, _, _ = psi_tools.judge(psi_tools.difference(psi, 10.0), baseline=known)
    assert decision.state == "locked"
    assert "would wander so little" in decision.reason


def test_an_undecided_record_says_what_would_settle_it(psi_tools, rng):
    """A refusal to decide is useful only with the way out."""
    psi = psi_tools.free_psi(
        rng, drift_rad_s=0.0, noise_rad2_s=1e-4, step_s=0.1, count=600, sigma_rad=0.01
    )
    far = baseline(0.001, u_hz=1e-5, noise=1e-3)
    reason = psi_tools.judge(psi_tools.difference(psi, 10.0), baseline=far)[0].reason
    assert "s would settle it" in reason
    assert "e+" not in reason  # nobody sets a recorder to 8e+02 s
    near = baseline(0.0001, u_hz=0.001, noise=1e-3)
    reason = psi_tools.judge(psi_tools.difference(psi, 10.0), baseline=near)[0].reason
    assert "set the pair further apart" in reason


def test_more_orders_tried_take_more_evidence(psi_tools, rng):
    """alpha is divided by the number of orders that were looked at."""
    psi = 0.02 * rng.standard_normal(TIME.size)
    record = psi_tools.difference(psi, 37.0)
    assert psi_tools.judge(record, orders_tried=1)[0].state == "locked"
    assert psi_tools.judge(record, orders_tried=500)[0].state == "undecided"


def test_a_wider_stated_spread_makes_lock_easier_to_tell(psi_tools, rng):
    """Pairs that differ widely by themselves seldom agree by chance."""
    psi = 0.02 * rng.standard_normal(300)
    record = psi_tools.difference(psi, 10.0, hz=(1.0, 1.0))
    assert psi_tools.judge(record)[0].state == "undecided"
    assert psi_tools.judge(record, rules=EpisodeRules(free_spread=0.2))[0].state == "locked"


def test_an_empty_record_is_undecided(psi_tools):
    """No valid phase is no verdict, and no failure."""
    decision = psi_tools.judge(psi_tools.difference(np.full(100, np.nan), 10.0))[0]
    assert (decision.state, decision.locked_fraction) == ("undecided", 0.0)


def test_stretches_shorter_than_the_hold_are_said(psi_tools):
    """Gaps may leave nothing long enough."""
    psi = np.zeros(600)
    psi[::50] = np.nan
    decision = psi_tools.judge(psi_tools.difference(psi, 10.0), rules=EpisodeRules(hold_s=20.0))[0]
    assert decision.state == "undecided"
    assert "shorter than the hold time of 20 s" in decision.reason


def test_a_gap_in_a_lock_leaves_it_locked(psi_tools, rng):
    """Each long stretch is one episode and none slips."""
    psi = 1e-3 * rng.standard_normal(TIME.size)
    psi[900:930] = np.nan
    assert psi_tools.judge(psi_tools.difference(psi, 37.0))[0].state == "locked"


@pytest.mark.parametrize(
    ("lost", "state", "words"),
    [
        (0.03, "locked", "no slip in 58.2 s; the slowest"),
        (0.15, "locked", "of valid phase, 85 % of the record"),
        (0.5, "undecided", "50 % of the record: for the rest a signal stopped or is missing"),
    ],
)
def test_a_lock_of_what_is_left_of_a_record_is_no_lock_of_the_record(
    psi_tools, rng, lost, state, words
):
    """A reference that stops half way used to pass as locked; locked_fraction stays that of
    the valid time."""
    psi = 1e-3 * rng.standard_normal(TIME.size)
    psi[round((1 - lost) * TIME.size) :] = np.nan
    decision = psi_tools.judge(psi_tools.difference(psi, 37.0))[0]
    assert decision.state == state
    assert words in decision.reason
    assert decision.locked_fraction == pytest.approx(1.0)


def test_the_ends_that_a_filter_takes_are_no_loss(psi_tools, rng):
    """Both ends of a short record alike are the guards of the filter, not a stop."""
    psi = 1e-3 * rng.standard_normal(TIME.size)
    psi[:400] = psi[-400:] = np.nan
    decision = psi_tools.judge(psi_tools.difference(psi, 37.0))[0]
    assert (decision.state, "of the record" in decision.reason) == ("locked", False)


def test_a_baseline_without_detuning_counts_as_none(psi_tools, rng):
    """A capture that says nothing must not stand in for one that does."""
    empty = Baseline(
        detuning_hz=undetermined("Hz", "capture too short"),
        noise_rad2_s=undetermined("rad2/s", "capture too short"),
        source="test",
    )
    record = psi_tools.difference(1e-3 * rng.standard_normal(TIME.size), 37.0)
    assert psi_tools.judge(record, baseline=empty)[0].notes == ("assumes free spread",)


@pytest.mark.parametrize("kind", ["walk", "white"])
def test_the_mean_rate_has_the_uncertainty_it_says(rng, kind):
    """Right for a free pair (10 %), at most twice too large for a locked one."""
    found = []
    for _ in range(300):
        noise = rng.standard_normal(400)
        found.append(measure_slope([np.cumsum(noise) if kind == "walk" else noise], 1.0))
    spread = np.std([slope.rate_rad_s for slope in found])
    said = math.sqrt(np.mean([slope.u_rad_s**2 for slope in found]))
    assert (0.88 if kind == "walk" else 1.0) < said / spread < (1.12 if kind == "walk" else 2.0)


def test_the_mean_rate_of_a_record_is_in_hertz(psi_tools):
    """psi in radians, its rate in turns a second."""
    found = mean_rate(psi_tools.difference(TURN * 0.25 * TIME, 37.0))
    assert found.value == pytest.approx(0.25, rel=1e-9)
    assert mean_rate(psi_tools.difference(np.full(9, np.nan), 37.0)).value is None


def test_simulated_free_pairs_spread_as_drift_and_diffusion_say(psi_tools, rng):
    """The null behind every p-value: mean dw t, variance 2 D t + u^2 t^2."""
    record = thin_record(psi_tools.difference(np.zeros(1001), 10.0, u_rad=0.0))
    paths = draw_free_paths(record, baseline(0.02, 0.005, 0.01, 0.0), 20_000, rng)
    end_s = record.time_s[-1]
    assert paths[:, -1].mean() == pytest.approx(TURN * 0.02 * end_s, abs=0.1)
    variance = 2 * 0.01 * end_s + (TURN * 0.005 * end_s) ** 2
    # Four standard errors of a variance from 20,000 paths.
    assert paths[:, -1].var() == pytest.approx(variance, rel=0.04)


def test_confinement_is_even_for_free_pairs(psi_tools, rng):
    """A p-value that is not even under its own null proves nothing."""
    known = baseline(0.01, 0.0, 0.02, 0.0)
    found = [
        confinement_p(
            psi_tools.difference(
                psi_tools.free_psi(
                    rng, drift_rad_s=TURN * 0.01, noise_rad2_s=0.02, step_s=1.0, count=100
                ),
                1.0,
                u_rad=0.0,
            ),
            known,
            0.01,
            rng,
        )
        for _ in range(200)
    ]
    # Four standard errors of a share of 200.
    assert np.mean(np.array(found) < 0.2) == pytest.approx(0.2, abs=0.115)


def test_diffusion_is_told_from_measurement_noise(psi_tools, rng):
    """Increments that turn back are noise of the measurement, not motion of the pair."""
    psi = psi_tools.free_psi(
        rng, drift_rad_s=0.3, noise_rad2_s=0.05, step_s=1.0, count=20_000, sigma_rad=0.2
    )
    record = psi_tools.difference(psi, 1.0, hz=(1.0, 1.0))
    # Four standard errors of a covariance of 20,000 increments.
    assert short_diffusion(record) == pytest.approx(0.05, abs=0.01)
    assumed = assumed_baseline(record, 1e-3)
    assert assumed.detuning_hz.u == pytest.approx(1e-3 * math.sqrt(2))


def test_a_stray_sample_outside_an_episode_says_nothing_of_the_free_pair(psi_tools):
    """Coarse records used to divide by the length of a stretch of one sample."""
    psi = np.zeros(200)
    psi[100:] = TURN
    psi[99] = math.pi
    record = psi_tools.difference(psi, 4.0, hz=(50.0, 50.0))
    episodes = (
        Episode(
            start_s=0.0,
            stop_s=24.5,
            offset_rad=0.0,
            offset_u_rad=0.0,
            spread_rad=0.0,
            style="in-phase",
        ),
        Episode(
            start_s=25.0,
            stop_s=49.75,
            offset_rad=0.0,
            offset_u_rad=0.0,
            spread_rad=0.0,
            style="in-phase",
        ),
    )
    assert outside_baseline(record, episodes) is None


def test_stays_that_a_free_walk_makes_too_are_no_episodes_of_lock(psi_tools, rng):
    """Strong noise alone stays in the band for a while; how psi moves outside tells."""
    states = []
    for _ in range(40):
        psi = psi_tools.free_psi(rng, drift_rad_s=0.0, noise_rad2_s=0.2, step_s=0.2, count=1500)
        states.append(psi_tools.judge(psi_tools.difference(psi, 5.0, hz=(1.0, 1.0)))[0].state)
    assert states.count("intermittent") <= 2
    assert "locked" not in states
