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
``[station.ground] kind``        instead: ``"soil"``, or ``"mesh-on-soil"``: a square wire mesh, bonded at its crossings,
                                 that lies on soil and covers all of it
``[station.ground]               real part of the soil's relative permittivity, 1 to 100
relative_permittivity``
``[station.ground]               its conductivity, all losses included [S/m]
conductivity_s_per_m``
``[station.ground] file``        instead of both: CSV file with the columns ``frequency_hz``,
                                 ``relative_permittivity`` and ``conductivity_s_per_m``, interpolated linearly, never
                                 outside its range
``[station.ground]               instead of the permittivity: volume of water over volume of soil, 0 to 0.55, from which
water_content``                  it follows by the polynomial of Topp, Davis and Annan (1980), 1 MHz to 1 GHz
``[station.ground] pitch_m,      distance and radius of the mesh's wires [m]
wire_radius_m``
``[station.ground]               their metal [S/m], [-]; no loss by default
wire_conductivity_s_per_m,
wire_relative_permeability``
``[[station.ground.layers]]``    instead of constants: one table for each layer from the surface down, with the soil's
                                 keys above and ``thickness_m`` [m]; the last one has none and no end
``[station.ground] tolerance``   error of the soil's kernels times distance; 1e-5 by default
``[station] turn_deg``           turn of the whole station, its antennas included, about the station's reference
                                 point, from east towards north [deg]; 0 by default
``[station] shift_east_m,        shift of the whole station, after the turn [m]; 0 by default
shift_north_m``
``[band] frequency_hz``          list of frequencies [Hz], in any order; results are in rising order
``[band] start_hz, stop_hz,      instead of the list: start, start + step, ... up to stop, stop included if a
step_hz``                        whole number of steps away [Hz]
``[band] segments``              ``"auto"``: where the reduced method solves many channels, matrices are assembled at a
                                 few frequencies and interpolated to the channels, within the tolerance, between
                                 entries of a soil's table where there are 16 channels or more; ``"none"``:
                                 every frequency is assembled for itself
``[band] solve_step_hz``         about how far apart channels are solved [Hz]; those in between are interpolated from
                                 them where the estimated error allows, else solved too; all are solved by default
``[station] as_built``           CSV file of offsets from the layout, added before turn and shift (see
                                 `elbowroom.geometry.offsets`); none by default
``[station.damage] missing``     antennas whose structure is absent
``[station.damage] open,         antennas, or ports named antenna/port, that are dead: their structure stays and
shorted, amplifier_off``         couples, they weigh 0 in every beam; these go before ``[termination]``
``[termination] impedance_ohm``  what every port sees: ohms, ``[resistance, reactance]``, ``"open"`` or
                                 ``"short"``; 100 by default
``[termination] file``           instead: a one-port Touchstone file, interpolated linearly in the real and the
                                 imaginary part of its reflection coefficient, never outside its range
``[termination] circuit``        instead: ``"series"`` or ``"parallel"``, of ``resistance_ohm``,
                                 ``inductance_h`` and ``capacitance_f``, one at least
``[termination]                  whether the resistance of this table may be negative; a warning then
allow_negative_resistance``
``[termination.antennas] NAME``  the same for one antenna: a value, or a table of the keys above
``[termination.ports] "A1/x"``   the same for one port, named antenna/port; goes before its antenna's
``[termination] amplifier_off``  the same for ports whose amplifier is off
``[solver] method``              ``"direct"``, ``"reduced"``, or ``"auto"``: reduced for large stations
``[solver] mesh``                ``"default"`` or ``"refined"``
``[solver] precision``           of the direct method: ``"mixed"``, ``"double"`` or ``"single"``
``[solver] tolerance``           of the reduced method: error of embedded patterns relative to their peaks; 1e-4 by default
``[[beam]] name``                name, unique in the job
``[[beam]] port``                name of the port of each antenna that the beam adds up
``[[beam]] zenith_angle_deg``    pointing, 0 to 90 [deg]; 0 by default
``[[beam]] azimuth_deg``         pointing, north through east, -360 to 360 [deg]; 0 by default
``[[beam]] antennas``            names of the antennas in the beam; all that have the port by default
``[[beam]] delay_step_s``        delays are rounded to multiples of this [s]; exact by default
``[sky] step_deg``               step of the directions of maps; must divide 90; 1 by default [deg]
``[store] folder``               where solved currents are kept; ``"store"`` by default
``[store] precision``            ``"double"``, or ``"single"``: currents take half the room and are rounded to 6e-8;
                                 port matrices stay in double
``[store] currents``             ``"keep"``, or ``"drop"``: once `elbowroom run` has made tables and pictures, only
                                 port matrices stay; other beams then need another solve
