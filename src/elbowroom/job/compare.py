"""Where coupled and isolated beams differ, in numbers.

All levels are of the field's total power |B_theta|^2 + |B_phi|^2 unless a polarisation is named, in decibels.  What each
number means is in `MEANINGS`, which is also the head of the table that is written.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.errors import JobFileError
from elbowroom.geometry.directions import Directions, hemisphere_grid, ludwig3, unit_vectors
from elbowroom.job.beamfields import BeamFields, beam_fields, mean_nominal_phi_rad, power_shares
from elbowroom.job.files import write_explained_csv
from elbowroom.system.solving import ORIGIN_MEANING

CUT_STEP_DEG = 0.05
"""Step of the great circles on which half-power widths are read; the crossing itself is interpolated."""

LOBE_PART, FINEST_STEP_DEG = 0.3, 0.1
"""Step of the sky as a part of wavelength over extent of a beam's antennas, and the finest that is taken [deg]."""

FLOOR_DB = -300.0
"""Level that stands for a field of exactly nothing."""

MEANINGS = {
    "frequency_hz": "frequency",
    "beam": "name of the beam in the job",
    "zenith_angle_deg": "where the beam points: zenith angle",
    "azimuth_deg": "where the beam points: azimuth, north through east",
    "coupled_peak_m": "largest effective length of the coupled beam over the sky",
    "peak_change_db": "peak of the coupled beam over the peak of the isolated beam",
    "pointing_change_db": "coupled over isolated level in the direction pointed at",
    "coupled_peak_offset_deg": "angle between the direction pointed at and the peak of the coupled beam",
    "isolated_peak_offset_deg": "the same for the isolated beam",
    "peak_shift_deg": "angle between the two peaks",
    "coupled_width_up_deg": "half-power width of the coupled beam along the great circle through its peak and the zenith",
    "isolated_width_up_deg": "the same for the isolated beam",
    "coupled_width_across_deg": "half-power width of the coupled beam along the great circle through its peak across the first",
    "isolated_width_across_deg": "the same for the isolated beam",
    "coupled_sidelobe_db": "highest level outside the main lobe, below the beam's own peak",
    "isolated_sidelobe_db": "the same for the isolated beam",
    "coupled_mean_far_level_db": "mean power outside the main lobe, below the beam's own peak",
    "isolated_mean_far_level_db": "the same for the isolated beam",
    "coupled_directivity_db": "directivity of the coupled beam at its peak",
    "isolated_directivity_db": "the same for the isolated beam",
    "coupled_cross_polar_db": "largest cross-polar level within half power of the peak, below the co-polar peak (Ludwig's third "
    "definition at nominal_phi_deg)",
    "isolated_cross_polar_db": "the same for the isolated beam",
    "nominal_phi_deg": "direction of co-polarisation at zenith, east towards north",
    "largest_difference_db": "largest |coupled - isolated| over the sky, below the isolated peak",
    "largest_difference_zenith_angle_deg": "where that is: zenith angle",
    "largest_difference_azimuth_deg": "where that is: azimuth, north through east",
    "rms_difference_db": "root mean square of |coupled - isolated| over the sky, below that of the isolated beam",
    "main_lobe_difference_db": "largest |coupled - isolated| within half power of the isolated peak, below that peak",
    "main_lobe_shape_difference_db": "the same after the best complex factor on the isolated beam, as gain calibration finds",
    "antenna_spread_db": "rms of the antennas' embedded patterns about their mean, in the direction pointed at, below that mean",
    "radiation_efficiency": "radiated over accepted power while the ports are driven through their terminations by the beam's "
    "weights; not part of directivity; nan where the ports cannot be driven so",
    "wire_loss": "power lost in the metal of wires over accepted power",
    "ground_loss": "power lost in the ground over accepted power; 0 over free space or a perfect plane",
    "sky_step_deg": "step of the sky on which lobes were looked for and means were taken; peaks are searched between its points",
    "relative_residual": "of the linear system that was solved; nan where fewer functions than unknowns were solved for",
    "mesh_error": "relative change of an isolated antenna's port admittance on a finer mesh",
    "pattern_error": "of embedded patterns with 100-ohm terminations relative to their peaks, against solving for all unknowns "
    "of the mesh",
    "origin": ORIGIN_MEANING,
}


