"""JUnit XML: build servers must read it, and a strict schema must accept it."""

from __future__ import annotations

from dataclasses import replace
from xml.etree import ElementTree

import pytest
from junitparser import Error, Failure, JUnitXml

from reports.junit import junit_xml, limit_words, value_words
from reports.records import Limit, Verdict
from rig.quantities import Quantity, undetermined

# What the stricter of the schemas in use allow: attributes (all needed), children in order.
ALLOWED = {
    "testsuites": (set(), ["testsuite"]),
    "testsuite": (
        {"name", "id", "package", "hostname", "timestamp", "tests", "failures", "errors", "time"},
        ["properties", "testcase", "system-out", "system-err"],
    ),
    "properties": (set(), ["property"]),
    "property": ({"name", "value"}, []),
    "testcase": ({"name", "classname", "time"}, ["failure", "error"]),
    "failure": ({"message", "type"}, []),
    "error": ({"message", "type"}, []),
    "system-out": (set(), []),
    "system-err": (set(), []),
}


def run_of(made, *words):
    """A run with verdicts of chosen words."""
    return made.make_run(
        verdicts=tuple(made.make_verdict(word, name=f"limit {k}") for k, word in enumerate(words))
    )


def parsed(run):
    """The suite as another program reads it."""
    return next(iter(JUnitXml.fromstring(junit_xml(run).encode("utf-8"))))


def assert_strict(element):
    """An element has exactly the attributes and children, in the order, of the schema."""
    attributes, children = ALLOWED[element.tag]
    assert set(element.attrib) == attributes
    places = [children.index(child.tag) for child in element]
    assert places == sorted(places)
    for child in element:
        assert_strict(child)


def test_there_is_one_case_a_limit_and_the_counts_agree(made):
    """Fail is a failure, undecided an error, pass a plain case."""
    suite = parsed(run_of(made, "pass", "fail", "undecided", "fail"))
    results = [case.result[0] if case.result else None for case in suite]
    assert [type(one) for one in results] == [type(None), Failure, Error, Failure]
    assert (suite.tests, suite.failures, suite.errors) == (4, 2, 1)


@pytest.mark.parametrize("words", [(), ("pass",), ("pass", "fail", "undecided")])
def test_the_file_keeps_to_the_strict_schema(made, words):
    """Attributes and order of elements as the stricter schemas in use ask."""
    assert_strict(ElementTree.fromstring(junit_xml(run_of(made, *words))))


def test_the_message_says_limit_value_and_uncertainty(made):
    """A build log must be enough to see what failed."""
    case = next(iter(parsed(run_of(made, "fail"))))
    assert case.result[0].message == "at least 0.5 Hz, got 0.300 ± 0.012 Hz (k = 2)"
    assert "guard band w = U (k = 2)" in case.result[0].text


@pytest.mark.parametrize("bad", ["\x00", "\x1b[31m", "\ufffe", "\ud800", "]]>", "<&\"'>"])
def test_any_text_leaves_the_file_readable(made, bad):
    """Control characters make XML unreadable, even as references."""
    verdict = made.make_verdict("fail", name=f"a{bad}b")
    verdict = replace(verdict, reason=f"because{bad}")
    run = made.make_run(verdicts=(verdict,), notes=(f"note{bad}",))
    case = next(iter(parsed(run)))
    assert case.name.startswith("a")
    assert case.name.endswith("b")
    assert junit_xml(run).encode("utf-8")


def test_two_runs_give_equal_text(made):
    """No clock, no host name, no random number."""
    assert junit_xml(run_of(made, "fail")) == junit_xml(run_of(made, "fail"))


def test_a_date_that_is_no_date_leaves_the_timestamp_valid(made):
    """The schema asks for a date; a free text cannot go there."""
    run = run_of(made, "pass")
    run = replace(run, provenance=replace(run.provenance, date_text="spring"))
    assert parsed(run).timestamp == "1970-01-01T00:00:00"


def test_angles_are_told_in_degrees_and_words_as_words():
    """People read the log."""
    angle = Verdict(
        limit=Limit(
            name="a", quantity="phase_offset_rad", unit="rad", lower=-0.5235987755982988,
            upper=0.5235987755982988, circular=True,
        ),
        value=Quantity(value=0.17453292519943295, u=0.01, unit="rad"),
        expanded_u=0.02,
        coverage_factor=2.0,
        probability_met=1.0,
        verdict="pass",
        reason="",
    )  # fmt: skip
    style = replace(
        angle, limit=Limit(name="s", quantity="lock_style", unit="", wanted="in-phase"),
        text_value="offset",
    )  # fmt: skip
    unknown = replace(angle, value=undetermined("rad", "drifts"), expanded_u=None)
    assert limit_words(angle) == "-30 to 30°"
    assert value_words(angle) == "(10.0 ± 1.1)° (k = 2)"
    assert (limit_words(style), value_words(style)) == ("is in-phase", "offset")
    assert value_words(unknown) == "cannot be determined: drifts"
