"""Detuning and coupling from two numbers of a drifting record: mean rate and resultant length.

They use none of the timing that the likelihood uses, so agreement of the two is a check.
"""

from __future__ import annotations

import math

import numpy as np

from fit.noise_inverse import invert_rate_and_length
from fit.records import PsiSeries
from rig.angles import TURN_RAD, hz_from_rad_s
from rig.arrays import ComplexArray, FloatArray
from rig.quantities import Quantity, undetermined

LEAST_BEATS = 5
GROUPS = 10
NAMES = ("detuning by rate and resultant", "coupling by rate and resultant")
NO_PAIR = "no pair has this rate and resultant at this noise, or only one too near its edge"


def two_number_check(
    record: PsiSeries, noise_rad2_s: float, measurement_noise_rad: float
) -> tuple[tuple[str, Quantity], ...]:
    """Return detuning and coupling by mean rate and resultant length, with jackknife errors.

    Parameters
    ----------
    record : PsiSeries
    noise_rad2_s : float, rad^2/s
        D of the record: it changes both numbers, and its law is inverted.
    measurement_noise_rad : float, rad
        Shortens the resultant by exp(-variance/2), which is undone.

    Returns
    -------
    pairs of name and Quantity, none with fewer than 5 beats; without a value where the two
    numbers fit no pair at this noise.
    """
    times_s, vectors, direction = _beats(record)
    beats = times_s.size
    if beats < LEAST_BEATS:
        return ()
    vectors = vectors * math.exp(0.5 * measurement_noise_rad**2)
    groups = np.array_split(np.arange(beats), min(GROUPS, beats))
    whole = _invert(times_s, vectors, direction, noise_rad2_s)
    left = [np.delete(np.arange(beats), group) for group in groups]
    tried = [_invert(times_s[k], vectors[k], direction, noise_rad2_s) for k in left]
    parts = [part for part in tried if part is not None]
    if whole is None or len(parts) < len(left):
        return tuple((name, undetermined("Hz", NO_PAIR)) for name in NAMES)
    share = (len(parts) - 1.0) / len(parts)
    spread = np.sqrt(share * np.sum((np.array(parts) - np.mean(parts, axis=0)) ** 2, axis=0))
    return tuple(
        (name, Quantity(value=value, u=float(u), unit="Hz"))
        for name, value, u in zip(NAMES, whole, spread, strict=True)
    )


def _invert(
    times_s: FloatArray, vectors: ComplexArray, direction: float, noise_rad2_s: float
) -> tuple[float, float] | None:
    """Return (detuning, coupling) in Hz from some of the beats, None where no pair fits."""
    total_s = float(np.sum(times_s))
    rate = direction * TURN_RAD * times_s.size / total_s
    length = float(abs(np.sum(vectors))) / total_s
    found = invert_rate_and_length(rate, length, noise_rad2_s)
    return None if found is None else (hz_from_rad_s(found[0]), hz_from_rad_s(found[1]))


def _beats(record: PsiSeries) -> tuple[FloatArray, ComplexArray, float]:
    """Return duration and integral of exp(i psi) of each whole beat, and the direction.

    A beat ends where psi first passes the next whole turn from the segment's start.
    """
    way = math.fsum(float(part[-1] - part[0]) for part in record.segments if part.size)
    direction = math.copysign(1.0, way)
    times: list[FloatArray] = []
    vectors: list[ComplexArray] = []
    for psi in record.segments:
        ahead = np.maximum.accumulate(direction * (psi - psi[0]))
        marks = TURN_RAD * np.arange(int(ahead[-1] // TURN_RAD) + 1, dtype=np.float64)
        if marks.size < 2:
            continue
        place = _first_passage(ahead, marks)
        wave = np.exp(1j * psi)
        area = np.concatenate([[0.0], np.cumsum(0.5 * (wave[1:] + wave[:-1]))])
        index = np.arange(psi.size)
        inside = np.interp(place, index, area.real) + 1j * np.interp(place, index, area.imag)
        times.append(np.diff(place) * record.step_s)
        vectors.append(np.diff(inside) * record.step_s)
    if not times:
        return np.zeros(0), np.zeros(0, dtype=np.complex128), direction
    return np.concatenate(times), np.concatenate(vectors), direction


def _first_passage(ahead: FloatArray, marks: FloatArray) -> FloatArray:
    """Return where (in samples) a running maximum first reaches each mark."""
    after = np.clip(np.searchsorted(ahead, marks, side="left"), 1, ahead.size - 1)
    rise = ahead[after] - ahead[after - 1]
    part = np.where(rise > 0.0, (marks - ahead[after - 1]) / np.where(rise > 0.0, rise, 1.0), 0.0)
    return np.asarray(after - 1 + np.clip(part, 0.0, 1.0))
