"""One antenna by itself: impedance, gain, widths, cross-polarisation and efficiency over frequency, and how converged they are.

- `alone`: the station that has nothing but the antenna
- `solve_alone`, `is_stored`: one frequency, solved or fetched from a store
- `antenna_figures`: one frequency told in numbers; `MEANINGS` explains each
- `pattern_cuts`: what is drawn of its patterns
- `write_figures`: the table
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from math import nan
from pathlib import Path

import numpy as np
from numpy.typing import ArrayLike

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.constants import wavelength_of
from elbowroom.base.errors import GeometryError, ModelRangeError
from elbowroom.geometry.antennas import Antenna
from elbowroom.geometry.directions import Directions, azimuth_deg, hemisphere_grid, ludwig3
from elbowroom.geometry.grounds import FreeSpace, Ground
from elbowroom.geometry.mesh import MeshSettings, mesh_settings
from elbowroom.geometry.stations import Placed, Station
from elbowroom.job.checks import Problem, check_station
from elbowroom.job.compare import decibels, half_power_width_deg, refined_peak, total_power
from elbowroom.job.files import write_explained_csv
from elbowroom.job.solve import solution_key, solve, strategy_of
from elbowroom.radiation.power_quadrature import power_sphere
from elbowroom.radiation.solution import Solution, antenna_power_gain
from elbowroom.store.records import Store
from elbowroom.system.discretisation import FarSettings
from elbowroom.system.self_block import NearSettings

SKY_STEP_DEG, FINEST_SKY_STEP_DEG = 2.0, 0.25
"""Largest and smallest step of the directions among which the peak is looked for; its place is then interpolated."""

CUT_STEP_DEG = 0.25
"""Step of the planes on which half-power widths are read; the crossing itself is interpolated."""

SPHERE_DIGITS = 8.0
"""Digits of a field that the quadrature of its power is made for."""

LEAST_ACCEPTED = 1e-9
"""Part of the available power that a port must accept for an efficiency to be told."""

MEANINGS = {
    "frequency_hz": "frequency",
    "port": "port that is driven; all others are terminated like it",
    "resistance_ohm": "real part of the port's impedance",
    "reactance_ohm": "imaginary part of the port's impedance",
    "reflection": "magnitude of the power wave reflected at the termination, |(Z - conj(Z_T))/(Z + Z_T)|",
    "reflection_db": "the same in dB",
    "coupling_db": "largest power wave that leaves another port of the antenna, against the wave sent; nan with one port",
    "zenith_directivity_db": "directivity towards the zenith, both polarisations together, over isotropic",
    "zenith_realised_gain_db": "gain towards the zenith with the mismatch at the termination, over isotropic",
    "peak_directivity_db": "largest directivity in the sky above the horizon",
    "peak_realised_gain_db": "gain with mismatch in that direction",
    "peak_zenith_angle_deg": "where that is: zenith angle",
    "peak_azimuth_deg": "where that is: azimuth, north through east; of no meaning where the pattern is even round the zenith",
    "width_along_deg": "half-power width of the lobe with the largest value in the vertical plane along the co-polarisation",
    "width_across_deg": "the same in the vertical plane across it",
    "front_to_back_db": "power towards the peak over power in the opposite direction; nan over a ground",
    "cross_polar_db": "largest cross-polar level above the horizon where the total is within half power of its peak, below the "
    "largest co-polar level there (Ludwig's third definition); nan for a port of vertical polarisation",
    "nominal_phi_deg": "direction of co-polarisation at zenith, east towards north",
    "radiation_efficiency": "radiated over accepted power, by quadrature over the sphere; loss of wires, loads and networks and "
    "what other ports take is not radiated, nor what goes into soil; 1 without them, but for the error of the model's power "
    "balance",
    "wire_loss": "power lost in the metal of wires over accepted power",
    "ground_loss": "power lost in the ground over accepted power; 0 over free space or a perfect plane",
    "impedance_change": "|Z on the finer mesh / Z - 1|",
    "reflection_change": "magnitude of the change of the complex reflection on the finer mesh",
    "directivity_change_db": "change of the directivity, at the same peak direction, on the finer mesh",
    "pattern_change_db": "largest change of the terminated effective length over the sky on the finer mesh, below its peak",
    "unknowns": "unknowns of the mesh; 0 for finer_unknowns where no finer mesh was solved",
    "finer_unknowns": "unknowns of the finer mesh",
}


@dataclass(frozen=True)
class AntennaFigures:
    """One port of an antenna at one frequency; `MEANINGS` explains each number."""

    frequency_hz: float
    port: str
    resistance_ohm: float
    reactance_ohm: float
    reflection: float
    reflection_db: float
    coupling_db: float
    zenith_directivity_db: float
    zenith_realised_gain_db: float
    peak_directivity_db: float
    peak_realised_gain_db: float
    peak_zenith_angle_deg: float
    peak_azimuth_deg: float
    width_along_deg: float
    width_across_deg: float
    front_to_back_db: float
    cross_polar_db: float
    nominal_phi_deg: float
    radiation_efficiency: float
    wire_loss: float
    ground_loss: float
    impedance_change: float
    reflection_change: float
    directivity_change_db: float
    pattern_change_db: float
    unknowns: int
    finer_unknowns: int


@dataclass(frozen=True, eq=False)
class PatternCut:
    """A pattern along a vertical plane through the zenith.

    Attributes
    ----------
    frequency_hz : float
        [Hz]
    port : str
        Port that is driven.
    plane : str
        ``"along"`` the port's co-polarisation at the zenith, ``"across"``, or ``"diagonal"``, half-way between.
    azimuth_phi_deg : float
        Where positive angles lie, from east towards north [deg].
    angle_deg : float64 (D,)
        Signed zenith angle: to 90 above a ground, to 180 in free space [deg].
    co_gain, cross_gain : float64 (D,)
        Realised gain of both components, Ludwig's third definition [-].
    """

    frequency_hz: float
    port: str
    plane: str
    azimuth_phi_deg: float
    angle_deg: FloatArray
    co_gain: FloatArray
    cross_gain: FloatArray


def checked_termination(termination: complex) -> complex:
    """Return a termination that reflections and gains can refer to.

    Raises
    ------
    ModelRangeError
        If it is not finite or has no positive resistance.
    """
    value = complex(termination)
    if not np.isfinite(value) or value.real <= 0.0:
        msg = f"termination {termination!r}: expected ohms with a positive resistance, for gains and reflections to refer to"
        raise ModelRangeError(msg)
    return value


def alone(antenna: Antenna, ground: Ground | None = None, *, height_m: float = 0.0) -> Station:
    """Return a station of one antenna.

    Parameters
    ----------
    antenna : Antenna
        The design.
    ground : Ground, optional
        Free space by default.
    height_m : float, optional
        Height of the antenna's own origin above the ground [m].

    Raises
    ------
    GeometryError
        If the height is not finite.
    """
    if not np.isfinite(height_m):
        msg = f"height_m {height_m!r}: expected a number of metres"
        raise GeometryError(msg)
    return Station([Placed(antenna, (0.0, 0.0, float(height_m)), name="antenna")], ground or FreeSpace())


def problems_of(station: Station, frequencies_hz: Sequence[float], mesh: str | MeshSettings = "default") -> list[Problem]:
    """Return doubts about the model of an antenna.

    Raises
    ------
    GeometryError
        If it has errors; all are listed.
    """
    found = check_station(station, frequencies_hz, mesh)
    errors = tuple(p.text for p in found if p.severity == "error")
    if errors:
        msg = "the antenna cannot be modelled"
        raise GeometryError(msg, problems=errors)
    return found


def solve_alone(
    station: Station, frequency_hz: float, mesh: str | MeshSettings = "default", *, store: Store | None = None
) -> Solution:
    """Return the solution of a single antenna, in double precision; its error is left to a comparison with a finer mesh.

    Parameters
    ----------
    station : Station
        With one antenna, see :func:`alone`.
    frequency_hz : float
        [Hz].
    mesh : str or MeshSettings, optional
        ``"default"``, ``"refined"`` or settings.
    store : Store, optional
        Where to look first and to keep the result.

    Raises
    ------
    GeometryError, ModelRangeError, SolveError, StoreError
        See the stages.
    """
    if len(station) != 1:
        msg = f"expected one antenna alone, got a station of {len(station)}"
        raise ModelRangeError(msg)
    return solve(station, frequency_hz, solver="direct", precision="double", mesh=mesh, store=store, with_mesh_error=False)


def is_stored(station: Station, frequency_hz: float, mesh: str | MeshSettings, store: Store) -> bool:
    """Return whether a store has what :func:`solve_alone` would return."""
    strategy = strategy_of("direct", "double", nan, with_mesh_error=False)
    return solution_key(station, frequency_hz, mesh_settings(mesh), NearSettings(), FarSettings(), strategy) in store


def _electrical_radius(solution: Solution) -> float:
    """Return k times the radius of the smallest sphere about the antenna and its image in a ground."""
    placed = solution.station.placed[0]
    points = placed.to_station(np.array([(w.start, w.end) for w in placed.antenna.wires])).reshape(-1, 3)
    middle = 0.5 * (points.min(axis=0) + points.max(axis=0))
    if not solution.station.ground.open_below:
        middle[2] = 0.0
    return solution.discretisation.wavenumber * float(np.max(np.linalg.norm(points - middle, axis=1)))


def sky_for(solution: Solution) -> Directions:
    """Return a grid of the sky on which no lobe is missed.

    Lobes of a source within a radius a are no narrower than about 180 deg / (ka); an eighth of that is the step, if it is less
    than `SKY_STEP_DEG`.
    """
    step = max(min(SKY_STEP_DEG, 22.5 / _electrical_radius(solution)), FINEST_SKY_STEP_DEG)
    return hemisphere_grid(90.0 / np.ceil(90.0 / step - 1e-9))


def sphere_for(solution: Solution) -> Directions:
    """Return directions and weights that integrate the power of an antenna's patterns; see :func:`power_sphere`."""
    return power_sphere(solution.discretisation, _electrical_radius(solution), SPHERE_DIGITS)


