"""Beam tables: response against direction and frequency, in files that are read without this program.

An HDF5 table holds every frequency of a job; a CSV table holds the same numbers line by line.  Both carry their conventions,
their normalisation and the stated error of every frequency.
"""

from __future__ import annotations

import csv
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import h5py
import numpy as np

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.errors import ExportError
from elbowroom.geometry.directions import Directions, ludwig3
from elbowroom.job.beamfields import BeamFields, mean_nominal_phi_rad, power_shares
from elbowroom.job.files import written_whole
from elbowroom.job.groundchecks import HORIZON_NOTE
from elbowroom.radiation.solution import Solution
from elbowroom.system.solving import ORIGIN_MEANING
from elbowroom.system.terminations import Termination

TABLE_FORMAT = "elbowroom-beam-table"
TABLE_VERSION = 1
"""Raised whenever a dataset of the table changes its name, dimensions or meaning."""

COMPONENTS = ("theta-phi", "co-cross")
NORMALISATIONS = ("effective-length", "peak")
FORMATS = ("hdf5", "csv")

WARNING = (
    "Results of a model, not a measurement: uneven ground, cables, tolerances, weather and whatever else the job does not "
    "describe are not in them."
)
CONVENTIONS = (
    "SI units. Time factor exp(+j omega t), outgoing wave exp(-jkr)/r. Station frame: x east, y north, z up, origin at the "
    "reference point of the layout, ground surface at z = 0. Directions point from the station to the sky: theta is the zenith "
    "angle, phi runs from east towards north; azimuth, north through east, is 90 deg - phi. Products are bilinear, without "
    "conjugates: a beam is the sum of weight times element pattern. Effective length h: voltage at a port's termination per unit "
    "incident plane wave, V = h_theta E_theta + h_phi E_phi, with E the incident wave's field at the station's origin, "
    "without its reflection in the ground. Port current positive from the first to the second end of its wire."
)


@dataclass(frozen=True)
class TableSettings:
    """What goes into a table.

    Attributes
    ----------
    components : str
        ``"theta-phi"``, or ``"co-cross"``: Ludwig's third definition at each beam's or port's nominal direction.
    normalisation : str
        ``"effective-length"`` [m], or ``"peak"``: each beam divided by the largest magnitude of its own field over the table's
        directions, coupled and isolated each by their own.
    elements : bool
        Whether the embedded and isolated element patterns of every port are written too (HDF5 only).
    single : bool
        Whether fields are stored in single precision (HDF5 only); relative rounding 6e-8.
    """

    components: str = "theta-phi"
    normalisation: str = "effective-length"
    elements: bool = False
    single: bool = False

    def __post_init__(self) -> None:
        for name, value, known in (
            ("components", self.components, COMPONENTS),
            ("normalisation", self.normalisation, NORMALISATIONS),
        ):
            if value not in known:
                msg = f"{name} {value!r}: expected {' or '.join(repr(k) for k in known)}"
                raise ExportError(msg)

    @property
    def component_names(self) -> tuple[str, str]:
        """Names of the two components."""
        return ("theta", "phi") if self.components == "theta-phi" else ("co", "cross")

    @property
    def unit(self) -> str:
        """Unit of the fields."""
        return "m" if self.normalisation == "effective-length" else "1"


def _as_asked(field: ComplexArray, settings: TableSettings, phi_rad: FloatArray, nominal: FloatArray) -> ComplexArray:
    """Return fields (B, D, 2) in the components and normalisation of the table."""
    if settings.components == "co-cross":
        turned = np.empty_like(field)
        for b, angle in enumerate(nominal):
            turned[b, :, 0], turned[b, :, 1] = ludwig3(field[b, :, 0], field[b, :, 1], phi_rad, float(angle))
        field = turned
    if settings.normalisation == "peak":
        peak = np.sqrt(np.max(np.sum(np.abs(field) ** 2, axis=-1), axis=-1))
        if not np.all(peak > 0.0):
            msg = "a pattern is zero in every direction of the table and has no peak to divide by"
            raise ExportError(msg)
        field = field / peak[:, None, None]
    return field


