"""Solving a station at a frequency, with or without a store: where geometry, physics and store meet."""

from __future__ import annotations

from contextlib import nullcontext
from dataclasses import fields, replace
from typing import Any

import numpy as np

from elbowroom.base.arrays import ArraySpec
from elbowroom.base.errors import ModelRangeError, StoreError
from elbowroom.base.threads import blas_threads, loop_threads
from elbowroom.geometry.antennas import Antenna
from elbowroom.geometry.mesh import MeshSettings, mesh_settings
from elbowroom.geometry.stations import Station, orientation_matrix
from elbowroom.job.checks import StationMeshes
from elbowroom.job.groundtables import kept_ground
from elbowroom.job.sharing import working_on
from elbowroom.radiation.solution import Solution
from elbowroom.store.keys import content_key
from elbowroom.store.records import Record, Schema, Store
from elbowroom.system.assembly import Progress
from elbowroom.system.discretisation import Discretisation, FarSettings, discretise
from elbowroom.system.reduction import ReductionSettings
from elbowroom.system.self_block import NearSettings
from elbowroom.system.solving import (
    ORIGINS,
    REFERENCE_OHM,
    PortCurrents,
    SolveStatistics,
    mesh_error,
    solve_direct,
    solve_isolated,
)
from elbowroom.system.solving_reduced import solve_reduced
from elbowroom.system.spaces import CurrentSpace, all_unknowns

MODEL_VERSION = 3
"""Raised whenever a change of the physics or numerics changes solved currents beyond rounding."""

PLACE_STEP_M = 1e-6
"""Places that agree to this are one place in a key: a thousandth of a degree of phase at 350 MHz is 2.4e-6 m."""

SOLVERS = ("auto", "direct", "reduced")

AUTO_DIRECT_UNKNOWNS = 3000
"""Unknowns up to which ``"auto"`` solves directly: there both take a few seconds, and nothing needs to be estimated."""

CONVENTIONS = (
    "SI units. Time factor exp(+j omega t). Frame: x east, y north, z up, ground surface at z = 0. Unknowns are currents "
    "along wires, antenna by antenna; coordinates are the unknowns, or multiply the functions of each antenna's kind, which are "
    "columns of unknowns; column p of currents_per_volt is driven by 1 V behind the reference resistance of "
    "port p, every other port loaded with it; port current positive from the first to the second end of the wire. "
    "Results of a model, not a measurement."
)

SOLUTION_SCHEMA = Schema(
    "station-solution",
    2,
    (
        ArraySpec("currents_per_volt", ("coordinate", "port"), "c", "A/V", "Currents driven by each port's source"),
        ArraySpec("coordinate_offset", ("antenna_edge",), "iu", "1", "First coordinate of each antenna, and the end"),
        ArraySpec("functions", ("function_entry",), "c", "1", "Bases of all kinds one after another, row by row; empty if none"),
        ArraySpec("functions_shape", ("kind", "row_column"), "iu", "1", "Unknowns and functions of each kind; 0 0 if none"),
        ArraySpec("kind_of_antenna", ("antenna",), "iu", "1", "Kind of each antenna"),
        ArraySpec("loaded_admittance_s", ("port", "port"), "c", "S", "Port currents for 1 V behind each reference resistance"),
        ArraySpec("isolated_currents_per_volt", ("unknown", "local_port"), "c", "A/V", "The same, every antenna alone"),
        ArraySpec("isolated_loaded_admittance_s", ("port", "local_port"), "c", "S", "Port currents, every antenna alone"),
        ArraySpec("position_m", ("antenna", "axis"), "f", "m", "East, north, up of each antenna as solved"),
        ArraySpec("unknown_offset", ("antenna_edge",), "iu", "1", "First unknown of each antenna, and the end"),
        ArraySpec("port_offset", ("antenna_edge",), "iu", "1", "First port of each antenna, and the end"),
    ),
    CONVENTIONS,
)


def _network_inputs(antenna: Antenna) -> dict[str, Any]:
    """Return what connects gaps and ports, with numbers for the names of nodes; nothing if each port has its own gap."""
    number = {name: i for i, name in enumerate(antenna.nodes)}
    port_nodes = [number[n] for n in antenna.port_nodes]
    if not antenna.network and port_nodes == list(range(len(antenna.gaps))):
        return {}
    elements: dict[str, Any] = {}
    for group in fields(antenna.network):
        elements[group.name] = [
            {f.name: number.get(getattr(e, f.name), getattr(e, f.name)) for f in fields(e)}
            for e in getattr(antenna.network, group.name)
        ]
    return {"port_nodes": port_nodes, "network": elements}