@dataclass(frozen=True)
class BeamComparison:
    """One beam at one frequency, coupled against isolated; `MEANINGS` explains each number."""

    frequency_hz: float
    beam: str
    zenith_angle_deg: float
    azimuth_deg: float
    coupled_peak_m: float
    peak_change_db: float
    pointing_change_db: float
    coupled_peak_offset_deg: float
    isolated_peak_offset_deg: float
    peak_shift_deg: float
    coupled_width_up_deg: float
    isolated_width_up_deg: float
    coupled_width_across_deg: float
    isolated_width_across_deg: float
    coupled_sidelobe_db: float
    isolated_sidelobe_db: float
    coupled_mean_far_level_db: float
    isolated_mean_far_level_db: float
    coupled_directivity_db: float
    isolated_directivity_db: float
    coupled_cross_polar_db: float
    isolated_cross_polar_db: float
    nominal_phi_deg: float
    largest_difference_db: float
    largest_difference_zenith_angle_deg: float
    largest_difference_azimuth_deg: float
    rms_difference_db: float
    main_lobe_difference_db: float
    main_lobe_shape_difference_db: float
    antenna_spread_db: float
    radiation_efficiency: float
    wire_loss: float
    ground_loss: float
    sky_step_deg: float
    relative_residual: float
    mesh_error: float
    pattern_error: float
    origin: str


def decibels(power_ratio: float) -> float:
    """Return 10 log10 of a power ratio, and `FLOOR_DB` for anything below it, zero included."""
    return max(float(10.0 * np.log10(power_ratio)), FLOOR_DB) if power_ratio > 0.0 else FLOOR_DB


def total_power(field: ComplexArray) -> FloatArray:
    """Return |E_theta|^2 + |E_phi|^2 of a field (..., 2)."""
    return np.asarray(np.sum(field.real**2 + field.imag**2, axis=-1))


def main_lobe(power: FloatArray, start: int) -> np.ndarray:
    """Return where on a grid one gets from a starting point without ever going up.

    Parameters
    ----------
    power : float64 (rows, columns)
        Power over zenith angle (first row: the zenith, one point many times) and phi (all the way round).
    start : int
        Index of the starting point in the flattened grid.

    Returns
    -------
    bool (rows, columns)
        The main lobe down to its surrounding nulls; every other local maximum stays outside.
    """
    rows, columns = power.shape
    inside = np.zeros((rows, columns), dtype=bool)
    edge = [divmod(start, columns)]
    inside[edge[0]] = True
    if edge[0][0] == 0:
        inside[0] = True
        edge = [(0, c) for c in range(columns)]
    while edge:
        r, c = edge.pop()
        for i, j in ((r - 1, c), (r + 1, c), (r, (c - 1) % columns), (r, (c + 1) % columns)):
            if not 0 <= i < rows or inside[i, j] or power[i, j] > power[r, c]:
                continue
            if i == 0:
                inside[0] = True
                edge.extend((0, k) for k in range(columns))
            else:
                inside[i, j] = True
                edge.append((i, j))
    return inside


def half_power_width_deg(angle_deg: FloatArray, power: FloatArray) -> float:
    """Return the width between the half-power points on either side of a cut's middle [deg].

    Parameters
    ----------
    angle_deg : float64 (M,)
        Angle along the cut, 0 at the peak [deg].
    power : float64 (M,)
        Power along the cut.

    Returns
    -------
    float
        NaN if the power does not fall to half on both sides.
    """
    middle = int(np.argmin(np.abs(angle_deg)))
    half = 0.5 * power[middle]
    sides = []
    for step in (-1, 1):
        part, angle = power[middle::step], angle_deg[middle::step]
        below = np.flatnonzero(part < half)
        if not below.size or below[0] == 0:
            return float("nan")
        k = int(below[0])
        fraction = (part[k - 1] - half) / (part[k - 1] - part[k])
        sides.append(abs(angle[k - 1] + fraction * (angle[k] - angle[k - 1])))
    return float(sum(sides))


def refined_peak(power: FloatArray, directions: Directions, best: int | None = None) -> tuple[int, np.ndarray]:
    """Return the index of the largest grid point, or the one given, and the unit vector of the peak between grid points.

    A paraboloid in the two direction cosines across the grid's peak is fitted to the points within three steps.
    """
    best = int(np.argmax(power)) if best is None else best
    unit = directions.unit_vectors()
    centre = unit[best]
    rows, _ = directions.shape or (1, len(directions))
    step = np.pi / 2.0 / max(rows - 1, 1)
    near = np.flatnonzero((unit @ centre > np.cos(2.6 * step)) & (power > 0.25 * power[best]))
    across = np.cross(centre, [0.0, 0.0, 1.0])
    across = across / np.linalg.norm(across) if np.linalg.norm(across) > 1e-9 else np.array([1.0, 0.0, 0.0])
    up = np.cross(across, centre)
    u, v = unit[near] @ across, unit[near] @ up
    if near.size < 9:
        return best, centre
    design = np.stack([np.ones_like(u), u, v, u * u, u * v, v * v], axis=1)
    c, *_ = np.linalg.lstsq(design, power[near], rcond=None)
    hessian = np.array([[2 * c[3], c[4]], [c[4], 2 * c[5]]])
    if np.all(np.linalg.eigvalsh(hessian) < 0.0):
        shift = np.linalg.solve(hessian, -c[1:3])
        moved = centre + shift[0] * across + shift[1] * up
        # A peak farther than a step away is not the one that was fitted; nor is one below the horizon.
        if np.linalg.norm(shift) <= step and moved[2] >= -1e-12:
            return best, moved / np.linalg.norm(moved)
    return best, centre


