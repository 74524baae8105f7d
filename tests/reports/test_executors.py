"""Executors: here, on a pool; a task that kills its process costs one row."""

from __future__ import annotations

import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

from reports.executors import PoolExecutor, choose_executor, serial


@pytest.fixture
def double(monkeypatch: pytest.MonkeyPatch) -> Iterator[object]:
    """The work function, importable by name in this process and in spawned ones."""
    here = str(Path(__file__).parent)
    monkeypatch.syspath_prepend(here)
    monkeypatch.setenv("PYTHONPATH", here)
    import executor_work

    yield executor_work.double
    sys.modules.pop("executor_work", None)


def test_serial_and_pool_give_the_same_outcomes(double) -> None:
    """The number of workers must not show in a result."""
    tasks = [{"value": value} for value in range(9)]
    alone = dict(serial(double, tasks))
    shared = dict(PoolExecutor(workers=2)(double, tasks))
    assert {k: v["value"] for k, v in alone.items()} == {k: v["value"] for k, v in shared.items()}
    assert all(outcome["threads"] == "1" for outcome in shared.values())


def test_a_task_that_kills_its_process_costs_one_row(double) -> None:
    """One damaged file must not cost a campaign of hundreds."""
    tasks = [{"value": value, "die": value == 3} for value in range(6)]
    outcomes = dict(PoolExecutor(workers=2)(double, tasks))
    assert outcomes[3] is None
    assert sorted(outcomes) == list(range(6))
    assert all(outcomes[k]["value"] == 2 * k for k in range(6) if k != 3)


def test_small_runs_stay_in_this_process() -> None:
    """Starting workers costs seconds; three captures do not."""
    assert choose_executor(2, workers=None, cluster=None) is serial
    assert isinstance(choose_executor(100, workers=2, cluster=None), PoolExecutor)
    assert choose_executor(100, workers=1, cluster=None) is serial
