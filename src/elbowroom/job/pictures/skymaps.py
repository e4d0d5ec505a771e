"""All-sky maps of a beam and of one of its element patterns: coupled, isolated and how they differ."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.errors import ModelRangeError
from elbowroom.geometry.directions import Directions, azimuth_deg, ludwig3
from elbowroom.job.beamfields import BeamFields, mean_nominal_phi_rad
from elbowroom.job.jobfile import Beam
from elbowroom.job.pictures.sheets import (
    HALO,
    decibels,
    frequency_text,
    ground_text,
    origin_text,
    printable,
    sheet,
    shortened,
    termination_text,
)
from elbowroom.radiation.solution import Solution
from elbowroom.system.terminations import Termination

if TYPE_CHECKING:
    from matplotlib.axes import Axes

COMPONENTS = {"total": "total power", "co": "co-polarisation", "cross": "cross-polarisation"}
"""What can be drawn of a field, and its name in titles; co and cross by Ludwig's third definition."""

PROJECTIONS = {"zenith-angle": "radius linear in zenith angle", "sine": "radius linear in the sine of the zenith angle"}
"""How directions become places on a map, and how that is said."""

_RINGS_DEG = (30, 60, 90)
_RATIO_DEPTH_DB = 30.0
_NO_VALUE = "0.78"


def component_size(field: ComplexArray, phi_rad: ArrayLike, nominal_phi_rad: float, component: str = "total") -> FloatArray:
    """Return the magnitude of a field or of one of its components.

    Parameters
    ----------
    field : complex128 (..., D, 2)
        Components along theta_hat and phi_hat, any unit.
    phi_rad : array_like (D,)
        Angle of the directions from east towards north [rad].
    nominal_phi_rad : float
        Direction of co-polarisation at the zenith, from east towards north [rad].
    component : str, optional
        ``"total"``, ``"co"`` or ``"cross"``.

    Returns
    -------
    float64 (..., D)
        Magnitudes in the unit of the field.

    Raises
    ------
    ModelRangeError
        If the component is not known.
    """
    if component not in COMPONENTS:
        msg = f"component {component!r}: expected one of {', '.join(COMPONENTS)}"
        raise ModelRangeError(msg)
    if component == "total":
        return np.asarray(np.hypot(np.abs(field[..., 0]), np.abs(field[..., 1])))
    co, cross = ludwig3(field[..., 0], field[..., 1], phi_rad, nominal_phi_rad)
    return np.asarray(np.abs(co if component == "co" else cross))


def map_places(theta_rad: ArrayLike, phi_rad: ArrayLike, projection: str = "zenith-angle") -> tuple[FloatArray, FloatArray]:
    """Return where directions lie on a map seen from above: zenith in the middle, east on the right, north up, horizon at 1.

    Parameters
    ----------
    theta_rad, phi_rad : array_like (...)
        Zenith angle, and angle from east towards north [rad].
    projection : str, optional
        A key of `PROJECTIONS`.

    Returns
    -------
    right, up : float64 (...)
        Places [-].

    Raises
    ------
    ModelRangeError
        If the projection is not known.
    """
    if projection not in PROJECTIONS:
        msg = f"projection {projection!r}: expected one of {', '.join(PROJECTIONS)}"
        raise ModelRangeError(msg)
    theta, phi = np.asarray(theta_rad, float), np.asarray(phi_rad, float)
    radius = theta / (0.5 * np.pi) if projection == "zenith-angle" else np.sin(theta)
    return radius * np.cos(phi), radius * np.sin(phi)


