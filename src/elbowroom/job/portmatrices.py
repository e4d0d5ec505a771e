"""Port matrices and active impedances of a job over its frequencies.

- `port_matrices`, `write_port_matrices`: Z, Y or S of any set of ports, as arrays or as a Touchstone file
- `active_ports`, `pointings`: what ports show while all are driven at once, over frequency and pointing
- `write_active_ports`: that as a table
"""

from __future__ import annotations

import csv
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from numpy.typing import ArrayLike

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.errors import ExportError, ModelRangeError
from elbowroom.geometry.stations import PortName, Station
from elbowroom.job.beamfields import beam_weights
from elbowroom.job.dropping import ports_solution
from elbowroom.job.files import written_whole
from elbowroom.job.jobmodel import Beam
from elbowroom.job.pipeline import JobRun, UnitProgress
from elbowroom.job.tomlfile import near_miss
from elbowroom.job.touchstone import PortMatrices, ports_by_name
from elbowroom.job.touchstonewriter import write_touchstone
from elbowroom.system.solving import ORIGIN_MEANING, ORIGINS

ABOUT_FILE = (
    "Results of a model, not a measurement. Time factor exp(+j omega t). Ports of the station that are not in this file are "
    "terminated as the job says."
)


def port_indices(station: Station, names: Sequence[str] | None = None) -> list[int]:
    """Return the rows of some ports in the port matrices of a station.

    Parameters
    ----------
    station : Station
        The station.
    names : sequence of str, optional
        Ports as ``antenna/port``, or antennas for all of theirs, in the order wanted; all ports by default.

    Raises
    ------
    ModelRangeError
        If there is no such port or antenna, one is named twice, or none is named.
    """
    ports = [str(name) for name in station.port_names]
    if names is None:
        return list(range(len(ports)))
    of_antenna: dict[str, list[int]] = {}
    for row, owner in enumerate(station.port_names):
        of_antenna.setdefault(owner.antenna, []).append(row)
    row_of = {name: [row] for row, name in enumerate(ports)}
    rows: list[int] = []
    for name in names:
        found = row_of.get(name) or of_antenna.get(name)
        if found is None:
            msg = f"no port or antenna {name!r}; {near_miss(name, [*ports, *of_antenna], 'ports and antennas')}"
            raise ModelRangeError(msg)
        if set(found) & set(rows):
            msg = f"{name!r}: one of its ports is named already; each port may be named once"
            raise ModelRangeError(msg)
        rows += found
    if not rows:
        msg = "no ports are named; expected one at least"
        raise ModelRangeError(msg)
    return rows


def port_matrices(
    run: JobRun,
    parameter: str = "S",
    ports: Sequence[str] | None = None,
    *,
    reference_ohm: float | ArrayLike = 100.0,
    progress: UnitProgress | None = None,
) -> PortMatrices:
    """Return Z, Y or S of some ports at all frequencies of a job, all other ports terminated as the job says.

    Parameters
    ----------
    run : JobRun
        The job; frequencies that its store lacks are solved.
    parameter : "S", "Y" or "Z", optional
        Which matrices.
    ports : sequence of str, optional
        Ports as ``antenna/port``, or antennas for all of theirs, in the order wanted; all by default.
    reference_ohm : float or float (K,), optional
        Reference resistances of the K ports [ohm].
    progress : callable, optional
        Told about solves.

    Returns
    -------
    PortMatrices
        With the names of the ports among the comments.

    Raises
    ------
    ModelRangeError
        If a port or a parameter is unknown, or a reference resistance is not positive.
    """
    rows = port_indices(run.station, ports)
    reference = np.asarray(reference_ohm, dtype=float)
    if reference.shape not in ((), (len(rows),)) or not np.all(np.isfinite(reference)) or np.any(reference <= 0.0):
        msg = f"reference_ohm: expected one positive resistance, or {len(rows)}, got {reference_ohm!r}"
        raise ModelRangeError(msg)
    reference = np.broadcast_to(reference, (len(rows),)).copy()
    made, origins = [], []
    for frequency in run.frequencies_hz:
        solution = ports_solution(run, frequency, progress)
        seen = run.termination_at(frequency)
        made.append(solution.port_matrix(parameter, rows, termination=seen, reference_ohm=reference))
        origins.append(solution.statistics.origin)
    matrices = np.array(made)
    names = run.station.port_names
    comments = (ABOUT_FILE, run.job.title, *(f"port {i}: {names[row]}" for i, row in enumerate(rows, start=1)))
    comments += tuple(origin_lines(run.frequencies_hz, origins))
    return PortMatrices(np.array(run.frequencies_hz), parameter, matrices, reference, comments)


