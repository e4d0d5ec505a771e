"""Items over workers: what starts when, what is tried again, and what is told.

One item that fails stops no other.  An item whose worker ended without an answer (killed by a user, or by the system because
memory ran out) is done once more when everything else is finished, alone, with the memory of all others.
"""

from __future__ import annotations

from collections import Counter, deque
from collections.abc import Callable, Generator, Iterator, Sequence
from dataclasses import dataclass
from typing import Protocol

from elbowroom.base.errors import ResourceError
from elbowroom.job.engine.items import ItemResult, WorkItem

MOST_TRIES = 2
"""Times that an item is begun whose worker ends without an answer."""

LOOK_SECONDS = 0.5
"""Between two looks at what runs [s]."""


@dataclass(frozen=True)
class Ended:
    """An item that a worker is done with: a result, or what is known about a worker that is gone."""

    item: WorkItem
    result: ItemResult | None
    crash: str = ""


class Workers(Protocol):
    """Whoever does items, a few at a time."""

    @property
    def running(self) -> int:
        """Items being worked on."""

    def can_start(self, item: WorkItem) -> bool:
        """Return whether an item may be begun now, for the number of workers and for memory."""

    def start(self, item: WorkItem) -> None:
        """Begin an item."""

    def wait(self, seconds: float) -> list[Ended]:
        """Return what has ended, after waiting for something to end, but not much longer than so long [s]."""

    def stop(self) -> None:
        """Abandon what runs and end every worker; harmless when done twice, and when nothing runs."""


@dataclass(frozen=True)
class Event:
    """Something that happened in a run.

    Attributes
    ----------
    kind : str
        ``"started"``, ``"ended"``, ``"again"`` (its worker ended without an answer, and it will be begun once more) or
        ``"tick"`` (time has gone by).
    item : WorkItem or None
        Which item.
    result : ItemResult or None
        What came out, if it ended.
    cause : str
        What is known about a worker that is gone.
    """

    kind: str
    item: WorkItem | None = None
    result: ItemResult | None = None
    cause: str = ""


def run_items(
    items: Sequence[WorkItem], workers: Workers, *, elsewhere: Callable[[WorkItem], bool] | None = None
) -> Generator[Event, None, None]:
    """Do items in the order given, as many at a time as the workers take.

    Parameters
    ----------
    items : sequence of WorkItem
        The items.
    workers : Workers
        Ended when the iterator is exhausted or closed, or an exception passes through it: nothing is left running.
    elsewhere : callable, optional
        Says whether another run works on an item now; such items are left to the end.

    Yields
    ------
    Event
        Every item that started has exactly one ``"ended"`` event.
    """
    waiting, again = deque(items), deque[WorkItem]()
    tries: Counter[int] = Counter()
    try:
        while waiting or again or workers.running:
            for item in _begin(waiting, again, workers, elsewhere):
                tries[item.number] += 1
                yield Event("started", item)
            for ended in workers.wait(LOOK_SECONDS):
                if ended.result is not None:
                    yield Event("ended", ended.item, ended.result)
                elif tries[ended.item.number] < MOST_TRIES:
                    again.append(ended.item)
                    yield Event("again", ended.item, cause=ended.crash)
                else:
                    cause = f"{ended.crash}; begun {MOST_TRIES} times"
                    failures = ended.item.failed(cause, ResourceError.exit_code)
                    yield Event("ended", ended.item, ItemResult(failures, 0.0), cause)
            yield Event("tick")
    finally:
        workers.stop()


def _begin(
    waiting: deque[WorkItem], again: deque[WorkItem], workers: Workers, elsewhere: Callable[[WorkItem], bool] | None
) -> Iterator[WorkItem]:
    """Begin what can be begun now."""
    for _ in range(len(waiting)):
        item = waiting[0]
        if not workers.can_start(item):
            return
        waiting.popleft()
        if elsewhere is not None and elsewhere(item):
            waiting.append(item)
            continue
        workers.start(item)
        yield item
    if workers.running:
        return
    # Nothing else is left: what others work on is waited for, one after another, and what lost its worker is done alone.
    for rest in (waiting, again):
        if rest and not workers.running:
            item = rest.popleft()
            workers.start(item)
            yield item
