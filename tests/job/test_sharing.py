"""Runs that share a store: nobody waits in vain, nothing is solved twice."""

from __future__ import annotations

import threading

import numpy as np
import pytest

from elbowroom.base.arrays import ArraySpec
from elbowroom.base.errors import SolveError
from elbowroom.job import sharing
from elbowroom.job.sharing import worked_elsewhere, working_on
from elbowroom.store import Hdf5Store, MemoryStore, Record, Schema, content_key

SCHEMA = Schema("numbers", 1, (ArraySpec("x", ("n",), "f", "m", "numbers"),))
KEY = content_key("a unit")
RECORD = Record({"x": np.arange(3.0)})


@pytest.fixture(params=["hdf5", "memory"])
def store(request, tmp_path, monkeypatch):
    monkeypatch.setattr(sharing, "LOOK_AGAIN_SECONDS", 0.01)
    return Hdf5Store(tmp_path, SCHEMA) if request.param == "hdf5" else MemoryStore(SCHEMA)


def test_working_on__claims_what_is_not_there(store):
    with working_on(store, KEY) as found:
        assert found is None
        assert store.claimed(KEY) is not None
        store.put(KEY, RECORD)
    assert store.claimed(KEY) is None
    with working_on(store, KEY) as found:
        assert np.array_equal(found.arrays["x"], RECORD.arrays["x"])
        assert store.claimed(KEY) is None


def test_working_on__lets_go_when_the_work_fails(store):
    with pytest.raises(SolveError), working_on(store, KEY):
        raise SolveError("singular")
    assert store.claimed(KEY) is None


@pytest.mark.parametrize("outcome", ["stores it", "gives up"])
def test_working_on__waits_for_the_other(store, outcome):
    claim = store.claim(KEY)
    told = []

    def other(what: str, fraction: float) -> None:
        told.append(what)
        assert fraction == 0.0
        if len(told) == 3:
            if outcome == "stores it":
                store.put(KEY, RECORD)
            claim.release()

    with working_on(store, KEY, other) as found:
        assert (found is not None) is (outcome == "stores it")
    assert len(told) == 3
    assert "waiting for process" in told[0]


def test_working_on__two_at_once_solve_each_unit_once(store):
    keys = [content_key(n) for n in range(12)]
    solved: list[str] = []

    def run(order) -> None:
        for key in order:
            with working_on(store, key) as found:
                if found is None:
                    solved.append(key)
                    store.put(key, RECORD)

    threads = [threading.Thread(target=run, args=(order,)) for order in (keys, keys[::-1], keys)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(30.0)
        assert not thread.is_alive()
    assert sorted(solved) == sorted(keys)


def test_worked_elsewhere__by_claims_on_what_is_missing(store):
    keys = [content_key(n) for n in range(4)]
    store.put(keys[1], RECORD)
    with store.claim(keys[0]), store.claim(keys[1]):
        # what is in the store needs no waiting, claimed or not
        assert [worked_elsewhere(store, [key]) for key in keys] == [True, False, False, False]
        assert worked_elsewhere(store, keys)
    assert not worked_elsewhere(store, keys)
