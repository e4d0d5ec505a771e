"""What several commands share: options, opening a job, solving what its store lacks."""

from __future__ import annotations

import os
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from elbowroom.cli.screen import Screen
    from elbowroom.job.engine.items import UnitFailure
    from elbowroom.job.pipeline import JobRun

JOB = click.argument("job", type=click.Path(path_type=Path))
JOBS = click.argument("jobs", metavar="JOB...", nargs=-1, required=True, type=click.Path(path_type=Path))
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


def exit_on(failures: list[UnitFailure]) -> None:
    """End with the code of the first failure; all causes are on the screen."""
    if failures:
        sys.exit(failures[0].exit_code)


def open_jobs(jobs: tuple[Path, ...], frequencies_hz: tuple[float, ...], screen: Screen) -> list[JobRun]:
    """Read some jobs and find their stores."""
    return [open_job(job, frequencies_hz, screen) for job in jobs]


def require_stored(run: JobRun, *, ports_only: bool = False) -> None:
    """Refuse to go on unless the store has every frequency, or at least its port matrices.

    Raises
    ------
    StoreError
        Naming what is missing and how to get it.
    """
    from elbowroom.base.errors import StoreError
    from elbowroom.job.dropping import has_ports

    missing = [f for f in run.frequencies_hz if run.key(f) not in run.store]
    without_currents = {f for f in missing if has_ports(run, f)}
    if ports_only:
        missing = [f for f in missing if f not in without_currents]
    if missing:
        shown = ", ".join(f"{f / 1e6:g} MHz" for f in missing[:5]) + (", ..." if len(missing) > 5 else "")
        broken = sum(run.path_of(f).exists() for f in missing)
        damaged = f"; {broken} of their files in the store are damaged" if broken else ""
        dropped = sum(f in without_currents for f in missing)
        gone = f"; of {dropped} the currents were dropped once their tables were made (store.currents)" if dropped else ""
        msg = (
            f"{len(missing)} of {len(run.frequencies_hz)} frequencies are not solved yet ({shown}){damaged}{gone}; "
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
    from elbowroom.base.inputs import real_path

    target, job = real_path(path), run.job
    own = [job.path, job.layout_path, *job.antenna_paths.values(), job.as_built_path, *job.ground_paths]
    if any(target == real_path(p) for p in own if p is not None):
        msg = f"cannot write {path}: it is a file of the job itself"
        raise ExportError(msg)
    if target.is_relative_to(real_path(job.store_folder)):
        msg = f"cannot write {path}: it lies in the job's store"
        raise ExportError(msg)
    return path


def checked_log(runs: list[JobRun], path: Path) -> None:
    """Refuse a log that would be written into a file of a job, or where its store's folder is to be.

    Raises
    ------
    ExportError
        Naming what stands there.
    """
    from elbowroom.base.errors import ExportError
    from elbowroom.base.inputs import real_path

    for run in runs:
        if real_path(path) == real_path(run.job.store_folder):
            msg = f"cannot write {path}: it is the folder of the job's store"
            raise ExportError(msg)
        if real_path(path).parent != real_path(run.job.store_folder):
            checked_output(run, path)


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
