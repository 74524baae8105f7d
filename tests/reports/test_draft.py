"""A draft from a folder of captures: what it finds, what it marks, what it never overwrites."""

from __future__ import annotations

import os
from pathlib import Path

import numpy as np
import pytest
import soundfile

from reports.draft import draft_sweep, write_draft
from reports.filenames import level_kind, name_hints
from rig.errors import SweepFileError
from rig.roles import guess_order, guess_quantity
from rig.sweepfile import FreeRunEntry, SweepPlan, read_sweep_file

RATE_HZ = 1000
TIME_S = np.arange(8000) / RATE_HZ
FREE_HZ = 40.0


def write_pair(path: Path, *, drive_hz: float, drive: float, own_hz: float, own: float) -> None:
    """Write a two-channel capture: drive on the left, oscillator on the right."""
    path.parent.mkdir(parents=True, exist_ok=True)
    rng = np.random.default_rng(len(path.name))
    left = drive * np.sin(2 * np.pi * drive_hz * TIME_S)
    right = own * np.sin(2 * np.pi * own_hz * TIME_S + 0.4)
    samples = np.stack([left, right], axis=1) + 1e-3 * rng.standard_normal((TIME_S.size, 2))
    soundfile.write(path, samples, RATE_HZ, subtype="FLOAT")


def own_hz(drive_hz: float, drive: float) -> float:
    """Return where the oscillator runs: with the drive inside its range, else nearly free."""
    return drive_hz if abs(drive_hz - FREE_HZ) < 5 * drive else FREE_HZ


def drafted(folder: Path) -> SweepPlan:
    """Write a draft and read it back."""
    write_draft(folder)
    return read_sweep_file(folder / "SWEEP.toml")


@pytest.fixture
def named_folder(tmp_path: Path) -> Path:
    """A folder whose names say level and direction, with two free-running captures."""
    for level in (0.1, 0.2):
        for direction, drives in (("up", (39.0, 40.0, 41.0)), ("down", (41.0, 40.0, 39.0))):
            for number, drive_hz in enumerate(drives):
                path = tmp_path / "captures" / f"{level:g}V_{direction}_{number}.wav"
                own = own_hz(drive_hz, level)
                write_pair(path, drive_hz=drive_hz, drive=level, own_hz=own, own=0.5)
    write_pair(tmp_path / "osc_alone.wav", drive_hz=40, drive=0, own_hz=FREE_HZ, own=0.5)
    write_pair(tmp_path / "tone_only.wav", drive_hz=40, drive=0.2, own_hz=FREE_HZ, own=0)
    return tmp_path


def test_a_named_folder_is_drafted_as_it_was_recorded(named_folder: Path) -> None:
    """The first hour with the tool: a folder of captures becomes a sweep file."""
    plan = drafted(named_folder)
    assert (plan.reference.channel, plan.driven.channel) == (1, 2)
    assert len(plan.points) == 12
    found = {point.file: (point.drive_hz, point.level, point.direction) for point in plan.points}
    assert found["captures/0.1V_up_0.wav"] == (39.0, 0.1, "up")
    assert found["captures/0.2V_down_1.wav"] == (40.0, 0.2, "down")
    assert (plan.level.unit, plan.level.kind) == ("V", "amplitude")
    assert set(plan.free_running) == {
        FreeRunEntry(file="osc_alone.wav", role="driven"),
        FreeRunEntry(file="tone_only.wav", role="reference"),
    }
    assert plan.order == (1, 1)


def test_every_guess_is_marked(named_folder: Path) -> None:
    """A guess that looks like a statement ends in a report."""
    result = draft_sweep(named_folder)
    for key in ("order =", "coupling =", "channel = 1", "channel = 2", "unit = ", "role ="):
        lines = [line for line in result.toml.splitlines() if line.startswith(key)]
        assert lines
        assert all("guess:" in line for line in lines)
    assert all(dict(point.extras)["guess"] for point in result.plan.points)
    assert "a sound file holds no volts" in result.toml
    assert "drive measured; level from the file name; direction from the file name" in result.table


