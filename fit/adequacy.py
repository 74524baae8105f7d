"""Does the phase equation describe a record? The tests applied to estimates.

The tests themselves stand in ``fit.adequacy_tests``; here they get what they need and their
outcome is put on the estimate.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from fit.adequacy_tests import ADEQUACY, HARMONICS, Case, make_case
from fit.adler_fit import AdlerSettings, fit_records
from fit.drift_trace import trace_records
from fit.inertia import find_inertia
from fit.records import AdequacyTest, AdlerEstimate, PsiSeries
from rig.angles import rad_s_from_hz
from rig.arrays import FloatArray
from rig.phases.track import PhaseTrack
from rig.quantities import undetermined

COURSE_DEGREE = 3
LEAST_COURSE = 0.05  # change of the squared amplitude, over its mean, from which it is a course
R_FLOOR = 1e-3  # measurement noise taken where the record does not show it, in 2 D h


def examine_estimates(
    series: Sequence[PsiSeries],
    estimates: Sequence[AdlerEstimate],
    *,
    amplitudes: Sequence[Sequence[FloatArray] | None] | None = None,
) -> list[AdlerEstimate]:
    """Return the estimates with their adequacy tests and what follows from them.

    Parameters
    ----------
    series : sequence of PsiSeries
    estimates : sequence of AdlerEstimate, as many
    amplitudes : sequence of (one array a segment) or None, optional
        Squared amplitude of the driven oscillator over its mean, less 1, at the samples of
        each record; where given, dependence of the frequency on it is tested too.

    Returns
    -------
    list of AdlerEstimate
        ``adequate`` is False where a test fired, True where none did and the record
        determines the coupling, None where nothing could be tested or a steady lock shows
        too little.
    """
    points = _points(series, estimates)
    kept = [row for row, point in enumerate(points) if point is not None]
    known = _known(
        [series[k] for k in kept], [None if amplitudes is None else amplitudes[k] for k in kept]
    )
    chosen = [point for point in points if point is not None]
    own = [series[k] for k in kept]
    traces = trace_records(own, chosen, harmonics=HARMONICS, known=known) if kept else []
    inertia = find_inertia(own, chosen) if kept else []
    examined = list(estimates)
    for place, row in enumerate(kept):
        case = make_case(own[place], chosen[place], traces[place], inertia[place])
        if case is not None:
            examined[row] = _marked(estimates[row], _tested(case))
    return examined


def squared_amplitudes(track: PhaseTrack, series: PsiSeries) -> tuple[FloatArray, ...] | None:
    """Return the course of the squared amplitude over its mean, less 1, at a series' samples.

    Parameters
    ----------
    track : PhaseTrack
    series : PsiSeries made from the track

    Returns
    -------
    tuple of arrays, one a segment, or None where the squared amplitude keeps within 5 %

    Notes
    -----
    A cubic in time: the same kicks move amplitude and phase of a noisy oscillator, so that
    quick changes of amplitude say nothing of how the frequency depends on it.
    """
    usable = track.valid & np.isfinite(track.amplitude)
    mean = float(np.mean(track.amplitude[usable] ** 2)) if np.any(usable) else 0.0
    if not mean > 0.0:
        return None
    at_s = track.time_s[usable]
    if at_s.size <= COURSE_DEGREE + 1:
        return None  # a cubic through so few samples says nothing
    middle_s, half_s = 0.5 * (at_s[0] + at_s[-1]), max(0.5 * (at_s[-1] - at_s[0]), 1e-300)
    course = np.polyfit(
        (at_s - middle_s) / half_s, track.amplitude[usable] ** 2 / mean - 1.0, COURSE_DEGREE
    )
    if not float(np.ptp(np.polyval(course, np.linspace(-1.0, 1.0, 50)))) > LEAST_COURSE:
        return None
    return tuple(
        np.polyval(course, (start_s + np.arange(part.size) * series.step_s - middle_s) / half_s)
        for part, start_s in zip(series.segments, series.start_s, strict=True)
    )


def _points(
    series: Sequence[PsiSeries], estimates: Sequence[AdlerEstimate]
) -> list[FloatArray | None]:
    """Return (dw, a, b, ln D, ln R) of each record, None where no fit exists."""
    points: list[FloatArray | None] = [
        None if one.method == "none" else _point_of(record, one)
        for record, one in zip(series, estimates, strict=True)
    ]
    again = [
        row for row, one in enumerate(estimates) if one.method != "none" and points[row] is None
    ]
    if again:
        plain = AdlerSettings(intervals=False)
        fits = fit_records([series[k] for k in again], [None] * len(again), plain)
        for row, fit in zip(again, fits, strict=True):
            points[row] = fit.theta if fit.converged else None
    return points


def _point_of(record: PsiSeries, estimate: AdlerEstimate) -> FloatArray | None:
    """Return the parameters that an estimate states, None where it states too few.

    A steady lock states relaxation rate and rest angle: the equation with the detuning at
    zero that relaxes at this rate to this angle moves just like it.
    """
    diffusion = estimate.noise_rad2_s.value
    if not diffusion:
        return None
    detuning, coupling, offset = (
        estimate.detuning_hz.value,
        estimate.coupling_hz.value,
        estimate.offset_rad.value,
    )
    if detuning is None or coupling is None or offset is None:
        detuning, coupling = 0.0, estimate.relaxation_rate_hz.value
        offset = dict(estimate.checks).get("rest angle", undetermined("rad", "none")).value
    if coupling is None or offset is None:
        return None
    least = R_FLOOR * 2.0 * diffusion * record.step_s
    noise = max((estimate.measurement_noise_rad.value or 0.0) ** 2, least)
    rate = rad_s_from_hz(coupling)
    return np.array(
        [
            rad_s_from_hz(detuning),
            rate * math.sin(offset),
            -rate * math.cos(offset),
            math.log(diffusion),
            math.log(noise),
        ]
    )


def _known(
    series: Sequence[PsiSeries], amplitudes: Sequence[Sequence[FloatArray] | None]
) -> list[list[FloatArray]] | None:
    """Return the known drifts of the traces: the squared amplitude, zeros where not given."""
    if all(one is None for one in amplitudes):
        return None
    return [
        [
            np.zeros((part.size, 1)) if own is None else np.asarray(own[place])[:, None]
            for place, part in enumerate(record.segments)
        ]
        for record, own in zip(series, amplitudes, strict=True)
    ]


def _tested(case: Case) -> tuple[AdequacyTest, ...]:
    """Return the tests of one record, fired ones with the effect of the richer model."""
    tests = [(name, test(case)) for name, test in ADEQUACY.items()]
    return tuple(replace(test, name=name) for name, test in tests if test is not None)


def _marked(estimate: AdlerEstimate, tests: tuple[AdequacyTest, ...]) -> AdlerEstimate:
    """Return the estimate with its tests and the judgement that follows."""
    fired = [test for test in tests if test.fired]
    whole = estimate.coupling_hz.value is not None
    notes = tuple(f"not adequate: {test.name}: {test.meaning}" for test in fired)
    if not fired and not whole:
        notes = ("adequacy: a steady lock shows inertia and whiteness only, no harmonics",)
    return replace(
        estimate,
        adequate=False if fired else (True if whole else None),
        tests=estimate.tests + tests,
        notes=estimate.notes + notes,
    )
