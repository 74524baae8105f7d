"""The standing texts of a report: definitions, method, decision rules, cautions, statements."""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence

from reports.content_model import Block, Bullets, Fields, Paragraph
from reports.limited import LIMITED
from reports.limits import OVERALL_RULE
from reports.numbers import plain_number, with_unit
from reports.records import SweepRun
from reports.rows import usable_rows
from rig.angles import deg_from_rad, rad_from_turns

_NUMBER = re.compile(r"[0-9]*\.?[0-9]+")

# The range words differ between handbooks, so the report defines the ones it uses.
DEFINITIONS: tuple[tuple[str, str], ...] = (
    (
        "Phase difference ψ",
        "n times the phase of the driven minus m times the phase of the reference oscillator, at "
        "the locking order n:m of this report; one slip moves ψ by a whole turn.",
    ),
    (
        "Locked",
        "ψ stays within a stated band about a constant for at least a stated minimum time. "
        "Unbounded noise always ends a lock sooner or later, so a record can only say that no "
        "slip occurred in its length.",
    ),
    (
        "Detuning",
        "n times the driven minus m times the reference frequency, both oscillators alone; it "
        "falls as the drive frequency rises.",
    ),
    (
        "Locking range",
        "the drive frequencies over which a locked state of the pair exists once noise is taken "
        "out; its edges are estimated from all points of a level together. It may consist of "
        "several intervals.",
    ),
    (
        "Hold-in range",
        "the drive frequencies over which a pair that is already locked stays locked while the "
        "drive moves slowly; its edge is met when the drive leaves the range.",
    ),
    (
        "Pull-in range",
        "the drive frequencies over which a pair becomes locked from any starting phase and "
        "rate; its edge is met when the drive enters the range. The hold-in range is never "
        "narrower than the pull-in range; where one phase equation of first order holds, "
        "locking, hold-in and pull-in range coincide.",
    ),
    (
        "Lock-in range",
        "this word has no single accepted meaning and is not used in this report.",
    ),
    (
        "Offset ψ₀",
        "the angle of the phase equation at which the coupling vanishes and lock at zero detuning "
        "settles. The phase offset of a locked stretch is its mean ψ: ψ₀ plus the arcsine of "
        "detuning over coupling.",
    ),
    (
        "Drive up, drive down",
        "the drive frequency rises, or falls, from one capture to the next.",
    ),
    (
        "Coupling",
        "the largest detuning the pair can hold, in hertz: half the width of the locking range "
        "times m.",
    ),
    (
        "u, U, k",
        "u is a standard uncertainty (k = 1); U = k u is the expanded uncertainty. Bars and "
        "bands of the pictures reach to 95 %.",
    ),
)

RULES: dict[str, str] = {
    "simple": "simple acceptance: the value decides, its uncertainty does not; near a limit up to "
    "50 % of such decisions are wrong",
    "guard": "guard band w = U: pass when the value lies inside the limit by at least U, fail when "
    "it lies outside by more than U, undecided between; at most 2.5 % of passes are wrong",
    "guard-width": "guard band of a stated width: as with w = U, but of the agreed width",
    "risk": "stated largest specific risk: pass when the probability of being outside is at most "
    "that risk, fail when the probability of being inside is at most that risk, else undecided",
}
CAUTIONS: tuple[str, ...] = (
    "Rotating machines: keep guards in place. Stop, isolate and lock off the machine before "
    "sensors are mounted or moved, and keep cables and clothing clear of moving parts.",
    "A pair near the edge of its locking range can lose lock without warning, and forces that "
    "cancelled in lock can then add. Nobody stands in the way of the machine during a sweep.",
    "Energised circuits: earthed probes short a floating circuit. Use differential or isolated "
    "probes rated for the voltage; never lift the earth of an instrument.",
    "This report does not replace the local codes, the maker's instructions, or the judgement of "
    "licensed or otherwise competent persons; where they differ, they come first.",
)

STATEMENTS: tuple[str, ...] = (
    "The results relate only to the items tested, in the condition stated.",
    "This report may be reproduced in full only, unless the laboratory agrees in writing.",
)


def definition_fields() -> Fields:
    """Return the words of the report with their meaning."""
    return Fields(items=DEFINITIONS)


def cautions() -> list[Block]:
    """Return the cautions for rotating machines and energised circuits."""
    return [Bullets(items=CAUTIONS, tone="caution")]


def statements() -> Bullets:
    """Return the standing statements on what the results relate to and on reproduction."""
    return Bullets(items=STATEMENTS)


def decision_blocks(run: SweepRun) -> list[Block]:
    """Return the decision rules in use and the rule of the overall verdict."""
    used = dict.fromkeys(verdict.limit.rule for verdict in run.verdicts)
    items = tuple(RULES[rule][0].upper() + RULES[rule][1:] + "." for rule in used)
    lead = (
        "A limit is judged by its stated rule. The probability that a limit is met is that of a "
        "Gaussian of the value and its standard uncertainty lying inside the limit "
        "(JCGM 106:2012); angles are judged on the circle."
    )
    blocks: list[Block] = [Paragraph(text=lead)]
    if items:
        blocks.append(Bullets(items=items))
    judged = _judged_quantities(run)
    return [*blocks, Paragraph(text=OVERALL_RULE), *([judged] if judged.items else [])]


