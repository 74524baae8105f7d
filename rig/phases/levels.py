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

PLACE_FRAMES = 65536  # frames read at each of three places
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
    parts = [part for part in _places(channel, ground) if part.size >= WINDOWS]
    joined = np.concatenate(parts) if parts else np.empty(0)
    if joined.size == 0 or not np.ptp(joined) > 0:
        raise PhaseError(
            f"channel '{channel.name}' has no oscillation (spread 0); check the cable and the "
            "channel order"
        )
    weights = {size: _hann(size) for size in {part.size for part in parts}}
    mean = float(np.mean([_weighted_mean(part, weights[part.size]) for part in parts]))
    powers = [_weighted_mean(np.square(part - mean), weights[part.size]) for part in parts]
    some = joined[:: max(1, joined.size // SOME)]
    middle = median(some)
    top = median(np.concatenate([_windows(part).max(axis=1) for part in parts]))
    bottom = median(np.concatenate([_windows(part).min(axis=1) for part in parts]))
    return SignalLevel(
        mean=mean,
        rms=math.sqrt(float(np.mean(powers))),
        median=middle,
        top=top,
        bottom=bottom,
        level_share=_level_share(some, (top + bottom) / 2.0),
        duty=_duty(joined, middle, top, bottom),
        kurtosis=_kurtosis(joined),
    )


def too_large_text(name: str, largest: float) -> str:
    """Return the refusal of a channel whose numbers overflow in the work."""
    return (
        f"channel '{name}' holds numbers up to {largest:.3g}, at most {LARGEST_AMPLITUDE:g} can "
        "be worked with; check format, sample type and scale"
    )


def _kurtosis(samples: FloatArray) -> float:
    """Return the fourth moment about the mean over the squared variance."""
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


def _duty(samples: FloatArray, middle: float, top: float, bottom: float) -> float:
    """Return the share of samples beyond half of the larger excursion."""
    if top - middle >= middle - bottom:
        return float(np.mean(samples > middle + (top - middle) / 2.0))
    return float(np.mean(samples < middle - (middle - bottom) / 2.0))


def _places(channel: Channel, ground: Ground | None) -> list[FloatArray]:
    count = channel.capture.frame_count
    length = min(count, PLACE_FRAMES)
    parts = []
    for start in sorted({0, (count - length) // 2, count - length}):
        part = read_span(channel.capture, channel.column, start, start + length)
        if ground is not None:
            part = part - ground.at(np.arange(start, start + length))
        parts.append(part[np.isfinite(part)])
    return parts


def _hann(size: int) -> FloatArray:
    """Return a Hann weight of mean 1; its cosine is most of the cost of a weighted mean."""
    return np.asarray(1.0 - np.cos(TURN_RAD / size * (np.arange(size) + 0.5)))


def _weighted_mean(part: FloatArray, weight: FloatArray) -> float:
    return float(weight @ part) / part.size


def _windows(part: FloatArray) -> FloatArray:
    whole = part.size // WINDOWS * WINDOWS
    return part[:whole].reshape(WINDOWS, -1)
