"""One record in one HDF5 file: write the body, read it back, check every byte."""

from __future__ import annotations

import errno
import io
import json
import os
import platform
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import replace
from datetime import UTC, datetime
from functools import cache
from importlib import metadata
from pathlib import Path
from typing import Any

import h5py
import numpy as np

from elbowroom.base.errors import StoreError
from elbowroom.store.header import USER_BLOCK_SIZE, Header, NotAUnit, read_header, sum_of
from elbowroom.store.records import RESERVED_NAME, Record, Schema, same_bits

_ABOUT = (
    "One unit of work of elbowroom. Datasets carry their unit, a description and labelled dimensions; "
    f"complex numbers are pairs (r, i). The group {RESERVED_NAME} holds what was recorded with them; the "
    "entries listed in the attribute attributes_in_json are JSON text. The first 1024 bytes of the file are "
    "a text header with a checksum."
)
_IN_JSON = "attributes_in_json"


class OtherSchema(Exception):
    """An undamaged unit of another schema; the message says found and expected.  Never leaves the package."""


class GuardedFile:
    """File object for h5py that keeps the first error of the operating system instead of passing it on.

    An error raised inside HDF5 makes it close the file, which writes again and fails again; what comes out is
    then a ``SystemError`` or ``AttributeError`` in place of "no space left" (seen with h5py 3.16).  So HDF5
    is told that all went well, and the owner of the file raises ``error`` once HDF5 has let go of it.

    Parameters
    ----------
    raw : unbuffered binary file
        Open for what is to be done with it.
    """

    def __init__(self, raw: io.FileIO) -> None:
        self._raw = raw
        self.error: OSError | None = None

    def seek(self, offset: int, whence: int = io.SEEK_SET) -> int:
        """Move to a byte and return it."""
        return self._raw.seek(offset, whence)

    def tell(self) -> int:
        """Return the current byte."""
        return self._raw.tell()

    def read(self, size: int) -> bytes:
        """Return up to ``size`` bytes."""
        buffer = bytearray(size)
        return bytes(buffer[: self.readinto(memoryview(buffer))])

    def readinto(self, buffer: memoryview) -> int:
        """Fill the buffer and return how far; with zeros where an error has kept bytes from being written."""
        rest = memoryview(buffer).cast("B")
        total = len(rest)
        while len(rest) and (taken := self._raw.readinto(rest)):
            rest = rest[taken:]
        if self.error is not None:
            rest[:] = bytes(len(rest))
            return total
        return total - len(rest)

    def write(self, content: memoryview) -> int:
        """Write all of it, or keep the error."""
        rest = memoryview(content).cast("B")
        try:
            while self.error is None and len(rest):
                rest = rest[self._raw.write(rest) :]  # at most 2 GiB at a time
        except OSError as error:
            self.error = error
        return len(content)

    def truncate(self, size: int) -> int:
        """Set the length of the file, or keep the error."""
        try:
            if self.error is None:
                self._raw.truncate(size)
        except OSError as error:
            self.error = error
        return size

    def flush(self) -> None:
        """Do nothing: nothing is buffered here."""


def write_unit(file: io.FileIO, schema: Schema, key: str, record: Record) -> None:
    """Write a checked record into an empty open file: HDF5 body first, header last; not yet flushed to disk.

    Parameters
    ----------
    file : unbuffered binary file
        Open for reading and writing, empty.
    schema : Schema
        What the record looks like.
    key : str
        Its content key.
    record : Record
        As returned by :func:`elbowroom.store.records.checked_record`.

    Raises
    ------
    OSError
        From the operating system: disk full, file too large, ...
    """
    guarded = GuardedFile(file)
    try:
        with h5py.File(guarded, "w", userblock_size=USER_BLOCK_SIZE, track_order=False) as content:
            _write_body(content, schema, key, record)
    except Exception:
        # after a failed write HDF5 may read back what is not there: its complaint is then only an echo
        if guarded.error is not None:
            raise guarded.error from None
        raise
    if guarded.error is not None:
        raise guarded.error
    header = Header(schema.name, schema.version, key, os.fstat(file.fileno()).st_size)
    block = replace(header, sha256=sum_of(file, header)).to_bytes()
    file.seek(0)
    if file.write(block) != len(block):
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))


