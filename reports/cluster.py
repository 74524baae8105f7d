"""Tasks on a dask.distributed scheduler (extra ``[cluster]``)."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from reports.tasks import Outcome, Task, Work
from rig.errors import LockspanError

RETRIES = 2  # a worker that is lost gives its task back; the third loss is the task's fault
CONNECT_S = 10  # a scheduler on a laboratory network answers well within this


class ClusterError(LockspanError):
    """The cluster cannot be used: not installed, or nobody answers."""


def run_on_cluster(
    address: str, work: Work, tasks: Sequence[Task]
) -> Iterator[tuple[int, Outcome | None]]:
    """Yield (index, outcome) of each task as the cluster finishes it.

    Parameters
    ----------
    address : str, scheduler address such as "tcp://127.0.0.1:8786"
    work : function of one task; importable on the workers
    tasks : sequence of plain dictionaries

    Raises
    ------
    ClusterError
        If the extra is not installed or no scheduler answers.
    """
    try:
        from distributed import Client, as_completed
        from distributed.scheduler import KilledWorker
    except ImportError as error:
        raise ClusterError(
            "--cluster: needs the extra [cluster]; install lockspan[cluster]"
        ) from error
    try:
        client = Client(address, timeout=CONNECT_S)
    except (OSError, TimeoutError, ValueError) as error:
        raise ClusterError(f"--cluster {address}: no scheduler answers ({error})") from error
    with client:
        futures = {
            client.submit(work, dict(task), pure=False, retries=RETRIES): index
            for index, task in enumerate(tasks)
        }
        for future in as_completed(list(futures)):
            try:
                yield futures[future], future.result()
            except KilledWorker:
                yield futures[future], None
