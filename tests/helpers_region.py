"""Simulated sweeps for tests of the locking region: direct integration, many points at once.

Shares nothing with the package but its records: stochastic Heun steps of whatever equation
the test hands over, with truth known from it.
"""

from __future__ import annotations

import math

import numpy as np

from fit.records import AdlerEstimate, PsiSeries, RegionPoint
from rig.quantities import Quantity, undetermined

STEP_S = 0.2
TURN = 2.0 * math.pi


def sine_pull(coupling, offset=0.7):
    """Return the pull of the plain phase equation as a function of psi."""
    return lambda psi: -coupling * np.sin(psi - offset)


def integrate(rng, detuning, pull, *, noise=0.03, sigma=0.05, length_s=100.0, start=0.7):
    """Return psi (points, samples): d psi = detuning + pull(psi) + noise; sigma is added."""
    parts = 8
    step = STEP_S / parts
    kick = math.sqrt(2.0 * noise * step)
    psi = np.array(np.broadcast_to(start, len(detuning)), dtype=float)
    samples = round(length_s / STEP_S) + 1
    seen = np.empty((len(detuning), samples))
    for index in range(samples):
        seen[:, index] = psi
        for _ in range(parts):
            shock = kick * rng.standard_normal(psi.size)
            slope = detuning + pull(psi)
            psi = psi + 0.5 * step * (slope + detuning + pull(psi + step * slope + shock)) + shock
    return seen + sigma * rng.standard_normal(seen.shape)


def state_of(psi):
    """Return a plain state: by how many turns psi moved in all."""
    moved = float(np.ptp(psi)) / TURN
    return "locked" if moved < 0.7 else "intermittent" if moved < 3.0 else "drifting"


def nothing_known():
    """Return an estimate without any number, so that only psi and the state count."""
    hz, rad = undetermined("Hz", "not estimated"), undetermined("rad", "not estimated")
    return AdlerEstimate(
        detuning_hz=hz,
        coupling_hz=hz,
        offset_rad=rad,
        noise_rad2_s=undetermined("rad^2/s", "not estimated"),
        measurement_noise_rad=rad,
        relaxation_rate_hz=hz,
        detuning_mean_hz=hz,
    )


def point(key, drive_rad_s, psi, *, level=1.0, direction="up", sigma=0.05, **changes):
    """Return one record as a point of a sweep."""
    length_s = (psi.size - 1) * STEP_S
    fields = {
        "key": key,
        "drive_hz": drive_rad_s / TURN,
        "drive_u_hz": 0.0,
        "detuning_hz": None,
        "level": level,
        "amplitude": level,
        "direction": direction,
        "state": state_of(psi),
        "mean_rate_hz": float(psi[-1] - psi[0]) / TURN / length_s,
        "mean_rate_u_hz": math.sqrt(2 * 0.03 * length_s) / TURN / length_s,
        "adler": nothing_known(),
        "series": PsiSeries(
            step_s=STEP_S, segments=(psi,), start_s=(0.0,), noise_start_rad2=sigma**2
        ),
    }
    return RegionPoint(**(fields | changes))


def sweep(rng, *, coupling=1.0, centre=0.07, reach=1.6, points=15, pull=None, wander=0.0, **how):
    """Return the points of one even sweep; rates in rad/s, drive frequency = rate / 2 pi.

    ``how`` may hold level, direction (of the points) and noise, sigma, length_s.
    """
    drives = np.linspace(-reach * coupling, reach * coupling, points)
    detuning = centre - drives + wander * rng.standard_normal(points)
    labels = {name: how.pop(name) for name in ("level", "direction") if name in how}
    psi = integrate(rng, detuning, pull or sine_pull(coupling), **how)
    prefix = f"{labels.get('level', 1.0):g}{labels.get('direction', 'up')}"
    return [
        point(f"{prefix}{k:03d}", drive, row, **labels)
        for k, (drive, row) in enumerate(zip(drives, psi, strict=True))
    ]


def known(value, u, unit="Hz"):
    """Return a plain quantity."""
    return Quantity(value=value, u=u, unit=unit)
