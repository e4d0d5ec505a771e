"""A kill -9 before any line of the store's own code: what was there stays good, and whoever comes next can go on at once."""

from __future__ import annotations

import numpy as np
import pytest

from elbowroom.store import Hdf5Store
from elbowroom.store.packs import read_contents, write_pack
from elbowroom.store.records import same_bits
from store.samples import SCHEMA, assert_same, key_of, record_of, temporaries
from store.test_processes import Worker

N_STRIKES = 30


@pytest.fixture
def worker(disk_store):
    worker = Worker(disk_store.folder.parent)
    yield worker
    worker.process.stdin.close()
    worker.process.stdout.close()
    worker.process.wait(timeout=20)


def _prepare(store: Hdf5Store, damaged: bytes) -> None:
    store.put(key_of(0), record_of(0))
    store.remove(key_of(1))
    store.path_of(key_of(2)).write_bytes(damaged)


@pytest.mark.parametrize("deed", ["replace_unit", "claim_and_release", "set_aside", "add_pack", "make_pack"])
def test_kill_before_any_line(disk_store, worker, reports, deed):
    root = disk_store.folder.parent
    for unit in range(3):
        disk_store.put(key_of(unit), record_of(unit))
    write_pack(root / "carried.pack", [disk_store.path_of(key_of(unit)) for unit in range(3)])
    damaged = disk_store.path_of(key_of(2)).read_bytes()[:-1]
    _prepare(disk_store, damaged)
    worker.order(f"lines {deed}")
    n_lines = worker.status()
    assert n_lines > 30
    # every line near the end, where names change, and some of all others
    rng = np.random.default_rng(8)
    lines = sorted({*range(n_lines - 12, n_lines), *map(int, rng.integers(0, n_lines, N_STRIKES))})
    new_seen = old_seen = 0
    for line in lines:
        _prepare(disk_store, damaged)
        worker.order(f"strike {deed} {line}")
        assert worker.status() == 9, line
        # no unit but whole ones, each what it was or what it was to be
        found = Hdf5Store(root, SCHEMA, report=reports.append)
        for unit in (0, 1):
            record = found.get(key_of(unit))
            if record is None:
                assert unit == 1
                continue
            new = same_bits(record.arrays["impedance"], record_of(1).arrays["impedance"])
            assert_same(record, record_of(1 if new else 0))
            assert unit == 0 or new
            new_seen += new
            old_seen += not new
        assert reports == []
        assert len(read_contents(root / "carried.pack")) == 3
        if deed == "make_pack" and (root / "new.pack").exists():
            assert len(read_contents(root / "new.pack")) == 1
            (root / "new.pack").unlink()
        # whoever comes next
        with found.claim(key_of(0)) as claim:
            assert claim is not None
            found.put(key_of(0), record_of(0))
        if deed == "set_aside":  # the damaged file is where it was or where it goes, as it was
            places = [found.path_of(key_of(2)), *(found.folder / "set-aside").glob("*.h5")]
            assert damaged in [path.read_bytes() for path in places if path.exists()]
            for path in places[1:]:
                path.unlink()
        found.remove_stale()
        assert temporaries(found.folder) == []
        assert list(found.folder.glob("*.claim")) == []
    assert old_seen > 0
    if deed in ("replace_unit", "add_pack"):
        assert new_seen > 0
