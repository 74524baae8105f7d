"""A sweep whose pairs were taken by two recorders: names, digests, the rule on clocks."""

from __future__ import annotations

import csv
import io
import json
from pathlib import Path

import numpy as np
import pytest
import soundfile

from reports.draft import draft_sweep, write_draft
from reports.runs import RunOptions, run_sweep
from reports.verify import verify_folder
from rig.errors import SweepFileError
from rig.sweepfile import read_sweep_file

RATE_HZ = 2000
DRIVES_HZ = (95.0, 98.5, 99.5, 100.5, 101.5, 105.0)
FAST = 20e-6  # of the second recorder's clock
TIE = "[second_recorder]\nclock_error_ppm = 20.0\nclock_error_u_ppm = 0.5\n"
SWEEP = """points = { table = "points.csv" }
[reference]
channel = 1
[driven]
channel = 1
"""
OPTIONS = RunOptions(date_text="2026-01-01", workers=1)


def write_pair(folder: Path, drive_hz: float, rng: np.random.Generator) -> None:
    """Write what two recorders take of an oscillator of 100 Hz, pulled by up to 1 Hz."""
    count = 10 * RATE_HZ
    psi, step = np.empty(count), 2 * np.pi / RATE_HZ
    psi[0] = 0.3
    kicks = 0.01 * rng.standard_normal(count)
    for index in range(count - 1):
        psi[index + 1] = psi[index] + step * (100.0 - drive_hz - np.sin(psi[index])) + kicks[index]
    time_s = np.arange(count) / RATE_HZ
    drive = 2 * np.pi * drive_hz * time_s
    late = np.interp(time_s / (1 + FAST), time_s, drive + psi)
    for ending, phase in (("ref", drive), ("drv", late)):
        samples = 0.4 * np.cos(phase) + 0.002 * rng.standard_normal(count)
        path = folder / f"{drive_hz:g}Hz_{ending}.wav"
        soundfile.write(path, samples, RATE_HZ, subtype="PCM_24")


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return a folder of captures by two recorders, with no sweep file yet."""
    folder = tmp_path_factory.mktemp("two")
    rng = np.random.default_rng(8)
    for drive_hz in DRIVES_HZ:
        write_pair(folder, drive_hz, rng)
    return folder


@pytest.fixture
def campaign(made: Path, tmp_path: Path) -> Path:
    """Return a folder of its own with the captures, the table and a sweep file."""
    for path in made.glob("*.wav"):
        (tmp_path / path.name).write_bytes(path.read_bytes())
    rows = [f"{hz:g}Hz_ref.wav,{hz:g}Hz_drv.wav,{hz}" for hz in DRIVES_HZ]
    (tmp_path / "points.csv").write_text("\n".join(["file,driven_file,drive_hz", *rows, ""]))
    (tmp_path / "SWEEP.toml").write_text(SWEEP + TIE)
    return tmp_path


def run(campaign: Path) -> tuple[Path, dict]:
    """Run a campaign; return the folder of results and what results.json holds."""
    out = campaign / "out"
    run_sweep(campaign / "SWEEP.toml", out, OPTIONS, lambda done, total, text: None)
    return out, json.loads((out / "results.json").read_text())


def test_a_sweep_of_two_recorders_finds_the_range_and_names_both_files(campaign: Path) -> None:
    """The edges are 99 and 101 Hz; an auditor must find either file with its digest."""
    out, value = run(campaign)
    (level,) = value["region"]["levels"]
    # Five standard uncertainties: one draw of six short captures.
    for edge, true_hz in (("lower_hz", 99.0), ("upper_hz", 101.0)):
        assert abs(level[edge]["value"] - true_hz) < 5 * level[edge]["u"] < 0.3
    point = value["points"][0]
    assert (point["file"], point["driven_file"]) == ("95Hz_ref.wav", "95Hz_drv.wav")
    digests = {one["file"]: one["sha256"] for one in value["provenance"]["inputs"]}
    assert digests["95Hz_drv.wav"] == point["driven_sha256"] != point["sha256"]
    row = next(csv.DictReader(io.StringIO((out / "points.csv").read_text())))
    assert (row["file"], row["driven_file"]) == ("95Hz_ref.wav", "95Hz_drv.wav")
    assert "95Hz_ref.wav + 95Hz_drv.wav" in (out / "report.html").read_text()
    assert any("corrected by +20 ppm" in note for note in point["notes"])


def test_a_changed_driven_file_is_seen_by_verify_and_measured_again(campaign: Path) -> None:
    """A result keyed by the first file alone would outlive the second."""
    out, before = run(campaign)
    assert verify_folder(out)[1] == 0
    target = campaign / "99.5Hz_drv.wav"
    target.write_bytes((campaign / "105Hz_drv.wav").read_bytes())
    (campaign / "105Hz_drv.wav").unlink()
    text, code = verify_folder(out)
    assert code != 0
    assert "input 99.5Hz_drv.wav" in text
    after = run(campaign)[1]
    states = [[one.get("state") for one in value["points"]] for value in (before, after)]
    assert (states[0][2], states[1][2]) == ("undecided", "drifting")  # no free-running capture
    assert after["points"][5]["status"] == "invalid"
    assert "105Hz_drv.wav" in after["points"][5]["message"]


def test_a_driven_file_without_a_tie_of_the_clocks_is_refused(campaign: Path) -> None:
    """50 ppm make a slow drift of every lock: nothing may be measured before it is tied."""
    (campaign / "SWEEP.toml").write_text(SWEEP)
    with pytest.raises(SweepFileError, match="nothing ties the two clocks"):
        read_sweep_file(campaign / "SWEEP.toml")


@pytest.mark.parametrize(
    ("block", "words"),
    [
        ("shared = 2\nclock_error_ppm = 1.0", "both tie the clocks"),
        ("shared = 2\nclock_error_u_ppm = 1.0", "needs clock_error_ppm"),
        ("share = 2", "unknown key 'share'"),
    ],
)
def test_a_tie_that_contradicts_itself_is_refused(block: str, words: str, campaign: Path) -> None:
    """Two ties cannot both count."""
    (campaign / "SWEEP.toml").write_text(f"{SWEEP}[second_recorder]\n{block}\n")
    with pytest.raises(SweepFileError, match=words):
        read_sweep_file(campaign / "SWEEP.toml")


def test_one_file_in_two_places_is_refused(campaign: Path) -> None:
    """A driven file that is another row's file would be judged against itself."""
    table = campaign / "points.csv"
    table.write_text(table.read_text().replace("98.5Hz_drv.wav", "95Hz_ref.wav"))
    with pytest.raises(SweepFileError, match=r"'95Hz_ref.wav' stands already in .* line 2"):
        read_sweep_file(campaign / "SWEEP.toml")


