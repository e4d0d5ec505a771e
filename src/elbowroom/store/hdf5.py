"""A store in a folder: one HDF5 file per unit of work, written once and never opened for writing again.

::

    <folder>/<schema>-v<version>/<key>.h5               one unit
    <folder>/<schema>-v<version>/<key>.claim            somebody works on this unit
    <folder>/<schema>-v<version>/.writing-*             being written, or left by a process that was killed
    <folder>/<schema>-v<version>/set-aside/             what could not be used, each with the reason beside it

The version is in the folder's name so that two versions of the program can share a store without touching
each other's units.
"""

from __future__ import annotations

import contextlib
import io
import os
import secrets
import stat
import warnings
from datetime import UTC, datetime
from pathlib import Path

from elbowroom.base.errors import StoreError
from elbowroom.store.claims import SILENCE_SECONDS, Claim, Claims, Holder
from elbowroom.store.disk import STALE_AFTER_SECONDS, Disk, copy_bytes, explained, flush_folder, is_damage
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
    check_bytes,
    check_schema,
    check_written,
    read_unit,
    read_unit_file,
    write_unit,
)

_SUFFIX = ".h5"


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
    claim_silence_seconds : float, optional
        How long a claim must not change to be void [s]; see :mod:`elbowroom.store.claims`.

    Notes
    -----
    All methods raise ``StoreError`` (with ``path``) where the operating system refuses: a folder that cannot
    be created, a read-only or full disk, missing permission.  Nothing already stored is lost by that.
    """

    def __init__(
        self,
        folder: str | Path,
        schema: Schema,
        *,
        report: Reporter = warn_of_damage,
        claim_silence_seconds: float = SILENCE_SECONDS,
    ) -> None:
        self._root = Path(folder)
        self._schema = schema
        self._report = report
        self._folder = self._root / f"{schema.name}-v{schema.version}"
        self._disk = Disk(self._folder)
        self._claims = Claims(self._disk, claim_silence_seconds)
        self._swept = False

    @property
    def schema(self) -> Schema:
        """The schema of every record in this store."""
        return self._schema

    @property
    def folder(self) -> Path:
        """The folder of this schema and version; it need not exist yet."""
        return self._folder

    def beside(self, schema: Schema) -> Hdf5Store:
        """Return the store of another schema in the same folder, which reports damage to the same place."""
        return Hdf5Store(self._root, schema, report=self._report)

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
        self._disk.create_folder()
        try:
            try:
                self._write(path, key, record)
            except FileNotFoundError:
                # a process stopped for longer than the stale limit may find its temporary file swept away
                self._disk.create_folder()
                self._write(path, key, record)
        except NotAUnit as cause:
            msg = f"was written and {cause}; nothing was stored under this name"
            raise StoreError(msg, path=path) from cause
        except OSError as cause:
            raise explained(cause, path, "cannot be written") from cause

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
            raise explained(cause, path, "cannot be read") from cause
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
            raise explained(cause, path, "cannot be read") from cause

    def __contains__(self, key: object) -> bool:
        """Return whether there is a unit under a key, by the header and length of its file alone.

        Takes a fraction of a millisecond whatever the size of the unit; damage inside is left for ``get`` to
        find.
        """
        path = self.path_of(checked_key(key))
        try:
            return self._holds_unit(path, checked_key(key))
        except OSError as cause:
            raise explained(cause, path, "cannot be read") from cause

    def keys(self) -> list[str]:
        """Return the keys of all units, sorted; a unit counts as in ``key in store``."""
        try:
            with os.scandir(self._folder) as entries:
                names = sorted(entry.name for entry in entries if entry.name.endswith(_SUFFIX))
        except FileNotFoundError:
            return []
        except OSError as cause:
            raise explained(cause, self._folder, "cannot be read") from cause
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
            flush_folder(self._folder)
        except FileNotFoundError:
            return False
        except OSError as cause:
            raise explained(cause, path, "cannot be removed") from cause
        return True

    def adopt(self, key: str, source: io.FileIO, n_bytes: int) -> bool:
        """Store a unit that is a file already, byte for byte, after checking every byte of the copy.

        Parameters
        ----------
        key : str
            Its content key.
        source : unbuffered binary file
            Open for reading, standing at the first byte of the unit.
        n_bytes : int
            Length of the unit [bytes].

        Returns
        -------
        bool
            Whether it was stored; False where a sound unit is there already.  One that is not sound is set aside.

        Raises
        ------
        StoreError
            If the unit is damaged, of another key or schema, or the disk refuses; the store is then as it was.
        """
        path = self.path_of(key)
        self._disk.create_folder()
        try:
            with self._disk.temporary(key[:16]) as (file, temporary):
                copy_bytes(source, file, n_bytes)
                os.fsync(file.fileno())
                file.close()
                with open(temporary, "rb", buffering=0) as made:
                    check_bytes(made, self._schema, key)
                if os.path.lexists(path):
                    there = os.lstat(path)
                    reason = "not an ordinary file"
                    if stat.S_ISREG(there.st_mode):
                        try:
                            with open(path, "rb", buffering=0) as found:
                                check_bytes(found, self._schema, key)
                            return False
                        except (NotAUnit, OtherSchema) as cause:
                            reason = str(cause)
                    self._set_aside(path, reason, (there.st_dev, there.st_ino))
                self._disk.replace(temporary, path)
            flush_folder(self._folder)
        except (NotAUnit, OtherSchema) as cause:
            msg = f"not added: {cause}"
            raise StoreError(msg, path=path) from cause
        except OSError as cause:
            raise explained(cause, path, "cannot be written") from cause
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
        self._disk.create_folder()
        try:
            with self._disk.temporary("check") as (file, _):
                file.write(b"\n")
                os.fsync(file.fileno())
        except OSError as cause:
            raise explained(cause, self._folder, "cannot be written to") from cause

    def remove_stale(self, older_than_seconds: float = STALE_AFTER_SECONDS) -> list[Path]:
        """Remove temporary files that killed processes left behind; done by itself before the first ``put``.

        Parameters
        ----------
        older_than_seconds : float
            Time since their last change, by the clock of the disk [s]; those of processes of this machine that have ended
            go at any age.

        Returns
        -------
        list of Path
            What was removed.
        """
        self._disk.create_folder()
        try:
            return self._disk.remove_stale(older_than_seconds)
        except OSError as cause:
            raise explained(cause, self._folder, "cannot be cleaned of old temporary files") from cause

    def claim(self, key: str) -> Claim | None:
        """Say that this process works on a unit, unless another does; see :mod:`elbowroom.store.claims`.

        Parameters
        ----------
        key : str
            Content key.

        Returns
        -------
        Claim or None
            A context manager that lets go of the unit in the end, or None: somebody else works on it.  The other may have
            finished it just before, so look into the store once more after claiming.

        Raises
        ------
        StoreError
            If ``key`` is not a key, or the disk refuses.
        """
        path = self.path_of(key)
        self._disk.create_folder()
        try:
            return self._claims.claim(key)
        except OSError as cause:
            raise explained(cause, path, "cannot be claimed for work") from cause

    def claimed(self, key: str) -> Holder | None:
        """Return who works on a unit now, this process included; None if nobody does.

        Raises
        ------
        StoreError
            If ``key`` is not a key, or the operating system refuses.
        """
        holder = self.claim_of(key)
        return holder if holder is not None and holder.state == "working" else None

    def claim_of(self, key: str) -> Holder | None:
        """Return whose claim lies on a unit, void or not; None if there is none; errors as :meth:`claimed`."""
        path = self.path_of(key)
        try:
            return self._claims.holder(key)
        except OSError as cause:
            raise explained(cause, path, "its claim cannot be read") from cause

    def claims(self) -> dict[str, Holder]:
        """Return all claims, void or not, by the keys of their units; errors as :meth:`claimed`."""
        try:
            found = {key: self._claims.holder(key) for key in self._claims.keys()}
        except OSError as cause:
            raise explained(cause, self._folder, "the claims in it cannot be read") from cause
        return {key: holder for key, holder in found.items() if holder is not None}

    def discard_claim(self, key: str) -> bool:
        """Remove a void claim and say whether there was one; errors as :meth:`claimed`."""
        path = self.path_of(key)
        try:
            return self._claims.discard(key)
        except OSError as cause:
            raise explained(cause, path, "its claim cannot be removed") from cause

    def _write(self, path: Path, key: str, record: Record) -> None:
        if not self._swept:
            self.remove_stale()
            self._swept = True
        with self._disk.temporary(key[:16]) as (file, temporary):
            write_unit(file, self._schema, key, record)
            os.fsync(file.fileno())
            file.close()  # network disks may report a full disk only here
            check_written(temporary, self._schema, key, record)
            self._make_way(path, key)
            self._disk.replace(temporary, path)
        flush_folder(self._folder)

    def _make_way(self, path: Path, key: str) -> None:
        """Set aside whatever stands where a unit is to go, unless it is a unit of ours."""
        with contextlib.suppress(FileNotFoundError):
            # before it is judged: another process may put a good unit there meanwhile, which must not be the one to go
            found = os.lstat(path)
            if not self._holds_unit(path, key):
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
            if is_damage(cause):
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
            if not is_damage(cause):
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
