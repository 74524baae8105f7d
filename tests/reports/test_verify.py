"""Verifying a stored run: whatever was touched since must be named."""

from __future__ import annotations

import sys
from dataclasses import replace
from types import ModuleType

import pytest

from reports.exports import points_csv, sweep_json
from reports.junit import junit_xml
from reports.provenance import file_digest
from reports.records import InputFile
from reports.store import json_text
from reports.verify import (
    EXIT_DIFFERS,
    EXIT_HOLDS,
    input_differences,
    verdict_differences,
    verify_folder,
    verify_run,
)

SWEEP_TEXT = "# a sweep file\n"


@pytest.fixture
def stored(made, tmp_path, monkeypatch):
    """A folder with a run, its input and its files; judging again gives the same run."""
    base, folder = tmp_path / "rig", tmp_path / "out"
    base.mkdir()
    folder.mkdir()
    (base / "one.wav").write_bytes(b"samples")
    (base / "sweep.toml").write_text(SWEEP_TEXT)
    run = made.make_run(verdicts=(made.make_verdict("pass"),))
    one = InputFile(file="one.wav", sha256=file_digest(base / "one.wav"), size_bytes=7)
    run = replace(run, provenance=replace(run.provenance, inputs=(one,)))
    (folder / "results.json").write_text(json_text(sweep_json(run), indent=1), encoding="utf-8")
    (folder / "points.csv").write_text(points_csv(run), encoding="utf-8")
    (folder / "junit.xml").write_text(junit_xml(run), encoding="utf-8")
    for name in ("report.html", "report.pdf"):
        (folder / name).write_text("page")
    path = base / "sweep.toml"

    def digest_only(file):
        same = file.read_text() == SWEEP_TEXT  # a missing file raises, as reading it does
        return replace(run.plan, text_sha256=run.plan.text_sha256 if same else "00" * 32)

    shell = ModuleType("reports.runs")
    shell.load_run = lambda _: ({"sweep_path": str(path)}, run)
    monkeypatch.setitem(sys.modules, "reports.runs", shell)
    monkeypatch.setattr("reports.verify.judge_run", lambda *_: run)
    monkeypatch.setattr("reports.verify.read_sweep_file", digest_only)
    return base, folder, run


def differences(stored):
    """What differs in a stored run."""
    base, folder, run = stored
    return verify_run(folder, run, base / "sweep.toml")


def test_an_untouched_run_holds(stored):
    """Nothing differs, exit code 0."""
    assert differences(stored) == ()
    text, code = verify_folder(stored[1])
    assert code == EXIT_HOLDS
    assert text.endswith("inputs 1, verdicts 1: all as recorded")


@pytest.mark.parametrize(
    ("touch", "subject", "found"),
    [
        (lambda base, out: (base / "one.wav").write_bytes(b"other"), "input one.wav", "SHA-256 "),
        (lambda base, out: (base / "one.wav").unlink(), "input one.wav", "not found"),
        (lambda base, out: (base / "sweep.toml").write_text("x"), "sweep file", "SHA-256 0000"),
        (lambda base, out: (out / "results.json").write_text("{}"), "results.json", "changed"),
        (lambda base, out: (out / "points.csv").write_text(""), "points.csv", "changed"),
        (lambda base, out: (out / "junit.xml").unlink(), "junit.xml", "not found"),
        (lambda base, out: (out / "report.pdf").unlink(), "report.pdf", "not found"),
    ],
)
def test_whatever_was_touched_is_named(stored, touch, subject, found):
    """One byte in a capture or a number edited in the results."""
    touch(*stored[:2])
    (difference,) = differences(stored)
    assert difference.subject.startswith(subject)
    assert difference.found.startswith(found)
    text, code = verify_folder(stored[1])
    assert code == EXIT_DIFFERS
    assert subject in text


def test_a_missing_sweep_file_is_named(stored, monkeypatch):
    """Moved away: the digests of its limits cannot be checked."""

    def gone(path):
        raise FileNotFoundError(path)

    (stored[0] / "sweep.toml").unlink()
    monkeypatch.setattr("reports.verify.read_sweep_file", gone)
    (difference,) = differences(stored)
    assert difference.found == "not found"


def test_a_verdict_that_comes_out_otherwise_is_named_with_both_values(made):
    """An edited verdict is found by judging again."""
    recorded = made.make_run(verdicts=(made.make_verdict("pass"),), verdict="pass")
    again = made.make_run(verdicts=(made.make_verdict("fail"),), verdict="fail")
    told = {one.subject: one for one in verdict_differences(recorded, again)}
    assert told["limit 'locking width'"].recorded == "pass (0.600 ± 0.012 Hz (k = 2))"
    assert told["limit 'locking width'"].found == "fail (0.300 ± 0.012 Hz (k = 2))"
    assert told["overall verdict"].found == "fail"


def test_a_limit_that_vanished_or_appeared_is_named(made):
    """A run with other limits is another run."""
    one = made.make_run(verdicts=(made.make_verdict("pass"),))
    none = made.make_run()
    assert verdict_differences(one, none)[0].found == "no such limit"
    assert verdict_differences(none, one)[0].recorded == "no such limit"


def test_inputs_are_compared_by_their_digests():
    """Size and name are no proof."""
    inputs = [InputFile(file=name, sha256="ab" * 32, size_bytes=1) for name in ("a", "b", "c")]
    told = input_differences(inputs, {"a": "ab" * 32, "b": "cd" * 32})
    assert [(one.subject, one.found[:9]) for one in told] == [
        ("input b", "SHA-256 c"),
        ("input c", "not found"),
    ]
