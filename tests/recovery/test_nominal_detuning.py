"""The nominal detuning of a pair whose free frequency wanders slowly from capture to capture."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.stats import norm

from fit.adler import estimate_adler
from fit.records import Baseline, PsiSeries
from rig.quantities import Quantity

# Wanders at the middles of 25 equally likely parts of the normal law, 8 records each.
LEVELS, EACH = 25, 8
NOMINAL, STEP, SAMPLES, DIFFUSION = 2.0, 0.2, 500, 0.01
# White noise alone leaves this standard error of the mean detuning over the record.
WHITE_U = math.sqrt(2.0 * DIFFUSION / (STEP * SAMPLES))


def captures(truth, rng, wander):
    """Records whose detuning is off its nominal value by a slow wander, and what is known of it."""
    levels = wander * norm.ppf((np.arange(LEVELS) + 0.5) / LEVELS)
    series, baselines = [], []
    for level in levels:
        pair = truth.Pair(detuning=NOMINAL + level, diffusion=DIFFUSION, noise=0.05)
        for psi in truth.simulate_psi(pair, (EACH, SAMPLES), STEP, rng):
            series.append(PsiSeries(step_s=STEP, segments=(psi,), start_s=(0.0,)))
    for _ in series:
        # One free-running capture on another day: off by its own wander.
        free = NOMINAL + wander * rng.standard_normal() + WHITE_U * rng.standard_normal()
        u = math.sqrt(2.0 * wander**2 + WHITE_U**2)
        baselines.append(
            Baseline(
                detuning_hz=Quantity(value=free / math.tau, u=u / math.tau, unit="Hz"),
                noise_rad2_s=Quantity(value=DIFFUSION, u=0.1 * DIFFUSION, unit="rad^2/s"),
                source="free runs",
                wander_hz=wander / math.tau,
            )
        )
    return series, baselines, NOMINAL + np.repeat(levels, EACH)


def share(quantities, truths):
    """Return the share of intervals that hold their truth."""
    inside = [
        one.low * math.tau <= value <= one.high * math.tau
        for one, value in zip(quantities, truths, strict=True)
    ]
    return float(np.mean(inside))


@pytest.mark.parametrize("strength", [1.0, 2.0, 5.0])
def test_the_nominal_detuning_holds_under_weak_slow_wander(truth, strength):
    """A wander of twice the white error leaves 60 % of plain intervals holding the truth."""
    rng = np.random.default_rng([20261203, int(strength)])
    series, baselines, actual = captures(truth, rng, strength * WHITE_U)
    found = estimate_adler(series, baselines=baselines)
    nominal = share([one.detuning_hz for one in found], np.full(LEVELS * EACH, NOMINAL))
    # 200 records: the rate is known to 1.5 %; goal 93-97 %, with two errors of room.
    assert 0.92 <= nominal <= 0.985
    assert share([one.detuning_mean_hz for one in found], actual) > 0.91


def test_without_free_running_captures_the_record_says_it_is_its_own_mean(truth, rng):
    """One record cannot show a wander slower than itself: the reader must be told."""
    series, _, _ = captures(truth, rng, 2.0 * WHITE_U)
    found = estimate_adler(series[:1])[0]
    assert any("mean over this record" in note for note in found.notes)
