"""Campaign: runs that are killed at random, files whose bits flip, many units, and two runs on one store.

Run ``python validation/benchmarks/store_campaign.py`` (about ten minutes with its 200 kills; ``--kills 40 --seed 2`` and the like do
it in parts).  Everything is done for real: processes of ``elbowroom solve`` on a job of four antennas and six frequencies, SIGKILL
to the main process or to one of its workers, files changed on the disk.  After each kill every file in the store is read whole and
every unit that reads as good is compared, bit for bit, with that of a run nobody disturbed.  Exits with 1 if anything fails.
"""

from __future__ import annotations

import argparse
import os
import re
import shutil
import signal
import subprocess
import sys
import tempfile
import time
import warnings
from collections import Counter
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import psutil

from elbowroom.base.errors import ResourceError
from elbowroom.job.jobfile import read_job
from elbowroom.job.solve import SOLUTION_SCHEMA
from elbowroom.store import Hdf5Store, Record, StoreDamageWarning, content_key
from elbowroom.store.care import entry_of, left_behind, unit_paths
from elbowroom.store.processes import tag_in
from elbowroom.store.records import same_bits

N_ANTENNAS = 4
FREQUENCIES_HZ = tuple(80e6 + 10e6 * n for n in range(6))
LONGEST_RUN_SECONDS = 120.0
UNIT_BEING_WRITTEN = re.compile(r"\.writing-[0-9a-f]{16}-")
NOT_COMPARED = ("seconds",)
"""Attributes that say how the work went, not what came out."""


def make_job(folder: Path, n_antennas: int = N_ANTENNAS, frequencies_hz: tuple[float, ...] = FREQUENCIES_HZ) -> Path:
    """Write a job of straight dipoles, whose units are solved in a fraction of a second, and return its file."""
    folder.mkdir(parents=True)
    (folder / "antenna.toml").write_text(
        'name = "dipoles"\nshape = "dipole"\nhalf_length_m = 0.70\nheight_m = 0.75\nwire_radius_m = 0.006\n'
    )
    places = "".join(f"A{n},{1.9 * n:.1f},{0.3 * n * n:.1f}\n" for n in range(n_antennas))
    (folder / "layout.csv").write_text(f"name,east_m,north_m\n{places}")
    job = folder / "job.toml"
    job.write_text(
        'title = "To be killed"\n[station]\nlayout = "layout.csv"\nantenna = "antenna.toml"\n'
        f"[band]\nfrequency_hz = {list(frequencies_hz)}\n"
    )
    return job


def start(job: Path, *, workers: bool = False) -> subprocess.Popen:
    """Start a run of the job in a process group of its own, with two worker processes or without any."""
    environment = {**os.environ, "OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1"}
    # how sums are split among threads decides their last bits, and workers get one thread each
    command = [sys.executable, "-m", "elbowroom", "solve", str(job), "--quiet", "--threads", "1"]
    command += ["--workers", "2"] if workers else []
    # a file for each, because workers that survive their main process keep a pipe open
    new = job.with_name("complaints.txt")
    with open(new, "w") as complaints:
        process = subprocess.Popen(
            command, stdout=subprocess.DEVNULL, stderr=complaints, env=environment, start_new_session=True, text=True
        )
    new.rename(_complaints(job, process))
    return process


def _complaints(job: Path, process: subprocess.Popen) -> Path:
    return job.with_name(f"complaints-{process.pid}.txt")


def is_fault(complaint: str) -> bool:
    """Return whether a run fell over; what a worker that was told to end says of where it was is none."""
    return "Traceback" in complaint and "Exception ignored" not in complaint


def finish(process: subprocess.Popen, job: Path) -> tuple[int, str]:
    """Wait for a run; return its exit code and what it complained of."""
    try:
        code = process.wait(timeout=LONGEST_RUN_SECONDS)
    except subprocess.TimeoutExpired:
        end_orphans(process.pid)
        process.wait()
        code = -99
    complaint = _complaints(job, process).read_text()
    return code, complaint if code != -99 else f"still running after {LONGEST_RUN_SECONDS:g} s: {complaint}"


def end_orphans(group: int) -> None:
    """End what a killed run has left in its own process group."""
    if not group:
        return  # none yet
    try:
        os.killpg(group, signal.SIGKILL)
    except ProcessLookupError:
        pass


def differs(found: Record, expected: Record) -> bool:
    """Return whether a unit differs in any bit from the one expected."""
    if found.arrays.keys() != expected.arrays.keys():
        return True
    if any(not same_bits(found.arrays[name], array) for name, array in expected.arrays.items()):
        return True
    left, right = ({k: v for k, v in r.attributes.items() if k not in NOT_COMPARED} for r in (found, expected))
    return left != right


