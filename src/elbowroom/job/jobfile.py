"""Job files: what to solve and what to make of it, as TOML.

Only ``[station]`` and ``[band]`` are required.  Relative paths count from the folder of the job file.

================================ ===========================================================================
key                              meaning
================================ ===========================================================================
``schema``                       version of these keys; 1
``title``                        a line for people; the file's name by default
``[station] layout``             CSV file of antenna places (see `elbowroom.geometry.layouts`)
``[station] antenna``            antenna file of all antennas whose ``antenna`` column is empty
``[station.antennas] NAME``      antenna file of the antennas whose ``antenna`` column says NAME
``[station] ground``             ``"perfect"`` (conducting plane z = 0) or ``"free-space"``; perfect by default
``[station] turn_deg``           turn of the whole station, its antennas included, about the station's reference
                                 point, from east towards north [deg]; 0 by default
``[station] shift_east_m,        shift of the whole station, after the turn [m]; 0 by default
shift_north_m``
``[band] frequency_hz``          list of frequencies [Hz], in any order; they are solved in rising order
``[band] start_hz, stop_hz,      instead of the list: start, start + step, ... up to stop, stop included if a
step_hz``                        whole number of steps away [Hz]
``[termination] impedance_ohm``  what every port sees: ohms, ``[resistance, reactance]``, ``"open"`` or
                                 ``"short"``; 100 by default
``[termination.ports] "A1/x"``   the same for one port, named antenna/port
``[solver] method``              ``"auto"`` or ``"direct"``
``[solver] mesh``                ``"default"`` or ``"refined"``
``[solver] precision``           ``"mixed"``, ``"double"`` or ``"single"``
``[[beam]] name``                name, unique in the job
``[[beam]] port``                name of the port of each antenna that the beam adds up
``[[beam]] zenith_angle_deg``    pointing, 0 to 90 [deg]; 0 by default
``[[beam]] azimuth_deg``         pointing, north through east, -360 to 360 [deg]; 0 by default
``[[beam]] antennas``            names of the antennas in the beam; all that have the port by default
``[[beam]] delay_step_s``        delays are rounded to multiples of this [s]; exact by default
``[sky] step_deg``               step of the directions of maps; must divide 90; 1 by default [deg]
``[store] folder``               where solved currents are kept; ``"store"`` by default
``[output] folder``              where tables and pictures go; ``"results"`` by default
================================ ===========================================================================
"""

from __future__ import annotations

import math
from collections import Counter
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from elbowroom.base.arrays import FloatArray
from elbowroom.base.errors import JobFileError
from elbowroom.geometry.antennas import Antenna
from elbowroom.geometry.grounds import FreeSpace, Ground, PerfectGround
from elbowroom.geometry.layouts import Layout, read_layout
from elbowroom.geometry.stations import Placed, Station, turned
from elbowroom.job.antennafile import read_antenna
from elbowroom.job.jobtables import SECTIONS, BeamTable, OnePort, StationTable
from elbowroom.job.tomlfile import counted, fail, key_path, near_miss, read_toml, shown, validate_table

SCHEMA = 1
"""Version of the keys above."""

_GROUNDS: dict[str, Ground] = {"perfect": PerfectGround(), "free-space": FreeSpace()}


def azimuth_to_phi_deg(azimuth_deg: float) -> float:
    """Return the angle phi, east through north, 0 to 360 [deg], of a compass azimuth, north through east [deg]."""
    phi = math.fmod(90.0 - azimuth_deg, 360.0)
    phi = phi + 360.0 if phi < 0.0 else phi
    return 0.0 if phi >= 360.0 else phi


_TOP_KEYS = ("schema", "title", *SECTIONS, "beam")


