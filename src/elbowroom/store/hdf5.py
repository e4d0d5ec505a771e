"""A store in a folder: one HDF5 file per unit of work, written once and never opened for writing again.

::

    <folder>/<schema>-v<version>/<key>.h5               one unit
    <folder>/<schema>-v<version>/.writing-*             being written, or left by a process that was killed
    <folder>/<schema>-v<version>/set-aside/             what could not be used, each with the reason beside it

The version is in the folder's name so that two versions of the program can share a store without touching
each other's units.
"""

from __future__ import annotations

import contextlib
import errno
import io
import os
import secrets
import shutil
import stat
import time
import warnings
from collections.abc import Iterator
from datetime import UTC, datetime
from pathlib import Path

from elbowroom.base.errors import StoreError
from elbowroom.store.header import NotAUnit, read_header
from elbowroom.store.records import (
    DamageReport,
    Record,
    Reporter,
    Schema,
    StoreDamageWarning,
    checked_key,
    checked_record,
)
from elbowroom.store.unitfile import (
    OtherSchema,
    check_schema,
    check_written,
    read_unit,
    read_unit_file,
    write_unit,
)

_SUFFIX = ".h5"
_TEMPORARY = ".writing-"
_STALE_AFTER_SECONDS = 3600.0
"""A temporary file that has not changed for so long belongs to no living process: a write takes seconds."""


def warn_of_damage(report: DamageReport) -> None:
    """Deliver a report of damage as a :class:`~elbowroom.store.records.StoreDamageWarning`."""
    warnings.warn(str(report), StoreDamageWarning, stacklevel=2)


