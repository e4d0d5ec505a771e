"""Commands.  Each is a few lines over functions of ``elbowroom.job``; heavy imports wait until a command needs them."""

from __future__ import annotations

import io
import os
import signal
import sys
from pathlib import Path
from typing import Any, NoReturn

import click

from elbowroom import __version__
from elbowroom.base.errors import ElbowroomError, ExportError
from elbowroom.cli.antenna import antenna
from elbowroom.cli.common import FREQUENCIES, JOB, JOBS, exit_on, make_screen, modes, open_job, open_jobs
from elbowroom.cli.grounds import grounds
from elbowroom.cli.ports import ports
from elbowroom.cli.results import compare, draw, export, run
from elbowroom.cli.solving import Wish, solve_all, workers_options
from elbowroom.cli.store import store

INTERRUPTED_EXIT_CODE = 130
TERMINATED_EXIT_CODE = 143
CLOSED_PIPE_EXIT_CODE = 141

MOST_ANTENNAS = 20_000
"""Of a layout that is made here: far more than any station that can be solved."""


@click.group(
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 110},
    epilog="Begin with 'elbowroom start my_station', then 'elbowroom run my_station/job.toml'.  "
    "Results come from a model; they are not measurements.",
)
@click.version_option(__version__, prog_name="elbowroom")
def cli() -> None:
    """Embedded element patterns and beams of stations of wire antennas, with their mutual coupling.

    A job file says what to solve: where the antennas stand, what they are made of, the ground, the frequencies and what the
    ports see.  Solved currents are kept in a store, so that nothing is solved twice and an interrupted run goes on where it was.
    """


@cli.command()
@click.argument("folder", type=click.Path(path_type=Path))
@click.option(
    "--template", default="small", show_default=True,
    help="'small' (seven antennas), 'demo' (a whole station) or 'log-periodic' (16 log-periodic antennas, 80 to 350 MHz).",
)  # fmt: skip
def start(folder: Path, template: str) -> None:
    """Write a job, an antenna and a layout into FOLDER, ready to run and to be changed."""
    from elbowroom.job.templates import write_template

    for path in write_template(template, folder):
        click.echo(f"wrote {path}")
    click.echo(f"next: elbowroom inspect {folder / 'job.toml'}")


