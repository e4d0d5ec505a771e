"""Who works on which unit: one at a time, and a claim outlives its owner only shortly, whatever the clocks say."""

from __future__ import annotations

import contextlib
import os
import signal
import socket
import subprocess
import threading
import time
from pathlib import Path

import pytest

from elbowroom.base.errors import StoreError
from elbowroom.store import Hdf5Store, MemoryStore, claims, processes
from elbowroom.store.disk import Disk
from store.far_disk import FarStore
from store.samples import SCHEMA, assert_same, key_of, limited_disk, record_of, temporaries, try_mount, unmount
from store.test_processes import Worker

KEY = key_of(0)


def foreign_claim(store, key) -> Path:
    """Write the claim of a process on a machine that cannot be asked."""
    store.folder.mkdir(parents=True, exist_ok=True)
    path = store.folder / f"{key}.claim"
    path.write_bytes(claims._content(key, "0" * 32).replace(processes.this_machine().encode(), b"0123456789ab"))
    return path


def wait_until(condition, seconds=10.0) -> bool:
    end = time.monotonic() + seconds
    while time.monotonic() < end:
        if condition():
            return True
        time.sleep(0.01)
    return False


@pytest.fixture
def quick_store(tmp_path, reports):
    """A store whose claims are void after half a second of silence."""
    return Hdf5Store(tmp_path / "kept", SCHEMA, report=reports.append, claim_silence_seconds=0.5)


@pytest.fixture
def worker(disk_store):
    worker = Worker(disk_store.folder.parent)
    yield worker
    worker.process.stdin.close()
    worker.process.stdout.close()
    worker.process.wait(timeout=20)


def test_claim__only_one_gets_it(any_store):
    assert any_store.claimed(KEY) is None
    with any_store.claim(KEY) as claim:
        assert claim.held
        assert any_store.claim(KEY) is None
        holder = any_store.claimed(KEY)
        assert (holder.host, holder.pid, holder.state) == (socket.gethostname(), os.getpid(), "working")
        assert any_store.claimed(key_of(1)) is None
        with any_store.claim(key_of(1)):
            assert any_store.claimed(key_of(1)) is not None
        assert any_store.claimed(KEY) is not None
    assert not claim.held
    assert any_store.claimed(KEY) is None
    claim.release()
    with any_store.claim(KEY):
        claim.release()  # an old claim does not let go of a new one
        assert any_store.claimed(KEY) is not None


def test_claim__leaves_nothing_and_is_no_unit(disk_store):
    with disk_store.claim(KEY):
        assert KEY not in disk_store
        assert disk_store.keys() == []
        assert [p.name for p in disk_store.folder.iterdir()] == [f"{KEY}.claim"]
        disk_store.put(KEY, record_of(0))
    assert [p.name for p in disk_store.folder.iterdir()] == [f"{KEY}.h5"]
    assert str(MemoryStore(SCHEMA).claimed(KEY)) == "None"


@pytest.mark.parametrize("wrong", ["", "../x", 5])
def test_claim__asks_for_a_key(any_store, wrong):
    for call in (any_store.claim, any_store.claimed):
        with pytest.raises(StoreError, match="not a key: expected 64 hexadecimal digits"):
            call(wrong)


def test_processes_that_race__never_hold_one_claim_together(disk_store, worker):
    worker.order("claims 4 60")
    assert worker.status() == 0
    assert list(disk_store.folder.iterdir()) == []


def test_killed_owner__its_claim_is_void_at_once(disk_store, worker):
    # not waited for yet: such a process still has its number
    worker.order(f"hold {KEY}")
    pid = int(worker.process.stdout.readline().split()[1])
    holder = disk_store.claimed(KEY)
    assert (holder.pid, holder.state) == (pid, "working")
    assert disk_store.claim(KEY) is None
    os.kill(pid, signal.SIGKILL)
    assert wait_until(lambda: disk_store.claimed(KEY) is None)
    assert disk_store.claim_of(KEY).state == "ended"
    assert disk_store.claims()[KEY].pid == pid
    with disk_store.claim(KEY) as claim:
        assert claim.held
        assert disk_store.claimed(KEY).pid == os.getpid()
    worker.order("reap")
    assert worker.status() == 9


def test_a_number_used_again__is_not_the_process_that_claimed(disk_store):
    with disk_store.claim(KEY):
        path = disk_store.folder / f"{KEY}.claim"
        content = path.read_bytes()
        tag = processes.this_process()
        path.write_bytes(content.replace(str(tag).encode(), f"{tag.machine}-{tag.pid}-{tag.start - 1}".encode()))
        assert disk_store.claimed(KEY) is None
        with disk_store.claim(KEY) as mine:
            assert mine.held


