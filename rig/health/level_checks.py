"""Checks of levels that need no line: silence, clipping, missing samples, standstill."""

from __future__ import annotations

from collections.abc import Callable, Sequence

from rig.health.faults import THRESHOLDS, Fault, graded, limit_of, percent
from rig.health.flat_tops import Shape, flat_shape
from rig.health.subject import Subject
from rig.health.survey import KEPT_SPANS, ChannelSurvey, Extreme, Span

LOGIC_SHARE = 0.995  # of samples at just two values: a logic signal, whose rails are meant
REPEATED_RATIO = 4.0  # a coarse sine stands 2.4 times as often at its top as one step below
WAVE_STILLS = 0.25  # standstills a cycle from which they are the shape of the wave
STILL_CYCLES = 0.5  # cycles of one value from which it is a standstill


def _silent(subject: Subject) -> Fault | None:
    survey = subject.survey
    if survey.finite_count == 0 or survey.top.value > survey.bottom.value:
        return None
    text = (
        f"{subject.title} has no oscillation (all samples {survey.top.value:g}). "
        "Check cable or channel order."
    )
    threshold = THRESHOLDS["silent"]
    return Fault(
        name="silent",
        severity="fault",
        value=0.0,
        threshold=0.0,
        unit=threshold.unit,
        text=text,
        reason=threshold.reason,
    )


def _too_short(subject: Subject) -> Fault | None:
    survey, threshold = subject.survey, THRESHOLDS["too short"]
    is_silent = survey.top.value == survey.bottom.value
    if subject.lines is not None or survey.finite_count == 0 or is_silent:
        return None
    return Fault(
        name="too short",
        severity="fault",
        value=float(survey.finite_count),
        threshold=limit_of("too short"),
        unit=threshold.unit,
        text=f"{subject.title}: {survey.finite_count} finite samples, at least "
        f"{limit_of('too short'):g} in one piece needed. Record longer.",
        reason=threshold.reason,
    )


def _clipped(subject: Subject) -> Fault | None:
    if _rests(subject):
        return None
    share, where = _cut_share(subject)
    text = (
        f"{subject.title}: {percent(share)} of samples at {where}; "
        f"limit {percent(limit_of('clipped'))}. Lower the gain and repeat."
    )
    return graded("clipped", share, text)


def _flat_tops(subject: Subject) -> Fault | None:
    if _rests(subject):
        return None
    survey = subject.survey
    if _is_logic(survey):
        flat = [survey.top, survey.bottom] if survey.rail_count else []
    else:
        flat = [] if survey.rail_count else _flat_sides(subject, "flat")
    share = sum(side.count for side in flat) / max(1, survey.finite_count)
    text = (
        f"{subject.title}: flat tops at {_values(flat)} ({percent(share)} of samples): clipped, or "
        "a square, pulsed or half-wave signal. Look at its shape; lower the gain if it is neither."
    )
    return graded("flat tops", share, text)


def _rests(subject: Subject) -> bool:
    """Tell whether a train of spikes rests at its one repeated extreme: that is no clipping."""
    survey, lines = subject.survey, subject.lines
    if lines is None or not lines.is_spiky or survey.rail_count:
        return False
    is_flat = [
        side.count > max(2, REPEATED_RATIO * side.next_count)
        for side in (survey.top, survey.bottom)
    ]
    return is_flat.count(True) == 1


def _cut_share(subject: Subject) -> tuple[float, str]:
    """Return the share of samples at a rail, and which rail: full scale or a repeated extreme.

    A signal of two values only is a logic signal, not a clipped one.
    """
    survey = subject.survey
    if _is_logic(survey):
        return 0.0, "two values"
    count = max(1, survey.finite_count)
    if survey.rail_count:
        return survey.rail_count / count, "full scale"
    cut = _flat_sides(subject, "cut")
    return sum(side.count for side in cut) / count, f"the same extreme value ({_values(cut)})"


def _is_logic(survey: ChannelSurvey) -> bool:
    sides = survey.top.count + survey.bottom.count
    is_silent = not survey.top.value > survey.bottom.value
    return not is_silent and sides >= LOGIC_SHARE * max(1, survey.finite_count)


def _flat_sides(subject: Subject, shape: Shape) -> list[Extreme]:
    """Return the extremes that stand far more often than the next value, of one shape."""
    survey = subject.survey
    if survey.finite_count == 0 or not survey.top.value > survey.bottom.value:
        return []
    swing = survey.top.value - survey.bottom.value
    return [
        side
        for side in (survey.top, survey.bottom)
        if side.count > max(2, REPEATED_RATIO * side.next_count)
        and flat_shape(survey.spans, side.value, swing, subject.cycle_frames) == shape
    ]


def _values(sides: Sequence[Extreme]) -> str:
    return " and ".join(f"{side.value:.6g}" for side in sides)


def _missing(subject: Subject) -> Fault | None:
    survey = subject.survey
    lost = survey.frame_count - survey.finite_count
    segments = _segments(survey.gaps, survey.frame_count)
    text = (
        f"{subject.title}: {_spans_text('gap', survey.gaps, survey.gap_count, subject.rate_hz)}, "
        f"{percent(lost / survey.frame_count)} of samples missing; split in {segments} "
        f"segment{'s' if segments != 1 else ''}. Check the recorder's buffer or link."
    )
    return graded("missing", lost / survey.frame_count, text, survey.gaps)


def _segments(gaps: tuple[Span, ...], frame_count: int) -> int:
    edges = [0, *(edge for gap in gaps for edge in (gap.start, gap.stop)), frame_count]
    return sum(stop > start for start, stop in zip(edges[::2], edges[1::2], strict=True))


def _spans_text(word: str, spans: tuple[Span, ...], count: int, rate_hz: float) -> str:
    first = spans[0] if spans else Span(start=0, stop=0)
    times = f"{first.start / rate_hz:.6g} to {first.stop / rate_hz:.6g} s"
    return f"{word} at {times}" if count <= 1 else f"{count} {word}s, first at {times}"


def _standstill(subject: Subject) -> Fault | None:
    survey = subject.survey
    shortest = STILL_CYCLES * subject.cycle_frames
    spans = tuple(span for span in survey.stills if span.frames > shortest)
    if subject.lines is None or not spans or _is_wave(subject, len(spans)):
        return None
    share = sum(span.frames for span in spans) / survey.frame_count
    text = (
        f"{subject.title}: {_spans_text('standstill', spans, len(spans), subject.rate_hz)} "
        "(equal samples for over half a cycle). Check the link: were lost samples filled in?"
    )
    return graded("standstill", share, text, spans)


def _is_wave(subject: Subject, count: int) -> bool:
    """Tell whether standstills come so often that they are the shape of the wave: pulses."""
    survey = subject.survey
    cycles = survey.frame_count / subject.cycle_frames
    often = survey.still_count if count > KEPT_SPANS // 2 else count
    return often > WAVE_STILLS * cycles


LEVEL_CHECKS: dict[str, Callable[[Subject], Fault | None]] = {
    "silent": _silent,
    "too short": _too_short,
    "clipped": _clipped,
    "flat tops": _flat_tops,
    "missing": _missing,
    "standstill": _standstill,
}