def origin_lines(frequencies_hz: Sequence[float] | FloatArray, origins: Sequence[str]) -> list[str]:
    """Return what to say of frequencies [Hz] whose matrix was not assembled for themselves, nothing if there are none."""
    if set(origins) <= {ORIGINS[0]}:
        return []
    lines = [f"origin: {ORIGIN_MEANING}"]
    for origin in ORIGINS:
        there = [f"{f:.12g}" for f, own in zip(frequencies_hz, origins, strict=True) if own == origin]
        if there:
            lines.append(f"origin {origin} at {', '.join(there)} Hz")
    return lines


def write_port_matrices(
    run: JobRun,
    path: str | Path,
    parameter: str = "S",
    ports: Sequence[str] | None = None,
    *,
    reference_ohm: float | ArrayLike = 100.0,
    version: int = 1,
    progress: UnitProgress | None = None,
) -> PortMatrices:
    """Write the port matrices of a job as a Touchstone file and return them.

    Parameters
    ----------
    run, parameter, ports, reference_ohm, progress
        As for :func:`port_matrices`.
    path : str or Path
        The file, its name ending in ``.s2p`` and the like with the number of ports; version 2 may also end in ``.ts``.
    version : 1 or 2, optional
        Of the form; see :func:`elbowroom.job.touchstonewriter.write_touchstone`.

    Raises
    ------
    ModelRangeError
        As :func:`port_matrices`.
    ExportError
        If the name does not fit the number of ports, or the file cannot be written.
    """
    count = len(port_indices(run.station, ports))
    # before anything is solved for it
    if ports_by_name(Path(path)) != count and not (version == 2 and Path(path).suffix.lower() == ".ts"):
        msg = f"cannot write {path}: the name must end in .s{count}p, as there are {count} ports"
        raise ExportError(msg)
    found = port_matrices(run, parameter, ports, reference_ohm=reference_ohm, progress=progress)
    write_touchstone(path, found, version=version)
    return found


@dataclass(frozen=True, eq=False)
class ActivePorts:
    """What ports show while the ports of a beam are driven at once.

    Attributes
    ----------
    frequency_hz : float64 (F,)
        [Hz]
    port_names : tuple of PortName
        P ports.
    beams : tuple of Beam
        B beams.
    weights : complex128 (F, B, P)
        Source waves behind the terminations.
    impedance_ohm : complex128 (F, B, P)
        Active impedance [ohm]; NaN where a port has no weight.
    reflection : complex128 (F, B, P)
        Active reflection coefficient against the termination, or the reference asked for; NaN where a port has no weight.
    origins : tuple of str
        Where the solution at each frequency comes from, one of `elbowroom.system.solving.ORIGINS`.
    """

    frequency_hz: FloatArray
    port_names: tuple[PortName, ...]
    beams: tuple[Beam, ...]
    weights: ComplexArray
    impedance_ohm: ComplexArray
    reflection: ComplexArray
    origins: tuple[str, ...] = ()

    def returned_power(self) -> FloatArray:
        """Return the part of the power sent into the driven ports of each beam that comes back to them, (F, B).

        The sum of |reflection x weight|^2 over that of |weight|^2; waves that ports without weight take are not counted.  It
        is a part of power where reflections refer to the terminations, which are the sources' impedances.
        """
        sent = np.abs(self.weights) ** 2
        back = np.where(sent > 0.0, np.abs(np.where(sent > 0.0, self.reflection, 0.0)) ** 2 * sent, 0.0)
        return np.asarray(back.sum(axis=-1) / sent.sum(axis=-1))


def pointings(beam: Beam, zenith_angle_deg: ArrayLike, azimuth_deg: ArrayLike) -> list[Beam]:
    """Return a beam pointed in several directions.

    Parameters
    ----------
    beam : Beam
        What to point.
    zenith_angle_deg, azimuth_deg : array_like
        Directions [deg], azimuths north through east; shapes that broadcast.

    Raises
    ------
    ModelRangeError
        If an angle is not finite or a zenith angle is not within 0 to 90.
    """
    zenith, azimuth = np.broadcast_arrays(np.asarray(zenith_angle_deg, dtype=float), np.asarray(azimuth_deg, dtype=float))
    if not (np.all(np.isfinite(zenith)) and np.all(np.isfinite(azimuth)) and np.all((zenith >= 0.0) & (zenith <= 90.0))):
        msg = "pointings: expected finite azimuths and zenith angles from 0 to 90 degrees"
        raise ModelRangeError(msg)
    return [
        replace(beam, name=f"{beam.name} {z:g}/{a:g}", zenith_angle_deg=float(z), azimuth_deg=float(a))
        for z, a in zip(zenith.ravel(), azimuth.ravel(), strict=True)
    ]


