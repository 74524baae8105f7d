"""Checks of a channel that has a line: its neighbours, its noise, its steadiness."""

from __future__ import annotations

from collections.abc import Callable

from rig.health.channel_lines import ChannelLines
from rig.health.faults import THRESHOLDS, Fault, graded, limit_of
from rig.health.level_steps import level_step, offset_step
from rig.health.subject import Subject
from rig.spectrum import chance_prominence_db


def _no_line(subject: Subject) -> Fault | None:
    lines = subject.lines
    if lines is None or lines.is_clear or lines.is_spiky:
        return None
    above = lines.own.prominence_db - chance_prominence_db(lines.coarse)
    text = (
        f"{subject.title} has no line above its noise: the highest, at "
        f"{lines.own.frequency_hz:.6g} Hz, stands {lines.own.prominence_db:.1f} dB above the "
        f"floor, {lines.own.prominence_db - above:.1f} dB needed. Check cable, gain and order."
    )
    return graded("no line", above, text)


def _lines(subject: Subject) -> ChannelLines:
    assert subject.lines is not None  # only called for channels that oscillate
    return subject.lines


def _spikes(subject: Subject) -> Fault | None:
    lines = subject.lines
    if lines is None or not lines.is_spiky:
        return None
    how = "" if lines.is_clear else " at irregular times"
    text = (
        f"{subject.title} is a train of spikes{how}, about {lines.own.frequency_hz:.4g} a second. "
        "Use the estimator spike or pulse."
    )
    return graded("spikes", subject.survey.kurtosis, text)


def _offset(subject: Subject) -> Fault | None:
    ratio = abs(subject.survey.mean) / _lines(subject).own.amplitude
    text = f"{subject.title}: offset {ratio:.2g}x amplitude; taken off. Check coupling."
    return graded("offset", ratio, text)


def _harmonic(subject: Subject) -> Fault | None:
    lines = _lines(subject)
    if lines.fundamental is not None and not _is_partner(subject, lines.fundamental.frequency_hz):
        ratio = lines.own.amplitude / lines.fundamental.amplitude
        text = (
            f"{subject.title}: line at {lines.own.frequency_hz:.6g} Hz is {ratio:.2g}x that at "
            f"{lines.fundamental.frequency_hz:.6g} Hz, of which it may be a harmonic. "
            "State the band of the line that is meant."
        )
        return graded("harmonic", ratio, text)
    others = [
        part
        for part in lines.harmonics
        if not _is_partner(subject, part[0] * lines.own.frequency_hz)
    ]
    order, amplitude = max(others, key=lambda part: part[1], default=(0, 0.0))
    ratio = amplitude / lines.own.amplitude
    text = (
        f"{subject.title}: harmonic {order} is {ratio:.2g}x the line at "
        f"{lines.own.frequency_hz:.6g} Hz. Keep the band around the line."
    )
    return graded("harmonic", ratio, text)


def _is_partner(subject: Subject, frequency_hz: float) -> bool:
    """Tell whether a line may be the partner's, which crosstalk judges."""
    talk = subject.crosstalk
    reach = 3.0 * _lines(subject).coarse.resolution_hz
    return talk is not None and abs(frequency_hz - talk.partner_hz) <= reach


def _mains(subject: Subject) -> Fault | None:
    lines = _lines(subject)
    if lines.mains is None or _is_partner(subject, lines.mains.frequency_hz):
        return None
    ratio = lines.mains.amplitude / lines.own.amplitude
    text = (
        f"{subject.title}: mains pick-up at {lines.mains.frequency_hz:.5g} Hz is {ratio:.2g}x "
        "the own line. Check shield and earthing; keep it out of the band."
    )
    return graded("mains", ratio, text)


def _at_mains(subject: Subject) -> Fault | None:
    lines = _lines(subject)
    if not lines.is_at_mains:
        return None
    text = (
        f"{subject.title}: the line at {lines.own.frequency_hz:.6g} Hz cannot be told from mains "
        "pick-up. Record once with the oscillator off."
    )
    return graded("at mains", lines.own.frequency_hz, text)


