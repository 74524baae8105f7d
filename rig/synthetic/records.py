"""A simulated capture with what is known to be true of it."""

from __future__ import annotations

from dataclasses import dataclass

from rig.arrays import FloatArray, frozen_view

TruthFact = tuple[str, float, str]
"""(name, value, unit) of one thing that is true of a simulated capture."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SimulatedCapture:
    """Samples of a rig that was integrated, with their channels and the truth behind them.

    ``samples`` (channels, frames) are in ``units``; ``truth`` lists (name, value, unit).

    Raises
    ------
    ValueError
        If the number of rows, names and units differ or the rate is not above 0 Hz.
    """

    rig: str
    samples: FloatArray
    rate_hz: float
    channels: tuple[str, ...]
    units: tuple[str, ...]
    truth: tuple[TruthFact, ...] = ()

    def __post_init__(self) -> None:
        if not self.rate_hz > 0:
            raise ValueError(f"simulated {self.rig}: rate must be above 0 Hz, got {self.rate_hz}")
        if not len(self.channels) == len(self.units) == self.samples.shape[0]:
            raise ValueError(
                f"simulated {self.rig}: {self.samples.shape[0]} rows, "
                f"{len(self.channels)} names, {len(self.units)} units"
            )
        object.__setattr__(self, "samples", frozen_view(self.samples))

    def fact(self, name: str) -> float:
        """Return the value of one fact by name; KeyError if it is not known."""
        for known, value, _ in self.truth:
            if known == name:
                return value
        raise KeyError(name)
