"""Stores from the command line: what is told, what is kept, what goes, and with which exit code."""

from __future__ import annotations

import json
import os
import shutil
import subprocess
from dataclasses import replace

import numpy as np
import pytest

from elbowroom.base.arrays import ArraySpec
from elbowroom.job.solve import SOLUTION_SCHEMA
from elbowroom.store import Hdf5Store, Record, Schema, StoreDamageWarning, content_key
from elbowroom.store.processes import this_machine
from store.samples import limited_disk, temporaries, try_mount, unmount

OTHER = content_key("a unit of another job")
LATER = Schema("station-solution", SOLUTION_SCHEMA.version + 1, SOLUTION_SCHEMA.arrays)


@pytest.fixture(scope="module")
def solved(tmp_path_factory):
    """Solve a job of two antennas once, for all tests of this module."""
    from elbowroom.job.jobfile import read_job
    from elbowroom.job.pipeline import JobRun
    from elbowroom.job.templates import write_template

    folder = tmp_path_factory.mktemp("solved") / "station"
    write_template("small", folder)
    path = folder / "job.toml"
    path.write_text(path.read_text().replace("frequency_hz = [110e6, 165e6]", "frequency_hz = [110e6]"))
    layout = folder / "layout.csv"
    lines = layout.read_text().splitlines(keepends=True)
    rows = [i for i, line in enumerate(lines) if line.strip() and not line.startswith("#")]
    layout.write_text("".join(line for i, line in enumerate(lines) if i not in rows[3:]))
    run = JobRun(read_job(path))
    run.solution(110e6)
    return folder


@pytest.fixture
def job(solved, tmp_path):
    """The solved job; in its store also a unit that no job needs."""
    shutil.copytree(solved, tmp_path / "station")
    path = tmp_path / "station" / "job.toml"
    store = Hdf5Store(path.parent / "store", SOLUTION_SCHEMA)
    (key,) = store.keys()
    record = store.get(key)
    record.attributes |= {"title": "Another job", "job_file": "another", "frequency_hz": 120e6}
    store.put(OTHER, record)
    return path


@pytest.fixture
def store(job):
    return Hdf5Store(job.parent / "store", SOLUTION_SCHEMA)


def own_key(store) -> str:
    (key,) = set(store.keys()) - {OTHER}
    return key


def damage(path) -> None:
    content = bytearray(path.read_bytes())
    content[-40] ^= 1
    path.write_bytes(content)


def lines(outcome, kind) -> list[dict]:
    told = [json.loads(line) for line in outcome.out.splitlines()]
    return [line for line in told if line["kind"] == kind]


def test_list__a_folder_and_a_job(command, job, store):
    everything = command("store", "list", store.folder.parent)
    assert everything.code == 0
    assert "Another job" in everything.out
    assert "2 units" in everything.out
    own = command("store", "list", job)
    assert own.code == 0
    assert "Another job" not in own.out
    assert "1 unit of other jobs" in own.out
    told = lines(command("store", "list", store.folder.parent, "--json"), "unit")
    assert [(u["frequency_hz"], u["key"], u["state"]) for u in told] == [
        (110e6, own_key(store), "stored"), (120e6, OTHER, "stored"),
    ]  # fmt: skip
    assert told[0]["size_bytes"] == store.path_of(own_key(store)).stat().st_size
    assert told[0]["title"] == "Seven antennas"


