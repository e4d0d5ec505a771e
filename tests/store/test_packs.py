"""Units in one file: what comes out is what went in, and no byte can change unseen."""

from __future__ import annotations

import hashlib
import os
import tarfile

import numpy as np
import pytest

from elbowroom.base.errors import StoreError
from elbowroom.store import Hdf5Store
from elbowroom.store.care import unit_paths
from elbowroom.store.packs import read_contents, unpack, write_pack
from store.samples import SCHEMA, SCHEMA_NEXT, assert_same, key_of, limited_disk, record_of, temporaries

N_UNITS = 4


@pytest.fixture
def full_store(disk_store) -> Hdf5Store:
    for unit in range(N_UNITS):
        disk_store.put(key_of(unit), record_of(unit))
    Hdf5Store(disk_store.folder.parent, SCHEMA_NEXT).put(key_of(0), record_of(0))
    return disk_store


@pytest.fixture
def pack(full_store, tmp_path):
    path = tmp_path / "carried.pack"
    write_pack(path, list(unit_paths(full_store.folder.parent)))
    return path


def test_unpack__gives_every_unit_byte_for_byte(full_store, pack, tmp_path, reports):
    told = []
    added = unpack(pack, tmp_path / "other", report=reports.append, each=lambda unit, is_new: told.append(is_new))
    assert len(added) == N_UNITS + 1
    assert all(told)
    for path in unit_paths(full_store.folder.parent):
        assert (tmp_path / "other" / path.parent.name / path.name).read_bytes() == path.read_bytes()
    other = Hdf5Store(tmp_path / "other", SCHEMA, report=reports.append)
    for unit in range(N_UNITS):
        assert_same(other.get(key_of(unit)), record_of(unit))
    assert temporaries(other.folder) == []
    assert reports == []


