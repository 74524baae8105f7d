"""Locked episodes: where psi stays within a band for at least the hold time.

Rule: |psi - c| < 2 pi eps for at least the hold time, c free for each episode and eps below
half a turn (a wrapped difference satisfies any larger one). An episode is the union of all
windows that satisfy the rule and share samples; the union is parted where psi moves on net by
more than half a turn, and a part that a steady drift explains is not an episode. Its ends are
taken back to where psi leaves its own level, because a window may reach up to half a beat
into the drift beside it.

How long the hold time must be so that two free oscillators seldom satisfy it stands in
``fit.holdtime``; whether a record as a whole is locked in ``fit.state``.
"""

from __future__ import annotations

import cmath
import math
from collections.abc import Iterable
from dataclasses import dataclass, replace

import numpy as np

from fit.difference import Order, PhaseDifference, valid_runs
from fit.rates import END_PARTS, measure_slope
from fit.records import Episode, Style
from fit.windows import qualifying_unions
from rig.angles import rad_from_deg, rad_from_turns, spread_of_length_rad, wrap_angle_rad
from rig.arrays import ComplexArray, FloatArray, IntArray
from rig.errors import FitError
from rig.longarrays import LONG_SAMPLES, blocks_of, made_row

#: A locked psi stays within a quarter turn of its centre: net motion beyond this is no lock.
NET_MOTION_RAD = math.pi

#: A part whose steady slope makes up this much is drift, if the slope is beyond its noise.
DRIFT_MOTION_RAD = math.pi / 2

#: Ends are taken back if psi departs by more than this (or 4 spreads) from the level, to
#: where it was last within LEVEL_RAD (or 2 spreads) of it. In a quiet record the spread is
#: far below both, and psi would take many relaxation times to come within it: a pull-in ends
#: where the eye sees it end, not where the noise does.
DEPARTED_RAD = rad_from_turns(0.05)
LEVEL_RAD = rad_from_turns(0.04)

#: Rounds of taking the ends back; two settle it unless a drift is as long as the lock.
MOST_TRIMS = 6

#: Samples worked through at a time.
BLOCK_SAMPLES = 32_768

#: Samples looked at in one go for where a level begins: it mostly begins at once.
END_SAMPLES = 512

#: Batches for the uncertainty of an offset, long enough to outlast the memory of psi.
OFFSET_BATCHES = 16


@dataclass(frozen=True, slots=True, kw_only=True)
class EpisodeRules:
    """What counts as locked; every default with its reason.

    ``eps_turns`` 0.25: detects most locked pairs at a stated false-lock rate (0.10 misses most
    once the noise is a tenth of the coupling, 0.40 needs holds half as long again).
    ``hold_s`` states the hold time outright; None lets it follow from ``alpha``.
    ``hold_beats`` 3: a pair drifting just outside lock dwells for most of a beat; three beat
    periods bar it down to 5 % outside the edge.
    ``alpha`` 0.01: probability that a free pair is called locked, per record.
    ``free_spread`` 1e-3: relative standard deviation of free frequencies where no free-running
    capture says better: crystals are closer, mechanical pairs seldom.
    ``style_deg`` 30: half-width of what is called in phase or anti-phase.
    """

    eps_turns: float = 0.25
    hold_s: float | None = None
    hold_beats: float = 3.0
    alpha: float = 0.01
    free_spread: float = 1e-3
    style_deg: float = 30.0

    def __post_init__(self) -> None:
        if not 0 < self.eps_turns < 0.5:
            raise FitError(
                f"episode band eps must lie above 0 and below 0.5 turn, got {self.eps_turns:g}; "
                "half a turn or more accepts every phase difference"
            )
        if self.hold_s is not None and not self.hold_s > 0:
            raise FitError(f"hold time must be above 0 s, got {self.hold_s:g}")
        if not self.hold_beats > 0:
            raise FitError(f"hold time must be above 0 beats, got {self.hold_beats:g}")
        if not 0 < self.alpha < 1:
            raise FitError(f"false-lock probability must lie in (0, 1), got {self.alpha:g}")
        if not self.free_spread > 0:
            raise FitError(f"free spread must be above 0, got {self.free_spread:g}")
        if not 0 < self.style_deg < 90:
            raise FitError(f"style angle must lie in (0, 90) degrees, got {self.style_deg:g}")

    @property
    def band_rad(self) -> float:
        """Full width of the band that psi must keep, rad."""
        return 2.0 * rad_from_turns(self.eps_turns)