def closed_grid(values: ArrayLike, directions: Directions) -> np.ndarray:
    """Return values on a grid of directions as (rows, columns + 1): the first column again behind the last.

    Parameters
    ----------
    values : array_like (D,)
        One for each direction.
    directions : Directions
        Grid whose rows are zenith angles and whose columns go once round in equal steps of phi.

    Raises
    ------
    ModelRangeError
        If the directions are no such grid, or the length is another.
    """
    array = np.asarray(values)
    if directions.shape is None or array.shape != (len(directions),):
        msg = f"map: expected values on a grid of directions, got shape {array.shape} and grid {directions.shape}"
        raise ModelRangeError(msg)
    phi = directions.phi_rad.reshape(directions.shape)
    steps = np.diff(np.concatenate([phi[0], phi[0, :1] + 2.0 * np.pi]))
    if not np.allclose(steps, 2.0 * np.pi / directions.shape[1], atol=1e-9) or not np.allclose(phi, phi[0], atol=1e-12):
        msg = "map: expected a grid whose columns go once round the horizon in equal steps"
        raise ModelRangeError(msg)
    grid = array.reshape(directions.shape)
    return np.concatenate([grid, grid[:, :1]], axis=1)


def response_words(termination: Termination, rows: Sequence[int] | np.ndarray) -> tuple[str, str]:
    """Return name and unit of what some ports answer with: effective length, or current per field where they are shorted."""
    one = isinstance(termination, str) or np.ndim(termination) == 0
    seen = [termination if one else termination[int(row)] for row in rows]  # type: ignore[index]
    shorted = [isinstance(value, str) and value == "short" for value in seen]
    if shorted and all(shorted):
        return "short-circuit current per field", "m/ohm"
    if any(shorted):
        return "voltages and short-circuit currents per field, added", "in mixed units"
    return "effective length", "m"


def pointing_text(beam: Beam) -> str:
    """Return where a beam points, in words."""
    if beam.zenith_angle_deg == 0.0:
        return "to the zenith"
    return f"to zenith angle {beam.zenith_angle_deg:.5g}\u00b0, azimuth {beam.azimuth_deg % 360.0:.5g}\u00b0"


def beam_text(beam: Beam, weights: ComplexArray) -> str:
    """Return name, port, number of antennas and pointing of a beam in words."""
    taking_part = int(np.count_nonzero(weights))
    number = f"{taking_part} antenna{'' if taking_part == 1 else 's'}"
    return f"beam {shortened(beam.name, 32)}: port {shortened(beam.port, 16)} of {number}, {pointing_text(beam)}"


def solution_texts(solution: Solution) -> tuple[str, str, str]:
    """Return frequency, ground and, where it was not solved, origin of a solution in words."""
    ground = ground_text(solution.station.ground)
    return frequency_text(solution.frequency_hz), ground, origin_text(solution.statistics.origin)


def isolated_peak(fields: BeamFields, index: int) -> float:
    """Return the largest magnitude of an isolated beam over the directions of its fields: 0 dB of its pictures [m]."""
    return float(component_size(fields.isolated[index], fields.directions.phi_rad, 0.0).max())


def central_port(fields: BeamFields, index: int) -> int:
    """Return the port of a beam whose antenna is nearest to the middle of the antennas that take part."""
    rows = np.flatnonzero(fields.weights[index])
    if not rows.size:
        msg = f"beam {fields.beams[index].name!r}: no port takes part in it"
        raise ModelRangeError(msg)
    places = fields.solution.station.port_positions[rows]
    return int(rows[np.argmin(np.linalg.norm(places - places.mean(axis=0), axis=1))])


@dataclass(frozen=True)
class _Map:
    values: FloatArray
    title: str
    pointing: bool


