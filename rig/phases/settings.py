"""How phases are estimated: every choice a person may make, each with its one default."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Literal

from rig.errors import PhaseError

MethodName = Literal["auto", "analytic", "marker", "pulse", "spike"]
EdgeName = Literal["rising", "falling", "both"]
METHODS = ("auto", "analytic", "marker", "pulse", "spike")
EDGES = ("rising", "falling", "both")


@dataclass(frozen=True, slots=True, kw_only=True)
class PhaseSettings:
    """How the phase of one channel is estimated.

    ``method`` "auto" takes the pulse train where the wiring states pulses per turn or the
    signal has two levels, spikes where it is flat between short peaks, else the analytic
    signal. ``band_hz`` (low, high) is the pass band; None lets the line decide.
    ``hysteresis_rms`` is half the width of the dead zone of crossings as a share of the rms
    value: 0.3 lets 20 dB of wide-band noise pass without a false marker. A marker closer
    than ``min_interval_cycles`` of the cycle to the one before is rejected (a cycle of any
    oscillator met so far never shortens to 0.4). An interval longer than
    ``max_interval_cycles`` of its neighbours is a missing marker and is not bridged.
    ``null_ratio``: where the amplitude falls below this share of its median the phase says
    nothing (noise 20 dB below the line turns it by 1 rad there). ``transition`` is the width
    of the filter's edge as a share of the half band: 0.15 costs 3.5 % of the accuracy.
    ``stop_db`` is the rejection of the second stage: 80 dB leaves 0.1 mrad of an equal line.
    ``refractory_cycles`` is the time after a spike in which no other is believed.
    ``double_precision`` keeps 64-bit samples where 32 would do (1e-6 rad).
    """

    method: MethodName = "auto"
    band_hz: tuple[float, float] | None = None
    hysteresis_rms: float = 0.3
    edge: EdgeName = "rising"
    level: float | None = None
    min_interval_cycles: float = 0.4
    max_interval_cycles: float = 1.6
    null_ratio: float = 0.1
    transition: float = 0.15
    stop_db: float = 80.0
    refractory_cycles: float = 0.4
    double_precision: bool = False

    def __post_init__(self) -> None:
        if self.method not in METHODS:
            raise PhaseError(f"phase method '{self.method}' is not one of {', '.join(METHODS)}")
        if self.edge not in EDGES:
            raise PhaseError(f"marker edge '{self.edge}' is not one of {', '.join(EDGES)}")
        if self.band_hz is not None and not 0 < self.band_hz[0] < self.band_hz[1]:
            low, high = self.band_hz
            raise PhaseError(f"band must have 0 < low < high, got {low:g} to {high:g} Hz")
        for name in ("hysteresis_rms", "min_interval_cycles", "null_ratio", "transition"):
            if not 0 < getattr(self, name) < 1:
                raise PhaseError(f"{name} must lie between 0 and 1, got {getattr(self, name):g}")
        if not self.max_interval_cycles > 1:
            raise PhaseError(f"max_interval_cycles must be > 1, got {self.max_interval_cycles:g}")


@dataclass(frozen=True, slots=True, kw_only=True)
class PairSettings:
    """How the phases of a pair are estimated on one grid.

    ``order`` (n, m) tells how far apart the lines of the two lie when they are not 1:1; None
    lets the nearest small ratio decide. ``rate_hz`` is the least rate wanted for the grid.
    ``start_s`` and ``stop_s`` bound the part of the capture that is used.
    ``block_frames`` is how many frames are asked of the source at a time (results do not
    depend on it).
    """

    reference: PhaseSettings = field(default_factory=PhaseSettings)
    driven: PhaseSettings = field(default_factory=PhaseSettings)
    order: tuple[int, int] | None = None
    rate_hz: float | None = None
    start_s: float = 0.0
    stop_s: float | None = None
    block_frames: int | None = None

    def __post_init__(self) -> None:
        if self.rate_hz is not None and not self.rate_hz > 0:
            raise PhaseError(f"grid rate must be above 0 Hz, got {self.rate_hz:g}")
        if not self.start_s >= 0 or (self.stop_s is not None and not self.stop_s > self.start_s):
            raise PhaseError(f"span must have 0 <= start < stop, got {self.start_s}, {self.stop_s}")
