"""Workers on this machine: this process itself, or processes started afresh.

Each worker process has an executor of its own (`concurrent.futures.ProcessPoolExecutor` with one process): if it is killed,
it is known which item it took along, and the other workers go on.
"""

from __future__ import annotations

import contextlib
import multiprocessing
import os
import signal
import threading
import time
from collections.abc import Iterator
from concurrent.futures import FIRST_COMPLETED, Future, ProcessPoolExecutor, wait
from concurrent.futures.process import BrokenProcessPool
from dataclasses import dataclass
from multiprocessing import resource_tracker
from multiprocessing.process import BaseProcess
from types import FrameType

from elbowroom.job.engine.items import ItemResult, Tell, WorkItem, run_item
from elbowroom.job.engine.runner import Ended

GRACE_SECONDS = 5.0
"""Given to a worker that is asked to end, before it is killed [s]; a tile of a matrix takes a fraction of that."""


class InProcess:
    """The calling process as the only worker: stages are told as they happen, and what exhausts the memory ends everything.

    Parameters
    ----------
    tell : callable, optional
        Told about stages.
    """

    def __init__(self, tell: Tell | None = None) -> None:
        self._tell = tell
        self._item: WorkItem | None = None

    @property
    def running(self) -> int:
        """Items begun: none or one."""
        return 0 if self._item is None else 1

    def can_start(self, item: WorkItem) -> bool:
        """Return whether nothing is begun."""
        return self._item is None

    def start(self, item: WorkItem) -> None:
        """Take an item; it is done by `wait`."""
        self._item = item

    def wait(self, seconds: float) -> list[Ended]:
        """Do the item, however long that takes."""
        if self._item is None:
            return []
        item = self._item
        result = run_item(item, self._tell)
        self._item = None
        return [Ended(item, result)]

    def stop(self) -> None:
        """Forget the item."""
        self._item = None


class _Slot:
    """One worker process, started when its first item comes and again after it has ended."""

    def __init__(self) -> None:
        self.executor: ProcessPoolExecutor | None = None
        self.process: BaseProcess | None = None

    def submit(self, item: WorkItem) -> Future[ItemResult]:
        if self.executor is None:
            context = multiprocessing.get_context("spawn")
            self.executor = ProcessPoolExecutor(1, mp_context=context, initializer=_prepare_worker)
            before = {p.pid for p in multiprocessing.active_children()}
            with _without_interrupts():
                future = self.executor.submit(run_item, item)
            self.process = next((p for p in multiprocessing.active_children() if p.pid not in before), None)
            return future
        return self.executor.submit(run_item, item)

    def gone(self) -> str:
        """Return how a process ended that was not asked to, and forget it."""
        code = None
        if self.process is not None:
            self.process.join(GRACE_SECONDS)
            code = self.process.exitcode
        self.end(time.monotonic())
        if code is None or code >= 0:
            return f"its worker process ended without an answer{'' if code is None else f' (exit code {code})'}"
        name = signal.Signals(-code).name if -code in set(signal.Signals) else f"signal {-code}"
        killer = ", as the system does when memory runs out" if name == "SIGKILL" else ""
        return f"its worker process was ended by {name}{killer}"

    def ask_to_end(self) -> None:
        # The executor is not told yet: told without waiting it forgets its thread, and the end of the program meets that thread
        # half way through closing its pipes.
        if self.process is not None and self.process.is_alive():
            self.process.terminate()

    def end(self, deadline: float) -> None:
        """Wait for the process until a time on the monotonic clock, then kill it."""
        if self.process is not None:
            self.process.join(max(0.0, deadline - time.monotonic()))
            if self.process.is_alive():
                self.process.kill()
                self.process.join()
        if self.executor is not None:
            self.executor.shutdown(wait=True, cancel_futures=True)
        self.executor = self.process = None


@dataclass
class _Running:
    item: WorkItem
    slot: _Slot


