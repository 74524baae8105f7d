"""The health of the signals of a capture, from one pass over it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from rig.captures import Capture
from rig.health.channel_lines import ChannelLines, find_channel_lines
from rig.health.crosstalk import Crosstalk, find_crosstalk
from rig.health.faults import Fault
from rig.health.level_checks import LEVEL_CHECKS
from rig.health.line_checks import CLARITY_CHECKS, LINE_CHECKS
from rig.health.locus import SpanTransforms, transforms_of
from rig.health.subject import Subject, channel_title
from rig.health.survey import ChannelSurvey, survey_channels


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SignalHealth:
    """One channel examined: levels, lines, and what is wrong; levels are in sample units.

    ``mean`` and ``rms`` (about zero) are over the finite samples. ``lines`` is None when
    nothing oscillates, ``crosstalk`` None when no partner was given or found.
    """

    column: int
    channel: str
    unit: str
    rate_hz: float
    survey: ChannelSurvey
    lines: ChannelLines | None
    crosstalk: Crosstalk | None
    faults: tuple[Fault, ...]

    @property
    def frequency_hz(self) -> float | None:
        """Frequency of the own line, Hz."""
        return None if self.lines is None else self.lines.own.frequency_hz

    @property
    def amplitude(self) -> float | None:
        """Peak value of the own line, sample units."""
        return None if self.lines is None else self.lines.own.amplitude

    @property
    def snr_db(self) -> float | None:
        """Own line against the floor in a band as wide as its frequency, dB; None of spikes."""
        if self.lines is None or self.lines.is_spiky:
            return None
        return self.lines.own.snr_db

    @property
    def peak(self) -> float:
        """Largest absolute value, sample units."""
        return max(abs(self.survey.top.value), abs(self.survey.bottom.value))


def examine_signals(
    capture: Capture,
    columns: Sequence[int] | None = None,
    *,
    partners: Mapping[int, int] | None = None,
) -> tuple[SignalHealth, ...]:
    """Return the health of some columns of a capture, read once and in bounded memory.

    Parameters
    ----------
    capture : Capture
    columns : sequence of int, column numbers from 0; all by default
    partners : the column of the partner oscillator for a column; by default, two columns are
        each other's partners and more than two have none

    Raises
    ------
    CaptureError
        If the file turns out to be damaged while it is read.
    """
    chosen = tuple(range(len(capture.channels))) if columns is None else tuple(columns)
    if partners is None:
        partners = {chosen[0]: chosen[1], chosen[1]: chosen[0]} if len(set(chosen)) == 2 else {}
    surveys = dict(zip(chosen, survey_channels(capture, chosen), strict=True))
    lines = {
        column: find_channel_lines(capture.channels[column].name, survey, capture.rate_hz)
        for column, survey in surveys.items()
    }
    made = transforms_of([survey.spans for survey in surveys.values()])
    spans = dict(zip(surveys, made, strict=True))
    return tuple(
        _health(capture, surveys[column], spans, lines, partners.get(column)) for column in chosen
    )


def _health(
    capture: Capture,
    survey: ChannelSurvey,
    spans: Mapping[int, SpanTransforms],
    lines: Mapping[int, ChannelLines | None],
    partner: int | None,
) -> SignalHealth:
    channel = capture.channels[survey.column]
    own, other = lines[survey.column], lines.get(partner) if partner is not None else None
    both = own is not None and other is not None and own.is_clear and other.is_clear
    crosstalk = (
        find_crosstalk(own, other, spans[survey.column], spans[partner], capture.rate_hz)
        if both and own and other and partner is not None
        else None
    )
    subject = Subject(
        title=channel_title(survey.column, channel.name),
        rate_hz=capture.rate_hz,
        full_scale=channel.full_scale,
        survey=survey,
        lines=own,
        crosstalk=crosstalk,
    )
    return SignalHealth(
        column=survey.column,
        channel=channel.name,
        unit=channel.unit,
        rate_hz=capture.rate_hz,
        survey=survey,
        lines=own,
        crosstalk=crosstalk,
        faults=find_faults(subject),
    )


def find_faults(subject: Subject) -> tuple[Fault, ...]:
    """Return all faults of a channel, in the order of the checks.

    Without a line that stands out only the checks that need none are made.
    """
    checks = [*LEVEL_CHECKS.values(), *CLARITY_CHECKS.values()]
    if subject.lines is not None and subject.lines.is_clear:
        checks += LINE_CHECKS.values()
    return tuple(fault for check in checks if (fault := check(subject)) is not None)
