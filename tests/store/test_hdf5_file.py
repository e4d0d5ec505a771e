"""The file itself: open to anyone with h5py, complete before it has its name, never touched afterwards."""

from __future__ import annotations

import hashlib
import os
import subprocess
import sys
import time

import h5py
import numpy as np
import pytest

from elbowroom.base.errors import StoreError
from elbowroom.store import Hdf5Store, Record, hdf5, read_unit_file
from elbowroom.store.header import USER_BLOCK_SIZE, Header, sum_of
from store.samples import SCHEMA, SCHEMA_NEXT, assert_same, key_of, record_of, temporaries


def test_file__opens_with_plain_h5py_and_describes_itself(disk_store):
    record = record_of(0)
    record.arrays["port_name"] = np.array(["x", "y", "zé"])
    disk_store.put(key_of(0), record)
    with h5py.File(disk_store.path_of(key_of(0)), "r") as file:
        assert file.userblock_size == USER_BLOCK_SIZE
        assert set(file) == {"impedance", "position_m", "port_name", "record_attributes"}
        np.testing.assert_array_equal(file["impedance"][...], record.arrays["impedance"])
        assert [dim.label for dim in file["impedance"].dims] == ["port", "port"]
        assert [dim.label for dim in file["position_m"].dims] == ["antenna", "axis"]
        assert file["position_m"].attrs["unit"] == "m"
        assert file["position_m"].attrs["description"] == "Where the antennas stand"
        assert list(file["port_name"].asstr()[...]) == ["x", "y", "zé"]
        assert file["record_attributes"].attrs["job"] == "unit = 0\n"
        assert file.attrs["conventions"] == SCHEMA.conventions
        assert file.attrs["schema_version"] == "3"


def test_file__opens_in_a_process_without_us(disk_store):
    disk_store.put(key_of(0), record_of(0))
    code = (
        "import h5py, sys; f = h5py.File(sys.argv[1]); print(complex(f['impedance'][0, 1]));"
        "assert not [m for m in sys.modules if m.startswith('elbowroom')]"
    )
    command = [sys.executable, "-I", "-c", code, str(disk_store.path_of(key_of(0)))]
    done = subprocess.run(command, capture_output=True, text=True, check=True)
    assert complex(done.stdout) == record_of(0).arrays["impedance"][0, 1]


def test_file__header_can_be_checked_by_hand(disk_store):
    disk_store.put(key_of(0), record_of(0))
    content = disk_store.path_of(key_of(0)).read_bytes()
    lines = content[:USER_BLOCK_SIZE].decode("ascii").splitlines()
    fields = dict(line.split(" ", 1) for line in lines[:6])
    assert fields["elbowroom-unit"] == "1"
    assert fields["schema"] == SCHEMA.name
    assert fields["schema-version"] == "3"
    assert fields["key"] == key_of(0)
    assert fields["length"] == str(len(content))
    blank = content.replace(fields["sha256"].encode(), b"0" * 64, 1)
    assert hashlib.sha256(blank).hexdigest() == fields["sha256"]


def test_put__is_flushed_before_and_after_it_gets_its_name(disk_store, monkeypatch):
    disk_store.put(key_of(1), record_of(1))  # folder made, old temporaries looked for
    events = []
    fsync, replace, check = os.fsync, os.replace, hdf5.check_written

    def noted_fsync(descriptor):
        events.append(f"fsync {'folder' if os.path.isdir(f'/proc/self/fd/{descriptor}') else 'file'}")
        fsync(descriptor)

    monkeypatch.setattr(os, "fsync", noted_fsync)
    monkeypatch.setattr(os, "replace", lambda a, b: (events.append("rename"), replace(a, b)))
    monkeypatch.setattr(hdf5, "check_written", lambda *a: (events.append("read back"), check(*a)))
    disk_store.put(key_of(0), record_of(0))
    assert events == ["fsync file", "read back", "rename", "fsync folder"]


def test_put__what_does_not_read_back_is_not_stored(disk_store, monkeypatch):
    disk_store.put(key_of(0), record_of(0))
    write = hdf5.write_unit

    def bad_disk(file, *arguments):
        write(file, *arguments)
        file.seek(3000)
        byte = file.read(1)[0]
        file.seek(3000)
        file.write(bytes([byte ^ 4]))

    monkeypatch.setattr(hdf5, "write_unit", bad_disk)
    with pytest.raises(StoreError, match=r"was written and damaged: SHA-256.*nothing was stored"):
        disk_store.put(key_of(0), record_of(1))
    assert_same(disk_store.get(key_of(0)), record_of(0))
    assert temporaries(disk_store.folder) == []


def test_put__compares_what_it_reads_back_with_the_record(disk_store, monkeypatch):
    write = hdf5.write_unit
    monkeypatch.setattr(hdf5, "write_unit", lambda file, schema, key, record: write(file, schema, key, record_of(1)))
    with pytest.raises(StoreError, match="does not read back as written: impedance, position_m, record_attributes"):
        disk_store.put(key_of(0), record_of(0))


def test_put__survives_its_temporary_being_swept_away(disk_store, monkeypatch):
    check = hdf5.check_written
    lost = []

    def slow(path, *arguments):
        if not lost:
            lost.append(path)
            path.unlink()
        check(path, *arguments)

    monkeypatch.setattr(hdf5, "check_written", slow)
    disk_store.put(key_of(0), record_of(0))
    assert len(lost) == 1
    assert_same(disk_store.get(key_of(0)), record_of(0))


