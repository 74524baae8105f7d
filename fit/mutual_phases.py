"""Both phases of a pair in a frame that turns with it, cut into lanes for a filter."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from fit.difference import Order
from fit.lanes import MOST_LOST
from fit.records import PsiSeries
from rig.angles import rad_s_from_hz
from rig.arrays import FloatArray
from rig.phases.track import PhaseTrack

LANE_SAMPLES = 250


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class MutualPhases:
    """Both phases in a frame that turns with the pair: (2, N, L), NaN behind the end.

    ``lost_s`` (2,) is the time that increments of each seem to miss (``PhaseTrack``).
    """

    phases: FloatArray
    step_s: float
    turn: FloatArray
    lost_s: FloatArray

    @property
    def psi(self) -> FloatArray:
        """Psi, (N, L)."""
        return np.asarray(np.tensordot(self.turn, self.phases, axes=1))


def gather_phases(
    reference: PhaseTrack, driven: PhaseTrack, order: Order, series: PsiSeries
) -> MutualPhases:
    """Return the phases at the samples of psi, cut into lanes that share one sample."""
    """Return both phases at the samples of psi, cut into lanes that share one sample.

    Parameters
    ----------
    reference, driven : PhaseTrack on one grid
    order : Order
    series : PsiSeries of the pair
    """
    frame = rad_s_from_hz(reference.frequency_hz.value or 0.0)
    lanes: list[FloatArray] = []
    for part, start_s in zip(series.segments, series.start_s, strict=True):
        time_s = start_s + np.arange(part.size) * series.step_s
        at = np.rint((time_s - reference.start_s) * reference.rate_hz).astype(int)
        turned = frame * (time_s - series.start_s[0])
        pair = np.stack(
            [reference.phase_rad[at] - turned, driven.phase_rad[at] - order.m / order.n * turned]
        )
        pieces = -(-max(part.size - 1, 1) // (LANE_SAMPLES - 1))
        edges = [(part.size - 1) * k // pieces for k in range(pieces + 1)]
        lanes += [pair[:, a : b + 1] for a, b in pairwise(edges) if b > a]
    longest = max(lane.shape[1] for lane in lanes)
    phases = np.full((2, longest, len(lanes)), np.nan)
    for place, lane in enumerate(lanes):
        phases[:, : lane.shape[1], place] = lane
    return MutualPhases(
        phases=phases,
        step_s=series.step_s,
        turn=np.array([-float(order.m), float(order.n)]),
        lost_s=np.minimum([reference.lost_s, driven.lost_s], MOST_LOST * series.step_s),
    )