@dataclass(frozen=True)
class Beam:
    """One beam to form: which ports, and where it points.

    Attributes
    ----------
    name : str
        Name, unique in the job.
    port : str
        Port of each antenna that is added up.
    zenith_angle_deg, azimuth_deg : float
        Pointing; azimuth from north through east [deg].
    antennas : tuple of str or None
        Antennas in the beam; None means all that have the port.
    delay_step_s : float or None
        Step of the delays [s].
    """

    name: str
    port: str
    zenith_angle_deg: float = 0.0
    azimuth_deg: float = 0.0
    antennas: tuple[str, ...] | None = None
    delay_step_s: float | None = None

    @property
    def phi_deg(self) -> float:
        """Pointing as an angle from east towards north [deg]."""
        return azimuth_to_phi_deg(self.azimuth_deg)

    @property
    def direction_rad(self) -> tuple[float, float]:
        """Pointing as (theta, phi) [rad]."""
        return math.radians(self.zenith_angle_deg), math.radians(self.phi_deg)

    def amplitudes(self, station: Station) -> FloatArray:
        """Return 1 for each port in the beam and 0 for the others, (P,)."""
        import numpy as np

        chosen = None if self.antennas is None else set(self.antennas)
        return np.array([float(n.port == self.port and (chosen is None or n.antenna in chosen)) for n in station.port_names])


@dataclass(frozen=True)
class Job:
    """A job file, checked, with the files it names read and every default filled in.

    Attributes
    ----------
    path : Path
        The job file.
    text : str
        The job file as given.
    title : str
        A line for people.
    layout_path : Path
        The layout file.
    layout : Layout
        Antenna places as in the file, before turn and shift.
    designs : dict of str to Antenna
        Designs by name in the layout's ``antenna`` column; ``""`` is the default one.
    antenna_paths : dict of str to Path
        Their files.
    ground : Ground
        What the station stands on.
    turn_deg, shift_east_m, shift_north_m : float
        Turn, then shift, of the whole station [deg], [m].
    frequencies_hz : tuple of float
        Frequencies in rising order [Hz].
    termination : float, complex, "open" or "short"
        What ports see [ohm] unless named below.
    termination_of_port : dict
        Exceptions by ``antenna/port``.
    solver, mesh, precision : str
        Settings of :func:`elbowroom.job.solve.solve`.
    beams : tuple of Beam
        Beams in the order of the file.
    sky_step_deg : float
        Step of maps [deg].
    store_folder, output_folder : Path
        Where results go.
    """

    path: Path
    text: str
    title: str
    layout_path: Path
    layout: Layout
    designs: dict[str, Antenna]
    antenna_paths: dict[str, Path]
    ground: Ground
    turn_deg: float
    shift_east_m: float
    shift_north_m: float
    frequencies_hz: tuple[float, ...]
    termination: OnePort
    termination_of_port: dict[str, OnePort]
    solver: str
    mesh: str
    precision: str
    beams: tuple[Beam, ...]
    sky_step_deg: float
    store_folder: Path
    output_folder: Path

    def station(self) -> Station:
        """Return the station: the layout's antennas, turned and shifted, on their ground."""
        layout = self.layout
        placed = [
            turned(
                Placed(
                    self.designs[layout.antenna[i]],
                    tuple(float(v) for v in layout.positions[i]),  # type: ignore[arg-type]
                    float(layout.rotation_deg[i]),
                    float(layout.tilt_east_deg[i]),
                    float(layout.tilt_north_deg[i]),
                    layout.names[i],
                ),
                self.turn_deg,
                self.shift_east_m,
                self.shift_north_m,
            )
            for i in range(len(layout))
        ]
        return Station(placed, self.ground)

    def termination_values(self, station: Station | None = None) -> list[OnePort]:
        """Return what each port sees, in the order of the station's ports."""
        names = (station or self.station()).port_names
        return [self.termination_of_port.get(str(name), self.termination) for name in names]

    def resolved_lines(self) -> list[str]:
        """Return every setting as a ``key = value`` line, defaults included, to be shown before work starts."""
        f, counts = self.frequencies_hz, Counter(self.layout.antenna)
        if len(f) <= 6:
            band = ", ".join(f"{v:.10g}" for v in f)
        else:
            band = f"{f[0]:.10g}, {f[1]:.10g}, ..., {f[-1]:.10g}"
        lines = [
            f"job = {self.path}",
            f"title = {self.title}",
            f"station.layout = {self.layout_path} ({counted(len(self.layout), 'antenna')})",
        ]
        for name, path in self.antenna_paths.items():
            design = self.designs[name]
            ports = ", ".join(p.name for p in design.ports)
            key = f"station.antennas.{name}" if name else "station.antenna"
            lines.append(f"{key} = {path} ({design.name!r}, ports {ports}; {counted(counts[name], 'antenna')})")
        lines += [
            f"station.ground = {self.ground.name}",
            f"station.turn_deg = {self.turn_deg:.10g}",
            f"station.shift_east_m = {self.shift_east_m:.10g}",
            f"station.shift_north_m = {self.shift_north_m:.10g}",
            f"band.frequency_hz = {band} ({len(f)} in all)",
            f"termination.impedance_ohm = {_ohms(self.termination)}",
            *(f"termination.ports.{k} = {_ohms(v)}" for k, v in self.termination_of_port.items()),
            f"solver.method = {self.solver}",
            f"solver.mesh = {self.mesh}",
            f"solver.precision = {self.precision}",
        ]
        for b in self.beams:
            who = "all antennas with the port" if b.antennas is None else counted(len(b.antennas), "antenna")
            delays = "exact delays" if b.delay_step_s is None else f"delays in steps of {b.delay_step_s:g} s"
            lines.append(
                f"beam.{b.name} = port {b.port}, zenith angle {b.zenith_angle_deg:g} deg, azimuth {b.azimuth_deg:g} deg "
                f"(phi {b.phi_deg:g} deg), {who}, {delays}"
            )
        return [
            *lines,
            f"sky.step_deg = {self.sky_step_deg:.10g}",
            f"store.folder = {self.store_folder}",
            f"output.folder = {self.output_folder}",
        ]


