"""Packs: any number of units in one file that can be carried elsewhere.

A pack is an ordinary tar file, so that any tar takes it apart:

===================================== =========================================================================
member                                content
===================================== =========================================================================
``contents.json``                     ``{"pack": 1, "units": [{"file", "length", "sha256"}, ...]}``
``<schema>-v<version>/<key>.h5``, ... the units, in the order of the contents, byte for byte as in the store
``sha256``                            64 digits: the sum over all bytes of the pack before this member
===================================== =========================================================================

The contents determine every byte of the pack that is not inside a unit, and the sum is over all of them, so that no byte of
the file can change unseen.  Packs of the same units are equal files.
"""

from __future__ import annotations

import hashlib
import io
import json
import math
import os
import re
import tarfile
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path

from elbowroom.base.errors import StoreError
from elbowroom.store.care import SCHEMA_FOLDER, UNIT_NAME
from elbowroom.store.disk import Disk, copy_bytes, explained, write_all
from elbowroom.store.hdf5 import Hdf5Store, warn_of_damage
from elbowroom.store.header import NotAUnit
from elbowroom.store.records import Reporter, Schema
from elbowroom.store.unitfile import check_bytes

_BLOCK = tarfile.BLOCKSIZE
_CONTENTS, _SUM = "contents.json", "sha256"
_LONGEST_CONTENTS = 1 << 28
_PIECE = 1 << 20


@dataclass(frozen=True)
class PackedUnit:
    """A unit in a pack.

    Attributes
    ----------
    file : str
        Its name in the store: ``<schema>-v<version>/<key>.h5``.
    length : int
        [bytes]
    sha256 : str
        Sum over its bytes.
    """

    file: str
    length: int
    sha256: str

    @property
    def schema(self) -> Schema:
        """Name and version of its schema; which arrays that has is not known here."""
        match = SCHEMA_FOLDER.fullmatch(self.file.partition("/")[0])
        assert match is not None
        return Schema(match[1], int(match[2]), ())

    @property
    def key(self) -> str:
        """Its content key."""
        return self.file.partition("/")[2].removesuffix(".h5")


def write_pack(target: Path, units: Sequence[Path], *, replace: bool = False) -> list[PackedUnit]:
    """Write units into a pack, checking every byte of them.

    Parameters
    ----------
    target : Path
        The pack; it gets its name when it is complete.
    units : sequence of Path
        Files of units in a store.
    replace : bool, optional
        Whether a file of that name may be replaced.

    Returns
    -------
    list of PackedUnit
        What is in it.

    Raises
    ------
    StoreError
        If there is nothing to pack, a unit is damaged or changes meanwhile (all damaged ones are named), something stands in
        the way, or the disk refuses.  Then there is no pack, and an older one is as it was.
    """
    if not units:
        msg = "nothing to pack: there are no units"
        raise StoreError(msg, path=target)
    if os.path.lexists(target) and (not replace or not target.is_file()):
        msg = "exists already; another name, or leave to replace it, is needed" if target.is_file() else "is no plain file"
        raise StoreError(msg, path=target)
    if target.is_file() and not _begins_like_a_pack(target):
        msg = "exists already and is no pack, which alone is replaced; another name is needed"
        raise StoreError(msg, path=target)
    packed, problems = [], []
    for path in sorted(units, key=lambda p: (p.parent.name, p.name)):
        try:
            packed.append(_summed(path))
        except NotAUnit as cause:
            problems.append(f"{path}: {cause}")
        except OSError as cause:
            raise explained(cause, path, "cannot be read") from cause
    if problems:
        msg = "not packed, because units are damaged:\n" + "\n".join(f"  - {p}" for p in problems)
        raise StoreError(msg, path=target)
    where = {f"{p.parent.name}/{p.name}": p for p in units}
    disk = Disk(target.absolute().parent)
    disk.create_folder()
    try:
        disk.remove_stale(math.inf)
        with disk.temporary("pack") as (file, temporary):
            digest = hashlib.sha256()

            def out(content: bytes) -> None:
                digest.update(content)
                write_all(file, content)

            contents = _contents(packed)
            out(_head(_CONTENTS, len(contents)) + _padded(contents))
            for unit in packed:
                out(_head(unit.file, unit.length))
                _copy_unit(where[unit.file], unit, file, digest.update)
                out(bytes(-unit.length % _BLOCK))
            write_all(file, _tail(digest.hexdigest()))
            os.fsync(file.fileno())
            file.close()
            _read_through(temporary, packed)
            disk.replace(temporary, target)
    except OSError as cause:
        raise explained(cause, target, "cannot be written") from cause
    return packed


