"""Damaged, cut off and foreign files: reported, set aside, never trusted, never a crash."""

from __future__ import annotations

import errno
import os
import resource
import warnings

import h5py
import numpy as np
import pytest

from elbowroom.base.arrays import ArraySpec
from elbowroom.base.errors import StoreError
from elbowroom.store import Hdf5Store, Record, Schema, StoreDamageWarning, hdf5
from elbowroom.store.header import USER_BLOCK_SIZE, Header, sum_of
from store.samples import SCHEMA, SCHEMA_NEXT, assert_same, key_of, record_of

KEY = key_of(0)


@pytest.fixture
def sound(disk_store) -> bytes:
    disk_store.put(KEY, record_of(0))
    return disk_store.path_of(KEY).read_bytes()


def _assert_set_aside(store, content: bytes | None, reports: list, reason: str = "") -> None:
    """Read a file that cannot be trusted and check all that should follow."""
    path = store.path_of(KEY)
    del reports[:]
    assert store.verify(KEY) is not None
    assert os.path.lexists(path)
    assert store.get(KEY) is None
    assert not os.path.lexists(path)
    assert KEY not in store
    (report,) = reports
    assert report.path == path
    assert reason in report.reason
    assert report.moved_to.parent == store.folder / "set-aside"
    assert report.reason in report.moved_to.with_suffix(".txt").read_text()
    if content is not None:
        assert report.moved_to.read_bytes() == content


