"""Reduced solution of a station: functions in place of unknowns, skeletons in place of quadrature points, a stated error."""

from __future__ import annotations

import time
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor

import numpy as np

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.system.assembly import (
    TILE_ORDER,
    PairFiller,
    Progress,
    antenna_distances,
    available_cores,
    single_threaded_blas,
)
from elbowroom.system.discretisation import Discretisation, attachments
from elbowroom.system.factorisation import TiledSymmetric
from elbowroom.system.interactions import SkeletonInteractions, SkeletonTable
from elbowroom.system.reduction import KindAnswers, ReductionSettings, enriched, reduced_candidates
from elbowroom.system.reduction_error import reduction_error, skeleton_error
from elbowroom.system.solving import REFERENCE_OHM, PortCurrents, SolveStatistics, port_excitations
from elbowroom.system.spaces import CurrentSpace, reduced_space

BATCH_ANTENNAS = 12
"""Antennas whose kernels are filled at a time: few enough for the work arrays to stay in cache."""

SINGLE_TOLERANCE = 3e-5
"""Tolerance from which the reduced matrix is kept and factored in single precision."""

MOST_ATTEMPTS = 4
"""Times that functions are added before an error above the tolerance is left as stated."""


def _batches(others: np.ndarray, levels: np.ndarray) -> Iterator[tuple[int, np.ndarray]]:
    for level in np.unique(levels):
        chosen = others[levels == level]
        for first in range(0, len(chosen), BATCH_ANTENNAS):
            yield int(level), chosen[first : first + BATCH_ANTENNAS]


def assemble_reduced(
    discretisation: Discretisation,
    space: CurrentSpace,
    interactions: SkeletonInteractions,
    filler: PairFiller,
    distances: FloatArray,
    reference_ohm: float,
    *,
    dtype: type = np.complex64,
    progress: Progress | None = None,
) -> TiledSymmetric:
    """Return the reduced impedance matrix with every port loaded, in tiles.

    Parameters
    ----------
    discretisation : Discretisation
        The meshed station, with self blocks.
    space : CurrentSpace
        Functions of each kind.
    interactions : SkeletonInteractions
        Blocks of pairs that are far enough apart.
    filler : PairFiller
        Blocks of unknowns of the others.
    distances : float64 (A, A)
        Smallest distances between wires [m].
    reference_ohm : float
        Resistance across every port [ohm].
    dtype : type, optional
        Precision of the matrix.
    progress : callable, optional
        Told the stage and the fraction done.
    """
    d, n_antennas = discretisation, len(discretisation.station)
    groups: list[range] = []
    first = 0
    for a in range(n_antennas):
        if space.offsets[a + 1] - space.offsets[first] > TILE_ORDER and a > first:
            groups.append(range(first, a))
            first = a
    groups.append(range(first, n_antennas))
    matrix = TiledSymmetric([int(space.offsets[g.stop] - space.offsets[g.start]) for g in groups], dtype)
    group_of = np.repeat(np.arange(len(groups)), [len(g) for g in groups])
    attached = attachments(d, reference_ohm)
    levels = np.vectorize(interactions.skeletons.level_of, otypes=[int])(distances)

    def place(i: int, j: int, block: ComplexArray) -> None:
        tile = matrix.tiles[group_of[j], group_of[i]]
        top, left = space.offsets[groups[group_of[j]].start], space.offsets[groups[group_of[i]].start]
        rows, columns = space.of(j), space.of(i)
        tile[rows.start - top : rows.stop - top, columns.start - left : columns.stop - left] = block
        if group_of[i] == group_of[j] and i != j:
            tile[columns.start - left : columns.stop - left, rows.start - top : rows.stop - top] = block.T

    own: dict[int, ComplexArray] = {}
    made: dict[int, ComplexArray] = {}
    for k, kind in enumerate(d.kinds):
        basis, key = space.bases[k], id(kind.self_block)
        if key not in made:
            loaded = kind.self_block + attached[kind.antenna].structure(kind.mesh.gap_vectors)
            made[key] = loaded if basis is None else basis.T @ loaded @ basis
        own[k] = made[key]

    def fill_row(i: int) -> None:
        place(i, i, own[d.kind_of[i]])
        others = np.arange(i + 1, n_antennas)
        for level, chosen in _batches(others, levels[i, others]):
            if level >= 0:
                for j, block in zip(chosen, interactions.blocks(i, chosen, level), strict=True):
                    place(i, int(j), block)
                continue
            for j in chosen:
                full = filler.block(i, int(j), distances[i, j])
                place(i, int(j), space.bases[d.kind_of[j]].T @ full @ space.bases[d.kind_of[i]])  # type: ignore[union-attr]

    with single_threaded_blas(), ThreadPoolExecutor(available_cores()) as pool:
        for done, _ in enumerate(pool.map(fill_row, range(n_antennas)), start=1):
            if progress is not None:
                progress("assemble", done / n_antennas)
    return matrix


