"""What several commands share: options, opening a job, solving what its store lacks."""

from __future__ import annotations

import os
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from elbowroom.cli.screen import Screen
    from elbowroom.job.pipeline import JobRun

JOB = click.argument("job", type=click.Path(path_type=Path))
FREQUENCIES = click.option(
    "--frequency-hz", "frequencies_hz", type=float, multiple=True, metavar="HZ",
    help="Only this frequency of the job; may be given several times.",
)  # fmt: skip


def modes(command: Any) -> Any:
    """Add ``--quiet`` and ``--json``."""
    command = click.option("--json", "mode", flag_value="json", help="One JSON object a line, for scripts.")(command)
    return click.option("--quiet", "mode", flag_value="quiet", help="Results and errors only.")(command)


def make_screen(mode: str | None) -> Screen:
    """Return the screen of a command in the mode its options ask for."""
    from elbowroom.cli.screen import Screen

    return Screen(mode or "normal")


def open_job(job: Path, frequencies_hz: tuple[float, ...], screen: Screen) -> JobRun:
    """Read a job and find its store; damaged files in it are told on the screen."""
    from elbowroom.job.jobfile import read_job
    from elbowroom.job.pipeline import JobRun

    return JobRun(read_job(job), frequencies_hz=frequencies_hz or None, report=lambda damage: screen.warn(str(damage)))


def prepare(run: JobRun, screen: Screen) -> list:
    """Show the settings and the doubts, refuse what cannot work, and return the plan."""
    for line in run.job.resolved_lines():
        screen.say(f"  {line}")
    for problem in run.problems():
        if problem.severity != "error":
            screen.warn(problem.text)
    return run.prepare()


def solve_all(run: JobRun, screen: Screen) -> tuple[list[float], list]:
    """Solve what the store lacks; return the frequencies that are solved and the failures."""
    from elbowroom.cli.screen import SolveProgress, readable_seconds
    from elbowroom.job.pipeline import Failure

    units = prepare(run, screen)
    missing = {u.frequency_hz: u.prediction.seconds for u in units if not u.stored}
    screen.say(f"{len(units)} frequencies, {len(units) - len(missing)} in the store already, {len(missing)} to solve")
    rows, solved, failures = [], [], []
    with SolveProgress(screen, missing) as progress:
        for frequency, outcome in zip(run.frequencies_hz, run.solutions(progress), strict=True):
            progress.finished(frequency)
            if isinstance(outcome, Failure):
                failures.append(outcome)
                screen.emit("failed", frequency_hz=frequency, error=str(outcome.error))
                continue
            solved.append(frequency)
            s = outcome.statistics
            total = sum(s.seconds.values())
            state = "solved" if frequency in progress.worked_on else "from store"
            reduced = s.strategy == "reduced"
            rows.append(
                [frequency / 1e6, state, s.strategy, s.n_unknowns, s.n_functions if reduced else "", s.n_ports,
                 "" if reduced else f"{s.relative_residual:.1e}", f"{s.mesh_error:.1e}",
                 f"{s.pattern_error:.1e}" if reduced else "", readable_seconds(total)]
            )  # fmt: skip
            screen.emit(
                "unit", frequency_hz=frequency, state=state, solver=s.strategy, unknowns=s.n_unknowns, functions=s.n_functions,
                ports=s.n_ports, relative_residual=None if reduced else s.relative_residual,
                mesh_error=s.mesh_error, pattern_error=s.pattern_error,
                port_matrix_error=s.port_matrix_error, seconds=total, file=str(run.path_of(frequency)),
            )  # fmt: skip
    if rows:
        screen.table(
            "Solutions",
            ["frequency [MHz]", "state", "solver", "unknowns", "functions", "ports", "residual", "mesh error", "pattern error",
             "solve time"],
            rows,
        )  # fmt: skip
        screen.say("residual: of the linear system; mesh error: change of an isolated antenna's admittance on a finer mesh;")
        screen.say(
            "pattern error: of embedded patterns (100-ohm ports) relative to their peaks, against all unknowns of the mesh"
        )
    for failure in failures:
        screen.error.print(f"failed at {failure.frequency_hz / 1e6:g} MHz: {failure.error}", markup=False)
    return solved, failures


def exit_on(failures: list) -> None:
    """End with the code of the first failure; the others' causes are on the screen."""
    if failures:
        sys.exit(failures[0].error.exit_code)


def require_stored(run: JobRun) -> None:
    """Refuse to go on unless the store has every frequency.

    Raises
    ------
    StoreError
        Naming what is missing and how to get it.
    """
    from elbowroom.base.errors import StoreError

    missing = [f for f in run.frequencies_hz if run.key(f) not in run.store]
    if missing:
        shown = ", ".join(f"{f / 1e6:g} MHz" for f in missing[:5]) + (", ..." if len(missing) > 5 else "")
        broken = sum(run.path_of(f).exists() for f in missing)
        damaged = f"; {broken} of their files in the store are damaged" if broken else ""
        msg = (
            f"{len(missing)} of {len(run.frequencies_hz)} frequencies are not solved yet ({shown}){damaged}; "
            f"'elbowroom solve {run.job.path}' solves them, 'elbowroom run' does everything"
        )
        raise StoreError(msg, path=run.job.store_folder)


def checked_output(run: JobRun, path: Path) -> Path:
    """Return where a file may be written: not over the job's own files, nor into its store.

    Raises
    ------
    ExportError
        Naming what stands there.
    """
    from elbowroom.base.errors import ExportError

    target, job = path.resolve(), run.job
    own = [job.path, job.layout_path, *job.antenna_paths.values(), *([job.as_built_path] if job.as_built_path else [])]
    if any(target == Path(p).resolve() for p in own):
        msg = f"cannot write {path}: it is a file of the job itself"
        raise ExportError(msg)
    if target.is_relative_to(job.store_folder.resolve()):
        msg = f"cannot write {path}: it lies in the job's store"
        raise ExportError(msg)
    return path


def checked_folder(folder: Path) -> Path:
    """Return a folder for results that can be made, so that nothing is worked out in vain; nothing is made yet.

    Raises
    ------
    ExportError
        If a file stands in its way, or nothing can be written there.
    """
    from elbowroom.base.errors import ExportError

    place = folder.absolute()
    while not place.exists() and place != place.parent:
        place = place.parent
    if not place.is_dir() or not os.access(place, os.W_OK):
        msg = f"cannot write into {folder}: {place} {'cannot be written' if place.is_dir() else 'is a file'}"
        raise ExportError(msg)
    return folder
