"""Are the two only modes of one passive system? Beats and decays that are no locking.

Two passive oscillators coupled by a spring swing in normal modes: both lines stand in both
channels, what one envelope loses the other gains, and all of it decays. Their phase
difference is constant between the nulls of an envelope, and constant throughout in a single
mode, though nothing adjusts a rhythm. Self-sustained oscillators keep their amplitudes.
"""

from __future__ import annotations

import cmath
import math
from dataclasses import dataclass, replace
from typing import Any, Literal

import numpy as np

from fit.difference import valid_runs
from fit.records import AdequacyTest, AdlerEstimate
from rig.angles import TURN_RAD, hz_from_rad_s
from rig.arrays import ComplexArray, FloatArray
from rig.phases.track import PhaseTrack
from rig.quantities import undetermined

MOST_SAMPLES = 240  # points of the envelopes that the lines are fitted to
LEAST_SAMPLES = 40
LEAST_SHARE = 0.05  # of the power of each channel that the weaker line must hold
EXPLAINED = 0.97  # of the power of both channels that two lines must explain
OPPOSED = -0.5  # correlation of the squared envelopes from which they count as opposed
LEAST_BEATS = 1.0
NEAR = 0.2  # relative difference of the mean frequencies up to which modes are sought
LOST = 0.3  # share of the amplitude lost over the record from which a decay counts
STRAIGHT = 0.9  # squared correlation of ln amplitude with time of a pure decay
SIZE = 0.01  # upper bound: found in none of 342 self-sustained pairs, whole captures
NUMBERS = (
    "detuning_hz",
    "coupling_hz",
    "offset_rad",
    "noise_rad2_s",
    "measurement_noise_rad",
    "relaxation_rate_hz",
    "detuning_mean_hz",
)
RATES_APART = 0.25  # relative difference of two decay rates that one mode may show


@dataclass(frozen=True, slots=True, kw_only=True)
class ModesFinding:
    """What speaks for modes of one passive system.

    ``lines_hz`` are the frequencies of the modes, one or two; ``decay_1_s`` the rate at which
    the amplitude falls; ``correlation`` that of the squared envelopes.
    """

    kind: Literal["beating modes", "one decaying mode"]
    lines_hz: tuple[float, ...]
    decay_1_s: float
    correlation: float
    reason: str


def find_modes(reference: PhaseTrack, driven: PhaseTrack) -> ModesFinding | None:
    """Return what speaks for normal modes of a passive pair, None where nothing does.

    Parameters
    ----------
    reference, driven : PhaseTrack on one grid

    Returns
    -------
    ModesFinding or None

    Notes
    -----
    Beating modes: two lines common to both channels, each at least 5 % of the power of
    either, explain 97 % of both, and the squared envelopes are opposed (correlation below
    -0.5). One decaying mode: both amplitudes fall by 30 % and more, straight in logarithm and
    at one rate. In simulation neither was found in self-sustained pairs, locked or not.
    """
    stretch = _longest(reference, driven)
    if stretch is None:
        return None
    carrier_hz = _carrier_hz(reference, driven)
    if carrier_hz is None:
        return None
    first, second = (_envelope(track, stretch, carrier_hz) for track in (reference, driven))
    step_s = _block(stretch) / reference.rate_hz
    decaying = _one_mode(first, second, step_s, carrier_hz)
    if decaying is not None:
        return decaying
    correlation = _opposition(np.abs(first), np.abs(second))
    if correlation > OPPOSED:
        return None
    return _two_modes(first, second, step_s, carrier_hz, correlation)


