"""Interactions between antennas through their skeletons, for functions and for unknowns alike."""

from __future__ import annotations

from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from functools import cached_property
from threading import Lock, local

import numpy as np

from elbowroom.base.arrays import AnyComplexArray, ComplexArray, FloatArray
from elbowroom.base.constants import IMPEDANCE_OF_VACUUM
from elbowroom.base.threads import loop_threads
from elbowroom.geometry.mesh import Mesh
from elbowroom.kernels.grounds import GroundKernels, Workspace, distinct_kernels
from elbowroom.system.assembly import single_threaded_blas
from elbowroom.system.discretisation import Discretisation
from elbowroom.system.skeletons import Skeleton, skeleton_of


@dataclass(frozen=True)
class _SkeletonWeights:
    """Skeleton of one kind with the weights of its functions, in the station frame.

    Attributes
    ----------
    points : float64 (3, J)
        [m]; x and y relative to the antenna's place.
    source : float64 (J, 8 n)
        Real parts, then imaginary parts, of the weights of x, y current and charge (3 n each), then of z current (n each).
    test : complex (n, 4 J)
        Weights of x, y current, charge (negative), z current of each point, points slowest.
    count : int
        Number of functions n.
    wavenumber : float
        [rad/m]
    """

    points: FloatArray
    source: FloatArray
    test: AnyComplexArray
    count: int
    wavenumber: float

    @cached_property
    def crossed(self) -> FloatArray:
        """Parts of the weights (J, 4 n) that meet the cross kernel: of z current, then of charge, times the wavenumber."""
        n = self.count
        both = [self.source[:, 6 * n :], self.source[:, 2 * n : 3 * n], self.source[:, 5 * n : 6 * n]]
        return np.ascontiguousarray(np.concatenate(both, axis=1) * self.source.dtype.type(self.wavenumber))


