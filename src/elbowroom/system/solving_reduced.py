"""Reduced solution of a station: functions in place of unknowns, skeletons in place of quadrature points, a stated error."""

from __future__ import annotations

import copy
import time
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace

import numpy as np

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.errors import GeometryError, SolveError
from elbowroom.base.threads import loop_threads
from elbowroom.geometry.stations import Station
from elbowroom.system.assembly import (
    TILE_ORDER,
    PairFiller,
    Progress,
    antenna_distances,
    single_threaded_blas,
)
from elbowroom.system.discretisation import Discretisation, attachments, extent_of
from elbowroom.system.factorisation import Factors, TiledSymmetric
from elbowroom.system.interactions import SkeletonInteractions, SkeletonTable
from elbowroom.system.reduction import Candidates, KindAnswers, ReductionSettings, enriched, reduced_candidates
from elbowroom.system.reduction_error import ReductionError, reduction_error, skeleton_error
from elbowroom.system.solving import REFERENCE_OHM, PortCurrents, SolveStatistics, kind_excitations
from elbowroom.system.spaces import CurrentSpace, reduced_space

BATCH_ANTENNAS = 12
"""Antennas whose kernels are filled at a time: few enough for the work arrays to stay in cache."""

SINGLE_TOLERANCE = 3e-5
"""Tolerance from which the reduced matrix is kept and factored in single precision."""

