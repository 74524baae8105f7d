"""From what an estimator found to the record: wiring corrections, notes, limits."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Protocol, cast

import numpy as np

from rig.angles import TURN_RAD
from rig.arrays import BoolArray, ComplexArray, FloatArray
from rig.channels import ChannelSetup, component_notes, mixed_phase_rad, mixer_frequency_hz
from rig.channels import phase_components as wiring_components
from rig.errors import PhaseError
from rig.longarrays import LongArray, blocks_of, made_row
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
    spans = runs_of(found.valid).tolist()
    size = _size_of(found, spans)
    if not size.largest < LARGEST_AMPLITUDE:
        raise PhaseError(too_large_text(channel.name, size.largest))
    recorded_rad = _scaled(found.turns, TURN_RAD)
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
    recorded_rad = _moved(recorded_rad, math.fsum(part.correction_rad for part in components))
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
        amplitude_mean=_mean_amplitude(channel, found, size),
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
        + _shape_notes(grid, found, spans),
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class _Size:
    """Largest, mean and standard deviation of the valid amplitudes, and how many there are."""

    largest: float
    mean: float
    spread: float
    count: int


def _size_of(found: FoundPhase, spans: list[list[int]]) -> _Size:
    parts = ((a, b) for first, stop in spans for a, b in blocks_of(first, stop))
    origin = float(found.amplitude[spans[0][0]])
    count, total, square, largest = 0, 0.0, 0.0, 0.0
    for a, b in parts:
        part = found.amplitude[a:b].astype(float)
        largest = float(np.maximum(largest, part.max()))  # no number stays none
        # Taken from one of them, so that the squares lose nothing.
        part -= origin
        count, total = count + part.size, total + float(part.sum())
        square += float(part @ part)
    mean = total / count
    spread = math.sqrt(max(0.0, square / count - mean * mean))
    return _Size(largest=largest, mean=origin + mean, spread=spread, count=count)


def _scaled(row: FloatArray, factor: float) -> FloatArray:
    """Return a row times a factor; a long one is multiplied where it is read."""
    if isinstance(row, LongArray):
        kind = row.dtype.type
        return cast(FloatArray, LongArray(row.size, kind, lambda a, b: row[a:b] * kind(factor)))
    if row.strides == (0,):  # one number for all
        return np.broadcast_to(row[0] * factor, row.shape)
    return row if factor == 1.0 else row * row.dtype.type(factor)


def _moved(row: FloatArray, by: float) -> FloatArray:
    """Return a row plus a number, an array in its place."""
    if isinstance(row, LongArray):
        return cast(FloatArray, LongArray(row.size, row.dtype, lambda a, b: row[a:b] + by))
    row += by
    return row


def _phase_before_mixer(channel: Wired, recorded_rad: FloatArray, grid: Grid) -> FloatArray:
    if channel.setup.mixer_lo_hz is None:
        return recorded_rad

    def read(start: int, stop: int) -> FloatArray:
        time_s = grid.start_s + np.arange(start, stop) / grid.grid_rate_hz
        return mixed_phase_rad(channel.setup, recorded_rad[start:stop], time_s)

    row: FloatArray = made_row(grid.count, np.float64, read)
    return row


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


def _mean_amplitude(channel: Wired, found: FoundPhase, size: _Size) -> Quantity:
    """Return the mean amplitude; its uncertainty is that of the mean and of the scale."""
    mean = size.mean * abs(channel.scale)
    if not math.isfinite(mean):
        return undetermined(channel.unit, "amplitude is not defined for this method")
    independent = max(1.0, size.count / found.correlation_samples)
    by_noise = size.spread * abs(channel.scale) / math.sqrt(independent)
    return Quantity(
        value=mean, u=math.hypot(by_noise, mean * channel.scale_u_rel), unit=channel.unit
    )


def _shape_notes(grid: Grid, found: FoundPhase, spans: list[list[int]]) -> tuple[str, ...]:
    """Return what is left out at the ends, and where the phase runs backwards."""
    rate = grid.grid_rate_hz
    head_s, tail_s = spans[0][0] / rate, (grid.count - spans[-1][1]) / rate
    notes = [f"phase trimmed by {head_s:.4g} s at the start and {tail_s:.4g} s at the end"]
    if len(spans) > 1:
        notes.append(f"phase in {len(spans)} separate stretches; whole turns may be lost between")
    steps = ((a, b + 1) for first, stop in spans for a, b in blocks_of(first, stop - 1))
    back = sum(_decreases(found.turns[a:b]) for a, b in steps)
    if back:
        notes.append(f"phase decreases at {back} of {int(found.valid.sum())} samples")
    return tuple(notes)


def _decreases(turns: FloatArray) -> int:
    return int(np.count_nonzero(turns[1:] < turns[:-1]))
