"""What a reader of a locking region must know of its joint fit, beside the numbers."""

from __future__ import annotations

import numpy as np

from fit.region_fit import SweepFit
from fit.region_tests import repeatability
from rig.angles import hz_from_rad_s

SEEN_SHARE = 0.1  # part of the variance of an edge from which a spread is worth a note


def sweep_notes(sweep: SweepFit) -> list[str]:
    """Return what holds for the whole region.

    Parameters
    ----------
    sweep : SweepFit
    """
    notes = _wander_notes(sweep)
    repeats = repeatability(sweep.data, sweep.fit)
    if repeats is not None:
        notes.append(
            f"{repeats.count} repeated points agree in detuning to "
            f"{hz_from_rad_s(repeats.spread_rad_s):.2g} Hz (standard deviation; the noise within "
            f"one gives {hz_from_rad_s(repeats.noise_rad_s):.2g} Hz)"
        )
    if sweep.widen > 1.0:
        notes.append(
            f"couplings of single records scatter {sweep.widen:.2f} times more than their "
            "noise; uncertainties of the edges are widened by that"
        )
    if sweep.outer and sweep.holds:
        notes.append(
            "the phase equation holds to 5 %, not exactly: the edges come from the points near "
            "and outside them"
        )
    return notes


def _wander_notes(sweep: SweepFit) -> list[str]:
    """Return what the edges allow for between points, where it is proven or can be seen."""
    size = f"{hz_from_rad_s(sweep.spread.spread_rad_s):.2g} Hz"
    if sweep.tests[-1].fired:
        return [
            f"the free frequency wanders by {size} from point to point beyond the noise within "
            "them; the edges allow for it"
        ]
    if sweep.spread.spread_rad_s > 0 and float(np.max(sweep.spread.share)) > SEEN_SHARE:
        return [
            f"the edges allow for a wander of the free frequency of {size} from point to point, "
            "not proven"
        ]
    return []
