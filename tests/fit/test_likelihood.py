"""The filter likelihood against a slow one, its own derivatives, and its company."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from fit.likelihood import (
    LaneBatch,
    LanePrior,
    ScoringRules,
    fit_lanes,
    lane_likelihood,
    make_lanes,
    record_likelihood,
)
from fit.records import PsiSeries

THETA = np.array([1.5, math.sin(0.7), -math.cos(0.7), math.log(0.03), math.log(0.01)])


def slow_loglik(y: np.ndarray, step: float, theta: np.ndarray) -> float:
    """The same filter written out sample by sample, with forty small Euler-midpoint steps."""
    dw, a, b, log_d, log_r = theta
    d, r = math.exp(log_d), math.exp(log_r)
    mean, variance, total, parts = float(y[0]), r, 0.0, 40

    def slope(m: float, p: float) -> tuple[float, float]:
        damp = math.exp(-0.5 * p)
        drift = dw + damp * (a * math.cos(m) + b * math.sin(m))
        return drift, 2.0 * damp * (b * math.cos(m) - a * math.sin(m)) * p + 2.0 * d

    for value in y[1:]:
        for _ in range(parts):
            h = step / parts
            dm, dp = slope(mean, variance)
            dm, dp = slope(mean + 0.5 * h * dm, variance + 0.5 * h * dp)
            mean, variance = mean + h * dm, variance + h * dp
        s = variance + r
        away = value - mean
        total -= 0.5 * (math.log(2.0 * math.pi * s) + away * away / s)
        mean, variance = mean + variance / s * away, variance * r / s
    return total


def walk(rng: np.random.Generator, shape: tuple[int, int], step: float) -> np.ndarray:
    """Rough drifting psi: enough structure for checks that need no truth."""
    shocks = 1.1 * step + math.sqrt(2.0 * 0.03 * step) * rng.standard_normal(shape)
    return np.cumsum(shocks, axis=1) + 0.1 * rng.standard_normal(shape)


def batch_of(psi: np.ndarray, step: float) -> LaneBatch:
    """One lane a row."""
    rows = psi.shape[0]
    return LaneBatch(
        y=psi,
        count=np.full(rows, psi.shape[1]),
        step_s=np.full(rows, step),
        start_s=np.zeros(rows),
    )


def test_lanes_equal_the_filter_written_out(rng):
    """The fast arrangement must compute the same likelihood as the obvious loop."""
    psi = walk(rng, (4, 60), 0.2)
    fast = lane_likelihood(batch_of(psi, 0.2), np.tile(THETA, (4, 1))).loglik
    slow = [slow_loglik(row, 0.2, THETA) for row in psi]
    # One RK4 step of 0.35 rad against forty midpoint steps: 1e-4 of a log-likelihood of 50.
    np.testing.assert_allclose(fast, slow, atol=2e-2)


@pytest.mark.parametrize("lost_s", [0.0, 0.03])
@pytest.mark.parametrize("ramp", [None, 0.004])
def test_gradient_equals_differences(rng, ramp, lost_s):
    """A gradient off by more than a hundredth of a standard error would shift the maximum."""
    batch = replace(batch_of(walk(rng, (3, 200), 0.15), 0.15), lost_s=np.full(3, lost_s))
    theta = np.tile(THETA if ramp is None else [*THETA, ramp], (3, 1))
    found = lane_likelihood(batch, theta)
    for column in range(theta.shape[1]):
        h = np.zeros(theta.shape[1])
        h[column] = 1e-5
        high, low = (lane_likelihood(batch, theta + side * h).loglik for side in (1.0, -1.0))
        error = np.sqrt(found.information[:, column, column])
        # Two per cent where the parameters are far off and innovations are not white.
        allowed = 0.01 * error + 0.02 * np.abs(found.score[:, column])
        np.testing.assert_array_less(np.abs((high - low) / 2e-5 - found.score[:, column]), allowed)


def test_a_smoothed_walk_keeps_its_diffusion(rng):
    """Increments of a moving mean over a third of a step miss a ninth of it; D must not."""
    parts, records, samples = 12, 60, 400
    walks = np.cumsum(rng.standard_normal((records, parts * (samples + 1))), axis=1)
    # D = 0.05 rad2/s at a step of 1 s, moving means of four of the twelve parts.
    walks *= math.sqrt(2.0 * 0.05 / parts)
    smooth = sum(walks[:, k : k + parts * samples : parts] for k in range(4)) / 4.0
    # The mean of four values a part apart: |s| r(s) sums to 2 (3 + 4 + 3)/16 parts.
    lost_s = 1.25 / parts
    logs = []
    for own_s in (lost_s, 0.0):
        series = [
            PsiSeries(step_s=1.0, segments=(row,), start_s=(0.0,), lost_s=own_s) for row in smooth
        ]
        batch, owner = make_lanes(series, 400)
        start = np.tile([0.0, 0.0, 0.0, math.log(0.05), math.log(1e-4)], (records, 1))
        fits = fit_lanes(batch, owner, start, rules=ScoringRules(held=(4,)))
        logs.append(np.mean(fits.theta[:, 3]))
    # One record knows ln D to 0.07, sixty to 0.01; three mean parameters of 400 samples.
    assert logs[0] == pytest.approx(math.log(0.05), abs=0.03)
    assert logs[1] < logs[0] - 0.05


def test_information_is_the_spread_of_the_gradient(rng):
    """At the truth the gradient has mean zero and the stated information as covariance."""
    step, rows = 0.2, 4000
    psi = np.empty((rows, 12))
    state = rng.uniform(-np.pi, np.pi, rows)
    for sample in range(psi.shape[1]):
        psi[:, sample] = state
        for _ in range(20):
            shock = math.sqrt(2.0 * 0.03 * 0.01) * rng.standard_normal(rows)
            state = state + 0.01 * (1.5 - np.sin(state - 0.7)) + shock
    psi += 0.1 * rng.standard_normal(psi.shape)
    found = lane_likelihood(batch_of(psi, step), np.tile(THETA, (rows, 1)))
    expected = np.mean(found.information, axis=0)
    scale = np.sqrt(np.diag(expected))
    # 4 standard errors of a mean over 4,000 lanes; Euler truth adds 1 % of the drift.
    np.testing.assert_array_less(
        np.abs(np.mean(found.score, axis=0)) / scale, 4.0 / math.sqrt(rows) + 0.03
    )
    spread = np.cov(found.score.T) / np.outer(scale, scale)
    np.testing.assert_allclose(spread, expected / np.outer(scale, scale), atol=0.12)


def test_a_lane_gives_the_same_bytes_in_any_company(rng):
    """Results of a sweep must not depend on which points are measured together."""
    long, short = walk(rng, (60, 130), 0.2), walk(rng, (5, 40), 0.2)
    padded = np.full((65, 130), np.nan)
    padded[:60], padded[60:, :40] = long, short
    mixed = LaneBatch(
        y=padded,
        count=np.array([130] * 60 + [40] * 5),
        step_s=np.full(65, 0.2),
        start_s=np.zeros(65),
    )
    theta = np.tile(THETA, (65, 1))
    theta[::3, 0] = 5.0
    together = lane_likelihood(mixed, theta)
    for lanes in (np.array([0]), np.array([62]), np.arange(3, 64, 7)):
        alone = lane_likelihood(mixed.take(lanes), theta[lanes])
        assert np.array_equal(alone.loglik, together.loglik[lanes])
        assert np.array_equal(alone.information, together.information[lanes])


def test_cutting_a_record_into_lanes_changes_little(rng):
    """Lanes are for speed alone; the estimate must stay within a small part of its error."""
    record = PsiSeries(step_s=0.2, segments=(walk(rng, (1, 1500), 0.2)[0],), start_s=(0.0,))
    fits = []
    for length in (2000, 100):
        batch, owner = make_lanes([record], length)
        fits.append(fit_lanes(batch, owner, THETA[None]))
    error = np.sqrt(np.diag(np.linalg.inv(fits[0].information[0])))
    np.testing.assert_array_less(np.abs(fits[0].theta[0] - fits[1].theta[0]) / error, 0.35)


def test_lanes_overlap_by_one_sample_and_lose_none():
    """Every increment of every segment is in exactly one lane."""
    psi = np.arange(1000.0)
    record = PsiSeries(step_s=0.5, segments=(psi, psi[:7], psi[:1]), start_s=(3.0, 600.0, 700.0))
    batch, owner = make_lanes([record], 400)
    assert int(np.sum(batch.count - 1)) == 999 + 6
    assert np.array_equal(owner, np.zeros(batch.count.size))
    ends = [row[count - 1] for row, count in zip(batch.y, batch.count, strict=True)]
    assert np.array_equal(batch.y[1:3, 0], ends[:2])
    np.testing.assert_allclose(batch.start_s[:3], 3.0 + 0.5 * batch.y[:3, 0])


def test_hopeless_parameters_are_minus_infinity_not_an_error(rng):
    """A search may step anywhere; it must be told "no" and go on."""
    batch = batch_of(walk(rng, (4, 30), 0.2), 0.2)
    theta = np.tile(THETA, (4, 1))
    theta[0, 0], theta[1, 1], theta[2, 3] = 1e9, np.nan, 1e5
    found = lane_likelihood(batch, theta)
    assert np.array_equal(np.isfinite(found.loglik), [False, False, False, True])
    assert np.all(np.isfinite(found.score))


def test_wrapped_innovations_forgive_lost_turns(rng):
    """psi whose turns were miscounted must look the same to the wrapped filter."""
    psi = walk(rng, (1, 80), 0.2)
    jumped = psi + 2.0 * np.pi * (np.arange(80) > 40)
    theta = THETA[None]
    wrapped = [
        lane_likelihood(batch_of(y, 0.2), theta, wrapped=True).loglik[0] for y in (psi, jumped)
    ]
    assert wrapped[0] == pytest.approx(wrapped[1], abs=1e-6)


def test_priors_pull_and_held_columns_stay(rng):
    """Baselines enter as priors; null models are fits with columns held."""
    record = PsiSeries(step_s=0.2, segments=(walk(rng, (1, 400), 0.2)[0],), start_s=(0.0,))
    batch, owner = make_lanes([record])
    start = np.array([[1.0, 0.0, 0.0, math.log(0.03), math.log(0.01)]])
    free = fit_lanes(batch, owner, start, rules=ScoringRules(held=(1, 2)))
    assert free.converged[0]
    assert np.array_equal(free.theta[0, 1:3], [0.0, 0.0])
    prior = LanePrior(mean=np.array([[3.0, 0, 0, 0, 0]]), precision=np.array([[1e12, 0, 0, 0, 0]]))
    pulled = fit_lanes(batch, owner, start, prior=prior)
    assert pulled.theta[0, 0] == pytest.approx(3.0, abs=1e-3)
    with_prior = record_likelihood(batch, owner, start, prior).loglik[0]
    assert with_prior == pytest.approx(
        record_likelihood(batch, owner, start).loglik[0] - 0.5e12 * 4.0, rel=1e-12
    )


def test_lanes_of_one_sample_are_refused():
    """A lane of one sample holds no increment; asking for such lanes is a mistake."""
    record = PsiSeries(step_s=0.2, segments=(np.zeros(5),), start_s=(0.0,))
    with pytest.raises(ValueError, match="at least 2"):
        make_lanes([record], 1)


def test_a_record_that_does_not_obey_the_equation_gives_up_or_settles_in_time():
    """Steps that go to and fro for forty rounds cost a sweep its speed and tell nothing."""
    rng = np.random.default_rng(0)
    records = []
    for third in rng.uniform(0.5, 3.0, 12):
        psi, seen = 0.0, np.empty(600)
        for index in range(seen.size):
            seen[index] = psi
            for _ in range(10):
                push = 3.0 if index == 300 else 0.0
                psi += 0.02 * (2.5 - math.sin(psi) - third * math.sin(3.0 * psi) + push)
        seen += 1e-3 * rng.standard_normal(seen.size)
        records.append(PsiSeries(step_s=0.2, segments=(seen,), start_s=(0.0,)))
    batch, owner = make_lanes(records, 600)
    start = np.tile([2.5, 0.0, -1.0, math.log(0.01), math.log(1e-4)], (12, 1))
    found = fit_lanes(batch, owner, start)
    # A record that runs to where motion is too fast to follow gives up after 8 refused steps.
    assert np.max(found.evaluations) < 30
    assert np.mean(found.converged) > 0.7
    longer = fit_lanes(batch, owner, start, rules=ScoringRules(iterations=200, patience=200))
    gained = (longer.loglik - found.loglik)[found.converged]
    assert np.all(gained < 0.1)
