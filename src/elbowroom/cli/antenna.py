"""The command about one antenna by itself."""

from __future__ import annotations

import math
import time
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from elbowroom.cli.common import checked_folder, make_screen, modes

if TYPE_CHECKING:
    from elbowroom.cli.screen import Screen
    from elbowroom.geometry.grounds import Ground
    from elbowroom.geometry.stations import Station
    from elbowroom.job.oneantenna import AntennaFigures, PatternCut
    from elbowroom.store import Hdf5Store

SHOWN = {
    "Z [ohm]": "{resistance_ohm:.1f}{reactance_ohm:+.1f}j",
    "reflection [dB]": "{reflection_db:.1f}",
    "directivity [dB]": "{peak_directivity_db:.2f}",
    "gain at zenith [dB]": "{zenith_realised_gain_db:.2f}",
    "widths [deg]": "{width_along_deg:.1f} x {width_across_deg:.1f}",
    "front to back [dB]": "{front_to_back_db:.1f}",
    "cross-polar [dB]": "{cross_polar_db:.1f}",
    "efficiency [%]": "{radiation_efficiency:.2%}",
    "into ground [%]": "{ground_loss:.2%}",
    "change of Z [%]": "{impedance_change:.2%}",
    "of pattern [dB]": "{pattern_change_db:.0f}",
}
"""Columns of the table on the screen; the file has all."""


class _Ohms(click.ParamType):
    name = "ohms"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> complex:
        try:
            number = complex(str(value).replace(" ", ""))
        except ValueError:
            number = complex(math.nan)
        if not (math.isfinite(number.real) and math.isfinite(number.imag)) or number.real <= 0.0:
            self.fail(f"{value!r}: expected ohms with a positive resistance, as 100 or 75-20j", param, ctx)
        return number


def _frequencies(
    listed: tuple[float, ...], start_hz: float | None, stop_hz: float | None, step_hz: float | None
) -> tuple[float, ...]:
    """Return the frequencies that the options ask for, in rising order [Hz]."""
    from elbowroom.job.jobtables import BandTable
    from elbowroom.job.tomlfile import validate_table

    given = {"frequency_hz": list(listed) or None, "start_hz": start_hz, "stop_hz": stop_hz, "step_hz": step_hz}
    problems: list[str] = []
    band = validate_table(BandTable, {key: value for key, value in given.items() if value is not None}, problems)
    if band is None:
        msg = "; ".join(problems) + " (options: --frequency-hz, several times; or --start-hz, --stop-hz and --step-hz)"
        raise click.UsageError(msg)
    return band.frequencies()


