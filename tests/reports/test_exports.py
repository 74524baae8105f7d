"""Exports: names that scripts rely on, schemas that are shipped, bytes that do not change."""

from __future__ import annotations

import csv
import io
import json
import math
from dataclasses import replace

import jsonschema
import pytest

from fit.records import AdequacyTest
from reports.exports import (
    MEASUREMENT_SCHEMA,
    SCHEMA_FILES,
    SWEEP_SCHEMA,
    measurement_json,
    points_csv,
    schema_text,
    sweep_json,
)
from reports.limited import LIMITED
from reports.limits import judge_limits, read_limits
from reports.store import decode_record, encode_record, json_text
from rig.quantities import Quantity

QUANTITY = {"value", "u", "unit", "reason"}


def check(name, value):
    """Validate a value against the shipped schema after a trip through text."""
    schema = json.loads(schema_text(name))
    jsonschema.Draft202012Validator(schema).validate(json.loads(json_text(value)))


def judged_run(made):
    """A run with a limit on every quantity."""
    run = made.make_run()
    tables = []
    for name, spec in LIMITED.items():
        table = {"name": name, "quantity": name}
        if spec.words:
            table["wanted"] = "1:1" if spec.words == ("n:m",) else spec.words[0]
        else:
            table |= {"lower": -1.0, "upper": 1.0}
        if name.startswith("free_stability"):
            table["averaging_s"] = 1.0
        tables.append(table)
    verdicts = judge_limits(
        read_limits(tables, "s.toml"),
        region=run.region,
        points=run.points,
        free_runs=run.free_runs,
        plan=run.plan,
    )
    return replace(run, verdicts=verdicts, verdict="fail")


@pytest.mark.parametrize("name", SCHEMA_FILES)
def test_the_shipped_schemas_are_schemas(name):
    """A schema with a fault in it accepts everything."""
    schema = json.loads(schema_text(name))
    jsonschema.Draft202012Validator.check_schema(schema)
    assert schema["properties"]["schema"]["const"] == name


@pytest.mark.parametrize("detuning_hz", [0.0, 0.1, 0.5, -0.5])
def test_a_measurement_fits_its_schema(made, detuning_hz):
    """Locked and drifting, both signs."""
    check(
        MEASUREMENT_SCHEMA,
        measurement_json(made.make_measurement(detuning_hz=detuning_hz), "ab" * 32),
    )


def test_a_judged_run_fits_its_schema(made):
    """With every kind of limit, its budget and its reason."""
    check(SWEEP_SCHEMA, sweep_json(judged_run(made)))


def test_a_run_without_region_limits_or_measurements_fits_its_schema(made):
    """The poorest result is still a result."""
    lost = replace(made.make_point(25.0), measurement=None, status="crashed", message="crashed")
    plan = made.make_plan(order=None)
    check(SWEEP_SCHEMA, sweep_json(made.make_run(points=(lost,), region=None, plan=plan)))


def test_the_names_that_scripts_rely_on_are_there(made):
    """The published names of the measurement; more may stand beside them."""
    told = measurement_json(made.make_measurement(), "ab" * 32)
    assert set(told) >= {
        "schema", "capture", "reference", "driven", "order", "state", "locked_fraction",
        "state_reason", "episodes", "slips", "mean_rate_hz", "adler",
    }  # fmt: skip
    assert set(told["capture"]) >= {"path", "sha256", "format", "rate_hz", "duration_s", "notes"}
    assert set(told["driven"]) >= {
        "channel", "unit", "frequency_hz", "amplitude", "snr_db", "method", "notes"
    }  # fmt: skip
    assert set(told["order"]) == {"n", "m", "source"}
    assert set(told["episodes"][0]) == {
        "start_s", "stop_s", "offset_rad", "offset_u_rad", "spread_rad", "style"
    }  # fmt: skip
    assert set(told["adler"]) >= {
        "detuning_hz", "coupling_hz", "offset_rad", "noise_rad2_s", "adequate", "notes"
    }  # fmt: skip
    assert set(told["mean_rate_hz"]) >= QUANTITY


