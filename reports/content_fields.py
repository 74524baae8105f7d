"""The particulars a test report must carry; those that are absent are named in one line.

The list follows the content of a report in ISO/IEC 17025:2017, 7.8.2.1 a to p, and the
identification of an amended report in 7.8.8. Names are those of the sweep file's tables
``item`` and ``lab``; anything else stated there is printed after them.
"""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence

from reports.content_model import (
    Block,
    Bullets,
    Cell,
    Fields,
    Paragraph,
    Signatures,
    Table,
    cells,
    columns,
)
from reports.numbers import one_line, plain_number, with_unit
from reports.records import SweepRun
from rig.angles import deg_from_rad
from rig.channels import ChannelSetup

NOT_STATED = "not stated"
_DATE = re.compile(r"\b\d{4}-\d{2}-\d{2}\b")

# label, key of the sweep file
LAB_FIELDS: tuple[tuple[str, str], ...] = (
    ("Report", "report_id"),
    ("Revision", "revision"),
    ("Replaces", "replaces"),
    ("Reason of the revision", "reason"),
    ("Laboratory", "name"),
    ("Address of the laboratory", "address"),
    ("Place of the work", "place"),
    ("Customer", "customer"),
    ("Contact of the customer", "customer_contact"),
    ("Dates of the work", "performed"),
    ("Method", "method"),
    ("Conditions during the work", "environment"),
    ("Deviations, additions, exclusions", "deviations"),
    ("Results from external providers", "external_results"),
    ("Opinions and interpretations", "opinions"),
    ("Authorised by", "authorised_by"),
    ("Function of that person", "authorised_role"),
)
ITEM_FIELDS: tuple[tuple[str, str], ...] = (
    ("Item", "description"),
    ("Identification", "identification"),
    ("Condition when tested", "condition"),
    ("Date of receipt", "received"),
    ("Date of sampling", "sampled"),
    ("Sampling plan and method", "sampling"),
    ("Sense of rotation", "rotation"),
    ("Start order and power", "start_order"),
)
_ELSEWHERE = ("title", "issued")
# Columns that the table of instruments keeps even where nothing is stated in them.
_NEEDED = ("id", "kind", "serial", "calibrated", "calibration_due", "certificate")


def stated(table: Sequence[tuple[str, str]], name: str) -> str:
    """Return what a table states under a name in one line, or "not stated"."""
    return one_line(dict(table).get(name, "")) or NOT_STATED


def issue_date(run: SweepRun) -> str:
    """Return the date of issue stated, else the date of the run."""
    date = stated(run.plan.lab, "issued")
    return run.provenance.date_text if date == NOT_STATED else date


def lab_fields(run: SweepRun) -> Fields:
    """Return the particulars of laboratory, customer and report, in the order of the standard.

    Nothing is dropped: what is not stated is named in one line at the end.
    """
    items = _fields(run.plan.lab, LAB_FIELDS)
    return Fields(items=(*items, ("Date of issue", issue_date(run))))


def item_fields(run: SweepRun) -> Fields:
    """Return the particulars of the item under test."""
    return Fields(items=tuple(_fields(run.plan.item, ITEM_FIELDS)))


def _fields(
    table: Sequence[tuple[str, str]], wanted: Sequence[tuple[str, str]]
) -> list[tuple[str, str]]:
    items = [(label, stated(table, name)) for label, name in wanted]
    used = {name for _label, name in wanted} | set(_ELSEWHERE)
    more = [
        (_words(key), one_line(text))
        for key, text in table
        if key not in used and one_line(text) not in ("", NOT_STATED)
    ]
    absent = [label for label, text in items if text == NOT_STATED]
    told = [(label, text) for label, text in items + more if text != NOT_STATED]
    return [*told, *([("Not stated", "; ".join(absent))] if absent else [])]


def _words(key: str) -> str:
    return key.replace("_", " ").strip().capitalize()


def signatures(run: SweepRun) -> Signatures:
    """Return the lines to be signed; the authorising person's name where it is stated."""
    told = (stated(run.plan.lab, name) for name in ("authorised_by", "authorised_role"))
    person = ", ".join(text for text in told if text != NOT_STATED)
    return Signatures(lines=(("Tested by", ""), ("Authorised by", person)))


