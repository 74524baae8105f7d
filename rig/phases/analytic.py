"""Phase by the analytic signal: band-limited, decimated, in one pass.

The phase of the quantity a cos(phi) is phi. See ``demodulate`` for the filter and ``bands``
for how wide it is. Ends and gaps are guarded by the reach of the filter; amplitude nulls
are masked; noise in the band is measured in the band.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rig.arrays import BoolArray, ComplexArray, FloatArray, median
from rig.channels import Channel
from rig.phases.bandcheck import BandCheck, check_band
from rig.phases.bands import Band
from rig.phases.demodulate import DemodulationPlan, Demodulator, carrier_steps
from rig.phases.finishing import FoundPhase
from rig.phases.grid import Grid
from rig.phases.leak import MOST_SAMPLES
from rig.phases.lines import FollowedLine
from rig.phases.noise import BandNoise, BaseBand, band_noise
from rig.phases.settings import PhaseSettings
from rig.phases.stretches import (
    BLOCK,
    joined_spans,
    runs_of,
    unwrap_turns,
    without_short_runs,
    without_spans,
)

UNRELIABLE_DB = 10.0  # false slips: none in 100 s at 10 dB, 25 at 6 dB (250 Hz band)
FEWEST_FREEDOM = 200  # below, a density scatters by more than 10 %
WEAK_SHARE = 0.06  # noise over whole power above which the modulus is no measure (12 dB)
FLOOR_DOUBT = 8.0  # a floor this many times off is not that of the band
STEADY_SHARE = 0.02  # of the amplitude: less spread than this (and noise) counts as none
FEWEST_RUN = 4  # grid samples a stretch must have


class AnalyticFollower:
    """Samples of one channel in, its analytic phase out."""

    def __init__(
        self,
        channel: Channel,
        line: FollowedLine,
        band: Band,
        *,
        grid: Grid,
        settings: PhaseSettings,
    ) -> None:
        self._line, self._band, self._grid, self._settings = line, band, grid, settings
        self._channel = channel
        self._demodulator: Demodulator | None = None
        self.plan = DemodulationPlan(
            rate_hz=grid.rate_hz,
            rows=grid.rows,
            carrier_steps=carrier_steps(grid.rate_hz, grid.rows, band.line_hz),
            half_hz=band.half_hz,
            transition=band.transition,
            stop_db=band.stop_db,
        )

    def feed(self, samples: NDArray[Any]) -> None:
        """Take the next chunk of samples."""
        if self._demodulator is None:
            double = self._settings.double_precision or samples.dtype == np.float64
            self._demodulator = Demodulator(self.plan, np.float64 if double else np.float32)
        self._demodulator.feed(samples)

    def finish(self) -> FoundPhase:
        """Return the phase on the grid with its mask, noise and notes."""
        assert self._demodulator is not None
        vector = self._demodulator.finish(self._grid.count)
        clear = _clear_of_ends_and_gaps(self._demodulator, self._grid)
        modulus = np.abs(vector)
        valid, null_share = _without_nulls(modulus, clear, self._settings.null_ratio)
        base = BaseBand(
            vector=vector,
            valid=valid,
            rate_hz=self._grid.grid_rate_hz,
            half_hz=self.plan.half_hz,
        )
        noise = band_noise(base)
        across, snr_db = self._noise_across(_mean(modulus, valid, square=True), noise)
        check = check_band(
            base,
            amplitude=_mean(modulus, valid),
            across=across,
            noise=noise,
            floor=self._line.noise_density,
        )
        return FoundPhase(
            method="analytic",
            turns=_carried_turns(vector, valid, self.plan),
            amplitude=modulus,
            valid=valid,
            u_rad=_phase_noise_rad(modulus, valid, across),
            snr_db=snr_db,
            band_hz=self._limits_hz(),
            smear_s=1.0 / self.plan.half_hz,
            lost_s=self._demodulator.lost_s,
            fastest_hz=check.fastest_hz,
            base_band=_longest(vector, clear),
            carrier_hz=self.plan.carrier_hz,
            line_hz=self._line.frequency_hz,
            correlation_samples=self._demodulator.correlation_samples,
            notes=self._line.notes + self._notes(snr_db, null_share, check),
        )

    def _noise_across(
        self, mean_square: float, noise: BandNoise | None
    ) -> tuple[float, float | None]:
        """Return the deviation of the noise across the vector, and the in-band ratio in dB."""
        assert self._demodulator is not None
        total = mean_square / 2.0
        density = _noise_density(noise, self._line.noise_density, total / (2.0 * self.plan.half_hz))
        # density is that of the recorded signal: its noise in the band is density * 2 half.
        across = math.sqrt(density * self._demodulator.noise_hz)
        power = max(total - across**2, 1e-300)
        in_band = max(density * 2.0 * self.plan.half_hz, 1e-300)
        return across, min(300.0, max(-300.0, 10.0 * math.log10(power / in_band)))

    def _notes(self, snr_db: float | None, null_share: float, check: BandCheck) -> tuple[str, ...]:
        notes = []
        if snr_db is not None and snr_db < UNRELIABLE_DB:
            notes.append(
                f"signal-to-noise ratio {snr_db:.1f} dB in the band, below {UNRELIABLE_DB:g} dB: "
                "slips are unreliable"
            )
        if null_share > 0:
            notes.append(
                f"amplitude below {self._settings.null_ratio:g} of its median over "
                f"{null_share:.2%} of the record: phase masked there"
            )
        narrow = check.note(*self._limits_hz())
        return (*notes, narrow) if narrow else tuple(notes)

    def _limits_hz(self) -> tuple[float, float]:
        carrier_hz, half_hz = self.plan.carrier_hz, self.plan.half_hz
        return carrier_hz - half_hz, carrier_hz + half_hz


def _noise_density(noise: BandNoise | None, floor: float, whole: float) -> float:
    """Return the noise density of the recorded signal in the band.

    Too few samples scatter more than the floor around the line, and in a weak line the
    modulus shows less than the noise: then the floor is taken unless it contradicts them.
    ``whole`` is the density the band would have if its whole power were noise.
    """
    if noise is None:
        return floor
    in_band = min(noise.amplitude_density, noise.phase_density) / 2.0
    agree = in_band / FLOOR_DOUBT < floor < in_band * FLOOR_DOUBT
    doubtful = noise.freedom < FEWEST_FREEDOM or in_band > WEAK_SHARE * whole
    return floor if doubtful and agree else in_band


def _clear_of_ends_and_gaps(demodulator: Demodulator, grid: Grid) -> BoolArray:
    """Return where the filter saw nothing but recorded samples."""
    reach, step = demodulator.plan.reach_frames, grid.step_frames
    clear = np.zeros(grid.count, dtype=bool)
    clear[-(-reach // step) : max(0, (grid.frame_count - reach) // step + 1)] = True
    bad = demodulator.bad_rows
    if not bad.size:
        return clear
    first, stop = joined_spans(bad)
    return without_spans(
        clear, -((reach - first * grid.rows) // step), (stop * grid.rows + reach) // step + 1
    )


def _mean(modulus: FloatArray, valid: BoolArray, *, square: bool = False) -> float:
    """Return the mean of valid values (or of their squares), 0 where there are none."""
    total, count = 0.0, 0
    for first, stop in runs_of(valid):
        for start in range(first, stop, BLOCK):
            part = modulus[start : min(start + BLOCK, stop)].astype(np.float64)
            total += float(part @ part) if square else float(part.sum())
            count += part.size
    return total / count if count else 0.0


def _longest(vector: NDArray[Any], clear: BoolArray) -> ComplexArray:
    spans = runs_of(clear)
    if not len(spans):
        return vector[:0]
    first, stop = max(spans, key=lambda span: int(span[1] - span[0]))
    # A copy of what is looked at, so that the whole need not be kept.
    return vector[first : min(stop, first + MOST_SAMPLES)].astype(np.complex128)


def _without_nulls(
    modulus: FloatArray, clear: BoolArray, null_ratio: float
) -> tuple[BoolArray, float]:
    """Return the mask without amplitude nulls, and the share of clear samples they took."""
    if not clear.any():
        return clear, 0.0
    low = clear & (modulus < null_ratio * median(modulus[clear]))
    # The neighbours share the noise of the null.
    wide = low | np.roll(low, 1) | np.roll(low, -1) if low.any() else low
    valid = without_short_runs(clear & ~wide, FEWEST_RUN)
    return valid, float(low.sum() / clear.sum())


def _carried_turns(vector: NDArray[Any], valid: BoolArray, plan: DemodulationPlan) -> FloatArray:
    """Return phase in turns: unwrapped in each stretch, carrier added as whole turns.

    Over a hole whole turns follow from the mean rate of the longest stretch before it: that
    makes both sides comparable while the frequency is steady, no more.
    """
    turns = np.zeros(vector.size)
    longest, rate, before = 0, 0.0, -1
    for first, stop in runs_of(valid).tolist():
        unwrap_turns(vector[first:stop], turns[first:stop])
        if before >= 0:
            expected = turns[before] + rate * (first - before)
            turns[first:stop] += np.rint(expected - turns[first])
        before = stop - 1
        if stop - first > longest and stop - first > 1:
            longest = stop - first
            rate = float(turns[before] - turns[first]) / (longest - 1)
    for start in range(0, turns.size, BLOCK):
        part = turns[start : start + BLOCK]
        part += plan.carrier_turns(start, part.size)
    return turns


def _phase_noise_rad(modulus: FloatArray, valid: BoolArray, across: float) -> FloatArray:
    """Return the deviation of each phase sample: noise across the vector over its length.

    A steady amplitude gives one value for all. Else the length is averaged over 9 samples,
    as its own noise would bias the ratio.
    """
    mean = _mean(modulus, valid)
    if not mean > 0:
        return np.full(valid.size, math.pi)
    spread = math.sqrt(max(0.0, _mean(modulus, valid, square=True) - mean**2))
    if spread < STEADY_SHARE * mean + 2.0 * across:
        return np.broadcast_to(np.float64(across / mean), valid.shape)
    weight = np.convolve(valid.astype(np.float32), np.ones(9, np.float32), mode="same")
    held = np.where(valid, modulus, 0.0).astype(np.float32)
    smooth = np.convolve(held, np.ones(9, np.float32), mode="same") / np.maximum(weight, 1.0)
    return np.asarray(np.where(valid, across / np.maximum(smooth, 1e-6 * mean), math.pi))
