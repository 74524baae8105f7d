"""Faults of a signal, and the one table of thresholds from which on they are faults."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from rig.health.survey import Span

Severity = Literal["fault", "warning"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Threshold:
    """Where a fault begins, in which unit, and why just there.

    From ``warning`` on it is a warning and from ``fault`` on a fault; None leaves one out.
    ``falling`` marks a quantity that is bad when it is low.
    """

    warning: float | None
    fault: float | None
    unit: str
    reason: str
    falling: bool = False


THRESHOLDS: dict[str, Threshold] = {
    "silent": Threshold(
        warning=None, fault=0.0, unit="spread", reason="equal samples hold no oscillation"
    ),
    "too short": Threshold(
        warning=None,
        fault=16.0,
        unit="samples",
        falling=True,
        reason="fewer samples give no spectrum to judge by",
    ),
    "no line": Threshold(
        warning=None,
        fault=0.0,
        unit="dB above chance",
        falling=True,
        reason="a lower peak shows in one of a thousand spectra of plain noise",
    ),
    "clipped": Threshold(
        warning=1e-4,
        fault=1e-3,
        unit="share of samples",
        reason="1e-3 at the rail flattens 0.3 % of each top of a sine; harmonics and a wrong "
        "amplitude follow, and what was lost at the top is not known",
    ),
    "flat tops": Threshold(
        warning=1e-3,
        fault=None,
        unit="share of samples",
        reason="a square, a pulse or a half wave rests at its extreme by itself; a wave that was "
        "cut off hard looks the same",
    ),
    "missing": Threshold(
        warning=0.0,
        fault=0.5,
        unit="share of samples",
        reason="a gap splits the record: turns across it cannot be counted",
    ),
    "standstill": Threshold(
        warning=0.0,
        fault=0.5,
        unit="share of samples",
        reason="no oscillation holds one exact value for half a cycle; zero fill does",
    ),
    "spikes": Threshold(
        warning=8.0,
        fault=None,
        unit="kurtosis",
        reason="a train of spikes has its power spread over many lines: its phase stands in the "
        "times of the spikes, not in one line",
    ),
    "offset": Threshold(
        warning=1.0,
        fault=None,
        unit="amplitudes",
        reason="the offset is taken off, but above the amplitude the coupling or the range of "
        "the input is rarely meant",
    ),
    "harmonic": Threshold(
        warning=0.3,
        fault=1.0,
        unit="of the own line",
        reason="a second harmonic of relative size h makes h rad of ripple in an unfiltered "
        "phase; above 1 the phase counts the harmonic",
    ),
    "mains": Threshold(
        warning=0.1,
        fault=1.0,
        unit="of the own line",
        reason="0.1 makes 0.1 rad of ripple where the band lets the mains through",
    ),
    "at mains": Threshold(
        warning=0.0,
        fault=None,
        unit="Hz",
        reason="pick-up at the frequency of the oscillation looks like a steady partner",
    ),
    "crosstalk": Threshold(
        warning=0.07,
        fault=1.0,
        unit="of the own line",
        reason="0.07 (-23 dB) makes 0.07 rad of ripple at the beat, and as much of a wrong locked "
        "angle; from 1 on the mean frequency is the partner's, and two free oscillators read as "
        "locked",
    ),
    "samples per cycle": Threshold(
        warning=10.0,
        fault=4.0,
        unit="samples",
        falling=True,
        reason="below 2 the sign of the frequency is lost, below 4 noise can do the same",
    ),
    "cycles": Threshold(
        warning=50.0,
        fault=20.0,
        unit="cycles",
        falling=True,
        reason="the filter's guards take some 6 cycles at each end",
    ),
    "noise": Threshold(
        warning=10.0,
        fault=None,
        unit="dB",
        falling=True,
        reason="in a band as wide as its frequency 10 dB leave 0.2 rad of phase noise; below, "
        "only a narrower band keeps noise from slipping the phase",
    ),
    "level step": Threshold(
        warning=1.5,
        fault=None,
        unit="ratio",
        reason="a lasting sudden change of half again is a range switched or a sensor moved",
    ),
    "offset step": Threshold(
        warning=1.0,
        fault=None,
        unit="amplitudes",
        reason="a jump of one amplitude turns the phase before the offset is followed",
    ),
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Fault:
    """One thing found: its name, how bad, the value against the threshold, and the remedy.

    ``text`` is one line with channel, evidence and remedy; ``reason`` says why the threshold
    stands where it does. ``spans`` are the frames concerned, where there are such.
    """

    name: str
    severity: Severity
    value: float
    threshold: float
    unit: str
    text: str
    reason: str
    spans: tuple[Span, ...] = ()


def graded(name: str, value: float, text: str, spans: tuple[Span, ...] = ()) -> Fault | None:
    """Return a fault or warning when a value has passed its threshold."""
    threshold = THRESHOLDS[name]
    for severity, at in (("fault", threshold.fault), ("warning", threshold.warning)):
        if at is not None and _passed(value, at, threshold.falling):
            return Fault(
                name=name,
                severity="fault" if severity == "fault" else "warning",
                value=value,
                threshold=at,
                unit=threshold.unit,
                text=text,
                reason=threshold.reason,
                spans=spans,
            )
    return None


def _passed(value: float, at: float, falling: bool) -> bool:
    return value < at if falling else value > at


def limit_of(name: str, severity: Severity = "fault") -> float:
    """Return a threshold of the table by name and severity.

    Raises
    ------
    KeyError
        If the table has no such threshold.
    """
    threshold = THRESHOLDS[name]
    value = threshold.fault if severity == "fault" else threshold.warning
    if value is None:
        raise KeyError(f"threshold '{name}' has no {severity}")
    return value


def percent(share: float) -> str:
    """Return a share in percent with two digits, never rounded to all or nothing."""
    text = f"{100.0 * share:.2g}"
    return "over 99.9 %" if text == "100" and share < 1 else f"{float(text):g} %"
