"""A store without files, for tests and for work that nobody wants to keep."""

from __future__ import annotations

import copy
import os
import socket
from datetime import UTC, datetime

from elbowroom.store.claims import Claim, Holder
from elbowroom.store.records import Record, Schema, checked_key, checked_record
from elbowroom.store.unitfile import provenance_of


class MemoryStore:
    """Units of work in this process only; otherwise as :class:`elbowroom.store.hdf5.Hdf5Store`.

    Records are copied on the way in and on the way out, so that nobody changes what is stored.

    Parameters
    ----------
    schema : Schema
        What every record looks like.
    """

    def __init__(self, schema: Schema) -> None:
        self._schema = schema
        self._records: dict[str, Record] = {}
        self._claimed: dict[str, Holder] = {}

    @property
    def schema(self) -> Schema:
        """The schema of every record in this store."""
        return self._schema

    def path_of(self, key: str) -> None:
        """Return None: there is no file.

        Raises
        ------
        StoreError
            If ``key`` is not a key.
        """
        checked_key(key)

    def put(self, key: str, record: Record) -> None:
        """Store a copy of a record in place of what was there.

        Raises
        ------
        StoreError
            If ``key`` is not a key or the record does not fit the schema.
        """
        checked_key(key)
        checked = checked_record(self._schema, record)
        arrays = {name: array.copy(order="C") for name, array in checked.arrays.items()}
        self._records[key] = Record(arrays, checked.attributes, provenance_of(self._schema, key))

    def get(self, key: str) -> Record | None:
        """Return a copy of the record under a key, or None.

        Raises
        ------
        StoreError
            If ``key`` is not a key.
        """
        return copy.deepcopy(self._records.get(checked_key(key)))

    def verify(self, key: str) -> str | None:
        """Return ``"not in the store"``, or None where there is a unit.

        Raises
        ------
        StoreError
            If ``key`` is not a key.
        """
        return None if key in self else "not in the store"

    def remove(self, key: str) -> bool:
        """Remove the unit under a key and return whether there was one.

        Raises
        ------
        StoreError
            If ``key`` is not a key.
        """
        return self._records.pop(checked_key(key), None) is not None

    def keys(self) -> list[str]:
        """Return the keys of all units, sorted."""
        return sorted(self._records)

    def claim(self, key: str) -> Claim | None:
        """Claim a unit until released; None if it is claimed already.

        Raises
        ------
        StoreError
            If ``key`` is not a key.
        """
        if checked_key(key) in self._claimed:
            return None
        since = datetime.now(UTC).isoformat(timespec="seconds")
        self._claimed[key] = Holder(socket.gethostname(), os.getpid(), since, "working")

        def release() -> None:
            self._claimed.pop(key, None)

        return Claim(key, release, lambda: key in self._claimed)

    def claimed(self, key: str) -> Holder | None:
        """Return who works on a unit; None if nobody does.

        Raises
        ------
        StoreError
            If ``key`` is not a key.
        """
        return self._claimed.get(checked_key(key))

    def check_writable(self) -> None:
        """Do nothing: memory can be written."""

    def __contains__(self, key: object) -> bool:
        """Return whether there is a unit under a key.

        Raises
        ------
        StoreError
            If ``key`` is not a key.
        """
        return checked_key(key) in self._records