def test_other_machine__silent_claims_are_void_and_renewed_ones_are_not(quick_store):
    foreign_claim(quick_store, KEY)
    path = foreign_claim(quick_store, key_of(1))
    began = time.monotonic()
    count = 0
    while time.monotonic() - began < 0.45:
        assert quick_store.claim(KEY) is None
        time.sleep(0.05)
    while time.monotonic() - began < 1.2:
        count += 1
        path.write_bytes(path.read_bytes()[:-13] + b"%012d\n" % count)
        assert quick_store.claimed(key_of(1)).state == "working"
        time.sleep(0.05)
    assert quick_store.claim_of(KEY).state == "silent"
    with quick_store.claim(KEY) as mine:
        assert mine.held


@pytest.mark.parametrize("shift_seconds", [-86400.0, 86400.0])
def test_file_times__decide_nothing(quick_store, shift_seconds):
    """What a clock that was moved leaves on the disk."""
    with quick_store.claim(KEY):
        path = quick_store.folder / f"{KEY}.claim"
        for _ in range(20):
            moved = time.time() + shift_seconds
            os.utime(path, (moved, moved))
            assert quick_store.claim(KEY) is None
            time.sleep(0.04)


def test_stopped_owner__loses_its_claim_and_notices(quick_store, worker):
    worker.order(f"hold {KEY} 0.5")
    pid = int(worker.process.stdout.readline().split()[1])
    assert quick_store.claimed(KEY).pid == pid
    os.kill(pid, signal.SIGSTOP)
    mine = None

    def taken() -> bool:
        nonlocal mine
        mine = quick_store.claim(KEY)
        return mine is not None

    began = time.monotonic()
    assert wait_until(taken)
    assert time.monotonic() - began > 0.4
    os.kill(pid, signal.SIGCONT)
    assert worker.process.stdout.readline() == "lost\n"
    assert mine.held
    assert quick_store.claimed(KEY).pid == os.getpid()
    mine.release()
    assert list(quick_store.folder.iterdir()) == []


def test_owner__takes_a_claim_again_that_was_removed_by_hand(quick_store):
    with quick_store.claim(KEY) as claim:
        path = quick_store.folder / f"{KEY}.claim"
        path.unlink()
        assert wait_until(path.exists)
        assert claim.held
        assert quick_store.claim(KEY) is None
    assert not path.exists()


def test_claim__what_was_judged_may_be_gone_when_it_is_taken(quick_store, monkeypatch):
    """Of two that find a void claim, the slower one must not take away what the faster has made meanwhile."""
    quick_store.folder.mkdir(parents=True)
    path = quick_store.folder / f"{KEY}.claim"
    path.write_bytes(b"void")
    assert quick_store.claim(KEY) is None
    time.sleep(0.6)
    faster = Hdf5Store(quick_store.folder.parent, SCHEMA, claim_silence_seconds=0.5)
    take = Disk.take
    made = []

    def overtaken(disk, where, expected, n_bytes):
        if not made:
            path.unlink()
            made.append(faster.claim(KEY))
        return take(disk, where, expected, n_bytes)

    monkeypatch.setattr(Disk, "take", overtaken)
    assert quick_store.claim(KEY) is None
    monkeypatch.undo()
    assert made[0].held
    assert faster.claimed(KEY) is not None
    made[0].release()
    assert list(quick_store.folder.iterdir()) == []


@pytest.mark.parametrize("kind", ["empty", "text", "folder", "pipe", "link to itself", "other key"])
def test_claim__rubbish_under_its_name_is_void_after_a_silence(quick_store, kind):
    quick_store.folder.mkdir(parents=True)
    path = quick_store.folder / f"{KEY}.claim"
    make = {
        "empty": path.touch, "text": lambda: path.write_text("hello\n" * 2000), "folder": path.mkdir,
        "pipe": lambda: os.mkfifo(path), "link to itself": lambda: path.symlink_to(path),
        "other key": lambda: path.write_bytes(claims._content(key_of(1), "0" * 32).replace(b"elbow", b"elbou")),
    }[kind]  # fmt: skip
    make()
    assert quick_store.claim(KEY) is None
    assert "cannot be read" in str(quick_store.claimed(KEY))
    mine = None

    def taken() -> bool:
        nonlocal mine
        mine = quick_store.claim(KEY)
        return mine is not None

    assert wait_until(taken, 3.0)
    mine.release()
    assert list(quick_store.folder.iterdir()) == []


def test_forked_child__does_not_hold_nor_release(disk_store):
    with disk_store.claim(KEY) as claim:
        child = os.fork()
        if not child:
            with contextlib.suppress(BaseException):
                before = claim.held
                claim.release()
                os._exit(10 if not before else 11)
            os._exit(12)
        assert os.waitstatus_to_exitcode(os.waitpid(child, 0)[1]) == 10
        assert claim.held
        assert disk_store.claimed(KEY) is not None