def instrument_blocks(run: SweepRun) -> list[Block]:
    """Return the instruments as stated, one row each, and which were past their calibration."""
    instruments = [dict(entry) for entry in run.plan.instruments]
    if not instruments:
        return [Paragraph(text=f"Instruments and their calibration: {NOT_STATED}.")]
    keys = [
        key
        for key in dict.fromkeys(key for entry in instruments for key in entry)
        if key in _NEEDED or any(_told(entry, key) != NOT_STATED for entry in instruments)
    ]
    rows = tuple(_instrument_row(entry, keys) for entry in instruments)
    table = Table(caption="Instruments", columns=columns(*map(_words, keys)), rows=rows)
    late = _overdue(run, instruments)
    return [table, *([Bullets(items=late, tone="note")] if late else [])]


def _overdue(run: SweepRun, instruments: Sequence[Mapping[str, str]]) -> tuple[str, ...]:
    """Return one line for each instrument due for calibration before the work ended."""
    performed = _DATE.findall(stated(run.plan.lab, "performed"))
    if not performed:
        return ()
    return tuple(
        f"{one_line(entry.get('id', 'an instrument'))}: calibration was due {due}, before the "
        f"end of the work on {max(performed)}"
        for entry in instruments
        for due in _DATE.findall(entry.get("calibration_due", ""))[:1]
        if due < max(performed)
    )


def _instrument_row(entry: Mapping[str, str], keys: Sequence[str]) -> tuple[Cell, ...]:
    return cells(*(_told(entry, key) for key in keys))


def _told(entry: Mapping[str, str], key: str) -> str:
    return one_line(entry.get(key, "")) or NOT_STATED


def channel_table(run: SweepRun) -> Table:
    """Return how the two channels are wired and what was corrected, side by side."""
    reference, driven = run.plan.reference, run.plan.driven
    pairs = zip(_channel_lines(reference), _channel_lines(driven), strict=True)
    lines = [(label, left, right) for (label, left), (_label, right) in pairs]
    absent = [label for label, *both in lines if set(both) == {NOT_STATED}]
    rows = tuple(cells(*line) for line in lines if line[0] not in absent)
    if absent:
        rows += (cells("Not stated", "; ".join(absent), "the same"),)
    return Table(
        caption="Channels as wired; corrections were applied, their uncertainties are budgeted",
        columns=columns("What", "Reference", "Driven"),
        rows=rows,
    )


def _channel_lines(setup: ChannelSetup) -> list[tuple[str, str]]:
    return [
        ("Channel", str(setup.channel)),
        ("Sensor", setup.sensor_id),
        ("Calibration due", setup.calibration_due or NOT_STATED),
        ("Quantity and unit", f"{setup.quantity}, {setup.unit or 'no unit stated'}"),
        (
            "Sensitivity",
            _with_u(setup.sensitivity, setup.sensitivity_u, f"per {setup.unit or 'unit'}"),
        ),
        ("Polarity, how checked", f"{setup.polarity:+d}, {one_line(setup.polarity_checked)}"),
        (
            "Phase of the sensor, u",
            with_unit(plain_number(deg_from_rad(setup.phase_u_rad), 3), "°"),
        ),
        ("Sampling skew", _with_u(1e6 * setup.skew_s, 1e6 * setup.skew_u_s, "µs")),
        ("Sensor delay", _with_u(1e6 * setup.delay_s, 1e6 * setup.delay_u_s, "µs")),
        ("Coupling corner", _corner(setup)),
        ("Mixer", _mixer(setup)),
        ("Pulses a turn", _pulses(setup)),
    ]


def _with_u(value: float, u: float, unit: str) -> str:
    spread = f", u = {with_unit(plain_number(u, 3), unit)}" if u else ""
    return f"{with_unit(plain_number(value), unit)}{spread}"


def _corner(setup: ChannelSetup) -> str:
    if setup.ac_corner_hz is None:
        return "direct coupling or not stated"
    return _with_u(setup.ac_corner_hz, setup.ac_corner_u_hz, "Hz")


def _mixer(setup: ChannelSetup) -> str:
    if setup.mixer_lo_hz is None:
        return "none"
    return f"{with_unit(plain_number(setup.mixer_lo_hz), 'Hz')}, {setup.mixer_sideband} sideband"


def _pulses(setup: ChannelSetup) -> str:
    counts = f"{setup.pulses_per_turn}"
    if setup.missing_pulses or setup.extra_pulses:
        counts += f" ({setup.missing_pulses} missing, {setup.extra_pulses} extra)"
    if setup.mark_angle_rad or setup.mark_angle_u_rad:
        counts += f"; mark at {plain_number(deg_from_rad(setup.mark_angle_rad))}°"
    return counts + ("; counter-rotating" if setup.rotation == "counter" else "")
