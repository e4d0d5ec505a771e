"""The command about ports: their matrices as Touchstone files, and what they show while all are driven at once."""

from __future__ import annotations

import math
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from elbowroom.cli.common import FREQUENCIES, JOB, checked_folder, checked_output, make_screen, modes, open_job, require_stored

if TYPE_CHECKING:
    from elbowroom.cli.screen import Screen
    from elbowroom.job.jobmodel import Beam
    from elbowroom.job.pipeline import JobRun
    from elbowroom.job.portmatrices import ActivePorts

STEP_DEG = 1.0
"""Step of the zenith angle of a scan."""


def _reference(values: tuple[float, ...]) -> float | list[float]:
    return list(values) if len(values) > 1 else values[0] if values else 100.0


@click.command()
@JOB
@FREQUENCIES
@click.option(
    "--matrix", type=click.Choice(["S", "Z", "Y"], case_sensitive=False), default="S", show_default=True, help="Which matrices."
)
@click.option(
    "--ports", "names", multiple=True, metavar="ANTENNA/PORT",
    help="Only these ports, others terminated as the job says; may be given several times.",
)  # fmt: skip
@click.option("--antenna", "antennas", multiple=True, metavar="NAME", help="The same for all ports of an antenna.")
@click.option(
    "--reference-ohm", type=float, multiple=True, metavar="OHM",
    help="Reference resistance of the file, or one for each of its ports; 100 by default.",
)  # fmt: skip
@click.option("--touchstone-version", type=click.Choice(["1", "2"]), default="1", show_default=True, help="Form of the file.")
@click.option(
    "--active-reference-ohm", type=float, metavar="OHM",
    help="Resistance that active reflections refer to, instead of each port's termination.",
)  # fmt: skip
@click.option(
    "--scan", "scan_azimuth_deg", type=float, metavar="AZIMUTH",
    help="Also point a beam from horizon to horizon along this azimuth, north through east [deg].",
)  # fmt: skip
@click.option("--scan-beam", metavar="NAME", help="Beam that is pointed; the job's first by default.")
@click.option("--scan-frequency-hz", type=float, metavar="HZ", help="Frequency of the scan; the middle one by default.")
@click.option("--output", type=click.Path(path_type=Path), help="Folder of the files; by default the job's output folder.")
@modes
def ports(
    job: Path, frequencies_hz: tuple[float, ...], matrix: str, names: tuple[str, ...], antennas: tuple[str, ...],
    reference_ohm: tuple[float, ...], touchstone_version: str, active_reference_ohm: float | None,
    scan_azimuth_deg: float | None, scan_beam: str | None, scan_frequency_hz: float | None, output: Path | None,
    mode: str | None,
) -> None:  # fmt: skip
    """Look at the ports of a solved JOB: a Touchstone file of their matrices, and their active impedances.

    Active impedance and reflection are what a port shows while all ports of a beam are driven at once, in tables and pictures
    over frequency and, with --scan, over where the beam points.
    """
    from elbowroom.job.portmatrices import port_indices, write_port_matrices

    _check_numbers(active_reference_ohm, scan_azimuth_deg, scan_beam, scan_frequency_hz)
    screen = make_screen(mode)
    run = open_job(job, frequencies_hz, screen)
    wanted = [*names, *antennas] or None
    rows = port_indices(run.station, wanted)
    pointed = _pointed(run, scan_beam) if scan_azimuth_deg is not None else None
    scanned = _scan_frequency(run, scan_frequency_hz) if scan_azimuth_deg is not None else 0.0
    folder = checked_folder(output or run.job.output_folder)
    require_stored(run, ports_only=True)
    version = int(touchstone_version)
    path = checked_output(run, folder / f"ports_{matrix}{'.ts' if version == 2 else f'.s{len(rows)}p'}")
    write_port_matrices(run, path, matrix, wanted, reference_ohm=_reference(reference_ohm), version=version)
    others = len(run.station.port_names) - len(rows)
    ending = f", {others} other{'s' if others > 1 else ''} terminated as the job says" if others else ""
    screen.wrote(path, f"{matrix} of {len(rows)} port{'s' if len(rows) > 1 else ''}{ending}")
    if not run.job.beams:
        screen.warn("the job has no [[beam]]: no active impedance")
        return
    _active(run, active_reference_ohm, folder, screen)
    if scan_azimuth_deg is not None:
        assert pointed is not None
        _scan(run, pointed, scan_azimuth_deg, scanned, active_reference_ohm, folder, screen)
    screen.say("results of a model, not a measurement")


def _check_numbers(
    active_reference_ohm: float | None, azimuth_deg: float | None, beam: str | None, frequency_hz: float | None
) -> None:
    if active_reference_ohm is not None and not (math.isfinite(active_reference_ohm) and active_reference_ohm > 0.0):
        msg = f"--active-reference-ohm {active_reference_ohm:g}: expected a positive resistance"
        raise click.UsageError(msg)
    if azimuth_deg is not None and not math.isfinite(azimuth_deg):
        msg = f"--scan {azimuth_deg:g}: expected an azimuth in degrees"
        raise click.UsageError(msg)
    if azimuth_deg is None and (beam is not None or frequency_hz is not None):
        msg = f"{'--scan-beam' if beam is not None else '--scan-frequency-hz'} without --scan; give --scan an azimuth in degrees"
        raise click.UsageError(msg)


