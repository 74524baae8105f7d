"""From protophase to phase: a waveform that is no sine turns unevenly within each cycle.

An estimator that follows a loop of the signal gives an angle theta (the protophase) that
grows unevenly even when the oscillator runs freely. The phase phi that grows evenly on the
average is phi = theta + 2 Im sum_n (S_n / n) (exp(i n theta) - 1), S_n = <exp(-i n theta)>,
the mean over time taken over whole cycles. Both are kept, so that their difference can be
judged: it changes the offset of a locked pair and the ripple, not detuning or coupling.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from rig.angles import TURN_RAD
from rig.arrays import BoolArray, ComplexArray, FloatArray, frozen_view
from rig.errors import PhaseError
from rig.phases.stretches import runs_of
from rig.phases.track import PhaseTrack

MOST_HARMONICS = 24  # a pulse of a tenth of the cycle is described to 1 %
EVIDENCE = 3.0  # deviations a harmonic must stand above chance, to be believed
FEWEST_SAMPLES_A_CYCLE = 4.0  # grid samples; fewer sample a cycle always at the same places
FEWEST_CYCLES = 10  # whole cycles below which the shape of one is not known


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PhasePair:
    """A protophase and the phase made from it, and how far they lie apart.

    ``coefficients`` (h,) are S_1 ... S_h; ``difference_rms_rad`` and ``difference_max_rad``
    are taken about the mean difference.
    """

    protophase: PhaseTrack
    phase: PhaseTrack
    coefficients: ComplexArray
    difference_rms_rad: float
    difference_max_rad: float

    def __post_init__(self) -> None:
        object.__setattr__(self, "coefficients", frozen_view(self.coefficients))


def protophase_to_phase(theta_rad: FloatArray, coefficients: ComplexArray) -> FloatArray:
    """Return the phase that grows evenly on the average.

    phi = theta + 2 Im sum_n (S_n / n) (exp(i n theta) - 1)

    Parameters
    ----------
    theta_rad : array, shape (n,), rad, protophase (unwrapped or not)
    coefficients : complex array, shape (h,), S_1 ... S_h

    Returns
    -------
    array, shape (n,), rad; phi = theta wherever theta is a multiple of a turn

    References
    ----------
    Kralemann, Cimponeriu, Rosenblum, Pikovsky, Mrowka 2007, Phys. Rev. E 76, 055201;
    2008, Phys. Rev. E 77, 066205 (recalled).
    """
    phase_rad: FloatArray = np.array(theta_rad, dtype=float)
    for index, coefficient in enumerate(coefficients, start=1):
        turned = np.exp(1j * index * np.asarray(theta_rad)) - 1.0
        phase_rad = phase_rad + 2.0 / index * (coefficient * turned).imag
    return phase_rad


def cycle_coefficients(
    theta_rad: FloatArray, valid: BoolArray, *, correlation_samples: float = 1.0
) -> tuple[ComplexArray, int]:
    """Return S_1 ... S_h of a protophase, and the whole cycles they come from.

    Harmonics are kept up to the last that stands 3 deviations above what evenly spread
    angles would give by chance.

    Parameters
    ----------
    theta_rad : array, shape (n,), rad, unwrapped inside each stretch
    valid : bool array, shape (n,)
    correlation_samples : float, samples that share one independent value

    Raises
    ------
    PhaseError
        If there are fewer than 10 whole cycles.
    """
    angles, cycles = _whole_cycles(theta_rad, valid)
    if cycles < FEWEST_CYCLES:
        raise PhaseError(
            f"protophase: {cycles} whole cycles, at least {FEWEST_CYCLES} needed to know the shape "
            "of one; record longer"
        )
    order = np.arange(1, MOST_HARMONICS + 1)
    means = np.array([np.mean(np.exp(-1j * n * angles)) for n in order])
    chance = EVIDENCE / math.sqrt(max(1.0, angles.size / correlation_samples))
    high = np.flatnonzero(np.abs(means) > chance)
    kept = int(high[-1]) + 1 if high.size else 0
    return means[:kept], cycles


def _whole_cycles(theta_rad: FloatArray, valid: BoolArray) -> tuple[FloatArray, int]:
    """Return the angles of each stretch cut to whole turns, and how many turns."""
    parts, cycles = [], 0
    for first, stop in runs_of(valid):
        turned = theta_rad[first:stop] - theta_rad[first]
        whole = int(turned[-1] // TURN_RAD)
        if whole > 0:
            parts.append(theta_rad[first:stop][turned < whole * TURN_RAD])
            cycles += whole
    return (np.concatenate(parts) if parts else np.empty(0)), cycles


def correct_protophase(track: PhaseTrack) -> PhasePair:
    """Return a track's protophase together with the phase made from it.

    Parameters
    ----------
    track : PhaseTrack; with fewer than 4 samples a cycle its band holds no harmonic, its
        phase is even already and is left as it is

    Raises
    ------
    PhaseError
        If there are fewer than 10 whole cycles.
    """
    line_hz = track.frequency_hz.value or 0.0
    if track.rate_hz < FEWEST_SAMPLES_A_CYCLE * line_hz:
        return _left_alone(track)
    coefficients, cycles = cycle_coefficients(
        track.phase_rad, track.valid, correlation_samples=track.correlation_samples
    )
    phase_rad = protophase_to_phase(track.phase_rad, coefficients)
    apart = (phase_rad - track.phase_rad)[track.valid]
    apart = apart - apart.mean()
    rms_rad, max_rad = float(np.sqrt(np.mean(apart**2))), float(np.abs(apart).max())
    note = (
        f"protophase made even by {coefficients.size} harmonics from {cycles} cycles; they differ "
        f"by {rms_rad:.3g} rad rms, {max_rad:.3g} rad at most"
    )
    return PhasePair(
        protophase=track,
        phase=replace(track, phase_rad=phase_rad, notes=(*track.notes, note)),
        coefficients=coefficients,
        difference_rms_rad=rms_rad,
        difference_max_rad=max_rad,
    )


def _left_alone(track: PhaseTrack) -> PhasePair:
    note = "band without harmonics: the phase is even within the cycle, nothing corrected"
    return PhasePair(
        protophase=track,
        phase=replace(track, notes=(*track.notes, note)),
        coefficients=np.empty(0, dtype=complex),
        difference_rms_rad=0.0,
        difference_max_rad=0.0,
    )