def _angle_deg(first: np.ndarray, second: np.ndarray) -> float:
    return float(np.degrees(np.arctan2(np.linalg.norm(np.cross(first, second)), first @ second)))


def _great_circles(peak: np.ndarray, above_ground: bool) -> tuple[FloatArray, list[tuple[FloatArray, FloatArray]]]:
    """Return angles from the peak [deg] and the directions (theta, phi) of the two circles through it."""
    across = np.cross([0.0, 0.0, 1.0], peak)
    across = across / np.linalg.norm(across) if np.linalg.norm(across) > 1e-9 else np.array([0.0, 1.0, 0.0])
    up = np.cross(peak, across)
    angle = np.arange(-90.0, 90.0 + 0.5 * CUT_STEP_DEG, CUT_STEP_DEG)
    circles = []
    for along in (up, across):
        points = np.cos(np.radians(angle))[:, None] * peak + np.sin(np.radians(angle))[:, None] * along
        theta = np.arctan2(np.hypot(points[:, 0], points[:, 1]), points[:, 2])
        # Nothing arrives from below a ground: the horizon stands for it, and the width is then not a number.
        circles.append((np.minimum(theta, np.pi / 2) if above_ground else theta, np.arctan2(points[:, 1], points[:, 0])))
    return angle, circles


def _widths(fields_: BeamFields, index: int, peak: np.ndarray, which: str) -> tuple[float, float]:
    solution, weights = fields_.solution, fields_.weights[index]
    grounded = not solution.station.ground.open_below
    angle, circles = _great_circles(peak, grounded)
    evaluate = solution.beam if which == "coupled" else solution.isolated_beam
    theta = np.concatenate([c[0] for c in circles])
    phi = np.concatenate([c[1] for c in circles])
    power = total_power(evaluate(weights, theta, phi, termination=fields_.termination)).reshape(2, -1)
    out = []
    for k in range(2):
        usable = np.ones(angle.size, dtype=bool)
        if grounded:
            rise = np.hypot(peak[0], peak[1]) if k == 0 else 0.0
            usable = np.cos(np.radians(angle)) * peak[2] + np.sin(np.radians(angle)) * rise >= -1e-12
        out.append(half_power_width_deg(angle[usable], power[k][usable]))
    return out[0], out[1]


@dataclass(frozen=True)
class _Shape:
    """What one beam, coupled or isolated, looks like by itself."""

    peak_power: float
    peak: np.ndarray
    width_up_deg: float
    width_across_deg: float
    sidelobe_db: float
    mean_far_level_db: float
    directivity_db: float
    cross_polar_db: float


def resolving_step_deg(fields_: BeamFields) -> float:
    """Return a step [deg] of the sky on which lobes of the beams are not missed: that of the fields, or a finer one.

    A filled aperture of extent D has a half-power width of about lambda/D (any antenna handbook); a third of it is asked for.
    """
    rows, _ = fields_.directions.shape or (2, 1)
    given = 90.0 / max(rows - 1, 1)
    taking_part = np.any(fields_.weights != 0.0, axis=0)
    places = fields_.solution.station.port_positions[taking_part]
    extent = float(np.linalg.norm(np.ptp(places, axis=0))) if len(places) else 0.0
    wavelength = 2.0 * np.pi / fields_.solution.discretisation.wavenumber
    needed = max(float(np.degrees(LOBE_PART * wavelength / max(extent, 1e-3))), FINEST_STEP_DEG)
    return given if given <= needed else 90.0 / np.ceil(90.0 / needed)


