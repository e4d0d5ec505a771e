"""Workers of Dask distributed: a scheduler somewhere, or a small cluster on this machine for a trial.

All workers see the store under the same path, as on any shared disk.  A worker does one unit at a time, because the number
of threads is a setting of its whole process.
"""

from __future__ import annotations

import time
from pathlib import Path
from typing import TYPE_CHECKING, Any

from elbowroom.base.errors import ResourceError
from elbowroom.job.engine.items import ItemResult, WorkItem, run_item
from elbowroom.job.engine.runner import Ended

if TYPE_CHECKING:
    from distributed import Client, Future

CONNECT_SECONDS = 30.0
"""How long a scheduler may take to answer [s]."""

WORKER_SECONDS = 180.0
"""How long the first worker may take to come [s]; batch systems start processes one after another."""

QUEUED_PER_WORKER = 4
"""Items given to the scheduler for each of its workers: enough that none waits for us, few enough to be told what runs."""


def connect(address: str, *, workers: int = 1, threads: int = 1) -> Client:
    """Return a client of a scheduler, or of a cluster of this machine that ends with it.

    Parameters
    ----------
    address : str
        As ``"tcp://host:8786"``, a scheduler file (JSON), or ``"local"``.
    workers, threads : int, optional
        Of ``"local"``: its processes, and for how many threads each has room.

    Raises
    ------
    ResourceError
        If Dask distributed is not installed, or nothing answers at the address.
    """
    try:
        from distributed import Client, LocalCluster
    except ImportError as cause:
        msg = "runs on a cluster need Dask distributed: pip install 'elbowroom[cluster]'"
        raise ResourceError(msg) from cause
    import dask

    if address == "local":
        # A worker that dies takes its item along once; whether it is tried again is decided by us.
        dask.config.set({"distributed.scheduler.allowed-failures": 0})
        cluster = LocalCluster(
            n_workers=workers, threads_per_worker=1, processes=True, memory_limit=0, dashboard_address=None, silence_logs=50
        )
        return Client(cluster)
    try:
        if address.endswith(".json"):
            _wait_for(Path(address))
            return Client(scheduler_file=address, timeout=CONNECT_SECONDS)
        return Client(address, timeout=CONNECT_SECONDS)
    except (OSError, ValueError, TimeoutError) as cause:
        msg = f"no scheduler answers at {address}: {cause}"
        raise ResourceError(msg) from cause


def _wait_for(file: Path) -> None:
    """Wait a while for a scheduler's file, which batch systems may be late with; raise OSError if it does not come."""
    deadline = time.monotonic() + CONNECT_SECONDS
    while not file.is_file():
        if time.monotonic() > deadline:
            msg = f"there is no such file, nor did one come within {CONNECT_SECONDS:g} s"
            raise OSError(msg)
        time.sleep(0.2)


class DaskWorkers:
    """Workers of a Dask cluster.

    Parameters
    ----------
    client : distributed.Client
        From `connect`; closed by `stop`.

    Raises
    ------
    ResourceError
        If no worker comes, or a worker has several task slots.
    """

    def __init__(self, client: Client) -> None:
        self._client = client
        try:
            client.wait_for_workers(1, timeout=WORKER_SECONDS)
        except TimeoutError as cause:
            client.close()
            msg = f"the cluster at {client.scheduler.address if client.scheduler else '?'} has no workers"
            raise ResourceError(msg) from cause
        crowded = [name for name, worker in self._described().items() if worker["nthreads"] != 1]
        if crowded:
            self.stop()
            msg = (
                f"worker {crowded[0]} of the cluster takes several units at a time, which must not share a process; "
                "start workers with '--nthreads 1', as many as there are cores for"
            )
            raise ResourceError(msg)
        self._running: dict[Future, WorkItem] = {}

    def _described(self) -> dict[str, Any]:
        return dict(self._client.scheduler_info(n_workers=-1)["workers"])

    @property
    def workers(self) -> int:
        """Workers that are there now."""
        return len(self._described())

    @property
    def memory_bytes(self) -> int:
        """The smallest limit of a worker's memory [byte]; 0 if none has one."""
        limits = [int(w["memory_limit"]) for w in self._described().values() if w["memory_limit"]]
        return min(limits, default=0)

    @property
    def running(self) -> int:
        """Items the scheduler has."""
        return len(self._running)

    def can_start(self, item: WorkItem) -> bool:
        """Return whether the scheduler's queue is short."""
        return len(self._running) < QUEUED_PER_WORKER * max(1, self.workers)

    def start(self, item: WorkItem) -> None:
        """Give an item to the scheduler."""
        future = self._client.submit(run_item, item, pure=False, retries=0)
        self._running[future] = item

    def wait(self, seconds: float) -> list[Ended]:
        """Return what has ended, after waiting for something to end, but not much longer than so long [s]."""
        from distributed import wait
        from distributed.scheduler import KilledWorker

        if not self._running:
            return []
        try:
            wait(list(self._running), timeout=seconds, return_when="FIRST_COMPLETED")
        except TimeoutError:
            return []
        ended = []
        for future in [f for f in self._running if f.done()]:
            item = self._running.pop(future)
            error = future.exception() if future.status == "error" else None
            if future.status == "finished":
                ended.append(Ended(item, future.result()))
            elif isinstance(error, KilledWorker) or error is None:
                ended.append(Ended(item, None, "its worker on the cluster ended without an answer"))
            else:
                failures = item.failed(f"the cluster could not run it: {type(error).__name__}: {error}", 1)
                ended.append(Ended(item, ItemResult(failures, 0.0)))
        return ended

    def stop(self) -> None:
        """Cancel what waits, leave the scheduler; a cluster of our own ends."""
        running, self._running = getattr(self, "_running", {}), {}
        if running:
            self._client.cancel(list(running), force=True)
        cluster = self._client.cluster
        self._client.close()
        if cluster is not None:
            cluster.close()