def test_the_names_of_a_sweep_are_there(made):
    """The published names of results.json."""
    told = sweep_json(judged_run(made))
    assert set(told) >= {"schema", "points", "region", "limits", "verdict"}
    assert set(told["points"][0]) >= {"file", "drive_hz", "level", "direction", "status", "state"}
    assert set(told["region"]) >= {
        "levels", "coupling_per_level", "level_power", "centre_hz", "hysteresis"
    }  # fmt: skip
    assert set(told["region"]["levels"][0]) >= {
        "level", "direction", "interval", "lower_hz", "upper_hz", "width_hz"
    }  # fmt: skip
    assert set(told["region"]["hysteresis"][0]) >= {"level", "edge", "value_hz"}
    assert set(told["limits"][0]) >= {
        "name", "quantity", "lower", "upper", "unit", "rule", "value", "probability_met", "verdict"
    }  # fmt: skip


def test_a_row_that_could_not_be_measured_keeps_its_place_and_message(made):
    """Points and table rows stay in step."""
    lost = replace(made.make_point(25.0), measurement=None, status="invalid", message="silent")
    told = sweep_json(made.make_run(points=(lost, made.make_point(25.1))))
    assert told["points"][0]["message"] == "silent"
    assert "state" not in told["points"][0]
    assert told["points"][1]["state"] == "locked"


def test_numbers_that_are_not_finite_become_null(made):
    """An infinite test statistic is not JSON."""
    measured = made.make_measurement()
    test = AdequacyTest(name="x", statistic=math.inf, threshold=math.nan, fired=True, size=0.01)
    adler = replace(measured.adler, tests=(test,))
    told = measurement_json(replace(measured, adler=adler), "")
    assert told["adler"]["tests"][0]["statistic"] is None
    check(MEASUREMENT_SCHEMA, told)


def test_two_runs_give_equal_bytes_and_so_does_a_stored_one(made):
    """Results are compared by their digests."""
    run = judged_run(made)
    stored = decode_record(type(run), json.loads(json_text(encode_record(run))))
    texts = {json_text(sweep_json(one), indent=1) for one in (run, judged_run(made), stored)}
    tables = {points_csv(one) for one in (run, judged_run(made), stored)}
    assert (len(texts), len(tables)) == (1, 1)


def read_csv(text):
    """The rows of a table as dictionaries."""
    return list(csv.DictReader(io.StringIO(text)))


def test_the_table_has_one_row_a_point_with_value_and_uncertainty(made):
    """A spreadsheet needs no JSON."""
    rows = read_csv(points_csv(made.make_run()))
    assert len(rows) == 28
    assert rows[0]["file"] == "captures/up_0.5_24.6.wav"
    assert (float(rows[0]["mean_rate_hz"]), float(rows[0]["u_mean_rate_hz"])) == (
        pytest.approx(0.477, abs=1e-3),
        0.002,
    )
    assert rows[0]["extra.operator"] == "B"
    assert rows[0]["jitter_rad"] == ""


def test_numbers_in_the_table_read_back_equal(made):
    """No digit is lost on the way to another program."""
    measured = made.make_measurement(mean_rate_hz=Quantity(value=1 / 3, u=1e-17, unit="Hz"))
    point = replace(made.make_point(25.0), measurement=measured)
    row = read_csv(points_csv(made.make_run(points=(point,))))[0]
    assert float(row["mean_rate_hz"]) == 1 / 3
    assert float(row["u_mean_rate_hz"]) == 1e-17


@pytest.mark.parametrize(
    ("text", "cell"),
    [
        ("=1+1", "'=1+1"),
        ("@here", "'@here"),
        ("+49 123", "'+49 123"),
        ("-x.wav", "'-x.wav"),
        ("-5", "-5"),
        ("+5", "+5"),
        ('a "b", c', 'a "b", c'),
        ("two\nlines", "two lines"),
        ("Größe µm", "Größe µm"),
    ],
)
def test_a_text_never_becomes_a_formula_nor_breaks_a_row(made, text, cell):
    """Operators write what they like into free columns."""
    point = replace(made.make_point(25.0), extras=(("remark", text),))
    rows = read_csv(points_csv(made.make_run(points=(point,))))
    assert (len(rows), rows[0]["extra.remark"]) == (1, cell)


def test_points_without_measurement_leave_their_cells_empty(made):
    """Empty is not zero and not nan."""
    lost = replace(made.make_point(25.0), measurement=None, status="invalid", message="silent")
    text = points_csv(made.make_run(points=(lost,)))
    assert read_csv(text)[0]["state"] == ""
    assert "nan" not in text
