"""Places that cannot be written: clear errors, nothing stored is lost, nothing half-written stays."""

from __future__ import annotations

import os
import subprocess
from pathlib import Path

import pytest

from elbowroom.base.errors import StoreError
from elbowroom.store import Hdf5Store
from store.samples import (
    SCHEMA,
    assert_same,
    key_of,
    limited_disk,
    record_of,
    temporaries,
    try_mount,
    unmount,
)

FULL = "no space left on the device|File too large"


@pytest.mark.parametrize("below", ["", "deeper/still"])
def test_parent_is_a_file(tmp_path, below):
    (tmp_path / "taken").write_text("a file")
    store = Hdf5Store(tmp_path / "taken" / below, SCHEMA)
    message = f"{tmp_path / 'taken'} is a file; expected a folder"
    for call in (
        lambda: store.put(key_of(0), record_of(0)),
        store.check_writable,
        store.remove_stale,
        store.keys,
        lambda: store.get(key_of(0)),
        lambda: store.verify(key_of(0)),
        lambda: key_of(0) in store,
        lambda: store.remove(key_of(0)),
    ):
        with pytest.raises(StoreError, match=message) as caught:
            call()
        assert str(tmp_path) in caught.value.path
    assert (tmp_path / "taken").read_text() == "a file"


def test_folder_name_is_taken_by_a_file(disk_store):
    disk_store.folder.parent.mkdir()
    disk_store.folder.write_text("a file")
    with pytest.raises(StoreError, match=r"cannot be created: .* is a file; expected a folder"):
        disk_store.put(key_of(0), record_of(0))


def test_folder_cannot_be_created():
    store = Hdf5Store("/proc/nowhere/to/be", SCHEMA)
    assert store.get(key_of(0)) is None
    for call in (store.check_writable, lambda: store.put(key_of(0), record_of(0))):
        with pytest.raises(StoreError, match="the folder cannot be created: No such file or directory"):
            call()


def test_check_writable__leaves_an_empty_folder(disk_store):
    disk_store.check_writable()
    assert list(disk_store.folder.iterdir()) == []


def test_reading__creates_nothing(disk_store):
    assert disk_store.get(key_of(0)) is None
    assert disk_store.keys() == []
    assert not disk_store.folder.parent.exists()


@pytest.mark.parametrize("mount", [True, False], ids=["small disk where allowed", "limit on files"])
def test_full_disk__loses_nothing(tmp_path, reports, mount):
    with limited_disk(tmp_path / "disk", mount=mount) as leave:
        store = Hdf5Store(tmp_path / "disk" / "kept", SCHEMA, report=reports.append)
        store.put(key_of(0), record_of(0))
        leave(100_000)
        with pytest.raises(StoreError, match=FULL) as caught:
            store.put(key_of(1), record_of(1, n_ports=250))  # 1 MB of numbers
        assert caught.value.path == str(store.path_of(key_of(1)))
        with pytest.raises(StoreError, match=FULL):
            store.put(key_of(0), record_of(1, n_ports=250))
        assert temporaries(store.folder) == []
        assert store.keys() == [key_of(0)]
        assert_same(store.get(key_of(0)), record_of(0))
        store.put(key_of(2), record_of(2))  # what is small enough still fits
        leave(None)
        store.put(key_of(1), record_of(1, n_ports=100))
        assert_same(store.get(key_of(1)), record_of(1, n_ports=100))
        assert reports == []


@pytest.mark.parametrize("mount", [True, False], ids=["small disk where allowed", "limit on files"])
def test_full_disk__at_any_moment_of_a_write(tmp_path, reports, mount):
    with limited_disk(tmp_path / "disk", mount=mount) as leave:
        store = Hdf5Store(tmp_path / "disk" / "kept", SCHEMA, report=reports.append)
        store.put(key_of(0), record_of(0, n_ports=40))
        n_bytes = store.path_of(key_of(0)).stat().st_size
        outcomes = []
        for room in range(0, n_bytes + 3 * 4096, 2048):
            leave(room)
            try:
                store.put(key_of(0), record_of(1, n_ports=40))
                outcomes.append("stored")
            except StoreError as error:
                assert "no space left" in str(error) or "File too large" in str(error)
                outcomes.append("refused")
            leave(None)
            expected = record_of(1 if outcomes[-1] == "stored" else 0, n_ports=40)
            assert_same(store.get(key_of(0)), expected)
            assert temporaries(store.folder) == []
            store.put(key_of(0), record_of(0, n_ports=40))
        assert outcomes[0] == "refused"
        assert outcomes[-1] == "stored"
        assert outcomes.count("refused") >= n_bytes // 4096
        assert reports == []


def test_read_only_disk(tmp_path, reports):
    disk = tmp_path / "disk"
    mounted = try_mount(disk)
    store = Hdf5Store(disk, SCHEMA, report=reports.append)
    store.put(key_of(0), record_of(0))
    store.put(key_of(1), record_of(1))
    store.path_of(key_of(1)).write_text("damaged")
    if mounted:
        message = "the disk is mounted read-only"
        subprocess.run(["mount", "-o", "remount,ro", str(disk)], check=True)
    elif os.geteuid() != 0:
        message = "permission denied"
        os.chmod(store.folder, 0o555)
    else:  # neither mounts nor permissions: the kernel's own folder refuses even the administrator
        message = "cannot be created"
        store, disk = Hdf5Store("/proc/self/kept", SCHEMA, report=reports.append), Path("/proc/self/kept")
    try:
        for call in (store.check_writable, lambda: store.put(key_of(0), record_of(2))):
            with pytest.raises(StoreError, match=message):
                call()
        if disk.is_dir():
            with pytest.raises(StoreError, match=f"cannot be removed: {message}"):
                store.remove(key_of(0))
            assert_same(store.get(key_of(0)), record_of(0))
            assert store.get(key_of(1)) is None  # damaged, and cannot be moved: still no crash
            (report,) = reports
            assert report.moved_to is None
            assert "left in place" in str(report)
            assert store.path_of(key_of(1)).exists()
    finally:
        if mounted:
            unmount(disk)
        elif disk.is_dir():
            os.chmod(store.folder, 0o755)
