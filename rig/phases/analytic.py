"""Phase by the analytic signal: band-limited, decimated, in one pass.

The phase of the quantity a cos(phi) is phi. See ``demodulate`` for the filter and ``bands``
for how wide it is. Ends and gaps are guarded by the reach of the filter; amplitude nulls
are masked; noise in the band is measured in the band.
"""

from __future__ import annotations

import math
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from rig.angles import TURN_RAD
from rig.arrays import BoolArray, ComplexArray, FloatArray, IntArray, median
from rig.channels import Channel
from rig.longarrays import LONG_SAMPLES, SampleRow, blocks_of, made_row
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
    joined_spans,
    leave_out_short_runs,
    leave_out_spans,
    runs_of,
)

UNRELIABLE_DB = 10.0  # false slips: none in 100 s at 10 dB, 25 at 6 dB (250 Hz band)
FEWEST_FREEDOM = 200  # below, a density scatters by more than 10 %
WEAK_SHARE = 0.06  # noise over whole power above which the modulus is no measure (12 dB)
FLOOR_DOUBT = 8.0  # a floor this many times off is not that of the band
STEADY_SHARE = 0.02  # of the amplitude: less spread than this (and noise) counts as none
FEWEST_RUN = 4  # grid samples a stretch must have
SMOOTHED = 4  # grid samples on each side that a length is averaged over


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
            kind = np.float64 if double else np.float32
            self._demodulator = Demodulator(self.plan, kind, self._grid.count)
        self._demodulator.feed(samples)

    def finish(self) -> FoundPhase:
        """Return the phase on the grid with its mask, noise and notes."""
        assert self._demodulator is not None
        turns, modulus = self._demodulator.finish()
        length = modulus.row()
        valid = _clear_of_ends_and_gaps(self._demodulator, self._grid)
        clear = runs_of(valid)
        null_share = _leave_out_nulls(valid, length, clear, self._settings.null_ratio)
        runs = runs_of(valid)
        base = BaseBand(
            turns=turns.row(),
            modulus=length,
            runs=runs,
            rate_hz=self._grid.grid_rate_hz,
            half_hz=self.plan.half_hz,
        )
        mean = _means(length, runs)
        noise = band_noise(base)
        across, snr_db = self._noise_across(mean.square, noise)
        check = check_band(
            base,
            amplitude=mean.value,
            across=across,
            noise=noise,
            floor=self._line.noise_density,
        )
        return FoundPhase(
            method="analytic",
            turns=_carried_turns(turns, runs, self.plan),
            amplitude=length,
            valid=valid,
            u_rad=_phase_noise_rad(length, valid, mean, across),
            snr_db=snr_db,
            band_hz=self._limits_hz(),
            smear_s=1.0 / self.plan.half_hz,
            lost_s=self._demodulator.lost_s,
            fastest_hz=check.fastest_hz,
            base_band=_longest(base, clear),
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
    if bad.size:
        first, stop = joined_spans(bad)
        leave_out_spans(
            clear, -((reach - first * grid.rows) // step), (stop * grid.rows + reach) // step + 1
        )
    return clear


class _Means(NamedTuple):
    """Mean of the valid lengths and of their squares, 0 where there are none."""

    value: float
    square: float


def _means(modulus: FloatArray, runs: IntArray) -> _Means:
    total, square, count = 0.0, 0.0, 0
    for first, stop in runs.tolist():
        for start, end in blocks_of(first, stop):
            part = modulus[start:end].astype(np.float64)
            total += float(part.sum())
            square += float(part @ part)
            count += part.size
    return _Means(total / count, square / count) if count else _Means(0.0, 0.0)


def _longest(base: BaseBand, clear: IntArray) -> ComplexArray:
    """Return the start of the longest stretch without missing samples, nulls included."""
    if not len(clear):
        return np.empty(0, dtype=complex)
    first, stop = max(clear.tolist(), key=lambda span: int(span[1] - span[0]))
    stop = min(stop, first + MOST_SAMPLES)
    turns, modulus = base.turns[first:stop], base.modulus[first:stop]
    # Without whole turns single precision suffices where the samples have no more.
    angle_rad = (TURN_RAD * (turns - np.rint(turns))).astype(modulus.dtype)
    vector = np.empty(angle_rad.size, dtype=complex)
    vector.real, vector.imag = modulus * np.cos(angle_rad), modulus * np.sin(angle_rad)
    return vector


def _leave_out_nulls(
    valid: BoolArray, modulus: FloatArray, clear: IntArray, null_ratio: float
) -> float:
    """Take the amplitude nulls out of a mask, and return the share of it that they took."""
    spans = clear.tolist()
    lowest, highest = _extremes(modulus, spans)
    taken = 0
    # The median is no larger than the largest: without one below this there is no null.
    if lowest < null_ratio * highest:
        limit = null_ratio * _median(modulus, spans)
        taken = sum(_leave_out_low(valid, modulus, span, limit) for span in spans)
    leave_out_short_runs(valid, FEWEST_RUN)
    return taken / max(1, int(np.sum(clear[:, 1] - clear[:, 0])))


def _leave_out_low(valid: BoolArray, modulus: FloatArray, span: list[int], limit: float) -> int:
    """Take samples below a limit and their neighbours out of a span; return how many are below."""
    taken, before = 0, False
    for start, stop in blocks_of(*span):
        low = np.zeros(stop - start + 2, dtype=bool)
        low[0] = before
        part = modulus[start : min(stop + 1, span[1])] < limit
        low[1 : part.size + 1] = part
        # The neighbours share the noise of the null.
        valid[start:stop] &= ~(low[:-2] | low[1:-1] | low[2:])
        taken, before = taken + int(np.count_nonzero(low[1:-1])), bool(low[-2])
    return taken


def _extremes(modulus: FloatArray, spans: list[list[int]]) -> tuple[float, float]:
    """Return the smallest and the largest length; one that is no number counts as smallest."""
    if not spans:
        return 0.0, 0.0
    ends = [
        (float(part.min()), float(part.max()))
        for first, stop in spans
        for a, b in blocks_of(first, stop)
        for part in (modulus[a:b],)
    ]
    low, high = np.array(ends).T
    return (float(low.min()), float(high.max())) if np.isfinite(low).all() else (0.0, math.inf)


def _median(modulus: FloatArray, spans: list[list[int]]) -> float:
    """Return the median length in some spans; of a long record that of every so many samples."""
    every = 1 + sum(stop - first for first, stop in spans) // LONG_SAMPLES
    return median(np.concatenate([modulus[a:b:every] for a, b in spans]))


def _carried_turns(counted: SampleRow, runs: IntArray, plan: DemodulationPlan) -> FloatArray:
    """Return phase in turns: unwrapped in each stretch, carrier added as whole turns.

    Over a hole whole turns follow from the mean rate of the longest stretch before it: that
    makes both sides comparable while the frequency is steady, no more.
    """
    first, stop = runs[:, 0], runs[:, 1]
    added = _turns_added(counted, runs)

    def read(begin: int, end: int) -> FloatArray:
        part = counted.read(begin, end)
        for k in range(np.searchsorted(stop, begin, side="right"), np.searchsorted(first, end)):
            part[max(0, first[k] - begin) : stop[k] - begin] += added[k]
        part += plan.carrier_turns(begin, end - begin)
        return part

    row: FloatArray = made_row(counted.count, np.float64, read)
    return row


def _turns_added(counted: SampleRow, runs: IntArray) -> FloatArray:
    """Return the whole turns that each stretch is moved by: the first one begins at none."""
    added = np.zeros(len(runs))
    longest, rate, before, at = 0, 0.0, -1, 0.0
    for k, (first, stop) in enumerate(runs.tolist()):
        begin, end = (float(counted.read(place, place + 1)[0]) for place in (first, stop - 1))
        expected = 0.0 if before < 0 else at + rate * (first - before)
        added[k] = np.rint(expected - begin)
        before, at = stop - 1, end + added[k]
        if stop - first > longest and stop - first > 1:
            longest = stop - first
            rate = (end - begin) / (longest - 1)
    return added


def _phase_noise_rad(
    modulus: FloatArray, valid: BoolArray, mean: _Means, across: float
) -> FloatArray:
    """Return the deviation of each phase sample: noise across the vector over its length.

    A steady amplitude gives one value for all. Else the length is averaged over 9 samples,
    as its own noise would bias the ratio.
    """
    if not mean.value > 0:
        return np.broadcast_to(np.float64(math.pi), valid.shape)
    spread = math.sqrt(max(0.0, mean.square - mean.value**2))
    if spread < STEADY_SHARE * mean.value + 2.0 * across:
        return np.broadcast_to(np.float64(across / mean.value), valid.shape)

    def read(begin: int, end: int) -> FloatArray:
        low, high = max(0, begin - SMOOTHED), min(valid.size, end + SMOOTHED)
        inside = slice(begin - low, end - low)
        there = valid[low:high]
        ones = np.ones(2 * SMOOTHED + 1, np.float32)
        weight = _running(there.astype(np.float32), ones)[inside]
        held = _running(np.where(there, modulus[low:high], 0.0).astype(np.float32), ones)[inside]
        smooth = held / np.maximum(weight, 1.0)
        noise_rad = across / np.maximum(smooth, 1e-6 * mean.value)
        return np.where(there[inside], noise_rad, math.pi).astype(float)

    row: FloatArray = made_row(valid.size, np.float64, read)
    return row


def _running(values: NDArray[Any], ones: NDArray[Any]) -> NDArray[Any]:
    """Return running sums of the length of the values, however few they are."""
    reach = ones.size // 2
    return np.convolve(values, ones)[reach : reach + values.size]