@click.command()
@click.argument("file", type=click.Path(path_type=Path))
@click.option(
    "--ground", type=click.Choice(["perfect", "free-space"]), default="perfect", show_default=True,
    help="What the antenna stands on.",
)  # fmt: skip
@click.option(
    "--soil", nargs=2, type=float, metavar="PERMITTIVITY S_PER_M",
    help="Or soil: relative permittivity and conductivity [S/m], as 10 0.01.",
)  # fmt: skip
@click.option(
    "--wire-mesh", nargs=2, type=float, metavar="PITCH_M RADIUS_M",
    help="A bonded square mesh on the soil: distance and radius of its wires [m], as 0.1 0.0015.",
)  # fmt: skip
@click.option("--frequency-hz", "listed", type=float, multiple=True, metavar="HZ", help="Frequency; may be given several times.")
@click.option("--start-hz", type=float, metavar="HZ", help="Or first frequency of a band,")
@click.option("--stop-hz", type=float, metavar="HZ", help="last frequency")
@click.option("--step-hz", type=float, metavar="HZ", help="and step.")
@click.option("--termination", type=_Ohms(), default="100", show_default=True, help="What every port sees, as 100 or 75-20j.")
@click.option("--height-m", type=float, default=0.0, show_default=True, help="Height of the antenna's own origin [m].")
@click.option("--mesh", type=click.Choice(["default", "refined"]), default="default", show_default=True, help="Mesh.")
@click.option(
    "--convergence/--no-convergence", default=True, show_default=True,
    help="Whether to solve again on a finer mesh, which takes several times as long, and tell what changes.",
)  # fmt: skip
@click.option("--output", type=click.Path(path_type=Path), help="Folder of table and pictures; by default 'results' beside FILE.")
@click.option(
    "--store", "store_folder", type=click.Path(path_type=Path), help="Folder of solved currents; by default 'store' beside FILE."
)
@modes
def antenna(
    file: Path, ground: str, soil: tuple[float, float] | None, wire_mesh: tuple[float, float] | None,
    listed: tuple[float, ...], start_hz: float | None, stop_hz: float | None, step_hz: float | None,
    termination: complex, height_m: float, mesh: str, convergence: bool, output: Path | None, store_folder: Path | None,
    mode: str | None,
) -> None:  # fmt: skip
    """Look at one antenna alone: FILE is an antenna file, nothing else is needed.

    Over frequency: impedance, reflection at the termination, directivity and realised gain, half-power widths, front-to-back
    ratio, cross-polarisation, radiation efficiency, and how much all that changes on a finer mesh; as a table and as pictures.

    Solved currents are kept in a store, whatever the termination: the command may be interrupted at any time, the next one goes
    on, and another termination or a denser band solves nothing twice.
    """
    frequencies = _frequencies(listed, start_hz, stop_hz, step_hz)
    if not math.isfinite(height_m):
        msg = f"--height-m {height_m}: expected a number of metres"
        raise click.UsageError(msg)
    from elbowroom import __version__
    from elbowroom.job.antennafile import read_antenna
    from elbowroom.job.oneantenna import alone, write_figures
    from elbowroom.job.pictures import picture_name

    screen = make_screen(mode)
    design = read_antenna(file)
    folder = checked_folder(output or file.parent / "results")
    under = _ground(ground, soil, wire_mesh)
    station = alone(design, under, height_m=height_m)
    about = [
        f"antenna {design.name!r} from {file}; ports {', '.join(p.name for p in design.ports)}",
        f"ground {under.describe()}, origin at {height_m:g} m, every port terminated with {_text(termination)} ohm, mesh {mesh}",
    ]
    for line in about:
        screen.say(f"  {line}")
    kept = _open_store(store_folder or file.parent / "store", screen)
    rows, cuts = _solve(station, frequencies, termination, mesh, convergence, kept, screen)
    table = folder / Path(picture_name("antenna", file.stem)).with_suffix(".csv").name
    write_figures(rows, table, (f"elbowroom {__version__}", *about))
    _show(rows, screen, free_space=under.open_below, convergence=convergence)
    screen.wrote(table, "all figures and what they mean")
    _draw(station, rows, cuts, folder, file.stem, termination, screen, convergence=convergence)
    screen.say("results of a model, not a measurement")


def _ground(name: str, soil: tuple[float, float] | None, wire_mesh: tuple[float, float] | None) -> Ground:
    """Return the ground that the options ask for."""
    from elbowroom.geometry.grounds import GROUNDS, MeshOnSoil
    from elbowroom.geometry.soils import Soil

    if soil is None:
        if wire_mesh is not None:
            msg = "--wire-mesh: the soil below the mesh is missing; give --soil"
            raise click.UsageError(msg)
        return GROUNDS[name]
    if name != "perfect":
        msg = f"--ground {name} and --soil: expected one of them"
        raise click.UsageError(msg)
    return Soil(*soil) if wire_mesh is None else MeshOnSoil(Soil(*soil), *wire_mesh)


def _text(termination: complex) -> str:
    return f"{termination.real:g}" if termination.imag == 0.0 else f"{termination.real:g}{termination.imag:+g}j"


def _open_store(folder: Path, screen: Screen) -> Hdf5Store:
    """Return the store, whose damaged files are told on the screen."""
    from elbowroom.job.solve import SOLUTION_SCHEMA
    from elbowroom.store import Hdf5Store

    return Hdf5Store(folder, SOLUTION_SCHEMA, report=lambda damage: screen.warn(str(damage)))