class SkeletonInteractions:
    """Computes blocks between functions of antennas whose wires are farther apart than a smallest distance.

    Parameters
    ----------
    discretisation : Discretisation
        The meshed station.
    bases : sequence of complex128 (N, n) or None
        Functions of each kind; ``None`` for the unknowns themselves.
    skeletons : SkeletonTable
        Skeletons of each design.
    single : bool, optional
        Whether kernels and their products are in single precision.
    """

    def __init__(
        self,
        discretisation: Discretisation,
        bases: Sequence[ComplexArray | None],
        skeletons: SkeletonTable,
        *,
        single: bool = False,
    ) -> None:
        self.discretisation, self.bases, self.skeletons, self.single = discretisation, bases, skeletons, single
        self.ground: GroundKernels = discretisation.ground
        self.positions = discretisation.station.positions
        self._weights: dict[tuple[int, int], _SkeletonWeights] = {}
        self._lock = Lock()
        self._local = local()

    def prepare(self) -> None:
        """Make all skeletons and weights now, in threads."""
        levels = range(len(self.skeletons.distances_m))
        self.skeletons.prepare()
        with single_threaded_blas(), ThreadPoolExecutor(loop_threads()) as pool:
            pairs = [(int(k), level) for k in np.unique(self.discretisation.kind_of) for level in levels]
            list(pool.map(lambda pair: self.weights(*pair), pairs))

    def weights(self, kind: int, level: int) -> _SkeletonWeights:
        """Return the skeleton of a kind at a level with the weights of its functions, made once."""
        key = (kind, level)
        with self._lock:
            found = self._weights.get(key)
        if found is not None:
            return found
        made = self._made(kind, level)
        with self._lock:
            return self._weights.setdefault(key, made)

    def _made(self, kind: int, level: int) -> _SkeletonWeights:
        d, k = self.discretisation, self.discretisation.kinds[kind]
        skeleton = self.skeletons.of(kind, level)
        basis = self.bases[kind]
        currents, charge = skeleton.currents, skeleton.charge
        if basis is not None:
            currents, charge = currents @ basis, charge @ basis
        currents = np.einsum("ij,jqn->iqn", k.orientation, currents)
        x, y, z = np.sqrt(d.wavenumber * IMPEDANCE_OF_VACUUM / (4.0 * np.pi)) * currents
        q = np.sqrt(IMPEDANCE_OF_VACUUM / (4.0 * np.pi * d.wavenumber)) * charge
        level_parts = np.concatenate([x, y, q], axis=1)
        source = np.concatenate([level_parts.real, level_parts.imag, z.real, z.imag], axis=1)
        test = np.stack([x, y, -q, z], axis=1).reshape(-1, x.shape[1]).T
        points = skeleton.points @ k.orientation.T + [0.0, 0.0, k.height]
        kinds = (np.float32, np.complex64) if self.single else (np.float64, np.complex128)
        return _SkeletonWeights(
            np.ascontiguousarray(points.T),
            np.ascontiguousarray(source, dtype=kinds[0]),
            np.ascontiguousarray(test, dtype=kinds[1]),
            x.shape[1],
            d.wavenumber,
        )

    def alike(self, antennas: range) -> bool:
        """Return whether some antennas are of one design and mesh, so that their blocks have one shape."""
        d = self.discretisation
        kinds = {int(k) for k in d.kind_of[antennas.start : antennas.stop]}
        return len({(id(d.kinds[k].antenna), id(d.kinds[k].mesh)) for k in kinds}) == 1

    def run_of_blocks(self, i: int, antennas: range, level: int, silent: np.ndarray) -> ComplexArray:
        """Return the blocks of antenna i with antennas alike that follow one another, stacked: (sum of n_j, n_i) [ohm].

        Rows of those that are ``silent``, true for each antenna that this level does not serve, mean nothing.
        """
        d = self.discretisation
        theirs = [self.weights(int(d.kind_of[j]), level) for j in antennas]
        count = theirs[0].points.shape[1]
        points = np.concatenate([w.points for w in theirs], axis=1)
        shift = self.positions[antennas.start : antennas.stop, :2] - self.positions[i, :2]
        points[:2] += np.repeat(shift, count, axis=0).T
        field = self.radiated(i, points, level, np.flatnonzero(np.repeat(silent, count)))
        first = theirs[0].test
        tests = first if all(w.test is first for w in theirs) else np.stack([w.test for w in theirs])
        stacked = np.matmul(tests, field.reshape(len(antennas), 4 * count, -1))
        # Both factors of Z are imaginary: Z = j (sum of kernels).
        return np.asarray(1j * stacked.reshape(-1, stacked.shape[2]))

    def radiated(self, i: int, points: FloatArray, level: int, silent: np.ndarray | None = None) -> ComplexArray:
        """Return what the functions of antenna i give at points (3, M) [m]: (M, 4, n), as x, y, charge and z weights meet it."""
        if not hasattr(self._local, "work"):
            self._local.work = Workspace(self.single)
        mine = self.weights(self.discretisation.kind_of[i], level)
        n = mine.count
        kernels = self.ground.fill(mine.points, points, self.discretisation.wavenumber, self._local.work)
        if silent is not None and silent.size:
            for kernel in distinct_kernels(kernels):
                kernel[:, :, silent] = 0.0
        level_part = np.swapaxes(kernels.horizontal, 1, 2) @ mine.source[:, : 6 * n]
        if kernels.charge is not kernels.horizontal:
            charges = np.swapaxes(kernels.charge, 1, 2)
            for first in (2 * n, 5 * n):
                level_part[..., first : first + n] = charges @ mine.source[:, first : first + n]
        upright = np.swapaxes(kernels.vertical, 1, 2) @ mine.source[:, 6 * n :]
        if kernels.cross is not None:
            crossed = np.swapaxes(kernels.cross, 1, 2) @ mine.crossed
            for part, first in enumerate((2 * n, 5 * n)):
                level_part[..., first : first + n] += crossed[..., part * n : (part + 1) * n]
            upright -= crossed[..., 2 * n :]
        out = np.empty((points.shape[1], 4, n), dtype=np.complex64 if self.single else complex)
        flat = out.reshape(points.shape[1], 4 * n)
        flat.real[:, : 3 * n] = level_part[0, :, : 3 * n] - level_part[1, :, 3 * n :]
        flat.imag[:, : 3 * n] = level_part[0, :, 3 * n :] + level_part[1, :, : 3 * n]
        flat.real[:, 3 * n :] = upright[0, :, :n] - upright[1, :, n:]
        flat.imag[:, 3 * n :] = upright[0, :, n:] + upright[1, :, :n]
        return out

    def blocks(self, i: int, others: np.ndarray, level: int) -> list[ComplexArray]:
        """Return the blocks (n_j, n_i) [ohm] of antenna i with some others, through skeletons of one level."""
        d = self.discretisation
        theirs = [self.weights(d.kind_of[j], level) for j in others]
        counts = [w.points.shape[1] for w in theirs]
        points = np.concatenate([w.points for w in theirs], axis=1)
        points[:2] += np.repeat((self.positions[others] - self.positions[i])[:, :2], counts, axis=0).T
        field = self.radiated(i, points, level)
        blocks: list[ComplexArray] = []
        first = 0
        for w, count in zip(theirs, counts, strict=True):
            part = field[first : first + count].reshape(4 * count, -1)
            # Both factors of Z are imaginary: Z = j (sum of kernels).
            blocks.append(1j * (w.test @ part))
            first += count
        return blocks


