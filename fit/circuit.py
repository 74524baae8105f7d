"""Locking in the words of circuits and machines: Q, half widths, angles, reserve, pull-in.

Half width here is one side of the locking region; the whole region is twice as wide. All
laws are those of the noise-free equation dpsi/dt = 2 pi (detuning - coupling sin(psi -
offset)) unless another is named.
"""

from __future__ import annotations

import math

from fit.difference import Order
from rig.angles import rad_s_from_hz, wrap_angle_rad
from rig.errors import FitError
from rig.quantities import Quantity, undetermined


def _refuse(name: str, value: float, *, above: float = 0.0, below: float = math.inf) -> None:
    """Refuse a value outside (above, below)."""
    if not above < value < below:
        limit = f" and below {below:g}" if math.isfinite(below) else ""
        raise FitError(f"{name} must be above {above:g}{limit}, got {value:g}")


def adler_half_width_hz(frequency_hz: float, quality: float, injection_ratio: float) -> float:
    """Return the half width of locking by weak injection, f0/(2 Q) * ratio.

    Parameters
    ----------
    frequency_hz : float, Hz, above 0
        Free-running frequency.
    quality : float, loaded Q of the tank, above 0
    injection_ratio : float, above 0
        Injected over free-running amplitude, both at the tank (currents, or both voltages).

    Returns
    -------
    float, Hz, one side

    Raises
    ------
    FitError
        If a value is not above 0.

    References
    ----------
    Adler 1946, Proc. IRE 34, 351 (recalled).
    """
    for name, value in (("frequency", frequency_hz), ("Q", quality), ("ratio", injection_ratio)):
        _refuse(name, value)
    return frequency_hz / (2.0 * quality) * injection_ratio


def strong_half_width_hz(frequency_hz: float, quality: float, injection_ratio: float) -> float:
    """Return the half width at any injection below the oscillator's own amplitude.

    f0/(2 Q) * ratio / sqrt(1 - ratio^2); parameters as for ``adler_half_width_hz``, ratio
    below 1.

    References
    ----------
    Paciorek 1965, Proc. IEEE 53, 1723; Razavi 2004, IEEE J. Solid-State Circuits 39, 1415
    (recalled).
    """
    _refuse("ratio", injection_ratio, below=1.0)
    weak = adler_half_width_hz(frequency_hz, quality, injection_ratio)
    return weak / math.sqrt(1.0 - injection_ratio**2)


def strong_injection_rate(psi_rad: float, detuning: float, coupling: float, ratio: float) -> float:
    """Return dpsi/dt of strong injection, detuning - coupling sin psi/(1 + ratio cos psi).

    Parameters
    ----------
    psi_rad : float, rad, relative to the offset
    detuning, coupling : float, in one unit of rate
        The coupling is that of weak injection, f0/(2 Q) * ratio.
    ratio : float, injected over free amplitude, at least 0 and below 1

    Returns
    -------
    float, in the unit of the rates

    Raises
    ------
    FitError
        If the ratio is outside [0, 1).

    References
    ----------
    Paciorek 1965, Proc. IEEE 53, 1723 (recalled).
    """
    if not 0.0 <= ratio < 1.0:
        raise FitError(f"ratio must be at least 0 and below 1, got {ratio:g}")
    return detuning - coupling * math.sin(psi_rad) / (1.0 + ratio * math.cos(psi_rad))


def strong_beat_rate(detuning: float, coupling: float, ratio: float) -> float:
    """Return the beat rate (turns per turn of the detuning's unit) of strong injection.

    2 pi / T with T = 2 pi/dw - (L^2/dw)/(r^2 dw^2 + L^2) 2 pi (1 - dw/sqrt(dw^2 (1 - r^2) -
    L^2)); parameters as for ``strong_injection_rate``.

    Raises
    ------
    FitError
        If the pair is inside its locking region, where there is no beat.
    """
    dw = abs(detuning)
    inside = dw**2 * (1.0 - ratio**2) - coupling**2
    if not (0.0 <= ratio < 1.0 and inside > 0.0):
        edge = coupling / math.sqrt(max(1.0 - ratio**2, 1e-300))
        raise FitError(f"beat needs |detuning| above the half width {edge:g}, got {dw:g}")
    share = coupling**2 / dw / (ratio**2 * dw**2 + coupling**2)
    period = math.tau / dw - share * math.tau * (1.0 - dw / math.sqrt(inside))
    return math.copysign(math.tau / period, detuning)


def strong_edge_angle_rad(injection_ratio: float) -> float:
    """Return the lock angle at the edge of strong injection, acos(-ratio), beyond 90 deg."""
    _refuse("ratio", injection_ratio, above=-1e-300, below=1.0)
    return math.acos(-injection_ratio)