def test_put__interrupted_leaves_nothing_behind(disk_store, monkeypatch):
    def interrupted(*_):
        raise KeyboardInterrupt

    monkeypatch.setattr(hdf5, "check_written", interrupted)
    with pytest.raises(KeyboardInterrupt):
        disk_store.put(key_of(0), record_of(0))
    assert list(disk_store.folder.iterdir()) == []


def test_put__removes_old_temporaries_only(disk_store):
    disk_store.folder.mkdir(parents=True)
    old, young = disk_store.folder / ".writing-old", disk_store.folder / ".writing-young"
    for path in (old, young):
        path.write_bytes(b"half a file")
    long_ago = time.time() - 7200.0
    os.utime(old, (long_ago, long_ago))
    assert disk_store.keys() == []
    disk_store.put(key_of(0), record_of(0))
    assert temporaries(disk_store.folder) == [young]
    assert disk_store.remove_stale(older_than_seconds=-1.0) == [young]
    assert disk_store.keys() == [key_of(0)]


def test_put__same_record_twice_gives_the_same_arrays(disk_store):
    disk_store.put(key_of(0), record_of(0))
    disk_store.put(key_of(1), record_of(0))
    assert_same(disk_store.get(key_of(0)), disk_store.get(key_of(1)))


def test_put__large_array(disk_store):
    record = record_of(0, n_ports=1500)  # 36 MB
    disk_store.put(key_of(0), record)
    assert_same(disk_store.get(key_of(0)), record)
    assert disk_store.path_of(key_of(0)).stat().st_size > record.arrays["impedance"].nbytes


def test_versions__share_a_folder_without_seeing_each_other(tmp_path, reports):
    now = Hdf5Store(tmp_path, SCHEMA, report=reports.append)
    later = Hdf5Store(tmp_path, SCHEMA_NEXT, report=reports.append)
    now.put(key_of(0), record_of(0))
    assert key_of(0) not in later
    later.put(key_of(0), record_of(1))
    assert_same(now.get(key_of(0)), record_of(0))
    assert_same(later.get(key_of(0)), record_of(1))
    assert reports == []


def test_versions__other_version_is_absent_and_untouched(disk_store, tmp_path, reports):
    later = Hdf5Store(tmp_path / "kept", SCHEMA_NEXT)
    later.put(key_of(0), record_of(1))
    path = disk_store.path_of(key_of(0))
    path.parent.mkdir()
    content = later.path_of(key_of(0)).read_bytes()
    path.write_bytes(content)
    said = "found schema sample-record version 4, expected sample-record version 3"
    assert disk_store.get(key_of(0)) is None
    assert key_of(0) not in disk_store
    assert disk_store.keys() == []
    assert disk_store.verify(key_of(0)) == said
    with pytest.raises(StoreError, match=f"{path}: {said}"):
        disk_store.read_file(path)
    assert path.read_bytes() == content
    assert reports == []
    disk_store.put(key_of(0), record_of(0))
    assert_same(disk_store.get(key_of(0)), record_of(0))
    assert len(reports) == 1
    assert reports[0].moved_to.read_bytes() == content


def test_read_file__reads_a_unit_anywhere(disk_store, tmp_path):
    disk_store.put(key_of(0), record_of(0))
    copied = tmp_path / "handed over.h5"
    copied.write_bytes(disk_store.path_of(key_of(0)).read_bytes())
    assert_same(read_unit_file(copied, SCHEMA), record_of(0))
    with pytest.raises(StoreError, match="cannot be read: No such file"):
        read_unit_file(tmp_path / "missing.h5", SCHEMA)
    copied.write_text("plain text")
    with pytest.raises(StoreError, match="10 bytes long, shorter than the header"):
        disk_store.read_file(copied)
    assert copied.exists()


def test_contains__thousands_of_units_in_seconds(disk_store):
    disk_store.put(key_of(0), record_of(0))
    content = disk_store.path_of(key_of(0)).read_bytes()
    body = content[USER_BLOCK_SIZE:]
    wanted = [key_of(unit) for unit in range(2000)]
    for key in wanted:
        head = Header(SCHEMA.name, SCHEMA.version, key, len(content))
        disk_store.path_of(key).write_bytes(head.to_bytes() + body)
    started = time.perf_counter()
    assert disk_store.keys() == sorted(wanted)
    assert all(key in disk_store for key in wanted)
    assert time.perf_counter() - started < 5.0


def test_contains__reads_the_header_only(disk_store, monkeypatch):
    disk_store.put(key_of(0), record_of(0))
    summed = []
    monkeypatch.setattr("elbowroom.store.unitfile.sum_of", lambda *a: (summed.append(1), sum_of(*a))[1])
    assert key_of(0) in disk_store
    assert disk_store.keys() == [key_of(0)]
    assert summed == []
    disk_store.get(key_of(0))
    assert summed == [1]


def test_keys__other_files_are_not_units(disk_store):
    disk_store.put(key_of(0), record_of(0))
    (disk_store.folder / "notes.h5").write_text("x")
    (disk_store.folder / "notes.txt").write_text("x")
    disk_store.path_of(key_of(1)).write_text("x")
    assert disk_store.keys() == [key_of(0)]


def test_store__optional_array_left_out(disk_store):
    record = record_of(0)
    assert "weight" not in record.arrays
    disk_store.put(key_of(0), record)
    assert "weight" not in disk_store.get(key_of(0)).arrays
    disk_store.put(key_of(0), Record({**record.arrays, "weight": np.array(2.5)}))
    assert disk_store.get(key_of(0)).arrays["weight"] == 2.5