``[output] folder``              where tables and pictures go; ``"results"`` by default
================================ ===========================================================================
"""

from __future__ import annotations

from collections import Counter
from dataclasses import replace
from pathlib import Path
from typing import Any

from elbowroom.base.errors import GeometryError, JobFileError
from elbowroom.geometry.antennas import Antenna
from elbowroom.geometry.grounds import GROUNDS, Ground, PerfectGround
from elbowroom.geometry.layouts import Layout, read_layout
from elbowroom.geometry.offsets import Offsets, displaced, read_offsets
from elbowroom.geometry.stations import PortName
from elbowroom.job.antennafile import read_antenna
from elbowroom.job.damage import AMPLIFIER_OFF, Damage, read_damage
from elbowroom.job.jobgrounds import ground_files, read_ground
from elbowroom.job.jobmodel import Beam as Beam
from elbowroom.job.jobmodel import Job as Job
from elbowroom.job.jobmodel import azimuth_to_phi_deg as azimuth_to_phi_deg
from elbowroom.job.jobtables import SECTIONS, BeamTable, DamageTable, StationTable
from elbowroom.job.jobterminations import TerminationReader, Terminations
from elbowroom.job.tomlfile import counted, fail, key_path, near_miss, read_toml, shown, validate_table

SCHEMA = 1
"""Version of the keys above."""


_TOP_KEYS = ("schema", "title", *SECTIONS, "beam")


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
    ground_table: dict[str, Any] | None = None
    for key, model in SECTIONS.items():
        if key in ("station", "band") and key not in table:
            problems.append(f"[{key}] is missing")
        else:
            entry = table.get(key, {})
            if key == "station" and isinstance(entry, dict) and isinstance(entry.get("ground"), dict):
                entry = dict(entry)
                ground_table = entry.pop("ground")
            parts[key] = validate_table(model, entry, problems, (key,))
    beams = _beams(table.get("beam", []), problems)
    folder = file.parent
    offsets: Offsets | None = None
    damage, terminations = Damage(), Terminations()
    station_table = parts.get("station")
    ground: Ground = PerfectGround()
    if ground_table is not None:
        ground = read_ground(folder, ground_table, () if parts.get("band") is None else parts["band"].frequencies(), problems)
    elif station_table is not None:
        ground = GROUNDS[station_table.ground]
    layout: Layout | None = None
    designs: dict[str, Antenna] | None = None
    antenna_paths: dict[str, Path] = {}
    if station_table is not None:
        layout, designs, antenna_paths = _station_files(folder, station_table, problems)
    if layout is not None and designs is not None:
        port_names = {n: [p.name for p in designs[d].ports] for n, d in zip(layout.names, layout.antenna, strict=True)}
        assert station_table is not None
        offsets = _offsets(folder, station_table, layout, problems)
        damage_table = validate_table(DamageTable, station_table.damage, problems, ("station", "damage"))
        if damage_table is not None:
            damage = read_damage(damage_table, port_names, problems)
        if parts.get("termination") is not None:
            band = parts.get("band")
            reader = TerminationReader(folder, () if band is None else band.frequencies(), problems)
            terminations = reader.terminations(parts["termination"], port_names)
            if AMPLIFIER_OFF in damage.ports.values() and parts["termination"].amplifier_off is None:
                problems.append("termination.amplifier_off: required key is missing beside station.damage.amplifier_off")
        _check_beams(beams, port_names, problems)
        beams = _alive(beams, port_names, damage, problems)
    if parts.get("band") is not None and parts.get("solver") is not None:
        if parts["band"].solve_step_hz is not None and parts["solver"].method == "direct":
            problems.append('band.solve_step_hz: channels are interpolated by the reduced method; solver.method is "direct"')
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
        ground=ground,
        turn_deg=station_table.turn_deg,
        shift_east_m=station_table.shift_east_m,
        shift_north_m=station_table.shift_north_m,
        frequencies_hz=parts["band"].frequencies(),
        terminations=terminations,
        solver=parts["solver"].method,
        mesh=parts["solver"].mesh,
        precision=parts["solver"].precision,
        tolerance=parts["solver"].tolerance,
        beams=tuple(b for _, b in beams),
        sky_step_deg=parts["sky"].step_deg,
        store_folder=folder / parts["store"].folder,
        output_folder=folder / parts["output"].folder,
        as_built_path=None if station_table.as_built is None else folder / station_table.as_built,
        ground_paths=ground_files(folder, ground_table),
        offsets=offsets,
        damage=damage,
        store_precision=parts["store"].precision,
        store_currents=parts["store"].currents,
        segments=parts["band"].segments,
        solve_step_hz=parts["band"].solve_step_hz,
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


def _offsets(folder: Path, table: StationTable, layout: Layout, problems: list[str]) -> Offsets | None:
    """Return the offsets of the antennas, after making sure that the layout can take them."""
    if table.as_built is None:
        return None
    try:
        offsets = read_offsets(folder / table.as_built)
    except JobFileError as cause:
        problems.append(f"station.as_built: {str(cause).splitlines()[0]}")
        problems.extend(f"station.as_built: {p}" for p in cause.problems)
        return None
    known = set(layout.names)
    unknown = [name for name in offsets.names if name not in known]
    problems.extend(f"station.as_built: no antenna {name!r}; {near_miss(name, layout.names, 'antennas')}" for name in unknown)
    if unknown:
        return None
    try:
        displaced(layout, offsets)
    except GeometryError as cause:
        problems.extend(f"station.as_built: {p}" for p in cause.problems)
        return None
    return offsets


def _alive(
    beams: list[tuple[int, Beam]], port_names: dict[str, list[str]], damage: Damage, problems: list[str]
) -> list[tuple[int, Beam]]:
    """Return the beams without dead ports; one of which nothing is left is a problem."""
    beams = [(i, replace(beam, left_out=frozenset(damage.ports))) for i, beam in beams]
    missing = set(damage.missing)
    if missing >= set(port_names):
        return beams  # told already
    names = [PortName(antenna, port) for antenna, ports in port_names.items() for port in ports]
    for i, beam in beams:
        asked = [name for name in names if beam.asks_for(name)]
        if asked and not any(beam.adds_up(name) and name.antenna not in missing for name in asked):
            problems.append(f"beam[{i}]: all its antennas are dead or missing (station.damage)")
    return beams


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