def test_a_draft_brings_pairs_of_files_together_and_marks_the_guess(
    made: Path, tmp_path: Path
) -> None:
    """Nobody types the second column of a hundred rows; the tie is left to the person."""
    for path in made.glob("*.wav"):
        (tmp_path / path.name).write_bytes(path.read_bytes())
    (tmp_path / "98.5Hz_ref.wav").rename(tmp_path / "unlocked ref.wav")
    (tmp_path / "98.5Hz_drv.wav").rename(tmp_path / "alone_drv.wav")
    result = draft_sweep(tmp_path)
    assert [point.driven_file for point in result.plan.points] == [
        point.file.replace("_ref", "_drv") for point in result.plan.points
    ]
    assert len(result.plan.points) == len(DRIVES_HZ) - 1
    assert {(free.file, free.role) for free in result.plan.free_running} == {
        ("alone_drv.wav", "driven"),
        ("unlocked ref.wav", "reference"),
    }
    assert "# guess: pairs of files" in result.toml
    assert "State what ties their clocks" in write_draft(tmp_path)
    with pytest.raises(SweepFileError, match="nothing ties the two clocks"):
        read_sweep_file(tmp_path / "SWEEP.toml")
    text = (tmp_path / "SWEEP.toml").read_text()
    tied = text.replace("[second_recorder]", TIE)
    (tmp_path / "SWEEP.toml").write_text(tied)
    assert read_sweep_file(tmp_path / "SWEEP.toml").second_recorder.is_tied


def test_a_pair_of_files_without_drive_is_the_driven_one_alone_on_its_own_file(
    made: Path, tmp_path: Path, rng: np.random.Generator
) -> None:
    """The first recorder took nothing of the driven one: named there, it could not be used."""
    for path in made.glob("*.wav"):
        (tmp_path / path.name).write_bytes(path.read_bytes())
    silence = 0.002 * rng.standard_normal(10 * RATE_HZ)
    soundfile.write(tmp_path / "free_ref.wav", silence, RATE_HZ, subtype="PCM_24")
    (tmp_path / "free_drv.wav").write_bytes((made / "98.5Hz_drv.wav").read_bytes())
    result = draft_sweep(tmp_path)
    assert [(free.file, free.role) for free in result.plan.free_running] == [
        ("free_drv.wav", "driven")
    ]
    assert 'role = "driven"  # guess: the reference channel is quiet' in result.toml
    assert result.toml.count("# guess: by the ending of the file names") == 2
