"""What a store holds and promises: schema, record, the checks at the door, reports of damage."""

from __future__ import annotations

import difflib
import json
import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Protocol

import numpy as np

from elbowroom.base.arrays import ArraySpec
from elbowroom.base.errors import StoreError
from elbowroom.store.claims import Claim, Holder

_KEY = re.compile(r"[0-9a-f]{64}")
_SCHEMA_NAME = re.compile(r"[a-z][a-z0-9-]{0,39}")
_ARRAY_NAME = re.compile(r"[A-Za-z][A-Za-z0-9_]*")
_KINDS = "biufcU"

RESERVED_NAME = "record_attributes"
"""Name of the HDF5 group of a record's attributes; no array may have it."""


@dataclass(frozen=True)
class Schema:
    """What every record of one store looks like.

    Parameters
    ----------
    name : str
        Short name of the kind of record: lower-case letters, digits and hyphens, at most 40.
    version : int
        Raised whenever the meaning, the unit or the shape of anything in the record changes; at least 1.
    arrays : tuple of ArraySpec
        Every array a record may hold; kinds are among ``b i u f c U`` (bool, integers, floats, complex,
        text).
    conventions : str
        For the reader of the file: signs, axes, normalisation.

    Raises
    ------
    ValueError
        If a name, the version or a kind is not as said above, or a name occurs twice.
    """

    name: str
    version: int
    arrays: tuple[ArraySpec, ...]
    conventions: str = ""

    def __post_init__(self) -> None:
        problems = []
        if not _SCHEMA_NAME.fullmatch(self.name):
            problems.append(f"schema name: expected lower-case letters, digits, hyphens, got {self.name!r}")
        if isinstance(self.version, bool) or not isinstance(self.version, int) or self.version < 1:
            problems.append(f"schema version: expected a whole number from 1, got {self.version!r}")
        names = [spec.name for spec in self.arrays]
        problems += [f"array {name!r} is declared twice" for name in sorted({n for n in names if names.count(n) > 1})]
        for spec in self.arrays:
            if not _ARRAY_NAME.fullmatch(spec.name) or spec.name == RESERVED_NAME:
                problems.append(f"array name: expected letters, digits, underscores, got {spec.name!r}")
            if not spec.kind or set(spec.kind) - set(_KINDS):
                problems.append(f"array {spec.name!r}: expected kinds among {_KINDS!r}, got {spec.kind!r}")
        if problems:
            raise ValueError("; ".join(problems))

    def problems_of(self, arrays: Mapping[str, object]) -> list[str]:
        """Return what keeps these arrays from being a record of this schema, one line each.

        Parameters
        ----------
        arrays : mapping of str to ndarray
            The arrays by name.

        Returns
        -------
        list of str
            Missing and undeclared arrays, wrong kinds, wrong numbers of axes, dimensions of one name that
            differ in length.
        """
        declared = {spec.name: spec for spec in self.arrays}
        problems = []
        for name in arrays:
            if name not in declared:
                near = difflib.get_close_matches(str(name), declared, n=1)
                hint = f"; did you mean {near[0]!r}?" if near else ""
                problems.append(f"array {name!r} is not declared in schema {self.name} version {self.version}{hint}")
        lengths: dict[str, tuple[int, str]] = {}
        for spec in self.arrays:
            if spec.name not in arrays:
                if spec.required:
                    problems.append(f"array {spec.name!r} is missing")
                continue
            array = arrays[spec.name]
            if not isinstance(array, np.ndarray) or isinstance(array, np.ma.MaskedArray):
                problems.append(f"array {spec.name!r}: expected a plain numpy array, got {type(array).__name__}")
                continue
            if array.dtype.kind not in spec.kind:
                problems.append(f"array {spec.name!r}: expected a type of kind {spec.kind!r}, got {array.dtype}")
            elif array.dtype.itemsize > {"f": 8, "c": 16}.get(array.dtype.kind, array.dtype.itemsize):
                # its layout differs between machines
                problems.append(f"array {spec.name!r}: expected at most double precision, got {array.dtype}")
            if array.ndim != len(spec.dims):
                dims = "(" + ", ".join(spec.dims) + ")"
                problems.append(f"array {spec.name!r}: expected {len(spec.dims)} axes {dims}, got {array.shape}")
                continue
            for dim, length in zip(spec.dims, array.shape, strict=True):
                known, owner = lengths.setdefault(dim, (length, spec.name))
                if known != length:
                    problems.append(f"array {spec.name!r}: expected length {known} along {dim!r} as in {owner!r}, got {length}")
        return problems


@dataclass(eq=False)
class Record:
    """One unit of work as stored.

    Parameters
    ----------
    arrays : dict of str to ndarray
        As declared by the schema of the store; shapes and units are stated there.
    attributes : dict of str to JSON-able
        Text, finite numbers, bool, None, and lists and dicts of these; tuples come back as lists.
    provenance : dict of str to str
        Filled by the store on reading: versions of the program and its libraries, time of creation (UTC).
        Ignored on writing.
    """

    arrays: dict[str, np.ndarray]
    attributes: dict[str, Any] = field(default_factory=dict)
    provenance: dict[str, str] = field(default_factory=dict)