def active_ports(
    run: JobRun,
    beams: Sequence[Beam] | None = None,
    *,
    reference_ohm: float | None = None,
    progress: UnitProgress | None = None,
) -> ActivePorts:
    """Return active impedances and reflections of every port over frequency and beam.

    Ports are driven with the weights of the beam as source waves behind their terminations, and dead ports are only
    terminated; see :meth:`elbowroom.radiation.solution.Solution.active_impedance` for the formula.

    Parameters
    ----------
    run : JobRun
        The job; frequencies that its store lacks are solved.
    beams : sequence of Beam, optional
        Those of the job by default; `pointings` makes a scan of one.
    reference_ohm : float, optional
        Resistance that reflections refer to [ohm]; each port's termination by default.
    progress : callable, optional
        Told about solves.

    Raises
    ------
    ModelRangeError
        If there is no beam, or the terminations of driven ports cannot be used.
    """
    chosen = tuple(run.job.beams if beams is None else beams)
    if not chosen:
        msg = "active impedance: no beam to drive the ports with; the job has no [[beam]] and none was given"
        raise ModelRangeError(msg)
    weights, impedance, reflection, origins = [], [], [], []
    for frequency in run.frequencies_hz:
        solution, seen = ports_solution(run, frequency, progress), run.termination_at(frequency)
        origins.append(solution.statistics.origin)
        weights.append(beam_weights(solution, chosen))
        impedance.append(solution.active_impedance(weights[-1], termination=seen))
        reflection.append(solution.active_reflection(weights[-1], termination=seen, reference_ohm=reference_ohm))
    return ActivePorts(
        np.array(run.frequencies_hz),
        run.station.port_names,
        chosen,
        np.array(weights),
        np.array(impedance),
        np.array(reflection),
        tuple(origins),
    )


ACTIVE_COLUMNS = {
    "frequency_hz": "frequency",
    "beam": "name of the beam whose weights drive the ports",
    "zenith_angle_deg": "where it points: zenith angle",
    "azimuth_deg": "where it points: azimuth, north through east",
    "antenna": "antenna",
    "port": "port; those without weight in the beam are terminated and left out",
    "active_resistance_ohm": "real part of V/I while all ports of the beam are driven at once; inf where no current flows",
    "active_reactance_ohm": "imaginary part",
    "active_reflection": "magnitude of the power wave that comes back over the one sent; above 1 where a port gives power away",
    "active_reflection_phase_deg": "its phase",
}


def write_active_ports(active: ActivePorts, path: str | Path, head: Iterable[str] = ()) -> None:
    """Write active impedances and reflections as CSV, under ``#`` lines that say what each column means.

    Parameters
    ----------
    active : ActivePorts
        What to write; ports without weight are left out.
    path : str or Path
        The file.
    head : iterable of str, optional
        Further lines about the job.

    Raises
    ------
    ExportError
        If the file cannot be written.
    """
    with written_whole(path) as temporary, temporary.open("w", newline="", encoding="utf-8") as file:
        for line in (
            *head,
            "Ports driven at once.  Results of a model, not a measurement.",
            *origin_lines(active.frequency_hz, active.origins),
            "Weights are source waves behind the terminations: a port is driven by 2 w sqrt(Re Z_T) behind its termination Z_T.",
            *(f"{name}: {meaning}" for name, meaning in ACTIVE_COLUMNS.items()),
        ):
            file.write(f"# {' '.join(line.split())}\n")
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(ACTIVE_COLUMNS)
        for f, frequency in enumerate(active.frequency_hz):
            for b, beam in enumerate(active.beams):
                pointing = [f"{beam.zenith_angle_deg:.9g}", f"{beam.azimuth_deg:.9g}"]
                for p in np.flatnonzero(active.weights[f, b]):
                    z, gamma, name = active.impedance_ohm[f, b, p], active.reflection[f, b, p], active.port_names[p]
                    numbers = (z.real, z.imag, abs(gamma), np.degrees(np.angle(gamma)))
                    writer.writerow(
                        [f"{frequency:.9g}", beam.name, *pointing, name.antenna, name.port, *(f"{v:.9g}" for v in numbers)]
                    )