def without_coupling(estimate: AdlerEstimate, modes: ModesFinding | None) -> AdlerEstimate:
    """Return the estimate without numbers where the two are modes of one passive pair.

    Parameters
    ----------
    estimate : AdlerEstimate
    modes : ModesFinding or None

    Returns
    -------
    AdlerEstimate
        Every quantity without a value, the finding as a fired test and as a note.
    """
    if modes is None:
        return estimate
    reason = f"no phase equation holds here: {modes.reason}"
    test = AdequacyTest(
        name="linear coupled modes",
        statistic=abs(modes.correlation),
        threshold=abs(OPPOSED),
        fired=True,
        size=SIZE,
        meaning=modes.reason,
    )
    nothing: dict[str, Any] = {
        name: undetermined(getattr(estimate, name).unit, reason) for name in NUMBERS
    }
    return replace(
        estimate,
        **nothing,
        adequate=False,
        tests=(*estimate.tests, test),
        checks=(),
        notes=(f"not adequate: {test.name}: {test.meaning}",),
    )


def _longest(reference: PhaseTrack, driven: PhaseTrack) -> tuple[int, int] | None:
    """Return the span from first to last valid sample, None where there is too little.

    Phases are not valid in the nulls of a beat; amplitudes hold throughout.
    """
    good = reference.valid & driven.valid
    if reference.rate_hz != driven.rate_hz or reference.phase_rad.size != driven.phase_rad.size:
        return None
    runs = valid_runs(good)
    if not runs or runs[-1][1] - runs[0][0] < LEAST_SAMPLES:
        return None
    return runs[0][0], runs[-1][1]