@dataclass(frozen=True, eq=False)
class _Response:
    """What the ports of an antenna answer with: scattering (P, P), peak-search patterns (P, D, 2), mean realised gain (P,).

    And the power lost in wires and ground (P,) for unit power sent.
    """

    scattering: ComplexArray
    impedance: ComplexArray
    sky: ComplexArray
    mean_gain: FloatArray
    wires: FloatArray
    ground: FloatArray


def _gain(solution: Solution, field: ComplexArray, termination: complex) -> FloatArray:
    """Return the realised gain of each component of effective lengths [m]."""
    return antenna_power_gain(field, 1.0 / termination, wavelength_of(solution.frequency_hz))


def _response(solution: Solution, sky: Directions, termination: complex) -> _Response:
    ports = range(solution.discretisation.n_ports)
    sphere = sphere_for(solution)
    whole = solution.embedded_patterns(sphere.theta_rad, sphere.phi_rad, termination=termination)
    power = _gain(solution, whole, termination).sum(axis=-1)
    parts = solution.power_parts(np.eye(len(ports)), termination=termination, integrate_sky=False)
    return _Response(
        solution.scattering_matrix(termination),
        np.array([solution.port_matrix("Z", [p], termination=termination)[0, 0] for p in ports]),
        solution.embedded_patterns(sky.theta_rad, sky.phi_rad, termination=termination),
        np.asarray(sphere.integrate(power)) / (4.0 * np.pi),
        parts.wires,
        parts.ground,
    )