def test_unpack__leaves_what_is_there_and_replaces_what_is_damaged(full_store, pack, tmp_path, reports):
    folder = tmp_path / "other"
    other = Hdf5Store(folder, SCHEMA, report=reports.append)
    unpack(pack, folder)
    kept = other.path_of(key_of(0)).stat().st_ino
    damaged = bytearray(other.path_of(key_of(1)).read_bytes())
    damaged[len(damaged) // 2] ^= 4
    other.path_of(key_of(1)).write_bytes(damaged)
    other.remove(key_of(2))
    other.path_of(key_of(3)).unlink()
    other.path_of(key_of(3)).mkdir()
    added = unpack(pack, folder, report=reports.append)
    assert {unit.key for unit in added} == {key_of(n) for n in (1, 2, 3)}
    assert other.path_of(key_of(0)).stat().st_ino == kept
    assert [other.verify(key_of(n)) for n in range(N_UNITS)] == [None] * N_UNITS
    reasons = {report.path: report.reason for report in reports}
    assert "damaged: SHA-256" in reasons.pop(other.path_of(key_of(1)))
    assert reasons == {other.path_of(key_of(3)): "not an ordinary file"}
    assert unpack(pack, folder) == []


def test_pack__is_a_tar_and_the_same_units_give_the_same_file(full_store, pack, tmp_path):
    with tarfile.open(pack, "r:") as tar:
        names = tar.getnames()
        assert names[0] == "contents.json"
        assert names[-1] == "sha256"
        for name in names[1:-1]:
            assert tar.extractfile(name).read() == (full_store.folder.parent / name).read_bytes()
        last = tar.getmember("sha256")
        told = tar.extractfile("sha256").read().decode()
    assert told == hashlib.sha256(pack.read_bytes()[: last.offset]).hexdigest() + "\n"
    again = tmp_path / "again.pack"
    write_pack(again, list(reversed(list(unit_paths(full_store.folder.parent)))))
    assert again.read_bytes() == pack.read_bytes()


def test_any_flipped_bit_or_cut__is_noticed_and_nothing_is_added(pack, tmp_path):
    sound = pack.read_bytes()
    rng = np.random.default_rng(3)
    bits = [*rng.choice(8 * len(sound), 150, replace=False), *(8 * rng.integers(0, 512, 20)), 8 * len(sound) - 1]
    # the zeros that pad the end, too
    bits += [8 * (len(sound) - 600), 8 * (len(sound) - 1500)]
    for bit in map(int, bits):
        content = bytearray(sound)
        content[bit // 8] ^= 1 << (bit % 8)
        pack.write_bytes(content)
        with pytest.raises(StoreError, match="damaged, or no pack of this program"):
            unpack(pack, tmp_path / "other")
    for length in [0, 1, 511, 512, 513, len(sound) - 1, len(sound) - 512, *rng.integers(1, len(sound), 30)]:
        pack.write_bytes(sound[:length])
        with pytest.raises(StoreError, match="damaged, or no pack of this program"):
            unpack(pack, tmp_path / "other")
    pack.write_bytes(sound + b"\0")
    with pytest.raises(StoreError, match="damaged, or no pack of this program"):
        unpack(pack, tmp_path / "other")
    assert not (tmp_path / "other").exists()
    pack.write_bytes(sound)
    assert len(read_contents(pack)) == N_UNITS + 1


@pytest.mark.parametrize("name", ["../evil", "/etc/passwd", "sample-record-v3/../../x.h5", "sample-record-v3/" + "0" * 64])
def test_unpack__takes_no_other_names(tmp_path, name):
    # a tar of the same make that names something else
    path = tmp_path / "odd.pack"
    content = b"x"
    sha = hashlib.sha256(content).hexdigest()
    from elbowroom.store import packs

    unit = packs.PackedUnit(name, 1, sha)
    contents = packs._contents([unit])
    body = packs._head("contents.json", len(contents)) + packs._padded(contents) + packs._head(name, 1) + packs._padded(content)
    path.write_bytes(body + packs._tail(hashlib.sha256(body).hexdigest()))
    with pytest.raises(StoreError, match=r"its contents.json is not as this program writes it"):
        unpack(path, tmp_path / "other")
    assert not (tmp_path / "other").exists()


def test_unpack__a_pack_of_right_sums_around_a_unit_that_is_none(full_store, tmp_path):
    from elbowroom.store import packs

    content = b"no unit at all" * 100
    name = f"{full_store.folder.name}/{key_of(9)}.h5"
    unit = packs.PackedUnit(name, len(content), hashlib.sha256(content).hexdigest())
    contents = packs._contents([unit])
    head = packs._head("contents.json", len(contents)) + packs._padded(contents)
    body = head + packs._head(name, len(content)) + packs._padded(content)
    path = tmp_path / "odd.pack"
    path.write_bytes(body + packs._tail(hashlib.sha256(body).hexdigest()))
    with pytest.raises(StoreError, match="not added: does not begin with the header of a stored unit"):
        unpack(path, full_store.folder.parent)
    assert key_of(9) not in full_store
    assert temporaries(full_store.folder) == []


def test_write_pack__names_every_damaged_unit_and_writes_nothing(full_store, tmp_path):
    for unit in (1, 3):
        path = full_store.path_of(key_of(unit))
        content = bytearray(path.read_bytes())
        content[-1] ^= 1
        path.write_bytes(content)
    with pytest.raises(StoreError, match="not packed, because units are damaged") as caught:
        write_pack(tmp_path / "p", list(unit_paths(full_store.folder.parent)))
    assert all(str(full_store.path_of(key_of(unit))) in str(caught.value) for unit in (1, 3))
    assert str(full_store.path_of(key_of(0))) not in str(caught.value)
    assert not (tmp_path / "p").exists()


def test_write_pack__leaves_what_stands_there(full_store, pack, tmp_path):
    units = list(unit_paths(full_store.folder.parent))
    before = pack.read_bytes()
    with pytest.raises(StoreError, match="exists already"):
        write_pack(pack, units[:1])
    assert pack.read_bytes() == before
    assert len(write_pack(pack, units[:1], replace=True)) == 1
    with pytest.raises(StoreError, match="is no plain file"):
        write_pack(tmp_path, units, replace=True)
    with pytest.raises(StoreError, match="nothing to pack"):
        write_pack(tmp_path / "p", [])
    with pytest.raises(StoreError, match="no such pack"):
        unpack(tmp_path / "absent", tmp_path / "other")


@pytest.mark.parametrize("mount", [True, False], ids=["small disk where allowed", "limit on files"])
def test_full_disk__leaves_no_half_a_pack_and_no_half_a_unit(full_store, pack, tmp_path, mount):
    n_bytes = pack.stat().st_size
    with limited_disk(tmp_path / "disk", mount=mount) as leave:
        target = tmp_path / "disk" / "p"
        leave(n_bytes // 2)
        with pytest.raises(StoreError, match=r"no space left|File too large"):
            write_pack(target, list(unit_paths(full_store.folder.parent)))
        assert not target.exists()
        leave(full_store.path_of(key_of(0)).stat().st_size // 2)
        with pytest.raises(StoreError, match=r"no space left|File too large"):
            unpack(pack, tmp_path / "disk" / "other")
        other = Hdf5Store(tmp_path / "disk" / "other", SCHEMA)
        assert temporaries(other.folder) == []
        assert all(other.verify(key) is None for key in other.keys())
        leave(None)
        unpack(pack, tmp_path / "disk" / "other")
        assert len(other.keys()) == N_UNITS


def test_pack__replaces_packs_only(full_store, tmp_path):
    units = sorted(unit_paths(full_store.folder.parent))
    mine = tmp_path / "layout.csv"
    mine.write_text("east_m,north_m\n")
    with pytest.raises(StoreError, match=r"layout\.csv: exists already and is no pack"):
        write_pack(mine, units, replace=True)
    assert mine.read_text() == "east_m,north_m\n"


def test_pack__unit_that_is_a_pipe__is_damaged_and_not_waited_for(full_store, tmp_path):
    units = sorted(unit_paths(full_store.folder.parent))
    units[0].unlink()
    os.mkfifo(units[0])
    with pytest.raises(StoreError, match="not an ordinary file"):
        write_pack(tmp_path / "p", units)