def _searched_peak(fields_: BeamFields, index: int, which: str, start: np.ndarray) -> tuple[float, np.ndarray]:
    """Return the largest power near a direction and where it is, from the field itself on ever finer patches."""
    evaluate = fields_.solution.beam if which == "coupled" else fields_.solution.isolated_beam
    grounded = not fields_.solution.station.ground.open_below
    rows, _ = fields_.directions.shape or (2, 1)
    reach = np.pi / 2.0 / max(rows - 1, 1)
    offsets = np.linspace(-1.0, 1.0, 7)
    best, at = -1.0, start
    for _ in range(4):
        first = np.cross(at, np.eye(3)[int(np.argmin(np.abs(at)))])
        first /= np.linalg.norm(first)
        second = np.cross(at, first)
        patch = at + reach * (offsets[:, None, None] * first + offsets[None, :, None] * second)
        points = np.concatenate([at[None], patch.reshape(-1, 3)])
        points /= np.linalg.norm(points, axis=1)[:, None]
        if grounded:
            points = points[points[:, 2] >= -1e-12]
        theta = np.arctan2(np.hypot(points[:, 0], points[:, 1]), points[:, 2])
        phi = np.arctan2(points[:, 1], points[:, 0])
        found = total_power(evaluate(fields_.weights[index], theta, phi, termination=fields_.termination))
        top = int(np.argmax(found))
        # Rounding moves no peak.
        if found[top] > found[0] * (1.0 + 1e-9):
            at = points[top]
        best = float(found[top])
        reach *= 0.25
    return best, at


def _shape(fields_: BeamFields, index: int, which: str, nominal: float) -> _Shape:
    d = fields_.directions
    field = getattr(fields_, which)[index]
    power = total_power(field)
    best, rough = refined_peak(power, d)
    peak_power, peak = _searched_peak(fields_, index, which, rough)
    lobe = main_lobe(power.reshape(d.shape), best).ravel()
    outside = ~lobe
    weights = d.weights_sr
    assert weights is not None
    integral = float(power @ weights)
    if fields_.solution.station.ground.open_below:
        evaluate = fields_.solution.beam if which == "coupled" else fields_.solution.isolated_beam
        below = evaluate(fields_.weights[index], np.pi - d.theta_rad, d.phi_rad, termination=fields_.termination)
        integral += float(total_power(below) @ weights)
    co, cross = ludwig3(field[:, 0], field[:, 1], d.phi_rad, nominal)
    within = power >= 0.5 * peak_power
    within[best] = True
    up, across = _widths(fields_, index, peak, which)
    far = float(power[outside] @ weights[outside] / weights[outside].sum()) if outside.any() else 0.0
    return _Shape(
        peak_power,
        peak,
        up,
        across,
        decibels(float(power[outside].max() / peak_power)) if outside.any() else float("nan"),
        decibels(far / peak_power) if outside.any() else float("nan"),
        decibels(4.0 * np.pi * peak_power / integral),
        decibels(float(np.max(np.abs(cross[within]) ** 2) / np.max(np.abs(co[within]) ** 2))),
    )


def _antenna_spread_db(fields_: BeamFields, index: int) -> float:
    weights = fields_.weights[index]
    ports = np.flatnonzero(weights)
    if ports.size < 2:
        return float("nan")
    theta, phi = fields_.beams[index].direction_rad
    each = fields_.solution.embedded_patterns(theta, phi, termination=fields_.termination, ports=ports)[:, 0, :]
    path = fields_.solution.station.port_positions[ports] @ unit_vectors(theta, phi)
    each = each * np.exp(-1j * fields_.solution.discretisation.wavenumber * path)[:, None]
    mean = each.mean(axis=0)
    return decibels(float(np.mean(total_power(each - mean)) / total_power(mean))) if total_power(mean) > 0.0 else float("nan")


