"""Cuts through beams and through the embedded element patterns of all antennas of a station."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.errors import ModelRangeError
from elbowroom.geometry.directions import Directions, azimuth_deg, cut, spherical_basis, unit_vectors
from elbowroom.job.beamfields import beam_fields, mean_nominal_phi_rad
from elbowroom.job.jobfile import Beam
from elbowroom.job.pictures.sheets import (
    COUPLED,
    DIFFERENCE,
    ISOLATED,
    decibels,
    legend_above,
    legend_of,
    printable,
    sheet,
    shortened,
    termination_text,
)
from elbowroom.job.pictures.skymaps import COMPONENTS, beam_text, component_size, response_words, solution_texts
from elbowroom.radiation.solution import Solution
from elbowroom.system.terminations import Termination

if TYPE_CHECKING:
    from matplotlib.axes import Axes

_COMPASS = {0.0: "north", 90.0: "east", 180.0: "south", 270.0: "west"}


@dataclass(frozen=True, eq=False)
class CutPlane:
    """Directions along a great circle above the horizon.

    Attributes
    ----------
    directions : Directions
        D directions.
    angle_deg : float64 (D,)
        Where they lie on the circle, rising [deg].
    pointing_deg : float
        Angle of the direction that a beam points at [deg].
    title, label : str
        What the circle is, and what its angle is.
    """

    directions: Directions
    angle_deg: FloatArray
    pointing_deg: float
    title: str
    label: str


def principal_planes(theta_rad: float, phi_rad: float, step_deg: float = 0.5) -> tuple[CutPlane, CutPlane]:
    """Return the two great circles through a pointing direction: one through the zenith, one square to it.

    A beam at the zenith is cut from west to east and from south to north.

    Parameters
    ----------
    theta_rad, phi_rad : float
        Pointing: zenith angle, and angle from east towards north [rad].
    step_deg : float, optional
        Step of the angle [deg]; must divide 90.

    Raises
    ------
    GeometryError
        If the step does not divide 90 degrees.
    """
    if theta_rad == 0.0:
        phi_rad = 0.0
    azimuth = float(azimuth_deg(phi_rad))
    directions, signed = cut(float(np.degrees(phi_rad)), step_deg)
    through_zenith = CutPlane(
        directions,
        signed,
        float(np.degrees(theta_rad)),
        f"vertical plane {_towards(azimuth + 180.0)} to {_towards(azimuth)}",
        f"zenith angle [deg], positive towards {_towards(azimuth)}",
    )
    if theta_rad == 0.0:
        directions, signed = cut(90.0, step_deg)
        return through_zenith, CutPlane(
            directions, signed, 0.0, "vertical plane south to north", "zenith angle [deg], positive towards north"
        )
    # The circle through the pointing along phi_hat reaches the horizon at both ends, a quarter turn away.
    angle = np.radians(signed)
    sideways = spherical_basis(theta_rad, phi_rad)[1]
    unit = np.cos(angle)[:, None] * unit_vectors(theta_rad, phi_rad) + np.sin(angle)[:, None] * sideways
    # Rounding must not put the ends below the horizon, where there is no field.
    theta = np.minimum(np.arctan2(np.hypot(unit[:, 0], unit[:, 1]), unit[:, 2]), 0.5 * np.pi)
    across = CutPlane(
        Directions(theta, np.arctan2(unit[:, 1], unit[:, 0])),
        signed,
        0.0,
        "great circle through the pointing, square to that plane",
        f"angle from the pointing [deg], positive towards {_towards(azimuth - 90.0)}",
    )
    return through_zenith, across


def _towards(azimuth: float) -> str:
    round_about = round(azimuth % 360.0, 6) % 360.0
    return _COMPASS.get(round_about, f"azimuth {round_about:.5g}\u00b0")


def draw_cuts(
    solution: Solution,
    beam: Beam,
    path: str | Path,
    *,
    termination: Termination = 100.0,
    title: str = "",
    component: str = "total",
    step_deg: float = 0.5,
    floor_db: float = -60.0,
    peak: float | None = None,
) -> Path:
    """Draw a beam along the two great circles through its pointing: coupled, isolated and their difference.

    Parameters
    ----------
    solution : Solution
        The solved station.
    beam : Beam
        The beam.
    path : str or Path
        The PNG file.
    termination : optional
        What the ports see [ohm].
    title : str, optional
        Title of the job.
    component : str, optional
        ``"total"``, ``"co"`` or ``"cross"``, the latter by Ludwig's third definition.
    step_deg : float, optional
        Step of the angle [deg]; must divide 90.
    floor_db : float, optional
        Lower end of the scale [dB].
    peak : float, optional
        Magnitude of 0 dB [m], such as `skymaps.isolated_peak` of the beam over the whole sky; by default the peak
        of the isolated beam on these cuts.

    Returns
    -------
    Path
        The file.

    Raises
    ------
    ModelRangeError
        If the component is not known or no port takes part in the beam.
    ExportError
        If the file cannot be written.
    """
    planes = principal_planes(*beam.direction_rad, step_deg)
    made = [beam_fields(solution, [beam], plane.directions, termination) for plane in planes]
    weights = made[0].weights[0]
    if not np.any(weights):
        msg = f"beam {beam.name!r}: no port takes part in it"
        raise ModelRangeError(msg)
    nominal = float(mean_nominal_phi_rad(solution.station, weights)[0])

    def size(field: ComplexArray, plane: CutPlane, what: str) -> FloatArray:
        return component_size(field, plane.directions.phi_rad, nominal, what)

    where = "over the sky"
    if peak is None:
        where = "on these cuts"
        peak = max(float(size(each.isolated[0], plane, "total").max()) for each, plane in zip(made, planes, strict=True))
    words, unit = response_words(termination, np.flatnonzero(weights))
    caption = [
        termination_text(termination),
        f"0 dB: peak of the isolated beam's total {where}, {peak:.4g} {unit} ({words})",
        f"lower values are drawn at {floor_db:g} dB",
    ]
    if component != "total":
        caption.append(f"Ludwig's third definition, co-polar azimuth {float(azimuth_deg(nominal)):.5g}\u00b0")
    details = [title, beam_text(beam, weights), *solution_texts(solution)]
    with sheet(path, f"Cuts, {COMPONENTS[component]}", details, caption, size=(12.0, 5.4)) as figure:
        panels = figure.subplots(1, 2, sharey=True)
        top = 0.0
        for axes, each, plane in zip(panels, made, planes, strict=True):
            coupled, isolated = each.coupled[0], each.isolated[0]
            for field, colour, style, width, name in (
                (coupled, COUPLED, "-", 1.8, "coupled"),
                (isolated, ISOLATED, (0, (4, 2)), 1.5, "isolated"),
                (coupled - isolated, DIFFERENCE, ":", 1.4, "coupled minus isolated"),
            ):
                level = decibels(size(field, plane, component), peak, floor_db)
                top = max(top, float(level.max()))
                axes.plot(plane.angle_deg, level, color=colour, ls=style, lw=width, label=name)
            axes.axvline(plane.pointing_deg, color="0.6", lw=0.9, ls="-.", zorder=0, label="pointing")
            _cut_axes(axes, plane)
        panels[0].set_ylim(floor_db, np.ceil(top + 1.5))
        panels[0].set_ylabel("power relative to the isolated peak [dB]")
        legend_above(figure, *legend_of(panels))
    return Path(path)


def draw_element_spread(
    solution: Solution,
    port: str,
    path: str | Path,
    *,
    termination: Termination = 100.0,
    title: str = "",
    step_deg: float = 1.0,
    floor_db: float = -40.0,
    taking_part: ArrayLike | None = None,
) -> Path:
    """Draw the embedded element patterns of one port of every antenna over two vertical planes.

    Thin lines are single antennas; with them their mean power, the range of 80 % of them, and the mean power of the isolated
    patterns.  Below, the same of the differences from each antenna's own isolated pattern.

    Parameters
    ----------
    solution : Solution
        The solved station.
    port : str
        Name of the port.
    path : str or Path
        The PNG file.
    termination : optional
        What the ports see [ohm].
    title : str, optional
        Title of the job.
    step_deg : float, optional
        Step of the zenith angle [deg]; must divide 90.
    floor_db : float, optional
        Lower end of the scale [dB].
    taking_part : bool (P,), optional
        Which ports of the station have weight in a beam; the others are left out, as dead ones should be.  All by default.

    Returns
    -------
    Path
        The file.

    Raises
    ------
    ModelRangeError
        If no antenna has a port of that name, or none of them takes part.
    ExportError
        If the file cannot be written.

    Notes
    -----
    Shorted ports answer with currents and others with voltages; where both take part, the commoner kind is drawn, and the
    caption says how many are left out.
    """
    names = solution.port_names
    every = [i for i, n in enumerate(names) if n.port == port]
    if not every:
        msg = f"no antenna has a port {port!r}; there are {', '.join(dict.fromkeys(n.port for n in names))}"
        raise ModelRangeError(msg)
    live = np.ones(len(names), dtype=bool) if taking_part is None else np.asarray(taking_part, dtype=bool)
    if live.shape != (len(names),):
        msg = f"taking_part: expected one for each of {len(names)} ports, got shape {live.shape}"
        raise ModelRangeError(msg)
    rows = [i for i in every if live[i]]
    if not rows:
        msg = f"no port {port!r} takes part in a beam; nothing to draw"
        raise ModelRangeError(msg)
    shorted = [i for i in rows if response_words(termination, [i])[1] != "m"]
    if 0 < len(shorted) < len(rows):
        rows = shorted if 2 * len(shorted) > len(rows) else [i for i in rows if i not in shorted]
    planes = principal_planes(0.0, 0.0, step_deg)
    angles = [(plane.directions.theta_rad, plane.directions.phi_rad) for plane in planes]
    embedded = [solution.embedded_patterns(*each, termination=termination, ports=rows) for each in angles]
    isolated = [solution.isolated_patterns(*each, termination=termination, ports=rows) for each in angles]
    peak = max(float(component_size(field, 0.0, 0.0).max()) for field in isolated)
    words, unit = response_words(termination, rows)
    caption = [
        termination_text(termination),
        f"0 dB and 100 %: peak of the isolated patterns on these cuts, {peak:.4g} {unit} ({words})",
        "total power; means over antennas are of power",
        "difference: of the complex patterns of each antenna",
        f"lower values are drawn at {floor_db:g} dB",
    ]
    left_out = len(every) - len(rows)
    if left_out:
        caption.append(f"left out: {left_out} without weight, or shorted while others are not")
    number = f"{len(rows)} antenna{'' if len(rows) == 1 else 's'}"
    details = [
        title,
        f"port {shortened(port, 24)} of {number}",
        *solution_texts(solution),
    ]
    with sheet(path, "How different are the antennas", details, caption, size=(12.0, 8.2)) as figure:
        panels = figure.subplots(2, 2, sharex=True, sharey="row", height_ratios=(1.25, 1.0))
        for (upper, lower), plane, own, alone in zip(panels.T, planes, embedded, isolated, strict=True):
            _draw_antennas(upper, plane, own, lambda size: decibels(size, peak, floor_db))
            mean = decibels(_mean_size(alone), peak, floor_db)
            upper.plot(plane.angle_deg, mean, color=ISOLATED, lw=1.6, ls=(0, (4, 2)), label="isolated")
            _draw_antennas(lower, plane, own - alone, lambda size: 100.0 * size / peak)
            _cut_axes(upper, plane)
            _cut_axes(lower, plane)
            upper.set_xlabel("")
            lower.set_title("embedded minus isolated", loc="left")
        panels[0, 0].set_ylim(bottom=floor_db)
        panels[0, 0].set_ylabel("power relative to the isolated peak [dB]")
        panels[1, 0].set_ylim(bottom=0.0)
        panels[1, 0].set_ylabel("difference, part of the isolated peak [%]")
        legend_above(figure, *legend_of(panels[0]))
    return Path(path)


def _mean_size(field: ComplexArray) -> FloatArray:
    """Return the root of the mean power of fields (P, D, 2) over the P ports, (D,)."""
    return np.asarray(np.sqrt(np.mean(component_size(field, 0.0, 0.0) ** 2, axis=0)))


def _draw_antennas(axes: Axes, plane: CutPlane, field: ComplexArray, scale: Callable[[FloatArray], FloatArray]) -> None:
    """Draw fields (P, D, 2) of the antennas as thin lines, with their mean power and the range of most of them."""
    levels = scale(component_size(field, 0.0, 0.0))
    faint = float(np.clip(12.0 / len(levels), 0.15, 0.6))
    for i, level in enumerate(levels):
        axes.plot(plane.angle_deg, level, color="0.35", lw=0.6, alpha=faint, label="_" if i else "each antenna, embedded")
    if len(levels) > 10:
        low, high = np.percentile(levels, (10.0, 90.0), axis=0)
        axes.fill_between(plane.angle_deg, low, high, color=COUPLED, alpha=0.25, lw=0, label="80 % of the antennas")
    axes.plot(plane.angle_deg, scale(_mean_size(field)), color=COUPLED, lw=2.0, label="mean power")


def _cut_axes(axes: Axes, plane: CutPlane) -> None:
    axes.set_xlim(-90.0, 90.0)
    axes.set_xticks(range(-90, 91, 30))
    axes.set_xlabel(plane.label)
    axes.set_title(printable(plane.title), loc="left")
    axes.grid(color="0.92", lw=0.6)