def _block(stretch: tuple[int, int]) -> int:
    """Return how many samples are averaged to one point of an envelope."""
    return max(1, (stretch[1] - stretch[0]) // MOST_SAMPLES)


def _carrier_hz(reference: PhaseTrack, driven: PhaseTrack) -> float | None:
    """Return the frequency both envelopes are taken against, None unless the two are near.

    Modes of one pair stand in both channels, so the mean frequencies cannot be far apart.
    """
    one, other = reference.frequency_hz.value, driven.frequency_hz.value
    if not one or not other or abs(one - other) > NEAR * abs(one):
        return None
    return one


def _envelope(track: PhaseTrack, stretch: tuple[int, int], carrier_hz: float) -> ComplexArray:
    """Return amplitude exp(i phase) of a channel in blocks, the carrier taken off.

    Where the phase is not valid the sample counts as zero: there the amplitude is too.
    """
    part = slice(*stretch)
    block = _block(stretch)
    size = (stretch[1] - stretch[0]) // block * block
    time_s = np.arange(size) / track.rate_hz
    phase = np.where(track.valid[part], track.phase_rad[part], 0.0)[:size]
    weight = np.where(track.valid[part], track.amplitude[part], 0.0)[:size]
    waves = weight * np.exp(1j * (phase - TURN_RAD * carrier_hz * time_s))
    return np.asarray(waves.reshape(-1, block).mean(axis=1), dtype=complex)


def _opposition(first: FloatArray, second: FloatArray) -> float:
    """Return the correlation of the squared envelopes, a common decay taken off."""
    share = first**2 / max(float(np.mean(first**2)), 1e-300)
    other = second**2 / max(float(np.mean(second**2)), 1e-300)
    total = np.maximum(share + other, 1e-12)
    # Weak modulation is noise or pulling, no exchange of energy.
    if min(float(np.std(share / total)), float(np.std(other / total))) < 0.05:
        return 0.0
    time = np.linspace(-1.0, 1.0, share.size)
    level = np.exp(np.polyval(np.polyfit(time, np.log(total), 1), time))
    return float(np.corrcoef(share / level, other / level)[0, 1])


def _one_mode(
    first: ComplexArray, second: ComplexArray, step_s: float, carrier_hz: float
) -> ModesFinding | None:
    """Return a single mode that dies away in both channels, None where it is none."""
    rates = [_decay(np.abs(one), step_s) for one in (first, second)]
    if any(rate is None for rate in rates):
        return None
    slow, fast = sorted(float(rate or 0.0) for rate in rates)
    if fast - slow > RATES_APART * fast:
        return None
    rate = 0.5 * (slow + fast)
    return ModesFinding(
        kind="one decaying mode",
        lines_hz=(carrier_hz,),
        decay_1_s=rate,
        correlation=1.0,
        reason=(
            f"both amplitudes decay alike, {rate:.3g} per second: a free mode of a passive "
            "pair, whose constant phase is no synchronisation"
        ),
    )


def _decay(amplitude: FloatArray, step_s: float) -> float | None:
    """Return the rate of an exponential decay, 1/s, None where it is none."""
    if not np.all(amplitude > 0.0):
        return None
    time_s = np.arange(amplitude.size) * step_s
    logs = np.log(amplitude)
    slope = float(np.polyfit(time_s, logs, 1)[0])
    straight = float(np.corrcoef(time_s, logs)[0, 1]) ** 2 if np.ptp(logs) > 0 else 0.0
    lost = -math.expm1(slope * time_s[-1]) if slope < 0.0 else 0.0
    return -slope if lost > LOST and straight > STRAIGHT else None


def _two_modes(
    first: ComplexArray, second: ComplexArray, step_s: float, carrier_hz: float, correlation: float
) -> ModesFinding | None:
    """Return two modes that share both channels, None where two lines do not explain them."""
    pair = np.stack([first, second])
    poles = _poles(pair)
    if poles is None:
        return None
    count = np.arange(first.size)
    waves = np.exp(np.log(poles)[:, None] * count)
    weights, *_ = np.linalg.lstsq(waves.T, pair.T, rcond=None)
    power = np.sum(np.abs(pair) ** 2, axis=1)
    left = np.sum(np.abs(pair - (waves.T @ weights).T) ** 2, axis=1)
    lines = np.abs(weights) ** 2 * np.sum(np.abs(waves) ** 2, axis=1)[:, None]
    weaker = np.min(lines, axis=0) / np.maximum(power, 1e-300)
    rates = np.angle(poles) / step_s
    beats = abs(rates[0] - rates[1]) * first.size * step_s / TURN_RAD
    explained = 1.0 - float(np.max(left / np.maximum(power, 1e-300)))
    if explained < EXPLAINED or float(np.min(weaker)) < LEAST_SHARE or beats < LEAST_BEATS:
        return None
    low, high = sorted(carrier_hz + hz_from_rad_s(float(rate)) for rate in rates)
    decay = -float(np.mean(np.log(np.abs(poles)))) / step_s
    return ModesFinding(
        kind="beating modes",
        lines_hz=(low, high),
        decay_1_s=decay,
        correlation=correlation,
        reason=(
            f"two lines, {low:.6g} and {high:.6g} Hz, stand in both channels with opposed "
            "envelopes: normal modes of a passive pair that beat, no synchronisation"
        ),
    )


def _poles(pair: ComplexArray) -> ComplexArray | None:
    """Return the two poles per sample common to both channels, by the matrix pencil.

    References
    ----------
    Hua and Sarkar 1990, IEEE Trans. Acoust. Speech Signal Process. 38, 814 (recalled).
    """
    span = pair.shape[1] // 3
    scaled = pair / np.maximum(np.sqrt(np.mean(np.abs(pair) ** 2, axis=1)), 1e-300)[:, None]
    rows = np.lib.stride_tricks.sliding_window_view(scaled, span, axis=1)
    stacked = rows.reshape(-1, span)
    _, _, right = np.linalg.svd(stacked.conj().T @ stacked, hermitian=True)
    signal = right[:2].T
    shift = np.linalg.pinv(signal[:-1]) @ signal[1:]
    poles = np.linalg.eigvals(shift)
    # Poles far from the unit circle are no lines.
    if np.any(np.abs(np.log(np.maximum(np.abs(poles), 1e-12))) > 0.2):
        return None
    phases = sorted(poles, key=lambda pole: cmath.phase(complex(pole)))
    return np.array(phases, dtype=complex)
