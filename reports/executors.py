"""Run one function over many small tasks: here, on a pool of processes, or on a cluster.

Every executor takes plain dictionaries (paths and settings, never samples), hands each
result on as it arrives, and costs one row, not the run, when a task kills its process.
"""

from __future__ import annotations

import os
from collections.abc import Iterator, Sequence
from concurrent.futures import FIRST_COMPLETED, Future, ProcessPoolExecutor, wait
from concurrent.futures.process import BrokenProcessPool
from multiprocessing import get_context
from typing import Protocol

from reports.cluster import run_on_cluster
from reports.tasks import Outcome, Task, Work

SMALL_RUN = 3  # below this many tasks, starting workers (imports, 1-2 s each) cannot pay
# Captures a task: their estimates share the cost of the arithmetic's calls, and a run that
# is killed loses at most this many captures a worker.
MOST_TOGETHER = 8
_TASKS_WANTED = 4  # a run of few captures is split so that every core has something to do
_WAITING_PER_WORKER = 4  # keeps workers busy while a run of 10,000 holds few futures
_THREAD_VARIABLES = ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS")


class Executor(Protocol):
    """Runs a function over tasks and yields (index, outcome) in order of completion.

    An outcome of None says that the task killed its process twice.
    """

    def __call__(
        self, work: Work, tasks: Sequence[Task]
    ) -> Iterator[tuple[int, Outcome | None]]: ...


def batch_size(captures: int) -> int:
    """Return how many captures one task measures.

    Parameters
    ----------
    captures : int, how many there are to measure
    """
    return max(1, min(MOST_TOGETHER, captures // _TASKS_WANTED))


def choose_executor(tasks: int, *, workers: int | None, cluster: str | None) -> Executor:
    """Return the executor for a number of tasks.

    Parameters
    ----------
    tasks : int, how many tasks there are to do
    workers : int or None, processes wanted; None takes one per core, none for a small run
    cluster : str or None, address of a scheduler; wins over ``workers``
    """
    if cluster is not None:
        return ClusterExecutor(address=cluster)
    wanted = workers if workers is not None else (1 if tasks < SMALL_RUN else os.cpu_count() or 1)
    return serial if min(wanted, tasks) <= 1 else PoolExecutor(workers=min(wanted, tasks))


def serial(work: Work, tasks: Sequence[Task]) -> Iterator[tuple[int, Outcome | None]]:
    """Run the tasks one after another in this process."""
    for index, task in enumerate(tasks):
        yield index, work(task)


class PoolExecutor:
    """A pool of spawned processes, one thread each, rebuilt when a process dies."""

    def __init__(self, *, workers: int) -> None:
        self.workers = workers

    def __call__(self, work: Work, tasks: Sequence[Task]) -> Iterator[tuple[int, Outcome | None]]:
        """Yield (index, outcome) as the tasks finish; see ``Executor``."""
        done: set[int] = set()
        try:
            for index, outcome in self._batch(work, tasks, range(len(tasks)), self.workers):
                done.add(index)
                yield index, outcome
        except BrokenProcessPool:
            # Nobody can say which task killed the pool: run what is left one at a time, so
            # that the one that does it again is found and only it is lost.
            left = [index for index in range(len(tasks)) if index not in done]
            yield from self._one_by_one(work, tasks, left)

    def _batch(
        self, work: Work, tasks: Sequence[Task], indices: Sequence[int], workers: int
    ) -> Iterator[tuple[int, Outcome]]:
        """Yield outcomes from one pool that is fed a few tasks ahead."""
        waiting: dict[Future[Outcome], int] = {}
        queue = iter(indices)
        pool = spawn_pool(workers)
        try:
            for index in queue:
                waiting[pool.submit(work, tasks[index])] = index
                if len(waiting) >= workers * _WAITING_PER_WORKER:
                    yield from _finished(waiting)
            while waiting:
                yield from _finished(waiting)
        finally:
            pool.shutdown(wait=False, cancel_futures=True)

    def _one_by_one(
        self, work: Work, tasks: Sequence[Task], indices: Sequence[int]
    ) -> Iterator[tuple[int, Outcome | None]]:
        remaining = list(indices)
        while remaining:
            try:
                for index, outcome in self._batch(work, tasks, list(remaining), 1):
                    remaining.remove(index)
                    yield index, outcome
            except BrokenProcessPool:
                # One worker takes the tasks in order, so the first one left is the killer.
                yield remaining.pop(0), None


class ClusterExecutor:
    """Tasks on a dask.distributed scheduler; the workers need this package installed."""

    def __init__(self, *, address: str) -> None:
        self.address = address

    def __call__(self, work: Work, tasks: Sequence[Task]) -> Iterator[tuple[int, Outcome | None]]:
        """Yield (index, outcome) as the tasks finish; see ``Executor``.

        Raises
        ------
        ClusterError
            If the extra is not installed or no scheduler answers at the address.
        """
        return run_on_cluster(self.address, work, tasks)


def _finished(waiting: dict[Future[Outcome], int]) -> Iterator[tuple[int, Outcome]]:
    """Wait for at least one future, take the finished ones out and yield their outcomes."""
    done, _ = wait(waiting, return_when=FIRST_COMPLETED)
    for future in sorted(done, key=lambda item: waiting[item]):
        index = waiting.pop(future)
        yield index, future.result()


def spawn_pool(workers: int) -> ProcessPoolExecutor:
    """Return a pool whose processes start fresh with one arithmetic thread each.

    Two workers with two threads each on two cores were measured 2-4 times slower than one
    thread each; the variables are read when numpy is first imported in the worker.
    """
    for name in _THREAD_VARIABLES:
        os.environ[name] = "1"
    return ProcessPoolExecutor(max_workers=workers, mp_context=get_context("spawn"))
