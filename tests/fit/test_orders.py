"""The order search: what is found, what is refused to be found, what must stay open."""

from __future__ import annotations

import math
import re
from dataclasses import replace

import numpy as np
import pytest

from fit.difference import form_difference
from fit.episodes import EpisodeRules
from fit.orders import constant_evidence, find_order, near_orders
from fit.records import FreeRun
from rig.errors import PhaseError
from rig.quantities import Quantity, undetermined

TURN = 2 * math.pi
RULES = EpisodeRules()


def search(tools, driven_rad, reference_rad, rate_hz, **options):
    """Return (search, both tracks) of two unwrapped phases."""
    driven = tools.track(driven_rad, rate_hz, "driven")
    reference = tools.track(reference_rad, rate_hz, "reference")
    return find_order(driven, reference, rules=RULES, **options), driven, reference


def free_run(role, hz, noise):
    """A free-running capture that said this."""
    return FreeRun(
        role=role,
        frequency_hz=Quantity(value=hz, u=1e-4, unit="Hz"),
        drift_hz_s=Quantity(value=0.0, u=0.0, unit="Hz/s"),
        noise_rad2_s=Quantity(value=noise, u=noise / 5, unit="rad2/s"),
        duration_s=100.0,
    )


@pytest.mark.parametrize("order", [(1, 1), (2, 1), (1, 3), (3, 2), (5, 7)])
def test_the_order_of_a_noisy_lock_is_found(psi_tools, rng, order):
    """Both phases wander together; only their weighted difference stays."""
    n, m = order
    reference = TURN * 5.0 * np.arange(0, 60, 0.02)
    reference += 0.3 * np.sqrt(0.02) * np.cumsum(rng.standard_normal(reference.size))
    psi = psi_tools.pulled_psi(
        rng, drift_rad_s=0.5, coupling_rad_s=2.0, noise_rad2_s=0.05, step_s=0.02, count=3000
    )
    found, _, _ = search(psi_tools, (m * reference + psi) / n, reference, 50.0)
    assert (found.order.n, found.order.m, found.order.source) == (n, m, "found")
    assert found.settled


def test_a_whole_ratio_of_free_oscillators_is_no_order(psi_tools, rng):
    """A ratio of 5.02 looks whole; its phase difference goes round."""
    time_s = np.arange(0, 300, 0.05)
    noise = 0.1 * np.sqrt(0.05) * np.cumsum(rng.standard_normal((2, time_s.size)), axis=1)
    found, driven, reference = search(
        psi_tools, TURN * 0.2 * 5.02 * time_s + noise[0], TURN * 0.2 * time_s + noise[1], 20.0
    )
    assert not found.settled
    assert "not settled by this record" in found.note
    record = form_difference(driven, reference, found.order)
    decision = psi_tools.judge(record, orders_tried=len(found.candidates))[0]
    assert decision.state in ("drifting", "undecided")


def test_two_free_tickers_at_five_to_three_stay_open(psi_tools, rng):
    """Six seconds of two free metronomes: 5:3 leads, and nothing is settled."""
    time_s = np.arange(0, 6, 0.05)
    jitter = 0.02 * rng.standard_normal((2, time_s.size))
    found, driven, reference = search(
        psi_tools, TURN * 1.5004 * time_s + jitter[0], TURN * 2.5 * time_s + jitter[1], 20.0
    )
    assert (found.order.n, found.order.m) == (5, 3)
    assert not found.settled
    record = form_difference(driven, reference, found.order)
    decision = psi_tools.judge(record, orders_tried=len(found.candidates))[0]
    assert decision.state == "undecided"


def test_an_order_kept_for_part_of_the_time_is_found(psi_tools, rng):
    """A heartbeat 1:3 with breathing twice in 180 s; its mean ratio is near 3:10."""
    time_s = np.arange(0, 180, 0.125)
    breath = TURN * 0.25 * time_s
    breath += 0.1 * np.sqrt(0.125) * np.cumsum(rng.standard_normal(time_s.size))
    locked = ((time_s > 30) & (time_s < 75)) | ((time_s > 110) & (time_s < 160))
    beat = 3 * breath + TURN * np.cumsum(np.where(locked, 0.0, 0.12)) * 0.125
    beat += 0.1 * rng.standard_normal(time_s.size)
    found, _, _ = search(psi_tools, beat, breath, 8.0)
    assert (found.order.n, found.order.m) == (1, 3)
    assert (3, 10) in [(n, m) for n, m, _ in found.candidates]


def test_candidates_are_ranked_with_the_runner_up_named(psi_tools, rng):
    """A reader must see what else was tried and how far behind it lies."""
    time_s = np.arange(0, 60, 0.05)
    noise = 0.02 * rng.standard_normal((2, time_s.size))
    found, _, _ = search(
        psi_tools, TURN * 7.07 * time_s + noise[0], TURN * 6.0 * time_s + noise[1], 20.0
    )
    evidences = [evidence for _, _, evidence in found.candidates]
    assert len(evidences) > 1
    assert evidences == sorted(evidences, reverse=True)
    second = found.candidates[1]
    assert f"next {second[0]}:{second[1]}" in found.note


def test_free_running_captures_join_the_search(psi_tools, rng):
    """Captures that put the free pair far off make a standing psi the more telling."""
    time_s = np.arange(0, 30, 0.05)
    phase = TURN * 5 * time_s
    jitter = 0.05 * rng.standard_normal(time_s.size)
    alone, _, _ = search(psi_tools, phase + jitter, phase, 20.0)
    runs = (free_run("driven", 5.3, 0.01), free_run("reference", 5.0, 0.01))
    known, _, _ = search(psi_tools, phase + jitter, phase, 20.0, free_runs=runs)
    assert (known.order.n, known.order.m) == (1, 1)
    assert known.candidates[0][2] >= alone.candidates[0][2] - 3


def test_candidates_are_coprime_and_near():
    """2:2 is 1:1 again, and a ratio far from all small orders still has a nearest one."""
    assert near_orders(1.0, 1.0, 12) == [(1, 1)]
    assert near_orders(3.02, 1.0, 12) == [(1, 3)]
    assert near_orders(50.0, 1.0, 12) == [(1, 12)]
    assert set(near_orders(1.2, 1.0, 12)) >= {(5, 6)}


def test_a_tiny_record_has_no_evidence():
    """Five values cannot speak for anything."""
    assert constant_evidence(np.zeros(5), [(0.0, 0.1)]) == 0.0


def test_a_drift_speaks_against_a_constant(rng):
    """The rival is the drift itself."""
    psi = 0.3 * np.arange(100) + 0.05 * rng.standard_normal(100)
    assert constant_evidence(psi, [(0.0, 0.1), (0.0, 1.0)]) < -10
    assert constant_evidence(psi - 0.3 * np.arange(100), [(0.0, 0.1)]) > 10


@pytest.mark.parametrize(
    ("frequency", "options", "wording"),
    [
        (undetermined("Hz", "no line"), {}, "order search: no frequency of 'driven'"),
        (None, {"max_order": 0}, "largest order must be 1 or more, got 0"),
    ],
)
def test_a_search_without_frequency_or_size_is_refused(psi_tools, frequency, options, wording):
    """The refusal names what to state instead."""
    driven = psi_tools.track(np.arange(100.0), 20.0, "driven")
    if frequency is not None:
        driven = replace(driven, frequency_hz=frequency)
    reference = psi_tools.track(np.arange(100.0), 20.0, "reference")
    with pytest.raises(PhaseError, match=re.escape(wording)):
        find_order(driven, reference, rules=RULES, **options)
