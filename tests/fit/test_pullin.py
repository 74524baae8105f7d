"""Pull-in time and jitter: from the start of the record to lock, noise not counted."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from fit.episodes import EpisodeRules, find_episodes
from fit.models import PhaseEquation, pull_in_time_s, trajectory
from fit.pullin import (
    ENTRY_ONLY,
    TOLERANCE_RAD,
    find_pull_in,
    locked_jitter,
    with_noise_on_the_way,
)

RATE_HZ = 20.0
HOLD_S = 15.0
TURN = 2 * math.pi


def pull_in(psi_tools, psi, rate_hz=RATE_HZ, **changes):
    """Pull-in time of a psi, its episodes found as the analysis finds them."""
    return whole_pull_in(psi_tools, psi, rate_hz, **changes).time


def whole_pull_in(psi_tools, psi, rate_hz=RATE_HZ, **changes):
    """Pull-in with the way it took."""
    record = replace(psi_tools.difference(psi, rate_hz), **changes)
    return find_pull_in(record, find_episodes(record, EpisodeRules(), HOLD_S))


def relaxing(dw, start_rad, count=2400):
    """Noise-free psi of a pair with K = 1 rad/s."""
    equation = PhaseEquation(detuning_rad_s=dw, coupling_rad_s=1.0)
    return equation, trajectory(equation, start_rad, np.arange(count) / RATE_HZ)


@pytest.mark.parametrize(("dw", "start_rad"), [(0.0, 3.0), (0.6, 2.2), (-0.6, 1.0), (0.9, -1.5)])
def test_without_noise_it_is_the_closed_form(psi_tools, dw, start_rad):
    """Acceptance limits are written from the closed form; the measurement must mean the same."""
    equation, psi = relaxing(dw, start_rad)
    found = pull_in(psi_tools, psi)
    # A chord between two samples lies above the exponential by less than a hundredth of one.
    assert found.value == pytest.approx(
        pull_in_time_s(equation, start_rad, TOLERANCE_RAD), abs=0.01 / RATE_HZ
    )
    # Nothing but the grid step is uncertain.
    assert found.u == pytest.approx(1 / RATE_HZ / math.sqrt(12.0), rel=1e-3)


def test_whole_turns_drifted_before_lock_are_time_too(psi_tools):
    """A pair that beats for 30 s and then locks took 30 s and its relaxation."""
    beating = np.cumsum(np.full(600, TURN * 0.5 / RATE_HZ))
    equation, psi = relaxing(0.0, 2.0)
    found = pull_in(psi_tools, np.concatenate([beating - beating[-1] + 2.0, psi]))
    closed_s = 600 / RATE_HZ + pull_in_time_s(equation, 2.0, TOLERANCE_RAD)
    assert found.value == pytest.approx(closed_s, abs=0.01 / RATE_HZ)


@pytest.mark.parametrize(("dw", "noise_rad2_s"), [(0.6, 1e-5), (0.6, 0.01), (0.0, 0.03)])
def test_with_noise_it_is_the_closed_form_on_average(psi_tools, rng, dw, noise_rad2_s):
    """Excursions of noise after the entry used to be counted: 1.3 s in place of 0.05 s."""
    relaxation = math.sqrt(1.0 - dw**2)
    spread = math.sqrt(noise_rad2_s / relaxation)
    start_rad = math.asin(dw) + 2.2
    equation = PhaseEquation(detuning_rad_s=dw, coupling_rad_s=1.0)
    closed_s = pull_in_time_s(equation, start_rad, max(TOLERANCE_RAD, 3 * spread))
    found = [
        pull_in(
            psi_tools,
            psi_tools.pulled_psi(
                rng,
                drift_rad_s=dw,
                coupling_rad_s=1.0,
                noise_rad2_s=noise_rad2_s,
                step_s=1 / RATE_HZ,
                count=1600,
                start_rad=start_rad,
            ),
        )
        for _ in range(30)
    ]
    times_s = np.array([one.value for one in found])
    # Four standard errors, and a tenth of a relaxation time of stated bias.
    error_s = 4 * times_s.std(ddof=1) / math.sqrt(times_s.size)
    assert times_s.mean() == pytest.approx(closed_s, abs=error_s + 0.1 / relaxation)
    # The stated u covers what noise does at the entry; noise on the way adds some.
    ratio = times_s.std(ddof=1) / np.mean([one.u for one in found])
    assert 0.6 < ratio < 1.8


def known_pair(sweeps, dw, noise_rad2_s, sigma_rad):
    """What a record tells of a pair with K = 1 rad/s."""
    return replace(
        sweeps.nothing_known(),
        detuning_hz=sweeps.known(dw / TURN, 0.001),
        coupling_hz=sweeps.known(1.0 / TURN, 0.001),
        noise_rad2_s=sweeps.known(noise_rad2_s, 0.0, "rad2/s"),
        measurement_noise_rad=sweeps.known(sigma_rad, 0.0, "rad"),
    )


@pytest.mark.parametrize(
    ("dw", "away", "noise_rad2_s", "sigma_rad", "hidden"),
    [
        (0.6, 2.2, 0.01, 0.0, 0),
        (0.6, 2.2, 1e-5, 0.01, 0),  # the recorder's noise at the entry
        (0.0, 3.0, 0.03, 0.05, 0),  # the way scatters it three times as far as the entry
        (0.0, 3.1, 1e-3, 0.02, 20),  # the guard hides the slowest second of the way
        (0.9, -1.5, 0.003, 0.03, 0),  # close to the edge
    ],
)
def test_u_is_the_scatter_between_records_of_one_pair(
    psi_tools, sweeps, rng, dw, away, noise_rad2_s, sigma_rad, hidden
):
    """An engineer reads u as what the next record may differ by; it was short by three times."""
    count, samples = 250, 900
    psi = sweeps.integrate(
        rng,
        np.full(count, dw),
        lambda angle: -np.sin(angle),
        noise=noise_rad2_s,
        sigma=sigma_rad,
        length_s=samples * sweeps.STEP_S,
        start=math.asin(dw) + away,
    )
    psi[:, :hidden] = np.nan
    known = known_pair(sweeps, dw, noise_rad2_s, sigma_rad)
    pulled = [whole_pull_in(psi_tools, row, 1.0 / sweeps.STEP_S) for row in psi]
    found = [with_noise_on_the_way(one, known) for one in pulled if one.time.value is not None]
    assert len(found) > 0.9 * count
    assert not any(note for _, note in found)
    spread_s = np.std([time.value for time, _ in found])
    u_s = math.sqrt(np.mean([time.u**2 for time, _ in found]))
    # 250 records tell their deviation to 5 %; the goal is a fifth.
    assert u_s == pytest.approx(spread_s, rel=0.2)


def test_where_the_way_is_not_known_a_note_says_that_u_is_the_entrys(psi_tools, sweeps):
    """A quiet lock does not tell its coupling, and two turns are no pull-in of one equation."""
    _, psi = relaxing(0.0, 3.0)
    found = whole_pull_in(psi_tools, psi)
    time, note = with_noise_on_the_way(found, sweeps.nothing_known())
    assert (time, note) == (found.time, ENTRY_ONLY)
    beating = np.concatenate([np.linspace(-15.0, 3.0, 600), psi])
    turned = whole_pull_in(psi_tools, beating)
    known = known_pair(sweeps, 0.0, 0.01, 0.0)
    assert with_noise_on_the_way(turned, known) == (turned.time, ENTRY_ONLY)
    vague = replace(known, coupling_hz=sweeps.known(1.0 / TURN, 0.4 / TURN))
    assert with_noise_on_the_way(found, vague)[1] == ENTRY_ONLY
    none = replace(found, time=sweeps.undetermined("s", "no lock"))
    assert with_noise_on_the_way(none, known) == (none.time, "")


def test_noise_of_the_recorder_alone_does_not_delay_it(psi_tools, rng):
    """White noise leaves the tolerance for single samples all the time."""
    equation, psi = relaxing(0.6, 2.8)
    noise = 0.05
    found = pull_in(psi_tools, psi + noise * rng.standard_normal(psi.size))
    closed_s = pull_in_time_s(equation, 2.8, 3 * noise)
    assert abs(found.value - closed_s) < 4 * found.u
    assert found.u < 0.3


@pytest.mark.parametrize("noise_rad2_s", [1e-6, 0.01, 0.03])
def test_a_record_that_starts_locked_shows_none(psi_tools, rng, noise_rad2_s):
    """Most points of a sweep lie next to one that was locked too."""
    for _ in range(10):
        psi = psi_tools.pulled_psi(
            rng,
            drift_rad_s=0.5,
            coupling_rad_s=1.0,
            noise_rad2_s=noise_rad2_s,
            step_s=1 / RATE_HZ,
            count=1600,
        )
        found = pull_in(psi_tools, psi)
        assert found.value is None
        assert found.reason == "the record starts locked: no pull-in to be seen"


def test_time_counts_from_the_start_of_the_record_not_from_the_first_valid_sample(psi_tools):
    """The drive is stepped where the record starts; a guard hides half a second of it."""
    _, psi = relaxing(0.0, 3.0)
    whole = pull_in(psi_tools, psi)
    hidden = psi.copy()
    hidden[:10] = np.nan
    assert pull_in(psi_tools, hidden).value == pytest.approx(whole.value, rel=1e-12)


def test_a_pull_in_within_the_guard_is_not_seen(psi_tools):
    """What was over before the first phase could be read has no time."""
    _, psi = relaxing(0.0, 1.0)
    psi[:100] = np.nan
    assert pull_in(psi_tools, psi).value is None


def test_the_smearing_of_the_phase_band_joins_the_uncertainty(psi_tools):
    """A band of 0.6 s cannot date an entry to a twentieth of a second."""
    _, psi = relaxing(0.0, 3.0)
    smeared = pull_in(psi_tools, psi, smear_s=0.6)
    assert smeared.u == pytest.approx(math.hypot(0.6, 1 / RATE_HZ) / math.sqrt(12.0), rel=1e-3)


def test_records_without_a_lasting_lock_have_none(psi_tools, rng):
    """A time to lock needs a lock that lasts to the end of the record."""
    noise = 0.02 * rng.standard_normal(1600)
    time_s = np.arange(1600) / RATE_HZ
    drifting = 3.0 * time_s + noise
    lost = np.where(time_s < 40, 0.0, 3.0 * (time_s - 40)) + noise
    again = TURN * (time_s > 40) + noise
    for psi, reason in (
        (drifting, "the record has no locked episode"),
        (lost, "the record is not locked at the end of its first stretch"),
        (again, "the pair leaves its lock again: no single pull-in"),
        (np.full(1600, np.nan), "the record has no locked episode"),
    ):
        found = pull_in(psi_tools, psi)
        assert (found.value, found.reason) == (None, reason)


def test_jitter_is_the_deviation_of_psi_in_lock(psi_tools, rng):
    """sqrt(D / relaxation rate) for a locked pair in weak noise."""
    values = []
    for _ in range(20):
        psi = psi_tools.pulled_psi(
            rng,
            drift_rad_s=0.6,
            coupling_rad_s=1.0,
            noise_rad2_s=0.002,
            step_s=1 / RATE_HZ,
            count=2000,
        )
        record = psi_tools.difference(psi, RATE_HZ)
        values.append(locked_jitter(record, find_episodes(record, EpisodeRules(), HOLD_S)))
    found = np.array([one.value for one in values])
    # Weak noise: the curvature of the pull adds 1.5 %; four standard errors beside it.
    error = 4 * found.std(ddof=1) / math.sqrt(found.size)
    assert found.mean() == pytest.approx(math.sqrt(0.002 / 0.8), abs=error + 0.001)
    # The spread of 20 records is known to 16 %.
    assert np.mean([one.u for one in values]) == pytest.approx(found.std(ddof=1), rel=0.5)


def test_jitter_needs_an_episode_of_some_samples(psi_tools):
    """A deviation of a handful of samples is no statement."""
    record = psi_tools.difference(np.zeros(6), 1.0)
    assert "no locked episode" in locked_jitter(record, ()).reason
    episodes = find_episodes(record, EpisodeRules(), 3.0)
    assert "holds 6 samples; 8 needed" in locked_jitter(record, episodes).reason