def _pointed(run: JobRun, name: str | None) -> Beam:
    """Return the beam that a scan points."""
    from elbowroom.job.tomlfile import near_miss

    beams = {beam.name: beam for beam in run.job.beams}
    if not beams:
        msg = "--scan: the job has no [[beam]] to point"
        raise click.UsageError(msg)
    if name is None:
        return run.job.beams[0]
    if name not in beams:
        msg = f"--scan-beam {name!r}: no such beam; {near_miss(name, list(beams), 'beams')}"
        raise click.UsageError(msg)
    return beams[name]


def _scan_frequency(run: JobRun, frequency_hz: float | None) -> float:
    every = run.frequencies_hz
    if frequency_hz is None:
        return every[len(every) // 2]
    near = [f for f in every if abs(f - frequency_hz) < 0.5]
    if not near:
        known = ", ".join(f"{f:.10g}" for f in every[:8])
        msg = f"--scan-frequency-hz {frequency_hz:.10g}: not a frequency of this job; it has {known}"
        raise click.UsageError(msg)
    return near[0]


def _head(run: JobRun) -> tuple[str, ...]:
    from elbowroom import __version__

    return (f"elbowroom {__version__}; job {run.job.title}",)


def _active(run: JobRun, reference_ohm: float | None, folder: Path, screen: Screen) -> None:
    """Write, show and draw active impedances of all beams over frequency."""
    from elbowroom.job.pictures import picture_name
    from elbowroom.job.pictures.active import draw_active
    from elbowroom.job.portmatrices import active_ports, write_active_ports

    found = active_ports(run, reference_ohm=reference_ohm)
    path = folder / "active_ports.csv"
    write_active_ports(found, path, _head(run))
    _show(found, screen)
    screen.wrote(path, "every port of every beam, and what the columns mean")
    for index, beam in enumerate(found.beams):
        picture = folder / picture_name("active", beam.name)
        about = {"title": run.job.title, "ground": run.job.ground}
        screen.wrote(draw_active(found, index, picture, terminations=run.port_terminations, **about))  # type: ignore[arg-type]


def _show(found: ActivePorts, screen: Screen) -> None:
    import numpy as np

    from elbowroom.cli.screen import tell_origins, with_origins

    table: list[list[Any]] = []
    origins = []
    returned = found.returned_power()
    for f, frequency in enumerate(found.frequency_hz):
        for b, beam in enumerate(found.beams):
            driven = np.flatnonzero(found.weights[f, b])
            size = np.abs(found.reflection[f, b, driven])
            z = found.impedance_ohm[f, b, driven]
            worst = int(np.argmax(size))
            middle = complex(np.median(z.real), np.median(z.imag))
            table.append([
                f"{frequency / 1e6:.6g}", beam.name, f"{middle.real:.1f}{middle.imag:+.1f}j", f"{np.median(size):.3f}",
                f"{size[worst]:.3f}", str(found.port_names[driven[worst]]), f"{100.0 * returned[f, b]:.1f}",
            ])  # fmt: skip
            origins.append(found.origins[f])
            screen.emit(
                "active", origin=found.origins[f], frequency_hz=float(frequency), beam=beam.name, ports=int(driven.size),
                median_reflection=float(np.median(size)), largest_reflection=float(size[worst]),
                port_of_largest=str(found.port_names[driven[worst]]), returned_power=float(returned[f, b]),
            )  # fmt: skip
    columns = ["frequency [MHz]", "beam", "median Z [ohm]", "median |reflection|", "largest", "at port", "returned power [%]"]
    with_origins(columns, table, origins)
    screen.table("Ports driven at once", columns, table)
    tell_origins(screen, origins)
    screen.say("returned power: of all that is sent into the ports of a beam, the part that comes back to them")


def _scan(
    run: JobRun, beam: Beam, azimuth_deg: float, frequency_hz: float, reference_ohm: float | None, folder: Path, screen: Screen
) -> None:
    """Write and draw active impedances of a beam over its pointing."""
    import numpy as np

    from elbowroom.job.pictures import picture_name
    from elbowroom.job.pictures.active import draw_scan
    from elbowroom.job.portmatrices import active_ports, pointings, write_active_ports

    signed = np.arange(-90.0, 90.0 + 0.5 * STEP_DEG, STEP_DEG)
    azimuths = np.where(signed < 0.0, azimuth_deg + 180.0, azimuth_deg) % 360.0
    run.frequencies_hz = (frequency_hz,)
    found = active_ports(run, pointings(beam, np.abs(signed), azimuths), reference_ohm=reference_ohm)
    picture = folder / picture_name("active-scan", beam.name, frequency_hz)
    path = picture.with_suffix(".csv")
    write_active_ports(found, path, (*_head(run), f"Scan of beam {beam.name} along azimuth {azimuth_deg:g} deg."))
    screen.wrote(path, f"beam {beam.name} from horizon to horizon along azimuth {azimuth_deg:g} deg")
    draw_scan(
        found, signed, azimuth_deg, picture, name=beam.name, terminations=run.port_terminations, title=run.job.title,
        ground=run.job.ground,
    )  # fmt: skip
    screen.wrote(picture)