@dataclass(frozen=True)
class DamageReport:
    """A file that was found under the name of a unit and could not be used as one.

    Parameters
    ----------
    path : Path
        Where it was found.
    reason : str
        What is wrong with it.
    moved_to : Path or None
        Where it is now; None if it could not be moved and still stands where it was.
    """

    path: Path
    reason: str
    moved_to: Path | None

    def __str__(self) -> str:
        where = f"set aside as {self.moved_to}" if self.moved_to else "it could not be moved and was left in place"
        return f"{self.path}: not used: {self.reason}; {where}"


class StoreDamageWarning(UserWarning):
    """A stored file was damaged or foreign; it was set aside and counts as absent."""


class Store(Protocol):
    """What a pipeline may ask of a store; kept in a folder or in memory.

    Keys are the 64 hexadecimal digits of :func:`elbowroom.store.keys.content_key`; anything else is a
    ``StoreError``, as is a folder that cannot be read or written.
    """

    @property
    def schema(self) -> Schema:
        """The schema of every record in this store."""

    def put(self, key: str, record: Record) -> None:
        """Store a record under its key, in place of what was there."""

    def get(self, key: str) -> Record | None:
        """Return the record under a key, or None where there is none that can be trusted."""

    def verify(self, key: str) -> str | None:
        """Return what is wrong with the unit under a key, or None where all is well."""

    def remove(self, key: str) -> bool:
        """Remove the unit under a key and say whether there was one."""

    def keys(self) -> list[str]:
        """Return the keys of all units, sorted."""

    def path_of(self, key: str) -> Path | None:
        """Return the file of a unit, present or not, or None for a store without files."""

    def claim(self, key: str) -> Claim | None:
        """Say that this process works on a unit, until the claim is released; None if another does."""

    def claimed(self, key: str) -> Holder | None:
        """Return who works on a unit now, or None."""

    def check_writable(self) -> None:
        """Raise ``StoreError`` now if nothing can be written."""

    def __contains__(self, key: object) -> bool: ...


def checked_key(key: object) -> str:
    """Return the key if it is one.

    Raises
    ------
    StoreError
        If it is not text of 64 lower-case hexadecimal digits.
    """
    if not isinstance(key, str) or not _KEY.fullmatch(key):
        msg = f"not a key: expected 64 hexadecimal digits in lower case, got {key!r}"
        raise StoreError(msg)
    return key


def checked_record(schema: Schema, record: Record, where: str | Path | None = None) -> Record:
    """Return the record as it will be read back, if it fits the schema.

    Parameters
    ----------
    schema : Schema
        What it must fit.
    record : Record
        The arrays (not copied) and attributes (copied).
    where : str or Path, optional
        The file concerned, for the message.

    Returns
    -------
    Record
        Same arrays, attributes in JSON's own types, no provenance.

    Raises
    ------
    StoreError
        With all problems found.
    """
    problems = schema.problems_of(record.arrays)
    for name, array in record.arrays.items():
        if isinstance(array, np.ndarray) and array.dtype.kind == "U":
            problems += _problems_of_text(name, array)
    attributes: dict[str, Any] = {}
    for name, value in record.attributes.items():
        if not isinstance(name, str) or not name or "\0" in name or not _encodes(name):
            problems.append(f"attribute name: expected text, got {name!r}")
            continue
        try:
            attributes[name] = json.loads(json.dumps(value, allow_nan=False))
        except (TypeError, ValueError, RecursionError) as cause:
            problems.append(f"attribute {name!r}: expected finite numbers, text, bool, None, lists, dicts: {cause}")
    if problems:
        msg = "a record that does not fit its schema was not stored:\n" + "\n".join(f"  - {p}" for p in problems)
        raise StoreError(msg, path=where)
    return Record(dict(record.arrays), attributes)


def same_bits(first: np.ndarray, second: np.ndarray) -> bool:
    """Return whether two arrays agree in type, shape and every bit (so that nan agrees with itself)."""
    if first.dtype != second.dtype or first.shape != second.shape:
        return False
    one, two = (np.ascontiguousarray(array).reshape(-1).view(np.uint8) for array in (first, second))
    return bool(np.array_equal(one, two))


def _encodes(text: str) -> bool:
    try:
        text.encode()
    except UnicodeEncodeError:
        return False
    return True


def _problems_of_text(name: str, array: np.ndarray) -> list[str]:
    bad = [item for item in array.ravel().tolist() if "\0" in item or not _encodes(item)]
    return [f"array {name!r}: text that cannot be written as UTF-8: {item!r}" for item in bad[:3]]


Reporter = Callable[[DamageReport], None]
