"""Storing records: nothing may change between a run and its report written later."""

from __future__ import annotations

import dataclasses
import json
import math
import os

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fit.records import AdequacyTest, Measurement, PsiSeries
from reports.records import PointResult, SweepRun
from reports.store import decode_record, encode_record, json_text, write_atomic
from rig.channels import ChannelSetup
from rig.errors import LockspanError
from rig.quantities import Quantity
from rig.sweepfile import SweepPlan


def through_text(record):
    """The record after a trip through JSON text."""
    return decode_record(type(record), json.loads(json_text(encode_record(record))))


def same(first, second):
    """Whether two stored forms agree to the last bit, arrays with NaN included."""
    if isinstance(first, np.ndarray):
        return first.dtype == second.dtype and np.array_equal(first, second, equal_nan=True)
    if dataclasses.is_dataclass(first):
        return type(first) is type(second) and all(
            same(getattr(first, f.name), getattr(second, f.name)) for f in dataclasses.fields(first)
        )
    if isinstance(first, tuple):
        return len(first) == len(second) and all(map(same, first, second))
    return type(first) is type(second) and first == second


def test_a_measurement_reads_back_equal_to_the_last_bit(made):
    """A report written later must judge the same numbers."""
    measured = made.make_measurement(detuning_hz=0.1 + 0.2)
    assert same(measured, through_text(measured))


def test_a_whole_run_reads_back_equal(made):
    """The run holds every kind of field: raw tables, words, optional numbers, arrays."""
    limits = ({"name": "w", "quantity": "locking_width", "lower": 0.5, "unit": "Hz"},)
    run = made.make_run(limits=limits, verdicts=(made.make_verdict(),))
    back = through_text(run)
    assert isinstance(back, SweepRun)
    assert same(dataclasses.replace(run), back)


def test_a_point_without_measurement_reads_back(made):
    """A crashed capture keeps its place and its message."""
    point = dataclasses.replace(
        made.make_point(25.0), measurement=None, status="crashed", message="the reader died"
    )
    assert same(point, through_text(point))


def test_a_channel_given_by_number_stays_a_number_and_one_given_by_name_a_name():
    """Channel 2 and a channel called '2' are not the same."""
    for channel in (2, "2"):
        assert through_text(ChannelSetup(channel=channel)).channel == channel


def test_numpy_numbers_in_a_record_are_stored_as_plain_numbers():
    """Estimators hand out numpy scalars, which json refuses."""
    quantity = Quantity(value=np.float32(0.5), u=np.float64(0.1), unit="Hz")
    assert through_text(quantity) == Quantity(value=0.5, u=0.1, unit="Hz")


def test_a_number_that_is_not_finite_survives_where_a_record_allows_it():
    """A test statistic may be infinite; the stored file must still be JSON."""
    test = AdequacyTest(name="x", statistic=math.inf, threshold=math.nan, fired=True, size=0.01)
    back = through_text(test)
    assert back.statistic == math.inf
    assert math.isnan(back.threshold)


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_every_float_reads_back_equal(number):
    """Shortest digits that read back equal, never a rounded number."""
    assert through_text(Quantity(value=number, u=None, unit="Hz")).value == number


def test_stored_text_is_the_same_for_the_same_record(made):
    """Equal bytes are how two runs are compared."""
    first, second = (json_text(encode_record(made.make_run())) for _ in range(2))
    assert first == second
    assert first.endswith("\n")


def test_json_text_refuses_a_number_that_is_not_finite():
    """NaN is not JSON."""
    with pytest.raises(ValueError, match="JSON"):
        json_text({"value": math.nan})


def test_a_file_name_that_is_no_text_can_be_written_and_read():
    """Names of files may hold bytes that are no UTF-8."""
    name = os.fsdecode(b"capture-\xff.wav")
    text = json_text({"file": name})
    assert json.loads(text.encode("utf-8"))["file"] == name


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"colour": 1}, "unknown field 'colour'"),
        ({"unit": None}, "field 'unit' must be str"),
        ({"value": "much"}, "field 'value' must be float"),
        ({"u": -1.0}, "standard uncertainty must be >= 0"),
        ({"value": True}, "field 'value' must be float"),
    ],
)
def test_a_damaged_quantity_is_refused_with_its_field(change, words):
    """A stored result that was edited by hand is named, not guessed."""
    stored = {"value": 1.0, "u": 0.1, "unit": "Hz"} | change
    with pytest.raises(LockspanError, match=words):
        decode_record(Quantity, stored)


def test_a_missing_field_is_named():
    """The message says what to look for."""
    with pytest.raises(LockspanError, match="field 'unit' is missing"):
        decode_record(Quantity, {"value": 1.0, "u": 0.1})


@pytest.mark.parametrize(
    ("cls", "field", "value", "words"),
    [
        (PointResult, "status", "fine", "must be one of ok, undecided, invalid, crashed"),
        (PointResult, "extras", [["a"]], "2 values needed, got 1"),
        (PointResult, "measurement", [], "a table is needed, got list"),
    ],
)
def test_a_damaged_point_is_refused(made, cls, field, value, words):
    """Words, pairs and nested records are checked when read."""
    stored = encode_record(made.make_point(25.0)) | {field: value}
    with pytest.raises(LockspanError, match=words):
        decode_record(cls, stored)


@pytest.mark.parametrize("value", ["0,1", [["a"]], ["x"]])
def test_a_damaged_trace_is_refused(made, value):
    """Arrays hold numbers only."""
    stored = encode_record(made.make_measurement()) | {"trace_s": value}
    with pytest.raises(LockspanError, match="field 'trace_s' must be a list of numbers"):
        decode_record(Measurement, stored)


def test_an_infinite_sample_is_not_stored():
    """Only missing samples have a sign in JSON."""
    with pytest.raises(ValueError, match="finite"):
        PsiSeries(step_s=1.0, segments=(np.array([np.inf]),), start_s=(0.0,))


def test_only_records_are_stored():
    """A dictionary or a class is a mistake of the caller."""
    for thing in ({"a": 1}, SweepPlan):
        with pytest.raises(TypeError, match="only records"):
            encode_record(thing)


def test_write_atomic_replaces_the_file_and_leaves_nothing_else(tmp_path):
    """A killed run must not leave half a result under the final name."""
    target = tmp_path / "results.json"
    write_atomic(target, b"old")
    write_atomic(target, b"new")
    assert target.read_bytes() == b"new"
    assert list(tmp_path.iterdir()) == [target]


def test_a_failed_write_keeps_the_old_file(tmp_path, monkeypatch):
    """The old result is worth more than half a new one."""
    target = tmp_path / "results.json"
    write_atomic(target, b"old")

    def full(*_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("reports.store.os.fsync", full)
    with pytest.raises(OSError, match="No space"):
        write_atomic(target, b"new")
    assert target.read_bytes() == b"old"
    assert list(tmp_path.iterdir()) == [target]


@pytest.mark.skipif(os.name == "nt", reason="permission bits of POSIX")
def test_a_written_file_has_the_usual_permissions(tmp_path):
    """Colleagues must be able to read the results."""
    target = tmp_path / "results.json"
    write_atomic(target, b"x")
    plain = tmp_path / "plain"
    plain.write_bytes(b"x")
    assert target.stat().st_mode == plain.stat().st_mode