def _crosstalk(subject: Subject) -> Fault | None:
    talk = subject.crosstalk
    if talk is None or talk.leak_ratio is None:
        return None
    share = talk.leak_ratio
    size = f"{share:.2g}x more of" if share > 1 else f"{share:.2g} of its own amplitude from"
    ending = (
        "locking cannot be judged. Separate the sensors."
        if share > limit_of("crosstalk")
        else "a leak, or the oscillator's own answer to being pulled: it can fake a lock. Tell "
        "them apart far off lock; separate the sensors, or state narrower bands."
    )
    own = f" than of its own at {talk.own_hz:.6g} Hz" if share > 1 else ""
    text = (
        f"{subject.title} contains {size} the partner's line at {talk.partner_hz:.6g} Hz{own}; "
        f"{ending}"
    )
    return graded("crosstalk", share, text)


def _samples_per_cycle(subject: Subject) -> Fault | None:
    threshold = THRESHOLDS["samples per cycle"]
    line_hz = _lines(subject).own.frequency_hz
    text = (
        f"{subject.title}: rate {subject.rate_hz:.8g} Hz gives {subject.cycle_frames:.2g} samples "
        f"per cycle of {line_hz:.6g} Hz; at least {threshold.fault:g} needed "
        f"({threshold.warning:g} advised). Raise the rate."
    )
    return graded("samples per cycle", subject.cycle_frames, text)


def _cycles(subject: Subject) -> Fault | None:
    threshold = THRESHOLDS["cycles"]
    cycles = subject.survey.finite_count / subject.cycle_frames
    text = (
        f"{subject.title}: record holds {cycles:.1f} cycles; at least {threshold.fault:g} needed "
        f"({threshold.warning:g} advised). Record longer."
    )
    return graded("cycles", cycles, text)


def _noise(subject: Subject) -> Fault | None:
    lines = _lines(subject)
    if lines.is_spiky:
        return None
    text = (
        f"{subject.title}: line at {lines.own.frequency_hz:.6g} Hz stands "
        f"{round(lines.own.snr_db, 1) + 0.0} dB above what surrounds it (noise, or its "
        "own wander) in a band as wide as its frequency. Raise the gain, or state a narrower band."
    )
    return graded("noise", lines.own.snr_db, text)


def _level_step(subject: Subject) -> Fault | None:
    own_hz = _lines(subject).own.frequency_hz
    step = level_step(subject.survey.slots, subject.rate_hz, own_hz)
    if step is None:
        return None
    text = (
        f"{subject.title}: level changes {step.size:.2g}-fold at {step.time_s:.4g} s and stays. "
        "Was a range switched, or a sensor moved?"
    )
    return graded("level step", step.size, text)


def _offset_step(subject: Subject) -> Fault | None:
    own = _lines(subject).own
    step = offset_step(subject.survey.slots, subject.rate_hz, own.frequency_hz)
    if step is None:
        return None
    ratio = step.size / own.amplitude
    text = (
        f"{subject.title}: offset jumps by {ratio:.2g}x amplitude at {step.time_s:.4g} s and "
        "stays. Check the sensor's supply and mounting."
    )
    return graded("offset step", ratio, text)


CLARITY_CHECKS: dict[str, Callable[[Subject], Fault | None]] = {
    "no line": _no_line,
    "spikes": _spikes,
}
LINE_CHECKS: dict[str, Callable[[Subject], Fault | None]] = {
    "samples per cycle": _samples_per_cycle,
    "cycles": _cycles,
    "noise": _noise,
    "offset": _offset,
    "harmonic": _harmonic,
    "mains": _mains,
    "at mains": _at_mains,
    "crosstalk": _crosstalk,
    "level step": _level_step,
    "offset step": _offset_step,
}
