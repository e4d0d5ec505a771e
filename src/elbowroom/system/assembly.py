"""The impedance matrix of a whole station, antenna pair by antenna pair.

Pairs interact through currents sampled at Gauss points, with as many points as their distance asks for, so that a block
is a few small real matrix products around a matrix of kernels.  Pairs that nearly touch are integrated element by element.
Symmetry is used, and on regular layouts every displacement is computed once.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager
from dataclasses import dataclass
from threading import Lock, local

import numpy as np
from threadpoolctl import threadpool_limits

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.constants import IMPEDANCE_OF_VACUUM
from elbowroom.base.threads import loop_threads
from elbowroom.geometry.wires import segment_distances
from elbowroom.kernels.grounds import GroundKernels, Workspace
from elbowroom.kernels.quadrature import gauss_table
from elbowroom.kernels.reactions_numba import angled_moments_all
from elbowroom.system.discretisation import Discretisation, Kind, Samples, attachments
from elbowroom.system.factorisation import TiledSymmetric
from elbowroom.system.ground_blocks import ground_block, ring_samples
from elbowroom.system.self_block import expand_moments_between

TILE_ORDER = 768
"""Aimed-at order of a tile: large enough for matrix products at full rate, small enough for two to fit in cache."""

Progress = Callable[[str, float], None]
"""Called with the stage and the fraction of it that is done."""


@contextmanager
def single_threaded_blas() -> Iterator[None]:
    """Keep BLAS to one thread while our own threads work: two pools on the same cores fight."""
    with threadpool_limits(1, user_api="blas"):
        yield


def antenna_distances(discretisation: Discretisation) -> FloatArray:
    """Return the smallest distance between the wires of every pair of antennas, (A, A) [m].

    Pairs whose centres are farther apart than five times the larger antenna get the lower bound that their
    bounding spheres give, which is all that the choice of rules needs.
    """
    station = discretisation.station
    positions = station.positions
    reach = np.empty(len(discretisation.kinds))
    ends: list[tuple[FloatArray, FloatArray]] = []
    for k, kind in enumerate(discretisation.kinds):
        wires = np.array([[w.start, w.end] for w in kind.antenna.wires]) @ kind.orientation.T
        ends.append((wires[:, 0], wires[:, 1]))
        reach[k] = np.linalg.norm(wires.reshape(-1, 3), axis=1).max()
    radius = reach[discretisation.kind_of]
    separation = np.linalg.norm(positions[:, None] - positions[None, :], axis=2)
    distance = np.maximum(separation - radius[:, None] - radius[None, :], 0.0)
    for i in range(len(station)):
        a, b = ends[discretisation.kind_of[i]]
        others = np.flatnonzero(separation[i] < 5.0 * np.maximum(radius[i], radius))
        for j in others[others > i]:
            c, d = ends[discretisation.kind_of[j]]
            shift = positions[j] - positions[i]
            exact = segment_distances(a[:, None], b[:, None], c[None] + shift, d[None] + shift).min()
            distance[i, j] = distance[j, i] = exact
    np.fill_diagonal(distance, 0.0)
    return distance


@dataclass(frozen=True)
class _Weights:
    """Weights of one kind at one level, grouped by the kernel they meet.

    ``flat`` (K, N), K = components x Q; ``square`` (Q, components N) for the other side.
    """

    flat_horizontal: FloatArray
    flat_vertical: FloatArray
    square_horizontal: FloatArray
    square_vertical: FloatArray
    points: FloatArray


class PairFiller:
    """Computes interaction blocks between antennas of a discretised station."""

    def __init__(self, discretisation: Discretisation) -> None:
        self.discretisation = discretisation
        self.ground: GroundKernels = discretisation.ground
        self.positions = discretisation.station.positions
        self.longest = max(float(kind.mesh.length.max()) for kind in discretisation.kinds)
        self._weights: dict[tuple[int, int], _Weights] = {}
        self._lock = Lock()
        self._local = local()

    def level_of(self, distance: float) -> int:
        """Return the index of the Gauss rules for a pair at a distance [m]; -1 means element by element."""
        return int(np.searchsorted(self.discretisation.far.levels(), distance / self.longest, side="right")) - 1

    def samples(self, kind: int, level: int) -> Samples:
        """Return the Gauss points of a kind at a level."""
        d = self.discretisation
        distance = d.far.levels()[level] * self.longest
        return d.kinds[kind].samples(distance, d.wavenumber, d.far.tolerance)

    def _weights_of(self, kind: int, level: int) -> _Weights:
        key = (kind, level)
        with self._lock:
            found = self._weights.get(key)
        if found is not None:
            return found
        sampled = self.samples(kind, level)
        k = self.discretisation.wavenumber
        # Both factors are imaginary: Z = j (sum of real-weighted kernels).
        current = np.sqrt(k * IMPEDANCE_OF_VACUUM / (4.0 * np.pi))
        charge = np.sqrt(IMPEDANCE_OF_VACUUM / (4.0 * np.pi * k))
        x, y, z = (current * component for component in sampled.currents)
        q = charge * sampled.charge
        made = _Weights(
            flat_horizontal=np.ascontiguousarray(np.stack([x, y, -q], axis=1).reshape(-1, x.shape[1])),
            flat_vertical=z,
            square_horizontal=np.ascontiguousarray(np.concatenate([x, y, q], axis=1)),
            square_vertical=z,
            points=sampled.points,
        )
        with self._lock:
            return self._weights.setdefault(key, made)

    def sampled_blocks(self, i: int, others: np.ndarray, level: int) -> list[ComplexArray]:
        """Return the blocks (N_j, N_i) [ohm] of antenna i with some others, by Gauss points of one level."""
        d = self.discretisation
        if not hasattr(self._local, "work"):
            self._local.work = Workspace()
        work: Workspace = self._local.work
        mine = self._weights_of(d.kind_of[i], level)
        theirs = [self._weights_of(d.kind_of[j], level) for j in others]
        shift = self.positions[others] - self.positions[i]
        counts = [w.points.shape[1] for w in theirs]
        points = np.concatenate([w.points for w in theirs], axis=1)
        points[:2] += np.repeat(shift[:, :2], counts, axis=0).T
        # Kernels are filled with the long set of points innermost, where the compiled loop is fastest.
        kernels = self.ground.fill(mine.points, points, d.wavenumber, work)
        horizontal = np.swapaxes(kernels.horizontal, 1, 2) @ mine.square_horizontal
        vertical = np.swapaxes(kernels.vertical, 1, 2) @ mine.square_vertical
        blocks, first = [], 0
        n = mine.square_vertical.shape[1]
        # Kernels that are one and the same array are multiplied together.
        if kernels.charge is not kernels.horizontal:
            horizontal[..., 2 * n :] = np.swapaxes(kernels.charge, 1, 2) @ mine.square_horizontal[:, 2 * n :]
        if kernels.cross is not None:
            crossed = np.swapaxes(kernels.cross, 1, 2)
            horizontal[..., 2 * n :] += crossed @ (d.wavenumber * mine.square_vertical)
            vertical -= crossed @ (d.wavenumber * mine.square_horizontal[:, 2 * n :])
        for w, count in zip(theirs, counts, strict=True):
            part_h = horizontal[:, first : first + count].reshape(2, 3 * count, n)
            part_v = vertical[:, first : first + count]
            total = w.flat_horizontal.T @ part_h + w.flat_vertical.T @ part_v
            # times j: the real part of the sum is reactance.
            block = np.empty(total.shape[1:], dtype=complex)
            block.real, block.imag = -total[1], total[0]
            blocks.append(block)
            first += count
        return blocks

    def block(self, i: int, j: int, distance: float) -> ComplexArray:
        """Return the block (N_j, N_i) [ohm] of two antennas whose wires are a distance [m] apart."""
        level = self.level_of(distance)
        return self.close_block(i, j) if level < 0 else self.sampled_blocks(i, np.array([j]), level)[0]

    def close_block(self, i: int, j: int) -> ComplexArray:
        """Return the block (N_j, N_i) [ohm] of two antennas that nearly touch, element by element."""
        d = self.discretisation
        kind_i, kind_j = d.kinds[d.kind_of[i]], d.kinds[d.kind_of[j]]
        block = self._element_block(kind_j, self.positions[j], kind_i, self.positions[i], None)
        images = self.ground.self_images()
        if images is not None:
            block = block + self._element_block(kind_j, self.positions[j], kind_i, self.positions[i], images)
        if self.ground.has_correction:
            ends = [kind_j.placed_elements(self.positions[j]), kind_i.placed_elements(self.positions[i])]
            lowest = min(float(end[:, 2].min()) for pair in ends for end in pair)
            samples, samples2 = (
                ring_samples(kind.mesh, start, end, lowest, d.wavenumber, d.near.tolerance)
                for kind, (start, end) in zip((kind_j, kind_i), ends, strict=True)
            )
            block = block + ground_block(self.ground, samples, samples2, d.wavenumber)
        return block

    def _element_block(
        self,
        kind: Kind,
        position: FloatArray,
        kind2: Kind,
        position2: FloatArray,
        images: tuple[float, float, float] | None,
    ) -> ComplexArray:
        d = self.discretisation
        nodes, weights = gauss_table()
        start, end = kind.placed_elements(position)
        start2, end2 = kind2.placed_elements(position2)
        counts = (1.0, 1.0, 1.0)
        if images is not None:
            flip = np.array([1.0, 1.0, -1.0])
            start2, end2 = start2 * flip, end2 * flip
            # The mirrored tangent has its z reversed, which an unreversed vertical current undoes.
            counts = (images[0], -images[1], images[2])
        moments = np.empty(
            (kind.mesh.n_elements, kind2.mesh.n_elements, kind.mesh.order + 1, kind2.mesh.order + 1), dtype=complex
        )
        angled_moments_all(
            start, end, start2, end2, kind.mesh.radius, kind2.mesh.radius, d.wavenumber,
            d.near.tolerance, d.near.touching_points, nodes, weights, moments,
        )  # fmt: skip
        tangent = (end - start) / kind.mesh.length[:, None]
        tangent2 = (end2 - start2) / kind2.mesh.length[:, None]
        products = counts[0] * (tangent[:, None, :2] * tangent2[None, :, :2]).sum(-1)
        products = products + counts[1] * tangent[:, None, 2] * tangent2[None, :, 2]
        return expand_moments_between(kind.mesh, kind2.mesh, moments, products, counts[2], d.wavenumber)


def tile_groups(discretisation: Discretisation, tile_order: int = TILE_ORDER) -> list[range]:
    """Return runs of antennas whose unknowns fill about one tile each."""
    groups: list[range] = []
    first = 0
    offsets = discretisation.unknown_offsets
    for a in range(len(discretisation.station)):
        if offsets[a + 1] - offsets[first] > tile_order and a > first:
            groups.append(range(first, a))
            first = a
    groups.append(range(first, len(discretisation.station)))
    return groups


def unknown_scales(discretisation: Discretisation) -> FloatArray:
    """Return a factor (N,) for each unknown that makes the diagonal of the matrix of modulus one."""
    per_kind = [1.0 / np.sqrt(np.abs(np.diagonal(kind.self_block))) for kind in discretisation.kinds]
    return np.concatenate([per_kind[k] for k in discretisation.kind_of])


def _equal_displacements(discretisation: Discretisation) -> dict[tuple[int, int], list[tuple[int, int, bool]]] | None:
    """Map one pair (i, j) of each class to all pairs that share its block; None when the layout has no order.

    The flag says that the pair's block is the transpose of the first one's.
    """
    positions, kind_of = discretisation.station.positions, discretisation.kind_of
    rounded = np.round(positions / 1e-7).astype(np.int64)
    classes: dict[tuple, list[tuple[int, int, bool]]] = {}
    for i in range(len(positions)):
        for j in range(i + 1, len(positions)):
            step = (int(rounded[j, 0] - rounded[i, 0]), int(rounded[j, 1] - rounded[i, 1]))
            key = (int(kind_of[i]), int(kind_of[j]), *step)
            back = (int(kind_of[j]), int(kind_of[i]), -step[0], -step[1])
            if back < key:
                classes.setdefault(back, []).append((i, j, True))
            else:
                classes.setdefault(key, []).append((i, j, False))
    if 2 * len(classes) > len(positions) * (len(positions) - 1) // 2:
        return None
    result: dict[tuple[int, int], list[tuple[int, int, bool]]] = {}
    for pairs in classes.values():
        i0, j0, flag0 = pairs[0]
        result[i0, j0] = [(i, j, flag != flag0) for i, j, flag in pairs]
    return result


def assemble(
    discretisation: Discretisation,
    reference_ohm: float,
    *,
    tile_order: int = TILE_ORDER,
    progress: Progress | None = None,
    workers: int | None = None,
) -> tuple[TiledSymmetric, FloatArray]:
    """Return the station's impedance matrix with every port loaded, scaled to a unit diagonal.

    Parameters
    ----------
    discretisation : Discretisation
        The meshed station.
    reference_ohm : float
        Resistance across every port [ohm].
    tile_order : int, optional
        Order of the matrix's tiles.
    progress : callable, optional
        Told the stage and the fraction done.
    workers : int, optional
        Threads; all cores by default.

    Returns
    -------
    matrix : TiledSymmetric
        S Z S with S the scales; order N.
    scales : float64 (N,)
        The scales.
    """
    filler = PairFiller(discretisation)
    groups = tile_groups(discretisation, tile_order)
    offsets = discretisation.unknown_offsets
    matrix = TiledSymmetric([int(offsets[g.stop] - offsets[g.start]) for g in groups])
    scales = unknown_scales(discretisation)
    group_of = np.repeat(np.arange(len(groups)), [len(g) for g in groups])
    levels = np.vectorize(filler.level_of, otypes=[int])(antenna_distances(discretisation))
    shared = _equal_displacements(discretisation)
    n_antennas = len(discretisation.station)
    attached = attachments(discretisation, reference_ohm)

    def place(i: int, j: int, block: ComplexArray) -> None:
        tile = matrix.tiles[group_of[j], group_of[i]]
        top, left = offsets[groups[group_of[j]].start], offsets[groups[group_of[i]].start]
        rows, columns = discretisation.unknowns_of(j), discretisation.unknowns_of(i)
        scaled = scales[rows, None] * block * scales[None, columns]
        tile[rows.start - top : rows.stop - top, columns.start - left : columns.stop - left] = scaled
        if group_of[i] == group_of[j] and i != j:
            tile[columns.start - left : columns.stop - left, rows.start - top : rows.stop - top] = scaled.T

    def fill_row(i: int) -> None:
        kind = discretisation.kinds[discretisation.kind_of[i]]
        loaded = kind.self_block + attached[kind.antenna].structure(kind.mesh.gap_vectors)
        place(i, i, loaded)
        for group in groups:
            others = np.arange(max(group.start, i + 1), group.stop)
            if shared is not None:
                others = np.array([j for j in others if (i, int(j)) in shared], dtype=int)
            for level in np.unique(levels[i, others]):
                chosen = others[levels[i, others] == level]
                if level < 0:
                    blocks = [filler.close_block(i, int(j)) for j in chosen]
                else:
                    blocks = filler.sampled_blocks(i, chosen, int(level))
                for j, block in zip(chosen, blocks, strict=True):
                    if shared is None:
                        place(i, int(j), block)
                    else:
                        for a, b, transposed in shared[i, int(j)]:
                            place(a, b, block.T if transposed else block)

    workers = loop_threads() if workers is None else workers
    with single_threaded_blas(), ThreadPoolExecutor(workers) as pool:
        for done, _ in enumerate(pool.map(fill_row, range(n_antennas)), start=1):
            if progress is not None:
                progress("assemble", done / n_antennas)
    return matrix, scales
