"""The keys of every block of the sweep file: the one list that reader, writer and help share.

The fields of [item] and [lab] are those that ISO/IEC 17025:2017, 7.8.2.1 asks of a report;
the letter of the clause stands in each help text.
"""

from __future__ import annotations

from rig.sweepfile.values import Key

NOT_STATED = "not stated"


def _text(help_text: str) -> Key:
    return Key(kind="text", help=help_text)


ITEM_KEYS: dict[str, Key] = {
    "description": _text("what was tested (7.8.2.1 g)"),
    "identification": _text("its unique name or number (g)"),
    "condition": _text("condition when tested (g)"),
    "received": _text("date of receipt, where critical (h)"),
    "sampled": _text("date of sampling, where critical (h)"),
    "sampling": _text("sampling plan and method, where relevant (k)"),
    "rotation": _text("sense of rotation of each machine, seen from where"),
    "start_order": _text("which drive was started first, which were powered"),
    "remarks": _text("anything else about the item"),
}

LAB_KEYS: dict[str, Key] = {
    "title": _text("title of the report (7.8.2.1 a)"),
    "name": _text("name of the laboratory (b)"),
    "address": _text("address of the laboratory (b)"),
    "place": _text("where the work was done (c)"),
    "report_id": _text("unique identification of the report (d)"),
    "revision": _text("revision of the report (7.8.8)"),
    "replaces": _text("report that this one replaces (7.8.8)"),
    "reason": _text("reason of the change (7.8.8)"),
    "customer": _text("name of the customer (e)"),
    "customer_contact": _text("contact of the customer (e)"),
    "method": _text("method used (f)"),
    "performed": _text("date or dates of the work (i)"),
    "issued": _text("date of issue (j)"),
    "environment": _text("ambient conditions that bear on the result (7.8.3.1 a)"),
    "deviations": _text("additions to, deviations or exclusions from the method (n)"),
    "authorised_by": _text("person who authorises the report (o)"),
    "authorised_role": _text("function of that person (o)"),
    "external_results": _text("results from external providers (p)"),
    "opinions": _text("opinions and interpretations, marked as such (7.8.7)"),
    "remarks": _text("anything else"),
}

INSTRUMENT_KEYS: dict[str, Key] = {
    "id": _text("the laboratory's own number"),
    "kind": _text("sensor, recorder, amplifier ..."),
    "serial": _text("serial number"),
    "calibrated": _text("date of the last calibration"),
    "calibration_due": _text("date the next calibration is due"),
    "certificate": _text("number of the certificate"),
    "sensitivity": _text("sensitivity with unit and uncertainty, as on the certificate"),
    "remarks": _text("anything else"),
}

PAIR_KEYS: dict[str, Key] = {
    "order": Key(kind="order", help='locking order "n:m" (n on the driven), or "find"'),
    "coupling": Key(
        kind="choice", choices=("one-way", "mutual"), help="one-way (injected) or mutual"
    ),
}