def loaded_quality(
    frequency_hz: float, coupling_hz: Quantity, injection_ratio: Quantity | None
) -> Quantity:
    """Return the loaded Q by f0/(2 half width) * ratio, strong injection taken into account.

    The half width at the edge is the coupling found in a sweep; with the amplitudes ratio
    r = injected/free at the tank, Q = f0 r / (2 half width sqrt(1 - r^2)).

    Parameters
    ----------
    frequency_hz : float, Hz, above 0
    coupling_hz : Quantity, Hz, half width of the locking region
    injection_ratio : Quantity or None
        Injected over free amplitude at the tank. A capture shows amplitudes at the sensors,
        not at the tank: without it there is no Q.

    Returns
    -------
    Quantity, ratio; undetermined with the reason where something is missing

    Raises
    ------
    FitError
        If the frequency is not above 0.
    """
    _refuse("frequency", frequency_hz)
    if injection_ratio is None or injection_ratio.value is None:
        return undetermined("1", "needs the ratio of injected to free amplitude at the tank")
    if coupling_hz.value is None or not coupling_hz.value > 0.0:
        return undetermined("1", f"needs the coupling ({coupling_hz.reason or 'it is zero'})")
    ratio = injection_ratio.value
    if not 0.0 < ratio < 1.0:
        return undetermined("1", f"injected over free amplitude must lie in (0, 1), got {ratio:g}")
    value = frequency_hz * ratio / (2.0 * coupling_hz.value * math.sqrt(1.0 - ratio**2))
    relative = math.hypot(
        (coupling_hz.u or 0.0) / coupling_hz.value,
        (injection_ratio.u or 0.0) / ratio / (1.0 - ratio**2),
    )
    return Quantity(value=value, u=value * relative, unit="1")


def drive_half_width_hz(coupling_hz: Quantity, order: Order) -> Quantity:
    """Return the half width in drive frequency, coupling / m.

    detuning = n f_driven - m f_reference: moving the drive by df moves the detuning by m df.

    Parameters
    ----------
    coupling_hz : Quantity, Hz, half width in detuning
    order : Order
    """
    return _scaled(coupling_hz, 1.0 / order.m)


def _scaled(found: Quantity, factor: float) -> Quantity:
    """Return the quantity times a positive factor."""
    ends = [
        None if end is None else end * factor
        for end in (found.value, found.u, found.low, found.high)
    ]
    return Quantity(
        value=ends[0],
        u=ends[1],
        unit=found.unit,
        reason=found.reason,
        low=ends[2],
        high=ends[3],
        level=found.level,
    )


def lock_angle(detuning_hz: Quantity, coupling_hz: Quantity) -> Quantity:
    """Return the lock angle asin(detuning/coupling), rad, relative to the offset.

    Parameters
    ----------
    detuning_hz, coupling_hz : Quantity, Hz

    Returns
    -------
    Quantity, rad; undetermined outside the locking region or where one is not determined
    """
    ratio = _ratio(detuning_hz, coupling_hz, "rad")
    if ratio.value is None:
        return ratio
    if not abs(ratio.value) < 1.0:
        return undetermined("rad", "outside the locking region there is no lock angle")
    slope = 1.0 / math.sqrt(1.0 - ratio.value**2)
    return Quantity(value=math.asin(ratio.value), u=(ratio.u or 0.0) * slope, unit="rad")


def angle_margin(detuning_hz: Quantity, coupling_hz: Quantity) -> Quantity:
    """Return how far the lock angle stays from the edge, 90 deg - |angle|, in rad.

    Parameters as for ``lock_angle``.
    """
    angle = lock_angle(detuning_hz, coupling_hz)
    if angle.value is None:
        return angle
    return Quantity(value=0.5 * math.pi - abs(angle.value), u=angle.u, unit="rad")


def torque_reserve(detuning_hz: Quantity, coupling_hz: Quantity) -> Quantity:
    """Return the share of the synchronising torque that is left, 1 - |detuning|/coupling.

    Parameters as for ``lock_angle``. Negative outside the locking region.
    """
    ratio = _ratio(detuning_hz, coupling_hz, "1")
    if ratio.value is None:
        return ratio
    return Quantity(value=1.0 - abs(ratio.value), u=ratio.u, unit="1")


def _ratio(detuning_hz: Quantity, coupling_hz: Quantity, unit: str) -> Quantity:
    """Return detuning/coupling; errors as if independent, which is the larger of the cases."""
    for name, one in (("detuning", detuning_hz), ("coupling", coupling_hz)):
        if one.value is None:
            return undetermined(unit, f"{name} is not determined: {one.reason}")
    detuning, coupling = detuning_hz.value or 0.0, coupling_hz.value or 0.0
    if not coupling > 0.0:
        return undetermined(unit, "the coupling is zero")
    u = math.hypot(detuning_hz.u or 0.0, detuning / coupling * (coupling_hz.u or 0.0)) / coupling
    return Quantity(value=detuning / coupling, u=u, unit="1")