@cli.command()
@click.argument("kind", type=click.Choice(["disc", "rings", "spiral", "grid"]))
@click.argument("file", type=click.Path(path_type=Path))
@click.option("--count", type=int, help="Number of antennas (disc, spiral).")
@click.option("--radius-m", type=float, help="Radius of the disc [m] (disc, spiral).")
@click.option("--spacing-m", type=float, help="Least spacing (disc), or spacing (rings, grid) [m].")
@click.option("--rings", "ring_counts", help="Antennas in each ring, from the middle, as 1,6,12 (rings).")
@click.option("--columns", type=int, help="Columns (grid).")
@click.option("--rows", type=int, help="Rows (grid).")
@click.option("--arms", type=int, help="Arms of the spiral; a sunflower by default (spiral).")
@click.option("--turn", default="0", show_default=True, help="Turn of every antenna [deg], or 'random'.")
@click.option("--seed", type=int, default=1, show_default=True, help="Seed of everything random.")
@click.option("--antenna", default="", help="Design named in the antenna column.")
@click.option("--replace", is_flag=True, help="Write over FILE if it exists.")
def layout(
    kind: str, file: Path, count: int | None, radius_m: float | None, spacing_m: float | None, ring_counts: str | None,
    columns: int | None, rows: int | None, arms: int | None, turn: str, seed: int, antenna: str, replace: bool,
) -> None:  # fmt: skip
    """Make a layout of KIND and write it to FILE as CSV."""
    from elbowroom.geometry import arrangements
    from elbowroom.geometry.layouts import closest_spacing, diameter, write_layout

    if file.exists() and not replace:
        msg = f"{file} exists already; another name, or --replace, is needed"
        raise click.UsageError(msg)
    uses = {
        "disc": ("count", "radius_m", "spacing_m"), "rings": ("rings", "spacing_m"), "spiral": ("count", "radius_m", "arms"),
        "grid": ("columns", "rows", "spacing_m"),
    }[kind]  # fmt: skip
    given = {
        "count": count, "radius_m": radius_m, "spacing_m": spacing_m, "rings": ring_counts, "columns": columns, "rows": rows,
        "arms": arms,
    }  # fmt: skip
    for name, value in given.items():
        if value is not None and name not in uses:
            msg = f"--{name.replace('_', '-')} has no meaning for a {kind}"
            raise click.UsageError(msg)
    numbers = [int(n) for n in (count, (columns or 0) * (rows or 0)) if n]
    if numbers and max(numbers) > MOST_ANTENNAS:
        msg = f"{max(numbers)} antennas: expected at most {MOST_ANTENNAS}"
        raise click.UsageError(msg)

    def need(**options: Any) -> None:
        absent = [name for name, value in options.items() if value is None]
        if absent:
            msg = f"layout {kind} needs {', '.join('--' + n.replace('_', '-') for n in absent)}"
            raise click.UsageError(msg)

    try:
        turn_of: Any = "random" if turn == "random" else float(turn)
    except ValueError:
        msg = f"--turn {turn!r}: expected degrees or 'random'"
        raise click.UsageError(msg) from None
    common = {"turn": turn_of, "antenna": antenna}
    if kind == "disc":
        need(count=count, radius_m=radius_m, spacing_m=spacing_m)
        made = arrangements.random_disc(count, radius_m, spacing_m, seed, **common)  # type: ignore[arg-type]
    elif kind == "rings":
        need(rings=ring_counts, spacing_m=spacing_m)
        try:
            counts = [int(n) for n in str(ring_counts).split(",")]
        except ValueError:
            msg = f"--rings {ring_counts!r}: expected whole numbers, as 1,6,12"
            raise click.UsageError(msg) from None
        made = arrangements.rings(counts, spacing_m, seed=seed, **common)  # type: ignore[arg-type]
    elif kind == "spiral":
        need(count=count, radius_m=radius_m)
        made = arrangements.spiral(count, radius_m, arms, seed=seed, **common)  # type: ignore[arg-type]
    else:
        need(columns=columns, rows=rows, spacing_m=spacing_m)
        made = arrangements.grid(columns, rows, spacing_m, seed=seed, **common)  # type: ignore[arg-type]
    described = " ".join(f"--{name.replace('_', '-')} {value}" for name, value in given.items() if value is not None)
    write_layout(made, file, header_comment=f"made by elbowroom layout {kind} {described} --seed {seed} --turn {turn}")
    spacing = f", closest pair {closest_spacing(made):.4g} m" if len(made) > 1 else ""
    click.echo(f"wrote {file}: {len(made)} antennas, {diameter(made):.4g} m across{spacing}")


@cli.command()
@JOB
@FREQUENCIES
@modes
def inspect(job: Path, frequencies_hz: tuple[float, ...], mode: str | None) -> None:
    """Look at JOB without solving: settings, problems of the model, meshes, predicted time, memory and disk."""
    from elbowroom.base.machine import available_memory_bytes
    from elbowroom.base.sizes import readable_bytes
    from elbowroom.cli.screen import readable_seconds
    from elbowroom.job.checks import mesh_statistics

    screen = make_screen(mode)
    run = open_job(job, frequencies_hz, screen)
    for line in run.job.resolved_lines():
        screen.say(f"  {line}")
    problems = run.problems()
    for problem in problems:
        screen.emit("problem", severity=problem.severity, text=problem.text)
    errors = [p for p in problems if p.severity == "error"]
    if screen.mode != "json":
        for problem in problems:
            where = screen.error if problem.severity == "error" else screen.out
            where.print(f"{problem.severity}: {problem.text}", markup=False)
        if not problems:
            screen.say("no problems found in the model")
    if not errors:
        rows = []
        for unit in run.plan():
            mesh = mesh_statistics(run.station, unit.frequency_hz, run.job.mesh)
            p = unit.prediction
            rows.append(
                [unit.frequency_hz / 1e6, "yes" if unit.stored else "no", mesh["unknowns"],
                 max(mesh["elements_per_antenna"].values()),
                 mesh["shortest_element_m"], mesh["longest_element_m"], mesh["longest_element_wavelengths"],
                 readable_seconds(p.seconds), readable_bytes(p.memory_bytes), readable_bytes(p.disk_bytes)]
            )  # fmt: skip
            screen.emit(
                "unit", frequency_hz=unit.frequency_hz, stored=unit.stored, key=unit.key, seconds=p.seconds,
                memory_bytes=p.memory_bytes, disk_bytes=p.disk_bytes, mesh=mesh,
            )  # fmt: skip
        screen.table(
            "Plan",
            ["frequency [MHz]", "in store", "unknowns", "elements per antenna", "shortest [m]", "longest [m]",
             "longest [wavelengths]", "time", "memory", "disk"],
            rows,
        )  # fmt: skip
        screen.say(f"memory available: {readable_bytes(available_memory_bytes())}")
        if any(run.solver_at(f) == "reduced" for f in run.frequencies_hz):
            screen.say(
                "disk: to a third where the solver is reduced; 'elbowroom solve --plan' takes longer and tells within 10 %"
            )
    if errors:
        sys.exit(3)