def table_head(title: str, job_text: str, settings: TableSettings) -> dict[str, str]:
    """Return what a table says about itself."""
    from elbowroom import __version__

    normalised = {
        "effective-length": "effective length in metres",
        "peak": "each pattern divided by the largest magnitude of its own field over the directions of the table",
    }[settings.normalisation]
    components = {
        "theta-phi": "along theta_hat and phi_hat",
        "co-cross": "Ludwig's third definition with nominal angle p = nominal_phi_rad (east towards north): "
        "co = cos(phi - p) E_theta - sin(phi - p) E_phi, cross = sin(phi - p) E_theta + cos(phi - p) E_phi",
    }[settings.components]
    return {
        "format": TABLE_FORMAT,
        "format_version": str(TABLE_VERSION),
        "program": f"elbowroom {__version__}",
        "made_utc": datetime.now(UTC).isoformat(timespec="seconds"),
        "title": title,
        "warning": WARNING,
        "conventions": CONVENTIONS,
        "components": components,
        "normalisation": normalised,
        "radiation_efficiency": "radiated over accepted power while ports are driven by the beam's weights; part of no pattern",
        "coupled": "weighted sum of embedded element patterns: every port of the station terminated, all antennas coupled",
        "isolated": "weighted sum of isolated element patterns: each antenna alone at its place, same ground and termination",
        "stated_error": "relative_residual of the linear system; mesh_error: relative change of an isolated antenna's port "
        "admittance on a finer mesh; pattern_error: of embedded patterns with 100-ohm terminations relative to their peaks, "
        "against solving for all unknowns of that mesh, 0 where that was done; the wires' own approximations are of the order of "
        "(ka)^2",
        "job_file": job_text,
    }


def _grid(directions: Directions) -> tuple[FloatArray, FloatArray]:
    if directions.shape is None:
        msg = "a beam table needs a grid of directions"
        raise ExportError(msg)
    rows, columns = directions.shape
    return directions.theta_rad.reshape(rows, columns)[:, 0], directions.phi_rad.reshape(rows, columns)[0]


def _termination_text(termination: Termination, n_ports: int) -> list[str]:
    single = isinstance(termination, str) or np.ndim(termination) == 0
    items: list[Any] = [termination] * n_ports if single else list(termination)  # type: ignore[arg-type]
    return [t if isinstance(t, str) else f"{complex(t).real:.12g} {complex(t).imag:+.12g}j" for t in items]


def export_hdf5(
    path: str | Path,
    fields: Iterable[BeamFields],
    n_frequencies: int,
    *,
    settings: TableSettings | None = None,
    title: str = "",
    job_text: str = "",
) -> None:
    """Write a beam table as HDF5, one frequency at a time.

    Parameters
    ----------
    path : str or Path
        The file; it appears under this name only when complete.
    fields : iterable of BeamFields
        One per frequency, in rising order, all of the same station, beams and grid of T zenith angles and H angles phi.
        They may hold no beams if element patterns are asked for.
    n_frequencies : int
        How many there will be, F.
    settings : TableSettings, optional
        Components, normalisation, elements, precision.
    title, job_text : str, optional
        Stored beside the numbers.

    Raises
    ------
    ExportError
        If the file cannot be written, the directions are no grid, or there is nothing to write.

    Notes
    -----
    Datasets: ``frequency_hz`` (F), ``theta_rad`` (T), ``phi_rad`` (H), ``component`` (2), ``coupled_beam`` and ``isolated_beam``
    (F, B, T, H, 2) complex, ``weight`` (F, B, P) complex, ``beam_name`` and ``beam_port`` (B), ``pointing_theta_rad`` and
    ``pointing_phi_rad`` (B), ``nominal_phi_rad`` (B), ``radiation_efficiency`` and ``ground_loss`` (F, B),
    ``port_name`` (P), ``port_nominal_phi_rad`` (P), ``termination_ohm``
    (F, P) text, ``antenna_name`` (A), ``antenna_position_m`` (A, 3), ``relative_residual``,
    ``mesh_error`` and ``pattern_error`` (F), ``origin`` (F) text; with element patterns ``embedded_pattern`` and
    ``isolated_pattern`` (F, P, T, H, 2) complex.  Every dataset has a ``unit``; axes are HDF5 dimension scales.
    The phase centre of every pattern is the station's origin.
    """
    settings = settings or TableSettings()
    with written_whole(path) as temporary, h5py.File(temporary, "w", libver=("earliest", "v110")) as file:
        file.attrs.update(table_head(title, job_text, settings))
        writer: _TableWriter | None = None
        count = 0
        for each in fields:
            if writer is None:
                writer = _TableWriter(file, n_frequencies, each, settings)
            writer.add(count, each)
            count += 1
        if count == 0 or count != n_frequencies:
            msg = f"{path}: expected {n_frequencies} frequencies, got {count}; nothing was written"
            raise ExportError(msg)


