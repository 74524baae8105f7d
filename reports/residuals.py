"""How far measured points lie from the laws of the phase equation, in their own uncertainties."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np

from reports.laws import arcsine_law_rad, beat_law_hz, noisy_rate_law_hz
from reports.records import SweepRun
from reports.rows import Row, edge_entry, longest_episode, near_rad, usable_rows


@dataclass(frozen=True, slots=True, kw_only=True)
class Residual:
    """(measured - law) / u of one point, at detuning / coupling ``across``."""

    across: float
    value: float
    direction: str
    file: str


def rate_residuals(run: SweepRun) -> list[Residual]:
    """Return the residuals of the mean rates of all drifting records with a known law."""
    rows = [row for row in usable_rows(run) if row.state == "drifting"]
    known = [(row, coupling_of(run, row)) for row in rows]
    usable = [
        (row, coupling_hz)
        for row, coupling_hz in known
        if row.detuning_hz is not None
        and row.measurement.mean_rate_hz.value is not None
        and row.measurement.mean_rate_hz.u
        and not math.isnan(coupling_hz)
    ]
    values = _rate_laws_hz(usable)
    found = [
        (
            row,
            ((row.measurement.mean_rate_hz.value or 0.0) - law)
            / (row.measurement.mean_rate_hz.u or 1.0),
        )
        for (row, _coupling_hz), law in zip(usable, values, strict=True)
    ]
    return _collected(run, found)


def _rate_laws_hz(rows: Sequence[tuple[Row, float]]) -> list[float]:
    """Return the law of each row: with its noise where that is known, else without."""
    laws = []
    for row, coupling_hz in rows:
        place = np.array([row.detuning_hz or 0.0])
        laws.append(float(beat_law_hz(place, coupling_hz)[0]))
    noisy = [
        (index, row.detuning_hz or 0.0, coupling_hz, row.measurement.adler.noise_rad2_s.value)
        for index, (row, coupling_hz) in enumerate(rows)
        if row.measurement.adler.noise_rad2_s.value
    ]
    if noisy:
        index, detuning, coupling, noise = (np.array(part) for part in zip(*noisy, strict=True))
        for place, law in zip(index, noisy_rate_law_hz(detuning, coupling, noise), strict=True):
            laws[int(place)] = float(law)
    return laws


def phase_residuals(run: SweepRun) -> list[Residual]:
    """Return the residuals of the locked phases of all locked records with a known law."""
    found = ((row, _phase_residual(run, row)) for row in usable_rows(run) if row.state == "locked")
    return _collected(run, found)


def _collected(run: SweepRun, found: Iterable[tuple[Row, float | None]]) -> list[Residual]:
    return [
        Residual(
            across=(row.detuning_hz or 0.0) / coupling_of(run, row),
            value=value,
            direction=row.point.direction,
            file=row.point.file,
        )
        for row, value in found
        if value is not None and math.isfinite(value)
    ]


def coupling_of(run: SweepRun, row: Row) -> float:
    """Return the coupling of a row's level and direction, NaN where it is not known."""
    entry = edge_entry(run.region, row.point.level, row.point.direction)
    return (entry.coupling_hz.value or math.nan) if entry is not None else math.nan


def _phase_residual(run: SweepRun, row: Row) -> float | None:
    episode, coupling_hz = longest_episode(row.measurement), coupling_of(run, row)
    entry = edge_entry(run.region, row.point.level, row.point.direction)
    if episode is None or entry is None or row.detuning_hz is None or math.isnan(coupling_hz):
        return None
    offset_rad = entry.offset_rad.value
    if offset_rad is None or not episode.offset_u_rad > 0:
        return None
    law = float(arcsine_law_rad(np.array([row.detuning_hz]), coupling_hz, offset_rad)[0])
    if math.isnan(law):
        return None
    return (near_rad(episode.offset_rad, law) - law) / episode.offset_u_rad
