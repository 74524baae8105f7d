"""Which column is which oscillator, and how its samples become a physical quantity.

Signs and corrections, stated once:

- polarity -1 (a sensor mounted or wired the other way round) turns the phase by pi;
- velocity leads displacement by pi/2, acceleration leads it by pi: phases of mechanical
  quantities are all referred to displacement, electrical ones are left as they are;
- skew and delay: a sample taken ``t`` later than its frame says shows a phase that is
  2 pi f t too far on, which is taken off; a sensor that answers ``t`` late shows too little;
- an AC-coupling corner leads by atan(corner / f), which is taken off;
- a mixer with the local oscillator above the signal shows the phase with its sign turned.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

QuantityKind = Literal["displacement", "velocity", "acceleration", "voltage", "current", "unstated"]
Polarity = Literal[1, -1]


@dataclass(frozen=True, slots=True, kw_only=True)
class ChannelSetup:
    """How one channel of a capture is wired; every field has the meaning of the sweep file.

    ``channel`` is a number from 1 or a name. ``sensitivity`` is sample units per ``unit``
    (for example 0.1 V per m/s2), so a physical value is sample / sensitivity;
    ``volts_per_full_scale`` turns a recorder's full scale (1.0) into volts first.
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
