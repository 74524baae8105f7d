"""Hysteresis that inertia predicts: where a pair with a time constant falls back into lock.

tau psi'' + psi' = dw - K sin(psi - psi0). Lock is lost at |dw| = K whatever tau is; coming
from outside it is found again only at a smaller |dw| once tau K is above 0.7026, because the
moving psi carries itself over the rest angle. Noise narrows the difference.
"""

from __future__ import annotations

import math

import numpy as np
from scipy.integrate import solve_ivp

from rig.arrays import FloatArray
from rig.errors import FitError

# tau K up to which both edges are the same (McCumber number of junctions).
NO_HYSTERESIS = 0.702564
# Above this tau K the law 4/(pi sqrt(tau K)) is good to 3e-5.
ASYMPTOTIC = 1e4
TOLERANCE = 1e-10


def relock_ratio(time_constant_s: float, coupling_rad_s: float) -> float:
    """Return the detuning, in units of the coupling, at which lock is found from outside.

    Parameters
    ----------
    time_constant_s : float, s, at least 0
    coupling_rad_s : float, rad/s, above 0

    Returns
    -------
    float, between 0 and 1; 1 means no hysteresis

    Raises
    ------
    FitError
        If a value lies outside its range.

    Notes
    -----
    The limit is the detuning at which psi, leaving one unstable angle, just reaches the next.

    References
    ----------
    Stewart 1968, Appl. Phys. Lett. 12, 277; McCumber 1968, J. Appl. Phys. 39, 3113; Strogatz,
    Nonlinear Dynamics and Chaos, section 8.5 (recalled).
    """
    if not (time_constant_s >= 0.0 and coupling_rad_s > 0.0):
        raise FitError(
            "relocking needs a time constant of at least 0 s and a coupling above 0, got "
            f"{time_constant_s:g} s and {coupling_rad_s:g} rad/s"
        )
    inertia = time_constant_s * coupling_rad_s
    if inertia <= NO_HYSTERESIS:
        return 1.0
    if inertia > ASYMPTOTIC:
        return 4.0 / (math.pi * math.sqrt(inertia))
    low, high = 0.0, 1.0
    while high - low > TOLERANCE:
        middle = 0.5 * (low + high)
        if _runs_on(middle, inertia):
            high = middle
        else:
            low = middle
    return 0.5 * (low + high)


def _runs_on(detuning: float, inertia: float) -> bool:
    """Say whether psi leaving the unstable angle reaches the next one a turn further.

    With w = (psi')^2/2 against psi: dw/dpsi = (detuning - sin psi - sqrt(2 w))/inertia; psi
    stops where w comes to zero.
    """
    saddle = math.pi - math.asin(detuning)
    gap = 2.0 * saddle - math.pi
    steep = math.sqrt(max(1.0 - detuning**2, 0.0))
    rate = (math.sqrt(1.0 + 4.0 * inertia * steep) - 1.0) / (2.0 * inertia)
    begin = 1e-6 * min(gap, 1.0)

    def slope(psi: float, energy: FloatArray) -> FloatArray:
        speed = np.sqrt(2.0 * np.maximum(energy, 0.0))
        return np.asarray((detuning - math.sin(psi) - speed) / inertia)

    def stopped(psi: float, energy: FloatArray) -> float:
        return float(energy[0])

    # The solver reads these two marks of an event from the function itself.
    stopped.terminal = True  # type: ignore[attr-defined]
    stopped.direction = -1.0  # type: ignore[attr-defined]
    found = solve_ivp(
        slope,
        (saddle + begin, saddle + math.tau),
        [0.5 * (rate * begin) ** 2],
        method="DOP853",
        events=stopped,
        rtol=1e-10,
        atol=1e-18,
        max_step=0.3,
    )
    return bool(found.t_events[0].size == 0)