def _design_inputs(antenna: Antenna) -> dict[str, Any]:
    """Return what the currents of a design depend on: no names, no polarisation labels."""
    return {
        **_network_inputs(antenna),
        "wires": [
            (w.start, w.end, w.radius, w.conductivity, w.relative_permeability if w.conductivity is not None else None)
            for w in antenna.wires
        ],
        "ports": [(g.wire, g.low, g.high) for g in antenna.gaps],
        "loads": [
            (g.wire, g.low, g.high, q.resistance_ohm, q.inductance_h, q.capacitance_f)
            for g, q in zip(antenna.load_gaps, antenna.loads, strict=True)
        ],
    }


def _relative_places(station: Station) -> tuple[np.ndarray, np.ndarray]:
    """Return places and attitudes in whole steps, the same for stations that are turned or shifted copies.

    The frame's origin is the first antenna and its x axis points to the antenna farthest from it.
    """
    positions = station.positions.copy()
    positions[:, :2] -= positions[0, :2]
    distance = np.hypot(positions[:, 0], positions[:, 1])
    far = int(np.argmax(np.round(distance / PLACE_STEP_M)))
    if distance[far] > PLACE_STEP_M:
        angle = np.degrees(np.arctan2(positions[far, 1], positions[far, 0]))
    else:
        angle = station.placed[0].rotation_deg
    back = orientation_matrix(-angle)
    places = np.round(positions @ back.T / PLACE_STEP_M).astype(np.int64)
    attitudes = np.array([back @ p.orientation for p in station])
    return places, np.round(attitudes / 1e-8).astype(np.int64)


class StationKeys:
    """Keys of the units of one station; what does not depend on frequency is worked out once.

    Parameters
    ----------
    station : Station
        The station.

    Attributes
    ----------
    ground : Ground
        Its ground.
    """

    def __init__(self, station: Station) -> None:
        designs = station.designs
        index_of = {id(d): i for i, d in enumerate(designs)}
        index = [index_of[id(p.antenna)] if id(p.antenna) in index_of else designs.index(p.antenna) for p in station]
        places, attitudes = _relative_places(station)
        self.ground = station.ground
        self._inputs = {
            "model_version": MODEL_VERSION,
            "designs": [_design_inputs(d) for d in designs],
            "design_of_antenna": index,
            "places": places,
            "attitudes": attitudes,
            "reference_ohm": REFERENCE_OHM,
        }

    def key(
        self, frequency_hz: float, mesh: MeshSettings, near: NearSettings, far: FarSettings, strategy: tuple[str, str]
    ) -> str:
        """Return the key of the station at a frequency [Hz]; see `solution_key`."""
        ground = self.ground.at(frequency_hz)
        own = {
            "ground": ground,
            "frequency_hz": float(frequency_hz),
            "mesh": mesh,
            "near": near,
            "far": far,
            "strategy": strategy,
        }
        return content_key(self._inputs | own)


def solution_key(
    station: Station, frequency_hz: float, mesh: MeshSettings, near: NearSettings, far: FarSettings, strategy: tuple[str, str]
) -> str:
    """Return the store's key of a solve: equal for everything that leaves the currents as they are.

    Terminations, weights and names are no part of it, nor is a turn or a shift of the whole station.
    """
    return StationKeys(station).key(frequency_hz, mesh, near, far, strategy)


HALVED = ("currents_per_volt", "functions", "isolated_currents_per_volt")
"""Arrays that single-precision storage halves.  Port matrices stay: impedances are differences of what they hold."""


def to_record(solution: Solution, attributes: dict[str, Any], *, single_storage: bool = False) -> Record:
    """Return what the store keeps of a solution, with more attributes for the reader of the file."""
    d = solution.discretisation
    widest = int(np.diff(d.port_offsets).max())
    isolated_currents = np.zeros((d.n_unknowns, widest), dtype=complex)
    isolated_admittance = np.zeros((d.n_ports, widest), dtype=complex)
    for a, alone in enumerate(solution.isolated):
        n = alone.currents.shape[1]
        isolated_currents[d.unknowns_of(a), :n] = alone.currents
        isolated_admittance[d.ports_of(a), :n] = alone.loaded_admittance
    s = solution.statistics
    record = Record(
        {
            "currents_per_volt": solution.coupled.currents,
            "coordinate_offset": solution.space.offsets,
            "functions": np.concatenate([np.zeros(0, complex), *(b.ravel() for b in solution.space.bases if b is not None)]),
            "functions_shape": np.array([(0, 0) if b is None else b.shape for b in solution.space.bases]),
            "kind_of_antenna": d.kind_of,
            "loaded_admittance_s": solution.coupled.loaded_admittance,
            "isolated_currents_per_volt": isolated_currents,
            "isolated_loaded_admittance_s": isolated_admittance,
            "position_m": d.station.positions,
            "unknown_offset": d.unknown_offsets,
            "port_offset": d.port_offsets,
        },
        {
            "frequency_hz": d.frequency_hz,
            "reference_ohm": solution.reference_ohm,
            "ground": d.station.ground.describe(),
            "antenna_names": [p.name for p in d.station],
            "port_names": [str(n) for n in d.station.port_names],
            "strategy": s.strategy,
            "precision": s.precision,
            "relative_residual": s.relative_residual if np.isfinite(s.relative_residual) else None,
            "mesh_error": s.mesh_error if np.isfinite(s.mesh_error) else None,
            "seconds": dict(s.seconds),
            "n_functions": s.n_functions,
            "pattern_error": s.pattern_error,
            "port_matrix_error": s.port_matrix_error,
            "origin": s.origin,
            "probes": [[z.real, z.imag] for z in s.probes],
            # Rounding depends on how sums are split among threads, and on nothing else of the machine at hand.
            "blas_threads": blas_threads(),
            "loop_threads": loop_threads(),
            **attributes,
        },
    )
    if single_storage:
        for name in HALVED:
            record.arrays[name] = record.arrays[name].astype(np.complex64)
    return record