def draw_sky_maps(
    fields: BeamFields,
    index: int,
    path: str | Path,
    *,
    title: str = "",
    component: str = "total",
    port: int | None = None,
    projection: str = "zenith-angle",
    floor_db: float = -60.0,
    element_floor_db: float = -30.0,
) -> Path:
    """Draw maps of a beam, coupled and isolated, their difference, and the same of one element pattern.

    Parameters
    ----------
    fields : BeamFields
        Beams over the directions of `elbowroom.geometry.directions.hemisphere_grid`.
    index : int
        Which of the beams.
    path : str or Path
        The PNG file.
    title : str, optional
        Title of the job.
    component : str, optional
        A key of `COMPONENTS`.
    port : int, optional
        Port whose patterns are drawn; by default that of the beam's most central antenna.
    projection : str, optional
        A key of `PROJECTIONS`.
    floor_db, element_floor_db : float, optional
        Lower end of the colour scales [dB].

    Returns
    -------
    Path
        The file.

    Raises
    ------
    ModelRangeError
        If component or projection are not known, the directions are no grid, or no port takes part in the beam.
    ExportError
        If the file cannot be written.
    """
    solution, sky, beam, weights = fields.solution, fields.directions, fields.beams[index], fields.weights[index]
    row = central_port(fields, index) if port is None else port
    theta, phi = sky.theta_rad, sky.phi_rad
    station = solution.station
    nominal = float(mean_nominal_phi_rad(station, weights)[0])
    own_nominal = float(station.port_nominal_phi_rad[row])
    embedded = solution.embedded_patterns(theta, phi, termination=fields.termination, ports=[row])[0]
    alone = solution.isolated_patterns(theta, phi, termination=fields.termination, ports=[row])[0]
    coupled, isolated = fields.coupled[index], fields.isolated[index]
    peak = isolated_peak(fields, index)
    own_peak = float(component_size(alone, phi, own_nominal).max())

    def beam_db(field: ComplexArray) -> FloatArray:
        return decibels(component_size(field, phi, nominal, component), peak, floor_db)

    def element_size(field: ComplexArray) -> FloatArray:
        return component_size(field, phi, own_nominal, component)

    beams = [
        _Map(beam_db(isolated), "isolated beam", True),
        _Map(beam_db(coupled), "coupled beam", True),
        _Map(beam_db(coupled - isolated), "coupled minus isolated beam", True),
    ]
    name = printable(shortened(str(solution.port_names[row]), 24))
    elements = [
        _Map(decibels(element_size(alone), own_peak, element_floor_db), f"isolated pattern of {name}", False),
        _Map(decibels(element_size(embedded), own_peak, element_floor_db), f"embedded pattern of {name}", False),
    ]
    ratio = _ratio_db(element_size(embedded), element_size(alone), own_peak)
    words, unit = response_words(fields.termination, np.flatnonzero(weights))
    own_words, own_unit = response_words(fields.termination, [row])
    caption = [
        termination_text(fields.termination),
        "zenith in the middle, seen from above: north up, east on the right; rings: zenith angle",
        PROJECTIONS[projection] if projection in PROJECTIONS else "",
        "cross: where the beam points",
        "patterns and beams share the station's origin as phase reference",
    ]
    if port is None:
        caption.append(f"{solution.port_names[row]}: of the most central antenna of the beam")
    if component != "total":
        caption.append(f"Ludwig's third definition, co-polar azimuth {float(azimuth_deg(nominal)):.5g}\u00b0")
    details = [title, beam_text(beam, weights), *solution_texts(solution)]
    places = map_places(closed_grid(theta, sky), closed_grid(phi, sky), projection)
    with sheet(path, f"All-sky maps, {COMPONENTS[component]}", details, caption, size=(12.0, 10.2)) as figure:
        panels = figure.subplots(2, 3)
        top = max(0.0, float(np.ceil(max(m.values.max() for m in beams))))
        for axes, each in zip(panels[0], beams, strict=True):
            mesh = _draw_map(axes, places, closed_grid(each.values, sky), "viridis", (floor_db, top), projection)
            axes.set_title(each.title)
            _mark_pointing(axes, beam, projection)
        label = f"dB relative to the peak of the isolated beam; 0 dB = {peak:.4g} {unit} ({words}); scale from {floor_db:g} dB"
        bar: dict[str, Any] = {"location": "bottom", "aspect": 50, "pad": 0.02, "extend": "min"}
        figure.colorbar(mesh, ax=list(panels[0]), label=label, shrink=0.72, **bar)
        top = max(0.0, float(np.ceil(max(m.values.max() for m in elements))))
        for axes, each in zip(panels[1], elements, strict=False):
            mesh = _draw_map(axes, places, closed_grid(each.values, sky), "viridis", (element_floor_db, top), projection)
            axes.set_title(each.title)
        label = f"dB relative to the isolated peak; 0 dB = {own_peak:.4g} {own_unit} ({own_words})"
        figure.colorbar(mesh, ax=list(panels[1, :2]), label=label, shrink=0.9, **bar)
        limit = _ratio_limit(ratio)
        mesh = _draw_map(panels[1, 2], places, closed_grid(ratio, sky), "RdBu_r", (-limit, limit), projection)
        panels[1, 2].set_title("embedded over isolated pattern")
        label = f"dB; grey: isolated below -{_RATIO_DEPTH_DB:g} dB"
        figure.colorbar(mesh, ax=panels[1, 2], label=label, shrink=0.9, **(bar | {"aspect": 25, "extend": "both"}))
    return Path(path)


