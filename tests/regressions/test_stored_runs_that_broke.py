"""Stored runs that once ended in a fault of the program; each names the symptom."""

from __future__ import annotations

import json
import shutil
from pathlib import Path

import pytest

from reports.measuring import ALGORITHM
from reports.runs import RunOptions, report_again, run_sweep
from rig.errors import LockspanError


def test_a_stored_run_nested_beyond_reading_is_refused(tmp_path: Path) -> None:
    """Used to end in RecursionError, out of the reader of JSON."""
    (tmp_path / "run.json").write_text("[" * 100_000)
    with pytest.raises(LockspanError, match=r"run\.json: cannot be read"):
        report_again(tmp_path, sweep_file=None, date="2026-01-01")


@pytest.fixture(scope="module")
def finished(campaign: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return the folder of a finished run of the campaign."""
    folder = tmp_path_factory.mktemp("stored") / "out"
    run_again(campaign, folder)
    return folder


@pytest.fixture
def folder(finished: Path, tmp_path: Path) -> Path:
    """Return a copy of the finished folder, to be damaged."""
    return Path(shutil.copytree(finished, tmp_path / "out"))


def run_again(campaign: Path, folder: Path) -> None:
    """Run the sweep of a campaign into a folder."""
    options = RunOptions(date_text="2026-01-01", workers=1)
    run_sweep(campaign, folder, options, lambda done, total, text: None)


def change(path: Path, places: tuple[object, ...], value: object) -> None:
    """Set one value of a JSON file."""
    stored = inner = json.loads(path.read_text())
    for place in places[:-1]:
        inner = inner[place]
    inner[places[-1]] = value
    path.write_text(json.dumps(stored))


@pytest.mark.parametrize(
    ("places", "value"),
    [
        (("measurement", "driven", "frequency_hz", "high"), 10**400),  # OverflowError
        (("measurement", "adler"), None),  # refused, and the sweep could not go on
        (("measurement",), {}),
        (("status",), 5),
        (("message",), None),
    ],
)
def test_a_damaged_result_is_measured_again(
    places: tuple[object, ...], value: object, campaign: Path, folder: Path
) -> None:
    """Used to stop the sweep, without a word on which file stood in its way."""
    whole = (folder / "results.json").read_bytes()
    change(sorted((folder / "points").iterdir())[2], places, value)
    run_again(campaign, folder)
    assert (folder / "results.json").read_bytes() == whole


def test_a_report_names_the_damaged_result(folder: Path) -> None:
    """A report does not measure: it must say which of a thousand files is damaged."""
    path = sorted((folder / "points").iterdir())[2]
    change(path, ("measurement", "driven", "frequency_hz", "high"), 10**400)
    with pytest.raises(LockspanError, match=rf"{path.name}: .*; run the sweep again"):
        report_again(folder, sweep_file=None, date=None)


@pytest.mark.parametrize(("places", "value"), [((1,), True), ((1,), [{}]), ((1, 0), 3)])
def test_damaged_rows_of_a_run_are_refused(
    places: tuple[object, ...], value: object, folder: Path
) -> None:
    """Used to end in TypeError or ValueError."""
    change(folder / "run.json", ("keys", *places), value)
    with pytest.raises(LockspanError, match="run the sweep again"):
        report_again(folder, sweep_file=None, date=None)


def test_results_of_an_older_algorithm_are_not_judged_in_silence(
    campaign: Path, folder: Path
) -> None:
    """Used to be mapped as if the estimators of today had measured them."""
    stored = json.loads((folder / "run.json").read_text())
    assert stored.pop("algorithm") == ALGORITHM
    (folder / "run.json").write_text(json.dumps(stored))
    outcome = report_again(folder, sweep_file=None, date=None)
    assert any("estimators of edition 1" in note for note in outcome.run.notes)
    assert "estimators of edition 1" in (folder / "report.html").read_text()
    run_again(campaign, folder)
    assert "estimators of edition 1" not in (folder / "report.html").read_text()
