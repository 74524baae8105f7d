"""Verdicts as JUnit XML, which build servers read: one test case for each limit.

A failed limit is a ``failure``, an undecided one an ``error`` (it could not be judged), a
passed one a plain case. The file keeps to what the stricter of the schemas in use allow: no
attributes on ``testsuites``, properties on the suite only, characters that XML forbids left
out.
"""

from __future__ import annotations

import re
from xml.etree import ElementTree

from reports.decision import rule_text
from reports.limits import OVERALL_RULE
from reports.numbers import expanded_text, interval_text, one_line, paper_quantity, quantity_text
from reports.records import SweepRun, Verdict
from rig.angles import deg_from_rad

# XML 1.0, production 2: everything else is forbidden, even as a character reference
_FORBIDDEN = re.compile("[^\t\n\r\u0020-\ud7ff\ue000-\ufffd\U00010000-\U0010ffff]")
_NO_TIME = "00:00:00"  # a report carries a date, not the time of day


def junit_xml(run: SweepRun) -> str:
    """Return the verdicts of a run as JUnit XML, one test case for each limit.

    Parameters
    ----------
    run : SweepRun

    Returns
    -------
    str, with an XML declaration and a newline at the end; equal for equal runs
    """
    words = [verdict.verdict for verdict in run.verdicts]
    root = ElementTree.Element("testsuites")
    suite = ElementTree.SubElement(
        root,
        "testsuite",
        {
            "name": _clean(_suite_name(run)),
            "id": "0",
            "package": "lockspan",
            "hostname": "localhost",
            "timestamp": f"{_date(run)}T{_NO_TIME}",
            "tests": str(len(words)),
            "failures": str(words.count("fail")),
            "errors": str(words.count("undecided")),
            "time": "0",
        },
    )
    _add_properties(suite, run)
    for verdict in run.verdicts:
        _add_case(suite, verdict)
    ElementTree.SubElement(suite, "system-out").text = _clean("\n".join(run.notes))
    ElementTree.SubElement(suite, "system-err")
    ElementTree.indent(root)
    text = ElementTree.tostring(root, encoding="unicode")
    return f'<?xml version="1.0" encoding="UTF-8"?>\n{text}\n'


def limit_words(verdict: Verdict) -> str:
    """Return what a limit demands: "is in-phase", "at least 0.5 Hz", angles in degrees."""
    limit = verdict.limit
    if limit.wanted is not None:
        return f"is {limit.wanted}"
    if limit.unit != "rad":
        return interval_text(limit.lower, limit.upper, limit.unit)
    ends = [None if end is None else deg_from_rad(end) for end in (limit.lower, limit.upper)]
    return interval_text(ends[0], ends[1], "deg")


def value_words(verdict: Verdict) -> str:
    """Return the value of a verdict with U and k, its word, or why there is none."""
    if verdict.text_value is not None:
        return verdict.text_value
    value = paper_quantity(verdict.value)
    if value.value is None or verdict.expanded_u is None:
        return quantity_text(value)
    expanded = deg_from_rad(verdict.expanded_u) if value.unit == "deg" else verdict.expanded_u
    return expanded_text(value.value, expanded, value.unit, verdict.coverage_factor)


def _add_properties(suite: ElementTree.Element, run: SweepRun) -> None:
    told = {
        "verdict": run.verdict,
        "verdict_rule": OVERALL_RULE,
        "report_id": dict(run.plan.lab).get("report_id", "not stated"),
        "lockspan": run.provenance.version,
        "sweep_sha256": run.plan.text_sha256,
    }
    properties = ElementTree.SubElement(suite, "properties")
    for name, value in told.items():
        ElementTree.SubElement(properties, "property", {"name": name, "value": _clean(value)})


def _add_case(suite: ElementTree.Element, verdict: Verdict) -> None:
    limit = verdict.limit
    case = ElementTree.SubElement(
        suite,
        "testcase",
        {"name": _clean(limit.name), "classname": f"lockspan.{limit.quantity}", "time": "0"},
    )
    tag = {"fail": "failure", "undecided": "error"}.get(verdict.verdict)
    if tag is None:
        return
    message = f"{limit_words(verdict)}, got {value_words(verdict)}"
    told = ElementTree.SubElement(
        case, tag, {"message": _clean(one_line(message)), "type": verdict.verdict}
    )
    told.text = _clean(f"{verdict.reason}\n{rule_text(limit, verdict.coverage_factor)}")


def _suite_name(run: SweepRun) -> str:
    stated = dict(run.plan.lab).get("title", "")
    return one_line(stated) or run.plan.path


def _date(run: SweepRun) -> str:
    found = re.match(r"\d{4}-\d{2}-\d{2}", run.provenance.date_text, flags=re.ASCII)
    return found[0] if found else "1970-01-01"


def _clean(text: str) -> str:
    """Return a text without the characters that XML forbids."""
    return _FORBIDDEN.sub("", text)