def _ratio_db(size: FloatArray, reference: FloatArray, peak: float) -> FloatArray:
    """Return the ratio of magnitudes [dB]; NaN where the reference is too far below the peak to divide by."""
    out = np.full(size.shape, np.nan)
    enough = (reference > peak * 10.0 ** (-_RATIO_DEPTH_DB / 20.0)) & (reference > 0.0)
    out[enough] = 20.0 * np.log10(np.maximum(size[enough] / reference[enough], 1e-10))
    return out


def _ratio_limit(ratio_db: FloatArray) -> float:
    """Return a round limit [dB] that nearly all of the ratios stay within, 0.1 to 10."""
    known = np.abs(ratio_db[np.isfinite(ratio_db)])
    largest = float(np.percentile(known, 99.5)) if known.size else 0.0
    return next((step for step in (0.1, 0.2, 0.5, 1.0, 2.0, 3.0, 5.0) if largest <= step), 10.0)


def _draw_map(
    axes: Axes,
    places: tuple[FloatArray, FloatArray],
    values: FloatArray,
    colours: str,
    limits: tuple[float, float],
    projection: str,
) -> Any:
    # Smooth shading leaves out the cells at a direction without value: what lies below shows there.
    round_about = np.linspace(0.0, 2.0 * np.pi, 181)
    axes.fill(*map_places(0.5 * np.pi, round_about, projection), color=_NO_VALUE, lw=0.0, zorder=0)
    mesh = axes.pcolormesh(*places, np.ma.masked_invalid(values), cmap=colours, vmin=limits[0], vmax=limits[1], shading="gouraud")
    for ring in _RINGS_DEG:
        edge = ring == _RINGS_DEG[-1]
        right, up = map_places(np.radians(ring), round_about, projection)
        axes.plot(right, up, color="0.15" if edge else "white", lw=1.0 if edge else 0.7, alpha=1.0 if edge else 0.8)
        right, up = map_places(np.radians(ring), np.radians(292.5), projection)
        axes.text(
            float(right), float(up), f"{ring}\u00b0", fontsize=7.5, ha="center", va="center", color="0.1", path_effects=HALO
        )
    for letter, angle in (("E", 0.0), ("N", 90.0), ("W", 180.0), ("S", 270.0)):
        turn = np.radians(angle)
        axes.text(1.075 * np.cos(turn), 1.075 * np.sin(turn), letter, ha="center", va="center", fontweight="bold", fontsize=9.5)
    axes.set_xlim(-1.14, 1.14)
    axes.set_ylim(-1.14, 1.14)
    axes.set_aspect("equal")
    axes.set_axis_off()
    return mesh


def _mark_pointing(axes: Axes, beam: Beam, projection: str) -> None:
    right, up = map_places(*beam.direction_rad, projection)
    axes.plot(right, up, "+", ms=11, mew=2.8, color="black", zorder=4)
    axes.plot(right, up, "+", ms=10, mew=1.2, color="white", zorder=5)