def _begins_like_a_pack(path: Path) -> bool:
    """Return whether a file is empty or begins as packs do, damaged ones and those of other programs' versions too."""
    try:
        with open(path, "rb") as file:
            start = file.read(_BLOCK)
    except OSError as cause:
        raise explained(cause, path, "cannot be read") from cause
    return not start or start.startswith(_CONTENTS.encode("ascii") + b"\0")


def read_contents(path: Path) -> list[PackedUnit]:
    """Return what a pack holds, after checking every byte of it.

    Raises
    ------
    StoreError
        If it is damaged or no pack, or cannot be read.
    """
    try:
        return _read_through(path, None)
    except OSError as cause:
        raise explained(cause, path, "cannot be read") from cause


def unpack(
    path: Path, root: Path, *, report: Reporter = warn_of_damage, each: Callable[[PackedUnit, bool], None] | None = None
) -> list[PackedUnit]:
    """Add the units of a pack to a store, after checking every byte of the pack and then of each copy.

    Parameters
    ----------
    path : Path
        The pack.
    root : Path
        Folder of the store; made if need be.
    report : callable, optional
        Told of files in the store that were damaged and had to make way.
    each : callable, optional
        Told of each unit, and whether it was added (or there already).

    Returns
    -------
    list of PackedUnit
        The units that were added; sound ones already there stay.

    Raises
    ------
    StoreError
        If the pack is damaged (then nothing is added), or the disk refuses (then what was added before stays).
    """
    units = read_contents(path)
    added = []
    try:
        with open(path, "rb", buffering=0) as file:
            contents = _contents(units)
            file.seek(len(_head(_CONTENTS, len(contents))) + len(_padded(contents)))
            for unit in units:
                start = file.seek(len(_head(unit.file, unit.length)), os.SEEK_CUR)
                is_new = Hdf5Store(root, unit.schema, report=report).adopt(unit.key, file, unit.length)
                file.seek(start + unit.length + -unit.length % _BLOCK)
                if is_new:
                    added.append(unit)
                if each is not None:
                    each(unit, is_new)
    except OSError as cause:
        raise explained(cause, path, "cannot be read") from cause
    return added


def _summed(path: Path) -> PackedUnit:
    if os.path.lexists(path) and not path.is_file():
        msg = "not an ordinary file"
        raise NotAUnit(msg)
    with open(path, "rb", buffering=0) as file:
        header = check_bytes(file, None, path.name.removesuffix(".h5"))
        if path.parent.name != f"{header.schema_name}-v{header.schema_version}":
            msg = f"a unit of schema {header.schema_name} version {header.schema_version} in the folder of another"
            raise NotAUnit(msg)
        file.seek(0)
        return PackedUnit(f"{path.parent.name}/{path.name}", header.length, hashlib.file_digest(file, "sha256").hexdigest())


def _copy_unit(path: Path, unit: PackedUnit, target: io.FileIO, note: Callable[[bytes], object]) -> None:
    own = hashlib.sha256()

    def both(piece: bytes) -> None:
        own.update(piece)
        note(piece)

    with open(path, "rb", buffering=0) as source:
        copy_bytes(source, target, min(unit.length, os.fstat(source.fileno()).st_size), both)
    if own.hexdigest() != unit.sha256:
        msg = "changed while it was packed; try again"
        raise StoreError(msg, path=path)


