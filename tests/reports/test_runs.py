"""A sweep run end to end: stored, resumed, judged again, and never half written."""

from __future__ import annotations

import dataclasses
import json
import os
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from reports.outputs import OUTPUT_FILES
from reports.runs import RunOptions, load_run, report_again, run_sweep
from reports.summaries import sweep_text
from reports.verify import verify_folder
from rig.errors import LockspanError

OPTIONS = RunOptions(date_text="2026-12-01", workers=1)


def silent(done: int, total: int, text: str) -> None:
    """No progress."""


@pytest.fixture(scope="module")
def finished(campaign: Path, tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, int]:
    """The folder of a finished run of the campaign, and its exit code."""
    folder = tmp_path_factory.mktemp("finished") / "out"
    return folder, run_sweep(campaign, folder, OPTIONS, silent).exit_code


def outputs(folder: Path) -> dict[str, bytes]:
    """The content of every output file."""
    return {name: (folder / name).read_bytes() for name in OUTPUT_FILES}


def test_a_run_leaves_every_output_and_one_result_a_capture(finished: tuple[Path, int]) -> None:
    """What a script looks for must be there under its name."""
    folder, code = finished
    assert code == 0
    assert all((folder / name).stat().st_size > 0 for name in OUTPUT_FILES)
    assert len(list((folder / "points").glob("*.json"))) == 7


def test_the_edges_found_are_those_of_the_pair(finished: tuple[Path, int]) -> None:
    """The campaign's coupling is 0.5 Hz about 50 Hz; u is the tool's own, four of it allowed."""
    results = json.loads((finished[0] / "results.json").read_text(encoding="utf-8"))
    level = results["region"]["levels"][0]
    for edge, true_hz in (("lower_hz", 49.5), ("upper_hz", 50.5)):
        assert abs(level[edge]["value"] - true_hz) < 4 * level[edge]["u"] + 1e-3