def record_fits(record: Record, d: Discretisation) -> bool:
    """Return whether a record was made from the same kinds of antenna; places that round alike may differ in kind."""
    a = record.arrays
    if not np.array_equal(a["unknown_offset"], d.unknown_offsets) or not np.array_equal(a["port_offset"], d.port_offsets):
        return False
    # Kinds may be numbered otherwise, but antennas that share one must share one here.
    if not len(a["functions"]):
        return True
    if len(a["functions_shape"]) != len(d.kinds):
        return False
    return np.array_equal(a["kind_of_antenna"], d.kind_of)


def stored_statistics(record: Record) -> SolveStatistics:
    """Return what the solve of a stored unit cost and how well it came out."""
    attributes = record.attributes
    return SolveStatistics(
        strategy=attributes["strategy"],
        precision=attributes["precision"],
        n_unknowns=int(record.arrays["unknown_offset"][-1]),
        n_ports=int(record.arrays["port_offset"][-1]),
        relative_residual=float("nan" if attributes["relative_residual"] is None else attributes["relative_residual"]),
        mesh_error=float("nan" if attributes["mesh_error"] is None else attributes["mesh_error"]),
        seconds={k: float(v) for k, v in attributes["seconds"].items()},
        n_functions=int(attributes["n_functions"]),
        pattern_error=float(attributes["pattern_error"]),
        port_matrix_error=float(attributes["port_matrix_error"]),
        # Files of before there were others hold what was assembled.
        origin=attributes.get("origin", ORIGINS[0]),
        probes=tuple(complex(*z) for z in attributes.get("probes", [])),
    )


def from_record(record: Record, d: Discretisation) -> Solution:
    """Return the solution that a record keeps of a station, meshed as it was, self blocks not needed; see `record_fits`."""
    a, attributes = dict(record.arrays), record.attributes
    for name in HALVED:
        a[name] = a[name].astype(np.complex128, copy=False)
    alone: list[PortCurrents] = []
    made: dict[bytes, PortCurrents] = {}
    for i in range(len(d.station)):
        n = d.port_offsets[i + 1] - d.port_offsets[i]
        currents = a["isolated_currents_per_volt"][d.unknowns_of(i), :n]
        # Antennas alike share one object again, so that patterns of a kind are worked out once.
        key = currents.tobytes()
        if key not in made:
            made[key] = PortCurrents(currents, a["isolated_loaded_admittance_s"][d.ports_of(i), :n])
        alone.append(made[key])
    statistics = stored_statistics(record)
    bases: list[np.ndarray | None] = []
    first = 0
    # A direct solution has no functions, however its kinds were counted.
    shapes = a["functions_shape"] if len(a["functions"]) else [(0, 0)] * len(d.kinds)
    for rows, columns in shapes:
        bases.append(a["functions"][first : first + rows * columns].reshape(rows, columns) if rows else None)
        first += rows * columns
    space = CurrentSpace(a["coordinate_offset"], tuple(bases))
    return Solution(
        d,
        PortCurrents(a["currents_per_volt"], a["loaded_admittance_s"]),
        tuple(alone),
        float(attributes["reference_ohm"]),
        statistics,
        space,
    )


def chosen_solver(
    station: Station, frequency_hz: float, mesh: MeshSettings, solver: str, meshes: StationMeshes | None = None
) -> str:
    """Return ``"direct"`` or ``"reduced"``: what was asked for, or what ``"auto"`` takes for a station of that size.

    The station's meshes may be given, so that they need not be told apart again at every frequency.
    """
    if solver != "auto":
        return solver
    unknowns = (meshes or StationMeshes(station)).unknowns(frequency_hz, mesh)
    return "reduced" if unknowns > AUTO_DIRECT_UNKNOWNS and len(station) > 1 else "direct"


