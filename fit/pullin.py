"""How fast a pair pulls in, and how much psi jitters once it is locked."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from fit.difference import PhaseDifference, valid_runs
from fit.models import PhaseEquation, relaxation_rate_rad_s, trajectory
from fit.passage import passage_spread_s
from fit.records import AdlerEstimate, Episode
from rig.angles import TURN_RAD, rad_s_from_hz
from rig.arrays import BoolArray, FloatArray, median
from rig.quantities import Quantity, undetermined

TOLERANCE_RAD = 0.1  # psi counts as settled within this of its level (about 6 degrees)
TOLERANCE_SPREADS = 3.0  # or within this many spreads where the noise is larger
CLEAR_SPREADS = 4.0  # a record begun outside the tolerance by chance begins within this
EXCURSION_MEMORIES = 3.0  # noise leaves the tolerance for a part of its memory, never so long
LATEST_SHARE = 0.1  # of an episode: what leaves its level later is a disturbance of the lock
WELL_KNOWN = 0.3  # relative uncertainty of the coupling up to which its equation tells the way
ENTRY_ONLY = (
    "pull-in time: its uncertainty covers the entry in this record alone, for the phase equation "
    "of the way is not known well enough; noise may scatter other records two to three times as far"
)
SCALE_OF_MAD = 1.4826  # standard deviation over median absolute deviation of normal values


@dataclass(frozen=True, slots=True, kw_only=True)
class _Lock:
    """What psi does once in lock: level and spread, the tolerance, and its memory."""

    level_rad: float
    spread_rad: float
    tolerance_rad: float
    tolerance_u_rad: float
    memory: float


@dataclass(frozen=True, slots=True, kw_only=True)
class PullIn:
    """The time of a pull-in with its uncertainty at the entry, and the way it took.

    ``first_s`` and ``first_rad`` are when and where psi was first seen, ``level_rad`` where
    it settled, ``tolerance_u_rad`` how surely the edge of the tolerance about it is placed,
    ``smear_s`` what the phases smear, ``grid_s`` the grid step. All but ``time`` are 0 where
    there is no time.
    """

    time: Quantity
    first_s: float = 0.0
    first_rad: float = 0.0
    level_rad: float = 0.0
    tolerance_rad: float = 0.0
    tolerance_u_rad: float = 0.0
    smear_s: float = 0.0
    grid_s: float = 0.0


def find_pull_in(difference: PhaseDifference, episodes: tuple[Episode, ...]) -> PullIn:
    """Return the time from the start of the record until psi has settled into lock, s.

    Settled means within 0.1 rad of the level of the episode (its median), or within three
    spreads where the noise is larger. psi has settled when the last stay outside ends that
    began before the first tenth of the episode was over. Excursions of noise are no such
    stays: one counts if it goes beyond four spreads and either began with the record or lasts
    for three times the memory of psi in lock; stays that less than one memory parts count as
    one, and the time lies midway between its first and its last crossing inwards.

    Parameters
    ----------
    difference : PhaseDifference of the whole record, its start included
    episodes : tuple of Episode

    Returns
    -------
    PullIn
        Its time is undetermined where the pair does not stay in lock from its first episode to
        the end of the first valid stretch, or is in lock when psi is first seen. Its u
        combines the spread of psi over its slope at the entry with the widths (rectangular)
        of the crossings, the smearing and the grid step.

    Notes
    -----
    A sweep steps its drive where the record starts, so the time counts from there, although
    a guard may hide the first part. Without noise it is ``fit.models.pull_in_time_s`` to the
    tolerance; with noise, its mean over many records is within 0.3 relaxation times of that.
    u is that of the entry in this record: from near the unstable angle or close to the edge,
    noise on the way makes records of one pair differ by two to three times as much.
    ``with_noise_on_the_way`` adds that where the record tells its phase equation.
    """
    runs = valid_runs(difference.valid)
    if not runs or not episodes:
        return _no_time("the record has no locked episode")
    start, stop = runs[0]
    end_s = difference.start_s + stop / difference.rate_hz
    held = [each for each in episodes if each.stop_s <= end_s]
    if not held or end_s - held[-1].stop_s > 0.1 * (stop - start) / difference.rate_hz:
        return _no_time("the record is not locked at the end of its first stretch")
    if len(held) > 1:
        return _no_time("the pair leaves its lock again: no single pull-in")
    first, last = (_index(difference, at) - start for at in (held[0].start_s, held[0].stop_s))
    psi_rad = difference.psi_rad[start:stop]
    lock = _lock_of(psi_rad[first : last + 1])
    away = np.abs(psi_rad - lock.level_rad)
    stay = _approach(away[: last + 1], first + round(LATEST_SHARE * (last - first)), lock)
    if stay is None:
        return _no_time("the record starts locked: no pull-in to be seen")
    early, late = _crossings(away, stay, lock.tolerance_rad)
    entry = start + 0.5 * (early + late)
    widths = math.hypot(1.0, late - early, difference.smear_s * difference.rate_hz)
    u = math.hypot(_entry_u(away, stay, lock), widths / math.sqrt(12.0))
    step_s = 1.0 / difference.rate_hz
    return PullIn(
        time=Quantity(value=difference.start_s + entry * step_s, u=u * step_s, unit="s"),
        first_s=difference.start_s + start * step_s,
        first_rad=float(psi_rad[0]),
        level_rad=lock.level_rad,
        tolerance_rad=lock.tolerance_rad,
        tolerance_u_rad=lock.tolerance_u_rad,
        smear_s=difference.smear_s,
        grid_s=step_s,
    )


def _no_time(reason: str) -> PullIn:
    return PullIn(time=undetermined("s", reason))


def with_noise_on_the_way(found: PullIn, adler: AdlerEstimate) -> tuple[Quantity, str]:
    """Return the time with the standard deviation between records as its u, s, and a note.

    Parameters
    ----------
    found : PullIn
    adler : AdlerEstimate of the same record

    Returns
    -------
    Quantity, s, and str
        Its u is what the times of records that start at the same angle differ by: the noise
        of the phase equation from there to the tolerance (``fit.passage``), the measurement
        noise and the doubt in the tolerance over the slope there, smearing and grid. It is
        left as it was, that of the entry alone, where the record does not tell its coupling to
        30 %, its detuning and its noise, or turned by more than the equation lets it; the note
        says so.
    """
    if found.time.value is None:
        return found.time, ""
    way = _equation(found, adler)
    if way is None:
        return found.time, ENTRY_ONLY
    equation, noise_rad2_s = way
    # A guard hides the first part; noise met the pair there as well.
    start_rad = float(trajectory(equation, found.first_rad, np.array([-found.first_s]))[0])
    spread_s = passage_spread_s(equation, noise_rad2_s, start_rad, found.tolerance_rad)
    widths_s = math.hypot(found.grid_s, found.smear_s) / math.sqrt(12.0)
    slope_rad_s = found.tolerance_rad * relaxation_rate_rad_s(equation)
    seen_s = _seen_spread_s(found, (adler.measurement_noise_rad.value or 0.0) / slope_rad_s)
    u = math.hypot(spread_s, seen_s, found.tolerance_u_rad / slope_rad_s, widths_s)
    return replace(found.time, u=u), ""


def _seen_spread_s(found: PullIn, crossing_s: float) -> float:
    """Return what the measurement noise scatters the entry by, s.

    One crossing of a straight line is off by noise over slope (``crossing_s``), by 0.83 of it
    where samples lie far apart and a chord joins two. Midway between the first and the last of
    many crossings is better: 0.64 n^-0.2 of it by simulation (3 % between n = 1 and 16), n
    independent samples to one noise over slope.
    """
    if crossing_s == 0.0:
        return 0.0
    samples = crossing_s / max(found.grid_s, found.smear_s)
    return crossing_s * float(min(0.83, 0.64 * samples**-0.2))


def _equation(found: PullIn, adler: AdlerEstimate) -> tuple[PhaseEquation, float] | None:
    """Return the phase equation of the way, its rest where psi settled, and D; None unknown."""
    coupling, detuning, noise = adler.coupling_hz, adler.detuning_hz, adler.noise_rad2_s
    if coupling.value is None or detuning.value is None or noise.value is None:
        return None
    if not (coupling.u or 0.0) <= WELL_KNOWN * coupling.value:
        return None
    turned = abs(found.first_rad - found.level_rad)
    if not (abs(detuning.value) < coupling.value and turned < TURN_RAD):
        return None
    if not found.tolerance_rad < math.pi:
        return None
    equation = PhaseEquation(
        detuning_rad_s=rad_s_from_hz(detuning.value),
        coupling_rad_s=rad_s_from_hz(coupling.value),
        offset_rad=found.level_rad - math.asin(detuning.value / coupling.value),
    )
    return equation, noise.value


def _lock_of(psi_rad: FloatArray) -> _Lock:
    """Return what psi does in an episode; medians, because a pull-in may begin it."""
    level = median(psi_rad)
    spread = SCALE_OF_MAD * median(np.abs(psi_rad - level))
    memory = max(_memory_samples(psi_rad[psi_rad.size // 2 :]), 1.0)
    tolerance = max(TOLERANCE_RAD, TOLERANCE_SPREADS * spread)
    # Of n values a median has sd 1.25 / sqrt n of the spread, the spread by medians 1.17 / sqrt n
    # of itself; deviations correlate half as long as psi does.
    count = max(psi_rad.size / (2.0 * memory), 1.0)
    u = 1.25 * spread / math.sqrt(count)
    if tolerance > TOLERANCE_RAD:
        u = math.hypot(u, 1.17 * tolerance / math.sqrt(2.0 * count))
    return _Lock(
        level_rad=level,
        spread_rad=spread,
        tolerance_rad=tolerance,
        tolerance_u_rad=u,
        memory=memory,
    )


def _approach(away: FloatArray, latest: int, lock: _Lock) -> tuple[int, int] | None:
    """Return the last stay outside that noise does not explain, begun at the latest then."""
    spans = _stays(away > lock.tolerance_rad, lock.memory)
    clear = max(lock.tolerance_rad, CLEAR_SPREADS * lock.spread_rad)
    counted = [
        (a, b)
        for a, b in spans
        if a <= latest
        and away[a:b].max() > clear
        and (a == 0 or b - a > EXCURSION_MEMORIES * lock.memory)
    ]
    return counted[-1] if counted else None


def _stays(outside: BoolArray, memory: float) -> list[tuple[int, int]]:
    """Return the stays outside as spans, those joined that less than one memory parts."""
    joined: list[tuple[int, int]] = []
    for a, b in valid_runs(outside):
        if joined and a - joined[-1][1] < memory:
            joined[-1] = (joined[-1][0], b)
        else:
            joined.append((a, b))
    return joined


def _crossings(
    away: FloatArray, stay: tuple[int, int], tolerance_rad: float
) -> tuple[float, float]:
    """Return the first and the last crossing into the tolerance at the end of a stay."""
    a, b = _last_descent(away, stay, 2.0 * tolerance_rad)
    inside = np.flatnonzero(away[a:b] <= tolerance_rad)
    stops = (a + int(inside[0]) if inside.size else b, b)
    early, late = (_crossing(away, stop, tolerance_rad) for stop in stops)
    return early, late


def _last_descent(away: FloatArray, stay: tuple[int, int], level_rad: float) -> tuple[int, int]:
    """Return the part of a stay from its last sample beyond a level on (all when none is)."""
    a, b = stay
    beyond = np.flatnonzero(away[a:b] > level_rad)
    return (a + int(beyond[-1]), b) if beyond.size else stay


def _crossing(away: FloatArray, stop: int, tolerance_rad: float) -> float:
    """Return where the line between the last sample outside and the next meets the tolerance."""
    if not 0 < stop < away.size:
        return float(stop)
    before, after = float(away[stop - 1]), float(away[stop])
    return stop - 1 + (before - tolerance_rad) / (before - after)


def _entry_u(away: FloatArray, stay: tuple[int, int], lock: _Lock) -> float:
    """Return the standard uncertainty of an entry by the noise, samples.

    psi relaxes exponentially there, so the samples between the tolerance and twice that show
    the slope: ln 2 relaxation times of them. Counted, because noise shifts single crossings.
    """
    a, b = _last_descent(away, stay, 3.0 * lock.tolerance_rad)
    above = away[a:b][away[a:b] > lock.tolerance_rad]
    far = min(2.0 * lock.tolerance_rad, float(above.max()))
    relaxation = np.count_nonzero(above <= far) / math.log(far / lock.tolerance_rad)
    return lock.spread_rad / lock.tolerance_rad * relaxation


def _index(difference: PhaseDifference, time_s: float) -> int:
    return round((time_s - difference.start_s) * difference.rate_hz)


def locked_jitter(difference: PhaseDifference, episodes: tuple[Episode, ...]) -> Quantity:
    """Return the standard deviation of psi about its mean in the longest episode, rad.

    Parameters
    ----------
    difference : PhaseDifference
    episodes : tuple of Episode

    Returns
    -------
    Quantity, rad; its u is s / sqrt(2 n_eff), n_eff from the correlation time of psi.
    """
    if not episodes:
        return undetermined("rad", "the record has no locked episode")
    longest = max(episodes, key=lambda episode: episode.stop_s - episode.start_s)
    first = round((longest.start_s - difference.start_s) * difference.rate_hz)
    stop = round((longest.stop_s - difference.start_s) * difference.rate_hz) + 1
    inside = difference.valid[first:stop]
    psi_rad = difference.psi_rad[first:stop][inside]
    if psi_rad.size < 8:
        return undetermined("rad", f"the longest episode holds {psi_rad.size} samples; 8 needed")
    value = float(np.std(psi_rad, ddof=1))
    return Quantity(value=value, u=value / math.sqrt(2.0 * _effective_count(psi_rad)), unit="rad")


def _effective_count(values: FloatArray) -> float:
    """Return the number of independent values: n (1 - r) / (1 + r), r the decay a sample."""
    memory = _memory_samples(values)
    r = math.exp(-1.0 / memory) if memory > 0.0 else 0.0
    return max(values.size * (1.0 - r) / (1.0 + r), 1.0)


def _memory_samples(values: FloatArray) -> float:
    """Return the correlation time of values in samples, 0 when they have none.

    The correlation of psi in lock decays exponentially; the lag at which it falls below 1/e
    is found by doubling, so that white values cost one product. No power: no end of memory.
    """
    away = values - values.mean()
    power = float(away @ away)
    if not power > 0:
        return float(values.size)
    lag = 1
    while lag < values.size // 4 and float(away[lag:] @ away[:-lag]) / power > math.exp(-1.0):
        lag *= 2
    left = float(away[lag:] @ away[:-lag]) / power
    if left >= 1.0:
        return float(values.size)
    return -lag / math.log(left) if left > 0.0 else 0.0
