"""From what an estimator found to the record: wiring corrections, notes, limits."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from rig.angles import TURN_RAD
from rig.arrays import BoolArray, ComplexArray, FloatArray
from rig.channels import ChannelSetup, component_notes, mixed_phase_rad, mixer_frequency_hz
from rig.channels import phase_components as wiring_components
from rig.errors import PhaseError
from rig.phases.grid import Grid
from rig.phases.levels import LARGEST_AMPLITUDE, too_large_text
from rig.phases.rates import mean_frequency
from rig.phases.stretches import runs_of
from rig.phases.track import PhaseTrack
from rig.quantities import Quantity, undetermined

FEWEST_SAMPLES = 16  # valid samples of the grid below which no phase is handed out


class Wired(Protocol):
    """What finishing needs to know of a channel, sampled or known by its instants."""

    @property
    def name(self) -> str:
        """Name of the channel."""

    @property
    def unit(self) -> str:
        """Physical unit."""

    @property
    def setup(self) -> ChannelSetup:
        """How the channel is wired."""

    @property
    def scale(self) -> float:
        """Physical units a sample unit."""

    @property
    def scale_u_rel(self) -> float:
        """Relative standard uncertainty of the scale."""

    @property
    def skew_from_file_s(self) -> float:
        """Skew the recording itself states, s."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class FoundPhase:
    """What an estimator found, in recorded phase and sample units; see PhaseTrack.

    ``fastest_hz`` is how far the frequency went from the line, None where that is no matter;
    ``base_band`` the longest stretch of the base band without missing samples (nulls
    included) and ``carrier_hz`` what became zero in it.
    """

    method: str
    turns: FloatArray
    amplitude: FloatArray
    valid: BoolArray
    u_rad: FloatArray
    snr_db: float | None
    band_hz: tuple[float, float] | None
    smear_s: float
    line_hz: float
    correlation_samples: float = 1.0
    lost_s: float = 0.0
    event_s: FloatArray | None = None
    fastest_hz: float | None = None
    base_band: ComplexArray | None = None
    carrier_hz: float = 0.0
    notes: tuple[str, ...] = ()


def finish_track(
    channel: Wired, grid: Grid, found: FoundPhase, notes: tuple[str, ...] = ()
) -> PhaseTrack:
    """Return the phase track of a channel, corrected for its wiring; ``notes`` are added.

    Raises
    ------
    PhaseError
        If fewer than 16 samples of the grid are valid, or their size overflows.
    """
    if int(found.valid.sum()) < FEWEST_SAMPLES:
        raise PhaseError(_nothing_text(channel.name, grid, found))
    _refuse_overflow(channel.name, found)
    recorded_rad = found.turns * TURN_RAD
    frequency = mean_frequency(
        recorded_rad,
        found.valid,
        found.u_rad,
        rate_hz=grid.grid_rate_hz,
        correlation_samples=found.correlation_samples,
    )
    line_hz = frequency.value or found.line_hz
    skew_s = channel.skew_from_file_s
    components = wiring_components(channel.setup, line_hz, skew_s)
    recorded_rad += math.fsum(part.correction_rad for part in components)
    return PhaseTrack(
        channel=channel.name,
        unit=channel.unit,
        method=found.method,
        start_s=grid.start_s,
        rate_hz=grid.grid_rate_hz,
        phase_rad=_phase_before_mixer(channel, recorded_rad, grid),
        amplitude=_scaled(found.amplitude, abs(channel.scale)),
        valid=found.valid,
        u_rad=found.u_rad,
        frequency_hz=_before_mixer(channel, frequency),
        amplitude_mean=_mean_amplitude(channel, found),
        snr_db=found.snr_db,
        band_hz=found.band_hz,
        smear_s=found.smear_s,
        lost_s=found.lost_s,
        samples_per_cycle=grid.rate_hz / line_hz,
        correlation_samples=found.correlation_samples,
        systematic=components,
        event_s=found.event_s,
        notes=found.notes
        + notes
        + component_notes(channel.setup, components)
        + _shape_notes(grid, found),
    )


def _refuse_overflow(name: str, found: FoundPhase) -> None:
    """Refuse samples whose squares or sums are no numbers any more."""
    largest = float(np.max(found.amplitude[found.valid]))
    if not largest < LARGEST_AMPLITUDE:
        raise PhaseError(too_large_text(name, largest))


def _scaled(amplitude: FloatArray, scale: float) -> FloatArray:
    return amplitude if scale == 1.0 else amplitude * amplitude.dtype.type(scale)


def _phase_before_mixer(channel: Wired, recorded_rad: FloatArray, grid: Grid) -> FloatArray:
    if channel.setup.mixer_lo_hz is None:
        return recorded_rad
    time_s = grid.start_s + np.arange(grid.count) / grid.grid_rate_hz
    return mixed_phase_rad(channel.setup, recorded_rad, time_s)


def _nothing_text(name: str, grid: Grid, found: FoundPhase) -> str:
    used = int(found.valid.sum())
    return (
        f"channel '{name}': only {used} of {found.valid.size} phase samples are valid over "
        f"{grid.frame_count / grid.rate_hz:.4g} s, at least {FEWEST_SAMPLES} needed; "
        "record longer, or repair gaps and level"
    )


def _before_mixer(channel: Wired, frequency: Quantity) -> Quantity:
    if frequency.value is None or channel.setup.mixer_lo_hz is None:
        return frequency
    true_hz = mixer_frequency_hz(channel.setup, frequency.value)
    return Quantity(value=true_hz, u=frequency.u, unit="Hz")


def _mean_amplitude(channel: Wired, found: FoundPhase) -> Quantity:
    """Return the mean amplitude; its uncertainty is that of the mean and of the scale."""
    values = found.amplitude[found.valid]
    mean = float(values.mean()) * abs(channel.scale)
    if not math.isfinite(mean):
        return undetermined(channel.unit, "amplitude is not defined for this method")
    independent = max(1.0, values.size / found.correlation_samples)
    by_noise = float(values.std()) * abs(channel.scale) / math.sqrt(independent)
    return Quantity(
        value=mean, u=math.hypot(by_noise, mean * channel.scale_u_rel), unit=channel.unit
    )


def _shape_notes(grid: Grid, found: FoundPhase) -> tuple[str, ...]:
    """Return what is left out at the ends, and where the phase runs backwards."""
    spans = runs_of(found.valid)
    rate = grid.grid_rate_hz
    head_s, tail_s = spans[0][0] / rate, (grid.count - spans[-1][1]) / rate
    notes = [f"phase trimmed by {head_s:.4g} s at the start and {tail_s:.4g} s at the end"]
    if len(spans) > 1:
        notes.append(f"phase in {len(spans)} separate stretches; whole turns may be lost between")
    back = sum(int(np.sum(np.diff(found.turns[a:b]) < 0)) for a, b in spans)
    if back:
        notes.append(f"phase decreases at {back} of {int(found.valid.sum())} samples")
    return tuple(notes)
