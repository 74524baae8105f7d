"""The record every phase estimator returns: phase, amplitude, validity, uncertainty."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from rig.arrays import BoolArray, FloatArray, frozen_view
from rig.quantities import Quantity


@dataclass(frozen=True, slots=True, kw_only=True)
class PhaseComponent:
    """One systematic contribution to the uncertainty of a phase, the same for all samples.

    ``correction_rad`` has already been applied; ``u_rad`` is its standard uncertainty and
    ``distribution`` the assumed shape (normal, rectangular, triangular).
    """

    name: str
    correction_rad: float
    u_rad: float
    distribution: str = "normal"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PhaseTrack:
    """Phase of one oscillator on an even grid; sample k stands at start_s + k / rate_hz.

    ``phase_rad`` (n,) is unwrapped inside each valid stretch and meaningless where ``valid``
    (n,) is False; between two stretches whole turns may be missing. ``amplitude`` (n,) is in
    ``unit``; ``u_rad`` (n,) is the standard uncertainty by noise of each phase sample;
    ``systematic`` are the contributions common to all. ``correlation_samples`` is the number
    of grid samples that share one independent noise value (1 when white on the grid).
    ``smear_s`` is the time over which a sudden step of phase is smeared by the estimator.
    ``lost_s`` is the time that increments of a diffusing phase seem to miss: the estimator
    smooths, and their variance over a time t is 2 D (t - lost_s).
    ``event_s`` holds the marker times for estimators that work on markers, else None.
    """

    channel: str
    unit: str
    method: str
    start_s: float
    rate_hz: float
    phase_rad: FloatArray
    amplitude: FloatArray
    valid: BoolArray
    u_rad: FloatArray
    frequency_hz: Quantity
    amplitude_mean: Quantity
    snr_db: float | None
    band_hz: tuple[float, float] | None
    smear_s: float
    samples_per_cycle: float
    correlation_samples: float = 1.0
    lost_s: float = 0.0
    systematic: tuple[PhaseComponent, ...] = ()
    event_s: FloatArray | None = None
    notes: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        if not self.rate_hz > 0:
            raise ValueError(f"phase of '{self.channel}': rate must be above 0, got {self.rate_hz}")
        shape = self.phase_rad.shape
        if not len(shape) == 1 or any(
            part.shape != shape for part in (self.amplitude, self.valid, self.u_rad)
        ):
            raise ValueError(f"phase of '{self.channel}': arrays differ in shape")
        for name in ("phase_rad", "amplitude", "valid", "u_rad"):
            object.__setattr__(self, name, frozen_view(getattr(self, name)))

    @property
    def time_s(self) -> FloatArray:
        """Times of the grid samples, shape (n,), s."""
        return self.start_s + np.arange(self.phase_rad.size) / self.rate_hz
