"""Work for items of tests: functions of a module, as workers find them by name."""

import os
import signal
import time
from pathlib import Path

from elbowroom.base.errors import SolveError
from elbowroom.job.engine.items import UnitFailure, UnitReport, WorkItem
from elbowroom.job.plan import Prediction
from elbowroom.system.solving import SolveStatistics

STATISTICS = SolveStatistics("direct", "mixed", 1, 1, 0.0)


def item(number, work, payload=None, memory=1, frequencies=(1e8,)):
    keys = tuple(f"{number}-{f}" for f in frequencies)
    return WorkItem(
        number, f"item {number}", tuple(frequencies), keys, Path("/nowhere"), work, payload, Prediction(memory, 1, 1.0)
    )


def good(item: WorkItem, tell=None):
    return [UnitReport(f, k, "solved", STATISTICS) for f, k in zip(item.frequencies_hz, item.keys, strict=True)]


def note(folder, text):
    with open(Path(folder) / "begun", "a") as file:
        file.write(f"{text}\n")


def recorded(item: WorkItem, tell=None):
    """Say which process began which item."""
    note(item.payload, f"{item.number} {os.getpid()}")
    return good(item)


def refused(item: WorkItem, tell=None):
    msg = f"item {item.number} cannot be solved"
    raise SolveError(msg)


def broken(item: WorkItem, tell=None):
    raise KeyError("nobody foresaw this")


def exhausted(item: WorkItem, tell=None):
    raise MemoryError


def killed(item: WorkItem, tell=None):
    note(item.payload, f"{item.number} {os.getpid()}")
    os.kill(os.getpid(), signal.SIGKILL)


def killed_once(item: WorkItem, tell=None):
    note(item.payload, f"{item.number} {os.getpid()}")
    mark = Path(item.payload) / f"mark {item.number}"
    if not mark.exists():
        mark.touch()
        os.kill(os.getpid(), signal.SIGKILL)
    return good(item)


def second_fails(item: WorkItem, tell=None):
    first, *rest = good(item)
    return [first, *(UnitFailure(r.frequency_hz, r.key, "no", 5) for r in rest)]


def lasting(item: WorkItem, tell=None):
    note(item.payload, f"{item.number} {os.getpid()}")
    time.sleep(60.0)
    return good(item)
