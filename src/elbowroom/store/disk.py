"""What a store asks of the disk it lives on, network disks included: no locks, no clock but the disk's own.

Everything the store changes in its folder goes through a :class:`Disk`.  Only two steps must be atomic, and every
disk that more than one machine can mount makes them so: giving a file a name that must not exist yet, and putting a
file in another's place.
"""

from __future__ import annotations

import contextlib
import errno
import io
import os
import secrets
import shutil
import time
from collections.abc import Callable, Iterator
from pathlib import Path

from elbowroom.base.errors import StoreError
from elbowroom.store.processes import tag_in, this_process

TEMPORARY = ".writing-"
STALE_AFTER_SECONDS = 3600.0
"""A temporary file that has not changed for so long belongs to no living process: a write takes seconds."""

_PIECE = 1 << 20
_PASSING = (errno.EAGAIN, errno.EBUSY, errno.EINTR, errno.ESTALE, errno.ETIMEDOUT)
"""Errors of network disks that may be gone at the next attempt."""
_PAUSES_SECONDS = (0.02, 0.1, 0.5, 1.0)
_NO_LINKS = (errno.EPERM, errno.EOPNOTSUPP, errno.ENOTSUP, errno.ENOSYS, errno.EMLINK)


class Disk:
    """The folder of a store, as a disk.

    Parameters
    ----------
    folder : Path
        Where; it need not exist yet.
    """

    def __init__(self, folder: Path) -> None:
        self.folder = folder

    def create_folder(self) -> None:
        """Make the folder, if need be, so that it survives a power failure.

        Raises
        ------
        StoreError
            If that is refused.
        """
        try:
            missing = [path for path in (self.folder, *self.folder.parents) if not path.exists()]
            self.folder.mkdir(parents=True, exist_ok=True)
            for path in missing:
                flush_folder(path.parent)
        except OSError as cause:
            raise explained(cause, self.folder, "the folder cannot be created") from cause

    @contextlib.contextmanager
    def temporary(self, label: str) -> Iterator[tuple[io.FileIO, Path]]:
        """Create a file of a name nobody else has; whatever happens, that name is gone in the end."""
        path = self.folder / f"{TEMPORARY}{label}-{this_process()}-{secrets.token_hex(8)}"
        try:
            with open(path, "x+b", buffering=0) as file:
                yield file, path
        finally:
            with contextlib.suppress(OSError):
                path.unlink()

    def time(self) -> float:
        """Return the time by the clock of the disk, which may be another machine's [s since the epoch]."""
        try:
            with self.temporary("clock") as (file, _):
                return os.fstat(file.fileno()).st_mtime
        except OSError as cause:
            if cause.errno not in (errno.ENOSPC, errno.EDQUOT):
                raise
            return time.time()  # what is stale may be what fills the disk

    def replace(self, source: Path, target: Path) -> None:
        """Put a file in the place of another, or of none; passing troubles of network disks are sat out.

        Raises
        ------
        OSError
            If that fails for good; the target is then what it was.
        """
        made = os.stat(source)
        for pause in (*_PAUSES_SECONDS, None):
            try:
                self._rename(source, target)
                return
            except OSError as cause:
                # an answer that was lost makes the disk repeat what it has done: then the file is where it should be
                if same_file(target, (made.st_dev, made.st_ino)) and not os.path.lexists(source):
                    return
                if pause is None or cause.errno not in _PASSING:
                    raise
                time.sleep(pause)

    def create(self, name: str, content: bytes) -> bool:
        """Make a small file that must not exist yet, complete from the first moment, and say whether it did not.

        By a link to a temporary file, or on disks without links by the exclusive creation of the file itself: then others
        may for a moment find it empty.

        Raises
        ------
        OSError
            If it cannot be written.
        """
        path = self.folder / name
        with self.temporary("new") as (file, temporary):
            write_all(file, content)
            os.fsync(file.fileno())
            try:
                self._link(temporary, path)
                return True
            except FileExistsError:
                # the answer to a link that was made may have been lost, and the repetition refused
                return os.fstat(file.fileno()).st_nlink == 2
            except OSError as cause:
                if cause.errno not in _NO_LINKS:
                    raise
        try:
            with open(path, "xb", buffering=0) as file:
                try:
                    write_all(file, content)
                    os.fsync(file.fileno())
                except OSError:
                    with contextlib.suppress(OSError):
                        path.unlink()
                    raise
        except FileExistsError:
            return False
        return True

    def take(self, path: Path, expected: bytes, n_bytes: int) -> bool:
        """Remove a small file if it begins as expected, and say whether it is gone; a file that differs stays.

        Two processes may want to remove the same file while a third puts a new one there: so it is moved to a name of its
        own first, looked at, and given back if it is not the one.

        Parameters
        ----------
        path : Path
            The file.
        expected : bytes
            What it must begin with.
        n_bytes : int
            How much of it is compared.

        Raises
        ------
        OSError
            If it cannot be moved.
        """
        aside = self.folder / f"{TEMPORARY}taken-{this_process()}-{secrets.token_hex(8)}"
        try:
            self._rename(path, aside)
        except FileNotFoundError:
            return True
        if self.read_small(aside)[:n_bytes] == expected[:n_bytes]:
            with contextlib.suppress(OSError):
                os.rmdir(aside) if aside.is_dir() else os.unlink(aside)
            return True
        try:
            self._link(aside, path)
        except FileExistsError:
            pass
        except OSError:
            if not os.path.lexists(path):
                self._rename(aside, path)
        with contextlib.suppress(OSError):
            os.unlink(aside)
        return False

    def read_small(self, path: Path, limit: int = 4096) -> bytes:
        """Return the first bytes of a file; none of a damaged one, nor of what is no ordinary file.

        Raises
        ------
        OSError
            If there is no such file, or the system refuses.
        """
        try:
            # a pipe under the name must not block whoever looks at it
            descriptor = os.open(path, os.O_RDONLY | getattr(os, "O_NONBLOCK", 0) | getattr(os, "O_NOFOLLOW", 0))
            try:
                return os.read(descriptor, limit)
            finally:
                os.close(descriptor)
        except (IsADirectoryError, BlockingIOError):
            return b""
        except OSError as cause:
            if is_damage(cause) or cause.errno in (errno.ENXIO, errno.ESTALE):
                return b""
            raise

    def remove_stale(self, older_than_seconds: float) -> list[Path]:
        """Remove temporary files of processes that have ended, as far as that can be known; return which.

        Those of this machine are known by their process; those of others by the time since their last change, by the clock
        of the disk.  One from the future was left before that clock was set back.

        Raises
        ------
        OSError
            If a file cannot be removed.
        """
        now = self.time()
        removed = []
        for path in sorted(self.folder.glob(f"{TEMPORARY}*")):
            with contextlib.suppress(FileNotFoundError):
                tag = tag_in(path.name)
                if path.is_dir():
                    continue  # nothing of ours
                if (tag is not None and tag.is_gone()) or abs(now - path.stat().st_mtime) > older_than_seconds:
                    path.unlink()
                    removed.append(path)
        return removed

    def _link(self, source: Path, target: Path) -> None:
        os.link(source, target)

    def _rename(self, source: Path, target: Path) -> None:
        os.replace(source, target)


