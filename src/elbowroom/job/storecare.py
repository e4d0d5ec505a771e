"""Stores as people meet them: a folder, or the store of a job; which units jobs need, what may go."""

from __future__ import annotations

import os
import stat
import tomllib
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING

from elbowroom.base.errors import ElbowroomError, StoreError
from elbowroom.base.inputs import read_input, real_path
from elbowroom.job.dropping import PORTS_SCHEMA
from elbowroom.job.groundtables import GROUND_SCHEMA, table_key
from elbowroom.job.solve import SOLUTION_SCHEMA
from elbowroom.store import Hdf5Store, Schema
from elbowroom.store.care import SCHEMA_FOLDER, UnitEntry, entries, left_behind, schema_folders
from elbowroom.store.claims import Holder
from elbowroom.store.disk import Disk, explained, flush_folder, same_file
from elbowroom.store.records import DamageReport

if TYPE_CHECKING:
    from elbowroom.job.pipeline import JobRun

SECONDS_PER_DAY = 86400.0


@dataclass(frozen=True)
class Place:
    """A store, and the job that led to it, if one did.

    Attributes
    ----------
    folder : Path
        Folder of the store.
    run : JobRun or None
        The job.
    """

    folder: Path
    run: JobRun | None = None


def place_of(where: Path, *, new: bool = False) -> Place:
    """Return the store in a folder, or the store of a job file.

    Parameters
    ----------
    where : Path
        A store's folder or a job file.
    new : bool, optional
        Whether the store need not be there yet.

    Returns
    -------
    Place

    Raises
    ------
    StoreError
        If there is no such store.
    JobFileError
        If the file is no job.
    """
    from elbowroom.job.jobfile import read_job
    from elbowroom.job.pipeline import JobRun

    if where.is_file():
        run = JobRun(read_job(where))
        return Place(run.job.store_folder, run)
    if not where.exists():
        if new:
            return Place(where)
        msg = "no such store: expected the folder of a store, or a job file"
        raise StoreError(msg, path=where)
    if not where.is_dir():
        msg = "is neither the folder of a store nor a job file"
        raise StoreError(msg, path=where)
    if SCHEMA_FOLDER.fullmatch(where.name) and not schema_folders(where):
        msg = f"is a folder inside a store; the store is {where.parent}"
        raise StoreError(msg, path=where)
    if not schema_folders(where) and (job := next(iter(sorted(where.glob("job*.toml"))), None)):
        msg = f"is no store; that of the job in it is meant by naming {job}"
        raise StoreError(msg, path=where)
    if not new and not schema_folders(where) and any(where.iterdir()):
        msg = "is no store: no folder in it is named as a store names its own"
        raise StoreError(msg, path=where)
    return Place(where)


@dataclass(frozen=True)
class Needs:
    """What a job needs of a store.

    Attributes
    ----------
    path : Path
        The job file.
    keys : frozenset of str
        Units of all its frequencies.
    run : JobRun
        The job with its station: units of the same station at other frequencies of its band serve what is worked out between
        solved frequencies.
    """

    path: Path
    keys: frozenset[str]
    run: JobRun

    def includes(self, unit: UnitEntry) -> bool:
        """Return whether the job needs a unit."""
        if unit.key in self.keys:
            return True
        frequency = unit.attributes.get("frequency_hz")
        if schema_of(unit) is None or isinstance(frequency, bool) or not isinstance(frequency, (int, float)):
            return False
        if not min(self.run.frequencies_hz) < frequency < max(self.run.frequencies_hz):
            return False
        try:
            return self.run.key(float(frequency)) == unit.key
        except ElbowroomError:
            return False  # the station cannot be modelled there, so this unit is another's


def needs_of(run: JobRun) -> Needs:
    """Return what a job needs of its store."""
    keys = run.needed_keys()
    if run.station.ground.lossy:
        keys |= {table_key(run.station, f) for f in run.frequencies_hz}
    return Needs(run.job.path, keys, run)


def jobs_beside(folder: Path) -> list[JobRun]:
    """Return the jobs in the folder around a store that use this store.

    Raises
    ------
    StoreError
        If a file there may be such a job and cannot be read: then nobody knows what it needs.
    """
    from elbowroom.job.jobfile import read_job
    from elbowroom.job.pipeline import JobRun

    found = []
    for path in sorted(folder.absolute().parent.glob("*.toml")):
        try:
            table = tomllib.loads(read_input(path).decode("utf-8-sig"))
            if "band" not in table and "station" not in table:
                continue  # an antenna, or somebody else's
            run = JobRun(read_job(path))
        except (OSError, ValueError, RecursionError, ElbowroomError) as cause:
            first = str(cause).splitlines()[0]
            msg = f"beside it stands {path}, which may be a job of this store and cannot be read: {first}"
            raise StoreError(msg, path=folder) from cause
        if real_path(run.job.store_folder) == real_path(folder):
            found.append(run)
    return found


def claims_in(folder: Path) -> dict[str, Holder]:
    """Return all claims in a store, void or not, by the keys of their units."""
    claims: dict[str, Holder] = {}
    for schema in schemas_in(folder):
        claims |= Hdf5Store(folder, schema).claims()
    return claims


def schemas_in(folder: Path) -> list[Schema]:
    """Return the schemas a store has folders of, without their arrays."""
    matches = (SCHEMA_FOLDER.fullmatch(path.name) for path in schema_folders(folder))
    return [Schema(match[1], int(match[2]), ()) for match in matches if match is not None]


def schema_of(unit: UnitEntry) -> Schema | None:
    """Return the schema of a unit if this version of the program reads such units, else None."""
    known = {(schema.name, schema.version): schema for schema in (SOLUTION_SCHEMA, PORTS_SCHEMA, GROUND_SCHEMA)}
    return known.get((unit.schema_name, unit.schema_version))


