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
        finite = np.abs(samples) <= LARGEST_SAMPLE  # false for NaN too
        if not finite.all():
            samples = np.where(finite, samples, np.nan)
        present = samples if finite.all() else samples[finite]
        if present.size:
            self._top.add(present)
            self._bottom.add(-present)
            self._rail_count += int(np.count_nonzero(np.abs(present) >= self._rail))
        self._levels.add(start, samples, finite)
        self._gaps.add(start, ~finite)
        self._add_stills(start, samples)
        for cutting in self._pieces:
            cutting.add(start, samples)
        self._add_means(samples, finite)

    def _add_stills(self, start: int, samples: FloatArray) -> None:
        before = np.concatenate(([self._last], samples[:-1]))
        # The first sample of a run differs from the one before: the run starts one earlier.
        self._stills.add(start, samples == before)
        self._last = float(samples[-1])

    def _add_means(self, samples: FloatArray, finite: BoolArray) -> None:
        size = self._layout.mean
        whole = samples.size // size * size
        rows = samples[:whole].reshape(-1, size)
        present = finite[:whole].reshape(-1, size)
        count = present.sum(axis=1)
        total = np.where(present, rows, 0.0).sum(axis=1)
        done = self._means_done + count.size
        self._means[self._means_done : done] = np.where(
            count > 0, total / np.maximum(count, 1), np.nan
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

    def add(self, samples: FloatArray) -> None:
        highest = float(samples.max())
        if len(self._counts) == 2 and highest < min(self._counts):
            return
        at_top = samples == highest
        self._count(highest, int(np.count_nonzero(at_top)))
        rest = samples[~at_top]
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

    def add(self, start: int, holds: BoolArray) -> None:
        if self._open is None and not holds.any():
            return
        edges = np.diff(holds.astype(np.int8), prepend=np.int8(self._open is not None))
        rises = (start + np.flatnonzero(edges == 1)).tolist()
        falls = (start + np.flatnonzero(edges == -1)).tolist()
        starts = rises if self._open is None else [self._open, *rises]
        self._open = starts[-1] if len(starts) > len(falls) else None
        for first, last in zip(starts, falls, strict=False):
            self._close(first, last)

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


class _LevelTally:
    """Sums of each slot; the first finite sample is taken off, so that squares stay exact."""

    def __init__(self, slot: int, slots: int) -> None:
        self._slot = slot
        self._shift: float | None = None
        self._lowest, self._highest = np.full(slots, np.inf), np.full(slots, -np.inf)
        self._count, self._sum, self._square = (np.zeros(slots) for _ in range(3))
        self._cube, self._fourth = 0.0, 0.0

    def add(self, start: int, samples: FloatArray, finite: BoolArray) -> None:
        if self._shift is None and finite.any():
            self._shift = float(samples[np.argmax(finite)])
        first = start // self._slot
        size = min(self._slot, samples.size)
        whole = samples.size // size * size
        self._add_rows(first, samples[:whole].reshape(-1, size), finite[:whole].reshape(-1, size))
        if whole < samples.size:
            rest = slice(whole, None)
            self._add_rows(first + whole // size, samples[None, rest], finite[None, rest])

    def _add_rows(self, first: int, rows: FloatArray, finite: BoolArray) -> None:
        own = slice(first, first + rows.shape[0])
        shifted = np.where(finite, rows - (self._shift or 0.0), 0.0)
        lowest = np.where(finite, rows, np.inf).min(axis=1)
        highest = np.where(finite, rows, -np.inf).max(axis=1)
        self._lowest[own] = np.minimum(self._lowest[own], lowest)
        self._highest[own] = np.maximum(self._highest[own], highest)
        self._count[own] += finite.sum(axis=1)
        self._sum[own] += shifted.sum(axis=1)
        squared = shifted**2
        self._square[own] += squared.sum(axis=1)
        self._cube += float((squared * shifted).sum())
        self._fourth += float((squared**2).sum())

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
