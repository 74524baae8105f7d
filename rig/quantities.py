"""A measured value with its standard uncertainty, or the reason why there is none."""

from __future__ import annotations

import math
from dataclasses import dataclass


@dataclass(frozen=True, slots=True, kw_only=True)
class Quantity:
    """A value with its standard uncertainty (k = 1) in a stated unit.

    ``value`` is None when the record cannot determine the quantity; ``reason`` then says
    why, and ``low`` or ``high`` may still bound it. ``low``, ``high`` and ``level`` are an
    interval and its coverage (likelihood-ratio intervals are not symmetric).

    Raises
    ------
    ValueError
        If a number is not finite, an uncertainty is negative, or value and reason are both
        missing.
    """

    value: float | None
    u: float | None
    unit: str
    reason: str | None = None
    low: float | None = None
    high: float | None = None
    level: float | None = None

    def __post_init__(self) -> None:
        for name in ("value", "u", "low", "high", "level"):
            number = getattr(self, name)
            if number is None:
                continue
            if not math.isfinite(number):
                raise ValueError(f"quantity field '{name}' must be finite, got {number!r}")
            # Plain floats only: a numpy scalar writes itself differently in text and JSON.
            object.__setattr__(self, name, float(number))
        if self.u is not None and not self.u >= 0:
            raise ValueError(f"standard uncertainty must be >= 0, got {self.u!r}")
        if self.value is None and not self.reason:
            raise ValueError("a quantity without a value needs a reason")


def undetermined(
    unit: str, reason: str, *, low: float | None = None, high: float | None = None
) -> Quantity:
    """Return the quantity that says "this record cannot determine it", with the reason."""
    level = None if low is None and high is None else 0.95
    return Quantity(value=None, u=None, unit=unit, reason=reason, low=low, high=high, level=level)