def parse_hold(text: str, rules: EpisodeRules | None = None) -> EpisodeRules:
    """Return the rules with a hold time as people write it: "0.5" (seconds) or "2beats".

    Parameters
    ----------
    text : str
        A number of seconds, optionally with "s", or a number of beat periods with "beats".
    rules : EpisodeRules, optional
        What the other fields are taken from; the defaults when not given.

    Returns
    -------
    EpisodeRules
        With ``hold_s`` set, or with ``hold_beats`` set and ``hold_s`` None.

    Raises
    ------
    FitError
        If the text is neither, or the number is not above 0.
    """
    base = rules or EpisodeRules()
    stripped = text.strip().lower()
    in_beats = stripped.endswith(("beats", "beat"))
    number = stripped.removesuffix("beats").removesuffix("beat").removesuffix("s").strip()
    try:
        value = float(number)
    except ValueError:
        value = math.nan
    if not 0 < value < math.inf:
        raise FitError(f"hold time '{text}': need seconds above 0 ('0.5') or beats ('2beats')")
    if in_beats:
        return replace(base, hold_s=None, hold_beats=value)
    return replace(base, hold_s=value)


def find_episodes(
    difference: PhaseDifference, rules: EpisodeRules, hold_s: float
) -> tuple[Episode, ...]:
    """Return the locked episodes of a record, in the order of time.

    Parameters
    ----------
    difference : PhaseDifference
    rules : EpisodeRules
    hold_s : float, s
        Least duration of an episode, above 0 (``fit.holdtime`` chooses it).

    Returns
    -------
    tuple of Episode
        ``offset_rad`` is the circular mean of psi inside, its uncertainty by batches (noise
        with memory) and the systematic one in quadrature.

    Raises
    ------
    FitError
        If the hold time is not above 0.
    """
    if not hold_s > 0:
        raise FitError(f"hold time must be above 0 s, got {hold_s:g}")
    window = max(2, math.ceil(hold_s * difference.rate_hz - 1e-9) + 1)
    spans: list[tuple[int, int]] = []
    for start, stop in valid_runs(difference.valid):
        psi_rad = _from_start(difference.psi_rad, start, stop)
        inside = _run_episodes(psi_rad, rules.band_rad, window, difference.rate_hz)
        spans += [(start + a, start + b) for a, b in inside]
    return tuple(_describe(difference, rules, a, b) for a, b in spans)


def _from_start(psi_rad: FloatArray, start: int, stop: int) -> FloatArray:
    """Return a stretch of psi counted from its first sample."""
    origin_rad = psi_rad[start]
    row: FloatArray = made_row(
        stop - start, np.float64, lambda a, b: psi_rad[start + a : start + b] - origin_rad
    )
    return row


def style_of(
    order: Order, offset_rad: float, offset_u_rad: float, style_deg: float = 30.0
) -> Style:
    """Return in-phase or anti-phase where the angle surely is one, else offset.

    Parameters
    ----------
    order : Order
        Only 1:1 has a style; every other order is "offset".
    offset_rad, offset_u_rad : float, rad
        Angle and its standard uncertainty; twice that must fit in as well.
    style_deg : float, degree

    Returns
    -------
    "in-phase", "anti-phase" or "offset"
    """
    if (order.n, order.m) != (1, 1):
        return "offset"
    reach = rad_from_deg(style_deg) - 2.0 * offset_u_rad
    if abs(wrap_angle_rad(offset_rad)) <= reach:
        return "in-phase"
    if abs(wrap_angle_rad(offset_rad - math.pi)) <= reach:
        return "anti-phase"
    return "offset"


def _run_episodes(
    psi_rad: FloatArray, band_rad: float, window: int, rate_hz: float
) -> list[tuple[int, int]]:
    """Return the episodes of one valid stretch as sample spans."""
    parts = [
        part
        for a, b in qualifying_unions(psi_rad, band_rad, window)
        for part in _part_by_level(psi_rad, (a, b), window, rate_hz)
    ]
    return _mend(psi_rad, parts, window)


