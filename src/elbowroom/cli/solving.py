"""Solving what the stores of some jobs lack: plan, workers, progress, log and what is said in the end."""

from __future__ import annotations

import contextlib
import sys
from collections import Counter
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any, NamedTuple

import click

if TYPE_CHECKING:
    import logging

    from elbowroom.cli.screen import Screen
    from elbowroom.job.engine.campaign import Campaign, CampaignUnit
    from elbowroom.job.engine.items import ItemResult, UnitFailure, WorkItem
    from elbowroom.job.engine.runner import Workers
    from elbowroom.job.engine.split import Split
    from elbowroom.job.pipeline import JobRun

LOG_FILE = "solve.log"
"""In the folder of the first job's store."""

MOST_ROWS = 100
"""Units that get a line of the table each; more would be read by nobody."""


class Wish(NamedTuple):
    """What the user wants of a run.

    Attributes
    ----------
    workers, threads : int or None
        Chosen by rule where None.
    cluster : str or None
        Address of a Dask scheduler, or ``"local"``.
    log : Path or None
        Where the log goes; beside the store by default.
    plan_only : bool
        Whether to stop after the plan.
    """

    workers: int | None = None
    threads: int | None = None
    cluster: str | None = None
    log: Path | None = None
    plan_only: bool = False


def workers_options(command: Any) -> Any:
    """Add the options about workers to a command, which gets them as ``wish``."""
    options = [
        click.option("--workers", type=click.IntRange(1, 4096), help="Units at a time; chosen for cores and memory by default."),
        click.option(
            "--threads", type=click.IntRange(1, 1024),
            help="Threads of each unit; the same number gives the same results to the last bit. Chosen by default.",
        ),
        click.option(
            "--cluster", metavar="ADDRESS",
            help="Solve on a Dask cluster: a scheduler's address or file, or 'local' for one on this machine.",
        ),
        click.option(
            "--log", type=click.Path(path_type=Path), help=f"Log file, added to; by default {LOG_FILE} in the store's folder."
        ),
    ]  # fmt: skip
    for option in reversed(options):
        command = option(command)
    return command


def solve_all(runs: list[JobRun], screen: Screen, wish: Wish | None = None) -> list[UnitFailure]:
    """Solve what the stores of some jobs lack; show the plan, the progress and what came out.

    Afterwards each job has only the frequencies that are in its store.

    Parameters
    ----------
    runs : list of JobRun
        The jobs.
    screen : Screen
        Where to tell.
    wish : Wish, optional
        Workers, log, plan only.

    Returns
    -------
    list of UnitFailure
        One for each unit that failed.

    Raises
    ------
    ElbowroomError
        If nothing can be started.
    """
    from elbowroom.cli.common import checked_log
    from elbowroom.job.engine.campaign import Campaign

    wish = wish or Wish()
    if wish.log is not None:
        checked_log(runs, wish.log)
    for run in runs:
        for line in run.job.resolved_lines():
            screen.say(f"  {line}")
        for problem in run.problems():
            if problem.severity != "error":
                screen.warn(problem.text)
    campaign = Campaign(runs)
    campaign.read_stored()
    if wish.plan_only and any(u.run.solver_at(u.frequency_hz) == "reduced" for u in campaign.to_solve):
        screen.say("making functions of the reduced solver at up to three frequencies of each station, to tell memory and disk")
    campaign.predict(sampled=wish.plan_only)
    # Where workers are elsewhere, so is the memory that counts; it is looked at when they are known.
    campaign.check(available_bytes=None if wish.cluster is None else sys.maxsize)
    threads = wish.threads
    if threads is None and wish.cluster not in (None, "local"):
        threads = 1  # how many cores a worker elsewhere has for itself only its owner knows
    split = campaign.split(wish.workers, threads)
    _tell_plan(campaign, split, wish, screen)
    if wish.plan_only:
        return []
    for unit in campaign.units:
        if unit.stored:
            _emit_unit(campaign, unit, "from store", screen)
    failures: dict[int, UnitFailure] = {}
    if campaign.to_solve:
        failures = _solve(campaign, split, wish, screen)
    _show(campaign, failures, screen)
    for run in runs:
        run.frequencies_hz = tuple(u.frequency_hz for u in campaign.units if u.run is run and u.stored)
    return list(failures.values())