def solve_reduced(
    discretisation: Discretisation,
    settings: ReductionSettings | None = None,
    *,
    reference_ohm: float = REFERENCE_OHM,
    progress: Progress | None = None,
) -> tuple[PortCurrents, CurrentSpace, SolveStatistics]:
    """Solve a station in a few functions of each antenna, and state the error.

    Where the stated error exceeds the tolerance, more functions are taken and the station is solved again.

    Parameters
    ----------
    discretisation : Discretisation
        The meshed station, with self blocks.
    settings : ReductionSettings, optional
        Accuracy.
    reference_ohm : float, optional
        Resistance across every port [ohm].
    progress : callable, optional
        Told the stage and the fraction done.

    Returns
    -------
    PortCurrents, CurrentSpace, SolveStatistics
        Currents in the coordinates of the space.

    Raises
    ------
    SolveError
        If the reduced matrix is singular or not finite.
    """
    d, settings = discretisation, settings or ReductionSettings()
    seconds: dict[str, float] = {}
    clock = time.perf_counter()

    def lap(stage: str) -> None:
        nonlocal clock
        now = time.perf_counter()
        seconds[stage] = seconds.get(stage, 0.0) + now - clock
        clock = now

    filler, distances, answers = PairFiller(d), antenna_distances(d), KindAnswers(d, reference_ohm)
    table = SkeletonTable(d, settings.skeleton_distances_m, settings.skeleton_factor * settings.tolerance)
    with single_threaded_blas():
        # Matrices of one antenna: threads of BLAS would cost more than they save.
        candidates = reduced_candidates(d, settings, filler, distances, answers, table)
    skeleton: float | None = None
    excitations, own = port_excitations(d, reference_ohm)
    lap("functions")
    cut = settings.cut_factor * np.sqrt(settings.tolerance)
    for attempt in range(MOST_ATTEMPTS):
        bases = [c.cut(cut) for c in candidates]
        space = reduced_space(d, bases)
        interactions = SkeletonInteractions(d, space.bases, table)
        interactions.prepare()
        lap("skeletons")
        # Single precision leaves about 1e-6 of a pattern, which a tighter tolerance would see.
        dtype = np.complex64 if settings.tolerance >= SINGLE_TOLERANCE else np.complex128
        matrix = assemble_reduced(d, space, interactions, filler, distances, reference_ohm, dtype=dtype, progress=progress)
        lap("assemble")
        right = np.zeros((space.size, d.n_ports), dtype=complex)
        for a, k in enumerate(d.kind_of):
            right[space.of(a), d.ports_of(a)] = bases[k].T @ excitations[d.unknowns_of(a), d.ports_of(a)]
        if progress is not None:
            progress("factorise", 0.0)
        factors = matrix.factorise()
        lap("factorise")
        x = factors.solve(right).astype(np.complex128)
        admittance = own + right.T @ x
        lap("port excitations")
        if skeleton is None:
            skeleton = skeleton_error(d, table, filler, distances, answers)
        error = reduction_error(d, space, interactions, filler, distances, answers, x, excitations, factors, skeleton)
        lap("error estimate")
        complete = all(c.count(cut) == len(c.functions) for c in candidates)
        if error.pattern <= settings.tolerance or complete or attempt == MOST_ATTEMPTS - 1:
            break
        if attempt > 0 or all(c.count(cut) == c.most for c in candidates):
            # More of the same functions did not do: those that were missed join them.
            candidates = enriched(d, candidates, error.corrections)
        cut *= min(0.5, 0.5 * np.sqrt(settings.tolerance / error.pattern))
    if progress is not None:
        progress("port excitations", 1.0)
    return (
        PortCurrents(x, 0.5 * (admittance + admittance.T)),
        space,
        SolveStatistics(
            "reduced",
            "single" if dtype is np.complex64 else "double",
            d.n_unknowns,
            d.n_ports,
            error.residual,
            seconds=seconds,
            n_functions=space.size,
            pattern_error=error.pattern,
            port_matrix_error=error.port_matrix,
        ),
    )
