"""Units that limits may be stated in, and how they turn into the unit a quantity is kept in."""

from __future__ import annotations

import math
from collections.abc import Mapping

from rig.angles import TURN_RAD

# unit kept in records -> unit a person may write -> factor
CONVERSIONS: dict[str, Mapping[str, float]] = {
    "Hz": {"Hz": 1.0, "mHz": 1e-3, "kHz": 1e3, "MHz": 1e6, "1/s": 1.0, "1/min": 1.0 / 60.0},
    "s": {"s": 1.0, "ms": 1e-3, "us": 1e-6, "µs": 1e-6, "min": 60.0},
    "rad": {
        "rad": 1.0,
        "mrad": 1e-3,
        "deg": math.pi / 180.0,
        "°": math.pi / 180.0,
        "turn": TURN_RAD,
    },
    "1": {"1": 1.0, "": 1.0, "%": 0.01, "ppm": 1e-6},
    "Hz/s": {"Hz/s": 1.0, "mHz/s": 1e-3, "Hz/min": 1.0 / 60.0, "Hz/h": 1.0 / 3600.0},
    "rad2/s": {"rad2/s": 1.0, "rad²/s": 1.0},
}


def known_units(kept: str) -> tuple[str, ...]:
    """Return the units that a limit on a quantity kept in ``kept`` may be stated in."""
    return tuple(unit for unit in CONVERSIONS.get(kept, {kept: 1.0}) if unit)


def unit_factor(written: str, kept: str) -> float | None:
    """Return what a number in the written unit is multiplied by, None for an unknown unit.

    Parameters
    ----------
    written : str, unit as a person wrote it
    kept : str, unit that records hold
    """
    return CONVERSIONS.get(kept, {kept: 1.0}).get(written)
