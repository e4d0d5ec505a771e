"""Jobs: a job file in memory, checked, with the files it names read and every default filled in.

- `Job`: what to solve; its station, terminations and the lines that say every setting
- `Beam`: one beam to form
"""

from __future__ import annotations

import math
from collections import Counter
from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np

from elbowroom.base.arrays import FloatArray
from elbowroom.geometry.antennas import Antenna
from elbowroom.geometry.grounds import Ground
from elbowroom.geometry.layouts import Layout
from elbowroom.geometry.offsets import Offsets, displaced
from elbowroom.geometry.stations import Placed, PortName, Station, turned
from elbowroom.job.damage import AMPLIFIER_OFF, OPEN, SHORTED, Damage
from elbowroom.job.jobtables import OnePort
from elbowroom.job.jobterminations import Terminations
from elbowroom.job.tomlfile import counted
from elbowroom.system.terminations import PortTermination, termination_at


def azimuth_to_phi_deg(azimuth_deg: float) -> float:
    """Return the angle phi, east through north, 0 to 360 [deg], of a compass azimuth, north through east [deg]."""
    phi = math.fmod(90.0 - azimuth_deg, 360.0)
    phi = phi + 360.0 if phi < 0.0 else phi
    return 0.0 if phi >= 360.0 else phi


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
    left_out : frozenset of str
        Dead ports, as antenna/port, which take no part.
    """

    name: str
    port: str
    zenith_angle_deg: float = 0.0
    azimuth_deg: float = 0.0
    antennas: tuple[str, ...] | None = None
    delay_step_s: float | None = None
    left_out: frozenset[str] = frozenset()

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
        return np.array([float(self.adds_up(name)) for name in station.port_names])

    def adds_up(self, name: PortName) -> bool:
        """Return whether a port takes part."""
        return self.asks_for(name) and str(name) not in self.left_out

    def asks_for(self, name: PortName) -> bool:
        """Return whether a port would take part if nothing were dead."""
        return name.port == self.port and (self.antennas is None or name.antenna in self.antennas)


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
    terminations : Terminations
        What ports see while nothing is broken.
    solver, mesh, precision : str
        Settings of :func:`elbowroom.job.solve.solve`.
    beams : tuple of Beam
        Beams in the order of the file.
    sky_step_deg : float
        Step of maps [deg].
    store_folder, output_folder : Path
        Where results go.
    ground_paths : tuple of Path
        Tables of the soil.
    as_built_path : Path or None
        The file of offsets.
    offsets : Offsets or None
        How antennas differ from the layout.
    damage : Damage
        What is broken.
    store_precision : str
        ``"double"``, or ``"single"`` for currents in half the room.
    store_currents : str
        ``"keep"``, or ``"drop"`` once tables and pictures are made.
    segments : str
        ``"auto"``, or ``"none"``: every frequency is assembled for itself.
    solve_step_hz : float or None
        About how far apart channels are solved, the others being made from them [Hz].
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
    terminations: Terminations
    solver: str
    mesh: str
    precision: str
    tolerance: float
    beams: tuple[Beam, ...]
    sky_step_deg: float
    store_folder: Path
    output_folder: Path
    as_built_path: Path | None = None
    ground_paths: tuple[Path, ...] = ()
    offsets: Offsets | None = None
    damage: Damage = field(default_factory=Damage)
    store_precision: str = "double"
    store_currents: str = "keep"
    segments: str = "auto"
    solve_step_hz: float | None = None

    @property
    def termination(self) -> PortTermination:
        """What ports see that are not named [ohm]."""
        return self.terminations.every

    @property
    def termination_of_port(self) -> dict[str, PortTermination]:
        """Exceptions by ``antenna/port``."""
        return self.terminations.of_port

    def station(self) -> Station:
        """Return the station: antennas that are not missing, as built, turned and shifted, on their ground."""
        layout = self.layout if self.offsets is None else displaced(self.layout, self.offsets)
        missing = set(self.damage.missing)
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
            if layout.names[i] not in missing
        ]
        return Station(placed, self.ground)

    def port_terminations(self, station: Station | None = None) -> list[PortTermination]:
        """Return what each port sees at every frequency, in the order of the station's ports; damage included."""
        return [self._termination_of(name) for name in (station or self.station()).port_names]

    def _termination_of(self, name: PortName) -> PortTermination:
        state = self.damage.state(name)
        if state is None:
            return self.terminations.of(name)
        if state != AMPLIFIER_OFF:
            return {OPEN: "open", SHORTED: "short"}[state]
        off = self.terminations.amplifier_off
        assert off is not None  # read_job sees to it
        return off

    def termination_values(self, station: Station | None = None, frequency_hz: float | None = None) -> list[OnePort]:
        """Return what each port sees at a frequency: ohms, ``"open"`` or ``"short"``, in the order of the station's ports.

        Parameters
        ----------
        station : Station, optional
            The job's own by default.
        frequency_hz : float, optional
            [Hz]; the lowest of the job by default.
        """
        frequency = self.frequencies_hz[0] if frequency_hz is None else frequency_hz
        terminations = self.port_terminations(station)
        # many ports share one termination; told apart by identity, as comparing long files costs more than reading them off
        different = {id(termination): termination for termination in terminations}
        values = {key: termination_at(termination, frequency) for key, termination in different.items()}
        return [values[id(termination)] for termination in terminations]

    def as_designed(self) -> Job:
        """Return the job with every antenna where the layout puts it, present and alive; terminations stay."""
        beams = tuple(replace(beam, left_out=frozenset()) for beam in self.beams)
        return replace(self, as_built_path=None, offsets=None, damage=Damage(), beams=beams)

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
            f"station.ground = {self.ground.describe()}",
            f"station.turn_deg = {self.turn_deg:.10g}",
            f"station.shift_east_m = {self.shift_east_m:.10g}",
            f"station.shift_north_m = {self.shift_north_m:.10g}",
            *self._as_built_lines(),
            *self.damage.lines(),
            f"band.frequency_hz = {band} ({len(f)} in all)",
            f"band.segments = {self.segments}",
            *([] if self.solve_step_hz is None else [f"band.solve_step_hz = {self.solve_step_hz:.10g}"]),
            *self.terminations.lines(),
            f"solver.method = {self.solver}",
            f"solver.mesh = {self.mesh}",
            f"solver.precision = {self.precision}",
            f"solver.tolerance = {self.tolerance:g}",
        ]
        for b in self.beams:
            who = "all antennas with the port" if b.antennas is None else counted(len(b.antennas), "antenna")
            delays = "exact delays" if b.delay_step_s is None else f"delays in steps of {b.delay_step_s:g} s"
            lines.append(
                f"beam.{b.name} = port {b.port}, zenith angle {b.zenith_angle_deg:g} deg, azimuth {b.azimuth_deg:g} deg "
                f"(phi {b.phi_deg:g} deg), {who}, {delays}{self._left_out_text(b)}"
            )
        return [
            *lines,
            f"sky.step_deg = {self.sky_step_deg:.10g}",
            f"store.folder = {self.store_folder}",
            f"store.precision = {self.store_precision}",
            f"store.currents = {self.store_currents}",
            f"output.folder = {self.output_folder}",
        ]

    def _as_built_lines(self) -> list[str]:
        if self.offsets is None:
            return []
        moved = counted(len(self.offsets), "antenna")
        return [f"station.as_built = {self.as_built_path} ({moved}, moved by up to {self.offsets.largest_m:.4g} m)"]

    def _left_out_text(self, beam: Beam) -> str:
        """Return which of the antennas that a beam asks for are dead or missing."""
        names = [
            PortName(name, port.name)
            for name, design in zip(self.layout.names, self.layout.antenna, strict=True)
            for port in self.designs[design].ports
        ]
        dead = [n.antenna for n in names if beam.asks_for(n) and not beam.adds_up(n)]
        gone = set(self.damage.missing)
        missing = [n.antenna for n in names if beam.asks_for(n) and n.antenna in gone]
        parts = [f"{', '.join(who)} ({what})" for who, what in ((dead, "dead"), (missing, "missing")) if who]
        return f"; without {' and '.join(parts)}" if parts else ""