def _solve(
    station: Station, frequencies: tuple[float, ...], termination: complex, mesh: str, convergence: bool, store: Hdf5Store,
    screen: Screen,
) -> tuple[list[AntennaFigures], list[PatternCut]]:  # fmt: skip
    """Return the figures of all frequencies, and the cuts of the lowest, the middle and the highest."""
    from elbowroom.cli.screen import readable_seconds
    from elbowroom.geometry.mesh import finer_mesh, mesh_settings
    from elbowroom.job.oneantenna import antenna_figures, is_stored, pattern_cuts, problems_of, solve_alone
    from elbowroom.job.plan import predict_station, refuse_if_too_large, total

    settings = mesh_settings(mesh)
    meshes = (settings, finer_mesh(settings)) if convergence else (settings,)
    for problem in problems_of(station, frequencies, settings):
        screen.warn(problem.text)
    missing = [(f, m) for f in frequencies for m in meshes if not is_stored(station, f, m, store)]
    if missing:
        store.check_writable()
        predictions = [predict_station(station, [f], m, "double")[0] for f, m in missing]
        refuse_if_too_large(total(predictions), folder=store.folder)
    drawn = {frequencies[0], frequencies[len(frequencies) // 2], frequencies[-1]}
    rows: list[AntennaFigures] = []
    cuts: list[PatternCut] = []
    for count, frequency in enumerate(frequencies, start=1):
        clock = time.perf_counter()
        solution, *again = (solve_alone(station, frequency, m, store=store) for m in meshes)
        found = antenna_figures(solution, *again, termination=termination)
        rows += found
        if frequency in drawn:
            cuts += pattern_cuts(solution, termination=termination)
        unknowns = f"{found[0].unknowns} unknowns" + (f", finer mesh {found[0].finer_unknowns}" if convergence else "")
        solved = sum(f == frequency for f, _ in missing)
        state = "from store" if not solved else readable_seconds(time.perf_counter() - clock)
        screen.say(f"  {frequency / 1e6:g} MHz ({count} of {len(frequencies)}): {unknowns}, {state}")
        screen.emit("unit", frequency_hz=frequency, state="solved" if solved else "from store")
    return rows, cuts


def _show(rows: list[AntennaFigures], screen: Screen, *, free_space: bool, convergence: bool) -> None:
    from dataclasses import asdict

    left_out = set() if free_space else {"front to back [dB]"}
    left_out |= set() if any(row.ground_loss > 0.0 for row in rows) else {"into ground [%]"}
    left_out |= set() if convergence else {"change of Z [%]", "of pattern [dB]"}
    shown = {title: style for title, style in SHOWN.items() if title not in left_out}

    def cell(row: AntennaFigures, style: str) -> str:
        return style.format(**asdict(row)).replace("%", "").replace("nan", "-")

    table = [[f"{r.frequency_hz / 1e6:.6g}", r.port, *(cell(r, style) for style in shown.values())] for r in rows]
    screen.table("The antenna alone", ["frequency [MHz]", "port", *shown], table)
    for row in rows:
        screen.emit("figures", **{k: None if isinstance(v, float) and math.isnan(v) else v for k, v in asdict(row).items()})
    if free_space:
        screen.say("front to back: peak in the sky over the opposite direction")
    screen.say(
        "directivity: largest in the sky; gain: realised, with the mismatch; widths: in the vertical planes along and across the "
        "co-polarisation; cross-polar: largest within half power, Ludwig's third definition"
    )
    if "into ground [%]" in shown:
        screen.say("into ground: part of the accepted power that the ground takes; it is in the gain, not in the directivity")
    if convergence:
        screen.say("change: on the finer mesh, about the error of these figures")


def _draw(
    station: Station, rows: list[AntennaFigures], cuts: list[PatternCut], folder: Path, stem: str, termination: complex,
    screen: Screen, *, convergence: bool,
) -> None:  # fmt: skip
    from elbowroom.job.pictures import antenna as pictures
    from elbowroom.job.pictures import picture_name

    title = station.placed[0].antenna.name
    frequencies = sorted({row.frequency_hz for row in rows})
    common = {"title": title, "termination": termination, "ground": station.ground}

    def path(what: str) -> Path:
        return folder / picture_name(f"antenna-{what}", stem)

    screen.wrote(pictures.draw_antenna(station, path("view"), title=title, frequencies_hz=frequencies))
    screen.wrote(pictures.draw_antenna_impedance(rows, path("impedance"), **common))  # type: ignore[arg-type]
    free_space = station.ground.open_below
    screen.wrote(pictures.draw_antenna_gain(rows, path("gain"), free_space=free_space, **common))  # type: ignore[arg-type]
    screen.wrote(pictures.draw_antenna_cuts(cuts, path("cuts"), **common))  # type: ignore[arg-type]
    if convergence:
        screen.wrote(pictures.draw_antenna_convergence(rows, path("convergence"), title=title, ground=station.ground))