def _ohms(value: OnePort) -> str:
    if isinstance(value, complex):
        return f"[{value.real:.10g}, {value.imag:.10g}]"
    return value if isinstance(value, str) else f"{value:.10g}"


def read_job(path: str | Path) -> Job:
    """Read a job file and the layout and antenna files it names.

    Parameters
    ----------
    path : str or Path
        The file; see the module's table for its keys.

    Returns
    -------
    Job

    Raises
    ------
    JobFileError
        With every problem found in the job file and the files it names, each with its key; ``problems`` holds
        them one by one.
    """
    file = Path(path)
    text, table = read_toml(file, "job file")
    problems: list[str] = []
    for key in table:
        if key not in _TOP_KEYS:
            free = [k for k in _TOP_KEYS if k not in table]
            hint = near_miss(key, free, "known keys")
            # [station] layout = ... written without its table is the likeliest slip
            homes = [name for name, model in SECTIONS.items() if key in model.model_fields]
            problems.append(f"{key_path(key)}: unknown key; " + (f"it belongs into [{homes[0]}]" if homes else hint))
    schema = table.get("schema", SCHEMA)
    if schema != SCHEMA or not isinstance(schema, int) or isinstance(schema, bool):
        problems.append(f"schema = {shown(schema)}: expected {SCHEMA}, the only version there is")
    title = table.get("title", file.stem)
    if not isinstance(title, str) or not title.isprintable():
        problems.append(f"title = {shown(title)}: expected one line of text in quotes")
    parts: dict[str, Any] = {}
    for key, model in SECTIONS.items():
        if key in ("station", "band") and key not in table:
            problems.append(f"[{key}] is missing")
        else:
            parts[key] = validate_table(model, table.get(key, {}), problems, (key,))
    beams = _beams(table.get("beam", []), problems)
    folder = file.parent
    station_table = parts.get("station")
    layout: Layout | None = None
    designs: dict[str, Antenna] | None = None
    antenna_paths: dict[str, Path] = {}
    if station_table is not None:
        layout, designs, antenna_paths = _station_files(folder, station_table, problems)
    if layout is not None and designs is not None:
        port_names = {n: [p.name for p in designs[d].ports] for n, d in zip(layout.names, layout.antenna, strict=True)}
        if parts.get("termination") is not None:
            _check_ports(parts["termination"].ports, port_names, problems)
        _check_beams(beams, port_names, problems)
    if problems or layout is None or designs is None or station_table is None:
        fail(file, "job file", problems)
    return Job(
        path=file,
        text=text,
        title=title,
        layout_path=folder / station_table.layout,
        layout=layout,
        designs=designs,
        antenna_paths=antenna_paths,
        ground=_GROUNDS[station_table.ground],
        turn_deg=station_table.turn_deg,
        shift_east_m=station_table.shift_east_m,
        shift_north_m=station_table.shift_north_m,
        frequencies_hz=parts["band"].frequencies(),
        termination=parts["termination"].impedance_ohm,
        termination_of_port=parts["termination"].ports,
        solver=parts["solver"].method,
        mesh=parts["solver"].mesh,
        precision=parts["solver"].precision,
        beams=tuple(b for _, b in beams),
        sky_step_deg=parts["sky"].step_deg,
        store_folder=folder / parts["store"].folder,
        output_folder=folder / parts["output"].folder,
    )


