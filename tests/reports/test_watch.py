"""The command that watches: lines as they become certain, and every way to end."""

from __future__ import annotations

import json
import signal
import subprocess
import sys
import time
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest

from fit.following import LockEvent
from reports.options import UsageError
from reports.watch import event_json, event_text, watch_source

RUN = [sys.executable, "-c", "from reports.cli import main; main()", "watch"]
HEARD: list[str] = []


@pytest.fixture(scope="module")
def samples(campaign_tools: ModuleType) -> np.ndarray:
    """A locked pair for 25 s, then one that drifts, shape (frames, 2)."""
    parts = [
        campaign_tools.pair_samples(50.0, coupling_hz=0.5, seconds=25.0, seed=5),
        campaign_tools.pair_samples(48.8, coupling_hz=0.5, seconds=15.0, seed=6),
    ]
    return np.concatenate(parts)


def watched(source: str, json_target: str | None = None, **words: object) -> list[str]:
    """Lines of a watch inside this process."""
    lines: list[str] = []
    assert watch_source(source, words, json_target, lines.append, HEARD.append) == 0
    return lines


def test_a_pipe_is_watched_to_its_end(samples: np.ndarray) -> None:
    """`recorder | lockspan watch -` is how a rig is watched without a file."""
    words = ["-", "--rate", "1000", "--channels", "2", "--json", "-"]
    result = subprocess.run(
        [*RUN, *words], input=samples.astype("<f4").tobytes(), capture_output=True, check=False
    )
    assert result.returncode == 0, result.stderr
    events = [json.loads(line) for line in result.stdout.splitlines()]
    kinds = [event["event"] for event in events]
    assert kinds[:3] == ["gained", "lost", "slip"]
    assert events[1]["time_s"] == pytest.approx(25.0, abs=0.5)
    assert kinds.count("slip") > 5
    assert b"not locked at the end" in result.stderr


def test_events_come_while_the_file_still_grows(
    tmp_path: Path, samples: np.ndarray, campaign_tools: ModuleType
) -> None:
    """A watch that speaks only at the end is a measurement."""
    path = tmp_path / "live.wav"
    campaign_tools.write_wav(path, samples)
    data = path.read_bytes()
    path.write_bytes(data[: len(data) // 2])
    with subprocess.Popen(
        [*RUN, str(path), "--idle", "30"],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        # Where the tests run in the background of a script, children are born deaf to Ctrl-C.
        preexec_fn=lambda: signal.signal(signal.SIGINT, signal.SIG_DFL),
    ) as process:
        assert process.stdout is not None
        assert process.stderr is not None
        assert "lock gained" in process.stdout.readline()
        with path.open("ab") as file:
            file.write(data[len(data) // 2 :])
        assert "lock lost" in process.stdout.readline()
        process.send_signal(signal.SIGINT)
        process.communicate(timeout=20)
        assert process.returncode == 130


def test_it_ends_when_nothing_comes_any_more(
    tmp_path: Path, samples: np.ndarray, campaign_tools: ModuleType
) -> None:
    """The last events are told although no later samples confirm them."""
    campaign_tools.write_wav(tmp_path / "a.wav", samples[:15000])
    lines = watched(str(tmp_path / "a.wav"), idle_s=0.2)
    assert len(lines) == 1
    assert "lock gained" in lines[0]
    assert "locked at the end" in HEARD[-1]


def test_it_ends_after_a_stated_time(
    tmp_path: Path, samples: np.ndarray, campaign_tools: ModuleType
) -> None:
    """A job of a schedule must come back."""
    campaign_tools.write_wav(tmp_path / "a.wav", samples[:3000])
    began = time.monotonic()
    watched(str(tmp_path / "a.wav"), for_s=0.3)
    assert time.monotonic() - began < 10.0


def test_json_lines_go_to_a_file_beside_the_text(
    tmp_path: Path, samples: np.ndarray, campaign_tools: ModuleType
) -> None:
    """A person reads one, a script the other; both say the same."""
    campaign_tools.write_wav(tmp_path / "a.wav", samples)
    target = tmp_path / "events.jsonl"
    lines = watched(str(tmp_path / "a.wav"), str(target), idle_s=0.2)
    events = [json.loads(line) for line in target.read_text(encoding="utf-8").splitlines()]
    assert len(events) == len(lines) > 5


def test_watching_changes_no_file(
    tmp_path: Path, samples: np.ndarray, campaign_tools: ModuleType
) -> None:
    """A recorder that is being watched must not notice."""
    path = tmp_path / "a.wav"
    campaign_tools.write_wav(path, samples[:9000])
    before = path.read_bytes(), path.stat().st_mtime_ns
    watched(str(path), idle_s=0.2)
    assert (path.read_bytes(), path.stat().st_mtime_ns) == before
    assert list(tmp_path.iterdir()) == [path]


@pytest.mark.parametrize(
    ("words", "text"),
    [
        ({}, "state no rate; give --rate"),
        ({"rate_hz": 10.0, "sample_type": "int8"}, "needs one of float32, int16, int32"),
    ],
)
def test_a_pipe_must_be_described(words: dict[str, object], text: str) -> None:
    """Raw bytes say nothing of themselves."""
    with pytest.raises(UsageError, match=text):
        watched("-", **words)


@pytest.mark.parametrize(
    ("event", "text", "value"),
    [
        (LockEvent(time_s=1.5, kind="gained"), "1.500 s  lock gained", {"event": "gained"}),
        (LockEvent(time_s=2.0, kind="slip", turns=-1), "2.000 s  slip -1", {"turns": -1}),
        (LockEvent(time_s=3.0, kind="no phase", reason="weak"), "no phase: weak", {"time_s": 3.0}),
    ],
)
def test_an_event_is_one_line(event: LockEvent, text: str, value: dict[str, object]) -> None:
    """One line, time first, in text as in JSON."""
    assert event_text(event).endswith(text)
    line = event_json(event)
    assert "\n" not in line
    assert value.items() <= json.loads(line).items()
