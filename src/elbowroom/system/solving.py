"""Direct solution of a discretised station: currents of every port, under the reference termination."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.errors import SolveError
from elbowroom.geometry.mesh import finer_mesh
from elbowroom.geometry.stations import Station
from elbowroom.system.assembly import Progress, assemble
from elbowroom.system.discretisation import Discretisation, attachments, discretise
from elbowroom.system.factorisation import TiledSymmetric
from elbowroom.system.port_algebra import admittance_from_loaded

REFERENCE_OHM = 100.0
"""Resistance across every port while solving [ohm]: near what ports of these antennas see, so always well conditioned."""

REFINED_RESIDUAL = 1e-9
"""Relative residual at which refinement in double precision stops: far below what the mesh resolves."""

RESIDUAL_LIMIT = 1e-8
"""Largest relative residual of a mixed or double precision solution that is accepted."""

N_PROBES = 16
"""Random combinations of ports on which the residual is measured."""

ORIGINS = ("assembled", "interpolated matrix", "interpolated currents")
"""Where a solution comes from: its own matrix, one interpolated along frequency, or solutions at other frequencies."""

ORIGIN_MEANING = (
    "assembled: the matrix is that of the frequency; interpolated matrix: it was interpolated along frequency and solved; "
    "interpolated currents: currents were interpolated between solved frequencies"
)
"""For the reader of tables."""

PRECISIONS = ("mixed", "single", "double")


@dataclass(frozen=True)
class SolveStatistics:
    """What a solve cost and how well it came out.

    Attributes
    ----------
    strategy, precision : str
        How it was solved.
    n_unknowns, n_ports : int
        Sizes.
    relative_residual : float
        Largest |b - Z x| / |b| in the scaled unknowns, over the ports or random combinations of them; in single
        precision, where Z is not kept, the relative error of known random vectors recovered from their products.  Not a number
        for reduced solves, whose error is ``pattern_error``.
    mesh_error : float
        Largest relative change of an isolated antenna's port admittance when its mesh is refined.
    seconds : dict
        Wall time of each stage [s].
    n_functions : int
        Functions that stood for the unknowns in a reduced solve; 0 otherwise.
    pattern_error, port_matrix_error : float
        Stated error of a reduced solve against the full one on the same mesh: of embedded patterns relative to their peaks
        where every port sees the reference resistance, and of the port matrix relative to its norm; zero where all unknowns
        were solved for.
    origin : str
        One of `ORIGINS`: whether the matrix was assembled at this frequency, or interpolated along frequency and factored, or
        currents were interpolated between solved frequencies.  Stated errors hold what interpolation adds.
    probes : tuple of complex
        What random sources inside a few antennas drive there, by which resonances are found along frequency; may be empty.
    """

    strategy: str
    precision: str
    n_unknowns: int
    n_ports: int
    relative_residual: float
    mesh_error: float = float("nan")
    seconds: dict[str, float] = field(default_factory=dict)
    n_functions: int = 0
    pattern_error: float = 0.0
    port_matrix_error: float = 0.0
    origin: str = "assembled"
    probes: tuple[complex, ...] = ()


@dataclass(frozen=True)
class PortCurrents:
    """Currents of unit port sources behind the reference resistance.

    Attributes
    ----------
    currents : complex128 (N, P)
        Unknowns for 1 V behind each port's resistance, others loaded [A/V].
    loaded_admittance : complex128 (P, P)
        Port currents of the same sources [S]; symmetric.
    """

    currents: ComplexArray
    loaded_admittance: ComplexArray


def _probed_residual(matrix: TiledSymmetric, right: FloatArray | ComplexArray, x: ComplexArray) -> float:
    """Return the largest relative residual over random combinations of the ports' solutions.

    A combination with random signs has, in the mean square, the sum of the squared residuals of all ports over
    the sum of their squared right-hand sides; sixteen of them cost a thirtieth of checking five hundred ports one by one.
    """
    n_ports = right.shape[1]
    if n_ports > N_PROBES:
        signs = np.random.default_rng(n_ports).choice([-1.0, 1.0], size=(n_ports, N_PROBES))
        right, x = right @ signs, x @ signs
    residual = right - matrix.product(x)
    return float(np.max(np.linalg.norm(residual, axis=0) / np.linalg.norm(right, axis=0)))


def _solve_single(
    matrix: TiledSymmetric, right: FloatArray | ComplexArray, lap: Callable[[str], None]
) -> tuple[ComplexArray, float]:
    """Solve keeping nothing but single-precision factors, whose error shows on vectors multiplied beforehand.

    The error returned is that of the vectors themselves, which is no smaller than a residual of theirs is worth.
    """
    known = np.random.default_rng(matrix.order).normal(size=(matrix.order, N_PROBES))
    multiplied = matrix.product(known)
    factors = matrix.lowered().factorise()
    lap("factorise")
    found = factors.solve(multiplied)
    error = float(np.max(np.linalg.norm(found - known, axis=0) / np.linalg.norm(known, axis=0)))
    return factors.solve(right).astype(np.complex128), error


def kind_excitations(
    discretisation: Discretisation, reference_ohm: float = REFERENCE_OHM
) -> list[tuple[FloatArray | ComplexArray, ComplexArray]]:
    """Return for each kind its ports' right-hand sides (N_k, P_k) and the port currents (P_k, P_k) [S] that flow with gaps open.

    A port's source reaches no other antenna, so that nothing of the station's size is needed.
    """
    attached = attachments(discretisation, reference_ohm)
    made = []
    for kind in discretisation.kinds:
        rows = attached[kind.antenna].excitations(kind.mesh.gap_vectors)
        # Real where ports look straight into gaps: half the work for whoever multiplies with it.
        made.append((rows if np.any(rows.imag) else rows.real, attached[kind.antenna].admittance))
    return made


def port_excitations(
    discretisation: Discretisation, reference_ohm: float = REFERENCE_OHM
) -> tuple[FloatArray | ComplexArray, ComplexArray]:
    """Return the right-hand sides (N, P) of all ports' sources, and the port currents (P, P) [S] that flow with gaps open."""
    d, made = discretisation, kind_excitations(discretisation, reference_ohm)
    dtype = np.result_type(*(rows.dtype for rows, _ in made))
    right: FloatArray | ComplexArray = np.zeros((d.n_unknowns, d.n_ports), dtype=dtype)
    own: ComplexArray = np.zeros((d.n_ports, d.n_ports), dtype=complex)
    for a, k in enumerate(d.kind_of):
        ports = d.ports_of(a)
        right[d.unknowns_of(a), ports], own[ports, ports] = made[k]
    return right, own


