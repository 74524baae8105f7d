"""Clocks, exciters, heartbeat and pendulums: states, styles and episodes recovered."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from fit.analysis import MeasureSettings
from fit.episodes import EpisodeRules
from rig.phases.settings import PairSettings, PhaseSettings
from rig.synthetic.exciters import ExciterSettings, integrate_exciters
from rig.synthetic.rigs import simulate_rig

MUTUAL = MeasureSettings(one_way=False)


@pytest.mark.parametrize("seed", [1, 2])
def test_clocks_on_a_free_base_are_locked_in_phase(rigs, seed):
    """Two metronomes on a rolling base, with noise on their swing."""
    clocks = simulate_rig("clocks", settings={"duration_s": 240.0, "settle_s": 60.0}, seed=seed)
    found = rigs.measured(clocks, MUTUAL)
    assert found.decision.state == "locked", found.decision.reason
    assert found.episodes[0].style == "in-phase"
    # Clock 1 is the faster and leads by 11.06 delta rad; noise sways the pair by more.
    assert found.episodes[0].offset_rad == pytest.approx(-0.011, abs=0.05)


def test_clocks_on_a_beam_held_by_friction_are_locked_in_antiphase(rigs):
    """The same clocks on another beam choose the other style."""
    settings = {
        "duration_s": 400.0,
        "rate_hz": 30.0,
        "settle_s": 300.0,
        "delta": 0.0001,
        "beta": 0.05,
        "beam_friction": 10.0,
        "torque_noise": 0.005,
        "start_apart_rad": 2.5,
    }
    # Equal clocks settle slowly, so the record cannot rule out a chance closer than 1 %: say
    # how far such clocks differ when alone.
    stated = replace(MUTUAL, rules=EpisodeRules(free_spread=0.01))
    found = rigs.measured(simulate_rig("clocks", settings=settings, seed=1), stated)
    assert found.decision.state == "locked", found.decision.reason
    assert found.episodes[0].style == "anti-phase"


def test_clocks_too_far_apart_are_drifting(rigs):
    """Beyond the edge at delta = 0.0407 the faster clock runs away."""
    settings = {"duration_s": 240.0, "delta": 0.06}
    found = rigs.measured(simulate_rig("clocks", settings=settings, seed=1), MUTUAL)
    assert found.decision.state == "drifting", found.decision.reason
    assert found.mean_rate_hz.value < 0


@pytest.fixture(scope="module")
def exciters() -> dict[float, np.ndarray]:
    """Two exciters on two frames, integrated side by side: signals by arm ratio."""
    ratios = np.array([1.0, 3.0])
    settings = ExciterSettings(
        duration_s=15.0, rate_hz=250.0, settle_s=5.0, free_2_hz=25.1, torque_noise_nms=0.01
    )
    motion = integrate_exciters(settings, ratios, rng=np.random.default_rng(3))
    return {ratio: np.cos(motion[:, 3:5, lane].T) for lane, ratio in enumerate(ratios)}


@pytest.mark.parametrize(("arm_ratio", "style"), [(1.0, "anti-phase"), (3.0, "in-phase")])
def test_exciters_lock_in_the_style_of_their_frame(rigs, exciters, arm_ratio, style):
    """Unbalance forces cancel or add: the machine shop's question."""
    found = rigs.measured(rigs.pair_of(exciters[arm_ratio], 250.0), MUTUAL)
    assert found.decision.state == "locked", found.decision.reason
    assert found.episodes[0].style == style


def test_exciters_of_unequal_motors_drift(rigs):
    """Motors too far apart in speed pass each other again and again."""
    settings = {
        "duration_s": 10.0,
        "rate_hz": 250.0,
        "free_2_hz": 30.0,
        "torque_noise_nms": 0.01,
    }
    found = rigs.measured(simulate_rig("exciters", settings=settings, seed=1), MUTUAL)
    assert found.decision.state == "drifting", found.decision.reason
    assert found.mean_rate_hz.value > 0


@pytest.mark.parametrize("seed", range(1, 13))
def test_two_stretches_of_three_beats_a_breath_are_found(rigs, seed):
    """Spikes against a slow wave over 180 s: both episodes, their ends, and nothing else."""
    heart = simulate_rig("heartbeat", settings={}, seed=seed)
    settings = MeasureSettings(
        order=(1, 3), phases=PairSettings(driven=PhaseSettings(method="spike"))
    )
    found = rigs.measured(heart, settings)
    assert found.decision.state == "intermittent", found.decision.reason
    starts = [episode.start_s for episode in found.episodes]
    stops = [episode.stop_s for episode in found.episodes]
    # An episode begins where psi has come to within 0.04 turn of its level; the pull towards
    # it, from wherever the free heart has left psi, takes up to 2 s.
    assert starts == pytest.approx([heart.fact(f"episode_{k}_start_s") for k in (1, 2)], abs=2.0)
    assert stops == pytest.approx([heart.fact(f"episode_{k}_stop_s") for k in (1, 2)], abs=2.0)


def test_the_method_for_spikes_is_chosen_without_being_told(rigs):
    """A person who does not know the methods gets the same episodes."""
    found = rigs.measured(
        simulate_rig("heartbeat", settings={}, seed=1), MeasureSettings(order=(1, 3))
    )
    assert found.driven.method == "spike"
    assert len(found.episodes) == 2


def test_free_pendulums_on_a_spring_are_not_called_locked(rigs):
    """Normal modes beat; half-turn jumps at the nulls of the envelope are no slips."""
    pendulums = simulate_rig("pendulums", settings={}, seed=1)
    found = rigs.measured(pendulums, MUTUAL)
    assert found.decision.state != "locked"
    # Nor is anything printed that only a phase equation has.
    adler = found.adler
    numbers = (adler.detuning_hz, adler.coupling_hz, adler.noise_rad2_s, adler.relaxation_rate_hz)
    assert all(one.value is None and "no phase equation" in one.reason for one in numbers)
    assert adler.adequate is False
    assert [test.name for test in adler.tests if test.fired][-1] == "linear coupled modes"
    assert "no synchronisation" in found.mutual.on_driven_hz.reason
    assert found.mutual.on_driven_hz.value is None


@pytest.mark.parametrize("split", [0.001, 0.004])
def test_a_decaying_linear_pair_has_no_coupling(rigs, rng, split):
    """Weakly coupled plates ring down with a slow beat: psi drifts as if it were pulled."""
    time_s = np.arange(0.0, 120.0, 1.0 / 200.0)
    low, high = 8.0, 8.0 + 40.0 * split
    fall = np.exp(-time_s / 60.0)
    slow, fast = (fall * np.cos(2.0 * np.pi * hz * time_s) for hz in (low, high))
    rows = np.stack([slow + 0.35 * fast, slow - 0.5 * fast])
    rows += 1e-3 * rng.standard_normal(rows.shape)
    adler = rigs.measured(rigs.pair_of(rows, 200.0)).adler
    assert adler.adequate is False
    assert adler.coupling_hz.value is None
    assert "passive pair" in adler.coupling_hz.reason