def test_list__grounds_and_origins_tell_units_of_one_title_apart(command, job, store):
    record = store.get(OTHER)
    soils = [f"soil, relative permittivity {e}, 0.01 S/m" for e in (5, 10)]
    for number, changes in enumerate(
        ({"ground": soils[0], "origin": "interpolated currents"}, {"ground": soils[1]}, {"ground": None, "origin": None})
    ):
        attributes = {k: v for k, v in (record.attributes | changes).items() if v is not None}
        store.put(content_key(f"another {number}"), replace(record, attributes=attributes))
    outcome = command("store", "list", store.folder.parent)
    rows = [[cell.strip() for cell in line.split("\u2502")[1:-1]] for line in outcome.out.splitlines() if "Another job" in line]
    # files come in the order of their keys, and numbers by first appearance
    assert sorted((row[2].split(" ")[0], row[4]) for row in rows) == [
        ("", ""), ("perfect", "assembled"), ("soil", "assembled"), ("soil", "interp. currents"),
    ]  # fmt: skip
    assert {"soil 1", "soil 2"} <= {row[2] for row in rows}
    assert all(any(line.endswith(f": {soil}") for line in outcome.out.splitlines()) for soil in soils)
    told = lines(command("store", "list", store.folder.parent, "--json"), "unit")
    assert {(u["ground"], u["origin"]) for u in told} == {
        ("perfect", "assembled"), (soils[0], "interpolated currents"), (soils[1], "assembled"), (None, None),
    }  # fmt: skip


def test_list__tells_missing_units_claims_and_damage(command, job, store, change):
    change(job, "frequency_hz = [110e6]", "frequency_hz = [110e6, 165e6]")
    store.path_of(OTHER).write_bytes(b"hello")
    with store.claim(content_key("in work")):
        outcome = command("store", "list", job)
        assert "not solved yet: 165 MHz" in outcome.out
        assert "claimed by process" in outcome.out
        outcome = command("store", "list", store.folder.parent, "--json")
    (bad,) = [u for u in lines(outcome, "unit") if u["state"] == "damaged"]
    assert bad["key"] == OTHER
    assert "5 bytes long" in bad["problem"]
    assert lines(outcome, "claim")[0]["state"] == "working"
    assert f"damaged: {store.path_of(OTHER)}" in outcome.err


def test_verify__names_what_is_damaged(command, job, store):
    assert command("store", "verify", job).code == 0
    damage(store.path_of(OTHER))
    assert command("store", "verify", job).code == 0  # not one of its units
    outcome = command("store", "verify", store.folder.parent)
    assert outcome.code == 6
    assert f"damaged: {store.path_of(OTHER)}: damaged: SHA-256 of the file is" in outcome.err
    assert "2 units read" in outcome.out
    assert "1 damaged" in outcome.out
    assert store.path_of(OTHER).exists()
    told = lines(command("store", "verify", store.folder.parent, "--json"), "unit")
    assert {u["key"]: u["state"] for u in told} == {OTHER: "damaged", own_key(store): "sound"}


def test_verify__sets_aside_when_told(command, job, store):
    damage(store.path_of(OTHER))
    outcome = command("store", "verify", store.folder.parent, "--set-aside")
    assert outcome.code == 6
    assert "set aside as" in outcome.out
    assert not store.path_of(OTHER).exists()
    assert command("store", "verify", store.folder.parent).code == 0


def test_prune__lists_first_and_keeps_what_jobs_beside_it_need(command, job, store):
    outcome = command("store", "prune", store.folder.parent)
    assert outcome.code == 0
    assert f"units of {job} stay" in outcome.out
    assert "needed by no job" in outcome.out
    assert "nothing was removed: '--remove' does it" in outcome.out
    assert len(store.keys()) == 2
    outcome = command("store", "prune", store.folder.parent, "--remove")
    assert "1 file removed" in outcome.out
    assert store.keys() == [own_key(store)]
    assert store.verify(own_key(store)) is None
    outcome = command("store", "prune", job, "--remove")
    assert "nothing to remove; 1 unit stays" in outcome.out


def test_prune__keeps_what_a_job_needs_that_is_named(command, job, store, tmp_path):
    away = tmp_path / "elsewhere" / "deep"
    shutil.copytree(job.parent, away, ignore=shutil.ignore_patterns("store"))
    named = away / "job.toml"
    named.write_text(named.read_text() + f'\n[store]\nfolder = "{store.folder.parent}"\n' if "[store]" not in named.read_text() else
                     named.read_text().replace('folder = "store"', f'folder = "{store.folder.parent}"'))  # fmt: skip
    job.unlink()
    alone = command("store", "prune", store.folder.parent)
    assert alone.code == 6
    assert "no job says what must stay" in alone.err
    outcome = command("store", "prune", store.folder.parent, "--job", named, "--remove", "--json")
    assert outcome.code == 0, outcome.all
    assert [r["file"] for r in lines(outcome, "removed")] == [str(store.path_of(OTHER))]
    assert store.keys() == [own_key(store)]
    told = command("store", "prune", store.folder.parent, "--only-named", "--remove")
    assert told.code == 0
    assert store.keys() == []


