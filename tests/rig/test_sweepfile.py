"""The sweep file: what it states comes out typed, and what breaks a rule is named."""

from __future__ import annotations

import dataclasses
import math
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from rig.errors import SweepFileError
from rig.sweepfile import (
    ITEM_KEYS,
    LAB_KEYS,
    FreeRunEntry,
    PointEntry,
    SweepPlan,
    VariableAxis,
    read_sweep_file,
    render_points_csv,
    render_sweep_toml,
)

WHOLE = """
points = { table = "points.csv" }

[item]
description = "pair of exciters"
received = 2026-11-30
[lab]
title = "Locking of exciters"
report_id = 17
[[instrument]]
id = "A-12"
calibration_due = 2027-03-01
[pair]
order = "1:2"
coupling = "mutual"
[reference]
channel = 1
quantity = "acceleration"
unit = "m/s2"
sensitivity = 0.1
[driven]
channel = "north bearing"
polarity = -1
polarity_checked = "tap test"
mark_angle_deg = 90
ac_corner_hz = 0.5
[level]
name = "drive"
unit = "dBm"
kind = "decibel"
[variable]
name = "spacing"
unit = "mm"
column = "spacing_mm"
[measure]
band_driven_hz = [20, 30.5]
hold = "2beats"
eps_turns = 0.2
settle_s = 3
[[free_running]]
file = "free.wav"
role = "driven"
channel = 2
[[limit]]
name = "width"
quantity = "width_hz"
lower = 0.5
"""
TABLE = "file,drive_hz,level,direction,spacing_mm\na.wav,25,-10,up,12\nb.wav,25.5,-10,down,12\n"
SHORT = "[reference]\nchannel = 1\n[driven]\nchannel = 2\n"


def written(folder: Path, text: str, table: str | bytes | None = TABLE) -> Path:
    """Put a sweep file and its table into a folder."""
    path = folder / "SWEEP.toml"
    path.write_text(text, encoding="utf-8")
    if table is not None:
        data = table if isinstance(table, bytes) else table.encode("utf-8")
        (folder / "points.csv").write_bytes(data)
    return path


def refusal(path: Path) -> str:
    """Return the message with which a sweep file is refused."""
    with pytest.raises(SweepFileError) as caught:
        read_sweep_file(path)
    return str(caught.value)


def test_every_block_reaches_its_record(tmp_path: Path) -> None:
    """What a person states once must arrive where it is used."""
    plan = read_sweep_file(written(tmp_path, WHOLE))
    assert (plan.order, plan.coupling) == ((1, 2), "mutual")
    assert (plan.reference.channel, plan.reference.sensitivity) == (1, 0.1)
    assert (plan.driven.channel, plan.driven.polarity) == ("north bearing", -1)
    assert plan.driven.mark_angle_rad == pytest.approx(math.pi / 2)
    assert plan.level.kind == "decibel"
    assert plan.variable == VariableAxis(name="spacing", unit="mm", column="spacing_mm")
    assert plan.measure.band_driven_hz == (20.0, 30.5)
    assert (plan.measure.hold, plan.measure.eps_turns, plan.measure.settle_s) == ("2beats", 0.2, 3)
    assert plan.free_running == (FreeRunEntry(file="free.wav", role="driven", channel=2),)
    assert plan.limits == ({"name": "width", "quantity": "width_hz", "lower": 0.5},)
    assert plan.points[1] == PointEntry(
        file="b.wav", drive_hz=25.5, level=-10.0, direction="down", extras=(("spacing_mm", "12"),)
    )


def test_report_fields_are_all_there_and_say_not_stated(tmp_path: Path) -> None:
    """A report prints every field of ISO/IEC 17025 rather than drop one."""
    plan = read_sweep_file(written(tmp_path, WHOLE))
    item, lab = dict(plan.item), dict(plan.lab)
    assert list(item) == list(ITEM_KEYS)
    assert list(lab) == list(LAB_KEYS)
    assert (item["received"], lab["report_id"]) == ("2026-11-30", "17")
    assert lab["authorised_by"] == item["condition"] == "not stated"
    assert dict(plan.instruments[0])["calibration_due"] == "2027-03-01"


@pytest.mark.parametrize("letter", "abcefghijknop")
def test_each_clause_a_laboratory_fills_in_has_a_key(letter: str) -> None:
    """7.8.2.1 d is report_id; l and m are written by the report itself."""
    helps = [key.help for key in (*ITEM_KEYS.values(), *LAB_KEYS.values())]
    assert any(f"({letter})" in text or f"7.8.2.1 {letter})" in text for text in helps)


