"""A network disk seen from one of several machines: what others do shows late, and answers get lost.

A stand-in that wraps the real calls: every change is really made in one folder, at once and in one step, as a server does;
this machine merely looks at it through a cache, and some calls fail before or after they have worked.
"""

from __future__ import annotations

import errno
import os
import time
from pathlib import Path

import numpy as np

from elbowroom.store import Hdf5Store
from elbowroom.store.disk import Disk


def lost(number: int) -> OSError:
    return OSError(number, os.strerror(number))


class FarDisk(Disk):
    """A folder on a server; ``delay_seconds`` old at worst, with one in ``every`` calls in trouble (0: none).

    With ``looks_after_changes``, this machine sees the folder as it is whenever it has changed something there itself.
    """

    def __init__(self, folder: Path, delay_seconds: float, looks_after_changes: bool, every: int, seed: int) -> None:
        super().__init__(folder)
        self.delay_seconds, self.looks_after_changes, self.every = delay_seconds, looks_after_changes, every
        self.looked = 0.0
        self.rng = np.random.default_rng(seed)
        self.seen: dict[Path, tuple[float, bytes | None]] = {}
        self.own: set[tuple[int, int]] = set()
        self.troubles: dict[str, int] = {}

    def hides(self, path: Path) -> bool:
        """Return whether a file is too new to be seen from here."""
        found = os.stat(path)
        if (found.st_dev, found.st_ino) in self.own or found.st_ctime <= self.looked:
            return False
        return time.time() - found.st_ctime < self.delay_seconds

    def read_small(self, path, limit=4096):
        when, content = self.seen.get(path, (-1.0, None))
        if time.monotonic() - when > self.delay_seconds:
            try:
                content = super().read_small(path, limit)
            except FileNotFoundError:
                content = None
            self.seen[path] = (time.monotonic(), content)
        if content is None:
            raise lost(errno.ENOENT)
        return content

    def _in_trouble(self, kind: str) -> bool:
        if self.every and self.rng.integers(self.every) == 0:
            self.troubles[kind] = self.troubles.get(kind, 0) + 1
            return True
        return False

    def _note_own(self, source: Path, target: Path) -> None:
        # a machine sees what it has changed itself
        found = os.lstat(source)
        self.own.add((found.st_dev, found.st_ino))
        self.seen.pop(target, None)
        if self.looks_after_changes:
            self.looked = found.st_ctime
            self.seen.clear()

    def _link(self, source, target):
        if self._in_trouble("link not made"):
            raise lost(errno.EIO)
        os.link(source, target)
        self._note_own(target, target)
        if self._in_trouble("link made, answer lost"):
            raise lost(errno.EEXIST)

    def _rename(self, source, target):
        if self._in_trouble("rename not made"):
            raise lost(self.rng.choice([errno.ESTALE, errno.EBUSY, errno.ETIMEDOUT]))
        os.replace(source, target)
        self._note_own(target, target)
        self.seen.pop(source, None)
        if self._in_trouble("rename made, answer lost"):
            raise lost(errno.ENOENT)


class FarStore(Hdf5Store):
    """A store on such a disk."""

    def __init__(self, folder, schema, *, delay_seconds, looks_after_changes, every=0, seed=0, **options) -> None:
        super().__init__(folder, schema, **options)
        self._disk = FarDisk(self.folder, delay_seconds, looks_after_changes, every, seed)
        self._claims._disk = self._disk

    def _examine(self, path, key):
        if self._disk.hides(path):
            raise lost(errno.ENOENT)
        return super()._examine(path, key)

    def _make_way(self, path, key):
        if os.path.lexists(path) and not self._disk.hides(path):
            super()._make_way(path, key)

    def _holds_unit(self, path, key):
        if not os.path.lexists(path) or self._disk.hides(path):
            return False
        return super()._holds_unit(path, key)