def strategy_of(
    solver: str, precision: str, tolerance: float, *, with_mesh_error: bool = True, single_storage: bool = False
) -> tuple[str, str]:
    """Return what a key says of how a station is solved and kept.

    Solutions that state no mesh error, or are stored in single precision, are kept apart from those that hold more.
    """
    how = precision if solver == "direct" else f"{tolerance:.6g}"
    how = how if with_mesh_error else f"{how}, no mesh error"
    return (solver, f"{how}, stored in single precision" if single_storage else how)


def solve(
    station: Station,
    frequency_hz: float,
    *,
    solver: str = "auto",
    mesh: str | MeshSettings = "default",
    precision: str = "mixed",
    tolerance: float = 1e-4,
    near: NearSettings | None = None,
    far: FarSettings | None = None,
    store: Store | None = None,
    attributes: dict[str, Any] | None = None,
    progress: Progress | None = None,
    only_stored: bool = False,
    with_mesh_error: bool = True,
    single_storage: bool = False,
) -> Solution:
    """Solve a station at one frequency, or fetch what was solved before; wait while another run solves it into the same store.

    Parameters
    ----------
    station : Station
        Antennas and ground.
    frequency_hz : float
        Frequency [Hz].
    solver : str, optional
        ``"direct"`` solves for all unknowns, ``"reduced"`` for a few functions of each antenna within the tolerance, and
        ``"auto"`` takes the reduced solver from `AUTO_DIRECT_UNKNOWNS` unknowns on.
    mesh : str or MeshSettings, optional
        ``"default"``, ``"refined"`` or settings.
    precision : str, optional
        Of the direct solver: ``"mixed"``, ``"double"`` or ``"single"``.
    tolerance : float, optional
        Of the reduced solver: error of embedded patterns relative to their peaks.
    near, far : optional
        Accuracy of reactions inside and between antennas.
    store : Store, optional
        Where to look first and to keep the result.
    attributes : dict, optional
        Stored beside the result, for the reader of the file.
    progress : callable, optional
        Told the stage and the fraction done.
    only_stored : bool, optional
        Whether to raise rather than solve what the store does not hold.
    with_mesh_error : bool, optional
        Whether to solve each design on a finer mesh and state what that changes; the mesh error is NaN without it.
    single_storage : bool, optional
        Whether the store keeps currents to single precision, in half the room; what was solved just now is returned in full.

    Returns
    -------
    Solution

    Raises
    ------
    GeometryError, ModelRangeError, SolveError, StoreError
        See the stages.
    """
    if solver not in SOLVERS:
        msg = f"solver {solver!r}: expected {', '.join(SOLVERS)}"
        raise ModelRangeError(msg)
    if not (np.isfinite(frequency_hz) and frequency_hz > 0.0):
        msg = f"frequency {frequency_hz!r} Hz: expected a positive number"
        raise ModelRangeError(msg)
    settings, near, far = mesh_settings(mesh), near or NearSettings(), far or FarSettings()
    chosen = chosen_solver(station, frequency_hz, settings, solver)
    strategy = strategy_of(chosen, precision, tolerance, with_mesh_error=with_mesh_error, single_storage=single_storage)
    key = ""
    if store is not None:
        key = solution_key(station, frequency_hz, settings, near, far, strategy)
        record = store.get(key)
        if record is not None:
            found = discretise(station, frequency_hz, mesh=settings, near=near, far=far, self_blocks=False)
            if record_fits(record, found):
                return from_record(record, found)
        if not only_stored:
            store.check_writable()
    if only_stored:
        msg = f"{frequency_hz / 1e6:g} MHz is not in the store, or its file is damaged; solve it first"
        raise StoreError(msg)
    with nullcontext() if store is None else working_on(store, key, progress) as arrived:
        if arrived is not None:
            found = discretise(station, frequency_hz, mesh=settings, near=near, far=far, self_blocks=False)
            if record_fits(arrived, found):
                return from_record(arrived, found)
        ground = kept_ground(station, frequency_hz, store)
        d = discretise(station, frequency_hz, mesh=settings, near=near, far=far, ground=ground)
        per_kind = solve_isolated(d)
        if chosen == "reduced":
            coupled, space, statistics = solve_reduced(d, ReductionSettings(tolerance), progress=progress)
        else:
            coupled, statistics = solve_direct(d, precision=precision, progress=progress)
            space = all_unknowns(d)
        if with_mesh_error:
            statistics = replace(statistics, mesh_error=mesh_error(d, per_kind))
        solution = Solution(d, coupled, tuple(per_kind[k] for k in d.kind_of), REFERENCE_OHM, statistics, space)
        if store is not None:
            store.put(key, to_record(solution, attributes or {}, single_storage=single_storage))
        return solution
