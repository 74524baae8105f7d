"""One pass over a capture: levels, rails, gaps, standstill, and the samples for spectra.

Everything a judgement of the signals needs is gathered block by block, so that a capture of
any length costs one reading and a fixed amount of memory: about 20 MB a channel for the two
channels of a pair, less a channel for more. What the numbers mean is judged in the checks.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from rig.arrays import BoolArray, FloatArray, frozen_view
from rig.captures import BLOCK_FRAMES, Capture
from rig.spectrum import PIECES, piece_frames

SLOTS = 600  # slots of the level record: more than a figure has columns, few enough to keep
KEPT_SPANS = 1000  # gaps or standstills kept a channel; further ones are counted only
SHORTEST_STILL = 16  # equal samples in a row that may be a standstill
WORD = 8  # flags looked at together
FULL_WORD = np.uint64(0x0101010101010101)  # all 8 of them set
LARGEST_SAMPLE = 1e60  # in any unit: a larger number is a damaged one, and counts as missing
RAIL_SHARE = 0.9999  # of full scale: 16-bit files reach 0.99997 of it
SPECTRUM_SAMPLES = 1_048_576  # samples kept a channel for each spectrum, two channels
LEAST_SPECTRUM_SAMPLES = 65536


@dataclass(frozen=True, slots=True, kw_only=True)
class Span:
    """A half-open run of frames: ``start`` up to but without ``stop``."""

    start: int
    stop: int

    @property
    def frames(self) -> int:
        """Length of the run."""
        return self.stop - self.start


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SlotLevels:
    """Levels in even slots of ``frames`` frames: lowest, highest, mean, rms about the mean.

    All arrays have shape (slots,), sample units; a slot without a finite sample is NaN.
    """

    frames: int
    lowest: FloatArray
    highest: FloatArray
    mean: FloatArray
    rms: FloatArray

    def __post_init__(self) -> None:
        for name in ("lowest", "highest", "mean", "rms"):
            object.__setattr__(self, name, frozen_view(getattr(self, name)))


@dataclass(frozen=True, slots=True, kw_only=True)
class Extreme:
    """The outermost value on one side, how often it stands, and the next value inward."""

    value: float
    count: int
    next_count: int


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ChannelSurvey:
    """What one pass gathered of one channel; numbers are in sample units.

    ``kurtosis`` is the fourth moment over the square of the second: 1.5 for a sine, 3 for
    noise, about 1 / duty cycle for pulses. ``pieces`` are spans spread over the record,
    ``middle`` one long span of its middle, and ``means`` (n,) the whole record averaged over
    runs of ``mean_frames`` frames.
    ``gap_count`` and ``still_count`` count also what ``gaps`` and ``stills`` no longer keep.
    """

    column: int
    frame_count: int
    finite_count: int
    mean: float
    rms: float
    kurtosis: float
    top: Extreme
    bottom: Extreme
    rail_count: int
    gaps: tuple[Span, ...]
    gap_count: int
    stills: tuple[Span, ...]
    still_count: int
    slots: SlotLevels
    pieces: tuple[FloatArray, ...]
    middle: FloatArray
    means: FloatArray
    mean_frames: int

    @property
    def spans(self) -> tuple[FloatArray, ...]:
        """Samples of the whole record where it is short, else of spans spread over it."""
        if self.middle.size >= self.frame_count:
            return (self.middle,)
        return (*self.pieces, self.middle)


def survey_channels(capture: Capture, columns: Sequence[int]) -> tuple[ChannelSurvey, ...]:
    """Return what one pass over a capture gathers of some columns.

    Parameters
    ----------
    capture : Capture
    columns : sequence of int, column numbers from 0

    Raises
    ------
    CaptureError
        If the file turns out to be damaged while it is read.
    """
    layout = _layout(capture.frame_count, len(columns))
    tallies = [_Tally(capture, column, layout) for column in columns]
    start = 0
    for block in capture.blocks(columns, block_frames=layout.block):
        for row, tally in enumerate(tallies):
            tally.add(start, block[row].astype(float))
        start += block.shape[1]
    return tuple(tally.survey() for tally in tallies)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Layout:
    """Frames a block, a slot and a mean; a block holds whole slots or lies within one."""

    block: int
    slot: int
    mean: int
    spectrum_samples: int


def _layout(frame_count: int, columns: int) -> _Layout:
    samples = max(LEAST_SPECTRUM_SAMPLES, 2 * SPECTRUM_SAMPLES // max(2, columns))
    mean = -(-frame_count // samples)
    slot = -(-frame_count // (SLOTS * mean)) * mean
    if slot <= BLOCK_FRAMES:
        block = BLOCK_FRAMES // slot * slot
    else:
        block = max(1, BLOCK_FRAMES // mean) * mean
        slot = -(-slot // block) * block
    return _Layout(block=block, slot=slot, mean=mean, spectrum_samples=samples)


class _Tally:
    """Running sums of one column over the blocks of a pass."""

    def __init__(self, capture: Capture, column: int, layout: _Layout) -> None:
        self._column = column
        self._frames = capture.frame_count
        self._layout = layout
        scale = capture.channels[column].full_scale
        self._rail = math.inf if scale is None else RAIL_SHARE * abs(scale)
        self._levels = _LevelTally(layout.slot, -(-capture.frame_count // layout.slot))
        self._top, self._bottom = _ExtremeTally(), _ExtremeTally()
        self._rail_count = 0
        self._gaps = _SpanTally(1)
        self._stills = _SpanTally(SHORTEST_STILL)
        self._last = math.nan
        self._pieces = [_Cutting(start, stop) for start, stop in _cuttings(self._frames, layout)]
        # Kept whole from the start: small pieces between blocks would scatter the memory.
        self._means = np.full(self._frames // layout.mean, np.nan)
        self._means_done = 0

    def add(self, start: int, samples: FloatArray) -> None:
        lowest, highest = float(samples.min()), float(samples.max())
        finite = None
        if not (lowest >= -LARGEST_SAMPLE and highest <= LARGEST_SAMPLE):  # true for NaN too
            finite = np.abs(samples) <= LARGEST_SAMPLE
            samples = np.where(finite, samples, np.nan)
        self._add_extremes(samples if finite is None else samples[finite])
        self._levels.add(start, samples, finite)
        self._gaps.add(start, None if finite is None else ~finite)
        self._add_stills(start, samples)
        for cutting in self._pieces:
            cutting.add(start, samples)
        self._add_means(samples, finite)

    def _add_extremes(self, present: FloatArray) -> None:
        if not present.size:
            return
        lowest, highest = float(present.min()), float(present.max())
        self._top.add(present, highest, 1.0)
        self._bottom.add(present, -lowest, -1.0)
        if max(-lowest, highest) >= self._rail:
            self._rail_count += int(np.count_nonzero(np.abs(present) >= self._rail))

    def _add_stills(self, start: int, samples: FloatArray) -> None:
        # The first sample of a run differs from the one before: the run starts one earlier.
        holds = np.empty(samples.size, dtype=bool)
        holds[0] = samples[0] == self._last
        np.equal(samples[1:], samples[:-1], out=holds[1:])
        self._stills.add(start, holds)
        self._last = float(samples[-1])

    def _add_means(self, samples: FloatArray, finite: BoolArray | None) -> None:
        size = self._layout.mean
        whole = samples.size // size * size
        rows = samples[:whole].reshape(-1, size)
        done = self._means_done + rows.shape[0]
        self._means[self._means_done : done] = _row_means(
            rows, None if finite is None else finite[:whole].reshape(-1, size)
        )
        self._means_done = done

    def survey(self) -> ChannelSurvey:
        gaps, stills = self._gaps.spans(self._frames), self._stills.spans(self._frames)
        mean, rms, kurtosis, finite_count = self._levels.whole()
        *pieces, middle = [cutting.samples() for cutting in self._pieces]
        return ChannelSurvey(
            column=self._column,
            frame_count=self._frames,
            finite_count=finite_count,
            mean=mean,
            rms=rms,
            kurtosis=kurtosis,
            top=self._top.extreme(1.0),
            bottom=self._bottom.extreme(-1.0),
            rail_count=self._rail_count,
            gaps=gaps,
            gap_count=self._gaps.count,
            stills=tuple(Span(start=max(0, span.start - 1), stop=span.stop) for span in stills),
            still_count=self._stills.count,
            slots=self._levels.slots(),
            pieces=tuple(pieces),
            middle=middle,
            means=self._means[: self._means_done],
            mean_frames=self._layout.mean,
        )


def _row_means(rows: FloatArray, finite: BoolArray | None) -> FloatArray:
    """Return the mean of each row, missing samples left out; NaN where all are missing."""
    if finite is None and rows.shape[1] == 1:
        return rows[:, 0]
    if finite is None:
        # A product: numpy's own sum over short rows costs ten times as much.
        return np.asarray(rows @ np.full(rows.shape[1], 1.0 / rows.shape[1]))
    count = finite.sum(axis=1)
    total = np.where(finite, rows, 0.0).sum(axis=1)
    return np.where(count > 0, total / np.maximum(count, 1), np.nan)


def _cuttings(frame_count: int, layout: _Layout) -> list[tuple[int, int]]:
    """Return the spans of frames kept for spectra: the pieces, and the middle last."""
    length = piece_frames(frame_count, layout.spectrum_samples // 2, PIECES)
    starts = sorted(set(np.linspace(0, frame_count - length, PIECES).astype(int).tolist()))
    long = min(frame_count, layout.spectrum_samples // 2)
    first = (frame_count - long) // 2
    return [*((start, start + length) for start in starts), (first, first + long)]


class _Cutting:
    """A span of frames copied out of the blocks as they pass."""

    def __init__(self, start: int, stop: int) -> None:
        self._start, self._stop = start, stop
        self._kept = np.full(stop - start, np.nan)

    def add(self, start: int, samples: FloatArray) -> None:
        first, last = max(self._start - start, 0), min(self._stop - start, samples.size)
        if first < last:
            self._kept[start + first - self._start : start + last - self._start] = samples[
                first:last
            ]

    def samples(self) -> FloatArray:
        return self._kept


class _ExtremeTally:
    """The two highest values so far and how often each stands."""

    def __init__(self) -> None:
        self._counts: dict[float, int] = {}

    def add(self, samples: FloatArray, highest: float, sign: float) -> None:
        """Take samples in, ``highest`` the largest of sign * samples."""
        least = min(self._counts) if len(self._counts) == 2 else -math.inf
        if highest < least:
            return
        outer = samples if least == -math.inf else samples[sign * samples >= least]
        outer = sign * outer
        at_top = outer == highest
        self._count(highest, int(np.count_nonzero(at_top)))
        rest = outer[~at_top]
        if rest.size:
            second = float(rest.max())
            self._count(second, int(np.count_nonzero(rest == second)))
        self._counts = dict(sorted(self._counts.items(), reverse=True)[:2])

    def _count(self, value: float, count: int) -> None:
        self._counts[value] = self._counts.get(value, 0) + count

    def extreme(self, sign: float) -> Extreme:
        if not self._counts:
            return Extreme(value=math.nan, count=0, next_count=0)
        (value, count), *rest = self._counts.items()
        return Extreme(value=sign * value, count=count, next_count=rest[0][1] if rest else 0)


class _SpanTally:
    """Runs of frames for which something holds, at least ``shortest`` frames long."""

    def __init__(self, shortest: int) -> None:
        self._shortest = shortest
        self._open: int | None = None
        self._kept: list[Span] = []
        self.count = 0

    def add(self, start: int, holds: BoolArray | None) -> None:
        """Take the next frames in; None says that it holds for none of them."""
        if self._open is None and (holds is None or not self._may_matter(holds)):
            return
        if holds is None:
            assert self._open is not None
            self._close(self._open, start)
            self._open = None
            return
        edges = np.diff(holds.astype(np.int8), prepend=np.int8(self._open is not None))
        starts = start + np.flatnonzero(edges == 1)
        if self._open is not None:
            starts = np.concatenate(([self._open], starts))
        falls = start + np.flatnonzero(edges == -1)
        self._open = int(starts[-1]) if starts.size > falls.size else None
        long = np.flatnonzero(falls - starts[: falls.size] >= self._shortest)
        for first, last in zip(starts[long].tolist(), falls[long].tolist(), strict=True):
            self._close(first, last)

    def _may_matter(self, holds: BoolArray) -> bool:
        """Tell whether a run can be long enough, or goes on into the next frames.

        A run of twice a word fills a word of 8 flags; this looks at 8 at a time.
        """
        if self._shortest < 2 * WORD or holds[-1] or holds.size < WORD:
            return bool(holds.any())
        words = holds[: holds.size // WORD * WORD].view(np.uint64)
        return bool((words == FULL_WORD).any())

    def _close(self, first: int, last: int) -> None:
        if last - first >= self._shortest:
            self.count += 1
            self._kept.append(Span(start=first, stop=last))
        if len(self._kept) > 2 * KEPT_SPANS:
            self._thin()

    def _thin(self) -> None:
        longest = sorted(self._kept, key=lambda span: -span.frames)[:KEPT_SPANS]
        self._kept = sorted(longest, key=lambda span: span.start)

    def spans(self, frame_count: int) -> tuple[Span, ...]:
        if self._open is not None:
            self._close(self._open, frame_count)
            self._open = None
        if len(self._kept) > KEPT_SPANS:
            self._thin()
        return tuple(self._kept)


def _row_spans(count: int, size: int) -> list[tuple[int, int]]:
    """Return (first sample, rows) of the whole rows of some samples, and of what is left."""
    whole, rest = divmod(count, size)
    return [(0, whole), (whole * size, 1)] if rest else [(0, whole)]


class _LevelTally:
    """Sums of each slot; the first finite sample is taken off, so that squares stay exact."""

    def __init__(self, slot: int, slots: int) -> None:
        self._slot = slot
        self._shift: float | None = None
        self._lowest, self._highest = np.full(slots, np.inf), np.full(slots, -np.inf)
        self._count, self._sum, self._square = (np.zeros(slots) for _ in range(3))
        self._cube, self._fourth = 0.0, 0.0

    def add(self, start: int, samples: FloatArray, finite: BoolArray | None) -> None:
        """Take samples in; ``finite`` says which are there, None that all are."""
        if self._shift is None and (finite is None or finite.any()):
            self._shift = float(samples[0 if finite is None else np.argmax(finite)])
        first = start // self._slot
        size = min(self._slot, samples.size)
        for begin, width in _row_spans(samples.size, size):
            rows = samples[begin : begin + width * size].reshape(width, -1)
            there = None if finite is None else finite[begin : begin + rows.size].reshape(width, -1)
            self._add_rows(slice(first, first + width), rows, there)
            first += width

    def _add_rows(self, own: slice, rows: FloatArray, finite: BoolArray | None) -> None:
        shifted = rows - (self._shift or 0.0)
        low, high, count = rows, rows, np.asarray(rows.shape[1])
        if finite is not None:
            shifted = np.where(finite, shifted, 0.0)
            low, high = np.where(finite, rows, np.inf), np.where(finite, rows, -np.inf)
            count = finite.sum(axis=1)
        self._lowest[own] = np.minimum(self._lowest[own], low.min(axis=1))
        self._highest[own] = np.maximum(self._highest[own], high.max(axis=1))
        self._count[own] += count
        self._sum[own] += shifted.sum(axis=1)
        squared = shifted * shifted
        self._square[own] += squared.sum(axis=1)
        flat = squared.reshape(-1)
        self._cube += float(flat @ shifted.reshape(-1))
        self._fourth += float(flat @ flat)

    def whole(self) -> tuple[float, float, float, int]:
        """Return mean, rms about zero, kurtosis and count of the finite samples."""
        count = float(self._count.sum())
        if count == 0:
            return math.nan, math.nan, math.nan, 0
        mean, square = self._sum.sum() / count, self._square.sum() / count
        shift = self._shift or 0.0
        spread = max(0.0, square - mean**2)
        rms = math.sqrt(spread + (shift + mean) ** 2)
        return shift + mean, rms, self._kurtosis(count, mean, spread), int(count)

    def _kurtosis(self, count: float, mean: float, spread: float) -> float:
        if not spread**2 > 0:
            return math.nan
        third, fourth = self._cube / count, self._fourth / count
        square = spread + mean**2
        central = fourth - 4.0 * mean * third + 6.0 * mean**2 * square - 3.0 * mean**4
        return central / spread**2

    def slots(self) -> SlotLevels:
        empty = self._count == 0
        count = np.maximum(self._count, 1)
        mean, square = self._sum / count, self._square / count
        rms = np.sqrt(np.maximum(0.0, square - mean**2))
        parts = (self._lowest, self._highest, mean + (self._shift or 0.0), rms)
        lowest, highest, level, spread = (np.where(empty, np.nan, part) for part in parts)
        return SlotLevels(frames=self._slot, lowest=lowest, highest=highest, mean=level, rms=spread)