def _tell_plan(campaign: Campaign, split: Split, wish: Wish, screen: Screen) -> None:
    from elbowroom.base.sizes import readable_bytes
    from elbowroom.cli.screen import readable_seconds
    from elbowroom.job.engine.campaign import predicted_seconds

    units, left = campaign.units, campaign.to_solve
    stored = sum(u.stored for u in units)
    shared = sum(u.twin is not None and not u.stored for u in units)
    what = "frequencies" if len(campaign.runs) == 1 else f"units of {len(campaign.runs)} stations"
    twins = f", {shared} solved with another of the same key" if shared else ""
    made = sum(u.frequency_hz in plan.between for u in left for plan in u.run.segments)
    between = f"; {made} of them are made from solved ones where the error allows, else solved too" if made else ""
    screen.say(f"{len(units)} {what}, {stored} in the store already, {len(left)} to solve{twins}{between}")
    whole = campaign.total()
    seconds = predicted_seconds(campaign, split)
    at_once = min(split.workers, len(left))
    # Where workers are many, the largest that may meet.
    meet = sorted((u.prediction.memory_bytes for u in left if u.prediction), reverse=True)[: max(at_once, 1)]
    if left and (len(left) > 1 or wish.plan_only):
        screen.say(
            f"predicted: {readable_seconds(seconds)} with {split.workers} at a time and {split.threads} "
            f"thread{'s' if split.threads > 1 else ''} each, {readable_bytes(sum(meet))} of memory, "
            f"{readable_bytes(whole.disk_bytes)} of disk"
        )
    screen.emit(
        "plan", units=len(units), stored=stored, shared=shared, to_solve=len(left), workers=split.workers, threads=split.threads,
        seconds=seconds, memory_bytes=sum(meet), disk_bytes=whole.disk_bytes,
    )  # fmt: skip
    if not wish.plan_only:
        return
    rows = []
    for unit in units:
        p = unit.prediction
        state = "in store" if unit.stored else "with another" if unit.twin is not None else "to solve"
        figures = ["", "", ""]
        if p is not None:
            figures = [readable_seconds(p.seconds), readable_bytes(p.memory_bytes), readable_bytes(p.disk_bytes)]
        rows.append([campaign.label_of(unit), state, unit.run.solver_at(unit.frequency_hz), *figures])
        values = {} if p is None else {"seconds": p.seconds, "memory_bytes": p.memory_bytes, "disk_bytes": p.disk_bytes}
        screen.emit(
            "planned", job=str(unit.run.job.path), frequency_hz=unit.frequency_hz, state=state, key=unit.key, **values
        )  # fmt: skip
    if len(rows) <= MOST_ROWS:
        screen.table("Plan", ["unit", "state", "solver", "time with all cores", "memory", "disk"], rows)
    screen.say("time: to some tens of per cent; disk: within 10 %")