class ProcessWorkers:
    """Worker processes of this machine.

    Parameters
    ----------
    count : int
        How many at most.
    memory_bytes : int
        What items that run at the same time may take together [byte], by their predictions.
    """

    def __init__(self, count: int, memory_bytes: int) -> None:
        self._count, self._memory_bytes = count, memory_bytes
        self._idle: list[_Slot] = [_Slot() for _ in range(count)]
        self._running: dict[Future[ItemResult], _Running] = {}

    @property
    def running(self) -> int:
        """Items being worked on."""
        return len(self._running)

    @property
    def process_ids(self) -> dict[int, int]:
        """Number of the item that each process works on."""
        return {r.slot.process.pid: r.item.number for r in self._running.values() if r.slot.process and r.slot.process.pid}

    def can_start(self, item: WorkItem) -> bool:
        """Return whether a worker is idle and the memory holds what runs and the item; one item may always run."""
        if not self._running:
            return True
        taken = sum(r.item.prediction.memory_bytes for r in self._running.values())
        return bool(self._idle) and taken + item.prediction.memory_bytes <= self._memory_bytes

    def start(self, item: WorkItem) -> None:
        """Give an item to an idle worker."""
        # A process that is up already before one that has to be started.
        self._idle.sort(key=lambda slot: slot.executor is None)
        slot = self._idle.pop(0)
        try:
            future = slot.submit(item)
        except BrokenProcessPool:  # it was killed while it had nothing to do
            slot.gone()
            future = slot.submit(item)
        self._running[future] = _Running(item, slot)

    def wait(self, seconds: float) -> list[Ended]:
        """Return what has ended, after waiting for something to end, but no longer than so long [s]."""
        done, _ = wait(self._running, timeout=seconds, return_when=FIRST_COMPLETED)
        ended = []
        for future in done:
            running = self._running.pop(future)
            error = future.exception()
            if error is None:
                ended.append(Ended(running.item, future.result()))
            elif isinstance(error, BrokenProcessPool):
                ended.append(Ended(running.item, None, running.slot.gone()))
            else:
                cause = f"its result could not be sent: {type(error).__name__}: {error}"
                ended.append(Ended(running.item, ItemResult(running.item.failed(cause, 1), 0.0)))
            self._idle.append(running.slot)
        return ended

    def stop(self) -> None:
        """Ask every worker to end, give each a few seconds, kill what is left."""
        slots = [*self._idle, *(r.slot for r in self._running.values())]
        with _without_interrupts():
            for slot in slots:
                slot.ask_to_end()
            deadline = time.monotonic() + GRACE_SECONDS
            for slot in slots:
                slot.end(deadline)
        self._idle, self._running = [_Slot() for _ in range(self._count)], {}


@contextlib.contextmanager
def _without_interrupts() -> Iterator[None]:
    """Hold Ctrl-C and requests to end back for a moment.

    Processes started meanwhile never see Ctrl-C: their user's screen is their parent's, which ends them.
    """
    if threading.current_thread() is not threading.main_thread() or not hasattr(signal, "pthread_sigmask"):
        yield
        return
    # Started here, because starting it lets interrupts through again.
    resource_tracker.ensure_running()
    before = signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT, signal.SIGTERM})
    try:
        yield
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, before)


def _prepare_worker() -> None:
    """Make a new process ignore Ctrl-C, end when asked to, and end when its parent is gone."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    threading.Thread(target=_follow_parent, daemon=True).start()
    if hasattr(signal, "pthread_sigmask"):
        signal.pthread_sigmask(signal.SIG_UNBLOCK, {signal.SIGINT, signal.SIGTERM})
    # Last: until here there is nothing to clear away, and an exception would be told as one of the executor's.
    signal.signal(signal.SIGTERM, _end)


def _end(number: int, frame: FrameType | None) -> None:
    # Files that are half written and claims are cleared away on the way out.
    raise SystemExit(128 + number)


def _follow_parent() -> None:
    parent = multiprocessing.parent_process()
    if parent is None:
        return
    parent.join()
    os.kill(os.getpid(), signal.SIGTERM)
    time.sleep(GRACE_SECONDS)
    os._exit(1)