def _contents(units: Sequence[PackedUnit]) -> bytes:
    listed = [{"file": u.file, "length": u.length, "sha256": u.sha256} for u in units]
    return (json.dumps({"pack": 1, "units": listed}, indent=1) + "\n").encode("ascii")


def _head(name: str, length: int) -> bytes:
    member = tarfile.TarInfo(name)
    member.size, member.mode, member.mtime = length, 0o644, 0
    return member.tobuf(tarfile.GNU_FORMAT)


def _padded(content: bytes) -> bytes:
    return content + bytes(-len(content) % _BLOCK)


def _tail(digest: str) -> bytes:
    return _head(_SUM, 65) + _padded(f"{digest}\n".encode("ascii")) + bytes(2 * _BLOCK)


def _read_through(path: Path, expected: Sequence[PackedUnit] | None) -> list[PackedUnit]:
    """Read all of a pack and return its contents; raise StoreError where a byte is not what it must be."""

    def damaged(what: str) -> StoreError:
        return StoreError(f"damaged, or no pack of this program: {what}", path=path)

    if not path.is_file():
        msg = "no such pack" if not os.path.lexists(path) else "is no plain file"
        raise StoreError(msg, path=path)
    with open(path, "rb", buffering=0) as file:
        digest = hashlib.sha256()

        def take(n_bytes: int, what: str) -> bytes:
            pieces = []
            while n_bytes:
                piece = file.read(min(n_bytes, _PIECE))
                if not piece:
                    msg = f"it ends inside {what}"
                    raise damaged(msg)
                pieces.append(piece)
                n_bytes -= len(piece)
            return b"".join(pieces)

        head = take(_BLOCK, "its first header")
        try:
            length = tarfile.TarInfo.frombuf(head, "ascii", "strict").size
        except (tarfile.HeaderError, UnicodeDecodeError) as cause:
            msg = f"it does not begin with {_CONTENTS}"
            raise damaged(msg) from cause
        if not 0 < length <= _LONGEST_CONTENTS or head != _head(_CONTENTS, length):
            msg = f"it does not begin with {_CONTENTS}"
            raise damaged(msg)
        block = take(length + -length % _BLOCK, _CONTENTS)
        units = _units_in(block[:length])
        if units is None or _padded(_contents(units)) != block or (expected is not None and list(expected) != units):
            msg = f"its {_CONTENTS} is not as this program writes it"
            raise damaged(msg)
        digest.update(head + block)
        for unit in units:
            expected_head = _head(unit.file, unit.length)
            head = take(len(expected_head), f"the header of {unit.file}")
            if head != expected_head:
                msg = f"the header of {unit.file} is not the one expected"
                raise damaged(msg)
            digest.update(head)
            own, rest = hashlib.sha256(), unit.length
            while rest:
                piece = take(min(rest, _PIECE), unit.file)
                own.update(piece)
                digest.update(piece)
                rest -= len(piece)
            if own.hexdigest() != unit.sha256:
                msg = f"the sum of {unit.file} is {own.hexdigest()[:12]}..., its contents say {unit.sha256[:12]}..."
                raise damaged(msg)
            digest.update(take(-unit.length % _BLOCK, unit.file))
        tail = _tail(digest.hexdigest())
        if take(len(tail), "its last member") != tail or file.read(1):
            msg = "its last member does not hold the sum over the pack"
            raise damaged(msg)
    return units


def _units_in(content: bytes) -> list[PackedUnit] | None:
    """Return the units that the contents name, or None if they are not of the form or name anything but units, once each."""
    try:
        told = json.loads(content)
        units = [PackedUnit(str(u["file"]), int(u["length"]), str(u["sha256"])) for u in told["units"]]
    except (ValueError, KeyError, TypeError, RecursionError):
        return None
    for unit in units:
        folder, _, name = unit.file.partition("/")
        if not SCHEMA_FOLDER.fullmatch(folder) or not UNIT_NAME.fullmatch(name) or len(folder) > 60:
            return None
        if unit.length < 1 or not re.fullmatch(r"[0-9a-f]{64}", unit.sha256):
            return None
    return units if len({u.file for u in units}) == len(units) else None
