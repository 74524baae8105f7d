"""Is the band wide enough for what the phase did? Read from the base band after the pass.

A band at least 2.5 times as wide (on one side) as the fastest beat turns the phase by 1 mrad
at most; below 1.5 times slips are bent, below half of it they are lost. What a band cuts off
a phase modulation comes back as modulation of the amplitude, fast, and as strong as that of
the phase; noise alone stays at the floor around the line.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from rig.angles import hz_from_rad_s, rad_from_turns
from rig.arrays import FloatArray, quantile
from rig.longarrays import LONG_BLOCK, blocks_of
from rig.phases.noise import BandNoise, BaseBand

STEPS = 2  # grid samples between the phases compared: half of one over the half band
MOST_STEPS = 32_768  # of them looked at, spread over the record: 160 above the quantile
FASTEST_SHARE = 0.995  # of the samples, the fastest beat is not exceeded by
NOISE_DEVIATIONS = 3.0  # of noise taken off it
BEAT_FACTOR = 2.5  # half band over fastest beat for 1 mrad
LOST_FACTOR = 1.5  # half band over fastest beat below which slips are bent or lost
FLOOR_EXCESS = 10.0  # fast amplitude density over the floor that noise never reaches
CUT_RATIO = 0.3  # phase density over amplitude density: less is plain amplitude modulation
CUT_DEPTH = 0.02  # of the amplitude; below, what is cut bends the phase by as little


@dataclass(frozen=True, slots=True, kw_only=True)
class BandCheck:
    """Fastest beat seen inside the band, Hz, and whether the band cuts off sidebands."""

    fastest_hz: float
    is_cut: bool

    def note(self, low_hz: float, high_hz: float) -> str | None:
        """Return what a reader must know about the band, or nothing."""
        half_hz = (high_hz - low_hz) / 2.0
        band = f"band {low_hz:.6g} to {high_hz:.6g} Hz"
        if self.is_cut or self.fastest_hz > half_hz / LOST_FACTOR:
            return (
                f"{band} is too narrow: the phase runs {self.fastest_hz:.3g} Hz off the line, as "
                "fast as the band lets it; slips may be bent or lost, widen it"
            )
        if self.fastest_hz > half_hz / BEAT_FACTOR:
            return (
                f"{band} is tight: the phase runs {self.fastest_hz:.3g} Hz off the line, more "
                f"than 1/{BEAT_FACTOR:g} of the half band; beats are bent by up to 10 mrad"
            )
        return None


def check_band(
    base: BaseBand, *, amplitude: float, across: float, noise: BandNoise | None, floor: float
) -> BandCheck:
    """Return the check of a band after the pass.

    Parameters
    ----------
    base : BaseBand
    amplitude : float, mean length of the vector where it is valid
    across : float, deviation of the noise across the vector
    noise : BandNoise, noise in the band, None when unknown
    floor : float, density of the floor around the line, squared units per hertz
    """
    if not amplitude > 0:
        return BandCheck(fastest_hz=0.0, is_cut=False)
    turned_rad = rad_from_turns(quantile(_steps(base), FASTEST_SHARE))
    noise_rad = NOISE_DEVIATIONS * math.sqrt(2.0) * across / amplitude
    fastest_rad = max(0.0, turned_rad - noise_rad)
    return BandCheck(
        fastest_hz=hz_from_rad_s(fastest_rad * base.rate_hz / STEPS),
        is_cut=noise is not None and _is_cut(noise, floor, base.half_hz, amplitude),
    )


def _steps(base: BaseBand) -> FloatArray:
    """Return by how much the phase turned over some steps, turns, either sense alike."""
    count = int(np.sum(base.runs[:, 1] - base.runs[:, 0]))
    every = max(1, -(-count // MOST_STEPS))
    block = max(1, LONG_BLOCK // every) * every
    found = [np.zeros(1)]
    for first, stop in base.runs.tolist():
        for start, end in blocks_of(first, stop - STEPS, block):
            part = base.turns[start : end + STEPS]
            found.append(part[STEPS::every] - part[:-STEPS:every])
    steps = np.concatenate(found[1:] or found)
    return np.abs(steps - np.rint(steps))


def _is_cut(noise: BandNoise, floor: float, half_hz: float, amplitude: float) -> bool:
    depth = math.sqrt(noise.amplitude_density * half_hz) / amplitude
    return (
        noise.amplitude_density > FLOOR_EXCESS * 2.0 * floor
        and noise.edge_ratio > CUT_RATIO
        and depth > CUT_DEPTH
    )
