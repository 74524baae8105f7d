"""Two recorders of one pair: how their clocks are tied, and a capture on the other's clock.

The first recorder's clock counts. An error of ``rel`` says that the second one's clock runs
fast by that share: it takes rate * (1 + rel) samples a true second, so a line appears in its
capture at f / (1 + rel). Its start is not tied by its rate: unless it is stated, the angle
between the two captures is unknown, while rate, slips and lock are not.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from rig.captures import Capture
from rig.channels import Channel, check_recorders
from rig.errors import CaptureError
from rig.phases.estimate import track_one
from rig.phases.rates import mean_frequency
from rig.phases.regrid import regridded
from rig.phases.settings import PhaseSettings

PPM = 1e-6
LARGEST_ERROR = 1e-2  # a clock off by more than 1 % is another rate, not an error


@dataclass(frozen=True, slots=True, kw_only=True)
class ClockTie:
    """How the second recorder's clock relates to the first one's.

    ``error_rel`` with its standard uncertainty; ``start_shift_s`` is when the second one
    started, in s after the first, None when it is not known.

    Raises
    ------
    CaptureError
        If the error is not finite or above 1 %, or its uncertainty is negative.
    """

    error_rel: float
    error_u_rel: float = 0.0
    start_shift_s: float | None = None
    notes: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        if not abs(self.error_rel) <= LARGEST_ERROR:
            raise CaptureError(
                f"clock error must lie within 1 % (10000 ppm), got {self.error_rel / PPM:g} ppm; "
                "if the rate itself is wrong pass --rate"
            )
        if not (self.error_u_rel >= 0 and math.isfinite(self.error_u_rel)):
            raise CaptureError(
                f"uncertainty of the clock error must be 0 or above, got {self.error_u_rel / PPM:g}"
            )


def stated_tie(
    first: Capture,
    second: Capture,
    *,
    error_ppm: float | None,
    error_u_ppm: float | None = None,
    start_shift_s: float | None = None,
) -> ClockTie:
    """Return the tie that a person states, or refuse two captures without one.

    Parameters
    ----------
    first, second : Capture
    error_ppm, error_u_ppm : float or None, parts per million
    start_shift_s : float or None, s

    Raises
    ------
    CaptureError
        If no clock error is stated, or it breaks its rule.
    """
    stated = None if error_ppm is None else error_ppm * PPM
    notes = check_recorders(first, second, clock_error_rel=stated)
    if error_u_ppm is None:
        notes += ("uncertainty of the stated clock error is not stated; it counts as 0",)
    return ClockTie(
        error_rel=stated or 0.0,
        error_u_rel=(error_u_ppm or 0.0) * PPM,
        start_shift_s=start_shift_s,
        notes=notes,
    )


def shared_tie(
    first: Channel,
    second: Channel,
    *,
    settings: PhaseSettings,
    start_shift_s: float | None = None,
) -> ClockTie:
    """Return the tie that one signal recorded by both recorders gives.

    error = d(phi_first - phi_second)/dt / (2 pi f_second), both at the same time of their
    own clocks: what the signal itself does is in both and drops out as far as they started
    together.

    Parameters
    ----------
    first, second : Channel, the shared signal in either capture
    settings : PhaseSettings
    start_shift_s : float or None, s

    Raises
    ------
    CaptureError
        If the shared signal has no frequency in one of the captures.
    PhaseError
        If it carries no usable phase.

    Notes
    -----
    One number for the whole capture: what the clocks do within it is not corrected, but
    widens the uncertainty. The signal gives the start only up to its own cycles, so the
    start is not taken from it.
    """
    notes = check_recorders(first.capture, second.capture, shared_reference=True)
    one, other = (track_one(channel, settings=settings) for channel in (first, second))
    moved = regridded(other, one, shift_s=start_shift_s or 0.0)
    apart = mean_frequency(
        one.phase_rad - moved.phase_rad,
        one.valid & moved.valid,
        np.hypot(one.u_rad, moved.u_rad),
        rate_hz=one.rate_hz,
        correlation_samples=max(one.correlation_samples, moved.correlation_samples),
    )
    line_hz = other.frequency_hz.value
    if apart.value is None or line_hz is None:
        raise CaptureError(
            f"{second.capture.path}: shared channel '{second.name}' has no frequency; "
            "record it longer, or state the clock error"
        )
    error_rel, u_rel = apart.value / line_hz, (apart.u or 0.0) / line_hz
    text = f"clock error {error_rel / PPM:.4g} ppm, standard uncertainty {u_rel / PPM:.2g} ppm"
    return ClockTie(
        error_rel=error_rel,
        error_u_rel=u_rel,
        start_shift_s=start_shift_s,
        notes=(*notes, f"{text}, from the shared channel '{second.name}'"),
    )


def on_first_clock(second: Capture, tie: ClockTie) -> Capture:
    """Return the second recorder's capture with its rate on the first one's clock."""
    return replace(second, rate_hz=second.rate_hz * (1.0 + tie.error_rel))
