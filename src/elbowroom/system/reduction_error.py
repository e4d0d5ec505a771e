"""How far a reduced solution is from the full one on the same mesh, from its residual on all unknowns.

For the ports of some antennas the residual of the full system is worked out everywhere, and each antenna's own block turns it
into the currents that the functions left out.  Their far field against the embedded pattern's peak is the pattern error; their
reaction with the residual is the error of the port matrix.  What the skeletons themselves cost is measured on whole rows.
"""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.geometry.grounds import FreeSpace
from elbowroom.kernels.grounds import Workspace, ground_kernels
from elbowroom.system.assembly import PairFiller, available_cores, single_threaded_blas
from elbowroom.system.discretisation import Discretisation
from elbowroom.system.interactions import SkeletonInteractions
from elbowroom.system.plane_waves import direction_frame, kind_vectors, phases
from elbowroom.system.reduction import KindAnswers, sky_samples
from elbowroom.system.spaces import CurrentSpace

SAFETY = 2.0
"""Stated over measured error: ports that were not looked at may be worse than those that were."""

SAMPLED_ANTENNAS = 10
"""Antennas whose ports are looked at, those with the nearest neighbours among them."""

WHOLE_ROWS = 2
"""Antennas at which skeletons are held against all quadrature points."""


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
    """

    pattern: float
    port_matrix: float
    residual: float


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
    excitations: FloatArray | ComplexArray,
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
    excitations : (N, P)
        Right-hand sides of the unknowns.
    """
    d = discretisation
    sample = sampled_antennas(distances)
    ports = np.concatenate([np.arange(d.ports_of(a).start, d.ports_of(a).stop) for a in sample])
    currents = space.unknowns(d, coordinates[:, ports])
    residual = excitations[:, ports] - _product(d, interactions, filler, distances, answers, currents)
    correction = np.empty(residual.shape, dtype=complex)
    for a, k in enumerate(d.kind_of):
        correction[d.unknowns_of(a)] = answers.to(k, residual[d.unknowns_of(a)])
    pattern = float(np.max(_relative_fields(d, correction, currents)))
    skeleton = _skeleton_error(d, interactions, filler, distances, answers, currents, sample[:WHOLE_ROWS])
    admittance = excitations[:, ports].T @ currents
    port_matrix = np.linalg.norm(residual.T @ correction) / np.linalg.norm(admittance)
    size = np.linalg.norm(currents, axis=0)
    worst = float(np.max(np.linalg.norm(correction, axis=0) / size))
    return ReductionError(SAFETY * (pattern + skeleton), SAFETY * float(port_matrix) + skeleton, worst)


