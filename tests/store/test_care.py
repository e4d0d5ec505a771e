"""Looking at a store does not hand HDF5 what is damaged: it may never come back from it."""

from __future__ import annotations

import h5py
import numpy as np

from elbowroom.store import care
from elbowroom.store.care import entries
from elbowroom.store.header import USER_BLOCK_SIZE
from store.samples import key_of, record_of


def test_entries__damage_of_small_files_is_seen_before_hdf5_is_asked(disk_store, monkeypatch):
    disk_store.put(key_of(0), record_of(0))
    path = disk_store.path_of(key_of(0))
    sound = path.read_bytes()
    (unit,) = entries(disk_store.folder.parent)
    assert unit.problem is None
    opened = []
    real = h5py.File
    monkeypatch.setattr(h5py, "File", lambda *a, **k: opened.append(a) or real(*a, **k))
    for byte in np.linspace(USER_BLOCK_SIZE, len(sound) - 1, 40).astype(int):
        changed = bytearray(sound)
        changed[byte] ^= 4
        path.write_bytes(changed)
        (unit,) = entries(disk_store.folder.parent)
        assert "SHA-256" in unit.problem
    assert opened == []


def test_entries__of_large_files_that_hdf5_cannot_follow_are_damaged(disk_store, monkeypatch):
    disk_store.put(key_of(0), record_of(0))
    path = disk_store.path_of(key_of(0))
    changed = bytearray(path.read_bytes())
    monkeypatch.setattr(care, "SUMMED_ANYWAY_BYTES", 0)
    changed[USER_BLOCK_SIZE + 54] ^= 4  # an address in HDF5's first block, far beyond what a file can be
    path.write_bytes(changed)
    (unit,) = entries(disk_store.folder.parent)
    assert unit.problem is not None