class _TableWriter:
    """The datasets of an HDF5 table, filled one frequency at a time."""

    def __init__(self, file: h5py.File, n_frequencies: int, first: BeamFields, settings: TableSettings) -> None:
        beams = first.beams
        if not beams and not settings.elements:
            msg = "nothing to export: the job has no [[beam]] and no element patterns were asked for"
            raise ExportError(msg)
        theta, phi = _grid(first.directions)
        self.file, self.n_frequencies, self.beams, self.settings = file, n_frequencies, beams, settings
        self.shape = (theta.size, phi.size)
        self._axis("frequency_hz", np.full(n_frequencies, np.nan), "Hz", "Frequencies")
        self._axis("theta_rad", theta, "rad", "Zenith angles")
        self._axis("phi_rad", phi, "rad", "Angles from east towards north")
        self._axis("component", _text(settings.component_names), "1", "Components of the fields")
        for name, text in (
            ("relative_residual", "Of the linear system; nan where fewer functions than unknowns were solved for"),
            ("mesh_error", "Relative change of an isolated antenna's admittance on a finer mesh"),
            ("pattern_error", "Of embedded patterns relative to their peaks, by solving in fewer functions than unknowns"),
        ):
            made = self._make(name, np.full(n_frequencies, np.nan), "1", text)
            made.dims[0].attach_scale(file["frequency_hz"])
        made = self._make("origin", _text([""] * n_frequencies), "1", ORIGIN_MEANING)
        made.dims[0].attach_scale(file["frequency_hz"])
        if beams:
            self._axis("beam_name", _text([b.name for b in beams]), "1", "Names of the beams")
            pointing = np.array([b.direction_rad for b in beams])
            for name, values, unit, text in (
                ("beam_port", _text([b.port for b in beams]), "1", "Port of each antenna that is added up"),
                ("pointing_theta_rad", pointing[:, 0], "rad", "Where the beam points: zenith angle"),
                ("pointing_phi_rad", pointing[:, 1], "rad", "Where the beam points, from east towards north"),
                ("nominal_phi_rad", np.zeros(len(beams)), "rad", "Co-polarisation at zenith, from east towards north"),
            ):
                self._make(name, values, unit, text).dims[0].attach_scale(file["beam_name"])
            for name, text in (("coupled_beam", "Coupled beams"), ("isolated_beam", "Isolated beams")):
                self._field(name, "beam_name", len(beams), text)
        self._station(first.solution)

    def _make(self, name: str, values: np.ndarray, unit: str, text: str) -> h5py.Dataset:
        made = self.file.create_dataset(name, data=values)
        made.attrs.update({"unit": unit, "description": text})
        return made

    def _axis(self, name: str, values: np.ndarray, unit: str, text: str) -> None:
        self._make(name, values, unit, text).make_scale(name)

    def _field(self, name: str, axis: str, count: int, text: str) -> None:
        kind = np.complex64 if self.settings.single else np.complex128
        made = self.file.create_dataset(
            name, (self.n_frequencies, count, *self.shape, 2), dtype=kind, chunks=(1, 1, *self.shape, 2), fillvalue=kind(np.nan)
        )
        made.attrs.update({"unit": self.settings.unit, "description": text})
        for position, scale in enumerate(("frequency_hz", axis, "theta_rad", "phi_rad", "component")):
            made.dims[position].attach_scale(self.file[scale])

    def _over_frequency(self, name: str, axes: tuple[str, ...], unit: str, text: str, **kind: Any) -> None:
        """Make a dataset over frequency and some axes that are there already."""
        shape = (self.n_frequencies, *(self.file[axis].size for axis in axes))
        made = self.file.create_dataset(name, shape, **kind)
        made.attrs.update({"unit": unit, "description": text})
        for position, scale in enumerate(("frequency_hz", *axes)):
            made.dims[position].attach_scale(self.file[scale])

    def _station(self, solution: Solution) -> None:
        """Write what does not change over frequency."""
        station = solution.station
        self.file.attrs["ground"] = station.ground.describe()
        if station.ground.lossy:
            self.file.attrs["horizon"] = HORIZON_NOTE
        count = len(station.port_names)
        self._axis("port_name", _text([str(n) for n in station.port_names]), "1", "Ports as antenna/port")
        nominal = self._make(
            "port_nominal_phi_rad", station.port_nominal_phi_rad, "rad", "Co-polarisation of each port at zenith"
        )
        nominal.dims[0].attach_scale(self.file["port_name"])
        self._over_frequency("termination_ohm", ("port_name",), "ohm", "What each port sees, as text", dtype=h5py.string_dtype())
        self._make("antenna_position_m", station.positions, "m", "East, north, up of each antenna")
        self._make("antenna_name", _text([p.name for p in station]), "1", "Names of the antennas")
        if self.beams:
            kind = {"dtype": np.complex128, "fillvalue": np.complex128(np.nan)}
            self._over_frequency("weight", ("beam_name", "port_name"), "1", "Weight of each port in each beam", **kind)
            for name, text in (
                (
                    "radiation_efficiency",
                    "Radiated over accepted power of each coupled beam when sent; nan if it cannot be",
                ),
                ("ground_loss", "Power lost in the ground over accepted power, likewise"),
            ):
                self._over_frequency(name, ("beam_name",), "1", text, dtype=float, fillvalue=np.nan)
        if self.settings.elements:
            self._field("embedded_pattern", "port_name", count, "Embedded element patterns")
            self._field("isolated_pattern", "port_name", count, "Isolated element patterns")

    def add(self, index: int, ready: BeamFields) -> None:
        """Write one frequency."""
        if index >= self.n_frequencies:
            msg = f"more than the {self.n_frequencies} frequencies announced"
            raise ExportError(msg)
        solution, directions, termination = ready.solution, ready.directions, ready.termination
        if [str(n) for n in solution.port_names] != list(self.file["port_name"].asstr()[:]):
            msg = "a beam table holds one station; the ports of two of its frequencies differ"
            raise ExportError(msg)
        file, settings = self.file, self.settings
        file["frequency_hz"][index] = solution.frequency_hz
        file["relative_residual"][index] = solution.statistics.relative_residual
        file["mesh_error"][index] = solution.statistics.mesh_error
        file["pattern_error"][index] = solution.statistics.pattern_error
        file["origin"][index] = solution.statistics.origin
        file["termination_ohm"][index] = _termination_text(termination, len(solution.port_names))
        phi = directions.phi_rad
        if ready.beams:
            nominal = mean_nominal_phi_rad(solution.station, ready.weights)
            file["nominal_phi_rad"][:] = nominal
            file["weight"][index] = ready.weights
            shares = power_shares(ready)
            file["radiation_efficiency"][index], file["ground_loss"][index] = shares["radiated"], shares["ground"]
            for name, field in (("coupled_beam", ready.coupled), ("isolated_beam", ready.isolated)):
                file[name][index] = _as_asked(field, settings, phi, nominal).reshape(len(field), *self.shape, 2)
        if settings.elements:
            nominal = solution.station.port_nominal_phi_rad
            # Some ports at a time, so that the patterns of a whole station are never held at once.
            count = max(1, int(2.5e8 / (32.0 * phi.size)))
            for first in range(0, nominal.size, count):
                ports = np.arange(first, min(first + count, nominal.size))
                for name, evaluate in (
                    ("embedded_pattern", solution.embedded_patterns),
                    ("isolated_pattern", solution.isolated_patterns),
                ):
                    field = evaluate(directions.theta_rad, phi, termination=termination, ports=ports)
                    file[name][index, ports] = _as_asked(field, settings, phi, nominal[ports]).reshape(ports.size, *self.shape, 2)