class SkeletonTable:
    """Skeletons of each design and mesh of a station at each level, made when first needed.

    Parameters
    ----------
    discretisation : Discretisation
        The meshed station.
    distances_m : tuple of float
        Smallest distance between wires that each level serves, rising [m].
    tolerance : float
        Relative accuracy of the kernel.
    """

    def __init__(self, discretisation: Discretisation, distances_m: Sequence[float], tolerance: float) -> None:
        self.discretisation, self.tolerance = discretisation, tolerance
        self.distances_m = tuple(sorted(distances_m))
        self._made: dict[tuple[int, int, int], tuple[Mesh, Skeleton]] = {}
        self._lock = Lock()

    def of_station(self, discretisation: Discretisation) -> SkeletonTable:
        """Return the same skeletons for another station of the same kinds of antenna."""
        other = SkeletonTable(discretisation, self.distances_m, self.tolerance)
        other._made, other._lock = self._made, self._lock
        return other

    def level_of(self, distance: float) -> int:
        """Return the level that serves wires at a distance [m]; -1 where none does."""
        return int(self.levels_of(np.asarray(distance)))

    def levels_of(self, distances: FloatArray) -> np.ndarray:
        """Return the level that serves each of some distances [m]; -1 where none does."""
        return np.asarray(np.searchsorted(self.distances_m, distances, side="right")) - 1

    def prepare(self) -> None:
        """Make all skeletons now, in threads."""
        kinds = {(id(kind.antenna), id(kind.mesh)): k for k, kind in enumerate(self.discretisation.kinds)}
        with single_threaded_blas(), ThreadPoolExecutor(loop_threads()) as pool:
            list(pool.map(lambda pair: self.of(*pair), [(k, v) for k in kinds.values() for v in range(len(self.distances_m))]))

    def of(self, kind: int, level: int) -> Skeleton:
        """Return the skeleton of a kind's design at a level, in the antenna's own frame."""
        k = self.discretisation.kinds[kind]
        key = (id(k.antenna), id(k.mesh), level)
        with self._lock:
            found = self._made.get(key)
        if found is None:
            made = skeleton_of(k.antenna, k.mesh, self.discretisation.wavenumber, self.distances_m[level], self.tolerance)
            with self._lock:
                # The mesh is kept so that its identity stays its own.
                found = self._made.setdefault(key, (k.mesh, made))
        return found[1]

    def points(self, antenna: int, level: int) -> FloatArray:
        """Return the skeleton points of an antenna in the station frame, (3, J) [m]."""
        d = self.discretisation
        kind, place = d.kinds[d.kind_of[antenna]], d.station.placed[antenna].position
        own = self.of(int(d.kind_of[antenna]), level).points
        return np.ascontiguousarray((own @ kind.orientation.T + [place[0], place[1], kind.height]).T)

    def gathered(self, antenna: int, level: int, currents: ComplexArray) -> ComplexArray:
        """Return what currents (N, R) of an antenna are on its skeleton: x, y, charge, z weights (J, 4, R)."""
        d = self.discretisation
        kind, skeleton = d.kinds[d.kind_of[antenna]], self.of(int(d.kind_of[antenna]), level)
        current, charge = self._factors()
        along = np.einsum("ij,jqr->iqr", current * kind.orientation, skeleton.currents @ currents)
        return np.stack([along[0], along[1], charge * (skeleton.charge @ currents), along[2]], axis=1)

    def gathered_all(self, antennas: np.ndarray, level: int, currents: ComplexArray) -> list[ComplexArray]:
        """Return what currents (N of the station, R) are on the skeletons of some antennas, each (J, 4, R).

        Antennas of one design share their products, which are then large enough to be fast.
        """
        d = self.discretisation
        current, charge = self._factors()
        alike: dict[int, list[int]] = {}
        for position, a in enumerate(antennas):
            alike.setdefault(id(self.of(int(d.kind_of[a]), level)), []).append(position)
        out: list[ComplexArray] = [np.empty((0, 4, 0), dtype=complex)] * len(antennas)
        for positions in alike.values():
            skeleton = self.of(int(d.kind_of[antennas[positions[0]]]), level)
            stacked = np.concatenate([currents[d.unknowns_of(int(antennas[q]))] for q in positions], axis=1)
            n_points, columns = skeleton.n_points, currents.shape[1]
            weights = np.concatenate([skeleton.currents.reshape(3 * n_points, -1), skeleton.charge])
            product = (weights @ stacked).reshape(4, n_points, len(positions), columns)
            for number, q in enumerate(positions):
                orientation = d.kinds[d.kind_of[antennas[q]]].orientation
                made = np.empty((n_points, 4, columns), dtype=complex)
                along = np.einsum("ij,jqr->qir", current * orientation, product[:3, :, number])
                made[:, [0, 1, 3]] = along
                made[:, 2] = charge * product[3, :, number]
                out[q] = made
        return out

    def tested(self, antenna: int, level: int, field: ComplexArray) -> ComplexArray:
        """Return what fields (J, 4, R) at an antenna's skeleton induce along its unknowns, (N, R) [V]."""
        d = self.discretisation
        kind, skeleton = d.kinds[d.kind_of[antenna]], self.of(int(d.kind_of[antenna]), level)
        current, charge = self._factors()
        along = np.einsum("ij,qir->jqr", current * kind.orientation, field[:, [0, 1, 3]])
        induced = skeleton.currents[0].T @ along[0] - charge * (skeleton.charge.T @ field[:, 2])
        for axis in (1, 2):
            induced += skeleton.currents[axis].T @ along[axis]
        # Both factors of Z are imaginary: Z = j (sum of kernels).
        return np.asarray(1j * induced)

    def _factors(self) -> tuple[float, float]:
        k = self.discretisation.wavenumber
        return float(np.sqrt(k * IMPEDANCE_OF_VACUUM / (4.0 * np.pi))), float(np.sqrt(IMPEDANCE_OF_VACUUM / (4.0 * np.pi * k)))