def test_prune__keeps_what_lies_between_a_job_s_frequencies(command, job, store, change):
    """Of this very station, not of one that has another antenna by now."""
    from elbowroom.job.jobfile import read_job
    from elbowroom.job.pipeline import JobRun

    change(job, "frequency_hz = [110e6]", "frequency_hz = [110e6, 165e6]")
    own = own_key(store)
    record = store.get(own)
    run = JobRun(read_job(job))
    for frequency in (120e6, 170e6):  # inside the band, and outside
        record.attributes["frequency_hz"] = frequency
        store.put(run.key(frequency), record)
    assert command("store", "prune", job, "--remove").code == 0
    assert set(store.keys()) == {run.key(120e6), own}
    antenna = job.parent / "antenna.toml"
    change(antenna, "arm_length_m = ", "arm_length_m = 0.78  # ")
    command("store", "prune", job, "--remove")
    assert store.keys() == []


def test_prune__refuses_while_a_run_works_that_nobody_knows(command, job, store):
    with store.claim(OTHER):
        outcome = command("store", "prune", job, "--remove")
        assert outcome.code == 6
        assert "works on a unit that no known job needs" in outcome.err
        assert command("store", "prune", job, "--only-named", "--remove").code == 0
        assert OTHER in store  # claimed
    with store.claim(own_key(store)):
        command("store", "prune", job, "--remove")
    assert store.keys() == [own_key(store)]


def test_prune__a_broken_job_beside_the_store_stops_it(command, job, store):
    (job.parent / "second.toml").write_text("[station]\nlayout = 5\n")
    for arguments in ([store.folder.parent], [job]):
        outcome = command("store", "prune", *arguments, "--remove")
        assert outcome.code == 6
        assert "second.toml, which may be a job of this store and cannot be read" in outcome.err
    assert len(store.keys()) == 2
    assert command("store", "prune", job, "--only-named", "--remove").code == 0


def test_prune__takes_damage_and_leftovers_but_no_other_version(command, job, store):
    damage(store.path_of(OTHER))
    with pytest.warns(StoreDamageWarning):
        assert store.get(OTHER) is None  # set aside
    store.path_of(OTHER).write_bytes(b"cut")
    left = store.folder / f".writing-0123-{this_machine()}-99999999-5-00"
    left.write_bytes(b"x" * 1000)
    other = Hdf5Store(store.folder.parent, LATER)
    other.put(OTHER, store.get(own_key(store)))
    with store.claim(content_key("x")):
        stale = store.folder / f"{content_key('x')}.claim"
        content = stale.read_bytes()
    stale.write_bytes(content.replace(f"-{os.getpid()}-".encode(), b"-99999999-"))
    outcome = command("store", "prune", job, "--remove", "--json")
    assert outcome.code == 0, outcome.all
    assert sorted(r["why"] for r in lines(outcome, "removable")) == [
        "damaged", "left by a process that ended while writing", "set aside", "set aside",
    ]  # fmt: skip
    assert sorted(p.name for p in store.folder.iterdir()) == sorted([f"{own_key(store)}.h5", "set-aside"])
    assert other.keys() == [OTHER]
    command("store", "prune", job, "--remove", "--other-versions")
    assert other.keys() == []
    assert store.keys() == [own_key(store)]


def test_prune__keeps_port_matrices_of_units_without_currents(command, job, store):
    from elbowroom.job.dropping import PORTS_SCHEMA, drop_currents
    from elbowroom.job.jobfile import read_job
    from elbowroom.job.pipeline import JobRun

    own = own_key(store)
    drop_currents(JobRun(read_job(job)), 110e6)
    matrices = Hdf5Store(store.folder.parent, PORTS_SCHEMA)
    record = matrices.get(own)
    matrices.put(OTHER, record)
    assert "1 unit" in command("store", "list", job).out
    command("store", "prune", job, "--remove", "--other-versions")
    assert matrices.keys() == [own]
    assert store.keys() == []


