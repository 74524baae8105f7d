"""What a competent practitioner writes today for one capture, with soundfile and scipy.

Nothing here is made slow on purpose, and nothing is left out that the job asks for: read the
record, take the trend off, band-pass forward and back so that the phase stays, analytic
signal, unwrapped phases, their difference at a sensible rate, plateaus of at least a second
within a twentieth of a turn, and on each stretch between plateaus a fit of Adler's equation
by a curve fit around an integrator. It is the plain way: everything in float64, the whole
record in memory, a loop over samples where a loop is what comes to mind.

Run alone it prints the seconds of each part:  python bench/byhand.py FILE [chain]
"""

from __future__ import annotations

import sys
import time
from pathlib import Path

import numpy as np
import soundfile
from numpy.typing import NDArray
from scipy.integrate import solve_ivp
from scipy.optimize import curve_fit
from scipy.signal import butter, detrend, hilbert, sosfiltfilt

Floats = NDArray[np.float64]
Span = tuple[int, int]

LINE_HZ = 1000.0
HALF_BAND_HZ = 100.0
HALF_WIDTH_RAD = 2.0 * np.pi / 20.0  # a plateau stays within a twentieth of a turn
HOLD_S = 1.0
FIT_POINTS = 1000  # points of a stretch handed to the fit
FIT_RTOL = 1e-8  # at 1e-6 the steps of the curve fit drown in the integrator's errors


def phases(path: Path) -> tuple[Floats, Floats, float]:
    """Return the unwrapped phases of both channels and the rate in Hz."""
    samples, rate_hz = soundfile.read(path)
    sos = butter(
        4, [LINE_HZ - HALF_BAND_HZ, LINE_HZ + HALF_BAND_HZ], "bandpass", fs=rate_hz, output="sos"
    )
    found = []
    for channel in samples.T:
        narrow = sosfiltfilt(sos, detrend(channel))
        found.append(np.unwrap(np.angle(hilbert(narrow))))
    return found[0], found[1], float(rate_hz)


def plateaus(psi: Floats, rate_hz: float) -> list[Span]:
    """Return the stretches of psi within the half width for at least the hold time."""
    found = []
    start, lowest, highest = 0, psi[0], psi[0]
    hold = int(HOLD_S * rate_hz)
    for k in range(1, len(psi)):
        low, high = min(lowest, psi[k]), max(highest, psi[k])
        if high - low > 2.0 * HALF_WIDTH_RAD:
            if k - start >= hold:
                found.append((start, k))
            start, low, high = k, psi[k], psi[k]
        lowest, highest = low, high
    if len(psi) - start >= hold:
        found.append((start, len(psi)))
    return found


def between(found: list[Span], count: int, least: int) -> list[Span]:
    """Return the stretches that no plateau covers, of some samples at least."""
    edges = [0, *(edge for span in found for edge in span), count]
    pairs = zip(edges[::2], edges[1::2], strict=True)
    return [(first, stop) for first, stop in pairs if stop - first >= least]


def solution(
    time_s: Floats, detuning: float, coupling: float, offset: float, psi0: float
) -> Floats:
    """Return psi(t) of Adler's equation, integrated."""
    run = solve_ivp(
        lambda _, psi: detuning - coupling * np.sin(psi - offset),
        (time_s[0], time_s[-1]),
        [psi0],
        t_eval=time_s,
        rtol=FIT_RTOL,
        atol=FIT_RTOL,
    )
    return np.asarray(run.y[0])


def fit_stretch(psi: Floats, rate_hz: float) -> Floats | None:
    """Return detuning, coupling (rad/s), offset and start (rad) of a stretch, None if it fails."""
    step = max(1, len(psi) // FIT_POINTS)
    thin = psi[::step]
    time_s = np.arange(len(thin)) * step / rate_hz
    slope = (thin[-1] - thin[0]) / time_s[-1]
    guess = [1.2 * slope, 0.8 * abs(slope), 0.0, thin[0]]
    try:
        best, _ = curve_fit(solution, time_s, thin, guess, maxfev=400)
    except (RuntimeError, ValueError):
        return None
    return np.asarray(best)


def chain(path: Path) -> tuple[Floats, list[Span], float]:
    """Return psi, its plateaus and the rate: capture to phases and episodes."""
    reference, driven, rate_hz = phases(path)
    psi = driven - reference
    return psi, plateaus(psi, rate_hz), rate_hz


if __name__ == "__main__":
    began = time.process_time()
    curve, locked, rate = chain(Path(sys.argv[1]))
    chained = time.process_time()
    print(f"chain {chained - began:.3g} s, {len(locked)} plateaus")
    if sys.argv[2:] != ["chain"]:
        drifting = between(locked, len(curve), int(HOLD_S * rate))
        done = [fit_stretch(curve[first:stop], rate) for first, stop in drifting]
        print(f"fits {time.process_time() - chained:.3g} s, {len(done)} stretches")