def _plane(solution: Solution, phi_rad: float, step_deg: float) -> tuple[Directions, FloatArray]:
    """Return directions and signed zenith angles of a vertical plane, all the way round in free space."""
    reach = 180.0 if solution.station.ground.open_below else 90.0
    half = round(reach / step_deg)
    angle = np.arange(-half, half + 1) * (reach / half)
    return Directions(np.radians(np.abs(angle)), np.where(angle < 0.0, phi_rad + np.pi, phi_rad)), angle


def largest_lobe_width_deg(angle_deg: ArrayLike, power: ArrayLike) -> float:
    """Return the half-power width of the lobe that has the largest value of a cut [deg].

    Parameters
    ----------
    angle_deg, power : float64 (D,)
        Equal steps of the angle; if they span 360 degrees, ends included, the cut is closed and lobes may lie across its ends.

    Returns
    -------
    float
        NaN if the power does not fall to half on both sides.
    """
    angle, level = np.asarray(angle_deg, dtype=float), np.asarray(power, dtype=float)
    best = int(np.argmax(level))
    if abs(float(angle[-1] - angle[0]) - 360.0) > 1e-6:
        return half_power_width_deg(angle - angle[best], level)
    level = np.roll(level[:-1], level.size // 2 - best)
    return half_power_width_deg((np.arange(level.size) - level.size // 2) * float(angle[1] - angle[0]), level)


def antenna_figures(solution: Solution, finer: Solution | None = None, *, termination: complex = 100.0) -> list[AntennaFigures]:
    """Return the figures of every port of an antenna alone.

    Parameters
    ----------
    solution : Solution
        From :func:`solve_alone`.
    finer : Solution, optional
        The same on a finer mesh, with which it is compared; without it the changes are NaN.
    termination : complex, optional
        What the ports see [ohm].

    Raises
    ------
    ModelRangeError
        If the termination has no positive resistance, or a port answers to no direction at all.
    """
    seen = checked_termination(termination)
    sky = sky_for(solution)
    here = _response(solution, sky, seen)
    there = None if finer is None else _response(finer, sky, seen)
    return [_figures(solution, finer, sky, here, there, port, seen) for port in range(solution.discretisation.n_ports)]


def _figures(
    solution: Solution,
    finer: Solution | None,
    sky: Directions,
    here: _Response,
    there: _Response | None,
    port: int,
    seen: complex,
) -> AntennaFigures:
    name = solution.port_names[port].port
    nominal = float(solution.station.port_nominal_phi_rad[port])
    power = total_power(here.sky[port])
    if not power.max() > 0.0:
        msg = f"port {name!r} answers to no direction of the sky; is it connected to anything?"
        raise ModelRangeError(msg)
    # Of directions that are equally good but for rounding, the one nearest to the zenith.
    _, unit = refined_peak(power, sky, int(np.argmax(power >= (1.0 - 1e-6) * power.max())))
    theta, phi = float(np.arctan2(np.hypot(unit[0], unit[1]), unit[2])), float(np.arctan2(unit[1], unit[0]))
    if theta < 1e-6:
        theta = phi = 0.0
    # the peak, what lies opposite, the zenith
    points = solution.embedded_patterns([theta, np.pi - theta, 0.0], [phi, phi + np.pi, 0.0], termination=seen, ports=[port])[0]
    gains = _gain(solution, points, seen).sum(axis=-1)
    widths = []
    for plane in (nominal, nominal + 0.5 * np.pi):
        directions, angle = _plane(solution, plane, CUT_STEP_DEG)
        cut = solution.embedded_patterns(directions.theta_rad, directions.phi_rad, termination=seen, ports=[port])[0]
        widths.append(largest_lobe_width_deg(angle, total_power(cut)))
    co, cross = ludwig3(here.sky[port][:, 0], here.sky[port][:, 1], sky.phi_rad, nominal)
    within = power >= 0.5 * power.max()
    reflection = here.scattering[port, port]
    others = np.delete(np.abs(here.scattering[:, port]), port)
    accepted = 1.0 - abs(reflection) ** 2
    level = solution.station.placed[0].antenna.has_level_polarisation(port)
    free = solution.station.ground.open_below
    mean = float(here.mean_gain[port])
    changes = (nan,) * 4
    if finer is not None and there is not None:
        again = _gain(finer, finer.embedded_patterns(theta, phi, termination=seen, ports=[port])[0], seen).sum()
        difference = total_power(there.sky[port] - here.sky[port]).max() / total_power(there.sky[port]).max()
        changes = (
            float(abs(there.impedance[port] / here.impedance[port] - 1.0)),
            float(abs(there.scattering[port, port] - reflection)),
            decibels(float(again) / float(there.mean_gain[port])) - decibels(float(gains[0]) / mean),
            decibels(float(difference)),
        )
    return AntennaFigures(
        frequency_hz=solution.frequency_hz,
        port=name,
        resistance_ohm=float(here.impedance[port].real),
        reactance_ohm=float(here.impedance[port].imag),
        reflection=float(abs(reflection)),
        reflection_db=decibels(float(abs(reflection) ** 2)),
        coupling_db=decibels(float(others.max() ** 2)) if others.size else nan,
        zenith_directivity_db=decibels(float(gains[2]) / mean),
        zenith_realised_gain_db=decibels(float(gains[2])),
        peak_directivity_db=decibels(float(gains[0]) / mean),
        peak_realised_gain_db=decibels(float(gains[0])),
        peak_zenith_angle_deg=float(np.degrees(theta)),
        peak_azimuth_deg=round(float(azimuth_deg(phi)), 6) % 360.0,
        width_along_deg=widths[0],
        width_across_deg=widths[1],
        front_to_back_db=decibels(float(gains[0] / gains[1])) if free and gains[1] > 0.0 else nan,
        cross_polar_db=decibels(float(np.max(np.abs(cross[within])) ** 2 / np.max(np.abs(co[within])) ** 2)) if level else nan,
        nominal_phi_deg=float(np.degrees(nominal)),
        radiation_efficiency=float(mean / accepted) if accepted > LEAST_ACCEPTED else nan,
        wire_loss=float(here.wires[port] / accepted) if accepted > LEAST_ACCEPTED else nan,
        ground_loss=float(here.ground[port] / accepted) if accepted > LEAST_ACCEPTED else nan,
        impedance_change=changes[0],
        reflection_change=changes[1],
        directivity_change_db=changes[2],
        pattern_change_db=changes[3],
        unknowns=solution.statistics.n_unknowns,
        finer_unknowns=0 if finer is None else finer.statistics.n_unknowns,
    )


def pattern_cuts(solution: Solution, *, termination: complex = 100.0, step_deg: float = 1.0) -> list[PatternCut]:
    """Return the patterns of every port along, across and diagonal to its co-polarisation.

    Parameters
    ----------
    solution : Solution
        From :func:`solve_alone`.
    termination : complex, optional
        What the ports see [ohm].
    step_deg : float, optional
        Step of the angle, which should divide 90 [deg].
    """
    seen = checked_termination(termination)
    cuts = []
    for port, owner in enumerate(solution.port_names):
        nominal = float(solution.station.port_nominal_phi_rad[port])
        for plane, turn in (("along", 0.0), ("across", 0.5 * np.pi), ("diagonal", 0.25 * np.pi)):
            phi = nominal + turn
            directions, angle = _plane(solution, phi, step_deg)
            field = solution.embedded_patterns(directions.theta_rad, directions.phi_rad, termination=seen, ports=[port])[0]
            co, cross = ludwig3(field[:, 0], field[:, 1], directions.phi_rad, nominal)
            cuts.append(
                PatternCut(
                    solution.frequency_hz, owner.port, plane, float(np.degrees(phi)), angle,
                    _gain(solution, co, seen), _gain(solution, cross, seen),
                )
            )  # fmt: skip
    return cuts


def write_figures(rows: Sequence[AntennaFigures], path: str | Path, head: Iterable[str] = ()) -> None:
    """Write figures as CSV, under ``#`` lines that say what each column means.

    Parameters
    ----------
    rows : sequence of AntennaFigures
        What to write.
    path : str or Path
        The file.
    head : iterable of str, optional
        Further lines about the antenna.

    Raises
    ------
    ExportError
        If the file cannot be written.
    """
    about = (
        "One antenna alone.  Results of a model, not a measurement.",
        "Levels in dB of power; nan where a number does not exist, as the width of a lobe that the horizon cuts.",
    )
    write_explained_csv(path, rows, MEANINGS, (*head, *about))