def read_unit(file: io.FileIO, schema: Schema, key: str | None) -> Record:
    """Return the record in an open file after checking every byte of it.

    Parameters
    ----------
    file : unbuffered binary file
        Open for reading.
    schema : Schema
        What is expected.
    key : str or None
        The key expected; None accepts any.

    Returns
    -------
    Record
        Arrays of their own memory, attributes, provenance.

    Raises
    ------
    NotAUnit
        If the file is damaged, foreign, of another key, or does not fit the schema it claims.
    OtherSchema
        If it is sound and of another schema or version.
    OSError
        From the operating system.
    """
    check_bytes(file, schema, key)
    with _content_of(file) as content:
        record = _read_body(content)
    problems = schema.problems_of(record.arrays)
    if problems:
        raise NotAUnit("; ".join(problems))
    return record


def check_bytes(file: io.FileIO, schema: Schema | None, key: str | None) -> Header:
    """Check every byte of an open file, its key and schema (any if None), without HDF5; errors as :func:`read_unit`."""
    header = read_header(file, os.fstat(file.fileno()).st_size)
    found = sum_of(file, header)
    if found != header.sha256:
        msg = f"damaged: SHA-256 of the file is {found[:12]}..., its header says {header.sha256[:12]}..."
        raise NotAUnit(msg)
    if key is not None and header.key != key:
        msg = f"holds the unit {header.key}"
        raise NotAUnit(msg)
    if schema is not None:
        check_schema(header, schema)
    return header


def read_description(file: io.FileIO) -> tuple[Header, dict[str, Any], dict[str, str]]:
    """Return header, attributes and provenance of a unit of any schema, without reading its arrays or summing its bytes.

    Parameters
    ----------
    file : unbuffered binary file
        Open for reading.

    Returns
    -------
    tuple of Header, dict, dict
        What can be damaged unseen: only :func:`check_bytes` knows.

    Raises
    ------
    NotAUnit
        If it is seen to be damaged, or foreign.
    OSError
        From the operating system.
    """
    header = read_header(file, os.fstat(file.fileno()).st_size)
    with _content_of(file) as content:
        attributes = _read_attributes(content)
        return header, attributes, {name: str(text) for name, text in content.attrs.items() if name != _IN_JSON}


@contextmanager
def _content_of(file: io.FileIO) -> Iterator[h5py.File]:
    """Open the HDF5 content of a file whose bytes have been checked; what HDF5 cannot read is not a unit.

    HDF5 reads through the open file that was checked, so that no other file can come in between.
    """
    try:
        with h5py.File(GuardedFile(file), "r") as content:
            yield content
    except (KeyError, TypeError, ValueError, AttributeError, RuntimeError, OverflowError, OSError) as cause:
        if isinstance(cause, OSError) and cause.errno:
            raise
        # the sum is right, so these are the bytes that were written: by a program that is not ours
        msg = f"its content cannot be understood: {cause}"
        raise NotAUnit(msg) from cause


def check_schema(header: Header, schema: Schema) -> None:
    """Raise :class:`OtherSchema`, saying found and expected, unless the header is of this schema."""
    if (header.schema_name, header.schema_version) != (schema.name, schema.version):
        msg = (
            f"found schema {header.schema_name} version {header.schema_version}, expected {schema.name} version {schema.version}"
        )
        raise OtherSchema(msg)


def read_unit_file(path: str | Path, schema: Schema) -> Record:
    """Return the record in a file given by its name, wherever it is.

    Parameters
    ----------
    path : str or Path
        A stored file.
    schema : Schema
        The schema and version expected.

    Returns
    -------
    Record
        Arrays as declared by the schema, attributes, provenance.

    Raises
    ------
    StoreError
        If the file is missing, unreadable, damaged or foreign, or of another schema or version (found and
        expected are named).  The file stays where it is.
    """
    try:
        with open(path, "rb", buffering=0) as file:
            return read_unit(file, schema, None)
    except NotAUnit as cause:
        raise StoreError(str(cause), path=path) from None
    except OtherSchema as cause:
        msg = f"{cause}; open it with a version of the program that knows this schema, or read it with h5py"
        raise StoreError(msg, path=path) from None
    except OSError as cause:
        msg = f"cannot be read: {cause.strerror or cause}"
        raise StoreError(msg, path=path) from cause


