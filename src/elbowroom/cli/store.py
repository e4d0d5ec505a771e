"""Commands about stores: what is in them, whether it is sound, what may go, and how it travels."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from elbowroom.base.errors import StoreError
from elbowroom.cli.common import make_screen, modes

if TYPE_CHECKING:
    from elbowroom.cli.screen import Screen
    from elbowroom.job.storecare import Pruning, Removal
    from elbowroom.store.care import UnitEntry

STORE = click.argument("store", type=click.Path(path_type=Path))
FILE = click.argument("file", type=click.Path(path_type=Path))

_SHOWN_KEY = 12


@click.group()
def store() -> None:
    """Look after a store of solved currents: list, verify, prune, pack, unpack.

    STORE is the folder of a store, or a job file: then it is the store of that job.
    """


@store.command("list")
@STORE
@modes
def list_units(store: Path, mode: str | None) -> None:
    """List the units in STORE; of a job file, the units that the job needs.

    Looks at headers and descriptions only; 'verify' reads every byte.
    """
    from elbowroom.base.sizes import readable_bytes
    from elbowroom.job.storecare import claims_in, needs_of, place_of
    from elbowroom.store.care import entries, left_behind

    screen = make_screen(mode)
    place = place_of(store)
    needs = None if place.run is None else needs_of(place.run)
    units: list[UnitEntry] = []
    others: list[UnitEntry] = []
    for unit in entries(place.folder):
        (units if needs is None or needs.includes(unit) else others).append(unit)
    units.sort(key=lambda u: (u.problem is not None, u.schema_name, u.schema_version, _frequency_hz(u) or 0.0, u.key))
    for unit in units:
        screen.emit("unit", **_facts(unit), state="damaged" if unit.problem else "stored", problem=unit.problem)
    if units:
        _unit_table(screen, f"Units in {place.folder}", units)
    _tell_damaged(screen, units)
    if place.run is not None and needs is not None:
        there = {u.key for u in units}
        missing = [f for f in place.run.frequencies_hz if place.run.key(f) not in there]
        for frequency in missing:
            screen.emit("missing", frequency_hz=frequency)
        if missing:
            screen.say(f"not solved yet: {', '.join(f'{f / 1e6:g}' for f in missing)} MHz")
    for key, holder in claims_in(place.folder).items():
        screen.emit("claim", key=key, host=holder.host, pid=holder.pid, since_utc=holder.since_utc, state=holder.state)
        screen.say(f"{key[:_SHOWN_KEY]}: claimed by {holder}")
    left = left_behind(place.folder)
    _total(screen, units, "")
    if others:
        screen.say(f"{_counted(len(others), 'unit')} of other jobs, {readable_bytes(sum(u.size_bytes for u in others))}")
    if left:
        screen.say(f"{_counted(len(left), 'file')} set aside or left behind; 'elbowroom store prune' removes them")


@store.command()
@STORE
@click.option("--set-aside", "aside", is_flag=True, help="Move damaged units out of the way, so that the next run solves them.")
@modes
def verify(store: Path, aside: bool, mode: str | None) -> None:
    """Read every byte of STORE and name what is damaged; of a job file, of the units that the job needs.

    The exit code is 6 if anything is damaged.
    """
    from elbowroom.job.storecare import needs_of, place_of, set_aside
    from elbowroom.store.care import entries, entry_of

    screen = make_screen(mode)
    place = place_of(store)
    needs = None if place.run is None else needs_of(place.run)
    units, damaged = [], []
    for seen in entries(place.folder):
        if needs is not None and not needs.includes(seen):
            continue
        if not seen.path.exists() and not seen.path.is_symlink():
            continue  # removed meanwhile
        unit = entry_of(seen.path, every_byte=True)
        units.append(unit)
        screen.emit("unit", **_facts(unit), state="damaged" if unit.problem else "sound", problem=unit.problem)
        if unit.problem:
            damaged.append(unit)
    _tell_damaged(screen, damaged)
    if aside:
        for unit in damaged:
            for report in set_aside(unit):
                screen.emit(
                    "set aside", file=str(report.path), moved_to=None if report.moved_to is None else str(report.moved_to)
                )
                screen.say(str(report))
    _total(screen, units, " read", damaged=len(damaged))
    if damaged:
        if not aside:
            screen.say("runs set damaged units aside and solve them again; '--set-aside' does the first now")
        sys.exit(StoreError.exit_code)


@store.command()
@STORE
@click.option(
    "--job", "jobs", type=click.Path(path_type=Path), multiple=True, metavar="JOB",
    help="Job whose units stay; may be given several times.",
)  # fmt: skip
@click.option(
    "--only-named", is_flag=True,
    help="Keep the units of named jobs only: do not look for jobs in the folder around STORE, and let none be enough.",
)  # fmt: skip
@click.option("--older-than-days", type=click.FloatRange(min=0.0), default=0.0, help="Only units stored so long ago.")
@click.option("--other-versions", is_flag=True, help="Also what other versions of the program have stored.")
@click.option("--remove", is_flag=True, help="Do it; without this, what would go is only listed.")
@modes
def prune(
    store: Path, jobs: tuple[Path, ...], only_named: bool, older_than_days: float, other_versions: bool, remove: bool,
    mode: str | None,
) -> None:  # fmt: skip
    """List what no job needs in STORE, and with --remove, remove it.

    Jobs are those named, that of STORE if it is a job file, and those in the folder around the store that use it.  Damaged
    units of this version, files set aside and what killed runs left behind go too.
    """
    from math import isfinite

    from elbowroom.base.sizes import readable_bytes
    from elbowroom.job.storecare import carry_out, place_of, plan_pruning

    if not isfinite(older_than_days):
        msg = f"--older-than-days {older_than_days}: expected a number of days"
        raise click.UsageError(msg)
    screen = make_screen(mode)
    place = place_of(store)
    named = [] if place.run is None else [place.run]
    for path in jobs:
        given = place_of(path)
        if given.run is None:
            msg = f"--job {path}: expected a job file, found a folder"
            raise click.UsageError(msg)
        named.append(given.run)
    plan = plan_pruning(
        place.folder, named, only_named=only_named, older_than_days=older_than_days, other_versions=other_versions
    )
    for path in plan.jobs:
        screen.emit("job", path=str(path))
        screen.say(f"units of {path} stay")
    _tell_plan(screen, plan)
    stay = f"{_counted(len(plan.kept), 'unit')} {'stays' if len(plan.kept) == 1 else 'stay'}"
    stays = f"{stay} ({readable_bytes(sum(u.size_bytes for u in plan.kept))})"
    if not plan.removals:
        screen.say(f"nothing to remove; {stays}")
        return
    size = readable_bytes(sum(r.size_bytes for r in plan.removals))
    if not remove:
        screen.say(f"{_counted(len(plan.removals), 'file')} would go ({size}), {stays}; nothing was removed: '--remove' does it")
        return
    gone, stayed = carry_out(plan, place.folder)
    for removal in gone:
        screen.emit("removed", file=str(removal.path), size_bytes=removal.size_bytes)
    for text in stayed:
        screen.warn(f"not removed: {text}")
    screen.say(f"{_counted(len(gone), 'file')} removed ({readable_bytes(sum(r.size_bytes for r in gone))}), {stays}")
    if stayed:
        sys.exit(StoreError.exit_code)


@store.command()
@STORE
@FILE
@click.option("--leave-damaged", is_flag=True, help="Pack the sound units although others are damaged.")
@click.option("--replace", is_flag=True, help="Write over FILE if it exists and is a pack.")
@modes
def pack(store: Path, file: Path, leave_damaged: bool, replace: bool, mode: str | None) -> None:
    """Write all units of STORE, or those that a job needs, into one portable FILE; every byte is checked.

    FILE is a tar file with a sum over all of it; 'unpack' adds it to another store.
    """
    from elbowroom.base.inputs import real_path
    from elbowroom.base.sizes import readable_bytes
    from elbowroom.job.storecare import needs_of, place_of
    from elbowroom.store.care import entries, entry_of
    from elbowroom.store.packs import write_pack

    screen = make_screen(mode)
    place = place_of(store)
    if real_path(file).is_relative_to(real_path(place.folder)):
        msg = "a pack cannot stand inside the store itself"
        raise StoreError(msg, path=file)
    if file.exists() and file.is_file() and not replace:
        msg = "exists already; another name, or --replace, is needed"
        raise StoreError(msg, path=file)
    needs = None if place.run is None else needs_of(place.run)
    units = [u for u in entries(place.folder) if needs is None or needs.includes(u)]
    if leave_damaged:
        units = [entry_of(u.path, every_byte=True) for u in units]
        left = [u for u in units if u.problem]
        _tell_damaged(screen, left)
        units = [u for u in units if not u.problem]
    packed = write_pack(file, [u.path for u in units], replace=replace)
    for unit in packed:
        screen.emit("packed", file=unit.file, size_bytes=unit.length, sha256=unit.sha256)
    if place.run is not None:
        there = {u.key for u in packed}
        missing = [f for f in place.run.frequencies_hz if place.run.key(f) not in there]
        if missing:
            screen.warn(f"not in the pack, because not solved: {', '.join(f'{f / 1e6:g}' for f in missing)} MHz")
    screen.wrote(file, f"{_counted(len(packed), 'unit')}, {readable_bytes(file.stat().st_size)}")


@store.command()
@STORE
@FILE
@modes
def unpack(store: Path, file: Path, mode: str | None) -> None:
    """Add to STORE the units of a pack FILE, after checking every byte; sound ones already there stay."""
    from elbowroom.base.sizes import readable_bytes
    from elbowroom.job.storecare import place_of
    from elbowroom.store.packs import unpack as unpacked

    screen = make_screen(mode)
    place = place_of(store, new=True)
    there = []

    def each(unit: Any, is_new: bool) -> None:
        screen.emit("added" if is_new else "there already", file=unit.file, size_bytes=unit.length)
        if not is_new:
            there.append(unit)

    added = unpacked(file, place.folder, report=lambda damage: screen.warn(str(damage)), each=each)
    size = readable_bytes(sum(u.length for u in added))
    screen.say(f"{_counted(len(added), 'unit')} added to {place.folder} ({size}), {len(there)} were there already")


def _frequency_hz(unit: UnitEntry) -> float | None:
    found = unit.attributes.get("frequency_hz")
    return float(found) if isinstance(found, (int, float)) else None


def _facts(unit: UnitEntry) -> dict[str, Any]:
    return {
        "file": str(unit.path), "key": unit.key, "schema": unit.schema_name, "schema_version": unit.schema_version,
        "size_bytes": unit.size_bytes, "frequency_hz": _frequency_hz(unit), "title": unit.attributes.get("title"),
        "ground": unit.attributes.get("ground"), "solver": unit.attributes.get("strategy"),
        "origin": unit.attributes.get("origin"), "stored_utc": unit.created_utc or None,
    }  # fmt: skip


def _cells(unit: UnitEntry) -> list[Any]:
    from elbowroom.base.sizes import readable_bytes

    frequency = _frequency_hz(unit)
    ports = unit.attributes.get("port_names")
    return [
        "?" if frequency is None else frequency / 1e6, unit.attributes.get("title") or "", unit.attributes.get("strategy") or "",
        len(ports) if isinstance(ports, list) else "", readable_bytes(unit.size_bytes), unit.created_utc[:16].replace("T", " "),
    ]  # fmt: skip


def _unit_table(screen: Screen, title: str, units: list[UnitEntry]) -> None:
    """Show units in a table; grounds of one kind are numbered, and described below it."""
    from elbowroom.cli.screen import short_origin

    grounds = _ground_names([_ground_of(u) for u in units])
    columns = ["frequency [MHz]", "title", "ground", "solver", "origin", "ports", "size", "stored (UTC)", "key"]
    rows = []
    for unit in units:
        frequency, name, solver, *rest = _cells(unit)
        ground = grounds[_ground_of(unit)]
        origin = str(unit.attributes.get("origin") or "")
        rows.append([frequency, name, ground, solver, short_origin(origin), *rest, unit.key[:_SHOWN_KEY]])
    if any(u.problem for u in units):
        columns.append("state")
        for row, unit in zip(rows, units, strict=True):
            row.append("damaged" if unit.problem else "stored")
    screen.table(title, columns, rows)
    for description, name in grounds.items():
        if description != name:
            screen.say(description if description.startswith(name) else f"{name}: {description}")


def _ground_of(unit: UnitEntry) -> str:
    """Return what a unit says of its ground in words; tables of grounds have other numbers at each frequency: their kind."""
    ground = unit.attributes.get("ground")
    return str(ground.get("kind", "") if isinstance(ground, dict) else ground or "")


def _ground_names(descriptions: list[str]) -> dict[str, str]:
    """Return a short name for each description of a ground: its first words, numbered where several begin alike."""
    different = list(dict.fromkeys(descriptions))
    first = {text: text.replace(":", ",").split(",")[0].strip()[:18] for text in different}
    names = {}
    for text in different:
        alike = [other for other in different if first[other] == first[text]]
        names[text] = first[text] if len(alike) == 1 else f"{first[text]} {alike.index(text) + 1}"
    return names


def _counted(count: int, noun: str) -> str:
    # That of `geometry.csvtable` would load numpy, for which help texts need not wait.
    return f"{count} {noun}{'' if count == 1 else 's'}"


def _tell_damaged(screen: Screen, units: list[UnitEntry]) -> None:
    for unit in units:
        if unit.problem:
            screen.error.print(f"damaged: {unit.path}: {unit.problem}", markup=False)


def _total(screen: Screen, units: list[UnitEntry], what: str, **more: int) -> None:
    from elbowroom.base.sizes import readable_bytes

    size = sum(u.size_bytes for u in units)
    screen.emit("total", units=len(units), size_bytes=size, **more)
    told = "".join(f", {count} {name}" for name, count in more.items())
    if screen.mode != "json":
        screen.out.print(f"{_counted(len(units), 'unit')}{what}, {readable_bytes(size)}{told}", markup=False)


def _tell_plan(screen: Screen, plan: Pruning) -> None:
    from elbowroom.base.sizes import readable_bytes

    def described(removal: Removal) -> list[Any]:
        if removal.unit is None:
            return ["", "", readable_bytes(removal.size_bytes), "", removal.path.name[:_SHOWN_KEY], removal.why]
        frequency, title, _, _, size, stored = _cells(removal.unit)
        return [frequency, title, size, stored, removal.unit.key[:_SHOWN_KEY], removal.why]

    for removal in plan.removals:
        unit = {} if removal.unit is None else _facts(removal.unit)
        screen.emit("removable", **{**unit, "file": str(removal.path), "size_bytes": removal.size_bytes}, why=removal.why)
    if plan.removals:
        screen.table(
            "To be removed", ["frequency [MHz]", "title", "size", "stored (UTC)", "key or name", "why"],
            [described(r) for r in plan.removals],
        )  # fmt: skip
