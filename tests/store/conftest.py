from __future__ import annotations

import pytest

from elbowroom.store import DamageReport, Hdf5Store, MemoryStore
from store.samples import SCHEMA


@pytest.fixture
def reports() -> list[DamageReport]:
    return []


@pytest.fixture
def disk_store(tmp_path, reports) -> Hdf5Store:
    return Hdf5Store(tmp_path / "kept", SCHEMA, report=reports.append)


@pytest.fixture(params=["hdf5", "memory"])
def any_store(request, tmp_path, reports):
    if request.param == "memory":
        return MemoryStore(SCHEMA)
    return Hdf5Store(tmp_path / "kept", SCHEMA, report=reports.append)