class Hdf5Store:
    """Units of work in a folder, shared freely between processes.

    Parameters
    ----------
    folder : str or Path
        Where; created by the first write.
    schema : Schema
        What every record looks like; other schemas and versions have folders of their own beside it.
    report : callable, optional
        Called with a :class:`~elbowroom.store.records.DamageReport` for every file that is set aside, for
        instance to print it.  Default: a Python warning of class ``StoreDamageWarning``.

    Notes
    -----
    All methods raise ``StoreError`` (with ``path``) where the operating system refuses: a folder that cannot
    be created, a read-only or full disk, missing permission.  Nothing already stored is lost by that.
    """

    def __init__(self, folder: str | Path, schema: Schema, *, report: Reporter = warn_of_damage) -> None:
        self._root = Path(folder)
        self._schema = schema
        self._report = report
        self._folder = self._root / f"{schema.name}-v{schema.version}"
        self._swept = False

    @property
    def schema(self) -> Schema:
        """The schema of every record in this store."""
        return self._schema

    @property
    def folder(self) -> Path:
        """The folder of this schema and version; it need not exist yet."""
        return self._folder

    def path_of(self, key: str) -> Path:
        """Return the file of a unit, present or not.

        Raises
        ------
        StoreError
            If ``key`` is not a key.
        """
        return self._folder / (checked_key(key) + _SUFFIX)

    def put(self, key: str, record: Record) -> None:
        """Store a record: write under a temporary name, flush to disk, read back, rename.

        Parameters
        ----------
        key : str
            Its content key.
        record : Record
            Arrays as declared by the schema, attributes.

        Raises
        ------
        StoreError
            If the record does not fit the schema, the disk is full or refuses, or the file does not read back
            as written.  What was stored under the key before is then still there.

        Notes
        -----
        A sound unit already there is replaced in one step; of two processes writing one key, the last to
        finish wins.  Anything else found under the name is set aside and reported, not overwritten.
        """
        path = self.path_of(key)
        record = checked_record(self._schema, record, path)
        self._create_folder()
        try:
            try:
                self._write(path, key, record)
            except FileNotFoundError:
                # a process stopped for longer than the stale limit may find its temporary file swept away
                self._create_folder()
                self._write(path, key, record)
        except NotAUnit as cause:
            msg = f"was written and {cause}; nothing was stored under this name"
            raise StoreError(msg, path=path) from cause
        except OSError as cause:
            raise _explained(cause, path, "cannot be written") from cause

    def get(self, key: str) -> Record | None:
        """Return the record under a key, after checking every byte of its file.

        Parameters
        ----------
        key : str
            Content key.

        Returns
        -------
        Record or None
            None where there is no file, or none that can be trusted: a damaged or foreign file is moved to
            the folder ``set-aside`` and reported; a sound file of another schema version is left alone.

        Raises
        ------
        StoreError
            If ``key`` is not a key, or the operating system refuses to read.
        """
        path = self.path_of(key)
        try:
            record, reason, identity = self._examine(path, key)
        except FileNotFoundError:
            return None
        except OtherSchema:
            return None
        except OSError as cause:
            raise _explained(cause, path, "cannot be read") from cause
        if reason is not None:
            self._set_aside(path, reason, identity)
        return record

    def verify(self, key: str) -> str | None:
        """Check every byte of a unit and return what is wrong with it, or None where all is well.

        Parameters
        ----------
        key : str
            Content key.

        Returns
        -------
        str or None
            The problem; ``"not in the store"`` where there is no file.  Nothing is moved.

        Raises
        ------
        StoreError
            If ``key`` is not a key, or the operating system refuses to read.
        """
        path = self.path_of(key)
        try:
            return self._examine(path, key)[1]
        except FileNotFoundError:
            return "not in the store"
        except OtherSchema as cause:
            return str(cause)
        except OSError as cause:
            raise _explained(cause, path, "cannot be read") from cause

    def __contains__(self, key: object) -> bool:
        """Return whether there is a unit under a key, by the header and length of its file alone.

        Takes a fraction of a millisecond whatever the size of the unit; damage inside is left for ``get`` to
        find.
        """
        path = self.path_of(checked_key(key))
        try:
            return self._holds_unit(path, checked_key(key))
        except OSError as cause:
            raise _explained(cause, path, "cannot be read") from cause

    def keys(self) -> list[str]:
        """Return the keys of all units, sorted; a unit counts as in ``key in store``."""
        try:
            with os.scandir(self._folder) as entries:
                names = sorted(entry.name for entry in entries if entry.name.endswith(_SUFFIX))
        except FileNotFoundError:
            return []
        except OSError as cause:
            raise _explained(cause, self._folder, "cannot be read") from cause
        found = []
        for name in names:
            with contextlib.suppress(StoreError):
                key = checked_key(name.removesuffix(_SUFFIX))
                found += [key] if key in self else []
        return found

    def remove(self, key: str) -> bool:
        """Delete the file of a unit, sound or not.

        Returns
        -------
        bool
            Whether there was one.

        Raises
        ------
        StoreError
            If ``key`` is not a key, or the operating system refuses.
        """
        path = self.path_of(key)
        try:
            path.unlink()
            _flush_folder(self._folder)
        except FileNotFoundError:
            return False
        except OSError as cause:
            raise _explained(cause, path, "cannot be removed") from cause
        return True

    def read_file(self, path: str | Path) -> Record:
        """Return the record in a file named explicitly, wherever it is.

        Parameters
        ----------
        path : str or Path
            A stored file.

        Returns
        -------
        Record
            As :meth:`get`.

        Raises
        ------
        StoreError
            If it is missing, damaged, foreign, or of another schema or version: found and expected are named.
        """
        return read_unit_file(path, self._schema)

    def check_writable(self) -> None:
        """Create the folder and write a byte in it, so that a long run does not find out at its first result.

        Raises
        ------
        StoreError
            If that is refused.
        """
        self._create_folder()
        try:
            with self._temporary("check") as (file, _):
                file.write(b"\n")
                os.fsync(file.fileno())
        except OSError as cause:
            raise _explained(cause, self._folder, "cannot be written to") from cause

    def remove_stale(self, older_than_seconds: float = _STALE_AFTER_SECONDS) -> list[Path]:
        """Remove temporary files that killed processes left behind; done by itself before the first ``put``.

        Parameters
        ----------
        older_than_seconds : float
            Time since their last change, by the clock of the disk [s].

        Returns
        -------
        list of Path
            What was removed.
        """
        self._create_folder()
        try:
            now = self._disk_time()
            removed = []
            for path in sorted(self._folder.glob(f"{_TEMPORARY}*")):
                with contextlib.suppress(FileNotFoundError):
                    if now - path.stat().st_mtime > older_than_seconds:
                        path.unlink()
                        removed.append(path)
        except OSError as cause:
            raise _explained(cause, self._folder, "cannot be cleaned of old temporary files") from cause
        return removed

    def _create_folder(self) -> None:
        try:
            missing = [path for path in (self._folder, *self._folder.parents) if not path.exists()]
            self._folder.mkdir(parents=True, exist_ok=True)
            for path in missing:
                _flush_folder(path.parent)
        except OSError as cause:
            raise _explained(cause, self._folder, "the folder cannot be created") from cause

    @contextlib.contextmanager
    def _temporary(self, label: str) -> Iterator[tuple[io.FileIO, Path]]:
        """Create a file of a name nobody else has; whatever happens, that name is gone in the end."""
        path = self._folder / f"{_TEMPORARY}{label}-{os.getpid()}-{secrets.token_hex(8)}"
        try:
            with open(path, "x+b", buffering=0) as file:
                yield file, path
        finally:
            with contextlib.suppress(OSError):
                path.unlink()

    def _disk_time(self) -> float:
        """Return the time by the clock of the disk, which may be another machine's [s since the epoch]."""
        try:
            with self._temporary("clock") as (file, _):
                return os.fstat(file.fileno()).st_mtime
        except OSError as cause:
            if cause.errno not in (errno.ENOSPC, errno.EDQUOT):
                raise
            return time.time()  # what is stale may be what fills the disk

    def _write(self, path: Path, key: str, record: Record) -> None:
        if not self._swept:
            self.remove_stale()
            self._swept = True
        with self._temporary(key[:16]) as (file, temporary):
            write_unit(file, self._schema, key, record)
            os.fsync(file.fileno())
            file.close()  # network disks may report a full disk only here
            check_written(temporary, self._schema, key, record)
            self._make_way(path, key)
            os.replace(temporary, path)
        _flush_folder(self._folder)

    def _make_way(self, path: Path, key: str) -> None:
        """Set aside whatever stands where a unit is to go, unless it is a unit of ours."""
        if os.path.lexists(path) and not self._holds_unit(path, key):
            with contextlib.suppress(FileNotFoundError):
                found = os.lstat(path)
                reason = "it was not a unit of this store and a unit was to be written under its name"
                self._set_aside(path, reason, (found.st_dev, found.st_ino))

    def _holds_unit(self, path: Path, key: str) -> bool:
        try:
            if not stat.S_ISREG(os.stat(path).st_mode):
                return False
            with open(path, "rb", buffering=0) as file:
                header = read_header(file, os.fstat(file.fileno()).st_size)
            check_schema(header, self._schema)
        except (FileNotFoundError, NotAUnit, OtherSchema):
            return False
        except OSError as cause:
            if _is_damage(cause):
                return False
            raise
        return header.key == key

    def _examine(self, path: Path, key: str) -> tuple[Record | None, str | None, tuple[int, int]]:
        """Return the record, or what is wrong, and which file that was said of (device, inode)."""
        found = os.lstat(path)
        try:
            # a pipe or a device under the name must not be opened: it could block for ever
            if not stat.S_ISREG(os.stat(path).st_mode):
                return None, "not an ordinary file", (found.st_dev, found.st_ino)
            with open(path, "rb", buffering=0) as file:
                found = found if stat.S_ISLNK(found.st_mode) else os.fstat(file.fileno())
                return read_unit(file, self._schema, key), None, (found.st_dev, found.st_ino)
        except NotAUnit as cause:
            return None, str(cause), (found.st_dev, found.st_ino)
        except OSError as cause:
            if not _is_damage(cause):
                raise
            return None, f"cannot be read: {cause.strerror}", (found.st_dev, found.st_ino)

    def _set_aside(self, path: Path, reason: str, identity: tuple[int, int]) -> None:
        """Move a file out of the way, with the reason in a text file beside it, and report it."""
        folder = self._folder / "set-aside"
        when = datetime.now(UTC).strftime("%Y%m%dT%H%M%SZ")
        target = folder / f"{path.stem}-{when}-{secrets.token_hex(4)}{path.suffix}"
        try:
            folder.mkdir(exist_ok=True)
            os.rename(path, target)
        except FileNotFoundError:
            return  # another process was faster, and has reported it
        except OSError as cause:
            self._report(DamageReport(path, f"{reason} (moving it: {cause.strerror})", None))
            return
        moved = os.lstat(target)
        if (moved.st_dev, moved.st_ino) != identity:
            # another process has just put a new unit there: that one is not what was judged, so give it back
            with contextlib.suppress(OSError):
                os.link(target, path)
            with contextlib.suppress(OSError):
                os.unlink(target) if path.exists() else os.rename(target, path)
            return
        with contextlib.suppress(OSError):  # on a full disk the report alone must do
            target.with_suffix(".txt").write_text(f"{path}\n{reason}\n", encoding="utf-8")
        self._report(DamageReport(path, reason, target))


def _is_damage(error: OSError) -> bool:
    """Return whether an error of the operating system is about this one file, not about the machine."""
    return error.errno in (errno.EIO, errno.ELOOP)


def _flush_folder(folder: Path) -> None:
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


def _explained(error: OSError, path: Path, what: str) -> StoreError:
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