def test_captures_need_not_exist_and_hostile_names_stay_text(tmp_path: Path) -> None:
    """A missing capture is one bad row later; a name is never a path to follow here."""
    table = 'file\n"../../etc/x\'; rm -rf.wav"\n"run[/red]ü 1.wav"\n"a,b""c.wav"\n'
    plan = read_sweep_file(written(tmp_path, 'points = { table = "points.csv" }\n' + SHORT, table))
    names = [point.file for point in plan.points]
    assert names == ["../../etc/x'; rm -rf.wav", "run[/red]ü 1.wav", 'a,b"c.wav']


def test_the_digest_covers_both_files(tmp_path: Path) -> None:
    """A changed table is another campaign, though the TOML is the same."""
    first = read_sweep_file(written(tmp_path, WHOLE)).text_sha256
    again = read_sweep_file(written(tmp_path, WHOLE)).text_sha256
    other = read_sweep_file(written(tmp_path, WHOLE, TABLE + "c.wav,26,-10,up,12\n")).text_sha256
    assert first == again != other
    assert len(first) == 64


def test_inline_points_say_the_same_as_a_table(tmp_path: Path) -> None:
    """A campaign of three captures needs no second file."""
    inline = SHORT + '[[point]]\nfile = "a.wav"\ndrive_hz = 25\ndirection = "up"\ngap_mm = 1.5\n'
    plan = read_sweep_file(written(tmp_path, inline, None))
    assert plan.points == (
        PointEntry(file="a.wav", drive_hz=25.0, direction="up", extras=(("gap_mm", "1.5"),)),
    )


P = 'points = { table = "points.csv" }\n'
BAD_FILES = [
    (P + SHORT + "[pare]\n", ["'pare'", "did you mean 'pair'?"]),
    (P + SHORT + "[pair]\nordr = '1:1'\n", ["[pair]", "'ordr'", "'1:1'", "did you mean 'order'?"]),
    (P + SHORT + "[pair]\norder = '2:2'\n", ["[pair] order", '"1:1"', "got '2:2'"]),
    (P + SHORT + "[pair]\norder = '0:1'\n", ['"n:m"', "got '0:1'"]),
    (P + SHORT + "[pair]\ncoupling = 'mutal'\n", ["one-way, mutual", "did you mean 'mutual'?"]),
    (P + "[driven]\nchannel = 2\n", ["[reference]", "block is missing"]),
    (P + SHORT + "polarity = 0\n", ["[driven] polarity", "one of 1, -1, got 0"]),
    (P + SHORT + "polarity = true\n", ["[driven] polarity", "got True"]),
    (
        P + SHORT + "sensitivity = '0,1'\n",
        ["[driven] sensitivity", "with a decimal point", "'0,1'"],
    ),
    (P + SHORT + "sensitivity = 0\n", ["[driven] sensitivity", "above 0", "got 0"]),
    (P + SHORT + "skew_s = nan\n", ["[driven] skew_s", "finite", "got nan"]),
    (P + SHORT + "mark_angle_deg = 1\nmark_angle_rad = 1\n", ["says the same as another key"]),
    (P + SHORT + "missing_pulses = 1\n", ["[driven]", "pulses_per_turn must be above"]),
    (P + "[reference]\nchannel = 0\n[driven]\nchannel = 2\n", ["channel number from 1", "got 0"]),
    (P + "[reference]\nunit = 'V'\n[driven]\nchannel = 2\n", ["'channel' is missing"]),
    (P + SHORT + "[measure]\nband_driven_hz = [30, 20]\n", ["low must be below high"]),
    (P + SHORT + "[measure]\nband_driven_hz = '20:30'\n", ["two numbers [low, high] in Hz"]),
    (P + SHORT + "[measure]\neps_turns = 0.5\n", ["below 0.5 turns"]),
    (P + SHORT + "[measure]\nhold = '2 bananas'\n", ["[measure] hold", "'2 bananas'"]),
    (P + SHORT + "[free_running]\nfile = 'a'\n", ["double brackets: [[free_running]]"]),
    (P + SHORT + "[[free_running]]\nfile = 'a'\n", ["[[free_running]] 1", "'role' is missing"]),
    (P + SHORT + "[variable]\nname = 'gap'\n", ["'gap' is no free column", "'spacing_mm'"]),
    (P + SHORT + "[lab]\nname = 1.5\n", ["[lab] name", "text in quotes", "got 1.5"]),
    (P + SHORT + "lab = 'x'\n", ["unknown key 'lab'"]),
    ("lab = 'x'\n" + P + SHORT, ["[lab]", "must be a table of keys, got 'x'"]),
    (SHORT, ["states no points"]),
    (P + SHORT + "[[point]]\nfile = 'a'\n", ["states both"]),
    ("points = 'points.csv'\n" + SHORT, ["points", "table of keys, got 'points.csv'"]),
    ("points = { table = 'none.csv' }\n" + SHORT, ["none.csv", "cannot be read"]),
    (SHORT + "[[point]]\nfile = 'a'\nlevel = 0\n", ["[[point]] 1 level", "above 0", "got 0"]),
    (SHORT + "[[point]]\nfile = 'a'\ndrive_herz = 1\n", ["did you mean 'drive_hz'?"]),
    (P + "[driven\n", ["is not TOML", "line 2"]),
]


