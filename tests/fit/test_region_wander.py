"""Spread of the free detuning between points: unbiased, and what it does to the edges."""

from __future__ import annotations

import math
from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest
from scipy.special import stdtrit

from fit.difference import Order
from fit.joint import WIDTH, record_parameters
from fit.region import RegionRules, fit_region
from fit.region_wander import PointSpread, _Quadratic, _solve

RULES = RegionRules(order=Order(n=1, m=1))
POINTS = 21


def linear_sweep(rng, wander, tails=False):
    """Score and information of records that are exactly Gaussian about one phase equation.

    Each record measures (dw, a, b) with its own covariance; its detuning is off by the wander.
    """
    theta = np.zeros((1, WIDTH))
    theta[0, :6] = 0.07, 1.0, 0.7, 0.3, math.log(0.03), math.log(0.01)
    drive = np.linspace(-1.5, 1.5, POINTS)
    data = SimpleNamespace(group=np.zeros(POINTS, dtype=int), drive_rad_s=drive, groups=1)
    _, jacobian = record_parameters(data, theta, np.zeros(POINTS))
    jacobian[:, :, 6:] = 0.0
    roots = rng.standard_normal((POINTS, 5, 5)) * np.array([30.0, 20.0, 20.0, 3.0, 3.0])[:, None]
    information = roots @ roots.transpose(0, 2, 1)
    noise = np.linalg.solve(
        np.linalg.cholesky(information).transpose(0, 2, 1), rng.standard_normal((POINTS, 5, 1))
    )[:, :, 0]
    noise[:, 0] += wander * rng.standard_normal(POINTS)
    if tails:
        noise[10, 0] += 0.8
    fit = SimpleNamespace(
        theta=theta,
        delta_rad_s=np.zeros(POINTS),
        converged=np.ones(1, dtype=bool),
        covariance=np.diag([1.0] * 6 + [0.0, 0.0])[None],
        records=SimpleNamespace(
            information=information, score=np.einsum("mij,mj->mi", information, noise)
        ),
    )
    return data, fit


def test_the_spread_is_unbiased(rng):
    """Left out outliers and lost degrees of freedom made it a sixth too small."""
    wander, draws = 0.15, 300
    squares = [
        _solve(_Quadratic(*linear_sweep(rng, wander)), np.zeros(POINTS))[0] for _ in range(draws)
    ]
    # Four standard errors; one q^2 is known to 30-40 %. The cap on long tails costs nothing.
    error = 4.0 * np.std(squares) / math.sqrt(draws)
    assert error < 0.1 * wander**2
    assert np.mean(squares) == pytest.approx(wander**2, abs=error + 0.02 * wander**2)


def test_the_degrees_of_freedom_are_the_records_less_what_the_sweep_took(rng):
    """Centre, K, psi0 and its slope are four; other components of the records share in them."""
    _, freedom = _solve(_Quadratic(*linear_sweep(rng, 0.3)), np.zeros(POINTS))
    assert POINTS - 4.0 - 1e-9 <= freedom < POINTS - 1.0


def test_without_wander_the_spread_is_small_or_none(rng):
    """Half the sweeps show none; what the others show stays below the noise of a record."""
    found = []
    for _ in range(60):
        own = _Quadratic(*linear_sweep(rng, 0.0))
        found.append(_solve(own, np.zeros(POINTS))[0] * float(np.median(own.own)))
    assert 0.3 < np.mean([value == 0.0 for value in found]) < 0.8
    assert max(found) < 3.0


def test_one_wild_record_does_not_make_the_spread(rng):
    """A record that happens to cross the edge has long tails."""
    wander = 0.1
    tame = [
        _solve(_Quadratic(*linear_sweep(rng, wander, tails=True)), np.zeros(POINTS))[0]
        for _ in range(40)
    ]
    # Eight spreads away it counts as 6.25 of some 17; its square alone would make it 4.7 times.
    assert np.median(tame) < 2.0 * wander**2


def test_quantiles_are_students_where_the_scatter_tells_the_variance():
    """With the spread counted as the only unsure part, 11 points covered 91.5 %."""
    known = PointSpread(spread_rad_s=0.1, share=np.array([0.5]), freedom=8.0)
    assert known.quantile == pytest.approx(float(stdtrit(8.0, 0.975)))
    assert replace(known, freedom=1e7).quantile == pytest.approx(1.959964, abs=1e-4)
    assert replace(known, spread_rad_s=0.0).quantile == pytest.approx(1.959964, abs=1e-6)


def test_wander_as_large_as_the_noise_is_neither_missed_nor_halved(sweeps):
    """Six sweeps: the size of the spread over them, and scores of the edges."""
    rng = np.random.default_rng(21)
    wander, spreads, scores = 0.06, [], []
    for _ in range(6):
        region = fit_region(sweeps.sweep(rng, wander=wander, points=12, length_s=60.0), RULES)
        level, (test,) = region.levels[0], [t for t in region.tests if "point to point" in t.name]
        spreads.append(test.effect.value)
        for edge, truth in ((level.lower_hz, 0.07 - 1.0), (level.upper_hz, 0.07 + 1.0)):
            scores.append((edge.value * math.tau - truth) / (edge.u * math.tau))
    # 6 x 8 degrees of freedom, noise a fifth of the variance: known to 13 %.
    assert math.sqrt(np.mean(np.square(spreads))) == pytest.approx(wander, rel=0.4)
    # The root of chi-square of 12 over 12 exceeds 1.66 once in a thousand.
    assert np.sqrt(np.mean(np.square(scores))) < 1.66
