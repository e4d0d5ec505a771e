"""How much the ground matters: one station on a perfect plane, on wire mesh over soil and on bare soil."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from math import nan
from pathlib import Path

import numpy as np

from elbowroom.base.arrays import ComplexArray
from elbowroom.base.errors import ModelRangeError
from elbowroom.geometry.directions import Directions, unit_vectors
from elbowroom.geometry.grounds import Ground, MeshOnSoil, PerfectGround
from elbowroom.geometry.soils import AnySoil
from elbowroom.job.beamfields import beam_weights
from elbowroom.job.compare import decibels, main_lobe, total_power
from elbowroom.job.files import write_explained_csv
from elbowroom.job.groundchecks import HORIZON_NOTE
from elbowroom.job.jobmodel import Beam, Job
from elbowroom.radiation.solution import Solution
from elbowroom.system.terminations import Termination

SAMPLED_PORTS = 8
"""Ports whose embedded patterns are compared, evenly taken from all."""

PERFECT, MESH, BARE = "perfect", "mesh on soil", "bare soil"
"""Names of the grounds that are compared."""

MEANINGS = {
    "frequency_hz": "frequency",
    "ground": "what the station stands on; all is compared with the perfect plane",
    "beam": "name of the beam in the job; empty if it has none",
    "coupling_difference": "root mean square of the change of the scattering between different antennas, over its own root mean "
    "square on the perfect plane (100 ohm); nan for one antenna",
    "reflection_difference": "largest change of the reflection at a port, all others on 100 ohm",
    "element_difference_db": "root mean square of the change of embedded patterns of some ports over the sky, below their own",
    "beam_peak_change_db": "peak of the beam over its peak on the perfect plane",
    "beam_difference_db": "root mean square of the change of the beam over the sky, below that of the beam on the perfect plane",
    "main_lobe_shape_difference_db": "largest change in the lobe where the beam points, to half power of what it is there on the "
    "perfect plane, below that, after the best complex factor, as gain calibration finds",
    "radiation_efficiency": "radiated over accepted power while the ports are driven through their terminations by the beam's "
    "weights, or port by port (mean) without beams; nan where they cannot be driven so",
    "ground_loss": "power lost in the ground over accepted power, likewise",
    "pattern_error": "stated error of embedded patterns, relative to their peaks, of solving in fewer functions than unknowns",
}


@dataclass(frozen=True)
class GroundFigures:
    """One beam on one ground at one frequency; `MEANINGS` explains each number."""

    frequency_hz: float
    ground: str
    beam: str
    coupling_difference: float
    reflection_difference: float
    element_difference_db: float
    beam_peak_change_db: float
    beam_difference_db: float
    main_lobe_shape_difference_db: float
    radiation_efficiency: float
    ground_loss: float
    pattern_error: float


def compared_grounds(ground: Ground, soil: AnySoil | None = None, mesh: tuple[float, float] | None = None) -> dict[str, Ground]:
    """Return the grounds to compare by name: a perfect plane, mesh on soil where a mesh is known, bare soil.

    Parameters
    ----------
    ground : Ground
        The job's own, from which soil and mesh are taken.
    soil : optional
        Soil instead of the job's.
    mesh : (float, float), optional
        Pitch and wire radius [m] of a mesh instead of the job's.

    Raises
    ------
    ModelRangeError
        If no soil is known.
    """
    own = ground.soil if isinstance(ground, MeshOnSoil) else ground
    if soil is None and isinstance(own, AnySoil):
        soil = own
    if soil is None:
        msg = (
            f"the job stands on {ground.describe()} ground, and no soil is known to compare it with; give one, or describe it in "
            "[station.ground]"
        )
        raise ModelRangeError(msg)
    found: dict[str, Ground] = {PERFECT: PerfectGround()}
    if mesh is not None:
        found[MESH] = MeshOnSoil(soil, *mesh)
    elif isinstance(ground, MeshOnSoil):
        found[MESH] = replace(ground, soil=soil)
    return found | {BARE: soil}


def on_ground(job: Job, ground: Ground) -> Job:
    """Return a job on another ground; what it stores says so."""
    return replace(job, ground=ground, text=f"# compared on another ground: {ground.describe()}\n{job.text}")


def compare_grounds(
    solutions: dict[str, Solution], beams: Sequence[Beam], directions: Directions, termination: Termination = 100.0
) -> list[GroundFigures]:
    """Return what differs between grounds at one frequency.

    Parameters
    ----------
    solutions : dict of str to Solution
        The same station at one frequency on each ground, the perfect plane first, under its name.
    beams : sequence of Beam
        Beams to compare.
    directions : Directions
        A grid of the hemisphere with weights (:func:`elbowroom.geometry.directions.hemisphere_grid`).
    termination : optional
        What the ports see [ohm].
    """
    first = next(iter(solutions.values()))
    reference = _Seen(first, beams, directions, termination)
    rows: list[GroundFigures] = []
    for name, solution in solutions.items():
        seen = reference if solution is first else _Seen(solution, beams, directions, termination)
        scattering = seen.scattering - reference.scattering
        apart = first.station.port_antennas[:, None] != first.station.port_antennas[None, :]
        elements = total_power(seen.elements - reference.elements) @ reference.sky
        common = {
            "frequency_hz": solution.frequency_hz,
            "ground": name,
            "coupling_difference": (
                float(np.linalg.norm(scattering[apart]) / np.linalg.norm(reference.scattering[apart])) if apart.any() else nan
            ),
            "reflection_difference": float(np.abs(np.diagonal(scattering)).max()),
            "element_difference_db": decibels(float(elements.sum() / (total_power(reference.elements) @ reference.sky).sum())),
            "pattern_error": solution.statistics.pattern_error,
        }
        if not beams:
            none = {"beam_peak_change_db": nan, "beam_difference_db": nan, "main_lobe_shape_difference_db": nan}
            mean = {key: float(np.mean(share)) for key, share in seen.shares.items()}
            rows.append(GroundFigures(beam="", **common, **none, **mean))  # type: ignore[arg-type]
        for index, beam in enumerate(beams):
            here, there = seen.beams[index], reference.beams[index]
            power = total_power(there)
            pointed = int(np.argmax(directions.unit_vectors() @ unit_vectors(*beam.direction_rad)))
            assert directions.shape is not None
            lobe = main_lobe(power.reshape(directions.shape), pointed).ravel() & (power >= 0.5 * power[pointed])
            factor = np.vdot(there[lobe], here[lobe]) / np.vdot(there[lobe], there[lobe])
            shape = total_power(here[lobe] / factor - there[lobe])
            rows.append(
                GroundFigures(
                    beam=beam.name,
                    **common,  # type: ignore[arg-type]
                    beam_peak_change_db=decibels(float(total_power(here).max() / power.max())),
                    beam_difference_db=decibels(float(total_power(here - there) @ reference.sky / (power @ reference.sky))),
                    main_lobe_shape_difference_db=decibels(float(shape.max() / power[pointed])),
                    **{key: float(share[index]) for key, share in seen.shares.items()},  # type: ignore[arg-type]
                )
            )
    return rows


class _Seen:
    """What is compared of a solution."""

    scattering: ComplexArray
    elements: ComplexArray
    beams: ComplexArray

    def __init__(self, solution: Solution, beams: Sequence[Beam], directions: Directions, termination: Termination) -> None:
        assert directions.weights_sr is not None
        self.sky = directions.weights_sr
        theta, phi = directions.theta_rad, directions.phi_rad
        n_ports = solution.discretisation.n_ports
        ports = np.unique(np.linspace(0, n_ports - 1, min(SAMPLED_PORTS, n_ports)).astype(int))
        self.scattering = solution.scattering_matrix(100.0)
        self.elements = solution.embedded_patterns(theta, phi, termination=termination, ports=ports)
        weights = beam_weights(solution, beams) if beams else np.eye(n_ports)[ports]
        self.beams = solution.beam(weights, theta, phi, termination=termination) if beams else self.elements[:0]
        try:
            parts = solution.power_parts(weights, termination=termination, integrate_sky=False)
            self.shares = {"radiation_efficiency": parts.radiation_efficiency, "ground_loss": parts.fraction("ground")}
        except ModelRangeError:
            self.shares = dict.fromkeys(("radiation_efficiency", "ground_loss"), np.full(len(weights), nan))


def write_ground_figures(rows: Sequence[GroundFigures], path: str | Path, head: Iterable[str] = ()) -> None:
    """Write a comparison of grounds as CSV, under ``#`` lines that say what each column means.

    Parameters
    ----------
    rows : sequence of GroundFigures
        What to write.
    path : str or Path
        The file.
    head : iterable of str, optional
        Further lines about the job and its grounds.

    Raises
    ------
    ExportError
        If the file cannot be written.
    """
    about = ("One station on different grounds.  Results of a model, not a measurement.", HORIZON_NOTE)
    write_explained_csv(path, rows, MEANINGS, (*head, *about))