def _beams(entries: object, problems: list[str]) -> list[tuple[int, Beam]]:
    if not isinstance(entries, list):
        problems.append(f"beam: expected [[beam]] tables in double brackets, found {shown(entries)}")
        return []
    beams = []
    for i, entry in enumerate(entries):
        b = validate_table(BeamTable, entry, problems, ("beam", i))
        if b is not None:
            antennas = None if b.antennas is None else tuple(b.antennas)
            beams.append((i, Beam(b.name, b.port, b.zenith_angle_deg, b.azimuth_deg, antennas, b.delay_step_s)))
    first: dict[str, int] = {}
    for i, beam in beams:
        if beam.name in first:
            problems.append(f"beam[{i}].name = {shown(beam.name)}: already the name of beam[{first[beam.name]}]")
        first.setdefault(beam.name, i)
    return beams


def _station_files(
    folder: Path, table: StationTable, problems: list[str]
) -> tuple[Layout | None, dict[str, Antenna] | None, dict[str, Path]]:
    """Return the layout, the designs by name (None unless all in use are there) and their paths."""

    def told(key: str, cause: JobFileError) -> None:
        head = str(cause).splitlines()[0]
        problems.append(f"{key}: {head}")
        problems.extend(f"{key}: {p}" for p in cause.problems)

    layout = None
    try:
        layout = read_layout(folder / table.layout)
    except JobFileError as cause:
        told("station.layout", cause)
    named = {name: ("station.antennas." + name, file) for name, file in table.antennas.items()}
    if "" in named:
        problems.append('station.antennas."": an empty name; use station.antenna for antennas without a design name')
        del named[""]
    if table.antenna is not None:
        named = {"": ("station.antenna", table.antenna), **named}
    designs: dict[str, Antenna] = {}
    whole = True
    for name, (key, antenna_file) in named.items():
        try:
            designs[name] = read_antenna(folder / antenna_file)
        except JobFileError as cause:
            told(key, cause)
            whole = False
    if layout is not None:
        for name, count in Counter(layout.antenna).items():
            if name in named:
                continue
            whole = False
            first = layout.names[layout.antenna.index(name)]
            if name:
                known = [n for n in named if n]
                problems.append(
                    f"station.antennas: {counted(count, 'antenna')} of {table.layout} (first {first!r}) "
                    f"{'ask' if count > 1 else 'asks'} for the design {name!r}, which is not there; "
                    f"{near_miss(name, known, 'designs')}"
                )
            else:
                problems.append(
                    f"station.antenna: required key is missing: {counted(count, 'antenna')} of {table.layout} "
                    f"(first {first!r}) {'name' if count > 1 else 'names'} no design"
                )
    return layout, designs if whole else None, {n: folder / f for n, (_, f) in named.items()}


def _check_ports(ports: dict[str, OnePort], port_names: dict[str, list[str]], problems: list[str]) -> None:
    known = [f"{a}/{p}" for a, names in port_names.items() for p in names]
    known_set = set(known)
    for name in ports:
        if name not in known_set:
            problems.append(f"{key_path('termination', 'ports', name)}: no such port; {near_miss(name, known, 'ports')}")


def _check_beams(beams: list[tuple[int, Beam]], port_names: dict[str, list[str]], problems: list[str]) -> None:
    all_ports = list(dict.fromkeys(p for names in port_names.values() for p in names))
    for i, beam in beams:
        if beam.port not in all_ports:
            problems.append(
                f"beam[{i}].port = {shown(beam.port)}: no antenna has such a port; {near_miss(beam.port, all_ports, 'ports')}"
            )
        for antenna, count in Counter(beam.antennas or ()).items():
            if count > 1:
                problems.append(f"beam[{i}].antennas: {antenna!r} appears {count} times")
            if antenna not in port_names:
                problems.append(f"beam[{i}].antennas: no antenna {antenna!r}; {near_miss(antenna, port_names, 'antennas')}")
            elif beam.port in all_ports and beam.port not in port_names[antenna]:
                has = ", ".join(port_names[antenna])
                problems.append(f"beam[{i}].antennas: {antenna!r} has no port {beam.port!r}; it has {has}")
