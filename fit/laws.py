"""Laws over the levels of a region: coupling against amplitude, centre against level."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from fit.quantiles import student_above
from fit.records import AdequacyTest, RegionLevel
from rig.errors import FitError
from rig.quantities import Quantity, undetermined

Row = tuple[float, float, float]  # amplitude, value, standard uncertainty
SIZE = 0.01  # chance that p = 1 is rejected where it is true
_KAPPA_UNIT = "Hz per unit amplitude"
_NORMAL_SIZE = 2.5758293035489004  # two-sided 99 % quantile of the normal distribution


@dataclass(frozen=True, slots=True, kw_only=True)
class CouplingLaw:
    """coupling_hz = kappa * amplitude ** p: kappa at the power stated, p fitted, p = 1 tested.

    ``kappa`` is for power 1 unless ``proportional`` was rejected; then for the fitted power.
    """

    kappa: Quantity
    power: Quantity
    proportional: AdequacyTest | None
    notes: tuple[str, ...] = ()


def coupling_law(levels: Sequence[RegionLevel]) -> CouplingLaw:
    """Return the law of the coupling over the levels.

    Parameters
    ----------
    levels : sequence of RegionLevel; those without a coupling are left out

    Returns
    -------
    CouplingLaw

    Notes
    -----
    Power and decibel levels are amplitudes already (``amplitude_of_level``). p comes from a
    weighted line through logarithms; where the couplings scatter more about it than their
    uncertainties say (Birge ratio), uncertainties are widened and the test uses Student's t.
    """
    rows = [
        (level.amplitude, level.coupling_hz.value, level.coupling_hz.u or 0.0)
        for level in levels
        if level.coupling_hz.value is not None and level.coupling_hz.value > 0
    ]
    if not rows:
        reason = "no level of the region has a coupling"
        return CouplingLaw(
            kappa=undetermined(_KAPPA_UNIT, reason),
            power=undetermined("1", reason),
            proportional=None,
        )
    power = _power(rows)
    test = _proportional(power, len(rows))
    if test is None or not test.fired:
        return CouplingLaw(kappa=_kappa(rows, 1.0), power=power, proportional=test)
    exponent = power.value or 1.0
    note = (
        f"coupling is not proportional to amplitude: power {exponent:.4g}, and kappa is for "
        "that power"
    )
    return CouplingLaw(kappa=_kappa(rows, exponent), power=power, proportional=test, notes=(note,))


def _kappa(rows: Sequence[Row], power: float) -> Quantity:
    """Return the weighted mean of coupling / amplitude ** power."""
    ratios = [(k / a**power, _floored(u / a**power, k / a**power)) for a, k, u in rows]
    kappa, kappa_u = _weighted_mean(ratios)
    unit = _KAPPA_UNIT if power == 1.0 else f"{_KAPPA_UNIT} to the {power:.4g}"
    return Quantity(value=kappa, u=kappa_u, unit=unit)


def _proportional(power: Quantity, rows: int) -> AdequacyTest | None:
    """Return the test of p = 1, None when there is no p."""
    if power.value is None or not power.u:
        return None
    distance = (power.value - 1.0) / power.u
    freedom = rows - 2
    quantile = _NORMAL_SIZE
    if freedom >= 1:
        quantile = max(quantile, student_above(freedom, SIZE / 2.0))
    fired = abs(distance) > quantile
    return AdequacyTest(
        name="coupling proportional to amplitude",
        statistic=distance**2,
        threshold=quantile**2,
        fired=fired,
        size=SIZE,
        effect=Quantity(value=power.value - 1.0, u=power.u, unit="1"),
        meaning="power of the coupling in the amplitude, less 1",
    )


def pooled(rows: Sequence[Row]) -> tuple[Quantity, Quantity]:
    """Return (mean, slope with amplitude squared) of a value over levels.

    The mean's uncertainty is widened by the spread between levels where that is larger than
    the stated uncertainties explain (Birge ratio).

    Parameters
    ----------
    rows : sequence of (amplitude, value in Hz, its standard uncertainty)
    """
    unit = "Hz per unit amplitude squared"
    if not rows:
        reason = "no level of the region has both edges"
        return undetermined("Hz", reason), undetermined(unit, reason)
    mean, u = _weighted_mean([(value, _floored(u, value)) for _, value, u in rows])
    if len({amplitude for amplitude, _, _ in rows}) < 2:
        return Quantity(value=mean, u=u, unit="Hz"), undetermined(unit, "only one level")
    slope, slope_u = _weighted_slope([(a**2, value, _floored(s, value)) for a, value, s in rows])
    return Quantity(value=mean, u=u, unit="Hz"), Quantity(value=slope, u=slope_u, unit=unit)


def _power(rows: Sequence[Row]) -> Quantity:
    """Return the exponent of a power law through the rows."""
    if len({amplitude for amplitude, _, _ in rows}) < 2:
        return undetermined("1", "only one level; a power law needs two")
    logs = [(math.log(a), math.log(k), _floored(u / k, 1.0)) for a, k, u in rows]
    slope, slope_u = _weighted_slope(logs)
    return Quantity(value=slope, u=slope_u, unit="1")


def _floored(u: float, value: float) -> float:
    """Return u, kept above rounding so that a weight stays finite."""
    return max(u, 1e-12 * abs(value), 1e-300)


def _weighted_mean(pairs: Sequence[tuple[float, float]]) -> tuple[float, float]:
    values = np.array([value for value, _ in pairs])
    weights = np.array([1.0 / u**2 for _, u in pairs])
    mean = float(np.sum(weights * values) / np.sum(weights))
    u = 1.0 / math.sqrt(float(np.sum(weights)))
    if len(pairs) > 1:
        birge = math.sqrt(float(np.sum(weights * (values - mean) ** 2)) / (len(pairs) - 1))
        u *= max(1.0, birge)
    return mean, u


def _weighted_slope(rows: Sequence[Row]) -> tuple[float, float]:
    """Return the slope of a straight line and its uncertainty, widened by the Birge ratio."""
    x, y, u = (np.array(column) for column in zip(*rows, strict=True))
    design = np.column_stack([np.ones_like(x), x]) / u[:, None]
    solved, *_ = np.linalg.lstsq(design, y / u, rcond=None)
    covariance = np.linalg.pinv(design.T @ design)
    slope_u = math.sqrt(max(float(covariance[1, 1]), 0.0))
    if len(rows) > 2:
        chi2 = float(np.sum((y / u - design @ solved) ** 2))
        slope_u *= max(1.0, math.sqrt(chi2 / (len(rows) - 2)))
    return float(solved[1]), slope_u


def amplitude_of_level(level: float, kind: str) -> float:
    """Return the amplitude a drive level stands for, in units of its own reference.

    amplitude: the level; power: its square root; decibel: 10 ** (level / 20).

    Parameters
    ----------
    level : float
    kind : "amplitude", "power" or "decibel"

    Raises
    ------
    FitError
        If the kind is another, or an amplitude or power is not above 0.
    """
    if kind == "decibel":
        return math.pow(10.0, level / 20.0)
    if not level > 0:
        raise FitError(f"level of kind {kind} must be above 0, got {level:g}")
    if kind == "amplitude":
        return level
    if kind == "power":
        return math.sqrt(level)
    raise FitError(f"level kind '{kind}' is not one of amplitude, power, decibel")