def _product(
    d: Discretisation,
    interactions: SkeletonInteractions,
    filler: PairFiller,
    distances: FloatArray,
    answers: KindAnswers,
    currents: ComplexArray,
) -> ComplexArray:
    """Return the loaded matrix of all unknowns times currents (N, R), other antennas through their skeletons."""
    n_antennas, ground, columns = len(d.station), ground_kernels(d.station.ground), currents.shape[1]
    levels = np.vectorize(interactions.skeletons.level_of, otypes=[int])(distances)
    fine = SkeletonInteractions(d, (None,) * len(d.kinds), interactions.skeletons)
    positions = d.station.positions
    out = np.empty_like(currents)
    # Sources of every antenna at every level: its currents gathered on its skeleton.
    sources: dict[tuple[int, int], tuple[FloatArray, FloatArray]] = {}

    def source(j: int, level: int) -> tuple[FloatArray, FloatArray]:
        key = (j, level)
        if key not in sources:
            w = fine.weights(d.kind_of[j], level)
            n, mine = w.count, currents[d.unknowns_of(j)]
            parts = [(w.source[:, c * n : (c + 1) * n] + 1j * w.source[:, (c + 3) * n : (c + 4) * n]) @ mine for c in range(3)]
            parts.append((w.source[:, 6 * n : 7 * n] + 1j * w.source[:, 7 * n :]) @ mine)
            flat = np.concatenate(parts, axis=1)
            points = w.points.copy()
            points[:2] += positions[j, :2, None]
            sources[key] = (points, np.concatenate([flat.real, flat.imag], axis=1))
        return sources[key]

    for level in range(len(interactions.skeletons.distances_m)):
        for j in range(n_antennas):
            if (levels[:, j] == level).any():
                source(j, level)

    def row(i: int) -> None:
        work = Workspace()
        total = answers.product(d.kind_of[i], currents[d.unknowns_of(i)])
        others = np.flatnonzero(np.arange(n_antennas) != i)
        for level in np.unique(levels[i, others]):
            chosen = others[levels[i, others] == level]
            if level < 0:
                for j in chosen:
                    low, high = min(i, int(j)), max(i, int(j))
                    block = filler.block(low, high, distances[i, j])
                    total += (block if low == j else block.T) @ currents[d.unknowns_of(j)]
                continue
            mine = fine.weights(d.kind_of[i], int(level))
            points = mine.points.copy()
            points[:2] += positions[i, :2, None]
            for first in range(0, len(chosen), 16):
                batch = [source(int(j), int(level)) for j in chosen[first : first + 16]]
                theirs = np.concatenate([b[0] for b in batch], axis=1)
                weights = np.concatenate([b[1] for b in batch])
                kernels = ground.fill(points, theirs, d.wavenumber, work)
                r = columns
                # Weights: x, y, charge, z currents, first all real parts, then all imaginary parts.
                field = np.empty((points.shape[1], 4, r), dtype=complex)
                for c, kernel in ((0, kernels.horizontal), (1, kernels.horizontal), (2, kernels.charge), (3, kernels.vertical)):
                    real, imag = weights[:, c * r : (c + 1) * r], weights[:, (c + 4) * r : (c + 5) * r]
                    field[:, c].real = kernel[0] @ real - kernel[1] @ imag
                    field[:, c].imag = kernel[0] @ imag + kernel[1] @ real
                total += 1j * (mine.test @ field.reshape(-1, r))
        out[d.unknowns_of(i)] = total

    with single_threaded_blas(), ThreadPoolExecutor(available_cores()) as pool:
        list(pool.map(row, range(n_antennas)))
    return out


def _relative_fields(d: Discretisation, correction: ComplexArray, currents: ComplexArray) -> FloatArray:
    """Return the largest far field of corrections (N, R) over that of the currents, (R,), over directions of the whole sky."""
    theta, phi = sky_samples(4.0 / d.wavenumber, d.wavenumber, isinstance(d.station.ground, FreeSpace))
    if not isinstance(d.station.ground, FreeSpace):
        # Level and upright currents have their nulls at the horizon and the zenith; neither end is left out.
        theta = np.minimum(theta, 0.5 * np.pi)
    rng = np.random.default_rng(theta.size)
    # Directions by chance beside the regular ones: the far field of a whole station has far finer structure.
    more = 160
    theta = np.concatenate([theta, np.arccos(rng.uniform(0.0, 1.0, more))])
    phi = np.concatenate([phi, rng.uniform(0.0, 2.0 * np.pi, more)])
    frame = direction_frame(theta, phi)
    ground = ground_kernels(d.station.ground)
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
    half = correction.shape[1]
    return size[:half] / size[half:]


def _skeleton_error(
    d: Discretisation,
    interactions: SkeletonInteractions,
    filler: PairFiller,
    distances: FloatArray,
    answers: KindAnswers,
    currents: ComplexArray,
    rows: np.ndarray,
) -> float:
    """Return the error of patterns that skeletons cause, from the whole rows of some antennas."""
    fine = SkeletonInteractions(d, (None,) * len(d.kinds), interactions.skeletons)
    worst = 0.0
    for i in rows:
        off = np.zeros((currents[d.unknowns_of(i)].shape), dtype=complex)
        for j in range(len(d.station)):
            level = interactions.skeletons.level_of(distances[i, j])
            if j == i or level < 0:
                continue
            low, high = min(int(i), j), max(int(i), j)
            full = filler.block(low, high, distances[i, j])
            short = fine.blocks(low, np.array([high]), level)[0]
            off += ((full - short) if low == j else (full - short).T) @ currents[d.unknowns_of(j)]
        correction = answers.to(d.kind_of[i], off)
        # Errors at different antennas add up by chance.
        share = np.linalg.norm(correction, axis=0) / np.linalg.norm(currents, axis=0)
        worst = max(worst, float(np.max(share)))
    return worst * np.sqrt(len(d.station))