def compare_beams(fields_: BeamFields) -> list[BeamComparison]:
    """Compare coupled with isolated beams at one frequency.

    Parameters
    ----------
    fields_ : BeamFields
        Beams over a grid of the hemisphere with weights (:func:`elbowroom.geometry.directions.hemisphere_grid`).

    Returns
    -------
    list of BeamComparison
        One a beam.

    Raises
    ------
    JobFileError
        If there is no beam, a beam is nothing everywhere, or the directions are no grid.
    """
    d = fields_.directions
    if d.shape is None or d.weights_sr is None:
        msg = "comparing beams needs a grid of the hemisphere with weights"
        raise JobFileError(msg)
    if not fields_.beams:
        msg = "the job has no [[beam]] to compare; add one that names a port"
        raise JobFileError(msg)
    step_deg = resolving_step_deg(fields_)
    if step_deg < 0.999 * 90.0 / (d.shape[0] - 1):
        fields_ = beam_fields(fields_.solution, fields_.beams, hemisphere_grid(step_deg), fields_.termination)
        d = fields_.directions
    assert d.weights_sr is not None
    nominal_phi_rad = mean_nominal_phi_rad(fields_.solution.station, fields_.weights)
    power_share = power_shares(fields_)
    rows = []
    for index, beam in enumerate(fields_.beams):
        coupled, isolated = fields_.coupled[index], fields_.isolated[index]
        if not (np.any(coupled) and np.any(isolated)):
            msg = f"beam {beam.name!r} is zero in every direction; are all its ports open or without response?"
            raise JobFileError(msg)
        nominal = float(nominal_phi_rad[index])
        c, i = _shape(fields_, index, "coupled", nominal), _shape(fields_, index, "isolated", nominal)
        difference = total_power(coupled - isolated)
        worst = int(np.argmax(difference))
        power = total_power(isolated)
        lobe = power >= 0.5 * i.peak_power
        lobe[int(np.argmax(power))] = True
        inside = isolated[lobe].ravel()
        factor = np.vdot(inside, coupled[lobe].ravel()) / np.vdot(inside, inside)
        shape_difference = total_power(coupled[lobe] - factor * isolated[lobe]) / abs(factor) ** 2
        theta, phi = beam.direction_rad
        pointed = unit_vectors(theta, phi)
        at = [
            total_power(evaluate(fields_.weights[index], theta, phi, termination=fields_.termination)[0])
            for evaluate in (fields_.solution.beam, fields_.solution.isolated_beam)
        ]
        statistics = fields_.solution.statistics
        rows.append(
            BeamComparison(
                frequency_hz=fields_.solution.frequency_hz,
                beam=beam.name,
                zenith_angle_deg=beam.zenith_angle_deg,
                azimuth_deg=beam.azimuth_deg,
                coupled_peak_m=float(np.sqrt(c.peak_power)),
                peak_change_db=decibels(c.peak_power / i.peak_power),
                pointing_change_db=decibels(float(at[0] / at[1])) if at[1] > 0.0 else float("nan"),
                coupled_peak_offset_deg=_angle_deg(pointed, c.peak),
                isolated_peak_offset_deg=_angle_deg(pointed, i.peak),
                peak_shift_deg=_angle_deg(c.peak, i.peak),
                coupled_width_up_deg=c.width_up_deg,
                isolated_width_up_deg=i.width_up_deg,
                coupled_width_across_deg=c.width_across_deg,
                isolated_width_across_deg=i.width_across_deg,
                coupled_sidelobe_db=c.sidelobe_db,
                isolated_sidelobe_db=i.sidelobe_db,
                coupled_mean_far_level_db=c.mean_far_level_db,
                isolated_mean_far_level_db=i.mean_far_level_db,
                coupled_directivity_db=c.directivity_db,
                isolated_directivity_db=i.directivity_db,
                coupled_cross_polar_db=c.cross_polar_db,
                isolated_cross_polar_db=i.cross_polar_db,
                nominal_phi_deg=float(np.degrees(nominal)),
                largest_difference_db=decibels(float(difference[worst]) / i.peak_power),
                largest_difference_zenith_angle_deg=float(np.degrees(d.theta_rad[worst])),
                largest_difference_azimuth_deg=float((90.0 - np.degrees(d.phi_rad[worst])) % 360.0),
                rms_difference_db=decibels(float(difference @ d.weights_sr) / float(power @ d.weights_sr)),
                main_lobe_difference_db=decibels(float(difference[lobe].max()) / i.peak_power),
                main_lobe_shape_difference_db=decibels(float(shape_difference.max()) / i.peak_power),
                antenna_spread_db=_antenna_spread_db(fields_, index),
                radiation_efficiency=float(power_share["radiated"][index]),
                wire_loss=float(power_share["wires"][index]),
                ground_loss=float(power_share["ground"][index]),
                sky_step_deg=step_deg,
                relative_residual=statistics.relative_residual,
                mesh_error=statistics.mesh_error,
                pattern_error=statistics.pattern_error,
                origin=statistics.origin,
            )
        )
    return rows


def write_comparison(rows: Sequence[BeamComparison], path: str | Path, head: Iterable[str] = ()) -> None:
    """Write comparisons as CSV, under ``#`` lines that say what each column means.

    Parameters
    ----------
    rows : sequence of BeamComparison
        What to write.
    path : str or Path
        The file.
    head : iterable of str, optional
        Further lines about the job.

    Raises
    ------
    ExportError
        If the file cannot be written.
    """
    about = (
        "Coupled against isolated beams.  Results of a model, not a measurement.",
        "Levels are of total power in dB; nan where a number does not exist, as the width of a beam that the horizon cuts.",
    )
    write_explained_csv(path, rows, MEANINGS, (*head, *about))