def test_prune__leaves_young_units_when_told(command, job, store):
    command("store", "prune", job, "--remove", "--older-than-days", 1)
    assert OTHER in store
    for moved in (2e9 * 2, 0.0):  # a clock that was set back leaves units from the future: young
        os.utime(store.path_of(OTHER), (moved, moved))
        command("store", "prune", job, "--remove", "--older-than-days", 1)
        assert (OTHER in store) is (moved > 0.0)


def test_prune__does_not_remove_what_changed_since_it_looked(command, job, store):
    from elbowroom.job.storecare import carry_out, place_of, plan_pruning

    plan = plan_pruning(store.folder.parent, [place_of(job).run])
    store.put(OTHER, store.get(own_key(store)))
    gone, stayed = carry_out(plan, store.folder.parent)
    assert gone == []
    assert "is another file by now" in stayed[0]
    assert OTHER in store


def test_pack_and_unpack(command, job, store, tmp_path):
    pack = tmp_path / "own.pack"
    outcome = command("store", "pack", job, pack)
    assert outcome.code == 0
    assert "1 unit" in outcome.out
    target = tmp_path / "new" / "store"
    outcome = command("store", "unpack", target, pack, "--json")
    assert outcome.code == 0
    assert len(lines(outcome, "added")) == 1
    copied = Hdf5Store(target, SOLUTION_SCHEMA)
    assert copied.path_of(own_key(store)).read_bytes() == store.path_of(own_key(store)).read_bytes()
    assert copied.keys() == [own_key(store)]
    everything = tmp_path / "all.pack"
    command("store", "pack", store.folder.parent, everything)
    outcome = command("store", "unpack", target, everything)
    assert "1 unit added" in outcome.out
    assert "1 were there already" in outcome.out
    # a job takes them up: nothing is left to solve
    shutil.rmtree(store.folder)
    command("store", "unpack", job, pack)
    assert "0 to solve" in command("solve", job).out


def test_pack__damage_stops_it_unless_it_is_to_be_left(command, job, store, tmp_path):
    damage(store.path_of(OTHER))
    outcome = command("store", "pack", store.folder.parent, tmp_path / "p")
    assert outcome.code == 6
    assert str(store.path_of(OTHER)) in outcome.err
    assert not (tmp_path / "p").exists()
    outcome = command("store", "pack", store.folder.parent, tmp_path / "p", "--leave-damaged")
    assert outcome.code == 0
    assert f"damaged: {store.path_of(OTHER)}" in outcome.err
    assert "1 unit" in outcome.out
    assert command("store", "pack", job, tmp_path / "p").code == 6
    assert command("store", "pack", job, tmp_path / "p", "--replace").code == 0


def test_unpack__a_damaged_pack_adds_nothing(command, job, tmp_path):
    command("store", "pack", job, tmp_path / "p")
    damage(tmp_path / "p")
    outcome = command("store", "unpack", tmp_path / "new", tmp_path / "p")
    assert outcome.code == 6
    assert "damaged, or no pack of this program" in outcome.err
    assert not (tmp_path / "new").exists()


