"""Which column is which oscillator, and how its samples become a physical quantity.

A quantity is x(t) = a cos(phi(t)), with phi growing at 2 pi f. What the recorder shows is
a cos(phi + e); the correction -e is added to the phase as recorded. Signs, stated once:

- polarity -1 (a sensor mounted or wired the other way round): -cos(phi) = cos(phi + pi),
  so pi is taken off;
- velocity: d/dt cos(phi) = 2 pi f cos(phi + pi/2), it leads displacement by pi/2 and
  acceleration by pi; phases of mechanical quantities are all referred to displacement,
  electrical ones are left as they are;
- skew: a sample taken ``t`` later than its frame says shows phi + 2 pi f t, which is taken off;
- delay: a sensor that answers ``t`` late shows phi - 2 pi f t, which is added again;
- AC coupling: (i f / c) / (1 + i f / c) has the angle +atan(c / f): the recorded phase leads
  by it, and it is taken off. A corner uncertain by u leaves u f / (f**2 + c**2);
- mark: an index pulse has phase 0 where the mark passes; the mass stands ``mark_angle_rad``
  ahead of it, counted in the rotor's own sense of rotation, which is added. Each rotor's
  phase grows in its own sense: for a counter-rotating pair equal phases mean masses that
  mirror each other;
- mixer: with the signal above the local oscillator (upper) the difference frequency turns
  as the signal does; with the signal below (lower, the image) it turns the other way. All
  corrections above are made at the recorded frequency, and the sense is turned last.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

from rig.angles import deg_from_rad, rad_from_turns
from rig.arrays import FloatArray
from rig.captures import Capture, find_column
from rig.errors import CaptureError, ChannelError
from rig.phases.track import PhaseComponent

QuantityKind = Literal["displacement", "velocity", "acceleration", "voltage", "current", "unstated"]
Polarity = Literal[1, -1]

# Lead over displacement, rad; electrical and unstated quantities are left as they are.
QUANTITY_LEAD_RAD: dict[str, float] = {
    "displacement": 0.0,
    "velocity": 0.5 * math.pi,
    "acceleration": math.pi,
    "voltage": 0.0,
    "current": 0.0,
    "unstated": 0.0,
}
# Below ten corners an error of 10 % of the corner is worth more than half a degree.
FEWEST_CORNERS = 10.0
ABOVE_ZERO = ("sensitivity", "volts_per_full_scale", "ac_corner_hz", "mixer_lo_hz")
NOT_NEGATIVE = (
    "sensitivity_u",
    "skew_u_s",
    "delay_u_s",
    "ac_corner_u_hz",
    "phase_u_rad",
    "mark_angle_u_rad",
    "missing_pulses",
    "extra_pulses",
)
FINITE = ("skew_s", "delay_s", "mark_angle_rad")


@dataclass(frozen=True, slots=True, kw_only=True)
class ChannelSetup:
    """How one channel of a capture is wired; every field has the meaning of the sweep file.

    ``channel`` is a number from 1 or a name. ``sensitivity`` is sample units per ``unit``
    (for example 0.1 V per m/s2), so a physical value is sample / sensitivity;
    ``volts_per_full_scale`` turns a recorder's full scale (1.0) into volts first. A stated
    ``skew_s`` replaces the skew that the file states; 0 leaves that of the file.

    Raises
    ------
    ChannelError
        If a number is out of its range; the field and the value are named.
    """

    channel: int | str
    unit: str = ""
    quantity: QuantityKind = "unstated"
    sensitivity: float = 1.0
    sensitivity_u: float = 0.0
    volts_per_full_scale: float | None = None
    polarity: Polarity = 1
    polarity_checked: str = "not stated"
    skew_s: float = 0.0
    skew_u_s: float = 0.0
    delay_s: float = 0.0
    delay_u_s: float = 0.0
    ac_corner_hz: float | None = None
    ac_corner_u_hz: float = 0.0
    phase_u_rad: float = 0.0
    pulses_per_turn: int = 1
    missing_pulses: int = 0
    extra_pulses: int = 0
    mixer_lo_hz: float | None = None
    mixer_sideband: Literal["upper", "lower"] = "upper"
    mark_angle_rad: float = 0.0
    mark_angle_u_rad: float = 0.0
    rotation: Literal["same", "counter"] = "same"
    sensor_id: str = "not stated"
    calibration_due: str | None = None

    def __post_init__(self) -> None:
        _refuse_numbers(self, ABOVE_ZERO, "must be above 0", lambda x: x > 0)
        _refuse_numbers(self, NOT_NEGATIVE, "must be 0 or more", lambda x: x >= 0)
        _refuse_numbers(self, FINITE, "must be a finite number", math.isfinite)
        if self.polarity not in (1, -1):
            raise ChannelError(
                f"channel '{self.channel}': polarity must be 1 or -1, got {self.polarity}"
            )
        if not self.pulses_per_turn > self.missing_pulses:
            raise ChannelError(
                f"channel '{self.channel}': pulses_per_turn must be above missing_pulses "
                f"({self.missing_pulses}), got {self.pulses_per_turn}"
            )


def _refuse_numbers(
    setup: ChannelSetup, names: tuple[str, ...], rule: str, holds: Callable[[float], bool]
) -> None:
    for name in names:
        value = getattr(setup, name)
        if value is not None and not (math.isfinite(value) and holds(value)):
            raise ChannelError(f"channel '{setup.channel}': {name} {rule}, got {value}")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Channel:
    """One oscillator's column of a capture, and the scale of its samples.

    A physical value is ``sample * scale`` in ``unit``, with the relative standard
    uncertainty ``scale_u_rel``. Polarity is not in the scale but in the phase.
    """

    capture: Capture
    column: int
    setup: ChannelSetup
    unit: str
    scale: float
    scale_u_rel: float

    @property
    def name(self) -> str:
        """Name of the channel as the capture gives it."""
        return self.capture.channels[self.column].name

    @property
    def skew_from_file_s(self) -> float:
        """Skew of the sampling instant that the file itself states, s."""
        return self.capture.channels[self.column].skew_s


def wire_channel(capture: Capture, setup: ChannelSetup) -> Channel:
    """Return the column of a capture that a setup means, with its scale.

    scale = (volts_per_full_scale / full_scale) / sensitivity; without
    ``volts_per_full_scale`` the samples are volts (or whatever the file says) already.

    Parameters
    ----------
    capture : Capture
    setup : ChannelSetup

    Raises
    ------
    ChannelError
        If the capture has no such channel.
    """
    column = find_column(capture, setup.channel)
    described = capture.channels[column]
    volts = 1.0
    if setup.volts_per_full_scale is not None:
        volts = setup.volts_per_full_scale / (described.full_scale or 1.0)
    return Channel(
        capture=capture,
        column=column,
        setup=setup,
        unit=setup.unit or described.unit,
        scale=volts / setup.sensitivity,
        scale_u_rel=setup.sensitivity_u / setup.sensitivity,
    )


def phase_components(
    setup: ChannelSetup, frequency_hz: float, skew_from_file_s: float = 0.0
) -> tuple[PhaseComponent, ...]:
    """Return the corrections to a recorded phase, each with its standard uncertainty.

    Parameters
    ----------
    setup : ChannelSetup
    frequency_hz : float, Hz, the frequency as recorded (after a mixer, the difference)
    skew_from_file_s : float, s, skew the capture states; used when the setup states none

    Returns
    -------
    tuple of PhaseComponent; only those that correct something or are uncertain. The phase
    of the quantity is ``phase_sense(setup) * (recorded + sum of correction_rad)``.

    Raises
    ------
    ChannelError
        If the frequency is not above 0 Hz.
    """
    if not frequency_hz > 0:
        raise ChannelError(
            f"channel '{setup.channel}': frequency must be above 0 Hz, got {frequency_hz}"
        )
    found = [build(setup, frequency_hz, skew_from_file_s) for build in COMPONENTS.values()]
    return tuple(part for part in found if part.correction_rad != 0.0 or part.u_rad != 0.0)


def _polarity(setup: ChannelSetup, frequency_hz: float, skew_s: float) -> PhaseComponent:
    turned = 0.0 if setup.polarity == 1 else -math.pi
    return PhaseComponent(name="polarity", correction_rad=turned, u_rad=0.0)


def _quantity(setup: ChannelSetup, frequency_hz: float, skew_s: float) -> PhaseComponent:
    lead_rad = QUANTITY_LEAD_RAD[setup.quantity]
    return PhaseComponent(
        name=f"{setup.quantity} to displacement", correction_rad=-lead_rad, u_rad=0.0
    )


def _skew(setup: ChannelSetup, frequency_hz: float, skew_s: float) -> PhaseComponent:
    skew = setup.skew_s if setup.skew_s != 0.0 else skew_s
    return PhaseComponent(
        name="skew",
        correction_rad=-rad_from_turns(frequency_hz * skew),
        u_rad=rad_from_turns(frequency_hz * setup.skew_u_s),
    )


def _delay(setup: ChannelSetup, frequency_hz: float, skew_s: float) -> PhaseComponent:
    return PhaseComponent(
        name="sensor delay",
        correction_rad=rad_from_turns(frequency_hz * setup.delay_s),
        u_rad=rad_from_turns(frequency_hz * setup.delay_u_s),
    )


def _ac_coupling(setup: ChannelSetup, frequency_hz: float, skew_s: float) -> PhaseComponent:
    corner_hz = setup.ac_corner_hz or 0.0
    slope = frequency_hz / (frequency_hz**2 + corner_hz**2)
    return PhaseComponent(
        name="AC coupling",
        correction_rad=-math.atan(corner_hz / frequency_hz),
        u_rad=setup.ac_corner_u_hz * slope,
    )


def _sensor(setup: ChannelSetup, frequency_hz: float, skew_s: float) -> PhaseComponent:
    return PhaseComponent(name="sensor phase", correction_rad=0.0, u_rad=setup.phase_u_rad)


def _mark(setup: ChannelSetup, frequency_hz: float, skew_s: float) -> PhaseComponent:
    return PhaseComponent(
        name="mark to mass",
        correction_rad=setup.mark_angle_rad,
        u_rad=setup.mark_angle_u_rad,
    )


COMPONENTS: dict[str, Callable[[ChannelSetup, float, float], PhaseComponent]] = {
    "polarity": _polarity,
    "quantity": _quantity,
    "skew": _skew,
    "delay": _delay,
    "ac coupling": _ac_coupling,
    "sensor": _sensor,
    "mark": _mark,
}


def phase_sense(setup: ChannelSetup) -> Literal[1, -1]:
    """Return -1 when a mixer shows the image, so that the recorded phase runs backwards."""
    return -1 if setup.mixer_lo_hz is not None and setup.mixer_sideband == "lower" else 1


def mixer_frequency_hz(setup: ChannelSetup, recorded_hz: float) -> float:
    """Return the frequency before the mixer: local oscillator plus or minus the recorded one.

    Raises
    ------
    ChannelError
        If the image would lie at or below 0 Hz.
    """
    if setup.mixer_lo_hz is None:
        return recorded_hz
    true_hz = setup.mixer_lo_hz + phase_sense(setup) * recorded_hz
    if not true_hz > 0:
        raise ChannelError(
            f"channel '{setup.channel}': mixer_lo_hz must be above the recorded {recorded_hz:g} Hz "
            f"for the lower sideband, got {setup.mixer_lo_hz:g} Hz"
        )
    return true_hz


def mixed_phase_rad(setup: ChannelSetup, phase_rad: FloatArray, time_s: FloatArray) -> FloatArray:
    """Return the phase before the mixer: 2 pi LO t plus or minus the corrected recorded phase.

    Parameters
    ----------
    setup : ChannelSetup
    phase_rad : array, shape (n,), rad, recorded phase with its corrections added
    time_s : array, shape (n,), s

    Returns
    -------
    array, shape (n,), rad; the phase itself when there is no mixer

    Notes
    -----
    The phase of the local oscillator at t = 0 is not known; it cancels where both channels
    share one oscillator and n = m, else the angle holds up to a constant.
    """
    if setup.mixer_lo_hz is None:
        return phase_rad
    carrier_rad = rad_from_turns(setup.mixer_lo_hz) * time_s
    return carrier_rad + phase_sense(setup) * phase_rad


def component_notes(setup: ChannelSetup, components: tuple[PhaseComponent, ...]) -> tuple[str, ...]:
    """Return one sentence a correction, for the notes of a record."""
    return tuple(
        f"channel '{setup.channel}': {part.name} "
        + (
            f"corrected by {deg_from_rad(part.correction_rad):+.3g} deg, "
            if part.correction_rad
            else "needs no correction, "
        )
        + f"standard uncertainty {deg_from_rad(part.u_rad):.2g} deg"
        for part in components
    )


def wiring_notes(channel: Channel, frequency_hz: float) -> tuple[str, ...]:
    """Return what a reader must know about the wiring of a channel at a frequency.

    Parameters
    ----------
    channel : Channel
    frequency_hz : float, Hz, as recorded
    """
    setup = channel.setup
    notes = []
    if setup.polarity_checked == "not stated":
        notes.append(
            f"channel '{setup.channel}': how polarity was checked is not stated; "
            "a reversed sensor turns in-phase into anti-phase"
        )
    if setup.skew_s != 0.0 and channel.skew_from_file_s != 0.0:
        notes.append(
            f"channel '{setup.channel}': stated skew {setup.skew_s:g} s used instead of "
            f"{channel.skew_from_file_s:g} s from the file"
        )
    if setup.ac_corner_hz is not None and frequency_hz < FEWEST_CORNERS * setup.ac_corner_hz:
        notes.append(
            f"channel '{setup.channel}': {frequency_hz:g} Hz is below {FEWEST_CORNERS:g} times "
            f"the AC corner of {setup.ac_corner_hz:g} Hz; the phase leans on the corner"
        )
    return tuple(notes)


def check_recorders(
    first: Capture,
    second: Capture,
    *,
    shared_reference: bool = False,
    clock_error_rel: float | None = None,
) -> tuple[str, ...]:
    """Return the notes on two captures of two recorders, or refuse them.

    Two clocks that differ by 50 ppm make a locked pair at 25 Hz drift by 0.00125 Hz, so two
    recordings have a phase to each other only through a reference channel recorded by both,
    or through a stated relative error of the second clock against the first.

    Raises
    ------
    CaptureError
        If neither is given.
    """
    if first.path == second.path:
        return ()
    if shared_reference:
        return ("two recorders, tied by a reference channel recorded by both",)
    if clock_error_rel is not None and math.isfinite(clock_error_rel):
        return (f"two recorders; stated relative clock error {clock_error_rel:g}",)
    raise CaptureError(
        f"{second.path}: channels come from separate recordings ({first.rate_hz:.10g} Hz, "
        f"{second.rate_hz:.10g} Hz) without a shared reference; relative phase is undefined. "
        "Record both channels on one recorder, or state the clock error."
    )