@dataclass
class Reference:
    """What a run that nobody disturbed has stored, and how long it took."""

    job: Path
    records: dict[str, Record]
    seconds: float
    first_unit_seconds: float

    @property
    def store(self) -> Hdf5Store:
        """The store of the job."""
        return Hdf5Store(self.job.parent / "store", SOLUTION_SCHEMA)


def undisturbed(job: Path, n_runs: int = 2) -> Reference:
    """Run the job from nothing; if more than once, the runs must agree to the bit."""
    runs: list[Reference] = []
    for _ in range(n_runs):
        shutil.rmtree(job.parent / "store", ignore_errors=True)
        began = time.monotonic()
        process = start(job)
        first = 0.0
        while process.poll() is None:
            if not first and any(unit_paths(job.parent / "store")):
                first = time.monotonic() - began
            time.sleep(0.01)
        code, complaint = finish(process, job)
        assert code == 0, complaint
        seconds = time.monotonic() - began
        store = Hdf5Store(job.parent / "store", SOLUTION_SCHEMA)
        records = {key: record for key in store.keys() if (record := store.get(key)) is not None}
        assert len(records) == len(read_job(job).frequencies_hz)
        runs.append(Reference(job, records, seconds, first or seconds))
    for other in runs[1:]:
        assert not any(differs(other.records[key], record) for key, record in runs[0].records.items()), (
            "runs differ by themselves"
        )
    return runs[-1]


@dataclass
class Tally:
    """What a campaign has met."""

    kills: Counter = field(default_factory=Counter)
    failures: list[str] = field(default_factory=list)
    damaged_files: int = 0
    caught_writing: int = 0
    caught_claimed: int = 0
    ended_equal: bool = False


def check_store(reference: Reference, tally: Tally, when: str) -> set[str]:
    """Read every file of the store whole and compare every unit that counts as good; return the keys of the good ones."""
    store = reference.store
    good = set()
    for path in list(unit_paths(store.folder.parent)):
        entry = entry_of(path, every_byte=True)
        if entry.problem is not None:
            # allowed by the promise, as long as nobody takes it for good; not expected after a kill
            tally.damaged_files += 1
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", StoreDamageWarning)
            record = store.get(entry.key)
        if record is None:
            continue
        good.add(entry.key)
        if entry.problem is not None:
            tally.failures.append(f"{when}: {path.name} is damaged ({entry.problem}) and was read as good")
        if entry.key not in reference.records or differs(record, reference.records[entry.key]):
            tally.failures.append(f"{when}: {path.name} differs from the undisturbed run")
    return good


def names_in(folder: Path) -> set[str]:
    """Return the names in a folder that may not be there yet."""
    try:
        return set(os.listdir(folder))
    except FileNotFoundError:
        return set()


def being_written(folder: Path) -> set[str]:
    """Return the names of temporary files in a folder of units, of living processes or not."""
    return {name for name in names_in(folder) if name.startswith(".writing-")}


def workers_of(process: subprocess.Popen) -> list[int]:
    """Return the process numbers of a run's workers: Python has a helper among its children that is none."""
    try:
        children = psutil.Process(process.pid).children(recursive=True)
        return [child.pid for child in children if any("spawn_main" in word for word in child.cmdline())]
    except psutil.Error:
        return []


def wait_for_victim(
    process: subprocess.Popen, reference: Reference, rng: np.random.Generator, before: set[str], of_worker: bool
) -> int | None:
    """Wait for a random instant and return whom to kill; None if the run has ended before.

    One time in three that is any instant, one a while after work on a unit has begun, one while a file is being written, and
    then the process that writes it.
    """
    folder = reference.store.folder
    aim = ("anywhere", "working", "writing")[int(rng.integers(3))]
    work_seconds = reference.seconds - reference.first_unit_seconds
    at = time.monotonic() + rng.uniform(0.0, reference.seconds) if aim == "anywhere" else 0.0
    met: set[str] = set()
    while process.poll() is None:
        names = names_in(folder) - before
        if aim == "working" and not at and any(name.endswith(".claim") for name in names):
            at = time.monotonic() + rng.uniform(0.0, 0.7 * work_seconds)
        if aim == "writing":
            for name in sorted(n for n in names - met if UNIT_BEING_WRITTEN.match(n)):
                met.add(name)
                tag = tag_in(name)
                if tag is not None and rng.random() < 0.5:
                    time.sleep(rng.uniform(0.0, 0.002))
                    return tag.pid
        elif at and time.monotonic() >= at:
            workers = workers_of(process) if of_worker else []
            if not of_worker or workers:
                return workers[int(rng.integers(len(workers)))] if workers else process.pid
        time.sleep(0.0003 if aim == "writing" else 0.002)
    return None