def _part_by_level(
    psi_rad: FloatArray, span: tuple[int, int], window: int, rate_hz: float
) -> list[tuple[int, int]]:
    """Return the parts of a union in which psi does not move on net by half a turn.

    The longest such part comes first; if a steady drift explains it, nothing shorter in the
    same union can be told from that drift either.
    """
    a, b = span
    if b - a < window:
        return []
    block = max(1, window // 4, (b - a) // 4096)
    first, last = _longest_level(_block_means(psi_rad, span, block))
    start = a + first * block
    stop = b if last * block >= b - a else a + last * block
    kept = _trim(psi_rad, (start, stop))
    if kept[1] - kept[0] < window or _is_drift(psi_rad, kept, rate_hz):
        return []
    before = _part_by_level(psi_rad, (a, start), window, rate_hz)
    after = _part_by_level(psi_rad, (stop, b), window, rate_hz)
    return [*before, kept, *after]


def _block_means(psi_rad: FloatArray, span: tuple[int, int], block: int) -> FloatArray:
    """Return means of successive blocks of a span; the last may be short."""
    a, b = span
    edges = np.arange(a, b, block)
    together = max(1, BLOCK_SAMPLES // block) * block
    sums = [
        np.add.reduceat(psi_rad[start:stop], np.arange(0, stop - start, block))
        for start, stop in blocks_of(a, b, together)
    ]
    return np.asarray(np.concatenate(sums) / np.diff(np.append(edges, b)))


def _some(psi_rad: FloatArray, span: tuple[int, int]) -> tuple[FloatArray, int]:
    """Return psi in a span, of a very long one every so many samples, and how many."""
    a, b = span
    every = 1 + (b - a) // LONG_SAMPLES
    return psi_rad[a:b:every], every


def _longest_level(levels: FloatArray) -> tuple[int, int]:
    """Return the longest stretch of levels that span less than half a turn (stop excluded)."""
    if np.ptp(levels) < NET_MOTION_RAD:
        return 0, levels.size
    best, start, low, high = (0, 0), 0, [0], [0]
    for k in range(levels.size):
        _push(low, levels, k, 1.0)
        _push(high, levels, k, -1.0)
        while levels[high[0]] - levels[low[0]] >= NET_MOTION_RAD:
            start += 1
            for queue in (low, high):
                if queue[0] < start:
                    del queue[0]
        if k + 1 - start > best[1] - best[0]:
            best = (start, k + 1)
    return best


def _push(queue: list[int], levels: FloatArray, k: int, sign: float) -> None:
    """Append an index to a queue kept monotonic, so that its head is the extreme."""
    while queue and sign * levels[queue[-1]] >= sign * levels[k]:
        queue.pop()
    queue.append(k)


def _is_drift(psi_rad: FloatArray, span: tuple[int, int], rate_hz: float) -> bool:
    """Say whether a steady slope explains the motion of psi in a part."""
    part, every = _some(psi_rad, span)
    edge = max(1, part.size // END_PARTS)
    if abs(float(part[-edge:].mean() - part[:edge].mean())) <= DRIFT_MOTION_RAD:
        return False  # what is asked of the slope below, without its uncertainty
    slope = measure_slope([part], rate_hz / every)
    return slope is not None and slope.moved_rad > DRIFT_MOTION_RAD and slope.differs_from_zero()


def _trim(psi_rad: FloatArray, span: tuple[int, int]) -> tuple[int, int]:
    """Return the span without the ends in which psi has left the level of the part.

    Repeated, because a drifting end widens the spread that it is judged by.
    """
    for _ in range(MOST_TRIMS):
        kept = _trim_once(psi_rad, span)
        if kept == span:
            break
        span = kept
    return span


def _trim_once(psi_rad: FloatArray, span: tuple[int, int]) -> tuple[int, int]:
    """Return the span without its departed ends, judged by its own level and spread."""
    a, b = span
    part, _ = _some(psi_rad, span)
    level = _middle(part)
    spread = 1.4826 * _middle(np.abs(part - level))
    departed, there = max(4 * spread, DEPARTED_RAD), max(2 * spread, LEVEL_RAD)
    if abs(psi_rad[a] - level) > there:
        starts = blocks_of(a, b, END_SAMPLES)
        before, furthest = _outside((psi_rad[i:k] - level for i, k in starts), there)
        a += before if furthest > departed else 0
    if abs(psi_rad[b - 1] - level) > there:
        stops = ((max(a, b - k), b - i) for i, k in blocks_of(0, b - a, END_SAMPLES))
        after, furthest = _outside((psi_rad[i:k][::-1] - level for i, k in stops), there)
        b -= after if furthest > departed else 0
    return a, b


def _middle(values: FloatArray) -> float:
    """Return the median of values none of which is missing."""
    low, high = (values.size - 1) // 2, values.size // 2
    part = np.partition(values, high if low == high else (low, high))
    return 0.5 * float(part[low] + part[high])


def _outside(ends: Iterable[FloatArray], there: float) -> tuple[int, float]:
    """Return how many samples come before the first within a level, and how far they go."""
    count, furthest = 0, 0.0
    for part in ends:
        away = np.abs(part)
        inside = away <= there
        ahead = int(inside.argmax()) if inside.any() else away.size
        count += ahead
        furthest = max(furthest, float(away[:ahead].max(initial=0.0)))
        if ahead < away.size:
            break
    return count, furthest


def _mend(psi_rad: FloatArray, spans: list[tuple[int, int]], window: int) -> list[tuple[int, int]]:
    """Join episodes that a short excursion parts, when psi comes back to the same level."""
    joined: list[tuple[int, int]] = []
    for a, b in spans:
        if joined and a - joined[-1][1] < window // 4:
            before = _middle(_some(psi_rad, joined[-1])[0])
            if abs(_middle(_some(psi_rad, (a, b))[0]) - before) < NET_MOTION_RAD / 2:
                joined[-1] = (joined[-1][0], b)
                continue
        joined.append((a, b))
    return joined


def _describe(difference: PhaseDifference, rules: EpisodeRules, start: int, stop: int) -> Episode:
    """Return the episode of a sample span with its angle, spread and style."""
    batches, sizes = _batch_vectors(difference.psi_rad, start, stop)
    mean = complex(np.sum(batches)) / (stop - start)
    offset_rad = cmath.phase(mean)
    offset_u_rad = math.hypot(_mean_u_rad(batches, sizes), difference.systematic_u_rad)
    return Episode(
        start_s=difference.start_s + start / difference.rate_hz,
        stop_s=difference.start_s + (stop - 1) / difference.rate_hz,
        offset_rad=offset_rad,
        offset_u_rad=offset_u_rad,
        spread_rad=spread_of_length_rad(min(abs(mean), 1.0)),
        style=style_of(difference.order, offset_rad, offset_u_rad, rules.style_deg),
    )


def mean_angle_u_rad(psi_rad: FloatArray) -> float:
    """Return the standard uncertainty of a circular mean of values with memory, rad.

    Parameters
    ----------
    psi_rad : array, shape (n,), rad
        In the order of time.

    Returns
    -------
    float, rad
        From the scatter of 16 batch means of sin(psi - mean), over the resultant length; at
        most pi / sqrt(3), the deviation of an angle about which nothing is known.
    """
    return _mean_u_rad(*_batch_vectors(psi_rad, 0, psi_rad.size))


def _mean_u_rad(batches: ComplexArray, sizes: IntArray) -> float:
    """Return the uncertainty of the angle of a sum of vectors from that of its batches."""
    count = sizes.size
    mean = complex(np.sum(batches)) / int(sizes.sum())
    if count < 2:
        return math.pi / math.sqrt(3.0)
    # Turned by the mean angle, the imaginary part is the mean of sin(psi - mean).
    across = (batches * cmath.exp(-1j * cmath.phase(mean))).imag / sizes
    scatter = float(np.std(across, ddof=1))
    return min(scatter / math.sqrt(count) / max(abs(mean), 1e-9), math.pi / math.sqrt(3.0))


def _batch_vectors(psi_rad: FloatArray, start: int, stop: int) -> tuple[ComplexArray, IntArray]:
    """Return the sums of exp(i psi) over 16 batches of a span, and their sizes."""
    count = min(OFFSET_BATCHES, stop - start)
    size, more = divmod(stop - start, count)
    sizes = np.full(count, size)
    sizes[:more] += 1
    edges = start + np.cumsum(sizes) - sizes
    sums = np.zeros(count, dtype=complex)
    for a, b in blocks_of(start, stop, BLOCK_SAMPLES):
        part = psi_rad[a:b]
        first, last = np.searchsorted(edges, a, side="right") - 1, np.searchsorted(edges, b)
        places = np.maximum(edges[first:last], a) - a
        sums.real[first:last] += np.add.reduceat(np.cos(part), places)
        sums.imag[first:last] += np.add.reduceat(np.sin(part), places)
    return sums, sizes