PILOT_ANTENNAS, MOST_PILOTS, PILOT_MARGIN = 8, 10, 0.25
"""Antennas on which the number of functions is tried, tries, and part of the tolerance that must be met there."""

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
    into: TiledSymmetric | None = None,
    only: frozenset[int] | None = None,
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
    into : TiledSymmetric, optional
        A matrix of the same functions to be filled in place.
    only : frozenset of int, optional
        If given, only rows and columns of these antennas are filled.
    """
    d, n_antennas = discretisation, len(discretisation.station)
    groups: list[range] = []
    first = 0
    for a in range(n_antennas):
        if space.offsets[a + 1] - space.offsets[first] > TILE_ORDER and a > first:
            groups.append(range(first, a))
            first = a
    groups.append(range(first, n_antennas))
    matrix = into or TiledSymmetric([int(space.offsets[g.stop] - space.offsets[g.start]) for g in groups], dtype)
    group_of = np.repeat(np.arange(len(groups)), [len(g) for g in groups])
    attached = attachments(d, reference_ohm)
    levels = interactions.skeletons.levels_of(distances)

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

    farthest = len(interactions.skeletons.distances_m) - 1

    def runs_after(i: int) -> Iterator[range]:
        """Give runs of antennas after i, each within one tile."""
        for group in groups:
            for first in range(max(group.start, i + 1), group.stop, BATCH_ANTENNAS):
                yield range(first, min(first + BATCH_ANTENNAS, group.stop))

    def fill_run(i: int, run: range) -> list[int]:
        """Fill the blocks of a run that the farthest level serves, all at once; return the antennas that are left."""
        silent = levels[i, run.start : run.stop] != farthest
        if farthest < 0 or 2 * int(silent.sum()) > len(run) or not interactions.alike(run):
            return list(run)
        block = interactions.run_of_blocks(i, run, farthest, silent)
        group, mine = groups[group_of[run.start]], groups[group_of[i]]
        tile = matrix.tiles[group_of[run.start], group_of[i]]
        top, left = space.offsets[group.start], space.offsets[mine.start]
        rows = slice(space.of(run.start).start - top, space.of(run.stop - 1).stop - top)
        columns = slice(space.of(i).start - left, space.of(i).stop - left)
        tile[rows, columns] = block
        if group_of[run.start] == group_of[i]:
            tile[columns, rows] = block.T
        return [j for j, left_out in zip(run, silent, strict=True) if left_out]

    def fill_row(i: int) -> None:
        place(i, i, own[d.kind_of[i]])
        others = np.arange(i + 1, n_antennas)
        if only is not None and i not in only:
            others = np.array([j for j in others if int(j) in only], dtype=int)
        if only is None and into is None:
            others = np.array([j for run in runs_after(i) for j in fill_run(i, run)], dtype=int)
        for level, chosen in _batches(others, levels[i, others]):
            if level >= 0:
                for j, block in zip(chosen, interactions.blocks(i, chosen, level), strict=True):
                    place(i, int(j), block)
                continue
            for j in chosen:
                full = filler.block(i, int(j), distances[i, j])
                place(i, int(j), space.bases[d.kind_of[j]].T @ full @ space.bases[d.kind_of[i]])  # type: ignore[union-attr]

    with single_threaded_blas(), ThreadPoolExecutor(loop_threads()) as pool:
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
    """Solve a station in a few functions of each antenna, and state the error; see :class:`ReducedStation`."""
    solved = ReducedStation(discretisation, settings, reference_ohm=reference_ohm, progress=progress)
    return solved.currents, solved.space, solved.statistics


def port_currents(
    discretisation: Discretisation,
    space: CurrentSpace,
    matrix: TiledSymmetric,
    excitations: list[tuple[FloatArray | ComplexArray, ComplexArray]],
    watch: Stopwatch | None = None,
) -> tuple[PortCurrents, Factors]:
    """Factor a reduced matrix in place and solve it for all ports.

    Parameters
    ----------
    discretisation : Discretisation
        The meshed station.
    space : CurrentSpace
        Functions of each kind.
    matrix : TiledSymmetric
        From :func:`assemble_reduced`; gone afterwards.
    excitations : list of ((N_k, P_k), (P_k, P_k))
        From :func:`elbowroom.system.solving.kind_excitations`.
    watch : Stopwatch, optional
        Told of the stages.
    """
    d = discretisation
    driven = [basis.T @ rows for basis, (rows, _) in zip(space.bases, excitations, strict=True)]  # type: ignore[union-attr]
    right = np.zeros((space.size, d.n_ports), dtype=matrix.dtype)
    for a, k in enumerate(d.kind_of):
        right[space.of(a), d.ports_of(a)] = driven[k]
    factors = matrix.factorise()
    if watch is not None:
        watch.lap("factorise")
    x = factors.solve(right).astype(np.complex128)
    # A port's source acts within its own antenna only.
    admittance = np.concatenate([driven[k].T @ x[space.of(a)] for a, k in enumerate(d.kind_of)])
    for a, k in enumerate(d.kind_of):
        admittance[d.ports_of(a), d.ports_of(a)] += excitations[k][1]
    if watch is not None:
        watch.lap("port excitations")
    return PortCurrents(x, 0.5 * (admittance + admittance.T)), factors


class Stopwatch:
    """Wall time of stages, one after another."""

    def __init__(self) -> None:
        self.seconds: dict[str, float] = {}
        self._clock = time.perf_counter()

    def lap(self, stage: str) -> None:
        """Count the time since the last call for a stage."""
        now = time.perf_counter()
        self.seconds[stage] = self.seconds.get(stage, 0.0) + now - self._clock
        self._clock = now


class ReducedStation:
    """A station solved in a few functions of each antenna, with a stated error; antennas can be moved afterwards.

    How many functions serve is tried on a few neighbouring antennas first.  Where the stated error of the whole station exceeds
    the tolerance all the same, more functions are taken and the station is solved again.

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
    movable : bool, optional
        Whether to keep the matrix beside its factors, so that :meth:`moved` need not fill it again.

    Attributes
    ----------
    currents : PortCurrents
        Currents in the coordinates of ``space``.
    space : CurrentSpace
        The functions.
    statistics : SolveStatistics
        Sizes, times and stated errors.

    Raises
    ------
    SolveError
        If the reduced matrix is singular or not finite.
    """

    currents: PortCurrents
    space: CurrentSpace
    statistics: SolveStatistics

    def __init__(
        self,
        discretisation: Discretisation,
        settings: ReductionSettings | None = None,
        *,
        reference_ohm: float = REFERENCE_OHM,
        progress: Progress | None = None,
        movable: bool = False,
    ) -> None:
        self._prepare(discretisation, settings or ReductionSettings(), reference_ohm, progress, movable)
        self.cut = self._pilot_cut()
        self.watch.lap("pilot")
        self._solve_until_good()

    def _prepare(
        self,
        discretisation: Discretisation,
        settings: ReductionSettings,
        reference_ohm: float,
        progress: Progress | None,
        movable: bool,
        candidates: list[Candidates] | None = None,
    ) -> None:
        """Make what any solve needs; candidates that are given serve in place of the station's own."""
        self.discretisation, self.settings = discretisation, settings
        self.reference_ohm, self.progress, self.movable = reference_ohm, progress, movable
        self.watch = Stopwatch()
        d = discretisation
        self.filler, self.distances, self.answers = PairFiller(d), antenna_distances(d), KindAnswers(d, reference_ohm)
        # Nearer than this, an element's Gauss points do not reach the tolerance however many they are.
        nearest = d.far.close_elements * self.filler.longest
        served = sorted({max(distance, nearest) for distance in self.settings.skeleton_distances_m})
        self.table = SkeletonTable(d, served, self.settings.skeleton_factor * self.settings.tolerance)
        if candidates is not None:
            self.candidates = candidates
        else:
            with single_threaded_blas():
                # Matrices of one antenna: threads of BLAS would cost more than they save.
                self.candidates = reduced_candidates(d, self.settings, self.filler, self.distances, self.answers, self.table)
        self.skeleton_error = skeleton_error(d, self.table, self.filler, self.distances, self.answers)
        # Single precision leaves about 1e-6 of a pattern, which a tighter tolerance would see.
        self.single = self.settings.tolerance >= SINGLE_TOLERANCE
        self.dtype: type = np.complex64 if self.single else np.complex128
        self.watch.lap("functions")

    def _tell(self, stage: str, fraction: float) -> None:
        if self.progress is not None:
            self.progress(stage, fraction)

    def _pilot_cut(self) -> float:
        """Return a cut whose functions serve a few antennas that stand closest together."""
        d, tolerance = self.discretisation, self.settings.tolerance
        cut = self.settings.cut_factor * np.sqrt(tolerance)
        if len(d.station) <= 2 * PILOT_ANTENNAS:
            return cut
        spread = np.where(np.eye(len(d.station), dtype=bool), np.inf, self.distances)
        middle = int(np.argmin(np.sort(spread, axis=1)[:, :3].sum(axis=1)))
        chosen = np.sort(np.argsort(self.distances[middle], kind="stable")[:PILOT_ANTENNAS])
        part = d.part(chosen)
        filler, table = PairFiller(part), self.table.of_station(part)
        distances = self.distances[np.ix_(chosen, chosen)]
        for _ in range(MOST_PILOTS):
            space = reduced_space(part, [c.cut(cut) for c in self.candidates])
            interactions = SkeletonInteractions(part, space.bases, table, single=self.single)
            with single_threaded_blas():
                matrix = assemble_reduced(part, space, interactions, filler, distances, self.reference_ohm, dtype=self.dtype)
                _, error = self._solved(part, space, interactions, filler, distances, matrix, 0.0)
            # A whole station gathers the errors of more neighbours than a few antennas do.
            if error.pattern <= PILOT_MARGIN * tolerance or all(c.count(cut) == c.most for c in self.candidates):
                break
            cut *= 0.7
        return cut

    def _solved(
        self,
        d: Discretisation,
        space: CurrentSpace,
        interactions: SkeletonInteractions,
        filler: PairFiller,
        distances: FloatArray,
        matrix: TiledSymmetric,
        skeleton: float,
        watch: Stopwatch | None = None,
    ) -> tuple[PortCurrents, ReductionError]:
        """Factor a reduced matrix in place, solve it for all ports and estimate the error."""
        excitations = kind_excitations(d, self.reference_ohm)
        currents, factors = port_currents(d, space, matrix, excitations, watch)
        x = currents.currents
        error = reduction_error(d, space, interactions, filler, distances, self.answers, x, excitations, factors, skeleton)
        if watch is not None:
            watch.lap("error estimate")
        return currents, error

    def _solve_until_good(self) -> None:
        d, tolerance = self.discretisation, self.settings.tolerance
        for attempt in range(MOST_ATTEMPTS):
            self.space = reduced_space(d, [c.cut(self.cut) for c in self.candidates])
            self.interactions = SkeletonInteractions(d, self.space.bases, self.table, single=self.single)
            self.interactions.prepare()
            self.watch.lap("skeletons")
            matrix = assemble_reduced(
                d, self.space, self.interactions, self.filler, self.distances, self.reference_ohm,
                dtype=self.dtype, progress=self.progress,
            )  # fmt: skip
            self.watch.lap("assemble")
            error = self._finish(matrix)
            complete = all(c.count(self.cut) == len(c.functions) for c in self.candidates)
            if error.pattern <= tolerance or complete or attempt == MOST_ATTEMPTS - 1:
                break
            if attempt > 0 or all(c.count(self.cut) == c.most for c in self.candidates):
                # More of the same functions did not do: those that were missed join them.
                self.candidates = enriched(d, self.candidates, error.corrections)
            self.cut *= min(0.5, 0.5 * np.sqrt(tolerance / error.pattern))
        self._tell("port excitations", 1.0)

    def _finish(self, matrix: TiledSymmetric) -> ReductionError:
        """Factor the whole matrix, solve it and keep what came out."""
        d = self.discretisation
        self.matrix = matrix.astype(self.dtype) if self.movable else None
        self._tell("factorise", 0.0)
        self.currents, error = self._solved(
            d, self.space, self.interactions, self.filler, self.distances, matrix, self.skeleton_error, self.watch
        )
        self.statistics = SolveStatistics(
            "reduced",
            "single" if self.dtype is np.complex64 else "double",
            d.n_unknowns,
            d.n_ports,
            float("nan"),
            seconds=dict(self.watch.seconds),
            n_functions=self.space.size,
            pattern_error=error.pattern,
            port_matrix_error=error.port_matrix,
        )
        return error

    def moved(self, places: dict[int, tuple[float, float]]) -> ReducedStation:
        """Return the station with some antennas shifted to other places in the plane, solved again.

        Only the rows and columns of these antennas are filled anew; factorisation, excitations and error estimate follow.  The
        functions stay as they are, and where they no longer serve, the stated error says so (``statistics.pattern_error``).

        Parameters
        ----------
        places : dict of int to (float, float)
            New east and north [m] of antennas by their index.

        Raises
        ------
        GeometryError
            If there is no such antenna, or a place is not finite.
        SolveError
            If the station was not solved with ``movable=True``.
        """
        if self.matrix is None:
            msg = "the matrix was not kept; solve with movable=True to move antennas afterwards"
            raise SolveError(msg)
        d = self.discretisation
        for index in places:
            if not 0 <= index < len(d.station):
                msg = f"no antenna {index}: expected 0 to {len(d.station) - 1}"
                raise GeometryError(msg)
        placed = [replace(p, position=(*places[i], p.position[2])) if i in places else p for i, p in enumerate(d.station)]
        other = copy.copy(self)
        other.watch = Stopwatch()
        station = Station(placed, d.station.ground)
        other.discretisation = replace(d, station=station, ground=d.ground.serving(extent_of(station)))
        other.filler, other.distances = PairFiller(other.discretisation), antenna_distances(other.discretisation)
        other.table = self.table.of_station(other.discretisation)
        other.interactions = SkeletonInteractions(other.discretisation, self.space.bases, other.table, single=self.single)
        # Antennas may now stand nearer to one another than any did.
        other.skeleton_error = skeleton_error(other.discretisation, other.table, other.filler, other.distances, other.answers)
        other.watch.lap("distances")
        matrix = self.matrix.astype(self.dtype)
        assemble_reduced(
            other.discretisation, self.space, other.interactions, other.filler, other.distances, self.reference_ohm,
            dtype=self.dtype, into=matrix, only=frozenset(places),
        )  # fmt: skip
        other.watch.lap("assemble")
        other._finish(matrix)
        return other
