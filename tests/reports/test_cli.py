"""The command line as a shell sees it: streams, exit codes, one line for what is wrong."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest

RUN = [sys.executable, "-c", "from reports.cli import main; main()"]


def lockspan(*words: object, **more: object) -> subprocess.CompletedProcess[str]:
    """Run the command line in a process of its own."""
    return subprocess.run(
        [*RUN, *map(str, words)], capture_output=True, text=True, check=False, **more
    )


@pytest.fixture(scope="module")
def capture(tmp_path_factory: pytest.TempPathFactory, campaign_tools: ModuleType) -> Path:
    """A drifting pair."""
    path = tmp_path_factory.mktemp("one") / "pair.wav"
    samples = campaign_tools.pair_samples(49.1, coupling_hz=0.5, seconds=10.0, seed=5)
    campaign_tools.write_wav(path, samples)
    return path


def test_measure_writes_json_to_stdout_and_nothing_else(capture: Path) -> None:
    """A script pipes this into its own reader."""
    result = lockspan("measure", capture, "--json", "-")
    value = json.loads(result.stdout)
    assert result.returncode == 0
    assert value["schema"] == "lockspan.measurement/1.0"
    assert value["state"] == "drifting"
    assert value["order"] == {"n": 1, "m": 1, "source": "given"}
    # the campaign's pair: detuning 0.9 Hz, coupling 0.5 Hz; four of the stated u
    for name, true in (("detuning_hz", 0.9), ("coupling_hz", 0.5)):
        assert abs(value["adler"][name]["value"] - true) < 4 * value["adler"][name]["u"]


def test_measure_says_the_same_in_words(capture: Path) -> None:
    """A person reads lines, with units."""
    result = lockspan("measure", capture)
    assert result.returncode == 0
    assert "drifting" in result.stdout
    assert "Hz" in result.stdout


def test_a_quiet_measurement_keeps_its_numbers_and_leaves_its_notes_out(capture: Path) -> None:
    """--quiet used to be taken and to do nothing; the JSON keeps every note."""
    plain, quiet = (
        lockspan("measure", capture),
        lockspan("measure", capture, "--quiet", "--json", "-"),
    )
    told = lockspan("measure", capture, "--quiet").stdout
    assert any(line.startswith("note") for line in plain.stdout.splitlines())
    assert not any(line.startswith("note") for line in told.splitlines())
    assert "coupling" in told
    assert json.loads(quiet.stdout)["driven"]["notes"]


@pytest.mark.parametrize(
    ("words", "code", "text"),
    [
        (["measure", "nowhere.wav"], 3, "nowhere.wav"),
        (["measure", "{file}", "--driven", "7"], 3, "no channel '7'"),
        (["measure", "{file}", "--driven", "left"], 3, "no channel 'left'"),
        (["measure", "{file}", "--order", "0:1"], 2, "--order"),
        (["measure", "{file}", "--band", "9:1"], 2, "--band"),
        (["measure", "{file}", "--rate", "-5"], 2, "--rate: must be above 0, got -5"),
        (["measure", "{file}", "--eps", "0.5"], 3, "below 0.5 turn"),
        (["measure", "{file}", "--hold", "soon"], 3, "hold time 'soon'"),
        (["measure", "{file}", "--method", "magic"], 3, "magic"),
        (["sweep", "nowhere.toml", "--out", "x"], 3, "nowhere.toml"),
        (["report", "nowhere"], 3, "run.json"),
        (["report", "nowhere", "--date", "yesterday"], 2, "--date: needs YYYY-MM-DD"),
        (["verify", "nowhere"], 3, "run.json"),
        (["simulate", "perpetual"], 2, "no rig 'perpetual'"),
        (["bogus"], 2, "bogus"),
    ],
)
def test_what_is_wrong_takes_one_line_and_its_exit_code(
    capture: Path, tmp_path: Path, words: list[str], code: int, text: str
) -> None:
    """One line on standard error names the thing, the rule and the value; no traceback."""
    result = lockspan(*[word.format(file=capture) for word in words], cwd=tmp_path)
    assert result.returncode == code, result.stderr
    assert text in result.stderr
    assert "Traceback" not in result.stderr
    assert result.stdout == ""
    lines = [line for line in result.stderr.splitlines() if line.startswith("error")]
    assert len(lines) <= 1
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    ("name", "samples", "text"),
    [
        ("silent.wav", np.zeros((8000, 2)), "channel"),
        ("one.wav", np.zeros((8000, 1)) + 0.1, "no channel '2'"),
        ("short.wav", 0.5 * np.sin(np.arange(60)[:, None] * [0.3, 0.3]), ""),
        ("coarse.wav", 0.5 * np.sin(np.arange(8000)[:, None] * [2.9, 2.9]), "samples per cycle"),
    ],
)
def test_a_signal_without_a_phase_is_refused_with_its_file(
    tmp_path: Path, campaign_tools: ModuleType, name: str, samples: np.ndarray, text: str
) -> None:
    """The line starts with the file, so that a log of hundreds can be searched."""
    campaign_tools.write_wav(tmp_path / name, samples)
    result = lockspan("measure", tmp_path / name)
    assert result.returncode == 3
    assert name in result.stderr
    assert text in result.stderr
    assert len(result.stderr.splitlines()) == 1


def test_inspect_shows_a_screen_and_the_same_as_json(capture: Path) -> None:
    """A person and a script get the same facts."""
    result = lockspan("inspect", capture, "--json", "-")
    value = json.loads(result.stdout)
    assert result.returncode == 0
    assert value["capture"]["rate_hz"] == 1000.0
    screen = lockspan("inspect", capture).stdout
    assert "1000" in screen
    assert len(screen.splitlines()) < 50


def test_an_undecided_measurement_exits_with_four(
    tmp_path: Path, campaign_tools: ModuleType
) -> None:
    """Short and almost in step, with nothing known of the free pair: nobody can tell."""
    samples = campaign_tools.pair_samples(50.0, coupling_hz=0.0, seconds=2.0, seed=3)
    campaign_tools.write_wav(tmp_path / "pair.wav", samples)
    result = lockspan("measure", tmp_path / "pair.wav", "--free-spread", "0.0001")
    assert result.returncode == 4, result.stdout + result.stderr
    assert "undecided" in result.stdout


def test_output_to_a_closed_pipe_is_no_fault(capture: Path) -> None:
    """`lockspan inspect x | head -1` must not end in a traceback."""
    process = subprocess.Popen(
        [*RUN, "inspect", str(capture)], stdout=subprocess.PIPE, stderr=subprocess.PIPE
    )
    assert process.stdout is not None
    process.stdout.close()
    assert process.stderr is not None
    assert b"Traceback" not in process.stderr.read()
    process.stderr.close()
    process.wait()


def test_names_that_a_terminal_cannot_show_do_not_stop_it(
    capture: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Windows consoles speak cp1252; a name with Greek in it must not end the run."""
    monkeypatch.setenv("PYTHONIOENCODING", "cp1252")
    target = tmp_path / "Δφ [red].wav"
    target.write_bytes(capture.read_bytes())
    result = lockspan("measure", target, encoding="cp1252")
    assert result.returncode == 0, result.stderr
