"""Commands that make something of solved stations: compare, export, draw, and run, which does all."""

from __future__ import annotations

import math
from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from elbowroom.cli.common import (
    FREQUENCIES,
    JOB,
    JOBS,
    checked_folder,
    checked_output,
    exit_on,
    make_screen,
    modes,
    open_job,
    open_jobs,
    require_stored,
)
from elbowroom.cli.solving import Wish, solve_all, workers_options

if TYPE_CHECKING:
    from elbowroom.cli.screen import Screen
    from elbowroom.job.beamfields import BeamFields
    from elbowroom.job.compare import BeamComparison
    from elbowroom.job.export import TableSettings
    from elbowroom.job.pipeline import JobRun

COMPARISON_FILE = "comparison.csv"
SMALLEST_STEP_DEG = 0.05
TABLE_FILES = {"hdf5": "beams.h5", "csv": "beams.csv"}

SHOWN = {
    "peak [dB]": "peak_change_db",
    "peak off pointing [deg]": "coupled_peak_offset_deg",
    "peak shift [deg]": "peak_shift_deg",
    "width up [deg]": "coupled_width_up_deg",
    "isolated width up [deg]": "isolated_width_up_deg",
    "sidelobe [dB]": "coupled_sidelobe_db",
    "isolated sidelobe [dB]": "isolated_sidelobe_db",
    "largest difference [dB]": "largest_difference_db",
    "main lobe shape [dB]": "main_lobe_shape_difference_db",
    "antenna spread [dB]": "antenna_spread_db",
    "radiated part": "radiation_efficiency",
}
"""Columns of the table on the screen; the file has all."""


def _fields(run: JobRun, step_deg: float | None = None, *, solve_damaged: bool = False) -> Iterator[BeamFields]:
    """Give the beams of one frequency after another over the sky of the job; only one is held.

    A unit whose file turns out to be damaged is an error, or solved again.
    """
    from elbowroom.geometry.directions import hemisphere_grid
    from elbowroom.job.beamfields import beam_fields

    directions = hemisphere_grid(run.job.sky_step_deg if step_deg is None else step_deg)
    for frequency in run.frequencies_hz:
        solution = run.solution(frequency) if solve_damaged else run.stored_solution(frequency)
        yield beam_fields(solution, run.job.beams, directions, run.termination_at(frequency))