@pytest.mark.parametrize(("text", "words"), BAD_FILES)
def test_a_broken_rule_names_file_key_and_value(
    tmp_path: Path, text: str, words: list[str]
) -> None:
    """The user repairs it without a guess: one line with place, rule and value."""
    message = refusal(written(tmp_path, text, TABLE.replace("-10", "10")))
    assert message.startswith(str(tmp_path))
    assert "\n" not in message
    for word in words:
        assert word in message


BAD_BYTES = [
    (b"\xff\xfe\x00", "is not UTF-8"),
    (b"a = " + b"[" * 3000, "SWEEP.toml"),
    (b"\x00\x01\x02", "is not TOML"),
]


@pytest.mark.parametrize(("data", "words"), BAD_BYTES)
def test_a_file_that_is_no_text_is_refused(tmp_path: Path, data: bytes, words: str) -> None:
    """A capture handed over as a sweep file must not end in a traceback."""
    path = tmp_path / "SWEEP.toml"
    path.write_bytes(data)
    assert words in refusal(path)


def test_a_missing_sweep_file_is_refused(tmp_path: Path) -> None:
    """A mistyped name is the commonest fault of all."""
    assert "No such file" in refusal(tmp_path / "none.toml")
    assert "cannot be read" in refusal(tmp_path)


def test_a_byte_order_mark_is_no_fault(tmp_path: Path) -> None:
    """Some editors put one before every text."""
    path = written(tmp_path, "\ufeff" + WHOLE)
    assert read_sweep_file(path).order == (1, 2)


NOTED = [
    ("performed = '2026-11-29 to 2027-04-02'", "instrument 'A-12': calibration was due 2027-03-01"),
    ("performed = 2026-11-29", ""),
]


@pytest.mark.parametrize(("line", "words"), NOTED)
def test_a_calibration_overdue_when_the_work_was_done_is_noted(
    tmp_path: Path, line: str, words: str
) -> None:
    """An overdue sensor spoils the traceability of every verdict."""
    plan = read_sweep_file(written(tmp_path, WHOLE.replace("[lab]", f"[lab]\n{line}")))
    assert [note[: len(words)] for note in plan.notes] == ([words] if words else [])


def test_a_sensor_that_is_no_instrument_and_missing_drives_are_noted(tmp_path: Path) -> None:
    """A slip of the pen in an id loses the certificate."""
    text = WHOLE.replace("channel = 1\n", "channel = 1\nsensor_id = 'A-21'\n")
    plan = read_sweep_file(written(tmp_path, text, TABLE + "c.wav,,-10,up,12\n"))
    assert plan.notes == (
        "1 of 3 points state no drive_hz; it is measured there",
        "sensor 'A-21' of the reference is none of the instruments (did you mean 'A-12'?)",
    )


def stripped(plan: SweepPlan) -> SweepPlan:
    """Return a plan without what the bytes of the file decide."""
    return dataclasses.replace(plan, text_sha256="")


@pytest.mark.parametrize("hints", [True, False])
@pytest.mark.parametrize("table", ["points.csv", None])
def test_a_plan_written_and_read_is_the_same_plan(
    tmp_path: Path, hints: bool, table: str | None
) -> None:
    """The draft and the demo hand over files that read back as they were meant."""
    plan = read_sweep_file(written(tmp_path, WHOLE))
    comments = {"file": "two\nlines", "driven": "guess: odd\x07", "driven.channel": "guess: 2nd"}
    text = render_sweep_toml(plan, table=table, comments=comments, hints=hints)
    again = read_sweep_file(written(tmp_path, text, render_points_csv(plan.points)))
    assert stripped(again) == stripped(plan)
    assert "# guess: odd?" in text
    assert "# guess: 2nd" in text


@given(st.text(st.characters(exclude_categories=["Cs"]), max_size=30))
def test_any_text_survives_writing_and_reading(name: str) -> None:
    """File and channel names hold whatever people type."""
    import tomllib

    from rig.sweepfile.write import toml_key, toml_text

    assert tomllib.loads(f"{toml_key(name)} = {toml_text(name)}") == {name: name}
