"""Which of the named arrays in a file are the signals, which is their time, and the rate.

Shared by the formats that hold many named arrays: NPZ, MAT and HDF5. None of them has a
convention of names, so a choice that is not forced is refused with the list of what is there.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rig.arrays import SampleBlock
from rig.captures import BLOCK_FRAMES, BlockSource, Capture, CaptureChannel
from rig.readers.options import ReadOptions
from rig.readers.refusals import printable, refusal, refuse_empty, settle_rate
from rig.readers.timebase import TimeBase, TimeFit

LEAST_FRAMES = 4  # shorter arrays are settings, not signals
CHANNELS_MAX = 4096
RATE_NAMES = (
    "rate_hz",
    "sample_rate_hz",
    "sample_rate",
    "samplerate",
    "sampling_rate",
    "sampling_frequency",
    "fs",
    "sr",
    "rate",
)
INTERVAL_NAMES = ("dt", "dt_s", "sample_interval", "sampling_interval", "sample_interval_s")
_TIME_NAME = re.compile(r"(^|[/.])(t|time|times|t_s|time_s|timestamps?)$", re.I)


@dataclass(frozen=True, slots=True, kw_only=True)
class ArrayEntry:
    """One named thing in a file; ``obstacle`` says why it is no array of numbers, if it is none."""

    name: str
    shape: tuple[int, ...] = ()
    obstacle: str = ""

    @property
    def is_signal(self) -> bool:
        """True for numbers with one axis that can be time."""
        used = [size for size in self.shape if size > 1]
        axes = len(self.shape) <= 2 and 1 <= len(used)
        return not self.obstacle and axes and max(used) >= LEAST_FRAMES

    @property
    def length(self) -> int:
        """Number of frames: the longest axis."""
        return max(self.shape, default=0)

    @property
    def text(self) -> str:
        """Name and shape, as listed in a refusal."""
        return f"{printable(self.name)} ({'x'.join(str(size) for size in self.shape)})"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ArraySignals:
    """The channels one array holds, and where their blocks come from."""

    frame_count: int
    channels: tuple[CaptureChannel, ...]
    source: BlockSource
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ArrayBox:
    """A file of named arrays: its entries, its scalar settings, and how to lay out an entry."""

    path: str
    format_text: str
    entries: tuple[ArrayEntry, ...]
    scalars: Mapping[str, float]
    lay_out: Callable[[ArrayEntry], ArraySignals]
    notes: tuple[str, ...] = ()


def capture_from_box(box: ArrayBox, options: ReadOptions) -> Capture:
    """Return the capture in a file of named arrays.

    Raises
    ------
    CaptureError
        If the choice of arrays is not forced, or nothing states a rate.
    """
    signals, time = choose_arrays(box, options)
    parts = [box.lay_out(entry) for entry in signals]
    notes = box.notes
    if len(parts) > 1:
        notes += (f"{len(parts)} arrays of equal length are taken as channels",)
        parts = [_named_after(part, entry) for part, entry in zip(parts, signals, strict=True)]
    for part in parts:
        notes += part.notes
    channels = tuple(channel for part in parts for channel in part.channels)
    refuse_empty(box.path, parts[0].frame_count, len(channels))
    base = None if time is None else _fit_times(box, time, options)
    rate_hz, rate_u_hz, rate_notes = _settle_box_rate(box, signals, base, options)
    return Capture(
        path=box.path,
        format=box.format_text,
        rate_hz=rate_hz,
        rate_u_hz=rate_u_hz,
        frame_count=parts[0].frame_count,
        channels=channels,
        source=parts[0].source if len(parts) == 1 else JoinedSource(parts=tuple(parts)),
        notes=rate_notes + notes,
    )


def choose_arrays(
    box: ArrayBox, options: ReadOptions
) -> tuple[tuple[ArrayEntry, ...], ArrayEntry | None]:
    """Return the arrays that are signals and the one that is their time, if there is one."""
    if options.dataset is not None:
        signals = _stated_arrays(box, options.dataset)
    else:
        signals = tuple(e for e in box.entries if e.is_signal and not _TIME_NAME.search(e.name))
        signals = signals or tuple(entry for entry in box.entries if entry.is_signal)
    _refuse_unforced(box, signals)
    time = None
    if not options.sets_times_aside:
        length = signals[0].length
        times = (e for e in box.entries if e.is_signal and _TIME_NAME.search(e.name))
        time = next((e for e in times if e.length == length and e not in signals), None)
    return signals, time


def _stated_arrays(box: ArrayBox, wanted: str) -> tuple[ArrayEntry, ...]:
    """Return the array of a name, or the arrays of several names with commas between."""
    by_name = {entry.name: entry for entry in box.entries}
    by_name |= {entry.name.lstrip("/"): entry for entry in box.entries}
    names = [wanted] if wanted in by_name else [name.strip() for name in wanted.split(",")]
    for name in names:
        if name not in by_name:
            what = f"no dataset '{printable(name)}'; there is {_listed(box.entries)}"
            raise refusal(box.path, what, "Pass --dataset with one of them")
        entry = by_name[name]
        if not entry.is_signal:
            why = entry.obstacle or f"has the shape {entry.shape}, no one axis for time"
            what = f'variable "{printable(name)}" {why}'
            raise refusal(box.path, what, "Save arrays of shape (samples, channels)")
    return tuple(by_name[name] for name in names)


def _listed(entries: Sequence[ArrayEntry]) -> str:
    texts = [entry.text for entry in entries[:12]]
    return ", ".join(texts) + (", ..." if len(entries) > 12 else "") if texts else "nothing"


def _refuse_unforced(box: ArrayBox, signals: Sequence[ArrayEntry]) -> None:
    if not signals:
        obstacles = [entry for entry in box.entries if entry.obstacle]
        if obstacles:
            what = f'variable "{printable(obstacles[0].name)}" {obstacles[0].obstacle}'
            raise refusal(box.path, what, "Save plain numeric arrays")
        what = f"holds no array of numbers with an axis for time; there is {_listed(box.entries)}"
        raise refusal(box.path, what, "Save an array of shape (samples, channels)")
    flat = all(sum(size > 1 for size in entry.shape) == 1 for entry in signals)
    same = len({entry.length for entry in signals}) == 1
    if len(signals) > 1 and not (flat and same):
        what = f"holds several arrays; choose --dataset: {_listed(signals)}"
        raise refusal(box.path, what, "Pass --dataset NAME (or names with commas)")


def _named_after(part: ArraySignals, entry: ArrayEntry) -> ArraySignals:
    """Return the part with its one channel called after the array."""
    return replace(part, channels=(replace(part.channels[0], name=entry.name.lstrip("/")),))


def _fit_times(box: ArrayBox, time: ArrayEntry, options: ReadOptions) -> TimeBase:
    """Return the time base of an array of times; gaps in it are refused, not bridged."""
    part = box.lay_out(time)
    given_step_s = None if options.rate_hz is None else 1.0 / options.rate_hz
    fit = TimeFit(path=box.path, given_step_s=given_step_s)
    for block in part.source([0], BLOCK_FRAMES, 0, part.frame_count):
        fit.add(block[0].astype(np.float64))
    base = fit.finish()
    if base.frame_count != part.frame_count:
        what = f"times '{printable(time.name)}': {base.notes[-1] if base.notes else 'a gap'}"
        remedy = "Save one array a piece, or put NaN where samples are missing"
        raise refusal(box.path, what, remedy)
    return base


def _settle_box_rate(
    box: ArrayBox, signals: Sequence[ArrayEntry], base: TimeBase | None, options: ReadOptions
) -> tuple[float, float | None, tuple[str, ...]]:
    """Return rate, its uncertainty and notes: stated name first, then times, then known names."""
    if options.rate_attribute is not None:
        stated = _scalar_named(box, signals, (options.rate_attribute,))
        if stated is None:
            known = ", ".join(printable(name) for name in list(box.scalars)[:12]) or "none"
            what = (
                f"no attribute or scalar '{printable(options.rate_attribute)}' (there is {known})"
            )
            raise refusal(box.path, what, "Pass --rate HZ")
        rate_hz, notes = settle_rate(box.path, stated[1], options, f"'{stated[0]}'")
        return rate_hz, None, notes
    if base is not None:
        rate_hz, notes = settle_rate(box.path, base.rate_hz, options, "array of times")
        return rate_hz, base.rate_u_hz if options.rate_hz is None else None, notes + base.notes
    found = _scalar_named(box, signals, RATE_NAMES)
    if found is None:
        interval = _scalar_named(box, signals, INTERVAL_NAMES)
        if interval is not None and interval[1] != 0:
            found = (interval[0], 1.0 / interval[1])
    if found is None:
        rate_hz, notes = settle_rate(box.path, None, options, "no known name of a rate")
        return rate_hz, None, notes
    rate_hz, notes = settle_rate(box.path, found[1], options, f"'{printable(found[0])}'")
    return rate_hz, None, (*notes, f"rate taken from '{printable(found[0])}'")


def _scalar_named(
    box: ArrayBox, signals: Sequence[ArrayEntry], names: Sequence[str]
) -> tuple[str, float] | None:
    """Return the scalar of a known name: one of the signal's own attributes comes first."""
    own = signals[0].name
    for name in names:
        for key, value in sorted(box.scalars.items(), key=lambda item: not item[0].startswith(own)):
            last = re.split(r"[/.@]", key)[-1]
            if key == name or last.lower() == name.lower():
                return key, value
    return None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class JoinedSource:
    """Block source over arrays of one channel each."""

    parts: tuple[ArraySignals, ...]

    def __call__(
        self, columns: Sequence[int], block_frames: int, start_frame: int, stop_frame: int
    ) -> Iterator[SampleBlock]:
        """Yield blocks of the chosen arrays, stacked."""
        streams = [
            self.parts[c].source([0], block_frames, start_frame, stop_frame) for c in columns
        ]
        for blocks in zip(*streams, strict=True):
            yield np.concatenate(blocks, axis=0)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class MemorySource:
    """Block source over an array that is in memory, shape (frames, channels)."""

    values: NDArray[Any]

    def __call__(
        self, columns: Sequence[int], block_frames: int, start_frame: int, stop_frame: int
    ) -> Iterator[SampleBlock]:
        """Yield float32 or float64 blocks of the chosen columns."""
        narrow = is_exact_in_float32(self.values.dtype)
        for first in range(start_frame, stop_frame, block_frames):
            part = self.values[first : min(first + block_frames, stop_frame), list(columns)]
            yield as_samples(part.T, narrow)


def as_samples(values: NDArray[Any], narrow: bool) -> SampleBlock:
    """Return the values as contiguous float32 if narrow, else as float64."""
    if narrow:
        return np.ascontiguousarray(values, dtype=np.float32)
    return np.ascontiguousarray(values, dtype=np.float64)


def is_exact_in_float32(dtype: np.dtype[Any]) -> bool:
    """Tell whether float32 holds every value of a type."""
    return bool(np.can_cast(dtype, np.float32, "safe"))