def test_a_second_run_measures_nothing_and_gives_the_same_bytes(
    finished: tuple[Path, int], campaign: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Resume reads what is stored; the report must not show that it did."""
    folder = tmp_path / "out"
    shutil.copytree(finished[0], folder)
    monkeypatch.setattr("reports.runs.measure_task", None)  # calling it would raise
    run_sweep(campaign, folder, OPTIONS, silent)
    assert outputs(folder) == outputs(finished[0])


def test_two_workers_give_the_same_bytes_as_one(
    finished: tuple[Path, int], campaign: Path, tmp_path: Path
) -> None:
    """The order in which workers finish must not show."""
    folder = tmp_path / "out"
    options = RunOptions(date_text="2026-12-01", workers=2)
    run_sweep(campaign, folder, options, silent)
    assert outputs(folder) == outputs(finished[0])


def test_a_changed_limit_is_judged_again_without_measuring(
    finished: tuple[Path, int], campaign: Path, tmp_path: Path
) -> None:
    """The width is about 1 Hz: a lower limit of 3 Hz fails."""
    folder = tmp_path / "out"
    shutil.copytree(finished[0], folder)
    stricter = tmp_path / "campaign"
    shutil.copytree(campaign.parent, stricter)
    text = campaign.read_text(encoding="utf-8").replace("lower = 0.5", "lower = 3.0")
    (stricter / "SWEEP.toml").write_text(text, encoding="utf-8")
    outcome = report_again(folder, sweep_file=str(stricter / "SWEEP.toml"), date=None)
    assert outcome.exit_code == 1
    assert outcome.run.verdict == "fail"
    assert load_run(folder)[1].points[0].measurement is not None


def test_report_refuses_a_sweep_file_that_asks_for_another_measurement(
    finished: tuple[Path, int], campaign: Path, tmp_path: Path
) -> None:
    """Stored numbers must not be judged under rules they were not measured by."""
    changed = tmp_path / "SWEEP.toml"
    shutil.copy(campaign.parent / "points.csv", tmp_path / "points.csv")
    text = campaign.read_text(encoding="utf-8").replace("settle_s = 0.5", "settle_s = 1.5")
    changed.write_text(text, encoding="utf-8")
    with pytest.raises(LockspanError, match="run 'lockspan sweep' again"):
        report_again(finished[0], sweep_file=str(changed), date=None)


def test_report_reads_rows_under_the_keys_they_were_stored_with(
    finished: tuple[Path, int], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Used to lose every row when a newer program counted the keys anew."""
    folder = tmp_path / "out"
    shutil.copytree(finished[0], folder)
    monkeypatch.setattr("reports.runs.ALGORITHM", "of another year")
    for _ in range(2):
        outcome = report_again(folder, sweep_file=None, date=None)
    assert (folder / "points.csv").read_bytes() == (finished[0] / "points.csv").read_bytes()
    told = [note for note in outcome.run.notes if "measures them again" in note]
    assert len(told) == 1
    assert "of edition of another year" in told[0]


def test_a_report_by_another_version_says_so_once(
    finished: tuple[Path, int], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Numbers of the region may differ between versions; a signer must know which made them."""
    folder = tmp_path / "out"
    shutil.copytree(finished[0], folder)
    monkeypatch.setattr("reports.runs.program_version", lambda: "99.0")
    for _ in range(2):
        outcome = report_again(folder, sweep_file=None, date=None)
    told = [note for note in outcome.run.notes if "judged again by 99.0" in note]
    assert len(told) == 1


def test_bad_captures_cost_a_row_each_and_are_counted(campaign: Path, tmp_path: Path) -> None:
    """A missing, an empty and a copied file, and a name with markup in it."""
    folder = tmp_path / "campaign"
    shutil.copytree(campaign.parent, folder)
    (folder / "p1.wav").unlink()
    (folder / "p2.wav").write_bytes(b"")
    shutil.copy(folder / "p0.wav", folder / "copy.wav")
    (folder / "p3.wav").rename(folder / "run[red]ü 1.wav")
    table = (folder / "points.csv").read_text(encoding="utf-8").replace("p3.wav", "run[red]ü 1.wav")
    (folder / "points.csv").write_text(table + "copy.wav,49.1,1.0,up\n", encoding="utf-8")
    outcome = run_sweep(folder / "SWEEP.toml", tmp_path / "out", OPTIONS, silent)
    assert outcome.exit_code in (1, 5)
    bad = {row.file: row.message for row in outcome.run.points if row.status == "invalid"}
    assert set(bad) == {"p1.wav", "p2.wav", "copy.wav"}
    assert "same content as p0.wav" in bad["copy.wav"]
    assert "3 of 8 captures not analysed" in outcome.text
    crowd = next(row for row in outcome.run.points if row.status == "invalid")
    many = dataclasses.replace(outcome.run, points=(crowd,) * 504)
    text = sweep_text(many, tmp_path)
    assert "504 of 504" in text
    assert "and 484 more" in text
    assert text.count(crowd.message) == 20


def test_nothing_is_written_when_no_capture_can_be_measured(tmp_path: Path, campaign: Path) -> None:
    """A report of nothing helps nobody."""
    for name in ("SWEEP.toml", "points.csv"):
        shutil.copy(campaign.parent / name, tmp_path / name)
    with pytest.raises(LockspanError, match="none of 7 captures could be measured"):
        run_sweep(tmp_path / "SWEEP.toml", tmp_path / "out", OPTIONS, silent)
    assert not (tmp_path / "out" / "report.html").exists()


@pytest.mark.parametrize("wait_s", [2.5])
def test_a_killed_run_goes_on_where_it_stopped(
    finished: tuple[Path, int], campaign: Path, tmp_path: Path, wait_s: float
) -> None:
    """SIGKILL leaves whole results or none, and the next run gives the same bytes."""
    folder = tmp_path / "out"
    words = [sys.executable, "-c", "from reports.cli import main; main()", "sweep", str(campaign)]
    words += ["--out", str(folder), "--date", "2026-12-01", "--workers", "1", "--quiet"]
    process = subprocess.Popen(words, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
    time.sleep(wait_s)
    process.send_signal(signal.SIGKILL)
    process.wait()
    for stored in (folder / "points").glob("*.json") if folder.exists() else ():
        json.loads(stored.read_text(encoding="utf-8"))
    run_sweep(campaign, folder, OPTIONS, silent)
    assert outputs(folder) == outputs(finished[0])
    assert not [name for name in os.listdir(folder) if name.endswith(".html.tmp")]


def test_a_run_copied_with_its_campaign_is_verified_against_the_copy(
    campaign: Path, tmp_path: Path
) -> None:
    """Used to look at the captures of the original: an archive must stand on its own."""
    shutil.copytree(campaign.parent, tmp_path / "a" / "campaign")
    sweep = tmp_path / "a" / "campaign" / "SWEEP.toml"
    run_sweep(sweep, tmp_path / "a" / "out", OPTIONS, silent)
    shutil.copytree(tmp_path / "a", tmp_path / "b")
    with open(tmp_path / "b" / "campaign" / "p0.wav", "ab") as stream:
        stream.write(b"x")
    assert verify_folder(tmp_path / "a" / "out")[1] == 0
    text, code = verify_folder(tmp_path / "b" / "out")
    assert code == 3
    assert "p0.wav" in text
