"""Level, height and noise of a channel, from three places of the record."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from rig.arrays import BoolArray, FloatArray
from rig.channels import Channel
from rig.errors import PhaseError
from rig.spectrum import read_span

PLACE_FRAMES = 65536  # frames read at each of three places
TWO_LEVEL_SHARE = 0.9  # a sine spends 0.29 of its time there
SPIKE_DUTY = 0.1  # a sine is beyond half its peak for a third of the time
LOPSIDED = 1.5  # noise and sines reach as far down as up
WINDOWS = 20  # of each place; the median of their highest samples is the height of a spike


@dataclass(frozen=True, slots=True, kw_only=True)
class SignalLevel:
    """Levels in sample units: mean and rms value about it, median, usual top and bottom.

    ``low`` and ``high`` are the 2 % and 98 % values: the two levels of a logic signal, and
    ``level_share`` the share of samples within a tenth of the way of one of them. ``duty`` is
    the share beyond half of the usual top (or bottom, where that is further off).
    """

    mean: float
    rms: float
    median: float
    top: float
    bottom: float
    low: float
    high: float
    level_share: float
    duty: float

    @property
    def is_two_level(self) -> bool:
        """Whether nearly all samples stand at one of two levels."""
        return self.level_share > TWO_LEVEL_SHARE and self.high > self.low

    @property
    def is_spiky(self) -> bool:
        """Whether the signal is flat between short peaks of one sign."""
        up, down = self.top - self.median, self.median - self.bottom
        return self.duty < SPIKE_DUTY and max(up, down) > LOPSIDED * min(up, down)


def signal_level(channel: Channel) -> SignalLevel:
    """Return the levels of a channel; the mean has a Hann weight, so cycles need not be whole.

    Raises
    ------
    PhaseError
        If no finite sample is found, or all are equal.
    """
    parts = [part for part in _places(channel) if part.size >= WINDOWS]
    joined = np.concatenate(parts) if parts else np.empty(0)
    if joined.size == 0 or not np.ptp(joined) > 0:
        raise PhaseError(
            f"channel '{channel.name}' has no oscillation (spread 0); check the cable and the "
            "channel order"
        )
    mean = float(np.mean([_weighted_mean(part) for part in parts]))
    low, median, high = np.quantile(joined, [0.02, 0.5, 0.98]).tolist()
    top = float(np.median(np.concatenate([_windows(part).max(axis=1) for part in parts])))
    bottom = float(np.median(np.concatenate([_windows(part).min(axis=1) for part in parts])))
    return SignalLevel(
        mean=mean,
        rms=math.sqrt(float(np.mean([_weighted_mean((part - mean) ** 2) for part in parts]))),
        median=median,
        top=top,
        bottom=bottom,
        low=low,
        high=high,
        level_share=float(np.mean(_is_at(joined, low, high))),
        duty=_duty(joined, median, top, bottom),
    )


def _is_at(samples: FloatArray, low: float, high: float) -> BoolArray:
    near = 0.1 * (high - low)
    return np.asarray((np.abs(samples - low) <= near) | (np.abs(samples - high) <= near))


def _duty(samples: FloatArray, median: float, top: float, bottom: float) -> float:
    """Return the share of samples beyond half of the larger excursion."""
    if top - median >= median - bottom:
        return float(np.mean(samples > median + (top - median) / 2.0))
    return float(np.mean(samples < median - (median - bottom) / 2.0))


def _places(channel: Channel) -> list[FloatArray]:
    count = channel.capture.frame_count
    length = min(count, PLACE_FRAMES)
    parts = []
    for start in sorted({0, (count - length) // 2, count - length}):
        part = read_span(channel.capture, channel.column, start, start + length)
        parts.append(part[np.isfinite(part)])
    return parts


def _weighted_mean(part: FloatArray) -> float:
    weight = np.hanning(part.size + 2)[1:-1]
    return float(weight @ part / weight.sum())


def _windows(part: FloatArray) -> FloatArray:
    whole = part.size // WINDOWS * WINDOWS
    return part[:whole].reshape(WINDOWS, -1)
