"""A phase track brought onto the grid of another: two recorders, one clock."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from rig.angles import TURN_RAD
from rig.arrays import FloatArray
from rig.errors import PhaseError
from rig.phases.stretches import runs_of
from rig.phases.track import PhaseTrack

FEWEST_SAMPLES = 4  # of a stretch: what a cubic needs


def regridded(track: PhaseTrack, onto: PhaseTrack, *, shift_s: float = 0.0) -> PhaseTrack:
    """Return a track at the times of another one's grid, not valid where it does not reach.

    The steady turning is taken off first, so that only what the frequency does is
    interpolated: a cubic through the samples of each valid stretch, never across a gap.

    Parameters
    ----------
    track : PhaseTrack
    onto : PhaseTrack, whose start, rate and length are taken
    shift_s : float, s, time of the other grid at which the clock of ``track`` shows 0

    Raises
    ------
    PhaseError
        If the two share no valid time.

    Notes
    -----
    A cubic through samples taken at twice the band or more changes the phase by less than
    the filter of the band does at its edge.
    """
    from scipy.interpolate import CubicSpline

    time_s = onto.time_s - shift_s
    own_s = track.time_s
    turning_rad_s = TURN_RAD * (track.frequency_hz.value or 0.0)
    phase_rad = np.zeros(time_s.size)
    valid = np.zeros(time_s.size, dtype=bool)
    for start, stop in runs_of(track.valid):
        inside = (time_s >= own_s[start]) & (time_s <= own_s[stop - 1])
        if stop - start < FEWEST_SAMPLES or not inside.any():
            continue
        wander_rad = track.phase_rad[start:stop] - turning_rad_s * own_s[start:stop]
        at_s = time_s[inside]
        phase_rad[inside] = CubicSpline(own_s[start:stop], wander_rad)(at_s) + turning_rad_s * at_s
        valid |= inside
    if not (valid & onto.valid).any():
        raise PhaseError(
            f"channels '{onto.channel}' and '{track.channel}' of two recorders share no time; "
            "state when the second one started, or record both at once"
        )
    return replace(
        track,
        start_s=onto.start_s,
        rate_hz=onto.rate_hz,
        phase_rad=phase_rad,
        amplitude=_linear(time_s, own_s, track.amplitude),
        valid=valid,
        u_rad=_linear(time_s, own_s, track.u_rad),
        correlation_samples=max(1.0, track.correlation_samples * onto.rate_hz / track.rate_hz),
        event_s=None if track.event_s is None else track.event_s + shift_s,
    )


def _linear(time_s: FloatArray, own_s: FloatArray, values: FloatArray) -> FloatArray:
    return np.asarray(np.interp(time_s, own_s, values), dtype=float)