def test_disk_without_links(disk_store, monkeypatch):
    def refuse(*_):
        raise PermissionError(1, "Operation not permitted")

    monkeypatch.setattr(os, "link", refuse)
    with disk_store.claim(KEY):
        assert disk_store.claim(KEY) is None
        assert disk_store.claimed(KEY).pid == os.getpid()
    assert list(disk_store.folder.iterdir()) == []


@pytest.mark.parametrize("mount", [True, False], ids=["small disk where allowed", "limit on files"])
def test_full_disk__refuses_a_claim_and_keeps_the_ones_there(tmp_path, mount):
    with limited_disk(tmp_path / "disk", mount=mount) as leave:
        store = Hdf5Store(tmp_path / "disk" / "kept", SCHEMA, claim_silence_seconds=0.5)
        with store.claim(KEY) as claim:
            leave(0)
            with pytest.raises(StoreError, match=r"cannot be claimed for work: (no space left|File too large)"):
                store.claim(key_of(1))
            assert temporaries(store.folder) == []
            time.sleep(0.3)  # renewed in place, which takes no room
            leave(None)
            assert claim.held
            with store.claim(key_of(1)):
                assert store.claim(KEY) is None


def test_read_only_disk__refuses_a_claim(tmp_path):
    disk = tmp_path / "disk"
    if not try_mount(disk):
        disk = tmp_path / "closed"
        (disk / "kept" / f"{SCHEMA.name}-v{SCHEMA.version}").mkdir(parents=True)
        if os.geteuid() == 0:
            pytest.skip("neither mounts nor permissions: nothing here is read-only for an administrator without mounts")
        os.chmod(disk / "kept" / f"{SCHEMA.name}-v{SCHEMA.version}", 0o555)
        with pytest.raises(StoreError, match="permission denied"):
            Hdf5Store(disk / "kept", SCHEMA).claim(KEY)
        return
    try:
        store = Hdf5Store(disk / "kept", SCHEMA)
        store.put(KEY, record_of(0))
        with store.claim(key_of(1)):
            subprocess.run(["mount", "-o", "remount,ro", str(disk)], check=True)
            with pytest.raises(StoreError, match="the disk is mounted read-only"):
                store.claim(key_of(2))
            assert store.claimed(key_of(1)) is not None
        assert_same(store.get(KEY), record_of(0))
        assert store.claimed(key_of(1)) is not None  # could not be removed; void when this process ends
    finally:
        unmount(disk)


def _share(store, units, done) -> None:
    for unit in units:
        while True:
            if store.get(key_of(unit)) is not None:
                break
            try:
                claim = store.claim(key_of(unit))
            except StoreError:
                continue
            if claim is None:
                time.sleep(0.02)
                continue
            with claim:
                if store.get(key_of(unit)) is None:
                    time.sleep(0.02)
                    done.append(unit)
                    try:
                        store.put(key_of(unit), record_of(unit))
                    except StoreError:
                        continue


@pytest.mark.parametrize(
    ("delay_seconds", "looks", "every"),
    [(0.0, True, 0), (0.15, True, 0), (0.15, False, 0), (0.05, False, 6)],
    ids=["near", "late, looks after changes", "late always", "late and failing"],
)
def test_network_disk__two_machines_share_the_work(tmp_path, reports, delay_seconds, looks, every):
    n_units = 10
    stores = [
        FarStore(
            tmp_path / "kept", SCHEMA, delay_seconds=delay_seconds, looks_after_changes=looks, every=every, seed=machine,
            report=reports.append, claim_silence_seconds=2.0,
        )
        for machine in (0, 1)
    ]  # fmt: skip
    done: list[list[int]] = [[], []]
    orders = [range(n_units), [*range(n_units // 2, n_units), *range(n_units // 2)]]
    threads = [
        threading.Thread(target=_share, args=(store, order, made), daemon=True)
        for store, order, made in zip(stores, orders, done, strict=True)
    ]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(timeout=60.0)
        assert not thread.is_alive()
    plain = Hdf5Store(tmp_path / "kept", SCHEMA)
    for unit in range(n_units):
        assert plain.verify(key_of(unit)) is None
        assert_same(plain.get(key_of(unit)), record_of(unit))
    assert reports == []
    assert set(done[0]) | set(done[1]) == set(range(n_units))
    if looks:
        assert len(done[0]) + len(done[1]) == n_units
    if not every:
        # at worst once by each machine, while news travels
        assert all(len(made) == len(set(made)) for made in done)
    else:
        troubles = {kind for store in stores for kind in store._disk.troubles}
        assert troubles >= {"link not made", "link made, answer lost", "rename not made", "rename made, answer lost"}
