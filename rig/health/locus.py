"""The locus of a channel's amplitude against the phase difference: where a leak shows.

A channel's base band is drawn as amplitude over its phase against the partner's. A pulled
oscillator keeps its amplitude, so its points lie on a circle about the origin, wherever and
however long it locks; a locked stretch is a blob on that circle. What is added from the
partner moves the whole circle: its centre is the leak and its radius the channel's own
oscillation. A record in which the phase difference does not go round leaves the centre open.

Derived here: with z = w + g r, |r| = 1 and the phase of r known, z / r = w / r + g.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from rig.angles import TURN_RAD
from rig.arrays import BoolArray, ComplexArray, FloatArray, IntArray
from rig.density import smooth_length

SECTORS = 36
COVERED_SHARE = 0.7  # of the sectors about the centre; less is an arc, whose centre is loose
FEWEST_IN_SECTOR = 4
MOST_POINTS = 8_000
MOST_RUNS = 4  # of each span: a record full of gaps is judged by its longest stretches
BLOCKS = 8  # parts of the record left out in turn: what a change within it does to the centre
EDGE_BINS = 3  # of the band's own time step, at each end of a span: bent by the filter
LEAST_POINTS = 4001  # a span; a prime, so that no beat falls on a few points again and again
ROUNDS = 25
SETTLED = 1e-4  # of the radius
NEAR_ORIGIN = 0.5  # of the radius: the origin then lies well inside, and no other circle fits
CELLS = 24  # a side, of the grid that thins crowded places before the first guess


ANGLES_RAD = (np.arange(SECTORS) + 0.5) * (TURN_RAD / SECTORS)
SIDES = np.stack([np.ones(SECTORS), np.cos(ANGLES_RAD), np.sin(ANGLES_RAD)], axis=1)


@dataclass(frozen=True, slots=True, kw_only=True)
class Circle:
    """A circle through a locus: distance of its centre from the origin over its radius.

    ``u`` is the standard uncertainty of ``shift``, from what is left in the sectors and from
    leaving out parts of the record in turn; ``scatter`` the rms distance of the points from
    the circle over its radius.
    """

    shift: float
    u: float
    scatter: float


class SpanTransforms:
    """The transforms of a channel's spans, each made when first asked for and then kept.

    The spans lack no sample.
    Both channels of a pair are looked at against each other: each transform serves twice.
    """

    def __init__(self, spans: Sequence[FloatArray]) -> None:
        self._spans = spans
        self._kept: dict[int, tuple[int, ComplexArray]] = {}

    def __len__(self) -> int:
        return len(self._spans)

    def find(self, place: int) -> tuple[int, ComplexArray]:
        """Return (samples, transform) of a span."""
        if place not in self._kept:
            self._kept[place] = _transform(self._spans[place])
        return self._kept[place]


def transforms_of(channels: Sequence[Sequence[FloatArray]]) -> list[SpanTransforms]:
    """Return the transforms of some channels over the runs in which none lacks a sample.

    Parameters
    ----------
    channels : for each channel its spans, the same spans for all
    """
    cut: list[list[FloatArray]] = [[] for _ in channels]
    for spans in zip(*channels, strict=True):
        there = np.logical_and.reduce([np.isfinite(span) for span in spans])
        edges = np.flatnonzero(np.diff(there.astype(np.int8), prepend=0, append=0))
        starts, stops = edges[::2], edges[1::2]
        for run in np.argsort(starts - stops)[:MOST_RUNS]:
            for kept, span in zip(cut, spans, strict=True):
                kept.append(span[starts[run] : stops[run]])
    return [SpanTransforms(spans) for spans in cut]


def _transform(span: FloatArray) -> tuple[int, ComplexArray]:
    samples = span[: smooth_length(span.size)]
    return samples.size, np.asarray(np.fft.rfft(samples - samples.mean()))


def channel_circle(
    own: SpanTransforms,
    partner: SpanTransforms,
    rate_hz: float,
    band_hz: tuple[float, float],
) -> Circle | None:
    """Return the circle that a channel's amplitude draws about its partner's phase.

    Parameters
    ----------
    own, partner : SpanTransforms, the same spans of both channels
    rate_hz : float, Hz
    band_hz : (low, high), Hz, around both lines and clear of their harmonics

    Returns
    -------
    Circle or None
        None where the phase difference does not go round.
    """
    return circle_through(_locus(own, partner, rate_hz, band_hz))


def circle_through(points: ComplexArray) -> Circle | None:
    """Return the circle through a locus, None where its points do not go round a centre.

    Parameters
    ----------
    points : complex array, shape (n,), amplitude over phase against the partner, in time order
    """
    points = points[:: max(1, -(-points.size // MOST_POINTS))]
    if not points.size or not np.abs(points).max() > 0:
        return None
    fitted = _best_fit(points)
    if fitted is None:
        return None
    shift = abs(fitted.centre) / fitted.radius
    u = math.hypot(fitted.u, _left_out_u(points, fitted))
    return Circle(shift=shift, u=u, scatter=fitted.scatter)


def _locus(
    own: SpanTransforms,
    partner: SpanTransforms,
    rate_hz: float,
    band_hz: tuple[float, float],
) -> ComplexArray:
    """Return amplitude over phase against the partner, ends left out."""
    found = []
    for place in range(len(own)):
        z, r = (_base_band(*part.find(place), rate_hz, band_hz) for part in (own, partner))
        clear = np.abs(r) > 0
        found.append(z[clear] * np.conj(r[clear]) / np.abs(r[clear]))
    return np.concatenate(found) if found else np.zeros(0, dtype=complex)


def _base_band(
    size: int, spectrum: ComplexArray, rate_hz: float, band_hz: tuple[float, float]
) -> ComplexArray:
    """Return the complex oscillation in a band, at twice the rate the band needs or more."""
    bin_hz = rate_hz / size
    first, last = (round(edge / bin_hz) for edge in band_hz)
    part = spectrum[max(1, first) : last + 1]
    if part.size <= 2 * EDGE_BINS:
        return np.zeros(0, dtype=complex)
    # Half a cosine at either edge: a sharp edge would ring through the record.
    side = max(1, part.size // 8)
    rise = 0.5 - 0.5 * np.cos(np.pi * (np.arange(side) + 0.5) / side)
    part = part.copy()
    part[:side] *= rise
    part[-side:] *= rise[::-1]
    count = max(2 * part.size, LEAST_POINTS)
    edge = -(-EDGE_BINS * count // part.size)
    return np.asarray(np.fft.ifft(part, count)[edge:-edge])


@dataclass(frozen=True, slots=True, kw_only=True)
class _Fit:
    """A fitted circle; ``u`` is that of its centre over its radius, from the sectors alone."""

    centre: complex
    radius: float
    u: float
    scatter: float


def _best_fit(points: ComplexArray) -> _Fit | None:
    """Return the circle with the least scatter, from the origin and, if need be, a better guess."""
    first = _fit(points, 0j)
    if first is not None and abs(first.centre) < NEAR_ORIGIN * first.radius:
        return first
    second = _fit(points, _first_centre(points))
    found = [fit for fit in (first, second) if fit is not None]
    return min(found, key=lambda fit: fit.scatter, default=None)


def _first_centre(points: ComplexArray) -> complex:
    """Return the centre of the algebraic circle through the crowded cells of a grid.

    References
    ----------
    Kasa 1976, IEEE Trans. Instrum. Meas. 25, 8 (recalled).
    """
    middle = complex(points.mean())
    reach = float(np.abs(points - middle).max())
    if not reach > 0:
        return middle
    row, column = (
        np.floor((part / reach + 1.0) * 0.5 * (CELLS - 1e-9)).astype(int)
        for part in ((points - middle).real, (points - middle).imag)
    )
    cell = row * CELLS + column
    count = np.bincount(cell, minlength=CELLS**2)
    kept = count >= FEWEST_IN_SECTOR
    x, y = (
        np.bincount(cell, weights=part, minlength=CELLS**2)[kept] / count[kept]
        for part in (points.real, points.imag)
    )
    if x.size < 3:
        return middle
    sides = np.stack([2.0 * x, 2.0 * y, np.ones_like(x)], axis=1)
    found = np.linalg.lstsq(sides, x**2 + y**2, rcond=None)[0]
    return complex(found[0], found[1])


def _fit(points: ComplexArray, centre: complex) -> _Fit | None:
    """Return the circle; None when it is not gone round.

    Each sector about the centre counts once, so that a locked stretch does not outweigh all.
    """
    for _ in range(ROUNDS):
        sector, radii = _sectors(points - centre), np.abs(points - centre)
        count = np.bincount(sector, minlength=SECTORS)
        found = _step(count, _sums(sector, radii, SECTORS))
        if found is None:
            return None
        radius, moved, u = found
        centre += moved
        if abs(moved) < SETTLED * radius:
            break
    seen = count >= FEWEST_IN_SECTOR
    scatter = _scatter(points - centre, radius, sector, seen)
    return _Fit(centre=centre, radius=radius, u=u, scatter=scatter)


def _step(count: IntArray, total: FloatArray) -> tuple[float, complex, float] | None:
    """Return radius, how far the centre is to move, and the u of that over the radius."""
    seen = count >= FEWEST_IN_SECTOR
    if np.count_nonzero(seen) < COVERED_SHARE * SECTORS:
        return None
    sides, mean = SIDES[seen], total[seen] / count[seen]
    spread = np.linalg.inv(sides.T @ sides)
    radius, along, across = (spread @ (sides.T @ mean)).tolist()
    if not radius > 0:
        return None
    left = mean - sides @ np.array([radius, along, across])
    variance = float(left @ left) / (mean.size - 3)
    u = math.sqrt(variance * (spread[1, 1] + spread[2, 2])) / radius
    return radius, complex(along, across), u


def _left_out_u(points: ComplexArray, fitted: _Fit) -> float:
    """Return the u of the shift from leaving out parts of the record in turn (jackknife)."""
    vectors = points - fitted.centre
    block = np.arange(points.size) * BLOCKS // points.size
    place = block * SECTORS + _sectors(vectors)
    size = BLOCKS * SECTORS
    count = np.bincount(place, minlength=size).reshape(BLOCKS, SECTORS)
    total = _sums(place, np.abs(vectors), size).reshape(BLOCKS, SECTORS)
    steps = [_step(count.sum(0) - count[k], total.sum(0) - total[k]) for k in range(BLOCKS)]
    moved = [abs(step[1]) / fitted.radius for step in steps if step is not None]
    if not moved:
        return math.inf
    return math.sqrt((BLOCKS - 1) * float(np.mean(np.square(moved))))


def _sums(place: IntArray, values: FloatArray, size: int) -> FloatArray:
    return np.asarray(np.bincount(place, weights=values, minlength=size), dtype=float)


def _sectors(vectors: ComplexArray) -> IntArray:
    sector = np.floor(np.angle(vectors) * (SECTORS / TURN_RAD)).astype(np.int64)
    return np.asarray(sector % SECTORS)


def _scatter(vectors: ComplexArray, radius: float, sector: IntArray, seen: BoolArray) -> float:
    """Return the rms distance from the circle over its radius, each sector counted once."""
    square = (np.abs(vectors) - radius) ** 2
    count = np.maximum(1, np.bincount(sector, minlength=SECTORS))
    by_sector = np.bincount(sector, weights=square, minlength=SECTORS) / count
    return math.sqrt(float(np.mean(by_sector[seen]))) / radius
