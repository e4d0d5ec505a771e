"""Writers that are killed, and writers that race."""

from __future__ import annotations

import os
import select
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from elbowroom.store import Hdf5Store, hdf5
from store.samples import SCHEMA, assert_same, key_of, record_of, temporaries
from store.worker import KILL_PORTS, N_UNITS, RACE_PORTS


class Worker:
    """The script beside this file, in a process of its own."""

    def __init__(self, folder: Path) -> None:
        source = Path(hdf5.__file__).parents[2]
        # one thread, so that it may fork
        environment = {
            **os.environ,
            "PYTHONPATH": str(source),
            "OPENBLAS_NUM_THREADS": "1",
            "OMP_NUM_THREADS": "1",
        }
        command = [sys.executable, str(Path(__file__).with_name("worker.py")), str(folder)]
        self.process = subprocess.Popen(
            command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True, bufsize=1, env=environment
        )
        assert self.process.stdout.readline() == "ready\n"

    def order(self, command: str) -> None:
        self.process.stdin.write(command + "\n")
        self.process.stdin.flush()

    def status(self) -> int:
        return int(self.process.stdout.readline().split()[1])


@pytest.fixture
def worker(disk_store):
    worker = Worker(disk_store.folder.parent)
    yield worker
    worker.process.stdin.close()
    worker.process.stdout.close()
    worker.process.wait(timeout=20)


def test_killed_writers__leave_good_units_or_none(disk_store, worker, reports):
    rng = np.random.default_rng(5)
    caught_writing = 0
    for turn in range(24):
        before = set(temporaries(disk_store.folder))
        worker.order(f"kill {rng.uniform(0.0, 0.04):.4f} {turn}")
        assert worker.status() == 9  # killed, not ended by an error of its own
        caught_writing += bool(set(temporaries(disk_store.folder)) - before)
        for unit in range(N_UNITS):
            found = disk_store.get(key_of(unit))
            if found is not None:
                assert_same(found, record_of(unit, KILL_PORTS))
                assert key_of(unit) in disk_store
    assert reports == []
    assert caught_writing >= 5  # else the kills missed the writing and showed nothing
    assert len(disk_store.keys()) >= 1  # else no process was ever done with one
    # each process has removed what the killed one before it left, however fresh; this one does so for the last
    assert len(temporaries(disk_store.folder)) <= 1
    disk_store.remove_stale()
    assert temporaries(disk_store.folder) == []


def test_two_writers__never_mix(disk_store, worker, reports):
    expected = {unit: record_of(unit, RACE_PORTS) for unit in (1, 2)}
    worker.order("race 40")
    seen = set()
    while not select.select([worker.process.stdout], [], [], 0.002)[0]:
        found = disk_store.get(key_of(0))
        if found is not None:
            assert_same(found, expected[found.attributes["unit"]])
            seen.add(found.attributes["unit"])
    assert worker.status() == 0
    assert seen == {1, 2}  # else they took turns and showed nothing
    final = disk_store.get(key_of(0))
    assert_same(final, expected[final.attributes["unit"]])
    assert disk_store.verify(key_of(0)) is None
    assert temporaries(disk_store.folder) == []
    assert reports == []


def test_two_stores__in_one_process_share_a_folder(disk_store):
    other = Hdf5Store(disk_store.folder.parent, SCHEMA)
    disk_store.put(key_of(0), record_of(0))
    assert_same(other.get(key_of(0)), record_of(0))
    assert other.remove(key_of(0))
    assert disk_store.get(key_of(0)) is None
