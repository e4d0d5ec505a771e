"""How far a reduced solution is from the full one on the same mesh, from its residual on all unknowns.

For the ports of some antennas the residual of the full system is worked out everywhere, and each antenna's own block turns it
into the currents that the functions left out; what these do to the other antennas is answered by the reduced station.  The far
field of both against the embedded pattern's peak is the pattern error; their reaction with the residual is the error of the port
matrix.  What the skeletons themselves cost is measured on whole rows.
"""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.threads import loop_threads
from elbowroom.kernels.grounds import GroundKernels, Workspace
from elbowroom.system.assembly import PairFiller, single_threaded_blas
from elbowroom.system.discretisation import Discretisation
from elbowroom.system.factorisation import Factors
from elbowroom.system.interactions import SkeletonInteractions, SkeletonTable, carried_field, field_of_parts
from elbowroom.system.plane_waves import direction_frame, kind_vectors, phases
from elbowroom.system.reduction import KindAnswers, sky_samples
from elbowroom.system.spaces import CurrentSpace

SAFETY = 2.0
"""Stated over measured error: ports that were not looked at may be worse than those that were."""

SAMPLED_ANTENNAS = 8
"""Antennas whose ports are looked at, those with the nearest neighbours among them."""

FOLLOWED_ANTENNAS = 24
"""Antennas, those with the largest corrections, whose effect on the others is followed."""

BATCH = 16
"""Sounding antennas whose kernels are filled at a time: few enough for the work arrays to stay in cache."""

WHOLE_PAIRS = 6
"""Pairs at which skeletons are held against all quadrature points: those nearest to where each level begins to serve."""


@dataclass(frozen=True)
class ReductionError:
    """Stated error of a reduced solution.

    Attributes
    ----------
    pattern : float
        Of embedded patterns under the reference termination, relative to each one's peak.
    port_matrix : float
        Of the loaded admittance, relative to its norm over the sampled ports.
    residual : float
        Largest correction of an antenna's currents over the currents of the port.
    corrections : complex128 (N, R)
        Currents that the functions left out, for the sampled ports, as each antenna's own block answers the residual.
    """

    pattern: float
    port_matrix: float
    residual: float
    corrections: ComplexArray