def solve_isolated(discretisation: Discretisation, reference_ohm: float = REFERENCE_OHM) -> list[PortCurrents]:
    """Return the port currents of each kind of antenna alone over the ground; kinds that share a block share them."""
    result = []
    attached = attachments(discretisation, reference_ohm)
    made: dict[tuple[int, int, int], PortCurrents] = {}
    for kind in discretisation.kinds:
        key = (id(kind.antenna), id(kind.mesh), id(kind.self_block))
        if key not in made:
            ports = attached[kind.antenna]
            loaded = kind.self_block + ports.structure(kind.mesh.gap_vectors)
            right = ports.excitations(kind.mesh.gap_vectors)
            scale = 1.0 / np.sqrt(np.abs(np.diagonal(loaded)))
            currents: ComplexArray = scale[:, None] * np.linalg.solve(loaded * np.outer(scale, scale), scale[:, None] * right)
            admittance = ports.admittance + right.T @ currents
            made[key] = PortCurrents(currents, 0.5 * (admittance + admittance.T))
        result.append(made[key])
    return result


def mesh_error(discretisation: Discretisation, isolated: list[PortCurrents]) -> float:
    """Return how far the mesh leaves each design's port admittance from that of a finer mesh, alone over the ground.

    The finer mesh is that of :func:`elbowroom.geometry.mesh.finer_mesh`.

    Parameters
    ----------
    discretisation : Discretisation
        The meshed station.
    isolated : list of PortCurrents
        Each kind alone, from :func:`solve_isolated`.

    Returns
    -------
    float
        Largest |Y - Y_fine| / |Y_fine| over the designs (Frobenius norms).
    """
    finer = finer_mesh(discretisation.mesh)
    worst = 0.0
    seen: list[object] = []
    for k, kind in enumerate(discretisation.kinds):
        if any(kind.antenna is design for design in seen):
            continue
        seen.append(kind.antenna)
        place = discretisation.station.placed[int(discretisation.antennas_of(k)[0])]
        alone = discretise(
            Station([place], discretisation.station.ground), discretisation.frequency_hz, mesh=finer, near=discretisation.near,
            ground=discretisation.ground,
        )  # fmt: skip
        fine, here = solve_isolated(alone)[0].loaded_admittance, isolated[k].loaded_admittance
        try:
            fine, here = admittance_from_loaded(fine, REFERENCE_OHM), admittance_from_loaded(here, REFERENCE_OHM)
        except np.linalg.LinAlgError:
            # Ports in parallel at one node have no short-circuit admittance; the loaded one always exists.
            pass
        worst = max(worst, float(np.linalg.norm(here - fine) / np.linalg.norm(fine)))
    return worst