CHANNEL_KEYS: dict[str, Key] = {
    "channel": Key(kind="channel", needed=True, help="channel number from 1, or its name"),
    "unit": _text("unit of the physical quantity"),
    "quantity": Key(
        kind="choice",
        choices=("displacement", "velocity", "acceleration", "voltage", "current", "unstated"),
        help="what the sensor senses; mechanical phases are referred to displacement",
    ),
    "sensitivity": Key(kind="positive", help="sample units (volts) per unit"),
    "sensitivity_u": Key(kind="not negative", help="its standard uncertainty"),
    "volts_per_full_scale": Key(kind="positive", help="volts at full scale of the recorder"),
    "polarity": Key(kind="choice", choices=(1, -1), help="-1 if reversed"),
    "polarity_checked": _text("how polarity was checked (tap test, common source ...)"),
    "skew_s": Key(kind="number", help="s, sampling instant after the frame's time"),
    "skew_u_s": Key(kind="not negative", help="s, its standard uncertainty"),
    "delay_s": Key(kind="number", help="s, delay of sensor and conditioner"),
    "delay_u_s": Key(kind="not negative", help="s, its standard uncertainty"),
    "ac_corner_hz": Key(kind="positive", help="Hz, corner of AC coupling; leave out if DC"),
    "ac_corner_u_hz": Key(kind="not negative", help="Hz, its standard uncertainty"),
    "phase_u_rad": Key(kind="not negative", help="rad, other phase uncertainty of the sensor"),
    "phase_u_deg": Key(kind="degrees", target="phase_u_rad", help="the same in degrees"),
    "pulses_per_turn": Key(kind="whole", help="pulses of a tacho a turn"),
    "missing_pulses": Key(kind="whole", help="pulses left out a turn"),
    "extra_pulses": Key(kind="whole", help="extra pulses a turn"),
    "mixer_lo_hz": Key(kind="positive", help="Hz, local oscillator of a mixer"),
    "mixer_sideband": Key(
        kind="choice", choices=("upper", "lower"), help="upper: signal above the oscillator"
    ),
    "mark_angle_rad": Key(kind="number", help="rad, mass ahead of the mark, own sense of rotation"),
    "mark_angle_deg": Key(kind="degrees", target="mark_angle_rad", help="the same in degrees"),
    "mark_angle_u_rad": Key(kind="not negative", help="rad, its standard uncertainty"),
    "mark_angle_u_deg": Key(kind="degrees", target="mark_angle_u_rad", help="in degrees"),
    "rotation": Key(kind="choice", choices=("same", "counter"), help="sense against the other"),
    "sensor_id": _text("id of the sensor among the instruments"),
    "calibration_due": _text("date the sensor's calibration is due"),
}

LEVEL_KEYS: dict[str, Key] = {
    "name": _text("what the drive level is"),
    "unit": _text("its unit"),
    "kind": Key(
        kind="choice",
        choices=("amplitude", "power", "decibel"),
        help="how it turns into an amplitude",
    ),
}

VARIABLE_KEYS: dict[str, Key] = {
    "name": Key(kind="text", needed=True, help="sweep variable other than drive frequency"),
    "unit": _text("its unit"),
    "column": _text("its column in the table of points; the name by default"),
}

MEASURE_KEYS: dict[str, Key] = {
    "method_driven": _text("phase estimator of the driven: analytic, marker, pulse, spike"),
    "method_reference": _text("phase estimator of the reference"),
    "band_driven_hz": Key(kind="band", help="[low, high] in Hz"),
    "band_reference_hz": Key(kind="band", help="[low, high] in Hz"),
    "rate_hz": Key(kind="positive", help="Hz, sampling rate where files state none or a wrong one"),
    "eps_turns": Key(kind="eps", help="turns, half width of the locked band, below 0.5"),
    "hold": Key(kind="hold", help='minimum time locked: seconds, or "2beats"'),
    "free_spread": Key(kind="positive", help="relative spread of the free frequency"),
    "settle_s": Key(kind="not negative", help="s, dropped from each start, kept for pull-in"),
    "style_deg": Key(kind="style", help="deg, half width of in-phase and anti-phase"),
    "clock_u_ppm": Key(kind="not negative", help="ppm, standard uncertainty of the clock"),
    "dataset": _text("data set or variable in files that hold several"),
}

SECOND_RECORDER_KEYS: dict[str, Key] = {
    "shared": Key(kind="channel", help="channel that both recorders took; ties their clocks"),
    "clock_error_ppm": Key(kind="number", help="ppm, how fast the second clock runs, if known"),
    "clock_error_u_ppm": Key(kind="not negative", help="ppm, its standard uncertainty"),
    "start_shift_s": Key(kind="number", help="s, start of the second after the first, if known"),
}

FREE_KEYS: dict[str, Key] = {
    "file": Key(kind="text", needed=True, help="capture of one oscillator alone"),
    "role": Key(kind="choice", choices=("driven", "reference"), needed=True, help="which one runs"),
    "channel": Key(kind="channel", help="its channel, if another than in the block of its role"),
}

POINTS_KEYS: dict[str, Key] = {
    "table": Key(kind="text", needed=True, help="CSV file with one row a capture"),
}

TOP_KEYS = (
    "item",
    "lab",
    "instrument",
    "pair",
    "reference",
    "driven",
    "level",
    "variable",
    "measure",
    "second_recorder",
    "free_running",
    "points",
    "point",
    "limit",
)