def sampled_antennas(distances: FloatArray, count: int = SAMPLED_ANTENNAS) -> np.ndarray:
    """Return the antennas to look at: half of them those with the nearest neighbours, the others by chance."""
    n = len(distances)
    if n <= count:
        return np.arange(n)
    nearest = np.where(np.eye(n, dtype=bool), np.inf, distances).min(axis=1)
    closest = np.argsort(nearest, kind="stable")[: count // 2]
    others = np.setdiff1d(np.arange(n), closest)
    return np.sort(np.concatenate([closest, np.random.default_rng(n).choice(others, count - len(closest), replace=False)]))


def reduction_error(
    discretisation: Discretisation,
    space: CurrentSpace,
    interactions: SkeletonInteractions,
    filler: PairFiller,
    distances: FloatArray,
    answers: KindAnswers,
    coordinates: ComplexArray,
    excitations: list[tuple[FloatArray | ComplexArray, ComplexArray]],
    factors: Factors,
    skeleton: float,
) -> ReductionError:
    """Return the stated error of a reduced solution.

    Parameters
    ----------
    discretisation : Discretisation
        The meshed station, with self blocks.
    space : CurrentSpace
        Functions of each kind.
    interactions : SkeletonInteractions
        As used in the solution.
    filler : PairFiller
        Interactions of unknowns.
    distances : float64 (A, A)
        Smallest distances between wires [m].
    answers : KindAnswers
        Own blocks, loaded and factored.
    coordinates : complex128 (n, P)
        The solution.
    excitations : list of ((N_k, P_k), (P_k, P_k))
        Right-hand sides of each kind, from :func:`elbowroom.system.solving.kind_excitations`.
    factors : Factors
        Of the reduced matrix: they tell what its rounding does to all antennas together.
    skeleton : float
        Error that skeletons cause, from :func:`skeleton_error`.
    """
    d = discretisation
    sample = sampled_antennas(distances)
    ports = np.concatenate([np.arange(d.ports_of(a).start, d.ports_of(a).stop) for a in sample])
    drive: ComplexArray = np.zeros((d.n_unknowns, len(ports)), dtype=complex)
    for a in sample:
        drive[d.unknowns_of(a), np.isin(ports, np.arange(d.n_ports)[d.ports_of(a)])] = excitations[d.kind_of[a]][0]
    currents = space.unknowns(d, coordinates[:, ports])
    own = np.concatenate([answers.product(int(k), currents[d.unknowns_of(a)]) for a, k in enumerate(d.kind_of)])
    everyone = np.ones(len(d.station), dtype=bool)
    residual = drive - own - _from_others(d, interactions, filler, distances, currents, everyone)
    correction = np.empty(residual.shape, dtype=complex)
    strength = np.empty((len(d.station), len(ports)))
    with single_threaded_blas():
        for a, k in enumerate(d.kind_of):
            correction[d.unknowns_of(a)] = answers.to(int(k), residual[d.unknowns_of(a)])
            strength[a] = np.linalg.norm(correction[d.unknowns_of(a)], axis=0)
    # What the corrections do to other antennas, and rounding, is answered by the station in its functions.
    share = (strength / np.maximum(strength.max(axis=0), np.finfo(float).tiny)).max(axis=1)
    loud = np.zeros(len(share), dtype=bool)
    loud[np.argsort(-share, kind="stable")[:FOLLOWED_ANTENNAS]] = True
    induced = residual - _from_others(d, interactions, filler, distances, correction, loud)
    left = np.empty((space.size, len(ports)), dtype=complex)
    for a, k in enumerate(d.kind_of):
        basis, part = space.bases[k], induced[d.unknowns_of(a)]
        left[space.of(a)] = part if basis is None else basis.T @ part
    answered = correction
    correction = answered + space.unknowns(d, factors.solve(left).astype(np.complex128))
    pattern = float(np.max(_relative_fields(d, correction, currents)))
    admittance = drive.T @ currents
    # Functions are tested by themselves, so that currents and residual react on one another by rounding alone; what is left out
    # reacts with the residual.
    reaction = np.linalg.norm(currents.T @ residual) + np.linalg.norm(residual.T @ correction)
    port_matrix = reaction / np.linalg.norm(admittance)
    size = np.linalg.norm(currents, axis=0)
    worst = float(np.max(np.linalg.norm(correction, axis=0) / size))
    return ReductionError(SAFETY * (pattern + skeleton), SAFETY * float(port_matrix) + skeleton, worst, answered)


def _from_others(
    d: Discretisation,
    interactions: SkeletonInteractions,
    filler: PairFiller,
    distances: FloatArray,
    currents: ComplexArray,
    sounding: np.ndarray,
) -> ComplexArray:
    """Return the matrix of all unknowns without own blocks times the currents (N, R) of some antennas, through skeletons."""
    n_antennas, ground, table = len(d.station), d.ground, interactions.skeletons
    levels = table.levels_of(distances)
    out = np.empty_like(currents)
    dtype = Workspace(interactions.single).dtype
    # Every antenna's currents gathered on its skeleton, at each level at which another antenna hears it, one after another.
    heard: list[_Sources] = []
    for level in range(len(table.distances_m)):
        antennas = np.array([j for j in np.flatnonzero(sounding) if (levels[:, j] == level).any()], dtype=int)
        gathered = table.gathered_all(antennas, level, currents)
        flat = [w.reshape(len(w), -1) for w in gathered] or [np.zeros((0, 4 * currents.shape[1]), dtype=complex)]
        weights = np.concatenate(flat)
        points = [table.points(int(j), level) for j in antennas] or [np.zeros((3, 0))]
        heard.append(
            _Sources(
                antennas,
                np.concatenate([[0], np.cumsum([len(w) for w in gathered])]).astype(int),
                np.ascontiguousarray(np.concatenate(points, axis=1)),
                weights.real.astype(dtype),
                weights.imag.astype(dtype),
            )
        )

    def row(i: int) -> None:
        work = Workspace(interactions.single)
        own = d.unknowns_of(i)
        total = np.zeros((own.stop - own.start, currents.shape[1]), dtype=complex)
        for j in np.flatnonzero(sounding & (levels[i] < 0) & (np.arange(n_antennas) != i)):
            low, high = min(i, int(j)), max(i, int(j))
            block: ComplexArray = filler.block(low, high, distances[i, j])
            block = block if low == j else block.T
            total += block @ currents[d.unknowns_of(int(j))]
        for level, sources in enumerate(heard):
            counts = (levels[i, sources.antennas] == level) & (sources.antennas != i)
            if counts.any():
                field = sources.field(ground, table.points(i, level), counts, d.wavenumber, work)
                total += table.tested(i, level, field)
        out[own] = total

    with single_threaded_blas(), ThreadPoolExecutor(loop_threads()) as pool:
        list(pool.map(row, range(n_antennas)))
    return out


@dataclass(frozen=True, eq=False)
class _Sources:
    """Antennas that sound at one level: their skeletons and weights, one after another.

    Attributes
    ----------
    antennas : int (B,)
        Which.
    offsets : int (B+1,)
        Where the points of each begin.
    points : float64 (3, J)
        [m]
    real, imag : float (J, 4 R)
        Parts of the weights of x, y, charge and z.
    """

    antennas: np.ndarray
    offsets: np.ndarray
    points: FloatArray
    real: FloatArray
    imag: FloatArray

    def field(
        self, ground: GroundKernels, points: FloatArray, counts: np.ndarray, wavenumber: float, work: Workspace
    ) -> ComplexArray:
        """Return the field (M, 4, R) at points (3, M) of those antennas that count, (B,) true or false."""
        total = np.zeros((points.shape[1], 4, self.real.shape[1] // 4), dtype=complex)
        for first in range(0, len(self.antennas), BATCH):
            last = min(first + BATCH, len(self.antennas))
            here = counts[first:last]
            if not here.any():
                continue
            start, stop = int(self.offsets[first]), int(self.offsets[last])
            edges = self.offsets[first : last + 1] - start
            silent = np.concatenate([np.arange(0), *(np.arange(edges[q], edges[q + 1]) for q in np.flatnonzero(~here))])
            if here.sum() * 3 > last - first:
                rows: slice | np.ndarray = slice(start, stop)
            else:
                # Few of many: only theirs are worked out.
                rows = start + np.concatenate([np.arange(edges[q], edges[q + 1]) for q in np.flatnonzero(here)])
                silent = np.arange(0)
            theirs = np.ascontiguousarray(self.points[:, rows])
            total += field_of_parts(ground, points, theirs, self.real[rows], self.imag[rows], wavenumber, work, silent)
        return total


def _relative_fields(d: Discretisation, correction: ComplexArray, currents: ComplexArray) -> FloatArray:
    """Return the largest far field of corrections (N, R) over that of the currents, (R,), over the whole sky."""
    theta, phi = sky_samples(4.0 / d.wavenumber, d.wavenumber, d.station.ground.open_below)
    if not d.station.ground.open_below:
        # Level and upright currents have their nulls at the horizon and the zenith; neither end is left out.
        theta = np.minimum(theta, 0.5 * np.pi)
    rng = np.random.default_rng(theta.size)
    # Directions by chance beside the regular ones: the far field of a whole station has far finer structure.
    more = 160
    lowest = -1.0 if d.station.ground.open_below else 0.0
    theta = np.concatenate([theta, np.arccos(rng.uniform(lowest, 1.0, more))])
    phi = np.concatenate([phi, rng.uniform(0.0, 2.0 * np.pi, more)])
    frame = direction_frame(theta, phi)
    ground = d.ground
    both = np.concatenate([correction, currents], axis=1)
    total = np.zeros((both.shape[1], frame.count * 2), dtype=complex)
    positions = np.ascontiguousarray(d.station.positions * [1.0, 1.0, 0.0])
    for k, kind in enumerate(d.kinds):
        vectors = kind_vectors(kind, ground, frame, d.wavenumber)
        antennas = d.antennas_of(k)
        turn = phases(frame.unit, positions[antennas], d.wavenumber)
        for a, turned in zip(antennas, turn, strict=True):
            total += both[d.unknowns_of(a)].T @ (vectors * turned[None, :, None]).reshape(len(vectors), -1)
    size = np.sqrt(np.sum(np.abs(total.reshape(both.shape[1], frame.count, 2)) ** 2, axis=-1)).max(axis=1)
    split = size.reshape(2, -1)
    return np.asarray(split[0] / split[1])


def skeleton_error(
    discretisation: Discretisation,
    table: SkeletonTable,
    filler: PairFiller,
    distances: FloatArray,
    answers: KindAnswers,
) -> float:
    """Return the error of patterns that skeletons cause, from the pairs for which they are worst.

    What a skeleton gets wrong falls with distance from where its level begins, so these pairs stand above all others; what each
    antenna gets wrong by all its neighbours adds up by chance, as the errors at different antennas do.
    """
    d, ground = discretisation, discretisation.ground
    n = len(d.station)
    first, second = np.triu_indices(n, 1)
    levels = table.levels_of(distances[first, second])
    chosen: list[tuple[int, int, int, int]] = []
    for level in np.unique(levels[levels >= 0]):
        here = np.flatnonzero(levels == level)
        nearest = here[np.argsort(distances[first[here], second[here]], kind="stable")]
        most = max(1, WHOLE_PAIRS // len(table.distances_m))
        chosen += [(int(first[q]), int(second[q]), int(level), len(here)) for q in nearest[:most]]

    def share(pair: tuple[int, int, int, int]) -> tuple[int, float, int]:
        i, j, level, count = pair
        full = filler.block(i, j, distances[i, j])
        sizes = []
        for a, b, block in ((j, i, full), (i, j, full.T)):
            mine, theirs = answers.to_ports(int(d.kind_of[a])), answers.to_ports(int(d.kind_of[b]))
            weights, points = table.gathered(b, level, theirs), table.points(a, level)
            field = carried_field(ground, points, table.points(b, level), weights, d.wavenumber, Workspace())
            off = block @ theirs - table.tested(a, level, field)
            sizes.append(np.linalg.norm(answers.to(int(d.kind_of[a]), off)) / np.linalg.norm(mine))
        return level, float(max(sizes)), count

    total: dict[int, tuple[float, int]] = {}
    with single_threaded_blas(), ThreadPoolExecutor(loop_threads()) as pool:
        for level, size, count in pool.map(share, chosen):
            total[level] = (max(size, total.get(level, (0.0, 0))[0]), count)
    # Pairs of a level are spread over n antennas, and a pattern gathers the errors at all of them.
    return float(np.sqrt(sum(size**2 * count / n for size, count in total.values())))
