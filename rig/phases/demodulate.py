"""Two-stage complex band-pass and decimation in one pass, as matrix products.

Stage 1 is a complex Kaiser band-pass around the carrier that keeps one sample of ``rows``;
all phases of the filter are one matrix product of the samples, laid out in rows, with the
taps, followed by shifted sums. The carrier is a whole number of 1024ths of the rate after
stage 1, so that turning to base band takes a table which repeats exactly for ever. Stage 2
is the sharp low-pass, again a matrix product (with a banded matrix), keeping every second
sample. Output k belongs to frame ``2 * rows * k``: both filters are symmetric about it.

Chunks of one fixed length are processed whatever blocks the source hands out, so a result
does not depend on the blocks in any bit.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rig.arrays import ComplexArray, FloatArray
from rig.phases.taps import (
    OFFSET_DB,
    SMALLEST_TAP,
    WIDTH_DB,
    half_length,
    lost_time,
    low_pass_taps,
    noise_correlation,
    noise_width,
)

SPLIT = 8  # rows of taps of stage 1; even, so that the filter is centred on a row
TURN_STEPS = 1024  # carriers are whole numbers of this fraction of the rate after stage 1
BATCH_SAMPLES = 16384  # base-band samples gathered before stage 2
LARGEST_STOP_DB = 120.0  # more than 32-bit samples can show
NULL_BETA = 8.0  # Kaiser window of a null: side lobes 60 dB down
STOP_FACTOR = 1.2  # stage 1 rejects what would fold to within this many half bands


@dataclass(frozen=True, slots=True, kw_only=True)
class DemodulationPlan:
    """What is filtered how: rates, carrier, band and filter lengths.

    ``rows`` samples become one in stage 1, ``2 * rows`` one in all. ``carrier_steps`` over
    ``TURN_STEPS`` times rate_hz / rows is the carrier. ``transition`` is the edge of stage 2
    as a share of ``half_hz``.
    """

    rate_hz: float
    rows: int
    carrier_steps: int
    half_hz: float
    transition: float
    stop_db: float

    @property
    def step_frames(self) -> int:
        """Frames between two outputs."""
        return 2 * self.rows

    @property
    def inner_rate_hz(self) -> float:
        """Rate after stage 1, Hz."""
        return self.rate_hz / self.rows

    @property
    def carrier_hz(self) -> float:
        """Frequency that becomes zero, Hz."""
        return self.carrier_steps / TURN_STEPS * self.inner_rate_hz

    @property
    def stage_half(self) -> int:
        """Taps of stage 2 on each side of its middle."""
        return half_length(self.transition * self.half_hz / self.inner_rate_hz, self.stop_db)

    @property
    def reach_frames(self) -> int:
        """Frames on each side of an output that it depends on."""
        return (self.stage_half + SPLIT // 2) * self.rows

    def carrier_turns(self, first: int, count: int) -> FloatArray:
        """Return the turns the carrier has made at ``count`` outputs from ``first`` on."""
        steps = np.arange(first, first + count, dtype=np.int64) * (2 * self.carrier_steps)
        return np.asarray((steps // TURN_STEPS) + (steps % TURN_STEPS) / TURN_STEPS)


def rows_for(rate_hz: float, half_hz: float) -> int:
    """Return how many frames stage 1 may take as one: the rate after it is >= 8 half bands."""
    rows = max(1, int(rate_hz / (8.0 * half_hz)))
    return rows // 8 * 8 if rows >= 8 else rows


def carrier_steps(rate_hz: float, rows: int, line_hz: float) -> int:
    """Return the carrier nearest to a line, in steps of the rate after stage 1."""
    return max(1, round(line_hz * rows / rate_hz * TURN_STEPS))


def stage_one_taps(plan: DemodulationPlan) -> ComplexArray:
    """Return the band-pass taps of stage 1, shape (SPLIT * rows,), centred on tap SPLIT/2 * rows.

    The gain is brought to zero at zero frequency, at the image of the carrier and at its
    harmonics 2 and 3 where stage 1 must reject them, so that an offset of any size leaves
    nothing behind and a strong image or harmonic next to nothing.
    """
    half = SPLIT * plan.rows // 2 - 1
    full = np.zeros(SPLIT * plan.rows, dtype=complex)
    if plan.rows == 1:
        full[SPLIT // 2] = 1.0
        return full
    stop = 1.0 / plan.rows - STOP_FACTOR * plan.half_hz / plan.rate_hz
    width = stop - plan.half_hz / plan.rate_hz
    stop_db = min(OFFSET_DB + WIDTH_DB * 2 * half * width, LARGEST_STOP_DB)
    low = low_pass_taps(stop - width / 2.0, half, stop_db)
    carrier = plan.carrier_steps / (TURN_STEPS * plan.rows)
    offsets = [n * carrier for n in (-2, -1, 1, 2) if abs(n) * carrier >= stop]
    full[1:] = _with_nulls(low, offsets) * np.exp(
        -2j * math.pi * carrier * np.arange(-half, half + 1)
    )
    return _without_small(full)


def _with_nulls(taps: FloatArray, offsets: list[float]) -> ComplexArray:
    """Return taps with gain zero at offsets from the carrier, all of them in the stop band.

    What is added there is as small as the gain that it removes.
    """
    half = taps.size // 2
    index = np.arange(-half, half + 1)
    window = np.kaiser(taps.size, NULL_BETA)
    probes = [np.exp(2j * math.pi * offset * index) for offset in offsets]
    nulled: ComplexArray = taps.astype(complex)
    # The windows overlap a little, so the nulls are gone through more than once.
    for _ in range(4):
        for probe in probes:
            nulled = nulled - (nulled @ probe) / window.sum() * window * probe.conj()
    return nulled


def _without_small(taps: ComplexArray) -> ComplexArray:
    floor = SMALLEST_TAP * np.abs(taps).max()
    real = np.where(np.abs(taps.real) < floor, 0.0, taps.real)
    imag = np.where(np.abs(taps.imag) < floor, 0.0, taps.imag)
    return np.asarray(real + 1j * imag)


class StageOne:
    """Band-pass and decimation by ``rows``: samples in, base-band samples out.

    Output j is centred on frame j * rows; the last ``SPLIT / 2`` rows wait for more samples.
    """

    def __init__(self, plan: DemodulationPlan, real: type[Any]) -> None:
        self._rows = plan.rows
        self._real = np.dtype(real)
        self._complex = np.result_type(real, np.complex64)
        taps = stage_one_taps(plan).reshape(SPLIT, plan.rows)
        # Columns: real and imaginary part of each row of taps, so the product is complex.
        matrix = np.empty((plan.rows, SPLIT, 2))
        matrix[:, :, 0], matrix[:, :, 1] = taps.real.T, taps.imag.T
        self._matrix = np.ascontiguousarray(matrix.reshape(plan.rows, 2 * SPLIT), dtype=real)
        steps = np.arange(TURN_STEPS) * plan.carrier_steps % TURN_STEPS
        self._turns = np.exp(-2j * math.pi * steps / TURN_STEPS).astype(self._complex)
        self._long_turns = self._turns
        # Silence before the first frame: output 0 is centred on row 0.
        self._tail = np.zeros((SPLIT - 1, SPLIT), dtype=self._complex)
        self._skip = SPLIT // 2 - 1
        self._out = 0
        self._rows_seen = 0
        self.bad_rows: list[NDArray[np.int64]] = []

    def feed(self, samples: NDArray[Any]) -> NDArray[Any]:
        """Return the base-band samples that a chunk (whole rows) completes."""
        table = samples.reshape(-1, self._rows)
        parts = self._products(table)
        every = np.concatenate([self._tail, parts])
        count = len(table)
        # Row r of the output window p uses product column p of row r + p.
        total = every[0:count, 0].copy()
        for p in range(1, SPLIT):
            total += every[p : p + count, p]
        self._tail = every[count:].copy()
        self._rows_seen += count
        return self._turned(self._without_lead(total))

    def _products(self, table: NDArray[Any]) -> NDArray[Any]:
        parts: NDArray[Any] = (table @ self._matrix).view(self._complex)
        # A missing sample makes every product of its row non-finite, as none is skipped.
        bad = ~np.isfinite(parts[:, 0])
        if bad.any():
            self.bad_rows.append(np.flatnonzero(bad) + self._rows_seen)
            parts = parts.copy()
            parts[bad] = (_zero_filled(table[bad]) @ self._matrix).view(self._complex)
        return parts

    def _without_lead(self, total: NDArray[Any]) -> NDArray[Any]:
        lead = min(self._skip, len(total))
        self._skip -= lead
        return total[lead:]

    def _turned(self, total: NDArray[Any]) -> NDArray[Any]:
        first = self._out % TURN_STEPS
        stop = first + len(total)
        if stop > self._long_turns.size:
            self._long_turns = np.tile(self._turns, -(-stop // TURN_STEPS))
        self._out += len(total)
        total *= self._long_turns[first:stop]
        return total


def _zero_filled(table: NDArray[Any]) -> NDArray[Any]:
    return np.where(np.isfinite(table), table, table.dtype.type(0))


class StageTwo:
    """Sharp low-pass and decimation by 2 of base-band samples.

    Output k is centred on input 2 k.
    """

    def __init__(self, plan: DemodulationPlan, real: type[Any]) -> None:
        self.taps = low_pass_taps(
            plan.half_hz * (1.0 + plan.transition / 2.0) / plan.inner_rate_hz,
            plan.stage_half,
            plan.stop_db,
        )
        length = self.taps.size
        # Wider rows multiply more zeros of the band, narrower ones need more shifted sums.
        self._width = int(min(1024, max(64, 1 << (length // 8).bit_length())))
        self._spans = -(-(self._width - 2 + length) // self._width)
        self._matrix = _banded(self.taps, self._width, self._spans).astype(real)
        self._complex = np.result_type(real, np.complex64)
        # Silence before the first sample: output 0 is centred on input 0.
        self._pending = np.zeros(plan.stage_half, dtype=self._complex)
        self._tail = np.zeros((2, 0, self._spans, self._width // 2), dtype=real)

    def feed(self, samples: NDArray[Any]) -> NDArray[Any]:
        """Return the outputs that some samples complete."""
        held = np.concatenate([self._pending, samples])
        count = held.size // self._width
        self._pending = held[count * self._width :]
        if count == 0:
            return np.empty(0, dtype=self._complex)
        table = held[: count * self._width].reshape(count, self._width)
        every = np.concatenate([self._tail, self._products(table)], axis=1)
        ready = max(0, every.shape[1] - self._spans + 1)
        total = every[:, :ready, 0].copy()
        for j in range(1, self._spans):
            total += every[:, j : j + ready, j]
        self._tail = every[:, ready:].copy()
        joined = np.empty((ready, self._width // 2), dtype=self._complex)
        joined.real, joined.imag = total
        return joined.reshape(-1)

    def _products(self, table: NDArray[Any]) -> NDArray[Any]:
        """Return the products of the real and of the imaginary parts, from one multiplication."""
        both = np.concatenate([table.real, table.imag])
        products = both @ self._matrix
        return np.asarray(products.reshape(2, len(table), self._spans, self._width // 2))

    @property
    def flush_count(self) -> int:
        """How many zeros bring out everything that is held back."""
        return self.taps.size + (self._spans + 1) * self._width


def _banded(taps: FloatArray, width: int, spans: int) -> FloatArray:
    """Return the matrix (width, spans * width / 2): output q of a row takes taps from 2 q on."""
    padded = np.zeros((spans * width, width // 2))
    for q in range(width // 2):
        padded[2 * q : 2 * q + taps.size, q] = taps
    spread = padded.reshape(spans, width, width // 2).transpose(1, 0, 2)
    return np.ascontiguousarray(spread.reshape(width, spans * (width // 2)))


class Demodulator:
    """Samples of one channel in, base-band samples on the grid out; see the module."""

    def __init__(self, plan: DemodulationPlan, real: type[Any]) -> None:
        self.plan = plan
        self._first = StageOne(plan, real)
        self._second = StageTwo(plan, real)
        self._real = np.dtype(real)
        self._waiting: list[NDArray[Any]] = []
        self._waiting_size = 0
        self._parts: list[NDArray[Any]] = []

    def feed(self, samples: NDArray[Any]) -> None:
        """Take one chunk of samples, a whole number of rows."""
        inner = self._first.feed(samples)
        self._waiting.append(inner)
        self._waiting_size += inner.size
        if self._waiting_size >= BATCH_SAMPLES:
            self._sharpen()

    def _sharpen(self) -> None:
        """Send what waits through stage 2: its matrix is large, so it is used in batches."""
        self._parts.append(self._second.feed(np.concatenate(self._waiting)))
        self._waiting, self._waiting_size = [], 0

    def finish(self, count: int) -> NDArray[Any]:
        """Return the first ``count`` base-band samples; amplitude 1 gives modulus 1."""
        lead = np.zeros(self.plan.rows * SPLIT, dtype=self._real)
        self._waiting.append(self._first.feed(lead))
        self._sharpen()
        zeros = np.zeros(self._second.flush_count, dtype=self._parts[-1].dtype)
        self._parts.append(self._second.feed(zeros))
        return self._joined(count)

    def _joined(self, count: int) -> NDArray[Any]:
        """Return all parts in one array, each let go as soon as it is copied."""
        whole = np.empty(count, dtype=self._parts[-1].dtype)
        place = 0
        self._parts.reverse()
        while self._parts and place < count:
            part = self._parts.pop()[: count - place]
            # A real wave of amplitude 1 is two turning vectors of length 1/2.
            np.multiply(part, 2.0, out=whole[place : place + part.size])
            place += part.size
        return whole

    @property
    def bad_rows(self) -> NDArray[np.int64]:
        """Rows of stage 1 that held missing samples."""
        rows = self._first.bad_rows
        return np.concatenate(rows) if rows else np.empty(0, dtype=np.int64)

    @property
    def noise_hz(self) -> float:
        """Width of the rectangle that passes as much white noise as the filter, Hz."""
        return noise_width(self._second.taps) * self.plan.inner_rate_hz

    @property
    def lost_s(self) -> float:
        """Time that increments of a diffusing phase seem to miss, s; stage 1 adds nothing."""
        return lost_time(self._second.taps) / self.plan.inner_rate_hz

    @property
    def correlation_samples(self) -> float:
        """Outputs that share one independent noise value."""
        return noise_correlation(self._second.taps, 2)
