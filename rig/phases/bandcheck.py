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

from rig.angles import hz_from_rad_s
from rig.arrays import quantile
from rig.phases.noise import BandNoise, BaseBand
from rig.phases.stretches import runs_of

STEPS = 2  # grid samples between the phases compared: half of one over the half band
MOST_STEPS = 131_072  # of them looked at, spread over the record
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
    vector, valid = base.vector, base.valid
    if not amplitude > 0:
        return BandCheck(fastest_hz=0.0, is_cut=False)
    every = -(-int(valid.sum()) // MOST_STEPS)
    steps = [
        vector[first + STEPS : stop : every] * vector[first : stop - STEPS : every].conj()
        for first, stop in runs_of(valid)
        if stop - first > STEPS
    ]
    turned_rad = np.abs(np.angle(np.concatenate(steps))) if steps else np.zeros(1)
    noise_rad = NOISE_DEVIATIONS * math.sqrt(2.0) * across / amplitude
    fastest_rad = max(0.0, quantile(turned_rad, FASTEST_SHARE) - noise_rad)
    return BandCheck(
        fastest_hz=hz_from_rad_s(fastest_rad * base.rate_hz / STEPS),
        is_cut=noise is not None and _is_cut(noise, floor, base.half_hz, amplitude),
    )


def _is_cut(noise: BandNoise, floor: float, half_hz: float, amplitude: float) -> bool:
    depth = math.sqrt(noise.amplitude_density * half_hz) / amplitude
    return (
        noise.amplitude_density > FLOOR_EXCESS * 2.0 * floor
        and noise.edge_ratio > CUT_RATIO
        and depth > CUT_DEPTH
    )