def pull_in_time_s(
    detuning_hz: float, coupling_hz: float, start_rad: float, stop_rad: float
) -> float:
    """Return the time psi takes from one angle to another without noise.

    (1/G) ln[sin((s - p)/2) cos((e + p)/2) / (sin((e - p)/2) cos((s + p)/2))] inside the
    locking region, G = sqrt(K^2 - dw^2), p = asin(dw/K), s and e start and stop; at the edge
    and outside by the forms with cotangent and arc tangent.

    Parameters
    ----------
    detuning_hz : float, Hz
    coupling_hz : float, Hz, above 0
    start_rad, stop_rad : float, rad, relative to the offset
        psi must reach stop from start by the way the equation goes.

    Returns
    -------
    float, s

    Raises
    ------
    FitError
        If psi never comes from start to stop.

    References
    ----------
    Adler 1946, Proc. IRE 34, 351 (recalled); re-derived.
    """
    _refuse("coupling", coupling_hz)
    if start_rad == stop_rad:
        return 0.0
    dw, k = rad_s_from_hz(detuning_hz), rad_s_from_hz(coupling_hz)
    never = FitError(
        f"pull-in: psi never goes from {start_rad:g} to {stop_rad:g} rad at detuning "
        f"{detuning_hz:g} Hz and coupling {coupling_hz:g} Hz"
    )
    forward = stop_rad > start_rad
    if abs(dw) >= k:
        if forward != (dw > 0.0):
            raise never
        return _outside_time(dw, k, start_rad, stop_rad)
    rest = math.asin(dw / k)
    begin = wrap_angle_rad(start_rad - rest)
    end = begin + (stop_rad - start_rad)
    rises = dw - k * math.sin(start_rad) > 0.0
    # The way must not pass the rest angle (0) nor leave the cell of the unstable one.
    unstable = math.pi - 2.0 * rest
    low, high = (begin, end) if begin < end else (end, begin)
    blocked = any(
        low <= turn + at <= high for turn in (-math.tau, 0.0, math.tau) for at in (0.0, unstable)
    )
    if forward != rises or blocked:
        raise never
    rate = math.sqrt(k * k - dw * dw)
    start, stop = begin + rest, end + rest
    above = math.sin(0.5 * (start - rest)) * math.cos(0.5 * (stop + rest))
    under = math.sin(0.5 * (stop - rest)) * math.cos(0.5 * (start + rest))
    return math.log(above / under) / rate


def _outside_time(dw: float, k: float, start_rad: float, stop_rad: float) -> float:
    """Return the time outside and at the edge, by half turns of the closed form."""
    if dw < 0.0:
        return _outside_time(-dw, k, -start_rad, -stop_rad)
    if dw - k < 1e-12 * k:
        return _edge_time(k, start_rad, stop_rad)
    rate = math.sqrt((dw - k) * (dw + k))
    # theta = angle from the slowest point, pi/2: tan(theta/2) sqrt((dw + k)/(dw - k)).
    share = math.sqrt((dw + k) / (dw - k))

    def clock(psi: float) -> float:
        half = 0.5 * (psi - 0.5 * math.pi)
        turns = round(half / math.pi)
        return math.atan(share * math.tan(half - math.pi * turns)) + math.pi * turns

    return 2.0 / rate * (clock(stop_rad) - clock(start_rad))


def _edge_time(k: float, start_rad: float, stop_rad: float) -> float:
    """Return the time at the edge: cot of half the angle to the half-stable point, over K."""
    before = math.remainder(start_rad - 0.5 * math.pi, math.tau)
    after = before + (stop_rad - start_rad)
    if before <= 0.0 <= after or after >= math.tau:
        raise FitError(
            f"pull-in: at the edge psi never goes from {start_rad:g} to {stop_rad:g} rad"
        )
    # dpsi/dt = K (1 - cos x), x = psi - pi/2; its integral is -cot(x/2)/K.
    return (1.0 / math.tan(0.5 * before) - 1.0 / math.tan(0.5 * after)) / k


def pendulum_shift_hz(frequency_hz: float, amplitude_rad: float) -> float:
    """Return how much slower a pendulum swings at an amplitude than at none, Hz (negative).

    f0 (pi / (2 K(sin^2(theta/2))) - 1) = -f0 theta^2/16 for small theta, K the complete
    elliptic integral, by the arithmetic-geometric mean.

    Parameters
    ----------
    frequency_hz : float, Hz, above 0, of small swings
    amplitude_rad : float, rad, at least 0 and below pi

    Raises
    ------
    FitError
        If a value lies outside its range.
    """
    _refuse("frequency", frequency_hz)
    _refuse("amplitude", amplitude_rad, above=-1e-300, below=math.pi)
    one, other = 1.0, math.cos(0.5 * amplitude_rad)
    while abs(one - other) > 1e-15:
        one, other = 0.5 * (one + other), math.sqrt(one * other)
    return frequency_hz * (one - 1.0)