@cli.command()
@JOBS
@FREQUENCIES
@click.option("--plan", "plan_only", is_flag=True, help="Show what is to be solved and what it takes; solve nothing.")
@workers_options
@modes
def solve(
    jobs: tuple[Path, ...], frequencies_hz: tuple[float, ...], plan_only: bool, workers: int | None, threads: int | None,
    cluster: str | None, log: Path | None, mode: str | None,
) -> None:  # fmt: skip
    """Solve the currents of each JOB at all its frequencies and keep them in its store.

    What the store holds already is not solved again.  The run may be interrupted at any time; the next one goes on.  A unit that
    fails stops no other; only what failed or is missing is solved the next time.
    """
    screen = make_screen(mode)
    wish = Wish(workers, threads, cluster, log, plan_only)
    exit_on(solve_all(open_jobs(jobs, frequencies_hz, screen), screen, wish))


for _command in (antenna, compare, draw, export, grounds, ports, run, store):
    cli.add_command(_command)


class _Terminated(BaseException):
    """The process was asked to end."""


def _terminated(number: int, frame: object) -> None:
    raise _Terminated


def _reader_gone() -> NoReturn:
    """End when the reader of our output has gone: nothing more can be said to it, nor what is left when Python ends."""
    os.dup2(os.open(os.devnull, os.O_WRONLY), 1)
    sys.stderr.close()
    sys.exit(CLOSED_PIPE_EXIT_CODE)


def main() -> None:
    """Run a command; say what is wrong in one message and end with the code of its kind."""
    for name in ("stdout", "stderr"):
        if getattr(sys, name) is None:  # closed by whoever started us
            setattr(sys, name, open(os.devnull, "w"))
        stream = getattr(sys, name)
        if isinstance(stream, io.TextIOWrapper):
            # names that the terminal's encoding has no letters for are no reason to stop
            stream.reconfigure(errors="backslashreplace")
    signal.signal(signal.SIGTERM, _terminated)
    try:
        code = cli.main(standalone_mode=False)
        sys.exit(code if isinstance(code, int) else 0)
    except click.ClickException as error:
        error.show()
        sys.exit(error.exit_code)
    except _Terminated:
        click.echo("terminated: what was finished is in the store, and the next run goes on from there", err=True)
        sys.exit(TERMINATED_EXIT_CODE)
    except (click.Abort, KeyboardInterrupt):
        click.echo("interrupted: what was finished is in the store, and the next run goes on from there", err=True)
        sys.exit(INTERRUPTED_EXIT_CODE)
    except ElbowroomError as error:
        click.echo(f"error: {error}", err=True)
        sys.exit(error.exit_code)
    except BrokenPipeError:
        _reader_gone()
    except SystemExit as end:
        # click and rich end by 1, the code of our own faults
        if isinstance(end.__context__, BrokenPipeError):
            _reader_gone()
        raise
    except OSError as error:
        # Whatever concerns files of jobs, stores and results has been said above; this is the screen.
        click.echo(f"error: cannot write to the screen or read a file: {error}", err=True)
        sys.exit(ExportError.exit_code)


if __name__ == "__main__":
    main()
