"""Looking after the files of a store of any schema: what there is, whether it is sound, what was left behind."""

from __future__ import annotations

import os
import re
import stat
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from elbowroom.store.disk import STALE_AFTER_SECONDS, TEMPORARY, Disk, explained, is_damage
from elbowroom.store.header import Header, NotAUnit
from elbowroom.store.processes import tag_in
from elbowroom.store.unitfile import check_bytes, read_description

SCHEMA_FOLDER = re.compile(r"([a-z][a-z0-9-]{0,39})-v([1-9][0-9]*)")
UNIT_NAME = re.compile(r"([0-9a-f]{64})\.h5")

SUMMED_ANYWAY_BYTES = 1 << 20
"""Files of up to so many bytes are summed before HDF5 opens them: on about one in 400 damaged bits in its own structures,
which are a large part of small files, it never comes back, or ends the process."""


@dataclass(frozen=True)
class UnitEntry:
    """A file under the name of a unit.

    Attributes
    ----------
    path : Path
        Where.
    schema_name, schema_version : str, int
        By its folder.
    key : str
        By its name.
    size_bytes : int
        Length of the file.
    attributes : dict
        What was recorded with the unit; empty where it cannot be read.
    created_utc : str
        When it was written, by the clock of the machine that did; empty where it cannot be read.
    problem : str or None
        What is seen to be wrong with it.
    """

    path: Path
    schema_name: str
    schema_version: int
    key: str
    size_bytes: int
    attributes: dict[str, Any] = field(default_factory=dict)
    created_utc: str = ""
    problem: str | None = None


def schema_folders(root: Path) -> list[Path]:
    """Return the folders of all schemas and versions in a store, sorted.

    Raises
    ------
    StoreError
        If the system refuses; a store that is not there has none.
    """
    try:
        with os.scandir(root) as entries:
            return sorted(Path(e.path) for e in entries if SCHEMA_FOLDER.fullmatch(e.name) and e.is_dir())
    except FileNotFoundError:
        return []
    except OSError as cause:
        raise explained(cause, root, "cannot be read") from cause


def unit_paths(root: Path) -> Iterator[Path]:
    """Yield all files under names of units, schema by schema, sorted; errors as :func:`schema_folders`."""
    for folder in schema_folders(root):
        try:
            names = sorted(os.listdir(folder))
        except OSError as cause:
            raise explained(cause, folder, "cannot be read") from cause
        yield from (folder / name for name in names if UNIT_NAME.fullmatch(name))


def entry_of(path: Path, *, every_byte: bool = False) -> UnitEntry:
    """Return what a file under the name of a unit is.

    Parameters
    ----------
    path : Path
        The file.
    every_byte : bool, optional
        Whether to sum all bytes, which finds any damage; else those of files up to `SUMMED_ANYWAY_BYTES`, and of larger ones
        header and length, and whatever HDF5 stumbles over.

    Returns
    -------
    UnitEntry
        With the problem found, if any.

    Raises
    ------
    StoreError
        If the system refuses to read.
    """
    match = SCHEMA_FOLDER.fullmatch(path.parent.name)
    assert match is not None
    name, version, key = match[1], int(match[2]), path.name.removesuffix(".h5")
    size = 0
    try:
        found = os.stat(path)
        size = found.st_size
        if not stat.S_ISREG(found.st_mode):
            return UnitEntry(path, name, version, key, 0, problem="not an ordinary file")
        with open(path, "rb", buffering=0) as file:
            if every_byte or size <= SUMMED_ANYWAY_BYTES:
                check_bytes(file, None, None)
            header, attributes, provenance = read_description(file)
    except NotAUnit as cause:
        return UnitEntry(path, name, version, key, size, problem=str(cause))
    except OSError as cause:
        if is_damage(cause):
            return UnitEntry(path, name, version, key, size, problem=f"cannot be read: {cause.strerror}")
        raise explained(cause, path, "cannot be read") from cause
    problem = _out_of_place(header, name, version, key)
    return UnitEntry(path, name, version, key, size, attributes, provenance.get("created_utc", ""), problem)


def entries(root: Path, *, every_byte: bool = False) -> Iterator[UnitEntry]:
    """Yield what the store's files are; those removed meanwhile are left out; errors as :func:`entry_of`."""
    for path in unit_paths(root):
        if os.path.lexists(path):
            yield entry_of(path, every_byte=every_byte)


def left_behind(root: Path) -> list[tuple[Path, str]]:
    """Return files that are no units and that nobody will use: set aside, or left by processes that were killed.

    Returns
    -------
    list of (Path, str)
        Each with what it is.

    Raises
    ------
    StoreError
        If the system refuses.
    """
    found: list[tuple[Path, str]] = []
    for folder in schema_folders(root):
        try:
            aside = folder / "set-aside"
            if aside.is_dir():
                found += [(path, "set aside") for path in sorted(aside.iterdir()) if not path.is_dir()]
            temporary = sorted(folder.glob(f"{TEMPORARY}*"))
            now = Disk(folder).time() if temporary and os.access(folder, os.W_OK) else 0.0
            for path in temporary:
                tag = tag_in(path.name)
                ended = tag is not None and tag.is_gone()
                try:
                    changed = path.lstat()
                except FileNotFoundError:
                    continue
                old = bool(now) and abs(now - changed.st_mtime) > STALE_AFTER_SECONDS
                if stat.S_ISREG(changed.st_mode) and (ended or old):
                    found.append((path, "left by a process that ended while writing"))
        except OSError as cause:
            raise explained(cause, folder, "cannot be read") from cause
    return found


def _out_of_place(header: Header, name: str, version: int, key: str) -> str | None:
    if header.key != key:
        return f"holds the unit {header.key}"
    if (header.schema_name, header.schema_version) != (name, version):
        return f"found schema {header.schema_name} version {header.schema_version}, expected {name} version {version}"
    return None
