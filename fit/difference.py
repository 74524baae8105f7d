"""The phase difference of a pair at an order n:m, and every sign convention of the package.

- Roles: the reference is the injected, leading or first oscillator; the driven one may be
  pulled. For a mutual pair the roles only fix signs.
- Order n:m: psi = n * phi_driven - m * phi_reference. 1:1 is phi_driven - phi_reference.
- Phase equation: dpsi/dt = 2 pi (detuning_hz - coupling_hz sin(psi - offset_rad)) + noise;
  detuning is positive when n f_driven > m f_reference, both free-running. The noise is
  white, <n(t) n(t')> = 2 noise_rad2_s delta(t - t').
- A slip of +1 turn moves psi by +2 pi.
"""

from __future__ import annotations

from dataclasses import dataclass

from rig.arrays import BoolArray, FloatArray, frozen_view


@dataclass(frozen=True, slots=True, kw_only=True)
class Order:
    """A locking order n:m (n weighs the driven, m the reference phase), both at least 1."""

    n: int = 1
    m: int = 1
    source: str = "given"

    def __post_init__(self) -> None:
        if self.n < 1 or self.m < 1:
            raise ValueError(f"locking order needs n, m >= 1, got {self.n}:{self.m}")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PhaseDifference:
    """psi on an even grid; sample k stands at start_s + k / rate_hz.

    ``psi_rad`` (n,) is unwrapped inside each valid stretch; ``valid`` (n,) marks samples
    where both phases hold; ``u_rad`` (n,) is the standard uncertainty by measurement noise;
    ``systematic_u_rad`` the one common to all samples (sensors, skew, corners).
    ``correlation_samples`` is the number of samples that share one noise value.
    ``cycle_rate_hz`` is the slower of the two cycle rates: one independent phase value per
    cycle is all a marker phase holds. ``smear_s`` is the shortest event told apart and
    ``band_half_hz`` the frequency offset beyond which the phase band shows nothing.
    """

    order: Order
    start_s: float
    rate_hz: float
    psi_rad: FloatArray
    valid: BoolArray
    u_rad: FloatArray
    systematic_u_rad: float = 0.0
    correlation_samples: float = 1.0
    cycle_rate_hz: float
    driven_frequency_hz: float
    reference_frequency_hz: float
    smear_s: float = 0.0
    band_half_hz: float | None = None
    notes: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        if not self.rate_hz > 0:
            raise ValueError(f"phase difference: rate must be above 0 Hz, got {self.rate_hz}")
        if not self.psi_rad.shape == self.valid.shape == self.u_rad.shape:
            raise ValueError("phase difference: psi, valid and u differ in shape")
        for name in ("psi_rad", "valid", "u_rad"):
            object.__setattr__(self, name, frozen_view(getattr(self, name)))
