"""Claims: a process says that it works on a unit, so that others do something else meanwhile.

A claim is a small text file ``<key>.claim`` beside the units.  It is made by giving a complete file a name that must not
exist, so that of two processes one gets it; its owner changes a number in it every few seconds.  Others judge it without
any clock that two machines would have to share:

- a claim of a process of this machine that does not run any more (process number and start) is void at once;
- any other is void once it has not changed for a while, *as watched by the one who judges*, on its own monotonic clock.
  What file times say, and whether a clock is set back, does not matter.

Claims save work and protect nothing: units are written in one step whether claimed or not.  If ever two processes hold
one claim (a disk that answers wrongly, a process that was stopped for minutes and goes on), both solve the same unit, and
the store keeps one of two equal results.
"""

from __future__ import annotations

import contextlib
import json
import os
import re
import secrets
import threading
import time
from collections.abc import Callable
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from types import TracebackType

from elbowroom.store.disk import Disk
from elbowroom.store.processes import ProcessTag, this_process

SUFFIX = ".claim"
SILENCE_SECONDS = 40.0
"""A claim that has not changed for so long is void; its owner changes it ten times as often."""

_COUNT_DIGITS = 12
_TEXT = re.compile(
    rb'elbowroom-claim 1\nkey ([0-9a-f]{64})\nhost ("[^\n]*")\nprocess ([0-9a-f]{12})-([0-9]+)-([0-9]+)\nsince ([^\n]+)\n'
    rb"token ([0-9a-f]{32})\nrenewed ([0-9]{12})\n\Z"
)


@dataclass(frozen=True)
class Holder:
    """Who says to be working on a unit.

    Attributes
    ----------
    host : str
        Name of the machine; empty where the claim cannot be read.
    pid : int
        Number of the process there; 0 where the claim cannot be read.
    since_utc : str
        When it was claimed, by the clock of that machine; for people only.
    state : str
        ``"working"``, or ``"ended"`` (the process does not run any more) or ``"silent"``: then the claim is void.
    """

    host: str
    pid: int
    since_utc: str
    state: str

    def __str__(self) -> str:
        if not self.host:
            return f"a claim that cannot be read ({self.state})"
        return f"process {self.pid} on {self.host} since {self.since_utc} ({self.state})"


class Claim:
    """A unit that this process works on, until :meth:`release` or the end of the ``with`` block.

    Made by :meth:`Claims.claim` only.  A child process that inherits a claim by a fork does not hold it.
    """

    def __init__(self, key: str, release: Callable[[], None], held: Callable[[], bool]) -> None:
        self.key = key
        self._release, self._held = release, held
        self._owner = os.getpid()
        self._released = False

    @property
    def held(self) -> bool:
        """Whether the unit is still this process's, as far as is known."""
        return not self._released and os.getpid() == self._owner and self._held()

    def release(self) -> None:
        """Let others have the unit; harmless when done twice."""
        if not self._released and os.getpid() == self._owner:
            self._released = True
            self._release()

    def __enter__(self) -> Claim:
        """Do nothing: the claim holds already."""
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None) -> None:
        """Release it."""
        self.release()


