"""The spread of the free detuning from point to point of a sweep, and what it is worth.

At the maximum each record gives its own detuning, v, with the variance 1/I of its noise, once
the shared parameters are held. A spread q of the free frequency between points adds q^2 to
each. q^2 is where the sum of v^2/(1/I + q^2) equals what it is on average: the number of
records less what the shared parameters took up. That part is exact here, from the covariance
of the fit: record r loses h_r = c' C c / (I^2 (1/I + q^2)), c the mixed second derivative by
its detuning and the parameters. C and the residuals move with q^2, so the likelihood is taken
as quadratic about the last fit, and the fit is made again until q settles.

Nothing gates it: a spread too small to be proven widens the edges too. Setting it to zero
below a chance level, or leaving out the record that stands out most, makes it too small on
average (by a sixth at q equal to the noise of a record) and the intervals too short.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from fit.joint import CENTRE, COUPLING, JointData, JointFit, fit_joint, record_parameters
from fit.quantiles import student_above
from fit.records import AdequacyTest
from fit.region_tests import detuning_departures, detuning_test
from rig.arrays import BoolArray, FloatArray
from rig.quantities import Quantity

ROUNDS = 3  # of fit and spread; they settle to a few per cent in two
NEWTON_ROUNDS = 30
SETTLED = 0.05  # change of the spread, as a part of it, at which the rounds stop
# Records that happen to cross the edge have long tails: their z count up to this.
LARGEST = 2.5
# Mean of min(z^2, LARGEST^2) for normal z: the part within, less its tails, and the capped.
MEAN_OF_CAPPED = (
    math.erf(LARGEST / math.sqrt(2.0))
    - 2.0 * LARGEST * math.exp(-0.5 * LARGEST**2) / math.sqrt(2.0 * math.pi)
    + LARGEST**2 * math.erfc(LARGEST / math.sqrt(2.0))
)
LEAST_LEFT = 0.05  # a record that the parameters follow tells nothing of the spread
MOST_FREEDOM = 1e5  # Student's quantile is the normal one to 1e-5 from there on
NORMAL_95 = 1.959963984540054  # two-sided 95 % quantile of the normal distribution


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PointSpread:
    """Spread of the detuning between points, with what its own uncertainty does to edges.

    ``share`` (G,) is the part of the variance of the less sure edge of each group that comes
    from the spread, ``freedom`` the degrees of freedom of the scatter that it was told from.
    """

    spread_rad_s: float
    share: FloatArray
    freedom: float

    @property
    def quantile(self) -> float:
        """Two-sided 95 % quantile of an edge.

        Student's where there is a spread: noise and spread together are then what the scatter
        of the records says, with its degrees of freedom, however much of it the noise explains.
        """
        if self.spread_rad_s == 0.0:
            return NORMAL_95
        return student_above(min(max(self.freedom, 1.0), MOST_FREEDOM), 0.025)


def with_spread(
    data: JointData, fit: JointFit, held: BoolArray
) -> tuple[JointData, JointFit, AdequacyTest, PointSpread]:
    """Return data and fit with the spread of the detuning between points, its test, it.

    Parameters
    ----------
    data : JointData with the stated spreads
    fit : JointFit of them
    held : bool array (G, 8)
    """
    stated = data.spread_rad_s
    test = detuning_test(detuning_departures(data, fit))
    own, plain = _Quadratic(data, fit), fit
    square, freedom = _solve(own, stated**2)
    used = 0.0
    for _ in range(ROUNDS):
        if square == 0.0:
            known = _no_spread(data.groups)
            return data.spread(stated), plain, _with_effect(test, known), known
        used = square
        data = data.spread(np.sqrt(stated**2 + used))
        fit = fit_joint(data, fit.theta, held, delta=fit.delta_rad_s)
        own = _Quadratic(data, fit)
        square, freedom = _solve(own, stated**2, square)
        if abs(math.sqrt(square) - math.sqrt(used)) < SETTLED * math.sqrt(used):
            break
    known = PointSpread(
        spread_rad_s=math.sqrt(used), share=_share(own, stated**2, used), freedom=freedom
    )
    return data, fit, _with_effect(test, known), known


def _with_effect(test: AdequacyTest, known: PointSpread) -> AdequacyTest:
    """Return the test with the spread that the edges allow for as its effect."""
    return replace(test, effect=Quantity(value=known.spread_rad_s, u=None, unit="rad/s"))


def _no_spread(groups: int) -> PointSpread:
    return PointSpread(spread_rad_s=0.0, share=np.zeros(groups), freedom=math.inf)


class _Quadratic:
    """The joint likelihood about a fit, as a quadratic of the shared parameters."""

    def __init__(self, data: JointData, fit: JointFit) -> None:
        information = fit.records.information
        _, jacobian = record_parameters(data, fit.theta, fit.delta_rad_s)
        diagonal = np.einsum("gii->gi", fit.covariance)
        jacobian = jacobian * (diagonal > 0.0)[data.group][:, None, :]  # held: no part in it
        own = information[:, 0, 0]
        self.usable = (own > 0.0) & fit.converged[data.group]
        self.own = np.where(self.usable, own, 1.0)
        self.coupled = np.einsum("mi,mij->mj", information[:, 0, :], jacobian)
        self.coupled[~self.usable] = 0.0
        # Score at delta = 0, where the quadratics of all spreads have their origin.
        score = fit.records.score + information[:, :, 0] * fit.delta_rad_s[:, None]
        self.score = np.where(self.usable, score[:, 0], 0.0)
        self.first = np.searchsorted(data.group, np.arange(data.groups))
        self.group = data.group
        self.whole = self._sums(np.einsum("mij,mik,mkl->mjl", jacobian, information, jacobian))
        self.pull = self._sums(np.einsum("mij,mi->mj", jacobian, score))

    def _sums(self, values: FloatArray) -> FloatArray:
        return np.asarray(np.add.reduceat(values, self.first, axis=0))

    def covariance(self, variance: FloatArray) -> FloatArray:
        """Return that of the parameters (G, 8, 8), each record's detuning free by its variance."""
        shrink = variance / (1.0 + variance * self.own)
        outer = self.coupled[:, :, None] * self.coupled[:, None, :]
        matrix = self.whole - self._sums(shrink[:, None, None] * outer)
        size = np.sqrt(np.maximum(np.einsum("gii->gi", self.whole), np.finfo(float).tiny))
        scale = np.where(np.einsum("gii->gi", self.whole) > 0.0, 1.0 / size, 0.0)
        both = scale[:, :, None] * scale[:, None, :]
        return np.asarray(np.linalg.pinv(matrix * both, hermitian=True) * both)

    def residuals(self, variance: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Return v, its variance, and the part 1 - h that is left of it, of each record (M,)."""
        covariance = self.covariance(variance)
        shrink = variance / (1.0 + variance * self.own)
        pull = self.pull - self._sums((shrink * self.score)[:, None] * self.coupled)
        step = np.einsum("gij,gj->gi", covariance, pull)[self.group]
        values = (self.score - np.sum(self.coupled * step, axis=1)) / self.own
        total = 1.0 / self.own + variance
        followed = np.einsum("mi,mij,mj->m", self.coupled, covariance[self.group], self.coupled)
        left = np.maximum(1.0 - followed / self.own**2 / total, LEAST_LEFT)
        return values, total, np.where(self.usable, left, 0.0)


def _solve(own: _Quadratic, stated: FloatArray, start: float = 0.0) -> tuple[float, float]:
    """Return (q^2, degrees of freedom): Newton's steps, q^2 kept from falling below zero."""
    square, freedom = start, 0.0
    for _ in range(NEWTON_ROUNDS):
        values, total, left = own.residuals(stated + square)
        freedom = float(np.sum(left))
        if not freedom > 0.0:
            return 0.0, 0.0
        squares = values**2 / total / np.where(left > 0.0, left, 1.0)
        counted = left * np.minimum(squares, LARGEST**2) / MEAN_OF_CAPPED
        surplus = float(np.sum(counted)) - freedom
        # Capped squares do not move, so what moves is bounded from below by the average.
        slope = max(float(np.sum(counted / total)), float(np.sum(left / total)))
        moved = max(square + surplus / slope, 0.0)
        settled = abs(moved - square) <= 1e-3 * (square + 1e-3 / slope * freedom)
        square = moved
        if settled:
            break
    return square, freedom


def _share(own: _Quadratic, stated: FloatArray, square: float) -> FloatArray:
    """Return the largest part of an edge's variance that the spread makes, by group (G,)."""
    parts = []
    without, whole = own.covariance(stated), own.covariance(stated + square)
    for sign in (-1.0, 1.0):
        known, total = (
            found[:, CENTRE, CENTRE]
            + found[:, COUPLING, COUPLING]
            + 2.0 * sign * found[:, CENTRE, COUPLING]
            for found in (without, whole)
        )
        parts.append(1.0 - known / np.where(total > 0.0, total, 1.0))
    return np.asarray(np.clip(np.maximum(*parts), 0.0, 1.0))