def test_level_and_direction_come_from_the_signals_without_names(tmp_path: Path) -> None:
    """Recorders number their files; the sweep is in the samples and the order."""
    run = 0
    for level in (0.11, 0.22):
        for drive_hz in (39.0, 39.5, 40.0, 40.5, 41.0, 40.5, 40.0, 39.5, 39.0):
            run += 1
            own = own_hz(drive_hz, level)
            path = tmp_path / f"rec{run:03d}.wav"
            write_pair(path, drive_hz=drive_hz, drive=level, own_hz=own, own=0.5)
    plan = drafted(tmp_path)
    levels = [point.level for point in plan.points]
    assert levels == pytest.approx([0.11] * 9 + [0.22] * 9, rel=0.01)
    assert len(set(levels)) == 2
    assert [point.direction for point in plan.points] == (["up"] * 5 + ["down"] * 4) * 2
    assert [point.drive_hz for point in plan.points[:3]] == pytest.approx([39, 39.5, 40], abs=0.01)
    assert "direction from the running numbers" in dict(plan.points[0].extras)["guess"]


def test_the_times_of_writing_order_a_sweep_without_numbers(tmp_path: Path) -> None:
    """Names of hand-made files sort by alphabet, not by time."""
    for step, (name, drive_hz) in enumerate([("q", 41.0), ("b", 40.5), ("x", 40.0), ("a", 39.5)]):
        path = tmp_path / f"{name}.wav"
        write_pair(path, drive_hz=drive_hz, drive=0.1, own_hz=FREE_HZ, own=0.5)
        os.utime(path, (1e9 + 60 * step, 1e9 + 60 * step))
    plan = drafted(tmp_path)
    assert [point.direction for point in plan.points] == ["down"] * 4
    assert "from the times of writing" in dict(plan.points[0].extras)["guess"]


def test_the_channel_that_moves_is_the_reference(tmp_path: Path) -> None:
    """The drive may be on any channel."""
    for run, drive_hz in enumerate((38.0, 40.0, 42.0)):
        path = tmp_path / f"rec{run}.wav"
        write_pair(path, drive_hz=FREE_HZ, drive=0.5, own_hz=drive_hz, own=0.1)
    plan = drafted(tmp_path)
    assert (plan.reference.channel, plan.driven.channel) == (2, 1)
    assert [point.drive_hz for point in plan.points] == pytest.approx([38, 40, 42], abs=0.01)


def test_what_cannot_be_used_is_named_and_left_out(named_folder: Path) -> None:
    """One broken file must not cost the draft, nor vanish without a word."""
    (named_folder / "cut.wav").write_bytes(b"RIFF\x00")
    soundfile.write(named_folder / "mono.wav", np.zeros(4000), RATE_HZ)
    write_pair(named_folder / "dead.wav", drive_hz=40, drive=0, own_hz=40, own=0)
    result = draft_sweep(named_folder)
    notes = " | ".join(result.notes)
    assert "cut.wav: " in notes
    assert "mono.wav: 1 channels, 2 usual here" in notes
    assert "dead.wav: neither channel has a line above its noise" in notes
    assert len(result.plan.points) == 12
    assert str(named_folder) not in result.toml
    assert "left out: dead.wav" in write_draft(named_folder)