def _solve(campaign: Campaign, split: Split, wish: Wish, screen: Screen) -> dict[int, UnitFailure]:
    """Solve what is missing; return the failures by the place of their unit in the campaign."""
    from elbowroom.cli.progress import RunProgress
    from elbowroom.job.engine.items import UnitFailure
    from elbowroom.job.engine.runner import run_items

    alone = wish.cluster is None and wish.workers is None and campaign.here(split)
    items = campaign.items(split.threads, longest_first=not alone)
    place_of = {id(unit): i for i, unit in enumerate(campaign.units)}
    failures: dict[int, UnitFailure] = {}
    with _log(wish.log or campaign.runs[0].job.store_folder / LOG_FILE) as log, contextlib.ExitStack() as stack:
        progress = RunProgress(screen, items, split.workers)
        staff = _staff(split, wish, alone, progress.stage)
        # Ended even if nothing is begun.
        stack.callback(staff.workers.stop)
        progress.workers = staff.at_once
        if staff.memory_bytes:
            campaign.check(available_bytes=staff.memory_bytes)
        log.info("%d units to solve, %d in the store; %s", progress.all, sum(u.stored for u in campaign.units), staff.described)
        screen.say(staff.described)
        events = stack.enter_context(contextlib.closing(run_items(items, staff.workers, elsewhere=campaign.elsewhere)))
        stack.enter_context(progress)
        for event in events:
            item = event.item
            if item is None:
                progress.tick()
                continue
            if event.kind == "started":
                progress.started(item)
                log.info("started %s", item.label)
            elif event.kind == "again":
                progress.again(item)
                screen.warn(f"{item.label}: {event.cause}; it is tried once more, alone, when the others are finished")
                log.warning("%s: %s; tried once more later", item.label, event.cause)
            elif event.result is not None:
                for note in event.result.notes:
                    screen.warn(f"{item.label}: {note}")
                    log.warning("%s: %s", item.label, note)
                bad = [o for o in event.result.outcomes if isinstance(o, UnitFailure)]
                progress.ended(item, event.result.seconds, len(bad))
                for index, outcome in enumerate(event.result.outcomes):
                    for unit in campaign.units_of(item, index):
                        if isinstance(outcome, UnitFailure):
                            failures[place_of[id(unit)]] = outcome
                            screen.emit("failed", job=str(unit.run.job.path), frequency_hz=unit.frequency_hz, error=outcome.cause)
                            continue
                        unit.stored, unit.statistics = True, outcome.statistics
                        _emit_unit(campaign, unit, outcome.state, screen)
                _log_end(log, item, event.result)
        log.info("%d solved, %d failed", progress.finished, progress.failed)
    return failures


class _Staff(NamedTuple):
    """Who does the work, a line that says so, how many, and the memory [byte] that each has elsewhere; 0 if unknown."""

    workers: Workers
    described: str
    at_once: int
    memory_bytes: int = 0


def _staff(split: Split, wish: Wish, alone: bool, stage: Callable[[float, str, float], None]) -> _Staff:
    """Return who does the work."""
    from elbowroom.base.machine import available_memory_bytes
    from elbowroom.job.engine.local import InProcess, ProcessWorkers

    each, count = f"{split.threads} thread{'s' if split.threads > 1 else ''}", split.workers
    if wish.cluster is not None:
        from elbowroom.job.engine.cluster import DaskWorkers, connect

        workers = DaskWorkers(connect(wish.cluster, workers=split.workers))
        count = workers.workers
        return _Staff(workers, f"solving on a cluster of {count} workers, each unit with {each}", count, workers.memory_bytes)
    if alone:
        return _Staff(InProcess(stage), f"solving in this process with {each}", 1)
    processes = f"{count} worker process{'es' if count > 1 else ''}"
    return _Staff(ProcessWorkers(count, available_memory_bytes()), f"solving in {processes}, each with {each}", count)


def _emit_unit(campaign: Campaign, unit: CampaignUnit, state: str, screen: Screen) -> None:
    values: dict[str, Any] = {}
    s = unit.statistics
    if s is not None:
        reduced = s.strategy == "reduced"
        values = {
            "solver": s.strategy, "unknowns": s.n_unknowns, "functions": s.n_functions, "ports": s.n_ports,
            "relative_residual": None if reduced else s.relative_residual, "mesh_error": s.mesh_error,
            "pattern_error": s.pattern_error, "port_matrix_error": s.port_matrix_error, "seconds": sum(s.seconds.values()),
            "origin": s.origin,
        }  # fmt: skip
        unit.state = state
    if len(campaign.runs) > 1:
        values["job"] = str(unit.run.job.path)
    screen.emit("unit", frequency_hz=unit.frequency_hz, state=state, **values, file=str(unit.path))


