"""The command that shows how much the ground matters."""

from __future__ import annotations

import math
from pathlib import Path
from typing import TYPE_CHECKING

import click

from elbowroom.cli.common import FREQUENCIES, JOB, checked_folder, checked_output, make_screen, modes, open_job

if TYPE_CHECKING:
    from elbowroom.cli.screen import Screen
    from elbowroom.geometry.grounds import Ground
    from elbowroom.job.groundcomparison import GroundFigures
    from elbowroom.job.pipeline import JobRun

SHOWN = {
    "change of coupling": "{coupling_difference:.3f}",
    "of reflection": "{reflection_difference:.3f}",
    "of elements [dB]": "{element_difference_db:.1f}",
    "of beam [dB]": "{beam_difference_db:.1f}",
    "of main lobe [dB]": "{main_lobe_shape_difference_db:.1f}",
    "radiated part": "{radiation_efficiency:.3f}",
    "into ground": "{ground_loss:.3f}",
}
"""Columns of the table on the screen; the file has all."""


@click.command()
@JOB
@FREQUENCIES
@click.option(
    "--soil", nargs=2, type=float, metavar="PERMITTIVITY S_PER_M",
    help="Soil instead of the job's: relative permittivity and conductivity [S/m], as 10 0.01.",
)  # fmt: skip
@click.option(
    "--wire-mesh", nargs=2, type=float, metavar="PITCH_M RADIUS_M",
    help="A bonded square mesh instead of the job's: distance and radius of its wires [m], as 0.1 0.0015.",
)  # fmt: skip
@click.option(
    "--output", type=click.Path(path_type=Path), help="Folder of table and picture; by default the job's output folder."
)
@modes
def grounds(
    job: Path, frequencies_hz: tuple[float, ...], soil: tuple[float, float] | None, wire_mesh: tuple[float, float] | None,
    output: Path | None, mode: str | None,
) -> None:  # fmt: skip
    """Show how much the ground matters to a JOB: on a perfect plane, on wire mesh over soil, on bare soil.

    The station is solved on each of them, unless the store has it: a table and a picture of what changes in coupling, patterns
    and beams over frequency, and of how much power goes into the ground.
    """
    from elbowroom import __version__
    from elbowroom.geometry.soils import Soil
    from elbowroom.job.groundcomparison import compared_grounds, on_ground, write_ground_figures
    from elbowroom.job.pictures import picture_name
    from elbowroom.job.pictures.grounds import draw_grounds
    from elbowroom.job.pipeline import JobRun

    screen = make_screen(mode)
    own = open_job(job, frequencies_hz, screen)
    known = compared_grounds(own.job.ground, None if soil is None else Soil(*soil), wire_mesh)
    folder = checked_folder(output or own.job.output_folder)
    table = checked_output(own, folder / "grounds.csv")
    about = [f"{name}: {ground.describe()}" for name, ground in known.items() if ground.describe() != name]
    for line in about:
        screen.say(f"  {line}")
    runs = {
        name: JobRun(
            on_ground(own.job, ground), frequencies_hz=own.frequencies_hz, report=lambda damage: screen.warn(str(damage))
        )
        for name, ground in known.items()
    }
    rows, origins = _compared(own, runs, known, screen)
    made = _origins_told(own, origins)
    write_ground_figures(rows, table, (f"elbowroom {__version__}; job {own.job.title}", *about, *made))
    _show(rows, screen)
    for line in made:
        screen.say(line)
    screen.wrote(table, "all figures and what they mean")
    screen.wrote(draw_grounds(rows, folder / picture_name("grounds"), title=own.job.title, about=about))
    screen.say("results of a model, not a measurement")


def _origins_told(own: JobRun, origins: dict[str, list[str]]) -> list[str]:
    """Return what to say of frequencies that were not assembled for themselves, by ground; nothing if there are none."""
    from elbowroom.job.portmatrices import origin_lines

    told: list[str] = []
    for name, each in origins.items():
        meaning, *lines = origin_lines(own.frequencies_hz, each) or [""]
        if lines:
            told += [line for line in (meaning,) if line not in told] + [f"{name}: {line}" for line in lines]
    return told


def _compared(
    own: JobRun, runs: dict[str, JobRun], known: dict[str, Ground], screen: Screen
) -> tuple[list[GroundFigures], dict[str, list[str]]]:
    """Solve what is missing, one ground and frequency after another, and compare; return the origins on each ground, too."""
    from elbowroom.base.errors import GeometryError
    from elbowroom.geometry.directions import hemisphere_grid
    from elbowroom.job.groundcomparison import compare_grounds
    from elbowroom.job.plan import refuse_if_too_large, total

    missing: list[tuple[str, float]] = []
    for name, run in runs.items():
        problems = run.problems()
        errors = tuple(p.text for p in problems if p.severity == "error")
        if errors:
            msg = f"{own.job.path}: the station cannot be modelled on {name}"
            raise GeometryError(msg, problems=errors)
        for problem in problems:
            screen.warn(f"{name}: {problem.text}")
        missing += [(name, frequency) for frequency in run.frequencies_hz if run.key(frequency) not in run.store]
    if missing:
        own.store.check_writable()
        refuse_if_too_large(total([runs[name].predicted(f) for name, f in missing]), folder=own.job.store_folder)
    directions = hemisphere_grid(own.job.sky_step_deg)
    rows: list[GroundFigures] = []
    origins: dict[str, list[str]] = {name: [] for name in runs}
    for count, frequency in enumerate(own.frequencies_hz, start=1):
        solutions = {name: run.solution(frequency) for name, run in runs.items()}
        for name, solution in solutions.items():
            origins[name].append(solution.statistics.origin)
        solved = [name for name in known if (name, frequency) in missing]
        state = f"solved on {', '.join(solved)}" if solved else "from store"
        screen.say(f"  {frequency / 1e6:g} MHz ({count} of {len(own.frequencies_hz)}): {state}")
        screen.emit("unit", frequency_hz=frequency, solved=solved)
        rows += compare_grounds(solutions, own.job.beams, directions, own.termination_at(frequency))
    return rows, origins


def _show(rows: list[GroundFigures], screen: Screen) -> None:
    from dataclasses import asdict

    from elbowroom.job.compare import FLOOR_DB
    from elbowroom.job.groundcomparison import PERFECT

    table = []
    for row in rows:
        values = {k: math.nan if v == FLOOR_DB else v for k, v in asdict(row).items()}
        cells = [style.format(**values).replace("nan", "-") for style in SHOWN.values()]
        if row.ground != PERFECT:
            table.append([f"{row.frequency_hz / 1e6:.6g}", row.ground, row.beam, *cells])
        screen.emit("grounds", **{k: None if isinstance(v, float) and math.isnan(v) else v for k, v in asdict(row).items()})
    screen.table("How much the ground matters", ["frequency [MHz]", "ground", "beam", *SHOWN], table)
    screen.say(
        "changes are against the perfect plane; coupling: scattering between antennas, relative; elements and beam: rms over the "
        "sky; main lobe: largest to half power around the pointing, after the best complex factor; radiated and into ground: "
        "parts of the accepted power"
    )
