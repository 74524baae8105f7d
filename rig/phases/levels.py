"""Level, height and noise of a channel, from three places of the record."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rig.angles import TURN_RAD
from rig.arrays import FloatArray, median
from rig.channels import Channel
from rig.errors import PhaseError
from rig.spectrum import mean_down, read_span

PLACE_FRAMES = 65536  # frames looked at in each of three places
READ_FRAMES = 16384  # of them read at a time: new memory costs as much as reading
CELLS = 4.0  # means a cycle from which a slow ground is made
WHOLE_FRAMES = 1_048_576  # a longer record is not read twice unless its mean moves
GROUND_SHARE = 0.1  # of the spread: a ground that moves less is taken as still
TWO_LEVEL_SHARE = 0.7  # logic with its edges; a sine has 0.2, a smooth pulse 0.4
SPIKE_DUTY = 0.1  # a sine is beyond half its peak for a third of the time
SPIKE_KURTOSIS = 5.0  # a sine has 1.5, noise 3, beats of a heart 10 and more
SOME = 32_768  # samples of which medians are taken
LARGEST_AMPLITUDE = 1e18  # in any unit: squares of larger float32 samples soon overflow
WINDOWS = 20  # of each place; the median of their highest samples is the height of a spike


@dataclass(frozen=True, slots=True, kw_only=True)
class SignalLevel:
    """Levels in sample units: mean and rms value about it, median, usual top and bottom.

    ``level_share`` is the share of samples near one of two levels: the smaller of that below
    and that above the middle. ``duty`` is
    the share beyond half of the usual top (or bottom, where that is further off);
    ``kurtosis`` the fourth moment over the squared variance.
    """

    mean: float
    rms: float
    median: float
    top: float
    bottom: float
    level_share: float
    duty: float
    kurtosis: float

    @property
    def is_two_level(self) -> bool:
        """Whether nearly all samples stand at one of two levels."""
        return self.level_share > TWO_LEVEL_SHARE

    @property
    def is_spiky(self) -> bool:
        """Whether the signal is flat between short peaks."""
        return self.duty < SPIKE_DUTY and self.kurtosis > SPIKE_KURTOSIS


@dataclass(frozen=True, slots=True, kw_only=True)
class SignalShape:
    """Whether nearly all samples stand at two levels; whether it is flat between short peaks."""

    is_two_level: bool
    is_spiky: bool


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Ground:
    """A slow ground under an oscillation: its value at frames, linear between and beyond."""

    frame: FloatArray
    value: FloatArray

    def at(self, frames: NDArray[Any]) -> FloatArray:
        """Return the ground at frames, sample units."""
        ground = np.interp(frames, self.frame, self.value)
        # Towards the ends, where a window would be cut, it goes on as it came.
        for edge, inner in ((0, 1), (-1, -2)):
            step = self.frame[edge] - self.frame[inner]
            beyond = (frames - self.frame[edge]) / step
            rise = self.value[edge] - self.value[inner]
            ground += np.maximum(beyond, 0.0) * rise
        return np.asarray(ground)


def running_ground(channel: Channel, cycle_hz: float) -> Ground | None:
    """Return the ground of a channel where it wanders, None where it stands still.

    Means over quarter cycles are smoothed over 8 cycles with a Hann weight, which leaves
    1e-3 of the oscillation. A record above 1e6 frames is first looked at in three places.

    Parameters
    ----------
    channel : Channel
    cycle_hz : float, Hz, rough frequency of the oscillation
    """
    capture = channel.capture
    if capture.frame_count > WHOLE_FRAMES and not _moves(channel):
        return None
    factor = max(1, int(capture.rate_hz / (CELLS * cycle_hz)))
    cells = mean_down(capture, channel.column, factor)
    width = 2 * round(CELLS * capture.rate_hz / (factor * cycle_hz)) + 1
    if width < 3 or cells.size < 2 * width:
        return None
    smooth = _smoothed(cells, np.hanning(width + 2)[1:-1])
    half = width // 2
    spread = float(np.nanstd(cells[half:-half] - smooth))
    low, high = np.quantile(smooth, [0.05, 0.95]).tolist()
    if high - low < GROUND_SHARE * spread:
        return None
    index = np.arange(half, cells.size - half, dtype=float)
    frame: FloatArray = index * factor + (factor - 1) / 2.0
    return Ground(frame=frame, value=smooth)


def _moves(channel: Channel) -> bool:
    parts = [part for part in _places(channel, None) if part.size >= WINDOWS]
    means = [_weighted_mean(part, _hann(part.size)) for part in parts]
    return bool(parts) and float(np.ptp(means)) > GROUND_SHARE * float(np.std(parts[0]))


def _smoothed(cells: FloatArray, weight: FloatArray) -> FloatArray:
    """Return weighted running means of what is there, where the window lies inside."""
    there = np.isfinite(cells)
    total = np.convolve(np.where(there, cells, 0.0), weight, mode="valid")
    share = np.convolve(there.astype(float), weight, mode="valid")
    return np.asarray(total / np.maximum(share, 1e-12))


def signal_level(channel: Channel, ground: Ground | None = None) -> SignalLevel:
    """Return the levels of a channel; the mean has a Hann weight, so cycles need not be whole.

    Parameters
    ----------
    channel : Channel
    ground : Ground, a slow ground taken off first

    Raises
    ------
    PhaseError
        If no finite sample is found, all are equal, or one is no sample of any instrument.
    """
    parts = _usable(channel, ground)
    tops, bottoms = _windows_ends(parts)
    _refuse_flat(channel.name, parts, tops, bottoms)
    weights = {size: _hann(size) for size in {part.size for part in parts}}
    mean = float(np.mean([_weighted_mean(part, weights[part.size]) for part in parts]))
    powers = [_weighted_mean(np.square(part - mean), weights[part.size]) for part in parts]
    some = _some(parts)
    middle, top, bottom = median(some), median(tops), median(bottoms)
    return SignalLevel(
        mean=mean,
        rms=math.sqrt(float(np.mean(powers))),
        median=middle,
        top=top,
        bottom=bottom,
        level_share=_level_share(some, (top + bottom) / 2.0),
        duty=_duty(parts, middle, top, bottom),
        kurtosis=_kurtosis(parts),
    )


def signal_shape(channel: Channel) -> SignalShape:
    """Return what kind of signal a channel holds: all that a choice of method asks for.

    Raises
    ------
    PhaseError
        If no finite sample is found, or all are equal.
    """
    parts = [part for part in _recorded(channel) if part.size >= WINDOWS]
    tops, bottoms = _windows_ends(parts)
    _refuse_flat(channel.name, parts, tops, bottoms)
    some = _some(parts)
    middle, top, bottom = median(some), median(tops), median(bottoms)
    duty = _duty(parts, middle, top, bottom)
    return SignalShape(
        is_two_level=_level_share(some, (top + bottom) / 2.0) > TWO_LEVEL_SHARE,
        # The moments cost as much as all the rest, and a plain oscillation needs none.
        is_spiky=duty < SPIKE_DUTY and _kurtosis(parts) > SPIKE_KURTOSIS,
    )


def too_large_text(name: str, largest: float) -> str:
    """Return the refusal of a channel whose numbers overflow in the work."""
    return (
        f"channel '{name}' holds numbers up to {largest:.3g}, at most {LARGEST_AMPLITUDE:g} can "
        "be worked with; check format, sample type and scale"
    )


def _usable(channel: Channel, ground: Ground | None) -> list[FloatArray]:
    return [part for part in _places(channel, ground) if part.size >= WINDOWS]


def _windows_ends(parts: list[FloatArray]) -> tuple[FloatArray, FloatArray]:
    """Return the highest and the lowest sample of each window of all places."""
    if not parts:
        return np.empty(0), np.empty(0)
    tables = [_windows(part) for part in parts]
    return (
        np.concatenate([table.max(axis=1) for table in tables]),
        np.concatenate([table.min(axis=1) for table in tables]),
    )


def _refuse_flat(name: str, parts: list[FloatArray], tops: FloatArray, bottoms: FloatArray) -> None:
    """Refuse a channel without a sample that differs from the others."""
    if tops.size and tops.max() > bottoms.min():
        return
    # Some samples at the end of a place are in no window.
    if parts and np.ptp([end for part in parts for end in (part.min(), part.max())]) > 0:
        return
    raise PhaseError(
        f"channel '{name}' has no oscillation (spread 0); check the cable and the channel order"
    )


def _some(parts: list[FloatArray]) -> FloatArray:
    """Return some of the samples, evenly taken from all places."""
    every = max(1, sum(part.size for part in parts) // SOME)
    first = np.cumsum([0, *(part.size for part in parts[:-1])]).tolist()
    return np.concatenate(
        [part[-at % every :: every] for part, at in zip(parts, first, strict=True)]
    )


def _kurtosis(parts: list[FloatArray]) -> float:
    """Return the fourth moment about the mean over the squared variance."""
    samples = np.concatenate(parts).astype(float, copy=False)
    square = np.square(samples - samples.mean())
    fourth, second = float(square @ square), float(square.sum())
    return fourth * float(square.size) / (second * second)


def _level_share(samples: FloatArray, middle: float) -> float:
    """Return how well samples gather at two levels, the medians on both sides of a middle."""
    sides = samples[samples <= middle], samples[samples > middle]
    if min(side.size for side in sides) == 0:
        return 0.0
    low, high = (median(side) for side in sides)
    near = 0.1 * (high - low)
    return min(
        float(np.mean(np.abs(side - level) <= near))
        for side, level in zip(sides, (low, high), strict=True)
    )


def _duty(parts: list[FloatArray], middle: float, top: float, bottom: float) -> float:
    """Return the share of samples beyond half of the larger excursion."""
    total = sum(part.size for part in parts)
    if top - middle >= middle - bottom:
        limit = middle + (top - middle) / 2.0
        return sum(int(np.count_nonzero(part > limit)) for part in parts) / total
    limit = middle - (middle - bottom) / 2.0
    return sum(int(np.count_nonzero(part < limit)) for part in parts) / total


def _places(channel: Channel, ground: Ground | None) -> list[FloatArray]:
    parts = []
    for start, stop in _spans(channel):
        part = read_span(channel.capture, channel.column, start, stop)
        if ground is not None:
            part = part - ground.at(np.arange(start, stop))
        parts.append(_finite(part))
    return parts


def _recorded(channel: Channel) -> list[FloatArray]:
    """Return the samples of the places as they are, in single precision where that holds them."""
    parts: list[NDArray[Any]] = []
    for start, stop in _spans(channel):
        blocks = channel.capture.blocks(
            [channel.column], block_frames=READ_FRAMES, start_frame=start, stop_frame=stop
        )
        parts.append(_finite(np.concatenate([block[0].copy() for block in blocks])))
    return parts


def _spans(channel: Channel) -> list[tuple[int, int]]:
    count = channel.capture.frame_count
    length = min(count, PLACE_FRAMES)
    starts = sorted({0, (count - length) // 2, count - length})
    return [(start, start + length) for start in starts]


def _finite(part: NDArray[Any]) -> NDArray[Any]:
    finite = np.isfinite(part)
    return part if finite.all() else part[finite]


def _hann(size: int) -> FloatArray:
    """Return a Hann weight of mean 1; its cosine is most of the cost of a weighted mean."""
    return np.asarray(1.0 - np.cos(TURN_RAD / size * (np.arange(size) + 0.5)))


def _weighted_mean(part: FloatArray, weight: FloatArray) -> float:
    return float(weight @ part) / part.size


def _windows(part: FloatArray) -> FloatArray:
    whole = part.size // WINDOWS * WINDOWS
    return part[:whole].reshape(WINDOWS, -1)