class Claims:
    """The claims on the units in one folder.

    Parameters
    ----------
    disk : Disk
        The folder.
    silence_seconds : float, optional
        How long a claim must not change to be void [s]; the same for all processes that share the folder.
    """

    def __init__(self, disk: Disk, silence_seconds: float = SILENCE_SECONDS) -> None:
        self._disk = disk
        self._silence_seconds = silence_seconds
        self._watched: dict[str, tuple[bytes, float]] = {}

    def claim(self, key: str) -> Claim | None:
        """Claim a unit; None if somebody else is working on it.

        Raises
        ------
        OSError
            If the claim cannot be written.
        """
        for _ in range(3):
            token = secrets.token_hex(16)
            made = _content(key, token)
            if self._disk.create(key + SUFFIX, made):
                self._watched.pop(key, None)
                renewal = _Renewal(self._disk, key, made, self._silence_seconds / 10.0)
                return Claim(key, renewal.stop, renewal.holds)
            content = self._read(key)
            if content is None:
                continue  # released just now
            if self._judged(key, content).state == "working":
                return None
            # a claim whose number has moved since it was judged is not void, so all of it must be the same
            with contextlib.suppress(OSError):
                self._disk.take(self._path(key), content, len(content) + 1)
        return None

    def holder(self, key: str) -> Holder | None:
        """Return who claims a unit, rightly or no longer so; None if nobody does.

        That a claim is silent is seen by looking again: the first look at it begins the time.

        Raises
        ------
        OSError
            If that cannot be read.
        """
        content = self._read(key)
        if content is None:
            self._watched.pop(key, None)
            return None
        return self._judged(key, content)

    def keys(self) -> list[str]:
        """Return the keys of all units that are claimed, rightly or no longer so, sorted.

        Raises
        ------
        OSError
            If the folder cannot be read.
        """
        try:
            names = os.listdir(self._disk.folder)
        except FileNotFoundError:
            return []
        keys = (name.removesuffix(SUFFIX) for name in names if name.endswith(SUFFIX))
        return sorted(key for key in keys if re.fullmatch(r"[0-9a-f]{64}", key))

    def discard(self, key: str) -> bool:
        """Remove a claim that is void and say whether there was one; others stay.

        Raises
        ------
        OSError
            If it cannot be removed.
        """
        content = self._read(key)
        if content is None or self._judged(key, content).state == "working":
            return False
        return self._disk.take(self._path(key), content, len(content) + 1)

    def _path(self, key: str) -> Path:
        return self._disk.folder / (key + SUFFIX)

    def _read(self, key: str) -> bytes | None:
        try:
            return self._disk.read_small(self._path(key))
        except FileNotFoundError:
            return None

    def _judged(self, key: str, content: bytes) -> Holder:
        now = time.monotonic()
        before, since = self._watched.get(key, (None, now))
        if before != content:
            since = now
        self._watched[key] = (content, since)
        silent = now - since >= self._silence_seconds
        match = _TEXT.match(content)
        if match is None:
            # half written on a disk without links, or damaged: its owner, if there is one, changes it soon
            return Holder("", 0, "", "silent" if silent else "working")
        tag = ProcessTag(match[3].decode(), int(match[4]), int(match[5]))
        state = "ended" if tag.is_gone() else "silent" if silent else "working"
        try:
            host = str(json.loads(match[2]))
        except ValueError:
            host = match[2].decode("latin-1")
        return Holder(host, tag.pid, match[6].decode("latin-1"), state)


class _Renewal:
    """A thread that changes the number in a claim again and again, and gives the claim up in the end."""

    def __init__(self, disk: Disk, key: str, content: bytes, every_seconds: float) -> None:
        self._disk, self._path = disk, disk.folder / (key + SUFFIX)
        self._name, self._content = key + SUFFIX, content
        # everything but the number: what makes the claim this one
        self._fixed = len(content) - _COUNT_DIGITS - 1
        self._every_seconds = every_seconds
        self._count = 0
        self._lost = False
        self._ended = threading.Event()
        self._thread = threading.Thread(target=self._run, name=f"claim {key[:12]}", daemon=True)
        self._thread.start()

    def holds(self) -> bool:
        return not self._lost

    def stop(self) -> None:
        self._ended.set()
        self._thread.join()
        if self._lost:
            return
        with contextlib.suppress(OSError):  # it is void as soon as this process ends or has been silent
            self._disk.take(self._path, self._content, self._fixed)

    def _run(self) -> None:
        while not self._ended.wait(self._every_seconds) and not self._lost:
            # a disk that is away for a moment may come back; meanwhile others see silence
            with contextlib.suppress(OSError):
                self._renew()

    def _renew(self) -> None:
        self._count += 1
        number = b"%0*d\n" % (_COUNT_DIGITS, self._count)
        try:
            with open(self._path, "r+b", buffering=0) as file:
                if file.read(self._fixed) != self._content[: self._fixed]:
                    self._lost = True
                    return
                # in place: caches of network disks notice a change of a file sooner than another file of its name
                file.seek(self._fixed)
                file.write(number)
                os.fsync(file.fileno())
        except FileNotFoundError:
            # removed by hand, or by somebody who was killed while looking at it
            self._lost = not self._disk.create(self._name, self._content[: self._fixed] + number)


def _content(key: str, token: str) -> bytes:
    import socket

    return (
        f"elbowroom-claim 1\nkey {key}\nhost {json.dumps(socket.gethostname())}\nprocess {this_process()}\n"
        f"since {datetime.now(UTC).isoformat(timespec='seconds')}\ntoken {token}\nrenewed {0:0{_COUNT_DIGITS}d}\n"
    ).encode("ascii")