def kill_at_random(reference: Reference, n_kills: int, rng: np.random.Generator, tell=print) -> Tally:
    """Start runs and kill them at random instants, until so many have been killed, main processes and workers among them."""
    tally = Tally()
    store, job = reference.store, reference.job
    shutil.rmtree(store.folder.parent, ignore_errors=True)
    orphans = 0

    def enough() -> bool:
        return tally.kills.total() >= n_kills and len(tally.kills) == 2

    while not enough() and len(tally.failures) < 5:
        good = check_store(reference, tally, f"before kill {tally.kills.total() + 1}")
        if len(good) > len(reference.records) // 2:
            # so that there is always work to be killed in
            for key in rng.permutation(sorted(good))[: int(rng.integers(3, len(reference.records)))]:
                store.remove(str(key))
        with_workers = rng.random() < 0.5
        left_before = names_in(store.folder)
        process = start(job, workers=with_workers)
        victims = []
        for _ in range(int(rng.integers(1, 4)) if with_workers else 1):
            of_worker = with_workers and rng.random() < 0.75
            victim = wait_for_victim(process, reference, rng, left_before, of_worker)
            if victim is None or enough():
                break
            try:
                os.kill(victim, signal.SIGKILL)
            except ProcessLookupError:
                continue
            victims.append(victim)
            tally.kills["main" if victim == process.pid else "worker"] += 1
            tally.caught_writing += bool(being_written(store.folder) - left_before)
            tally.caught_claimed += any(name.endswith(".claim") for name in names_in(store.folder))
            if victim == process.pid:
                break
        code, complaint = finish(process, job)
        end_orphans(orphans)
        # every other time, the workers of a killed main process are left to meet the next run
        orphans = process.pid
        if rng.random() < 0.5:
            end_orphans(orphans)
        when = f"after kill {tally.kills.total()}"
        # a unit whose worker was killed twice is given up, as one that needs more memory than there is
        if process.pid not in victims and code not in (0, ResourceError.exit_code):
            tally.failures.append(f"{when}: killed workers ended the run with code {code}: {complaint.strip()[-300:]}")
        if is_fault(complaint):
            tally.failures.append(f"{when}: {complaint.strip()[-600:]}")
        check_store(reference, tally, when)
        if victims:
            tell(f"  {tally.kills.total()} kills, {dict(tally.kills)}, {len(tally.failures)} failures")
    end_orphans(orphans)
    check_store(reference, tally, "after the last kill")
    code, complaint = finish(start(job), job)
    n_before = len(tally.failures)
    good = check_store(reference, tally, "at the end")
    tally.ended_equal = good == set(reference.records) and len(tally.failures) == n_before
    if code != 0 or good != set(reference.records):
        tally.failures.append(f"the last run ended with code {code} and {len(good)} good units: {complaint.strip()[-300:]}")
    rest = [p.name for p in store.folder.iterdir() if p.name not in {f"{key}.h5" for key in reference.records}]
    if tally.damaged_files == 0 and rest:
        tally.failures.append(f"left behind at the end: {rest}")
    return tally


