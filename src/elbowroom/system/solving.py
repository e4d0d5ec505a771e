"""Direct solution of a discretised station: currents of every port, under the reference termination."""

from __future__ import annotations

import time
from dataclasses import dataclass, field

import numpy as np

from elbowroom.base.arrays import ComplexArray
from elbowroom.base.errors import SolveError
from elbowroom.system.assembly import Progress, assemble
from elbowroom.system.discretisation import Discretisation

REFERENCE_OHM = 100.0
"""Resistance across every port while solving [ohm]: near what ports of these antennas see, so always well conditioned."""

RESIDUAL_LIMIT = 1e-9
"""Largest relative residual of a mixed or double precision solution that is accepted."""

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
        Largest over the ports of |b - Z x| / |b| in the scaled unknowns.
    seconds : dict
        Wall time of each stage [s].
    """

    strategy: str
    precision: str
    n_unknowns: int
    n_ports: int
    relative_residual: float
    seconds: dict[str, float] = field(default_factory=dict)


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


def _port_rows(discretisation: Discretisation) -> ComplexArray:
    rows = np.zeros((discretisation.n_unknowns, discretisation.n_ports))
    for a in range(len(discretisation.station)):
        vectors = discretisation.kinds[discretisation.kind_of[a]].mesh.port_vectors
        rows[discretisation.unknowns_of(a), discretisation.ports_of(a)] = vectors.T
    return rows


def solve_isolated(discretisation: Discretisation, reference_ohm: float = REFERENCE_OHM) -> list[PortCurrents]:
    """Return the port currents of each kind of antenna alone over the ground."""
    result = []
    for kind in discretisation.kinds:
        vectors = kind.mesh.port_vectors
        loaded = kind.self_block + reference_ohm * (vectors.T @ vectors)
        scale = 1.0 / np.sqrt(np.abs(np.diagonal(loaded)))
        currents = scale[:, None] * np.linalg.solve(loaded * np.outer(scale, scale), scale[:, None] * vectors.T)
        admittance = vectors @ currents
        result.append(PortCurrents(currents, 0.5 * (admittance + admittance.T)))
    return result


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
        ``"mixed"`` factors in single precision and refines in double until the residual is below 1e-11, ``"double"``
        does everything in double, ``"single"`` keeps only the single-precision factors (least memory).
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
        If the matrix is singular or the residual stays above 1e-9 (1e-3 in single precision).
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
    right = scales[:, None] * _port_rows(discretisation)
    tell("factorise", 0.0)
    if precision == "double":
        kept = matrix.astype(np.complex128)
        factors = matrix.factorise()
    else:
        kept = matrix
        factors = matrix.astype(np.complex64).factorise()
    tell("factorise", 1.0)
    lap("factorise")
    tell("port excitations", 0.0)
    size = np.linalg.norm(right, axis=0)
    x = factors.solve(right).astype(np.complex128)
    residual = right - kept.product(x)
    worst = float(np.max(np.linalg.norm(residual, axis=0) / size))
    if precision != "single":
        for _ in range(8):
            if not worst > 1e-11:
                break
            x = x + factors.solve(residual)
            residual = right - kept.product(x)
            previous, worst = worst, float(np.max(np.linalg.norm(residual, axis=0) / size))
            if worst > 0.5 * previous:
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
    admittance = (scales[:, None] * _port_rows(discretisation)).T @ x
    return (
        PortCurrents(scales[:, None] * x, 0.5 * (admittance + admittance.T)),
        SolveStatistics("direct", precision, discretisation.n_unknowns, discretisation.n_ports, worst, seconds),
    )
