"""Two-stage complex band-pass and decimation in one pass, as matrix products.

Stage 1 is a complex Kaiser band-pass around the carrier that keeps one sample of ``rows``;
all phases of the filter are one matrix product of the taps with the samples, laid out in
rows, followed by shifted sums. The carrier is a whole number of 1024ths of the rate after
stage 1, so that turning to base band takes a table which repeats exactly for ever. Stage 2
is the sharp low-pass, again a matrix product (with a banded matrix), keeping every second
sample. Output k belongs to frame ``2 * rows * k``: both filters are symmetric about it.

Real and imaginary parts stand apart, each in one piece, from the samples to the angle: sums
and angles of neighbours in memory are made several at a time by the processor. What is kept
of an output is its angle, counted on in turns, and its length.

Chunks of one fixed length are processed whatever blocks the source hands out, so a result
does not depend on the blocks in any bit.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rig.angles import TURN_RAD
from rig.arrays import ComplexArray, FloatArray
from rig.longarrays import SampleRow
from rig.phases.taps import (
    OFFSET_DB,
    SMALLEST_TAP,
    WIDTH_DB,
    half_length,
    kaiser_window,
    lost_time,
    low_pass_taps,
    noise_correlation,
    noise_width,
)

SPLIT = 8  # rows of taps of stage 1; even, so that the filter is centred on a row
TURN_STEPS = 1024  # carriers are whole numbers of this fraction of the rate after stage 1
BATCH_SAMPLES = 8192  # base-band samples taken through stage 2 at once
ROW_SAMPLES = 64  # of them whose outputs share one row of the matrix product
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
        # A whole number over a power of two: exact below 2**53 steps.
        return np.arange(first, first + count, dtype=float) * (2 * self.carrier_steps / TURN_STEPS)


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
    window = kaiser_window(half, NULL_BETA)
    total = float(window.sum())
    probes = [np.exp(2j * math.pi * offset * index) for offset in offsets]
    nulled: ComplexArray = taps.astype(complex)
    # The windows overlap a little, so the nulls are gone through more than once.
    for _ in range(4):
        for probe in probes:
            nulled = nulled - (nulled @ probe) / total * window * probe.conj()
    return nulled


def _without_small(taps: ComplexArray) -> ComplexArray:
    floor = SMALLEST_TAP * np.abs(taps).max()
    real = np.where(np.abs(taps.real) < floor, 0.0, taps.real)
    imag = np.where(np.abs(taps.imag) < floor, 0.0, taps.imag)
    return np.asarray(real + 1j * imag)


class BaseBandBuffer:
    """Samples after stage 1, real parts in row 0, imaginary in row 1, as stage 2 takes them.

    ``filled`` of them are there. The first ``held`` stand before those of the next batch:
    stage 2 looks back at them. Those from ``turned`` on are still at the carrier.
    """

    def __init__(self, held: int, silence: int, real: np.dtype[Any]) -> None:
        self.held, self.filled, self.turned = held, silence, silence
        self.samples = np.zeros((2, held + 2 * BATCH_SAMPLES), dtype=real)

    def next(self, count: int) -> NDArray[Any]:
        """Return the place of the next samples, shape (2, count); they count as filled."""
        begin, self.filled = self.filled, self.filled + count
        return self.samples[:, begin : self.filled]

    @property
    def room(self) -> int:
        """How many more samples may be added."""
        return int(self.samples.shape[1]) - self.filled

    def let_go(self) -> None:
        """Leave out the oldest batch; what is not filled is silence."""
        stop = max(self.filled, self.held + BATCH_SAMPLES)
        self.samples[:, : stop - BATCH_SAMPLES] = self.samples[:, BATCH_SAMPLES:stop].copy()
        self.samples[:, stop - BATCH_SAMPLES : stop] = 0.0
        self.filled = max(self.filled - BATCH_SAMPLES, self.held)
        self.turned -= BATCH_SAMPLES


class StageOne:
    """Band-pass and decimation by ``rows``: samples in, base-band samples out.

    Output j is centred on frame j * rows; the last ``SPLIT / 2`` rows wait for more samples.
    """

    def __init__(self, plan: DemodulationPlan, real: np.dtype[Any]) -> None:
        taps = stage_one_taps(plan).reshape(SPLIT, plan.rows)
        # Real and imaginary part of each row of taps, so the product is complex.
        self._matrix = np.concatenate([taps.real, taps.imag]).astype(real)
        steps = np.arange(TURN_STEPS) * plan.carrier_steps % TURN_STEPS
        table = np.exp(-2j * math.pi * steps / TURN_STEPS)
        long = np.tile(table, (BATCH_SAMPLES + plan.stage_half) // TURN_STEPS + 2)
        self._cosine, self._sine = long.real.astype(real), long.imag.astype(real)
        # Silence before the first frame: output 0 is centred on row 0.
        self._products = np.zeros((2, SPLIT, SPLIT - 1), dtype=real)
        self._windows = self._products
        self._lead = SPLIT // 2 - 1
        self._turned = 0
        self._rows_seen = 0
        self.bad_rows: list[NDArray[np.int64]] = []

    def feed(self, table: NDArray[Any], out: BaseBandBuffer) -> None:
        """Add what some rows of samples complete."""
        count = len(table)
        self._make_room(count)
        self._multiply(table, self._products.reshape(2 * SPLIT, -1)[:, SPLIT - 1 :])
        sums = self._windows
        if self._lead:
            # Of the first outputs, centred before the record, nothing is kept.
            skip, self._lead = min(self._lead, count), max(0, self._lead - count)
            sums, count = sums[:, :, skip:], count - skip
        np.add.reduce(sums, axis=1, out=out.next(count))
        self._rows_seen += len(table)

    def _make_room(self, count: int) -> None:
        """Bring the last products to the front of a table for so many rows more.

        Row r of an output's window of rows meets row r of the taps: the products of part p
        stand p places further on, which a view of the table with a step of its own shows.
        """
        last = self._products[:, :, self._products.shape[2] - SPLIT + 1 :].copy()
        if self._products.shape[2] != SPLIT - 1 + count:
            self._products = np.empty((2, SPLIT, SPLIT - 1 + count), dtype=last.dtype)
            part, row, place = self._products.strides
            self._windows = np.lib.stride_tricks.as_strided(
                self._products, (2, SPLIT, count), (part, row + place, place)
            )
        self._products[:, :, : SPLIT - 1] = last

    def _multiply(self, table: NDArray[Any], out: NDArray[Any]) -> None:
        np.matmul(self._matrix, table.T, out=out)
        # A missing sample makes every product of its row non-finite, as none is skipped.
        bad = ~np.isfinite(out[0])
        if bad.any():
            self.bad_rows.append(np.flatnonzero(bad) + self._rows_seen)
            out[:, bad] = self._matrix @ _zero_filled(table[bad]).T

    def turn(self, real: NDArray[Any], imag: NDArray[Any]) -> None:
        """Bring the next samples from the carrier to zero frequency, in place."""
        first = self._turned % TURN_STEPS
        cosine, sine = (part[first : first + real.size] for part in (self._cosine, self._sine))
        self._turned += real.size
        across = real * sine
        real *= cosine
        real -= imag * sine
        imag *= cosine
        imag += across


def _zero_filled(table: NDArray[Any]) -> NDArray[Any]:
    return np.where(np.isfinite(table), table, table.dtype.type(0))


class StageTwo:
    """Sharp low-pass and decimation by 2 of base-band samples.

    Output k is centred on input 2 k. Inputs are laid out in overlapping rows, one every
    ``ROW_SAMPLES``; each row times the banded matrix gives the outputs that begin in it.
    """

    def __init__(self, plan: DemodulationPlan, real: np.dtype[Any]) -> None:
        self.taps = low_pass_taps(
            plan.half_hz * (1.0 + plan.transition / 2.0) / plan.inner_rate_hz,
            plan.stage_half,
            plan.stop_db,
        )
        # A real wave of amplitude 1 is two turning vectors of length 1/2.
        self._matrix = _banded(2.0 * self.taps, ROW_SAMPLES).astype(real)
        self._rows = np.empty((2, BATCH_SAMPLES // ROW_SAMPLES, len(self._matrix)), dtype=real)
        self.looks_back = len(self._matrix) - ROW_SAMPLES

    def feed(self, samples: NDArray[Any], count: int) -> NDArray[Any]:
        """Return the first ``count`` outputs of a batch and what lies before it, shape (2, n)."""
        rows = -(-2 * count // ROW_SAMPLES)
        part, line = samples.strides
        shape = (2, rows, len(self._matrix))
        windows = np.lib.stride_tricks.as_strided(samples, shape, (part, ROW_SAMPLES * line, line))
        # Overlapping rows are copied: the product of a matrix with itself shifted is no
        # product that the library knows.
        laid = self._rows[:, :rows]
        np.copyto(laid, windows)
        found: NDArray[Any] = laid @ self._matrix
        return found.reshape(2, -1)[:, :count]


def _banded(taps: FloatArray, width: int) -> FloatArray:
    """Return the matrix (width + taps - 2, width / 2): output q of a row takes taps from 2 q on."""
    matrix = np.zeros((width - 2 + taps.size, width // 2))
    for q in range(width // 2):
        matrix[2 * q : 2 * q + taps.size, q] = taps
    return matrix


class TurnCounter:
    """Complex numbers in, their angles in turns made continuous and their lengths out.

    Each step is brought within half a turn; whole turns are counted as integers, so that
    nothing is lost over a long record.
    """

    def __init__(self, count: int, real: np.dtype[Any]) -> None:
        self.turns = SampleRow(count, np.float64)
        self.modulus = SampleRow(count, real)
        self._complex = np.result_type(real, np.complex64)
        self._whole, self._last = 0, 0.0

    def feed(self, real: NDArray[Any], imag: NDArray[Any]) -> None:
        """Take the next numbers."""
        part = np.arctan2(imag, real).astype(np.float64)
        part /= TURN_RAD
        if self.turns.filled == 0:
            self._last = float(part[0])
        steps = np.empty(part.size)
        steps[0] = self._last - part[0]
        np.subtract(part[:-1], part[1:], out=steps[1:])
        np.rint(steps, out=steps)
        self._last = float(part[-1])
        # Samples too large for any work end as no numbers: they are refused by their size.
        with np.errstate(invalid="ignore"):
            counted = np.cumsum(steps.astype(np.int64))
        counted += self._whole
        self._whole = int(counted[-1])
        part += counted
        self.turns.append(part)
        both = np.empty(part.size, dtype=self._complex)
        both.real, both.imag = real, imag
        self.modulus.append(np.abs(both))


class Demodulator:
    """Samples of one channel in, base-band samples on the grid out; see the module."""

    def __init__(self, plan: DemodulationPlan, real: type[Any], count: int) -> None:
        self.plan, self._count = plan, count
        kind = np.dtype(real)
        self._first = StageOne(plan, kind)
        self._second = StageTwo(plan, kind)
        # Silence before the first sample: output 0 is centred on input 0.
        self._buffer = BaseBandBuffer(self._second.looks_back, plan.stage_half, kind)
        self._found = TurnCounter(count, kind)

    def feed(self, samples: NDArray[Any]) -> None:
        """Take one chunk of samples, a whole number of rows."""
        table = samples.reshape(-1, self.plan.rows)
        while len(table):
            some = table[: self._buffer.room]
            self._first.feed(some, self._buffer)
            table = table[len(some) :]
            while self._buffer.filled >= self._buffer.held + BATCH_SAMPLES:
                self._sharpen()

    def _sharpen(self) -> None:
        """Take one batch through stage 2: its matrix is large, so it is used in batches."""
        buffer = self._buffer
        stop = buffer.held + BATCH_SAMPLES
        part = buffer.samples[:, buffer.turned : stop]
        self._first.turn(part[0], part[1])
        buffer.turned = stop
        left = self._count - self._found.turns.filled
        if left > 0:
            found = self._second.feed(buffer.samples, min(left, BATCH_SAMPLES // 2))
            self._found.feed(found[0], found[1])
        buffer.let_go()

    def finish(self) -> tuple[SampleRow, SampleRow]:
        """Return the turns of the base band on the grid, and its modulus: 1 for amplitude 1."""
        self.feed(np.zeros(self.plan.rows * SPLIT, dtype=self._buffer.samples.dtype))
        while self._found.turns.filled < self._count:
            # What is not completed by now is silence after the record.
            self._sharpen()
        return self._found.turns, self._found.modulus

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