def set_aside(unit: UnitEntry) -> list[DamageReport]:
    """Move a damaged unit out of the way, as a run that meets it does; return what was done."""
    reports: list[DamageReport] = []
    schema = schema_of(unit) or Schema(unit.schema_name, unit.schema_version, ())
    Hdf5Store(unit.path.parents[1], schema, report=reports.append).get(unit.key)
    return reports


@dataclass(frozen=True)
class Removal:
    """A file that pruning would remove.

    Attributes
    ----------
    path : Path
        The file.
    size_bytes : int
        Its length.
    why : str
        Why it may go.
    unit : UnitEntry or None
        What it is, if it stands under the name of a unit.
    identity : tuple of int
        Device and inode: another file that takes its name meanwhile stays.
    """

    path: Path
    size_bytes: int
    why: str
    unit: UnitEntry | None
    identity: tuple[int, int]


@dataclass
class Pruning:
    """What pruning would remove and keep.

    Attributes
    ----------
    jobs : list of Path
        Jobs whose units stay.
    removals : list of Removal
        What goes.
    kept : list of UnitEntry
        What stays.
    """

    jobs: list[Path] = field(default_factory=list)
    removals: list[Removal] = field(default_factory=list)
    kept: list[UnitEntry] = field(default_factory=list)


def plan_pruning(
    folder: Path,
    named: Sequence[JobRun],
    *,
    only_named: bool = False,
    older_than_days: float = 0.0,
    other_versions: bool = False,
) -> Pruning:
    """Return what may be removed from a store; nothing is.

    Parameters
    ----------
    folder : Path
        The store.
    named : sequence of JobRun
        Jobs whose units stay, beside those of jobs found in the folder around the store.
    only_named : bool, optional
        Whether the named jobs are all there are: then no others are looked for, and with none named no unit stays.
    older_than_days : float, optional
        Units changed less than so many days ago stay, by the clock of the disk.
    other_versions : bool, optional
        Whether units go that other versions of the program have stored.

    Returns
    -------
    Pruning

    Raises
    ------
    StoreError
        If no job is known that says what stays, a named job uses another store, a file beside the store may be a job and cannot
        be read, a run works on a unit that no known job needs, or the system refuses.
    """
    for run in named:
        if real_path(run.job.store_folder) != real_path(folder):
            msg = f"the job {run.job.path} has another store: {run.job.store_folder}"
            raise StoreError(msg, path=folder)
    runs = {real_path(run.job.path): run for run in named}
    if not only_named:
        runs |= {path: run for run in jobs_beside(folder) if (path := real_path(run.job.path)) not in runs}
        if not runs:
            msg = "no job says what must stay: name those whose units are needed (--job), or say that none is (--only-named)"
            raise StoreError(msg, path=folder)
    needs = [needs_of(run) for run in runs.values()]
    claims = claims_in(folder)
    working = {key: holder for key, holder in claims.items() if holder.state == "working"}
    for key, holder in working.items():
        if not only_named and not any(key in need.keys for need in needs):
            msg = f"{holder} works on a unit that no known job needs; name its job (--job), or wait until it has ended"
            raise StoreError(msg, path=folder)
    plan = Pruning([need.path for need in needs])
    now: dict[Path, float] = {}
    for unit in entries(folder):
        try:
            found = os.lstat(unit.path)
        except FileNotFoundError:
            continue
        why = ""
        if unit.key in working or any(need.includes(unit) for need in needs):
            pass
        elif schema_of(unit) is not None:
            why = "damaged" if unit.problem is not None else "needed by no job"
        elif other_versions:
            why = f"of another version ({unit.path.parent.name})"
        if why and older_than_days > 0.0:
            if unit.path.parent not in now:
                now[unit.path.parent] = _disk_time(unit.path.parent)
            # a time in the future, left by a clock that was set back, is no age
            if now[unit.path.parent] - found.st_mtime < older_than_days * SECONDS_PER_DAY:
                why = ""
        if why and not stat.S_ISDIR(found.st_mode):
            plan.removals.append(Removal(unit.path, found.st_size, why, unit, (found.st_dev, found.st_ino)))
        else:
            plan.kept.append(unit)
    for path, why in left_behind(folder):
        found = os.lstat(path)
        plan.removals.append(Removal(path, found.st_size, why, None, (found.st_dev, found.st_ino)))
    return plan


def _disk_time(folder: Path) -> float:
    """Return the time by the clock of the disk [s]."""
    try:
        return Disk(folder).time()
    except OSError as cause:
        raise explained(cause, folder, "cannot be written to, which telling the age of its files takes") from cause


def carry_out(plan: Pruning, folder: Path) -> tuple[list[Removal], list[str]]:
    """Remove what a plan names, and void claims; return what went, and what did not, with the reason.

    What has changed since the plan was made stays, as does a unit that somebody works on by now.
    """
    gone, stayed = [], []
    working = {key for key, holder in claims_in(folder).items() if holder.state == "working"}
    for removal in plan.removals:
        if removal.unit is not None and removal.unit.key in working:
            stayed.append(f"{removal.path}: somebody works on it")
        elif not os.path.lexists(removal.path):
            continue
        elif not same_file(removal.path, removal.identity):
            stayed.append(f"{removal.path}: is another file by now")
        else:
            try:
                os.unlink(removal.path)
                gone.append(removal)
            except OSError as cause:
                stayed.append(f"{removal.path}: {cause.strerror}")
    for path in {removal.path.parent for removal in gone}:
        flush_folder(path)
    for schema in schemas_in(folder):
        store = Hdf5Store(folder, schema)
        for key in store.claims():
            store.discard_claim(key)
    return gone, stayed