def test_bad_places__are_told(command, job, store, tmp_path):
    (tmp_path / "notes.txt").write_text("hello")
    (tmp_path / "folder").mkdir()
    (tmp_path / "folder" / "x").touch()
    for arguments, code, message in (
        (["list", tmp_path / "absent"], 6, "no such store: expected the folder of a store, or a job file"),
        (["list", tmp_path / "folder"], 6, "is no store: no folder in it is named as a store names its own"),
        (["list", job.parent], 6, f"that of the job in it is meant by naming {job}"),
        (["verify", store.folder], 6, f"the store is {store.folder.parent}"),
        (["verify", tmp_path / "notes.txt"], 2, "notes.txt"),
        (["unpack", store.folder.parent, tmp_path / "absent"], 6, "no such pack"),
        (["unpack", store.folder.parent, tmp_path / "notes.txt"], 6, "it ends inside its first header"),
        (["pack", job, store.folder / "p"], 6, "cannot stand inside the store"),
        (["prune", job, "--job", store.folder.parent], 2, "expected a job file, found a folder"),
        (["prune", job, "--older-than-days", "-1"], 2, "is not in the range"),
        (["prune", job, "--older-than-days", "nan"], 2, "expected a number of days"),
        (["prune", job, "--older-than-days", "inf"], 2, "expected a number of days"),
        (["tidy", job], 2, "No such command"),
    ):
        outcome = command("store", *arguments)
        assert outcome.code == code, (arguments, outcome.all)
        assert message in outcome.err, (arguments, outcome.all)
        assert "Traceback" not in outcome.err


def test_prune__a_job_of_another_store_is_no_guide(command, job, store, tmp_path):
    shutil.copytree(job.parent, tmp_path / "second", ignore=shutil.ignore_patterns("store"))
    outcome = command("store", "prune", job, "--job", tmp_path / "second" / "job.toml", "--remove")
    assert outcome.code == 6
    assert "has another store" in outcome.err
    assert len(store.keys()) == 2


def test_list__survives_units_of_unknown_schemas(command, job, store):
    strange = Hdf5Store(store.folder.parent, Schema("something-else", 7, (ArraySpec("x", ("n",), "f", "m", "numbers"),)))
    strange.put(OTHER, Record({"x": np.zeros(3)}, {"title": 5, "frequency_hz": "none"}))
    outcome = command("store", "list", store.folder.parent)
    assert outcome.code == 0
    assert "3 units" in outcome.out
    assert command("store", "verify", store.folder.parent).code == 0


def test_read_only_disk__is_looked_at_and_not_changed(command, job, tmp_path):
    disk = tmp_path / "disk"
    pack = tmp_path / "p"
    assert command("store", "pack", job.parent / "store", pack).code == 0
    if not try_mount(disk):
        pytest.skip("mounts are not allowed here, and no folder is read-only for an administrator")
    try:
        assert command("store", "unpack", disk / "store", pack).code == 0
        subprocess.run(["mount", "-o", "remount,ro", str(disk)], check=True)
        assert "2 units" in command("store", "list", disk / "store").out
        assert command("store", "verify", disk / "store").code == 0
        assert command("store", "pack", disk / "store", tmp_path / "again").code == 0
        assert (tmp_path / "again").read_bytes() == pack.read_bytes()
        outcome = command("store", "prune", disk / "store", "--only-named", "--remove")
        assert outcome.code == 6
        assert "Read-only file system" in outcome.err
        outcome = command("store", "prune", disk / "store", "--only-named", "--older-than-days", "1")
        assert outcome.code == 6
        assert "mounted read-only" in outcome.err
        outcome = command("store", "unpack", disk / "other", pack)
        assert outcome.code == 6
        assert "mounted read-only" in outcome.err
        assert "2 units" in command("store", "list", disk / "store").out
    finally:
        unmount(disk)


def test_solve__on_a_disk_that_fills_up__keeps_what_it_has_and_goes_on_later(command, job, store, change, tmp_path):
    change(job, "frequency_hz = [110e6]", "frequency_hz = [110e6, 120e6]")
    own = own_key(store)
    size = store.path_of(own).stat().st_size
    with limited_disk(tmp_path / "unused", mount=False) as leave:
        leave(size // 2)
        outcome = command("solve", job)
        assert outcome.code == 6, outcome.all
        assert "File too large" in outcome.all
        assert "Traceback" not in outcome.all
        leave(None)
    assert set(store.keys()) == {own, OTHER}
    assert store.verify(own) is None
    assert temporaries(store.folder) == []
    assert list(store.folder.glob("*.claim")) == []
    assert "1 to solve" in command("solve", job).out
    assert len(store.keys()) == 3