def carried_field(
    ground: GroundKernels,
    points: FloatArray,
    sources: FloatArray,
    weights: ComplexArray,
    wavenumber: float,
    work: Workspace,
) -> ComplexArray:
    """Return the fields (M, 4, R) at points (3, M) of weights (J, 4, R) at sources (3, J), in x, y, charge and z."""
    flat = weights.reshape(len(weights), -1)
    return field_of_parts(ground, points, sources, flat.real.astype(work.dtype), flat.imag.astype(work.dtype), wavenumber, work)


def field_of_parts(
    ground: GroundKernels,
    points: FloatArray,
    sources: FloatArray,
    real: FloatArray,
    imag: FloatArray,
    wavenumber: float,
    work: Workspace,
    silent: np.ndarray | None = None,
) -> ComplexArray:
    """Return the fields (M, 4, R) of weights whose parts are (J, 4 R) each; ``silent`` are sources that count nothing."""
    kernels = ground.fill(points, sources, wavenumber, work)
    columns = real.shape[1] // 4
    if silent is not None and silent.size:
        for kernel in distinct_kernels(kernels):
            # A source may stand on a point; what the kernel is there must not enter.
            kernel[:, :, silent] = 0.0
    out = np.empty((points.shape[1], 4 * columns), dtype=complex)
    parts = [(0, 3, kernels.horizontal), (3, 4, kernels.vertical)]
    if kernels.charge is not kernels.horizontal:
        parts = [(0, 2, kernels.horizontal), (2, 3, kernels.charge), (3, 4, kernels.vertical)]
    for first, last, kernel in parts:
        own = slice(first * columns, last * columns)
        out.real[:, own] = kernel[0] @ real[:, own] - kernel[1] @ imag[:, own]
        out.imag[:, own] = kernel[0] @ imag[:, own] + kernel[1] @ real[:, own]
    if kernels.cross is not None:
        cross = kernels.cross
        charge, upright = slice(2 * columns, 3 * columns), slice(3 * columns, 4 * columns)
        for target, source, sign in ((charge, upright, wavenumber), (upright, charge, -wavenumber)):
            out.real[:, target] += sign * (cross[0] @ real[:, source] - cross[1] @ imag[:, source])
            out.imag[:, target] += sign * (cross[0] @ imag[:, source] + cross[1] @ real[:, source])
    return out.reshape(points.shape[1], 4, columns)
