"""Records that pass between the stages of the analysis; plain data, no behaviour.

A stage is one function: PhaseDifference -> Episodes -> AdlerEstimate -> Measurement ->
RegionPoint (many) -> LockingRegion. Conventions of sign and order stand in
``fit.difference``.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Literal

import numpy as np

from fit.difference import Order
from rig.arrays import FloatArray
from rig.quantities import Quantity

State = Literal["locked", "drifting", "intermittent", "undecided"]
Style = Literal["in-phase", "anti-phase", "offset"]
Direction = Literal["up", "down", "none"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Episode:
    """One maximal locked stretch; ``offset_rad`` is the circular mean of psi in it."""

    start_s: float
    stop_s: float
    offset_rad: float
    offset_u_rad: float
    spread_rad: float
    style: Style


@dataclass(frozen=True, slots=True, kw_only=True)
class Slip:
    """psi moved on by whole turns at a time; ``turns`` carries the sign."""

    time_s: float
    turns: int


@dataclass(frozen=True, slots=True, kw_only=True)
class StateDecision:
    """State of a record with its reason, and how much of the valid time was locked."""

    state: State
    reason: str
    locked_fraction: float
    hold_s: float
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PsiSeries:
    """psi thinned to the step that the likelihood needs; segments are never joined.

    ``segments`` are arrays of unwrapped psi, rad, each evenly spaced by ``step_s``;
    ``start_s`` holds the time of each segment's first sample. ``noise_start_rad2`` is a
    first guess of the measurement-noise variance of one sample. ``lost_s`` is the time that
    increments of a diffusing psi seem to miss because the phase band smooths it.
    """

    step_s: float
    segments: tuple[FloatArray, ...]
    start_s: tuple[float, ...]
    noise_start_rad2: float | None = None
    lost_s: float = 0.0

    def __post_init__(self) -> None:
        if not self.step_s > 0:
            raise ValueError(f"psi series: step must be above 0 s, got {self.step_s}")
        if any(not np.all(np.isfinite(part)) for part in self.segments):
            raise ValueError("psi series: every sample must be finite")

    @property
    def duration_s(self) -> float:
        """Total time covered by the segments."""
        return sum(max(part.size - 1, 0) for part in self.segments) * self.step_s


@dataclass(frozen=True, slots=True, kw_only=True)
class FreeRun:
    """One oscillator alone: mean frequency, its drift, and its phase diffusion.

    ``noise_rad2_s`` is D of this oscillator's own phase (Var phi = 2 D t).
    """

    role: Literal["driven", "reference"]
    frequency_hz: Quantity
    drift_hz_s: Quantity
    noise_rad2_s: Quantity
    duration_s: float
    file: str = ""
    allan: tuple[tuple[float, float, float, float], ...] = ()
    noise_type: str = "not determined"
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class Baseline:
    """What free-running captures say about a pair at order n:m before it is coupled.

    ``detuning_hz`` is n f_driven - m f_reference, both alone, its u including drift between
    captures; ``noise_rad2_s`` is n^2 D_driven + m^2 D_reference of psi. ``wander_hz`` is the
    standard deviation of the free detuning from one capture to the next, beyond white noise.
    """

    detuning_hz: Quantity
    noise_rad2_s: Quantity
    source: str
    wander_hz: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class AdlerEstimate:
    """Detuning, coupling, offset and noise of one record, with how they were reached.

    ``adequate`` says whether the phase equation describes the record (None: not tested);
    ``method`` names the estimator used; ``checks`` maps a cross-check to its Quantity
    (for example the two-number inversion); ``tests`` are the adequacy tests.
    ``relaxation_rate_hz`` is sqrt(coupling^2 - detuning^2), which a locked record can give
    where it cannot give the two apart.
    """

    detuning_hz: Quantity
    coupling_hz: Quantity
    offset_rad: Quantity
    noise_rad2_s: Quantity
    measurement_noise_rad: Quantity
    relaxation_rate_hz: Quantity
    detuning_mean_hz: Quantity
    adequate: bool | None = None
    method: str = ""
    notes: tuple[str, ...] = ()
    checks: tuple[tuple[str, Quantity], ...] = ()
    tests: tuple[AdequacyTest, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class AdequacyTest:
    """One test of the phase equation: statistic, threshold, size, effect, and what it means."""

    name: str
    statistic: float
    threshold: float
    fired: bool
    size: float
    effect: Quantity | None = None
    meaning: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class MutualEstimate:
    """How strongly each oscillator of a pair is pulled by the other, with lags.

    ``on_driven_hz`` is the coupling that the driven feels, ``on_reference_hz`` that of the
    reference, each in hertz of its own phase; ``direction`` is 1 when only the driven is
    pulled, -1 when only the reference is.
    """

    on_driven_hz: Quantity
    on_reference_hz: Quantity
    lag_driven_rad: Quantity
    lag_reference_rad: Quantity
    direction: Quantity
    method: str = ""
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class RoleSummary:
    """What a report says of one channel of a pair."""

    channel: str
    unit: str
    frequency_hz: Quantity
    amplitude: Quantity
    snr_db: float | None
    method: str
    notes: tuple[str, ...] = ()
    components: tuple[tuple[str, float, float, str], ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class SyncIndex:
    """An index of phase locking with what it would be without any coupling."""

    name: str
    value: float
    expected_free: float
    p_value: float | None
    note: str = ""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Measurement:
    """Everything one capture says; ``series`` feeds the joint likelihood of a sweep.

    ``trace_s`` and ``trace_psi_rad`` are a thinned psi for pictures (at most a few thousand
    points, NaN where not valid).
    """

    path: str
    format: str
    rate_hz: float
    duration_s: float
    capture_notes: tuple[str, ...]
    reference: RoleSummary
    driven: RoleSummary
    order: Order
    decision: StateDecision
    episodes: tuple[Episode, ...]
    slips: tuple[Slip, ...]
    mean_rate_hz: Quantity
    adler: AdlerEstimate
    jitter_rad: Quantity
    pull_in_s: Quantity
    slip_rate_hz: Quantity
    indices: tuple[SyncIndex, ...] = ()
    notes: tuple[str, ...] = ()
    series: PsiSeries
    trace_s: FloatArray
    trace_psi_rad: FloatArray
    order_candidates: tuple[tuple[int, int, float], ...] = ()
    mutual: MutualEstimate | None = None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RegionPoint:
    """One point of a sweep as the region estimator needs it.

    ``drive_hz`` is the measured reference frequency where it was measured, else the stated
    one; for a mutual pair it is None and ``detuning_hz`` comes from free-running captures.
    ``amplitude`` is the level converted to an amplitude. ``key`` sorts points the same way
    whatever order they were measured in.
    """

    key: str
    drive_hz: float | None
    drive_u_hz: float
    detuning_hz: float | None
    level: float
    amplitude: float
    direction: Direction
    state: State
    mean_rate_hz: float | None
    mean_rate_u_hz: float | None
    adler: AdlerEstimate
    series: PsiSeries


@dataclass(frozen=True, slots=True, kw_only=True)
class RegionLevel:
    """One interval of the locking region at one level and sweep direction.

    Edges are reference (drive) frequencies in Hz, lower < upper; ``bracket_lower_hz`` and
    ``bracket_upper_hz`` are the last-locked / first-unlocked plausibility check,
    ``beat_lower_hz`` and ``beat_upper_hz`` what the mean beat rates alone give (None: not
    worked out), ``noise_rad2_s`` the noise that the points share. psi0 at a detuning is
    ``offset_rad`` plus ``offset_slope_rad_hz`` times it. For a mutual pair the axis is the free
    detuning n f_driven - m f_reference.
    """

    level: float
    amplitude: float
    direction: Direction
    interval: int
    lower_hz: Quantity
    upper_hz: Quantity
    width_hz: Quantity
    coupling_hz: Quantity
    offset_rad: Quantity
    method: str
    bracket_lower_hz: Quantity
    bracket_upper_hz: Quantity
    notes: tuple[str, ...] = ()
    beat_lower_hz: Quantity | None = None
    beat_upper_hz: Quantity | None = None
    noise_rad2_s: Quantity | None = None
    offset_slope_rad_hz: Quantity | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Hysteresis:
    """Difference of an edge between the sweep directions, up minus down, with its test."""

    level: float
    edge: Literal["lower", "upper"]
    value_hz: Quantity
    p_value: float | None = None
    note: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class LockingRegion:
    """The locking region of a sweep: edges per level and direction, and the laws over levels.

    ``coupling_per_level`` is kappa of coupling_hz = kappa * amplitude ** power (power 1
    unless the test rejects it), ``level_power`` the fitted power, ``centre_hz`` the drive
    frequency of zero detuning. ``adler_holds`` is None where it could not be tested.
    """

    levels: tuple[RegionLevel, ...]
    coupling_per_level: Quantity
    level_power: Quantity
    centre_hz: Quantity
    centre_slope_hz: Quantity
    hysteresis: tuple[Hysteresis, ...]
    adler_holds: bool | None
    tests: tuple[AdequacyTest, ...] = ()
    notes: tuple[str, ...] = field(default=())