def check_written(path: Path, schema: Schema, key: str, record: Record) -> None:
    """Read a file just written and compare it with what it should hold, bit for bit.

    Raises
    ------
    NotAUnit
        If they differ.
    OSError
        If the file cannot be read.
    """
    with open(path, "rb", buffering=0) as file:
        check_bytes(file, schema, key)
        with _content_of(file) as content:
            # one array at a time: records can be a large part of the memory
            wrong = [name for name, array in record.arrays.items() if not same_bits(array, _read_array(content[name]))]
            wrong += [] if _read_attributes(content) == record.attributes else [RESERVED_NAME]
    if wrong:
        msg = f"does not read back as written: {', '.join(wrong)}"
        raise NotAUnit(msg)


@cache
def library_versions() -> dict[str, str]:
    """Return the versions of the program, Python and the libraries that shape the numbers, by name."""
    versions = {"python_version": platform.python_version(), "hdf5_version": h5py.version.hdf5_version}
    for name, package in (("program", "elbowroom"), ("numpy", "numpy"), ("scipy", "scipy"), ("h5py", "h5py")):
        try:
            versions[f"{name}_version"] = metadata.version(package)
        except metadata.PackageNotFoundError:
            versions[f"{name}_version"] = "not installed as a package"
    return versions


def provenance_of(schema: Schema, key: str) -> dict[str, str]:
    """Return the self-description of a record written now, text by name."""
    return {
        "about": _ABOUT,
        "program": "elbowroom",
        **library_versions(),
        "created_utc": datetime.now(UTC).isoformat(timespec="seconds"),
        "schema": schema.name,
        "schema_version": str(schema.version),
        "key": key,
        "conventions": schema.conventions,
    }


def _write_body(file: h5py.File, schema: Schema, key: str, record: Record) -> None:
    for name, text in provenance_of(schema, key).items():
        file.attrs[name] = text
    for spec in schema.arrays:
        if spec.name not in record.arrays:
            continue
        array = record.arrays[spec.name]
        stored = array
        if array.dtype.kind == "U":
            encoded = np.char.encode(array, "utf-8")
            stored = encoded.astype(h5py.string_dtype("utf-8", max(encoded.dtype.itemsize, 1)))
        dataset = file.create_dataset(spec.name, data=stored, track_times=False)
        for axis, dim in enumerate(spec.dims):
            dataset.dims[axis].label = dim
        dataset.attrs["unit"] = spec.unit
        dataset.attrs["description"] = spec.doc
        if array.dtype.kind == "U":
            dataset.attrs["numpy_type"] = array.dtype.str
    group = file.create_group(RESERVED_NAME)
    plain = {name for name, value in record.attributes.items() if _is_plain(value)}
    for name, value in record.attributes.items():
        group.attrs[name] = value if name in plain else json.dumps(value)
    file.attrs[_IN_JSON] = json.dumps(sorted(set(record.attributes) - plain))


def _is_plain(value: Any) -> bool:
    """Return whether HDF5 can hold a value as it is and give the same back."""
    if isinstance(value, str):
        # JSON escapes what HDF5 text cannot hold: the zero byte, half a surrogate pair
        return "\0" not in value and not any("\ud800" <= letter <= "\udfff" for letter in value)
    if isinstance(value, int):
        return -(2**63) <= value < 2**63
    return isinstance(value, float)


def _read_array(dataset: h5py.Dataset) -> np.ndarray:
    array = np.asarray(dataset[...])
    if "numpy_type" in dataset.attrs:
        array = np.char.decode(array, "utf-8").astype(np.dtype(dataset.attrs["numpy_type"]))
    return array


def _read_attributes(file: h5py.File) -> dict[str, Any]:
    in_json = set(json.loads(file.attrs[_IN_JSON]))
    attributes: dict[str, Any] = {}
    for name, stored in file[RESERVED_NAME].attrs.items():
        value = stored.item() if isinstance(stored, np.generic) else stored
        attributes[name] = json.loads(value) if name in in_json else value
    return attributes


def _read_body(file: h5py.File) -> Record:
    arrays = {name: _read_array(dataset) for name, dataset in file.items() if name != RESERVED_NAME}
    provenance = {name: str(text) for name, text in file.attrs.items() if name != _IN_JSON}
    return Record(arrays, _read_attributes(file), provenance)
