"""Surrogate records: the same oscillators with their relation destroyed, and p-values by them.

They are offered because people ask for them. As a test of coupling they are wrong for
oscillators: two quiet free oscillators of nearly equal frequency keep their phase difference
for a long time by themselves, which a surrogate destroys or keeps along with the coupling.
``FALSE_ALARMS`` says how often each one rejected uncoupled pairs here at a nominal 5 %; the
p-value to believe is that of the free pairs simulated in ``fit.freenull``.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np

from rig.angles import TURN_RAD
from rig.arrays import FloatArray
from rig.errors import FitError

Surrogate = Callable[[FloatArray, np.random.Generator], FloatArray]

#: Cycles shuffled one by one; of more only the sums over many are drawn.
MOST_CYCLES = 32_768

#: Fewest cycles of such a sum: normal to a part in a hundred by then.
FEWEST_TOGETHER = 32


def shift_time(phase_rad: FloatArray, rng: np.random.Generator) -> FloatArray:
    """Return the phase begun at a random sample, the part before it joined to the end.

    Parameters
    ----------
    phase_rad : array, shape (n,), rad
        Unwrapped, without gaps.
    rng : numpy Generator

    Returns
    -------
    array, shape (n,), rad

    Notes
    -----
    The shift is between a tenth and nine tenths of the record. The join continues the phase
    by its mean step.
    """
    count = phase_rad.size
    at = int(rng.integers(max(1, count // 10), max(2, count - count // 10)))
    step = (phase_rad[-1] - phase_rad[0]) / max(count - 1, 1)
    head = phase_rad[:at] - phase_rad[0] + phase_rad[-1] + step
    return np.concatenate((phase_rad[at:], head))


def shuffle_cycles(phase_rad: FloatArray, rng: np.random.Generator) -> FloatArray:
    """Return the phase with its cycles in random order, the time inside each kept.

    Parameters
    ----------
    phase_rad : array, shape (n,), rad
        Unwrapped, growing, without gaps.
    rng : numpy Generator

    Returns
    -------
    array, shape (n,), rad
        What lies before the first and after the last whole cycle stays in place.

    Notes
    -----
    The end of cycle k of n in random order is a sum drawn without replacement: of more than
    MOST_CYCLES cycles it is drawn at some places as the normal bridge of the same mean and
    covariance, s^2 k (n - k) / (n - 1) with s^2 the variance of a cycle's duration.

    References
    ----------
    Hajek 1960, Publ. Math. Inst. Hung. Acad. Sci. 5, 361 (recalled): the limit.
    """
    turns = (phase_rad - phase_rad[0]) / TURN_RAD
    cycles = int(turns.max())
    if cycles < 2:
        return phase_rad.copy()
    rising, samples = np.maximum.accumulate(turns), np.arange(phase_rad.size, dtype=float)
    shuffle = _shuffled_one_by_one if cycles <= MOST_CYCLES else _shuffled_together
    marks, at = shuffle(rising, samples, cycles, rng)
    mixed = np.interp(samples, at, marks)
    return np.asarray(phase_rad[0] + TURN_RAD * np.where(turns > cycles, turns, mixed))


def _shuffled_one_by_one(
    rising: FloatArray, samples: FloatArray, cycles: int, rng: np.random.Generator
) -> tuple[FloatArray, FloatArray]:
    """Return cycles done and the (fractional) samples at which they are, in random order."""
    marks = np.arange(cycles + 1, dtype=float)
    at = np.interp(marks, rising, samples)
    ends = np.cumsum(rng.permutation(np.diff(at)))
    return marks, at[0] + np.concatenate(([0.0], ends))


def _shuffled_together(
    rising: FloatArray, samples: FloatArray, cycles: int, rng: np.random.Generator
) -> tuple[FloatArray, FloatArray]:
    """Return the same at places some cycles apart, as sums of many cycles scatter."""
    count = min(cycles // FEWEST_TOGETHER, 2 * samples.size)
    marks = np.linspace(0.0, cycles, count + 1)
    first, last = np.interp((0.0, float(cycles)), rising, samples).tolist()
    mean = (last - first) / cycles
    # Cycles between two samples share their time evenly: each lasts one over their number.
    steps, done = np.diff(rising), np.diff(np.minimum(rising, cycles))
    moving = done > 0
    square = float(np.sum(done[moving] / steps[moving] ** 2)) / cycles
    variance = max(0.0, square - mean**2)
    walk = np.concatenate(([0.0], np.cumsum(rng.standard_normal(count))))
    bridge = walk - marks / cycles * walk[-1]
    spread = math.sqrt(variance * cycles / count * cycles / (cycles - 1))
    return marks, np.maximum.accumulate(first + marks * mean + spread * bridge)


def randomise_phases(values: FloatArray, rng: np.random.Generator) -> FloatArray:
    """Return values with the same periodogram and random Fourier phases.

    Parameters
    ----------
    values : array, shape (n,)
    rng : numpy Generator

    Returns
    -------
    array, shape (n,)

    References
    ----------
    Theiler et al. 1992, Physica D 58, 77 (recalled).
    """
    spectrum = np.fft.rfft(values)
    turned = np.abs(spectrum) * np.exp(1j * rng.uniform(0.0, TURN_RAD, spectrum.size))
    turned[0] = spectrum[0]
    if values.size % 2 == 0:
        turned[-1] = spectrum[-1]
    return np.asarray(np.fft.irfft(turned, values.size))


def randomise_rate(phase_rad: FloatArray, rng: np.random.Generator) -> FloatArray:
    """Return a phase whose rate has the same periodogram and random Fourier phases.

    Parameters
    ----------
    phase_rad : array, shape (n,), rad
        Unwrapped, without gaps.
    rng : numpy Generator

    Returns
    -------
    array, shape (n,), rad
    """
    steps = randomise_phases(np.diff(phase_rad), rng)
    return np.asarray(phase_rad[0] + np.concatenate(([0.0], np.cumsum(steps))))


SURROGATES: dict[str, Surrogate] = {
    "time-shifted": shift_time,
    "cycle-shuffled": shuffle_cycles,
    "phase-randomised": randomise_rate,
}

#: Rejections of uncoupled pairs at nominal 5 %, lowest and highest of five situations (equal
#: frequencies and 0.7 to 2 beats a record of 200 cycles, quiet and noisy; 300 pairs each, 19
#: surrogates, resultant length).
FALSE_ALARMS: dict[str, tuple[float, float]] = {
    "time-shifted": (0.09, 0.18),
    "cycle-shuffled": (0.00, 0.76),
    "phase-randomised": (0.04, 0.07),
}


def make_surrogate(name: str) -> Surrogate:
    """Return the surrogate of a name.

    Parameters
    ----------
    name : str

    Raises
    ------
    FitError
        If there is none of that name.
    """
    if name not in SURROGATES:
        raise FitError(f"surrogate '{name}' is not known; known: {', '.join(SURROGATES)}")
    return SURROGATES[name]


def surrogate_p(
    phases_rad: tuple[FloatArray, FloatArray],
    weights: tuple[int, int],
    name: str,
    *,
    count: int,
    rng: np.random.Generator,
) -> tuple[float, float]:
    """Return (p, mean resultant of the surrogates) for the resultant length of a pair.

    Parameters
    ----------
    phases_rad : (driven, reference), arrays of shape (n,), rad
        Unwrapped, without gaps; the driven one is replaced by surrogates.
    weights : (n, m)
        The order.
    name : str
        Key of ``SURROGATES``.
    count : int
        Surrogates made.
    rng : numpy Generator

    Returns
    -------
    (float, float)
        p = (1 + surrogates at least as concentrated) / (1 + count).
    """
    make = make_surrogate(name)
    driven, reference = phases_rad
    n, m = weights
    lengths = np.array(
        [abs(np.mean(np.exp(1j * (n * make(driven, rng) - m * reference)))) for _ in range(count)]
    )
    seen = abs(np.mean(np.exp(1j * (n * driven - m * reference))))
    return float(1 + np.count_nonzero(lengths >= seen)) / (1 + count), float(lengths.mean())