def flip_and_cut(reference: Reference, n_cases: int, rng: np.random.Generator, tell=print) -> list[str]:
    """Flip one bit of a stored file, or cut it, again and again; every case must be noticed, and listing survive it."""
    store = reference.store
    key = sorted(reference.records)[0]
    path = store.path_of(key)
    sound = path.read_bytes()
    failures = []
    listed_whole = 0
    for case in range(n_cases):
        if case % 4 == 3:
            content = bytearray(sound[: int(rng.integers(0, len(sound)))])
            what = f"cut to {len(content)} bytes"
        else:
            # every third of the flips within what is not numbers: the first kilobytes and the HDF5 structures after them
            bit = int(rng.integers(8 * (len(sound) if case % 4 else min(len(sound), 16384))))
            content = bytearray(sound)
            content[bit // 8] ^= 1 << (bit % 8)
            what = f"bit {bit} flipped"
        path.write_bytes(content)
        if store.verify(key) is None or entry_of(path, every_byte=True).problem is None:
            failures.append(f"{what}: verified as sound")
        listed_whole += entry_of(path).problem is None
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", StoreDamageWarning)
            if store.get(key) is not None:
                failures.append(f"{what}: read as good")
        aside = list((store.folder / "set-aside").iterdir())
        if path.exists() or len(aside) != 2:
            failures.append(f"{what}: not set aside")
        for other in aside:
            other.unlink()
    path.write_bytes(sound)
    if store.verify(key) is not None:
        failures.append("the sound file is no longer sound")
    tell(
        f"  {listed_whole} of {n_cases} cases list by header and description alone as if whole; all bytes are read to verify or use"
    )
    return failures


def recognise(folder: Path, n_units: int) -> tuple[float, float]:
    """Return the seconds it takes to recognise so many units by name, size and header, and to list them with titles."""
    schema = SOLUTION_SCHEMA
    store = Hdf5Store(folder, schema)
    arrays = {
        spec.name: np.zeros((1,) * len(spec.dims), dtype=complex if "c" in spec.kind else float if "f" in spec.kind else int)
        for spec in schema.arrays
    }
    arrays |= {name: np.zeros(2, dtype=int) for name in ("coordinate_offset", "unknown_offset", "port_offset")}
    arrays["functions_shape"] = np.zeros((1, 2), dtype=int)
    arrays["position_m"] = np.zeros((1, 3))
    store.put(content_key(0), Record(arrays, {"frequency_hz": 1e8, "title": "one of many"}))
    record = store.get(content_key(0))
    assert record is not None
    for number in range(1, n_units):
        store.put(content_key(number), record)
    fresh = Hdf5Store(folder, schema)
    began = time.perf_counter()
    keys = fresh.keys()
    assert all(key in fresh for key in (content_key(n) for n in range(n_units)))
    by_header = time.perf_counter() - began
    assert len(keys) == n_units
    began = time.perf_counter()
    assert sum(entry_of(path).problem is None for path in unit_paths(folder)) == n_units
    return by_header, time.perf_counter() - began


def two_at_once(reference: Reference, tally: Tally) -> int:
    """Start two runs on an empty store, kill one of them half way; return how many units the two have stored in all."""
    store = reference.store
    shutil.rmtree(store.folder.parent, ignore_errors=True)
    stored = set()
    processes = [start(reference.job), start(reference.job)]
    # together they need about half the time
    half = time.monotonic() + reference.first_unit_seconds + 0.25 * (reference.seconds - reference.first_unit_seconds)
    killed = False
    while any(p.poll() is None for p in processes):
        for path in store.folder.glob("*.h5"):
            found = path.stat()
            stored.add((path.name, found.st_ino, found.st_mtime_ns))
        if not killed and time.monotonic() > half:
            killed = True
            end_orphans(processes[0].pid)
        time.sleep(0.002)
    codes = [finish(p, reference.job)[0] for p in processes]
    good = check_store(reference, tally, "two runs at once")
    if codes[1] != 0 or good != set(reference.records):
        tally.failures.append(f"two runs at once: exit codes {codes}, {len(good)} good units")
    if left_behind(store.folder.parent):
        tally.failures.append(f"two runs at once: left behind {left_behind(store.folder.parent)}")
    return len(stored)


def main() -> None:
    """Do all parts and print what was found."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--kills", type=int, default=200)
    parser.add_argument("--flips", type=int, default=1000, help="bit flips and cuts of one stored file")
    parser.add_argument("--units", type=int, default=1000, help="units to recognise")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--folder", type=Path, help="where to work; by default a temporary folder")
    options = parser.parse_args()
    rng = np.random.default_rng(options.seed)
    with tempfile.TemporaryDirectory(dir=options.folder) as name:
        folder = Path(name)
        reference = undisturbed(make_job(folder / "job"))
        print(
            f"undisturbed run of {N_ANTENNAS} antennas, {len(FREQUENCIES_HZ)} frequencies: {reference.seconds:.1f} s, first unit after "
            f"{reference.first_unit_seconds:.1f} s; two such runs agree in every bit"
        )
        failures = []
        if options.kills:
            tally = kill_at_random(reference, options.kills, rng)
            failures += tally.failures
            print(
                f"{tally.kills.total()} random kills ({', '.join(f'{n} of a {k} process' for k, n in sorted(tally.kills.items()))}): "
                f"{tally.caught_writing} while a file was being written, {tally.caught_claimed} while a unit was claimed, "
                f"{tally.damaged_files} damaged files found, {len(tally.failures)} failures; at the end all "
                f"{len(reference.records)} units equal the undisturbed run's bit for bit: {tally.ended_equal}"
            )
            pair = Tally()
            n_stored = two_at_once(reference, pair)
            failures += pair.failures
            print(
                f"two runs at once, one killed half way: {len(reference.records)} units, stored {n_stored} times in all, "
                f"{len(pair.failures)} failures"
            )
        if options.flips:
            found = flip_and_cut(reference, options.flips, rng)
            failures += found
            print(f"{options.flips} single-bit flips and cuts of a stored file: {options.flips - len(found)} noticed")
        if options.units:
            by_header, described = recognise(folder / "many", options.units)
            print(
                f"{options.units} units recognised by name, size and header in {by_header:.2f} s, "
                f"with titles and frequencies in {described:.2f} s"
            )
            if by_header > 5.0:
                failures.append(f"recognising took {by_header:.1f} s")
    for failure in failures:
        print(f"FAILED {failure}")
    sys.exit(bool(failures))


if __name__ == "__main__":
    main()
