"""How far measured points lie from the laws of the phase equation, in standard uncertainties.

The uncertainty is that of the record and of the law together: coupling, offset and noise as
fitted, the centre of the range, and the wander of the free frequency between points, each by
the step that it makes in the law.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from fit.records import LockingRegion, RegionLevel
from reports.laws import arcsine_law_rad, beat_law_hz, noisy_rate_law_hz
from reports.records import SweepRun
from reports.rows import Row, edge_entry, longest_episode, near_rad, usable_rows
from rig.angles import hz_from_rad_s
from rig.arrays import FloatArray


@dataclass(frozen=True, slots=True, kw_only=True)
class Residual:
    """(measured - law) / u of one point, at detuning / coupling ``across``."""

    across: float
    value: float
    direction: str
    file: str


@dataclass(frozen=True, slots=True, kw_only=True)
class _Law:
    """What the law of one row rests on: its parameters in Hz, rad and rad2/s, each with its u."""

    detuning_hz: float
    detuning_u_hz: float
    coupling_hz: float
    coupling_u_hz: float
    offset_rad: float | None
    offset_u_rad: float
    noise_rad2_s: float
    noise_u_rad2_s: float


def rate_residuals(run: SweepRun) -> list[Residual]:
    """Return the residuals of the mean rates of all drifting records with a known law."""
    rows = [row for row in usable_rows(run) if row.state == "drifting"]
    known = [(row, law) for row in rows if (law := _law(run, row)) is not None]
    usable = [(row, law) for row, law in known if row.measurement.mean_rate_hz.u]
    laws = [law for _, law in usable]
    plain = _rates_hz(laws)
    steps = [
        plain - _rates_hz(laws, detuning=1.0),
        plain - _rates_hz(laws, coupling=1.0),
        plain - _rates_hz(laws, noise=1.0),
    ]
    found = []
    for place, (row, law) in enumerate(usable):
        rate = row.measurement.mean_rate_hz
        u_hz = math.hypot(rate.u or 0.0, *(float(step[place]) for step in steps))
        found.append(_residual(row, law, ((rate.value or 0.0) - float(plain[place])) / u_hz))
    return _finite(found)


def _rates_hz(
    laws: Sequence[_Law], detuning: float = 0.0, coupling: float = 0.0, noise: float = 0.0
) -> FloatArray:
    """Return the law of each row, with parameters moved by so many of their uncertainties."""
    if not laws:
        return np.zeros(0)
    across = np.array([law.detuning_hz + detuning * law.detuning_u_hz for law in laws])
    pull = np.array([law.coupling_hz + coupling * law.coupling_u_hz for law in laws])
    spread = np.array([law.noise_rad2_s + noise * law.noise_u_rad2_s for law in laws])
    noisy = spread > 0.0
    rates = np.zeros(len(laws))
    if noisy.any():
        rates[noisy] = noisy_rate_law_hz(across[noisy], pull[noisy], spread[noisy])
    for place in np.flatnonzero(~noisy):
        rates[place] = beat_law_hz(across[place : place + 1], float(pull[place]))[0]
    return rates


def phase_residuals(run: SweepRun) -> list[Residual]:
    """Return the residuals of the locked phases of all locked records with a known law."""
    found = []
    for row in usable_rows(run):
        episode, law = longest_episode(row.measurement), _law(run, row)
        if row.state != "locked" or episode is None or law is None or not episode.offset_u_rad > 0:
            continue
        angle, law_u_rad = _angle_rad(law)
        u_rad = math.hypot(episode.offset_u_rad, law_u_rad)
        found.append(_residual(row, law, (near_rad(episode.offset_rad, angle) - angle) / u_rad))
    return _finite(found)


def _angle_rad(law: _Law) -> tuple[float, float]:
    """Return the locked phase of the law and its standard uncertainty; NaN outside the range."""
    if law.offset_rad is None:
        return math.nan, math.nan
    across, pull = law.detuning_hz, law.coupling_hz
    angle = _rest_rad(across, pull, law.offset_rad)
    # Steps go inwards, where the law exists.
    inward = across - math.copysign(law.detuning_u_hz, across)
    steps = (
        law.offset_u_rad,
        angle - _rest_rad(inward, pull, law.offset_rad),
        angle - _rest_rad(across, pull + law.coupling_u_hz, law.offset_rad),
    )
    return angle, math.hypot(*steps)


def _rest_rad(detuning_hz: float, coupling_hz: float, offset_rad: float) -> float:
    return float(arcsine_law_rad(np.array([detuning_hz]), coupling_hz, offset_rad)[0])


def _law(run: SweepRun, row: Row) -> _Law | None:
    """Return what the law of a row rests on, None where its detuning or coupling is not known."""
    entry = edge_entry(run.region, row.point.level, row.point.direction)
    if run.region is None or entry is None or row.detuning_hz is None:
        return None
    if not entry.coupling_hz.value:
        return None
    noise = row.measurement.adler.noise_rad2_s
    turned = offset_at(entry, row.detuning_hz)
    return _Law(
        detuning_hz=row.detuning_hz,
        detuning_u_hz=_detuning_u_hz(run.region, entry, row.measurement.order.m),
        coupling_hz=entry.coupling_hz.value,
        coupling_u_hz=entry.coupling_hz.u or 0.0,
        offset_rad=turned[0],
        offset_u_rad=turned[1],
        noise_rad2_s=noise.value or 0.0,
        noise_u_rad2_s=(noise.u or 0.0) if noise.value else 0.0,
    )


def offset_at(entry: RegionLevel, detuning_hz: float) -> tuple[float | None, float]:
    """Return psi0 of a level at a detuning and its uncertainty: cables and tank turn it."""
    if entry.offset_rad.value is None:
        return None, 0.0
    slope = entry.offset_slope_rad_hz
    per_hz, u_per_hz = (slope.value or 0.0, slope.u or 0.0) if slope is not None else (0.0, 0.0)
    u_rad = math.hypot(entry.offset_rad.u or 0.0, u_per_hz * detuning_hz)
    return entry.offset_rad.value + per_hz * detuning_hz, u_rad


def _detuning_u_hz(region: LockingRegion, entry: RegionLevel, order_m: int) -> float:
    """Return u of a point's detuning: the centre of its level and the wander between points.

    The edges are centre -+ half the width, so the centre has the part of their variance that
    the width does not hold.
    """
    edges = (entry.lower_hz.u or 0.0) ** 2 + (entry.upper_hz.u or 0.0) ** 2
    centre_hz = math.sqrt(max(edges / 2.0 - ((entry.width_hz.u or 0.0) / 2.0) ** 2, 0.0))
    # The tests give what the detuning scatters from point to point beyond noise, in rad/s.
    wander = [test.effect for test in region.tests if test.effect and test.effect.unit == "rad/s"]
    wander_hz = hz_from_rad_s(max((part.value or 0.0 for part in wander), default=0.0))
    return math.hypot(order_m * centre_hz, wander_hz)


def _residual(row: Row, law: _Law, value: float) -> Residual:
    return Residual(
        across=law.detuning_hz / law.coupling_hz,
        value=value,
        direction=row.point.direction,
        file=row.point.file,
    )


def _finite(found: Sequence[Residual]) -> list[Residual]:
    return [one for one in found if math.isfinite(one.value)]


def coupling_of(run: SweepRun, row: Row) -> float:
    """Return the coupling of a row's level and direction, NaN where it is not known."""
    entry = edge_entry(run.region, row.point.level, row.point.direction)
    return (entry.coupling_hz.value or math.nan) if entry is not None else math.nan
