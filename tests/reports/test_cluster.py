"""A sweep on a real scheduler with two worker processes on this machine, one of them killed."""

from __future__ import annotations

import os
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from types import ModuleType

import pytest

from reports.executors import ClusterExecutor
from reports.outputs import OUTPUT_FILES
from reports.runs import RunOptions, run_sweep
from rig.errors import LockspanError

DATE = "2026-12-01"
ENVIRONMENT = {**os.environ, "OPENBLAS_NUM_THREADS": "1", "PYTHONWARNINGS": "ignore"}


def free_port() -> int:
    """A port of this machine that nobody listens on."""
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


def started(*words: str) -> subprocess.Popen[bytes]:
    """A process of the cluster, silent."""
    return subprocess.Popen(
        [sys.executable, "-m", *words],
        env=ENVIRONMENT,
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
        start_new_session=True,
    )


@pytest.fixture
def cluster() -> Iterator[tuple[str, list[subprocess.Popen[bytes]]]]:
    """The address of a scheduler, and its two workers."""
    pytest.importorskip("distributed", reason="needs the extra [cluster]")
    port = free_port()
    address = f"tcp://127.0.0.1:{port}"
    host = ["--host", "127.0.0.1", "--no-dashboard"]
    processes = [
        started("distributed.cli.dask_scheduler", *host, "--port", str(port)),
        *(
            started("distributed.cli.dask_worker", address, "--nthreads", "1", *host, "--no-nanny")
            for _ in range(2)
        ),
    ]
    yield address, processes[1:]
    for process in processes:
        if process.poll() is None:
            os.killpg(process.pid, signal.SIGKILL)
        process.wait()


@pytest.mark.filterwarnings("ignore")
def test_a_cluster_that_loses_a_worker_gives_the_same_bytes(
    cluster: tuple[str, list[subprocess.Popen[bytes]]], campaign: Path, tmp_path: Path
) -> None:
    """A laboratory's machines are switched off at night; the numbers must not show it."""
    address, workers = cluster
    killed: list[int] = []

    def kill_one(done: int, total: int, text: str) -> None:
        if done and not killed:
            os.killpg(workers[0].pid, signal.SIGKILL)
            killed.append(workers[0].pid)

    options = RunOptions(date_text=DATE, cluster=address)
    run_sweep(campaign, tmp_path / "cluster", options, kill_one)
    run_sweep(campaign, tmp_path / "alone", RunOptions(date_text=DATE, workers=1), lambda *_: None)
    assert killed
    for name in OUTPUT_FILES:
        assert (tmp_path / "cluster" / name).read_bytes() == (
            tmp_path / "alone" / name
        ).read_bytes()


@pytest.mark.filterwarnings("ignore")
def test_a_scheduler_that_does_not_answer_is_one_line(monkeypatch: pytest.MonkeyPatch) -> None:
    """A wrong address must not hang or end in a traceback."""
    pytest.importorskip("distributed", reason="needs the extra [cluster]")
    monkeypatch.setattr("reports.cluster.CONNECT_S", 1)
    run = ClusterExecutor(address=f"tcp://127.0.0.1:{free_port()}")
    with pytest.raises(LockspanError, match="no scheduler answers"):
        list(run(len, [{}]))


@pytest.mark.long
def test_kills_at_random_instants_never_lose_or_change_a_result(
    campaign_tools: ModuleType, tmp_path: Path
) -> None:
    """Thirty kills spread over a run: every stored file is whole, the end result the same."""
    sweep = campaign_tools.write_campaign(tmp_path / "campaign")
    run_sweep(sweep, tmp_path / "alone", RunOptions(date_text=DATE, workers=1), lambda *_: None)
    words = [sys.executable, "-c", "from reports.cli import main; main()", "sweep", str(sweep)]
    words += ["--out", str(tmp_path / "out"), "--date", DATE, "--workers", "2", "--quiet"]
    for attempt in range(30):
        process = subprocess.Popen(
            words, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, start_new_session=True
        )
        time.sleep(0.4 + 0.25 * (attempt % 16))
        if process.poll() is None:
            os.killpg(process.pid, signal.SIGKILL)
        process.wait()
    run_sweep(sweep, tmp_path / "out", RunOptions(date_text=DATE, workers=1), lambda *_: None)
    for name in OUTPUT_FILES:
        assert (tmp_path / "out" / name).read_bytes() == (tmp_path / "alone" / name).read_bytes()
