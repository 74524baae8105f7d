"""Does the phase equation hold over a sweep? Tests on a joint fit, without fitting again.

At the maximum each record's own score says how it would change the shared parameters if it
could (Rao's score test), and its information how surely. From these come

- the two sides: K_r = K + s x_r, s = 0 for the phase equation;
- the distances: K_r = K + d (|x_r| - K), d = 0;
- the records: chi-square of each record's own coupling (its detuning free) about the shared;
- the points: spread of the detuning from point to point beyond the stated one, which is
  wander of the free frequency and no fault of the phase equation.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from fit.joint import ASYMMETRY, COUPLING, DISTANCE, WIDTH, JointData, JointFit, record_parameters
from fit.quantiles import chi_square_above
from fit.records import AdequacyTest
from rig.arrays import FloatArray, distinct
from rig.quantities import Quantity

SIZE = 0.01  # chance that a test fires on a sweep that obeys the phase equation
# A record tells its coupling apart from its detuning when at least this part of the
# information is left; steady locks do not.
LEAST_SHARE = 1e-3
NORMAL_995 = 2.5758293035489004


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Departures:
    """Values of records or groups with their variances and the degrees of freedom."""

    values: FloatArray
    variances: FloatArray
    freedom: int

    @property
    def statistic(self) -> float:
        """Sum of squares over variances."""
        return float(np.sum(self.values**2 / self.variances))

    def trimmed(self) -> Departures:
        """Return the departures without the one that stands out most.

        A record that happens to cross the edge has a score with long tails; one record alone
        must not make the phase equation fail.
        """
        if self.values.size < 2:
            return self
        kept = np.arange(self.values.size) != int(np.argmax(self.values**2 / self.variances))
        return Departures(
            values=self.values[kept], variances=self.variances[kept], freedom=self.freedom - 1
        )

    @property
    def threshold(self) -> float:
        """Chi-square quantile at the size of the test."""
        return chi_square_above(max(self.freedom, 1), SIZE)

    @property
    def excess(self) -> float:
        """Standard deviation beyond the variances that brings the statistic to its mean."""
        return excess_spread(self.values, self.variances, self.freedom)


def excess_spread(values: FloatArray, variances: FloatArray, freedom: int) -> float:
    """Return q for which sum(v^2 / (variance + q^2)) equals the degrees of freedom.

    Parameters
    ----------
    values, variances : arrays (n,)
    freedom : int

    References
    ----------
    Paule and Mandel 1982, J. Res. Natl. Bur. Stand. 87, 377 (recalled).
    """

    def surplus(q2: float) -> float:
        return float(np.sum(values**2 / (variances + q2))) - freedom

    if freedom < 1 or surplus(0.0) <= 0.0:
        return 0.0
    low, high = 0.0, float(np.max(values**2)) * values.size
    for _ in range(100):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if surplus(middle) > 0.0 else (low, middle)
    return math.sqrt(0.5 * (low + high))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Records:
    """Score and information of each record, freed of delta, with the derivative by K."""

    score: FloatArray
    information: FloatArray
    jacobian: FloatArray
    by_coupling: FloatArray


def _records(data: JointData, fit: JointFit) -> _Records:
    _, jacobian = record_parameters(data, fit.theta, fit.delta_rad_s)
    information = fit.records.information
    variance = data.spread_rad_s**2
    shrink = variance / (1.0 + variance * information[:, 0, 0])
    first = information[:, 0, :]
    # K itself moves the distance column too; its plain derivative is the one along x = const.
    plain = 1.0 / (1.0 - fit.theta[data.group, DISTANCE])
    return _Records(
        score=fit.records.score,
        information=information - shrink[:, None, None] * first[:, :, None] * first[:, None, :],
        jacobian=jacobian,
        by_coupling=jacobian[:, :, COUPLING] * plain[:, None],
    )


def side_departures(data: JointData, fit: JointFit) -> Departures:
    """Return s of each group: how much K grows with the detuning, from the score."""
    return _along(data, fit, ASYMMETRY)


def distance_departures(data: JointData, fit: JointFit) -> Departures:
    """Return d of each group: how much K grows with the distance from the centre."""
    return _along(data, fit, DISTANCE)


def _along(data: JointData, fit: JointFit, column: int) -> Departures:
    """Return the one-step estimate of a held column of each group, with its variance."""
    rows = _records(data, fit)
    groups = fit.theta.shape[0]
    score, information = np.zeros((groups, WIDTH)), np.zeros((groups, WIDTH, WIDTH))
    np.add.at(score, data.group, np.einsum("mij,mi->mj", rows.jacobian, rows.score))
    whole = np.einsum("mij,mik,mkl->mjl", rows.jacobian, rows.information, rows.jacobian)
    np.add.at(information, data.group, whole)
    cross = information[:, column, :]
    known = np.einsum("gi,gij,gj->g", cross, fit.covariance, cross)
    left = information[:, column, column] - known
    usable = (left > 1e-6 * information[:, column, column]) & fit.converged
    left = np.where(usable, left, 1.0)
    values = np.where(usable, score[:, column] / left, 0.0)
    return Departures(
        values=values[usable], variances=1.0 / left[usable], freedom=int(usable.sum())
    )


def coupling_departures(data: JointData, fit: JointFit) -> Departures:
    """Return each record's own coupling less the shared one, as a part of it.

    The one that stands out most is left out.
    """
    rows = _records(data, fit)
    information = fit.records.information
    along = np.einsum("mij,mj->mi", information, rows.by_coupling)
    own = np.einsum("mi,mi->m", rows.by_coupling, along)
    with_detuning, detuning = along[:, 0], information[:, 0, 0]
    safe = np.where(detuning > 0.0, detuning, 1.0)
    left = own - with_detuning**2 / safe
    score = np.einsum("mi,mi->m", rows.by_coupling, fit.records.score)
    score = score - with_detuning / safe * fit.records.score[:, 0]
    usable = (detuning > 0.0) & (left > LEAST_SHARE * own) & fit.converged[data.group]
    scale = fit.theta[data.group, COUPLING][usable]
    groups = distinct(data.group[usable]).size
    found = Departures(
        values=score[usable] / left[usable] / scale,
        variances=1.0 / left[usable] / scale**2,
        freedom=int(usable.sum()) - groups,
    )
    return found.trimmed()


def detuning_departures(data: JointData, fit: JointFit) -> Departures:
    """Return each record's own detuning less the shared line, rad/s, K held.

    The part that delta took up is put back, so the spread found is the whole one beyond the
    noise of the record. The one that stands out most is left out.
    """
    information = fit.records.information[:, 0, 0]
    usable = (information > 0.0) & fit.converged[data.group]
    values = fit.records.score[usable, 0] / information[usable] + fit.delta_rad_s[usable]
    groups = distinct(data.group[usable]).size
    found = Departures(
        values=values,
        variances=1.0 / information[usable] + data.spread_rad_s[usable] ** 2,
        freedom=int(usable.sum()) - 3 * groups,
    )
    return found.trimmed()


@dataclass(frozen=True, slots=True, kw_only=True)
class Repeats:
    """Points taken again at the same place: how well their detunings agree, rad/s."""

    count: int
    spread_rad_s: float
    noise_rad_s: float


def repeatability(data: JointData, fit: JointFit) -> Repeats | None:
    """Return how well repeated points agree in their own detuning, None without repeats.

    Parameters
    ----------
    data : JointData
    fit : JointFit

    Notes
    -----
    Repeats stand in one group within a thousandth of the coupling of each other. The spread is
    pooled over places, each about its own mean.
    """
    information = fit.records.information[:, 0, 0]
    values = fit.records.score[:, 0] / np.maximum(information, 1e-300) + fit.delta_rad_s
    scale = 1e-3 * fit.theta[data.group, COUPLING]
    places = np.round(data.drive_rad_s / np.maximum(scale, 1e-300))
    squares, freedom, noise, count = 0.0, 0, 0.0, 0
    for place in sorted({*zip(data.group.tolist(), places.tolist(), strict=True)}):
        mine = (data.group == place[0]) & (places == place[1]) & (information > 0.0)
        if mine.sum() < 2:
            continue
        squares += float(np.sum((values[mine] - values[mine].mean()) ** 2))
        freedom += int(mine.sum()) - 1
        noise += float(np.sum(1.0 / information[mine]))
        count += int(mine.sum())
    if not freedom:
        return None
    return Repeats(
        count=count,
        spread_rad_s=math.sqrt(squares / freedom),
        noise_rad_s=math.sqrt(noise / count),
    )


def side_test(found: Departures) -> AdequacyTest:
    """Return the test that the coupling is the same on the two sides of the centre."""
    return _mean_test(found, "coupling equal on the two sides", "s of K + s x detuning")


def distance_test(found: Departures) -> AdequacyTest:
    """Return the test that near and far points show the same coupling."""
    return _mean_test(found, "coupling equal near and far", "d of K + d (|detuning| - K)")


def _mean_test(found: Departures, name: str, symbol: str) -> AdequacyTest:
    """Return the chi-square test of some departures, with their weighted mean as effect."""
    weights = 1.0 / found.variances
    total = float(np.sum(weights)) if weights.size else 0.0
    effect = None
    if total > 0.0:
        mean = float(np.sum(weights * found.values)) / total
        effect = Quantity(value=mean, u=1.0 / math.sqrt(total), unit="1")
    fired = found.freedom > 0 and found.statistic > found.threshold
    return AdequacyTest(
        name=name,
        statistic=found.statistic,
        threshold=found.threshold,
        fired=fired,
        size=SIZE,
        effect=effect,
        meaning=f"{symbol}; one phase equation for all points has 0. " + _verdict(fired),
    )


def _verdict(fired: bool) -> str:
    if fired:
        return "Strong drive or amplitude-phase coupling shows here."
    return "No sign of strong drive or amplitude-phase coupling."


def record_test(found: Departures) -> AdequacyTest:
    """Return the chi-square test of single couplings about the shared one."""
    return _spread_test(
        found,
        "couplings of single records about the shared one",
        "1",
        "spread of the coupling from record to record beyond its noise, as a part of it",
    )


def detuning_test(found: Departures) -> AdequacyTest:
    """Return the chi-square test of the detunings of points about their line, effect in rad/s."""
    return _spread_test(
        found,
        "detuning from point to point",
        "rad/s",
        "wander of the free frequency between points beyond the noise within them; it widens "
        "the edges and is no departure from the phase equation",
    )


def _spread_test(found: Departures, name: str, unit: str, meaning: str) -> AdequacyTest:
    return AdequacyTest(
        name=name,
        statistic=found.statistic,
        threshold=found.threshold,
        fired=found.freedom > 0 and found.statistic > found.threshold,
        size=SIZE,
        effect=Quantity(value=found.excess, u=None, unit=unit),
        meaning=meaning,
    )