@pytest.mark.parametrize("name", ["SWEEP.toml", "points.csv"])
def test_nothing_is_overwritten(named_folder: Path, name: str) -> None:
    """A sweep file that a person has mended is worth more than any draft."""
    (named_folder / name).write_text("mine", encoding="utf-8")
    with pytest.raises(SweepFileError, match="is there already; a draft overwrites nothing"):
        write_draft(named_folder)
    assert (named_folder / name).read_text(encoding="utf-8") == "mine"
    assert len({"SWEEP.toml", "points.csv"} & set(os.listdir(named_folder))) == 1


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda folder: None, "no capture that can be read (0 tried)"),
        (lambda folder: (folder / "a.wav").write_bytes(b""), "(1 tried; a.wav: "),
        (
            lambda folder: write_pair(folder / "a.wav", drive_hz=9, drive=0, own_hz=9, own=0),
            "none of 1 captures shows both oscillators",
        ),
    ],
)
def test_a_folder_without_points_is_refused(tmp_path: Path, make: object, words: str) -> None:
    """An empty draft would be refused by the sweep with a message about something else."""
    make(tmp_path)  # type: ignore[operator]
    with pytest.raises(SweepFileError) as caught:
        write_draft(tmp_path)
    assert words in str(caught.value)
    assert not (tmp_path / "SWEEP.toml").exists()


def test_a_file_instead_of_a_folder_is_refused(tmp_path: Path) -> None:
    """Tab completion ends on the file."""
    with pytest.raises(SweepFileError, match="is not a folder"):
        draft_sweep(tmp_path / "none")


def test_odd_names_come_through_table_and_toml(tmp_path: Path) -> None:
    """Brackets, quotes and blanks in names are text everywhere."""
    names = ["run[red]ü 1.wav", 'a,"b" 2.wav', "it's; 3.wav"]
    for name, drive_hz in zip(names, (38.0, 40.0, 42.0), strict=True):
        write_pair(tmp_path / name, drive_hz=drive_hz, drive=0.1, own_hz=FREE_HZ, own=0.5)
    plan = drafted(tmp_path)
    assert sorted(point.file for point in plan.points) == sorted(names)


NAMES = [
    ("2V_25.1Hz_up.wav", 25.1, (2.0, "V"), "up", None),
    ("run 012 -10dBm 25p1 kHz.wav", 25_100.0, (-10.0, "dBm"), "none", 12),
    ("25,1Hz_500mV_down_3.csv", 25.1, (500.0, "mV"), "down", 3),
    ("f=1.5MHz 3mHz.wav", 1.5e6, None, "none", None),
    ("captures/sub/rec_0042.wav", None, None, "none", 42),
    ("updown.wav", None, None, "none", None),
    ("up_then_down.wav", None, None, "none", None),
    ("run 3 a.wav", None, None, "none", 3),
    ("5mHz.wav", 5e-3, None, "none", None),
]


@pytest.mark.parametrize(("name", "hz", "level", "direction", "run"), NAMES)
def test_names_say_what_they_say_and_no_more(
    name: str, hz: float | None, level: object, direction: str, run: int | None
) -> None:
    """A number without a unit is a running number, not a frequency."""
    hints = name_hints(name)
    assert hints.frequency_hz == pytest.approx(hz)
    assert (hints.level, hints.direction, hints.run) == (level, direction, run)
    assert not hints.is_free


@pytest.mark.parametrize("name", ["osc_free.wav", "cell alone 2.wav", "FREE-run.wav"])
def test_free_running_names_are_known(name: str) -> None:
    """People call a capture of one oscillator alone by a handful of words."""
    assert name_hints(name).is_free


def test_kinds_orders_and_quantities_are_guessed_from_units_and_ratios() -> None:
    """Each guess follows one plain rule."""
    assert [level_kind(unit) for unit in ("V", "dBm", "mW", "W")] == [
        "amplitude",
        "decibel",
        "power",
        "power",
    ]
    assert guess_order(40.0, 41.0) == (1, 1)
    assert guess_order(40.0, 20.2) == (2, 1)
    assert guess_order(0.25, 0.74) == (1, 3)
    assert guess_order(40.0, 27.0) == (3, 2)
    assert guess_order(1.0, 29.0) is None
    assert guess_quantity("m/s2") == "acceleration"
    assert guess_quantity("bar") == "unstated"