def _show_comparison(rows: list[BeamComparison], screen: Screen, path: Path) -> None:
    from dataclasses import asdict

    from elbowroom.cli.screen import tell_origins, with_origins

    table: list[list[Any]] = [
        [r.frequency_hz / 1e6, r.beam, *(f"{getattr(r, name):.2f}" for name in SHOWN.values())] for r in rows
    ]
    columns = ["frequency [MHz]", "beam", *SHOWN]
    with_origins(columns, table, [row.origin for row in rows])
    screen.table("Coupled against isolated beams", columns, table)
    for row in rows:
        screen.emit("comparison", **{k: None if isinstance(v, float) and math.isnan(v) else v for k, v in asdict(row).items()})
    screen.say(
        "peak: coupled over isolated; widths: at half power, of the lobe at the peak, up through the zenith; shape: what is left "
        "in the main lobe after the best complex factor; spread: of the antennas' patterns where the beam points"
    )
    tell_origins(screen, [row.origin for row in rows])
    away = [r for r in rows if r.coupled_peak_offset_deg > 0.5 * max(r.coupled_width_up_deg, r.coupled_width_across_deg, 1.0)]
    for r in away:
        screen.warn(
            f"beam {r.beam!r} at {r.frequency_hz / 1e6:g} MHz peaks {r.coupled_peak_offset_deg:.0f} deg from where it points; "
            "its widths and lobe figures are those of the lobe at the peak"
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
    path = checked_output(run_, output or run_.job.output_folder / COMPARISON_FILE)
    rows = [row for fields in _fields(run_) for row in compare_beams(fields)]
    _write_comparison(run_, rows, path)
    _show_comparison(rows, screen, path)


@click.command()
@JOB
@FREQUENCIES
@click.option("--format", "format_", type=click.Choice(["hdf5", "csv"]), default="hdf5", show_default=True, help="Kind of file.")
@click.option("--output", type=click.Path(path_type=Path), help="By default beams.h5 or beams.csv in the job's output folder.")
@click.option(
    "--step-deg",
    type=click.FloatRange(SMALLEST_STEP_DEG, 90.0),
    help="Step of the grid of directions [deg], dividing 90; that of the job by default.",
)
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
    path = checked_output(run_, output or run_.job.output_folder / TABLE_FILES[format_])
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


MOST_DRAWN = 12
"""Frequencies beyond this many get no sky maps and cuts each, unless they are asked for by name."""


def _drawn_frequencies(run: JobRun, chosen: tuple[float, ...], screen: Screen) -> set[float]:
    """Return the frequencies [Hz] that get pictures of their own."""
    every = run.frequencies_hz
    if chosen or len(every) <= MOST_DRAWN:
        return set(every)
    few = {every[0], every[len(every) // 2], every[-1]}
    screen.say(
        f"{len(every)} frequencies: sky maps and cuts at the lowest, the middle and the highest only; "
        "name others with --frequency-hz"
    )
    return few


class _Pictures:
    """The pictures of a job, drawn as one frequency after another comes by."""

    def __init__(self, run: JobRun, folder: Path, screen: Screen, drawn: set[float], component: str = "total") -> None:
        self.run, self.folder, self.screen, self.drawn, self.component = run, folder, screen, drawn, component
        self.impedances: list = []

    def _wrote(self, path: Path) -> None:
        self.screen.wrote(path)

    def layout(self) -> None:
        """Draw where the antennas stand and what they look like."""
        from elbowroom.job.pictures import draw_layout, missing_antennas, picture_name

        job = self.run.job
        path = self.folder / picture_name("layout")
        self._wrote(
            draw_layout(
                self.run.station,
                path,
                title=job.title,
                frequencies_hz=self.run.frequencies_hz,
                termination=self.run.port_terminations,
                damage=job.damage,
                missing=missing_antennas(job),
            )
        )

    def add(self, fields: BeamFields) -> None:
        """Draw what belongs to one frequency."""
        from elbowroom.job.pictures import draw_cuts, draw_element_spread, draw_sky_maps, picture_name, port_impedances
        from elbowroom.job.pictures.skymaps import isolated_peak

        solution, seen, title = fields.solution, fields.termination, self.run.job.title
        self.impedances.append(port_impedances(solution, seen))
        frequency = solution.frequency_hz
        if frequency not in self.drawn:
            return
        for index, beam in enumerate(fields.beams):
            sky = self.folder / picture_name("sky", beam.name, frequency)
            self._wrote(draw_sky_maps(fields, index, sky, title=title, component=self.component))
            cuts = self.folder / picture_name("cuts", beam.name, frequency)
            peak = isolated_peak(fields, index)
            self._wrote(draw_cuts(solution, beam, cuts, termination=seen, title=title, component=self.component, peak=peak))
        taking_part = (fields.weights != 0.0).any(axis=0)
        for port in sorted({beam.port for beam in fields.beams}):
            spread = self.folder / picture_name("antennas", port, frequency)
            self._wrote(draw_element_spread(solution, port, spread, termination=seen, title=title, taking_part=taking_part))

    def finish(self) -> None:
        """Draw what runs over frequency."""
        from elbowroom.job.pictures import draw_impedance, picture_name

        job, path = self.run.job, self.folder / picture_name("impedance")
        self._wrote(draw_impedance(self.impedances, path, title=job.title, dead=list(job.damage.ports)))


@click.command()
@JOB
@FREQUENCIES
@click.option("--output", type=click.Path(path_type=Path), help="Folder of the pictures; by default the job's output folder.")
@click.option(
    "--component", type=click.Choice(["total", "co", "cross"]), default="total", show_default=True,
    help="What maps and cuts show: both components together, or one of Ludwig's third definition.",
)  # fmt: skip
@click.option("--layout-only", is_flag=True, help="Only the layout, for which nothing needs to be solved.")
@modes
def draw(
    job: Path, frequencies_hz: tuple[float, ...], output: Path | None, component: str, layout_only: bool, mode: str | None
) -> None:
    """Draw a solved JOB: layout, port impedance over frequency, all-sky maps, cuts, and how much the antennas differ."""
    screen = make_screen(mode)
    run_ = open_job(job, frequencies_hz, screen)
    folder = checked_folder(output or run_.job.output_folder)
    if not layout_only:
        require_stored(run_)
    pictures = _Pictures(run_, folder, screen, _drawn_frequencies(run_, frequencies_hz, screen), component)
    pictures.layout()
    if layout_only:
        return
    for fields in _fields(run_):
        pictures.add(fields)
    pictures.finish()


@click.command()
@JOBS
@FREQUENCIES
@workers_options
@modes
def run(
    jobs: tuple[Path, ...], frequencies_hz: tuple[float, ...], workers: int | None, threads: int | None, cluster: str | None,
    log: Path | None, mode: str | None,
) -> None:  # fmt: skip
    """Do it all for each JOB: solve what the store lacks, compare beams, export the HDF5 beam table, draw.

    Frequencies that cannot be solved are told and left out of the results.
    """
    screen = make_screen(mode)
    runs = open_jobs(jobs, frequencies_hz, screen)
    for run_ in runs:
        checked_folder(run_.job.output_folder)
    failures = solve_all(runs, screen, Wish(workers, threads, cluster, log))
    for run_ in runs:
        if run_.frequencies_hz:
            _results(run_, bool(frequencies_hz), screen)
    exit_on(failures)


def _results(run_: JobRun, chosen: bool, screen: Screen) -> None:
    """Make comparison, table and pictures of a job's solved frequencies, and drop their currents if the job says so."""
    from elbowroom.job.compare import compare_beams
    from elbowroom.job.dropping import drop_currents
    from elbowroom.job.export import TableSettings, export_hdf5

    folder = run_.job.output_folder
    pictures = _Pictures(run_, folder, screen, _drawn_frequencies(run_, run_.frequencies_hz if chosen else (), screen))
    pictures.layout()
    rows: list[BeamComparison] = []

    def each() -> Iterator[BeamFields]:
        for fields in _fields(run_, solve_damaged=True):
            if fields.beams:
                rows.extend(compare_beams(fields))
            pictures.add(fields)
            yield fields

    if run_.job.beams:
        settings = TableSettings()
        path = folder / TABLE_FILES["hdf5"]
        count = len(run_.frequencies_hz)
        export_hdf5(path, each(), count, settings=settings, title=run_.job.title, job_text=run_.job.text)
        pictures.finish()
        _tell_table(screen, path, settings)
        _write_comparison(run_, rows, folder / COMPARISON_FILE)
        _show_comparison(rows, screen, folder / COMPARISON_FILE)
    else:
        screen.warn("the job has no [[beam]]: no comparison and no beam table")
        for _ in each():
            pass
        pictures.finish()
    if run_.job.store_currents == "drop":
        for frequency in run_.frequencies_hz:
            drop_currents(run_, frequency)
        screen.say(f"currents of {len(run_.frequencies_hz)} frequencies dropped, their port matrices are kept (store.currents)")
