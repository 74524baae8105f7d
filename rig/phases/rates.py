"""Mean frequency of a phase, with the uncertainty that noise and phase diffusion leave.

The frequency is the slope of a straight line through all valid stretches, each with its own
offset. Its uncertainty starts from the bound for white phase noise and is widened by the
random walk of the oscillator's own phase, judged by the slow part of the residual: the
energy of its cosine modes k = 2 ... 33 is white plus a part falling as 1 / k**2.
"""

from __future__ import annotations

import math

import numpy as np

from rig.angles import hz_from_rad_s
from rig.arrays import BoolArray, FloatArray
from rig.longarrays import LONG_BLOCK, blocks_of
from rig.phases.stretches import runs_of
from rig.quantities import Quantity, undetermined

SLOWEST_MODE = 2  # mode 1 is taken away with the slope
MODES = 32
WALK_SHARE = 0.987  # 1.2 * pi**2 / 12: slope variance of a walk over that of white noise
WALK_EVIDENCE = 1.0  # twice the log-likelihood gained before a walk is believed


def mean_frequency(
    phase_rad: FloatArray,
    valid: BoolArray,
    u_rad: FloatArray,
    *,
    rate_hz: float,
    correlation_samples: float,
) -> Quantity:
    """Return the mean frequency over the valid stretches, Hz.

    Parameters
    ----------
    phase_rad : array, shape (n,), rad, unwrapped inside each stretch
    valid : bool array, shape (n,)
    u_rad : array, shape (n,), rad, standard uncertainty of each sample
    rate_hz : float, Hz, rate of the grid
    correlation_samples : float, samples that share one noise value

    References
    ----------
    Rife and Boorstyn 1974, IEEE Trans. IT-20, 591 (recalled): the bound of the slope.
    """
    spans = [span for span in runs_of(valid).tolist() if span[1] - span[0] >= 2]
    if not spans:
        return undetermined("Hz", "no valid stretch of phase")
    top, bottom = 0.0, 0.0
    for first, stop in spans:
        length = stop - first
        # The phase is taken from the middle on, so that the sum loses nothing.
        middle, origin_rad = first + (length - 1) / 2.0, phase_rad[first + length // 2]
        for start, end in blocks_of(first, stop):
            time = (np.arange(start, end) - middle) / rate_hz
            top += float(time @ (phase_rad[start:end] - origin_rad))
        bottom += length * (length * length - 1.0) / (12.0 * rate_hz**2)
    slope_rad_s = top / bottom
    noise_rad = float(u_rad[0])
    if u_rad.strides != (0,):
        noise_rad = _rms(u_rad, runs_of(valid).tolist())
    u_rad_s = noise_rad * math.sqrt(correlation_samples / bottom)
    first, stop = max(spans, key=lambda span: span[1] - span[0])
    means = _block_means(phase_rad, first, stop)
    walk = _walk_share(means, stop - first, noise_rad * math.sqrt(correlation_samples))
    u_rad_s *= math.sqrt(1.0 + WALK_SHARE * walk)
    return Quantity(value=hz_from_rad_s(slope_rad_s), u=hz_from_rad_s(u_rad_s), unit="Hz")


def _rms(values: FloatArray, spans: list[list[int]]) -> float:
    """Return the root of the mean square over some spans."""
    total, count = 0.0, 0
    for first, stop in spans:
        for start, end in blocks_of(first, stop):
            part = values[start:end]
            total, count = total + float(part @ part), count + part.size
    return math.sqrt(total / count)


def _walk_share(means: FloatArray, samples: int, white_rad: float) -> float:
    """Return g of mode energies white**2 (1 + g / k**2), by likelihood on a ladder of values.

    ``means`` are those of ``_block_means`` over so many samples, and ``white_rad`` is the
    deviation of white noise of the same density at low frequencies.
    """
    if samples < 8:
        return 0.0
    modes = _slow_modes(means, samples)
    order = np.arange(SLOWEST_MODE, SLOWEST_MODE + modes.size)
    floor = max(white_rad, 1e-12) ** 2
    ladder = np.concatenate([[0.0], np.logspace(-1.0, 12.0, 131)])
    expected = 1.0 + ladder[:, None] / order**2
    loss = np.sum(modes**2 / floor / expected + np.log(expected), axis=1)
    best = int(np.argmin(loss))
    return float(ladder[best]) if loss[0] - loss[best] > WALK_EVIDENCE else 0.0


def _slow_modes(means: FloatArray, samples: int) -> FloatArray:
    """Return the amplitudes of the slow cosine modes of the residual from a straight line."""
    size = means.size
    time = np.arange(size) - (size - 1) / 2.0
    rest = means - means.mean() - time * (time @ means) / (time @ time)
    count = min(MODES, size - SLOWEST_MODE - 1)
    order = np.arange(SLOWEST_MODE, SLOWEST_MODE + count)
    # The sum of rest cos(pi order (k + 1/2) / size), from one transform of twice the length.
    transform = np.fft.rfft(rest, 2 * size)[order]
    cosines = (transform * np.exp(-0.5j * math.pi * order / size)).real
    return np.asarray(cosines * math.sqrt(2.0 / size) * math.sqrt(samples / size))


def _block_means(phase_rad: FloatArray, first: int, stop: int, most: int = 1024) -> FloatArray:
    """Return means over equal runs, at most ``most`` of them, so that modes are cheap."""
    length = -(-(stop - first) // most)
    count = (stop - first) // length
    means = np.empty(count)
    for start, end in blocks_of(0, count, max(1, LONG_BLOCK // length)):
        part = phase_rad[first + start * length : first + end * length]
        means[start:end] = part.reshape(-1, length).mean(axis=1)
    return means