def _flipped(content: bytes, bit: int) -> bytes:
    changed = bytearray(content)
    changed[bit // 8] ^= 1 << (bit % 8)
    return bytes(changed)


def test_get__any_flipped_bit_is_noticed(disk_store, sound, reports):
    with h5py.File(disk_store.path_of(KEY), "r") as file:
        ranges = [(d.id.get_offset(), d.id.get_storage_size()) for d in (file["impedance"], file["position_m"])]
    numbers = {byte for start, size in ranges for byte in range(start, start + size)}
    at_numbers = record_of(0).arrays["impedance"].tobytes()
    assert sound[ranges[0][0] : ranges[0][0] + ranges[0][1]] == at_numbers
    rng = np.random.default_rng(20)
    bits = rng.choice(8 * len(sound), 300, replace=False)
    for bit in bits.tolist():
        content = _flipped(sound, bit)
        disk_store.path_of(KEY).write_bytes(content)
        _assert_set_aside(disk_store, content, reports)
    # the sample must have met the header, the numbers and HDF5's own structures
    met = {bit // 8 for bit in bits.tolist()}
    assert min(met) < USER_BLOCK_SIZE
    assert met & numbers
    assert len(met - numbers - set(range(USER_BLOCK_SIZE))) > 50
    disk_store.path_of(KEY).write_bytes(sound)
    assert_same(disk_store.get(KEY), record_of(0))


def test_verify__a_flip_in_any_byte_of_the_header_is_noticed(disk_store, sound):
    path = disk_store.path_of(KEY)
    version = sound.index(b"schema-version 3") + len("schema-version ")
    chosen = 8 * np.arange(USER_BLOCK_SIZE) + np.random.default_rng(22).integers(0, 8, USER_BLOCK_SIZE)
    for bit in [*range(8 * version, 8 * version + 8), *chosen.tolist()]:
        path.write_bytes(_flipped(sound, bit))
        problem = disk_store.verify(KEY)
        # a flipped digit of the version must not pass for a sound file of that version
        assert problem is not None, bit
        assert "found schema" not in problem, bit


def test_get__any_cut_or_added_byte_is_noticed(disk_store, sound, reports):
    rng = np.random.default_rng(21)
    lengths = [0, 1, 511, USER_BLOCK_SIZE - 1, USER_BLOCK_SIZE, USER_BLOCK_SIZE + 96, len(sound) - 1]
    lengths += rng.integers(1, len(sound), 60).tolist()
    for length in lengths:
        disk_store.path_of(KEY).write_bytes(sound[:length])
        _assert_set_aside(disk_store, sound[:length], reports, "bytes long")
    for extra in (b"\0", b"\n" * 512, sound):
        disk_store.path_of(KEY).write_bytes(sound + extra)
        _assert_set_aside(disk_store, sound + extra, reports, "where its header says")


def test_get__a_file_with_holes_is_noticed(disk_store, sound, reports):
    # length allotted, content never written: what a power failure can leave
    for start in range(0, len(sound), 512):
        content = sound[:start] + bytes(len(sound) - start)
        if content != sound:
            disk_store.path_of(KEY).write_bytes(content)
            _assert_set_aside(disk_store, content, reports)


def test_get__a_unit_set_aside_can_be_put_again(disk_store, sound, reports):
    disk_store.path_of(KEY).write_bytes(sound[:-1])
    assert disk_store.get(KEY) is None
    disk_store.put(KEY, record_of(0))
    assert_same(disk_store.get(KEY), record_of(0))
    assert disk_store.keys() == [KEY]
    assert len(reports) == 1


def test_get__plain_text_is_foreign(disk_store, reports):
    disk_store.put(KEY, record_of(0))
    for text, reason in (
        (b"", "0 bytes long"),
        (b"hello", "5 bytes long"),
        (b"hello " * 400, "does not begin with"),
    ):
        disk_store.path_of(KEY).write_bytes(text)
        assert KEY not in disk_store
        _assert_set_aside(disk_store, text, reports, reason)


def test_get__an_hdf5_file_of_somebody_else_is_foreign(disk_store, reports):
    disk_store.put(KEY, record_of(0))
    with h5py.File(disk_store.path_of(KEY), "w") as file:
        file["impedance"] = np.zeros((3, 3), dtype=complex)
    content = disk_store.path_of(KEY).read_bytes()
    assert KEY not in disk_store
    _assert_set_aside(disk_store, content, reports, "does not begin with the header of a stored unit")


def test_get__a_unit_under_another_name_is_foreign(disk_store, reports):
    disk_store.put(key_of(1), record_of(1))
    content = disk_store.path_of(key_of(1)).read_bytes()
    disk_store.path_of(KEY).write_bytes(content)
    assert KEY not in disk_store
    _assert_set_aside(disk_store, content, reports, f"holds the unit {key_of(1)}")
    assert_same(disk_store.get(key_of(1)), record_of(1))


@pytest.mark.parametrize("kind", ["folder", "pipe", "link to itself"])
def test_get__what_is_no_file_is_foreign(disk_store, reports, kind):
    disk_store.put(KEY, record_of(0))
    path = disk_store.path_of(KEY)
    make = {"folder": os.mkdir, "pipe": os.mkfifo, "link to itself": lambda p: os.symlink(p, p)}[kind]
    path.unlink()
    make(path)
    assert KEY not in disk_store
    _assert_set_aside(disk_store, None, reports)
    make(path)
    disk_store.put(KEY, record_of(0))
    assert_same(disk_store.get(KEY), record_of(0))


def test_put__does_not_overwrite_foreign_files(disk_store, reports):
    disk_store.put(key_of(1), record_of(1))
    disk_store.path_of(KEY).write_text("somebody's notes")
    disk_store.put(KEY, record_of(0))
    assert_same(disk_store.get(KEY), record_of(0))
    (report,) = reports
    assert report.moved_to.read_text() == "somebody's notes"


def test_get__right_sum_around_nonsense_is_foreign(disk_store, sound, reports):
    path = disk_store.path_of(KEY)
    path.write_bytes(bytes(USER_BLOCK_SIZE) + b"not HDF5 at all" * 100)
    header = Header(SCHEMA.name, SCHEMA.version, KEY, path.stat().st_size)
    with open(path, "r+b", buffering=0) as file:
        digest = sum_of(file, header)
        file.seek(0)
        file.write(Header(SCHEMA.name, SCHEMA.version, KEY, header.length, digest).to_bytes())
    _assert_set_aside(disk_store, None, reports, "its content cannot be understood")


def test_get__a_unit_of_other_arrays_is_foreign(disk_store, tmp_path, reports):
    impostor = Schema(SCHEMA.name, SCHEMA.version, (ArraySpec("impedance", ("port",), "f", "ohm", ""),))
    Hdf5Store(tmp_path / "kept", impostor).put(KEY, Record({"impedance": np.zeros(2)}))
    reason = "'impedance': expected a type of kind 'c', got float64"
    _assert_set_aside(disk_store, None, reports, reason)


def test_get__warns_where_nobody_listens(tmp_path):
    store = Hdf5Store(tmp_path, SCHEMA)
    for unit in (0, 1):
        store.put(key_of(unit), record_of(unit))
        store.path_of(key_of(unit)).write_text("x")
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("default")
        assert store.get(key_of(0)) is None
        assert store.get(key_of(1)) is None
    assert [w.category for w in caught] == [StoreDamageWarning, StoreDamageWarning]
    assert str(store.path_of(key_of(1))) in str(caught[1].message)
    assert "set aside as" in str(caught[1].message)


def test_get__gives_back_a_good_unit_that_arrived_meanwhile(disk_store, sound, reports, monkeypatch):
    read = hdf5.read_unit
    path = disk_store.path_of(KEY)

    def overtaken(file, *arguments):
        try:
            return read(file, *arguments)
        finally:
            Hdf5Store(path.parents[1], SCHEMA).put(KEY, record_of(0))

    path.write_bytes(_flipped(sound, 30_000))
    monkeypatch.setattr(hdf5, "read_unit", overtaken)
    assert disk_store.get(KEY) is None
    monkeypatch.undo()
    assert_same(disk_store.get(KEY), record_of(0))
    assert reports == []
    assert list((disk_store.folder / "set-aside").iterdir()) == []


def test_get__a_file_the_disk_cannot_read_is_set_aside(disk_store, sound, reports, monkeypatch):
    def bad_sector(*_):
        raise OSError(errno.EIO, os.strerror(errno.EIO))

    monkeypatch.setattr(hdf5, "read_unit", bad_sector)
    assert disk_store.get(KEY) is None
    assert reports[0].reason == f"cannot be read: {os.strerror(errno.EIO)}"
    assert reports[0].moved_to.read_bytes() == sound


def test_get__trouble_of_the_machine_is_not_blamed_on_the_file(disk_store, sound, reports):
    soft, hard = resource.getrlimit(resource.RLIMIT_NOFILE)
    lowest_free = os.dup(0)
    os.close(lowest_free)
    resource.setrlimit(resource.RLIMIT_NOFILE, (lowest_free, hard))
    try:
        with pytest.raises(StoreError, match="cannot be read: Too many open files"):
            disk_store.get(KEY)
    finally:
        resource.setrlimit(resource.RLIMIT_NOFILE, (soft, hard))
    assert reports == []
    assert_same(disk_store.get(KEY), record_of(0))


def test_verify__moves_nothing(disk_store, sound):
    path = disk_store.path_of(KEY)
    path.write_bytes(_flipped(sound, 8 * len(sound) - 1))
    assert "damaged: SHA-256" in disk_store.verify(KEY)
    assert KEY in disk_store  # header and length are right; get is what finds out
    assert path.exists()


def test_read_file__damage_is_an_error_and_moves_nothing(disk_store, sound):
    path = disk_store.path_of(KEY)
    path.write_bytes(_flipped(sound, 30_000))
    with pytest.raises(StoreError, match=f"{path}: damaged: SHA-256") as caught:
        disk_store.read_file(path)
    assert caught.value.path == str(path)
    assert path.exists()


def test_get__a_damaged_unit_of_another_version_is_damaged(disk_store, tmp_path, reports):
    later = Hdf5Store(tmp_path / "kept", SCHEMA_NEXT)
    later.put(KEY, record_of(0))
    content = _flipped(later.path_of(KEY).read_bytes(), 30_000)
    disk_store.folder.mkdir()
    disk_store.path_of(KEY).write_bytes(content)
    _assert_set_aside(disk_store, content, reports, "damaged")
