"""Which process made a file, and whether it still runs: asked of the system, never of a clock."""

from __future__ import annotations

import hashlib
import os
import re
import socket
import uuid
from dataclasses import dataclass
from functools import cache
from pathlib import Path

_TAG = re.compile(r"([0-9a-f]{12})-([0-9]+)-([0-9]+)")

UNKNOWN_START = 0
"""Start of a process that exists and about which the system says no more."""


@cache
def this_machine() -> str:
    """Return 12 hexadecimal digits for this machine since it was started, and this set of process numbers.

    Two containers that share a kernel have process numbers of their own, so they count as two machines.
    """
    parts = [socket.gethostname()]
    try:
        parts.append(Path("/proc/sys/kernel/random/boot_id").read_text().strip())
        parts.append(os.readlink("/proc/self/ns/pid"))
    except OSError:  # not Linux
        parts.append(f"{uuid.getnode():x}")
    return hashlib.sha256("\n".join(parts).encode()).hexdigest()[:12]


def start_of(pid: int) -> int | None:
    """Return a number that tells a running process from later ones of its number; None if it does not run.

    Ticks since the machine was started where the system counts those (Linux), which no setting of the clock changes.  A
    process that has ended and is only waited for by its parent does not run.
    """
    try:
        fields = Path(f"/proc/{pid}/stat").read_bytes().rpartition(b")")[2].split()
        return None if fields[0] in (b"Z", b"X") else int(fields[19])
    except (OSError, IndexError, ValueError):
        pass
    try:
        os.kill(pid, 0)
    except (ProcessLookupError, OverflowError):
        return None
    except PermissionError:
        return UNKNOWN_START  # somebody else's, and hidden
    if Path("/proc/self/stat").exists():
        return UNKNOWN_START
    import psutil

    try:
        process = psutil.Process(pid)
        if process.status() == psutil.STATUS_ZOMBIE:
            return None
        return int(1000.0 * process.create_time())
    except psutil.NoSuchProcess:
        return None
    except psutil.AccessDenied:
        return UNKNOWN_START


@dataclass(frozen=True)
class ProcessTag:
    """A process, named so that nothing else is ever taken for it.

    Parameters
    ----------
    machine : str
        See :func:`this_machine`.
    pid : int
        Its number there.
    start : int
        See :func:`start_of`.
    """

    machine: str
    pid: int
    start: int

    def __str__(self) -> str:
        return f"{self.machine}-{self.pid}-{self.start}"

    def is_gone(self) -> bool:
        """Return whether the process has certainly ended; of other machines' processes that cannot be known."""
        if self.machine != this_machine():
            return False
        found = start_of(self.pid)
        return found is None or (UNKNOWN_START not in (found, self.start) and found != self.start)


def this_process() -> ProcessTag:
    """Return the tag of the process that asks."""
    pid = os.getpid()
    return ProcessTag(this_machine(), pid, start_of(pid) or UNKNOWN_START)


def tag_in(text: str) -> ProcessTag | None:
    """Return the tag that stands in a text, such as a file name, or None."""
    match = _TAG.search(text)
    return None if match is None else ProcessTag(match[1], int(match[2]), int(match[3]))