def _text(values: Sequence[str]) -> np.ndarray:
    return np.array(list(values), dtype=h5py.string_dtype())


def export_csv(
    path: str | Path,
    fields: Iterable[BeamFields],
    *,
    settings: TableSettings | None = None,
    title: str = "",
    job_text: str = "",
) -> None:
    """Write a beam table as CSV, a line for each frequency, beam and direction.

    Parameters
    ----------
    path : str or Path
        The file; it appears under this name only when complete.
    fields : iterable of BeamFields
        One per frequency.
    settings : TableSettings, optional
        Components and normalisation.
    title, job_text : str, optional
        Written into the head.

    Raises
    ------
    ExportError
        If the file cannot be written, or something only HDF5 tables hold was asked for.
    """
    settings = settings or TableSettings()
    if settings.elements:
        msg = "element patterns are exported to HDF5 only; a CSV table of them would take gigabytes"
        raise ExportError(msg)
    first, second = settings.component_names
    unit = "_m" if settings.normalisation == "effective-length" else ""
    columns = ["frequency_hz", "beam", "theta_deg", "phi_deg", "azimuth_deg"]
    columns += [f"{w}_{c}_{p}{unit}" for w in ("coupled", "isolated") for c in (first, second) for p in ("real", "imag")]
    with written_whole(path) as temporary, temporary.open("w", newline="", encoding="utf-8") as file:
        for key, value in table_head(title, job_text, settings).items():
            if key != "job_file":
                file.write(f"# {key}: {value}\n")
        for line in job_text.splitlines():
            file.write(f"# job_file: {line}\n")
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(columns)
        count = 0
        for each in fields:
            count += 1
            writer.writerows(_csv_rows(each, settings))
            s = each.solution.statistics
            file.write(f"# at {each.solution.frequency_hz:.12g} Hz: relative_residual {s.relative_residual:.3g}, ")
            file.write(f"mesh_error {s.mesh_error:.3g}, pattern_error {s.pattern_error:.3g}, origin {s.origin}\n")
        if count == 0:
            msg = "nothing to export: no frequency is solved"
            raise ExportError(msg)


def _csv_rows(each: BeamFields, settings: TableSettings) -> Iterator[list]:
    d = each.directions
    nominal = mean_nominal_phi_rad(each.solution.station, each.weights)
    sets = [_as_asked(f, settings, d.phi_rad, nominal) for f in (each.coupled, each.isolated)]
    theta, phi = np.degrees(d.theta_rad), np.degrees(d.phi_rad)
    frequency = f"{each.solution.frequency_hz:.12g}"
    for b, beam in enumerate(each.beams):
        table = np.column_stack([part for f in sets for c in (0, 1) for part in (f[b, :, c].real, f[b, :, c].imag)])
        for i, row in enumerate(table.tolist()):
            yield [
                frequency,
                beam.name,
                f"{theta[i]:.9g}",
                f"{phi[i]:.9g}",
                f"{(90.0 - phi[i]) % 360.0:.9g}",
                *(f"{value:.9g}" for value in row),
            ]
