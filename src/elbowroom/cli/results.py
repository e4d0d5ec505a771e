"""Commands that make something of solved stations: compare, export, draw, and run, which does all."""

from __future__ import annotations

import math
from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING

import click

from elbowroom.cli.common import (
    FREQUENCIES,
    JOB,
    make_screen,
    modes,
    open_job,
    require_stored,
)

if TYPE_CHECKING:
    from elbowroom.cli.screen import Screen
    from elbowroom.job.beamfields import BeamFields
    from elbowroom.job.compare import BeamComparison
    from elbowroom.job.export import TableSettings
    from elbowroom.job.pipeline import JobRun

COMPARISON_FILE = "comparison.csv"
TABLE_FILES = {"hdf5": "beams.h5", "csv": "beams.csv"}

SHOWN = {
    "peak [dB]": "peak_change_db",
    "peak shift [deg]": "peak_shift_deg",
    "width up [deg]": "coupled_width_up_deg",
    "isolated": "isolated_width_up_deg",
    "sidelobe [dB]": "coupled_sidelobe_db",
    "isolated ": "isolated_sidelobe_db",
    "largest difference [dB]": "largest_difference_db",
    "main lobe shape [dB]": "main_lobe_shape_difference_db",
    "antenna spread [dB]": "antenna_spread_db",
}
"""Columns of the table on the screen; the file has all."""


def _fields(run: JobRun, step_deg: float | None = None) -> Iterator[BeamFields]:
    """Give the beams of one frequency after another over the sky of the job; only one is held."""
    from elbowroom.geometry.directions import hemisphere_grid
    from elbowroom.job.beamfields import beam_fields

    directions = hemisphere_grid(step_deg or run.job.sky_step_deg)
    for frequency in run.frequencies_hz:
        yield beam_fields(run.solution(frequency), run.job.beams, directions, run.termination)


def _show_comparison(rows: list[BeamComparison], screen: Screen, path: Path) -> None:
    from dataclasses import asdict

    table = [[r.frequency_hz / 1e6, r.beam, *(f"{getattr(r, name):.2f}" for name in SHOWN.values())] for r in rows]
    screen.table("Coupled against isolated beams", ["frequency [MHz]", "beam", *SHOWN], table)
    for row in rows:
        screen.emit("comparison", **{k: None if isinstance(v, float) and math.isnan(v) else v for k, v in asdict(row).items()})
    screen.say(
        "peak: coupled over isolated; shape: what is left in the main lobe after the best complex factor; "
        "spread: of the antennas' patterns where the beam points"
    )
    screen.wrote(path, "all figures and what they mean")


def _write_comparison(run: JobRun, rows: list[BeamComparison], path: Path) -> None:
    from elbowroom import __version__
    from elbowroom.job.compare import write_comparison

    write_comparison(rows, path, (f"elbowroom {__version__}; job {run.job.title}",))


@click.command()
@JOB
@FREQUENCIES
@click.option("--output", type=click.Path(path_type=Path), help=f"CSV file; by default {COMPARISON_FILE} of the job.")
@modes
def compare(job: Path, frequencies_hz: tuple[float, ...], output: Path | None, mode: str | None) -> None:
    """Compare coupled with isolated beams of a solved JOB: a table on the screen and a CSV file."""
    from elbowroom.job.compare import compare_beams

    screen = make_screen(mode)
    run_ = open_job(job, frequencies_hz, screen)
    require_stored(run_)
    path = output or run_.job.output_folder / COMPARISON_FILE
    rows = [row for fields in _fields(run_) for row in compare_beams(fields)]
    _write_comparison(run_, rows, path)
    _show_comparison(rows, screen, path)


@click.command()
@JOB
@FREQUENCIES
@click.option("--format", "format_", type=click.Choice(["hdf5", "csv"]), default="hdf5", show_default=True, help="Kind of file.")
@click.option("--output", type=click.Path(path_type=Path), help="By default beams.h5 or beams.csv in the job's output folder.")
@click.option("--step-deg", type=float, help="Step of the grid of directions [deg], dividing 90; that of the job by default.")
@click.option(
    "--components", type=click.Choice(["theta-phi", "co-cross"]), default="theta-phi", show_default=True,
    help="Field components; co-cross is Ludwig's third definition.",
)  # fmt: skip
@click.option(
    "--normalisation", type=click.Choice(["effective-length", "peak"]), default="effective-length", show_default=True,
    help="Metres of effective length, or each beam divided by its peak.",
)  # fmt: skip
@click.option("--elements", is_flag=True, help="Embedded and isolated element patterns of every port, too (hdf5).")
@click.option("--single", is_flag=True, help="Single precision, half the size (hdf5).")
@modes
def export(
    job: Path, frequencies_hz: tuple[float, ...], format_: str, output: Path | None, step_deg: float | None, components: str,
    normalisation: str, elements: bool, single: bool, mode: str | None,
) -> None:  # fmt: skip
    """Write a beam table of a solved JOB: coupled and isolated beams against direction and frequency.

    The table states its conventions, its normalisation and the error of each frequency, and is read without this program.
    """
    from elbowroom.job.export import TableSettings, export_csv, export_hdf5

    screen = make_screen(mode)
    run_ = open_job(job, frequencies_hz, screen)
    settings = TableSettings(components, normalisation, elements, single)
    require_stored(run_)
    path = output or run_.job.output_folder / TABLE_FILES[format_]
    about = {"settings": settings, "title": run_.job.title, "job_text": run_.job.text}
    if format_ == "hdf5":
        export_hdf5(path, _fields(run_, step_deg), len(run_.frequencies_hz), **about)  # type: ignore[arg-type]
    else:
        export_csv(path, _fields(run_, step_deg), **about)  # type: ignore[arg-type]
    _tell_table(screen, path, settings)


def _tell_table(screen: Screen, path: Path, settings: TableSettings) -> None:
    from elbowroom.job.export import WARNING

    screen.wrote(path, f"{settings.components}, {settings.normalisation.replace('-', ' ')}")
    screen.say(WARNING)