def _judged_quantities(run: SweepRun) -> Fields:
    """Return what each quantity under a limit means, in the words of the table of quantities."""
    names = dict.fromkeys(verdict.limit.quantity for verdict in run.verdicts)
    return Fields(items=tuple((name, LIMITED[name].meaning) for name in names if name in LIMITED))


def method_blocks(run: SweepRun) -> list[Block]:
    """Return how the numbers came about, in the order in which it is done."""
    return [
        Paragraph(text=_pair_text(run)),
        Bullets(items=(*record_items(run), *_phase_items(run), *_region_items())),
    ]


def _pair_text(run: SweepRun) -> str:
    order = f"{run.plan.order[0]}:{run.plan.order[1]}" if run.plan.order else "found from the data"
    coupling = (
        "one-way: the reference pulls the driven oscillator"
        if run.plan.coupling == "one-way"
        else "mutual: each pulls the other, and the roles only fix signs"
    )
    ways = sorted({point.direction for point in run.points})
    sweep = " and ".join(way for way in ways if way != "none") or "in no order"
    return (
        f"Two oscillators were recorded together in {len(run.points)} captures. Locking order: "
        f"{order}. Coupling: {coupling}. Drive level: {run.plan.level.name}"
        f"{f' in {run.plan.level.unit}' if run.plan.level.unit else ''}, read as "
        f"{run.plan.level.kind}. The drive was stepped {sweep}."
    )


def _phase_items(run: SweepRun) -> tuple[str, ...]:
    settle_s = run.plan.measure.settle_s
    settled = (
        f"; the first {with_unit(plain_number(settle_s), 's')} of each record serve the pull-in "
        "time only"
        if settle_s
        else ""
    )
    return (
        "The phase of each channel is estimated from its samples after the corrections of the "
        "channel table; ends, gaps and damaged spans are left out and never bridged.",
        "A record is locked, intermittent, drifting or undecided by its locked stretches: half "
        f"width of the band {_band_text(run)}, minimum time locked {_hold_text(run)}{settled}.",
        "The pull-in time runs from the start of a record until ψ stays within 0.1 rad of its "
        "level in lock (three spreads where the noise is larger), excursions of noise apart; a "
        "record that starts locked has none.",
        "Detuning, coupling, offset and noise of a record come from the likelihood of a phase "
        "equation with white noise, dψ/dt = 2π (detuning − coupling sin(ψ − ψ₀)) + noise, "
        "which accounts for the correlation of the samples in time.",
    )


def _band_text(run: SweepRun) -> str:
    eps = dict(run.provenance.settings).get("rules.eps_turns", "")
    turns = float(eps) if _NUMBER.fullmatch(eps) else run.plan.measure.eps_turns
    if turns is None:
        return "as in the settings at the end of this report"
    return f"{plain_number(deg_from_rad(rad_from_turns(turns)))}°"


def _hold_text(run: SweepRun) -> str:
    hold = run.plan.measure.hold
    if hold is not None:
        return f"{hold} as stated"
    times = [row.measurement.decision.hold_s for row in usable_rows(run)]
    if not times:
        return "set by each record's own noise"
    span = _span_text(times, "s")
    return f"set by each record's own noise ({span})"


def record_items(run: SweepRun) -> tuple[str, ...]:
    """Return length, rate, format, estimators and signal-to-noise ratio of the records."""
    found = [row.measurement for row in usable_rows(run)]
    if not found:
        return ()
    roles = [role for one in found for role in (one.reference, one.driven)]
    ratios = [role.snr_db for role in roles if role.snr_db is not None]
    items = [
        f"Records: {len(found)}, each {_span_text([one.duration_s for one in found], 's')} long, "
        f"sampled at {_span_text([one.rate_hz for one in found], 'Hz')}, format "
        f"{_listed(one.format for one in found)}.",
        f"Phase estimators: reference {_listed(one.reference.method for one in found)}, driven "
        f"{_listed(one.driven.method for one in found)}.",
    ]
    if ratios:
        items.append(f"Signal-to-noise ratio of the channels: {_span_text(ratios, 'dB')}.")
    return tuple(items)


def _span_text(values: Sequence[float], unit: str) -> str:
    low, high = (plain_number(end, 3) for end in (min(values), max(values)))
    if low == high:
        return with_unit(plain_number(min(values)), unit)
    return f"{low} to {with_unit(high, unit)}"


def _listed(words: Iterable[str]) -> str:
    return ", ".join(sorted({word for word in words if word})) or "not stated"


def _region_items() -> tuple[str, ...]:
    return (
        "Tests of single records: where one of them rejects the phase equation, the coupling of "
        "that record is not used alone.",
        "The edges of the locking range come from all records of a level and direction together; "
        "the last locked and first unlocked points stand beside them as a check only.",
        "Where a test rejects the phase equation over the sweep, edges rest on the records near "
        "them, and the table says so.",
    )