def _show(campaign: Campaign, failures: dict[int, UnitFailure], screen: Screen) -> None:
    """Show a table of what was solved, and what failed and why."""
    from elbowroom.cli.screen import readable_seconds

    rows = []
    for unit in campaign.units:
        s = unit.statistics
        if s is None:
            continue
        reduced = s.strategy == "reduced"
        first = unit.frequency_hz / 1e6 if len(campaign.runs) == 1 else campaign.label_of(unit)
        rows.append(
            [first, unit.state, s.strategy, s.origin, s.n_unknowns, s.n_functions if reduced else "", s.n_ports,
             "" if reduced else f"{s.relative_residual:.1e}", f"{s.mesh_error:.1e}", f"{s.pattern_error:.1e}" if reduced else "",
             readable_seconds(sum(s.seconds.values()))]
        )  # fmt: skip
    if len(rows) > MOST_ROWS:
        origins = Counter(u.statistics.origin for u in campaign.units if u.statistics is not None)
        screen.say(
            f"{len(rows)} units ({', '.join(f'{count} {origin}' for origin, count in origins.items())}): no table of so many; "
            "--json gives a line for each"
        )
    elif rows:
        screen.table(
            "Solutions",
            ["frequency [MHz]" if len(campaign.runs) == 1 else "unit", "state", "solver", "origin", "unknowns", "functions",
             "ports", "residual", "mesh error", "pattern error", "solve time"],
            rows,
        )  # fmt: skip
        screen.say(
            "origin: matrix assembled at that frequency, or interpolated along frequency and solved, or currents of solved "
            "frequencies interpolated;"
        )
        screen.say("residual: of the linear system; mesh error: change of an isolated antenna's admittance on a finer mesh;")
        screen.say(
            "pattern error: of embedded patterns (100-ohm ports) relative to their peaks, against all unknowns of the mesh"
        )
    for place, failure in failures.items():
        unit = campaign.units[place]
        where = "" if len(campaign.runs) == 1 else f" ({unit.run.job.path})"
        screen.error.print(f"failed at {unit.frequency_hz / 1e6:g} MHz{where}: {failure.cause}", markup=False)
        if failure.details:
            screen.error.print(failure.details, markup=False)
    if failures and len(campaign.units) > 1:
        screen.error.print(
            f"{len(failures)} of {len(campaign.units)} units failed; the next run takes up only these", markup=False
        )


@contextlib.contextmanager
def _log(path: Path) -> Iterator[logging.Logger]:
    """Write what is logged to the end of a file; a log that cannot be written stops nothing."""
    import logging

    log = logging.getLogger("elbowroom.run")
    log.setLevel(logging.INFO)
    log.propagate = False
    handler: logging.Handler
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        handler = logging.FileHandler(path, encoding="utf-8", errors="backslashreplace")
        # a full disk says so where units are stored; logging would show a traceback for each line instead
        handler.handleError = lambda record: None  # type: ignore[method-assign]
    except OSError:
        handler = logging.NullHandler()
    handler.setFormatter(logging.Formatter("%(asctime)s %(levelname)s %(message)s"))
    log.addHandler(handler)
    try:
        yield log
    except BaseException as error:
        log.warning("ended by %s", type(error).__name__.strip("_"))
        raise
    finally:
        log.removeHandler(handler)
        with contextlib.suppress(OSError):
            handler.close()


def _log_end(log: logging.Logger, item: WorkItem, result: ItemResult) -> None:
    from elbowroom.job.engine.items import UnitFailure

    for outcome in result.outcomes:
        if isinstance(outcome, UnitFailure):
            log.error("failed %s: %s%s", item.label, outcome.cause, f"\n{outcome.details}" if outcome.details else "")
        else:
            log.info(
                "%s %s in %.2f s, predicted %.2f s with all cores; peak memory of its process %.0f MB",
                outcome.state, item.label, result.seconds, item.prediction.seconds, result.peak_bytes / 1e6,
            )  # fmt: skip
