"""What the terminal shows of one measured capture: a line a fact, aligned."""

from __future__ import annotations

import math

from fit.records import Episode, Measurement
from fit.state import FREE_SPREAD_NOTE
from reports.numbers import angle_text, one_line, paper_text, quantity_text
from rig.quantities import Quantity

_NOTES_IN_FULL = {
    FREE_SPREAD_NOTE: "no free-running capture of both: how far apart the two run alone is assumed "
    "(--free-spread), and so is the evidence for a lock",
}
SLIPS_SHOWN = 8  # a terminal is no place for a list of hundreds; JSON has them all
EPISODES_SHOWN = 8
ANY_ANGLE_U_RAD = math.pi / 2.0  # at k = 2 the whole circle
_LABEL = 18
STANDARD = "± is one standard uncertainty (k = 1)"


def measurement_text(measurement: Measurement, *, with_notes: bool = True) -> str:
    """Return what one capture says, a line a fact; its notes last, unless they are not wanted."""
    order = measurement.order
    lines = [
        _line("capture", f"{measurement.path} ({measurement.format})"),
        _line("", f"{measurement.duration_s:.6g} s at {measurement.rate_hz:.8g} Hz"),
        *_role_lines("reference", measurement),
        *_role_lines("driven", measurement),
        _line("locking order", f"{order.n}:{order.m} ({order.source})"),
        _line("state", f"{measurement.decision.state}: {measurement.decision.reason}"),
        _line("locked fraction", f"{measurement.decision.locked_fraction:.3f} of the valid time"),
        *_episode_lines(measurement),
        *_slip_lines(measurement),
        _line("mean rate", quantity_text(measurement.mean_rate_hz)),
        _line("slip rate", quantity_text(measurement.slip_rate_hz)),
        _line("jitter in lock", paper_text(measurement.jitter_rad)),
        _line("pull-in time", quantity_text(measurement.pull_in_s)),
        *_adler_lines(measurement),
        *(_note_lines(measurement) if with_notes else ()),
        _line("", STANDARD),
    ]
    return "\n".join(lines) + "\n"


def _line(label: str, text: str) -> str:
    return f"{label:<{_LABEL}}{one_line(text)}".rstrip()


def _role_lines(role: str, measurement: Measurement) -> list[str]:
    summary = measurement.reference if role == "reference" else measurement.driven
    snr = "" if summary.snr_db is None else f", {summary.snr_db:.0f} dB in band"
    text = f"channel {summary.channel}, {quantity_text(summary.frequency_hz)}"
    return [_line(role, f"{text}, {summary.method}{snr}")]


def _episode_lines(measurement: Measurement) -> list[str]:
    """Return the first locked episodes."""
    lines = [
        _line(
            f"episode {number}",
            f"{episode.start_s:.6g} to {episode.stop_s:.6g} s, psi {_place(episode)}",
        )
        for number, episode in enumerate(measurement.episodes[:EPISODES_SHOWN], start=1)
    ]
    return lines + _more("episodes", len(measurement.episodes) - EPISODES_SHOWN)


def _place(episode: Episode) -> str:
    """Return angle and style, or that there is none where the angle may be any."""
    if episode.offset_u_rad >= ANY_ANGLE_U_RAD:
        return "cannot be determined (any angle)"
    return f"{angle_text(episode.offset_rad, episode.offset_u_rad)}, {episode.style}"


def _slip_lines(measurement: Measurement) -> list[str]:
    slips = measurement.slips
    if not slips:
        return [_line("slips", "none")]
    shown = ", ".join(f"{slip.time_s:.6g} s ({slip.turns:+d})" for slip in slips[:SLIPS_SHOWN])
    return [_line("slips", f"{len(slips)}: {shown}"), *_more("slips", len(slips) - SLIPS_SHOWN)]


def _more(what: str, count: int) -> list[str]:
    return [_line("", f"and {count} more {what} (see --json)")] if count > 0 else []


def _adler_lines(measurement: Measurement) -> list[str]:
    """Return the estimate of the phase equation; one line where one reason covers its terms."""
    adler = measurement.adler
    holds = {True: "describes this record", False: "rejected by this record", None: "not tested"}
    terms = {
        "detuning": adler.detuning_hz,
        "coupling": adler.coupling_hz,
        "offset": adler.offset_rad,
    }
    reasons = {(term.reason, _bounded(term)) for term in terms.values() if term.value is None}
    if all(term.value is None for term in terms.values()) and len(reasons) == 1:
        told = [_line(", ".join(terms), ""), _line("", quantity_text(adler.detuning_hz))]
    else:
        told = [_line(name, paper_text(term)) for name, term in terms.items()]
    return [
        *told,
        _line("phase noise D", quantity_text(adler.noise_rad2_s)),
        _line("phase equation", holds[adler.adequate]),
    ]


def _bounded(quantity: Quantity) -> bool:
    return quantity.low is not None or quantity.high is not None


def _note_lines(measurement: Measurement) -> list[str]:
    notes = [
        *measurement.capture_notes,
        *(f"reference: {note}" for note in measurement.reference.notes),
        *(f"driven: {note}" for note in measurement.driven.notes),
        *measurement.notes,
        *measurement.decision.notes,
        *measurement.adler.notes,
    ]
    told = (_NOTES_IN_FULL.get(note, note) for note in notes)
    return [_line("note", note) for note in dict.fromkeys(told)]