def copy_bytes(source: io.FileIO, target: io.FileIO, n_bytes: int, note: Callable[[bytes], object] | None = None) -> None:
    """Copy some bytes from where one open file stands to where another stands, telling each piece.

    Raises
    ------
    OSError
        If the source ends too soon, or the system refuses to read or write.
    """
    while n_bytes:
        piece = source.read(min(n_bytes, _PIECE))
        if not piece:
            raise OSError(errno.EIO, "the file ended too soon")
        if note is not None:
            note(piece)
        write_all(target, piece)
        n_bytes -= len(piece)


def write_all(file: io.FileIO, content: bytes) -> None:
    """Write all bytes to an unbuffered file, which may take fewer at a time.

    Raises
    ------
    OSError
        If the system refuses.
    """
    rest = memoryview(content)
    while len(rest):
        rest = rest[file.write(rest) :]


def same_file(path: Path, identity: tuple[int, int]) -> bool:
    """Return whether a name is of the file with this device and inode."""
    try:
        found = os.lstat(path)
    except OSError:
        return False
    return (found.st_dev, found.st_ino) == identity


def is_damage(error: OSError) -> bool:
    """Return whether an error of the operating system is about this one file, not about the machine."""
    return error.errno in (errno.EIO, errno.ELOOP)


def flush_folder(folder: Path) -> None:
    """Make a rename, creation or removal in a folder survive a power failure, where the system offers it."""
    if not hasattr(os, "O_DIRECTORY"):
        return
    descriptor = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
    try:
        os.fsync(descriptor)
    except OSError as cause:
        if cause.errno not in (errno.EINVAL, errno.ENOTSUP):  # some file systems know no such thing
            raise
    finally:
        os.close(descriptor)


def explained(error: OSError, path: Path, what: str) -> StoreError:
    """Return the error of the operating system as a message a user can act on."""
    if isinstance(error, StoreError):
        return error
    existing = next((p for p in (path, *path.parents) if os.path.exists(p)), Path("."))
    if error.errno in (errno.ENOSPC, errno.EDQUOT):
        free = shutil.disk_usage(existing).free
        why = (
            f"no space left on the device or in the quota ({free / 1e6:.1f} MB free on the device); "
            "free some space or choose another folder. Units stored before are untouched"
        )
    elif error.errno in (errno.ENOTDIR, errno.EEXIST) and not existing.is_dir():
        why = f"{existing} is a file; expected a folder"
    elif error.errno == errno.EROFS:
        why = "the disk is mounted read-only; choose another folder"
    elif error.errno in (errno.EACCES, errno.EPERM):
        why = "permission denied; choose another folder or have its permissions changed"
    else:
        why = error.strerror or str(error)
    return StoreError(f"{what}: {why}", path=path)