def solve_direct(
    discretisation: Discretisation,
    *,
    precision: str = "mixed",
    reference_ohm: float = REFERENCE_OHM,
    progress: Progress | None = None,
) -> tuple[PortCurrents, SolveStatistics]:
    """Assemble the whole matrix, factor it and solve for every port.

    Parameters
    ----------
    discretisation : Discretisation
        The meshed station.
    precision : str, optional
        ``"mixed"`` factors in single precision and refines in double until the residual is below 1e-9, ``"double"``
        does everything in double, ``"single"`` keeps nothing but the single-precision factors (half the memory).
    reference_ohm : float, optional
        Resistance across every port while solving [ohm].
    progress : callable, optional
        Told the stage and the fraction done.

    Returns
    -------
    PortCurrents, SolveStatistics

    Raises
    ------
    SolveError
        If the matrix is singular or the residual stays above 1e-8 (1e-3 in single precision).
    """
    if precision not in PRECISIONS:
        msg = f"precision {precision!r}: expected {', '.join(PRECISIONS)}"
        raise SolveError(msg)
    tell = progress or (lambda stage, fraction: None)
    seconds: dict[str, float] = {}
    clock = time.perf_counter()

    def lap(stage: str) -> None:
        nonlocal clock
        now = time.perf_counter()
        seconds[stage] = seconds.get(stage, 0.0) + now - clock
        clock = now

    matrix, scales = assemble(discretisation, reference_ohm, progress=progress)
    lap("assemble")
    excitations, own = port_excitations(discretisation, reference_ohm)
    right = scales[:, None] * excitations
    tell("factorise", 0.0)
    if precision == "single":
        x, worst = _solve_single(matrix, right, lap)
    else:
        factors = matrix.astype(np.complex128 if precision == "double" else np.complex64).factorise()
        tell("factorise", 1.0)
        lap("factorise")
        tell("port excitations", 0.0)
        x = factors.solve(right).astype(np.complex128)
        worst = _probed_residual(matrix, right, x)
        while worst > REFINED_RESIDUAL:
            x += factors.solve(right - matrix.product(x))
            previous, worst = worst, _probed_residual(matrix, right, x)
            if worst > 0.1 * previous:
                break
    tell("port excitations", 1.0)
    lap("port excitations")
    limit = 1e-3 if precision == "single" else RESIDUAL_LIMIT
    if not worst < limit:
        msg = (
            f"the solution at {discretisation.frequency_hz / 1e6:g} MHz has a relative residual of {worst:.1e}, above {limit:g}; "
            "try precision 'double', or look for wires that almost coincide"
        )
        raise SolveError(msg)
    admittance = own + right.T @ x
    return (
        PortCurrents(scales[:, None] * x, 0.5 * (admittance + admittance.T)),
        SolveStatistics("direct", precision, discretisation.n_unknowns, discretisation.n_ports, worst, seconds=seconds),
    )
