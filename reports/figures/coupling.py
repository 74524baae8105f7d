"""The coupling function of one record: measured without a model, and the fitted sine on it."""

from __future__ import annotations

from functools import lru_cache

import numpy as np

from fit.coupling_function import LEAST_TURNS, CouplingFunction, coupling_function
from fit.records import Measurement
from reports.figures.canvas import Canvas, Picture, add_key, add_panel, line_handle
from reports.look import BAND, BLACK, BLUE, WIDTH_IN
from reports.records import SweepRun
from reports.rows import Row, usable_rows
from rig.angles import TURN_RAD, deg_from_rad, hz_from_rad_s
from rig.arrays import FloatArray
from rig.errors import FitError

NEAREST = 1.05  # |detuning| / coupling: nearer the edge psi is seldom seen away from its rest
FEWEST_TURNS = 5.0  # turns of psi below which the bands are too wide to say anything


def coupling_row(run: SweepRun) -> Row | None:
    """Return the drifting record that shows most of its coupling function: nearest the edge."""
    candidates = [(ratio, row) for row in usable_rows(run) if (ratio := _ratio(row)) is not None]
    chosen = [(ratio, row.index, row) for ratio, row in candidates if ratio >= NEAREST]
    return min(chosen, key=lambda item: item[:2])[2] if chosen else None


def _ratio(row: Row) -> float | None:
    """Return |detuning| / coupling of a record whose psi goes round often enough."""
    adler, series = row.measurement.adler, row.measurement.series
    if adler.detuning_hz.value is None or not adler.coupling_hz.value:
        return None
    turns = sum(float(np.ptp(part)) for part in series.segments if part.size) / TURN_RAD
    if turns < max(FEWEST_TURNS, LEAST_TURNS):
        return None
    return abs(adler.detuning_hz.value) / adler.coupling_hz.value


def curve_of(run: SweepRun, row: Row) -> CouplingFunction | None:
    """Return the coupling function of a record with its bands, None where it cannot be had."""
    return _curve(row.measurement, run.provenance.seed)


@lru_cache(maxsize=1)
def _curve(measurement: Measurement, seed: int) -> CouplingFunction | None:
    """Return the curve of one record; whether to show it, its caption and picture all ask."""
    try:
        return coupling_function(measurement.series, rng=np.random.default_rng(seed))
    except FitError:
        return None


def fitted_hz(row: Row, phase_rad: FloatArray) -> FloatArray:
    """Return detuning - coupling sin(psi - offset) of a record's estimate, Hz."""
    adler = row.measurement.adler
    offset = adler.offset_rad.value or 0.0
    return (adler.detuning_hz.value or 0.0) - (adler.coupling_hz.value or 0.0) * np.sin(
        phase_rad - offset
    )


def share_inside(row: Row, curve: CouplingFunction) -> float:
    """Return the share of a turn over which the fitted sine lies inside the bands."""
    fitted = fitted_hz(row, curve.phase_rad)
    low, high = (np.array([hz_from_rad_s(v) for v in part]) for part in _bands(curve))
    return float(np.mean((fitted >= low) & (fitted <= high)))


def _bands(curve: CouplingFunction) -> tuple[FloatArray, FloatArray]:
    return curve.low_rad_s, curve.high_rad_s


def _harmonics(order: int) -> str:
    return "1 harmonic" if order == 1 else f"{order} harmonics"


def coupling_picture(run: SweepRun) -> Picture:
    """Return dpsi/dt against psi of one record: free of a model with bands, and fitted."""
    row = coupling_row(run)
    curve = curve_of(run, row) if row is not None else None

    def draw(canvas: Canvas) -> None:
        axes = add_panel(canvas, (0.75, 0.5, 0.15, 0.4))
        if row is None or curve is None:
            return
        phase_deg = [deg_from_rad(value) for value in curve.phase_rad]
        low, value, high = (
            [hz_from_rad_s(v) for v in part]
            for part in (curve.low_rad_s, curve.value_rad_s, curve.high_rad_s)
        )
        axes.fill_between(phase_deg, low, high, color=BAND, linewidth=0)
        axes.plot(phase_deg, value, color=BLUE, linewidth=1.4)
        axes.plot(phase_deg, fitted_hz(row, curve.phase_rad), color=BLACK, linestyle=(0, (4, 2)))
        axes.axhline(0.0, color=BLACK, linewidth=0.6)
        axes.set_xlim(0.0, 360.0)
        axes.set_xticks(range(0, 361, 60))
        axes.set_xlabel("phase difference ψ (°)")
        axes.set_ylabel("rate of ψ (Hz)")
        handles = [
            line_handle(f"without a model, {_harmonics(curve.order)}", BLUE, width=1.4),
            line_handle("95 % for the whole curve", BAND, width=6.0),
            line_handle("fitted phase equation", BLACK, (0, (4, 2))),
        ]
        add_key(canvas, handles, columns=3)

    return Picture(width_in=WIDTH_IN, height_in=2.6, draw=draw)
