"""A few functions for each antenna in place of its unknowns: macro basis functions, cut by a tolerance.

They are the antenna's own answers to all that can excite it in the station: its ports, the fields of its nearest neighbours as
they stand there, and plane waves from the whole sky, the horizon included.  Port quantities err by the product of two errors of
the currents; with plane waves among the answers, so do patterns.  The answers are weighed against one another by how strongly
they occur, made orthogonal in the mean square of current and charge along the wires, and cut where what is left out is smaller
than the tolerance asks for.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.linalg import cholesky, lu_factor, lu_solve, solve_triangular

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.errors import ModelRangeError
from elbowroom.geometry.mesh import Mesh
from elbowroom.kernels.basis import overlap_matrix, slope_coefficients
from elbowroom.kernels.grounds import Workspace
from elbowroom.system.assembly import PairFiller
from elbowroom.system.discretisation import Discretisation, attachments
from elbowroom.system.interactions import SkeletonTable, carried_field
from elbowroom.system.plane_waves import direction_frame, kind_vectors


@dataclass(frozen=True)
class ReductionSettings:
    """Accuracy of the reduced solver.

    Parameters
    ----------
    tolerance : float
        Error of every embedded pattern that is aimed at, relative to its own peak; 1e-5 to 1e-1.
    cut_factor : float
        Functions are dropped once what they carry is below this times the square root of the tolerance: pattern errors are
        products of two current errors.
    neighbour_pairs : int
        Nearest pairs of antennas of each design whose fields are among the answers.
    skeleton_factor : float
        Tolerance of interactions between antennas, as a part of the tolerance.
    skeleton_distances_m : tuple of float
        Distances between wires from which each set of skeletons serves [m]; nearer pairs are done in full, all if there are none.

    Raises
    ------
    ModelRangeError
        If the tolerance is out of range or another number makes no sense.
    """

    tolerance: float = 1e-3
    cut_factor: float = 0.4
    neighbour_pairs: int = 24
    skeleton_factor: float = 0.05
    skeleton_distances_m: tuple[float, ...] = (0.1, 0.3, 1.0)

    def __post_init__(self) -> None:
        if not 1e-6 <= self.tolerance <= 0.1:
            msg = f"tolerance {self.tolerance!r}: expected 1e-6 to 0.1"
            raise ModelRangeError(msg)
        for key in ("cut_factor", "skeleton_factor"):
            if not 0.0 < getattr(self, key) < np.inf:
                msg = f"{key} {getattr(self, key)!r}: expected a positive number"
                raise ModelRangeError(msg)
        if self.neighbour_pairs < 0:
            msg = f"neighbour_pairs {self.neighbour_pairs!r}: expected none or more"
            raise ModelRangeError(msg)
        if not all(0.0 < distance < np.inf for distance in self.skeleton_distances_m):
            msg = f"skeleton_distances_m {self.skeleton_distances_m!r}: expected positive distances"
            raise ModelRangeError(msg)


def current_weights(mesh: Mesh, wavenumber: float) -> FloatArray:
    """Return the matrix (N, N) of the mean square of current plus that of charge over k^2, along the wires [m].

    The norm in which the energy of both the magnetic and the electric near field is of one size.
    """
    currents = overlap_matrix(mesh.order)
    slopes = slope_coefficients(mesh.order)
    charges = slopes @ np.diag(2.0 / (2.0 * np.arange(mesh.order + 1) + 1.0)) @ slopes.T
    total = np.zeros((mesh.n_unknowns, mesh.n_unknowns))
    for e in range(mesh.n_elements):
        half = 0.5 * mesh.length[e]
        local = half * currents + charges / (half * wavenumber**2)
        total += mesh.expansion[e].T @ local @ mesh.expansion[e]
    return total


def sky_samples(radius: float, wavenumber: float, whole_sphere: bool) -> tuple[FloatArray, FloatArray]:
    """Return zenith angles and azimuths [rad] that resolve every plane wave an antenna of that radius [m] can tell apart."""
    degree = int(np.ceil(wavenumber * radius)) + 6
    step = np.pi / degree
    last = np.pi if whole_sphere else 0.5 * np.pi
    theta, phi = [], []
    for t in np.linspace(0.0, last, int(np.ceil(last / step)) + 1):
        count = max(1, int(np.ceil(2.0 * degree * np.sin(t))))
        theta += [t] * count
        phi += list(2.0 * np.pi * np.arange(count) / count + t)
    return np.array(theta), np.array(phi)


ALIKE = 0.8
"""Ratio from which two functions carry about the same."""


@dataclass(frozen=True, eq=False)
class Candidates:
    """Functions of one kind in the order of what they carry, before they are cut.

    Attributes
    ----------
    functions : complex128 (N, n)
        Orthonormal in the norm of :func:`current_weights`.
    carried : float64 (n,)
        What each carries of the answers, falling, relative to the first.
    fewest : int
        Number below which a basis is never cut: its ports.
    """

    functions: ComplexArray
    carried: FloatArray
    fewest: int

    @property
    def most(self) -> int:
        """Number of functions there are."""
        return self.functions.shape[1]

    def count(self, cut: float) -> int:
        """Return how many carry more than a part of the first; functions that carry about the same stay together.

        Polarisations of one antenna come in pairs, and half a pair serves one of them and not the other.
        """
        count = max(self.fewest, int(np.count_nonzero(self.carried > cut)))
        while count < self.most and self.carried[count] > ALIKE * self.carried[count - 1]:
            count += 1
        return count

    def cut(self, cut: float) -> ComplexArray:
        """Return the functions that carry more than a part of the first, (N, n)."""
        return np.ascontiguousarray(self.functions[:, : self.count(cut)])


def reduced_candidates(
    discretisation: Discretisation,
    settings: ReductionSettings,
    filler: PairFiller,
    distances: FloatArray,
    answers: KindAnswers,
    table: SkeletonTable,
) -> list[Candidates]:
    """Return the candidates of each kind of antenna, the same for all kinds of one design and mesh.

    Parameters
    ----------
    discretisation : Discretisation
        The meshed station, with self blocks.
    settings : ReductionSettings
        Accuracy.
    filler : PairFiller
        Interactions of unknowns.
    distances : float64 (A, A)
        Smallest distances between wires of antennas [m].
    answers : KindAnswers
        What each kind answers to excitations.
    table : SkeletonTable
        Skeletons, by which neighbours are heard.
    """
    d = discretisation
    # Equal designs share a mesh, and must share functions as they share own blocks, though they be told apart as objects.
    groups: dict[int, list[int]] = {}
    for k, kind in enumerate(d.kinds):
        groups.setdefault(id(kind.mesh), []).append(k)
    found: dict[int, Candidates] = {}
    for kinds in groups.values():
        made = _candidates_of(d, kinds, answers, settings, filler, distances, table)
        found |= dict.fromkeys(kinds, made)
    return [found[k] for k in range(len(d.kinds))]


def enriched(discretisation: Discretisation, candidates: Sequence[Candidates], corrections: ComplexArray) -> list[Candidates]:
    """Return candidates that also hold what a solution in them was found to miss.

    Antennas that nearly touch excite one another by fields that neither ports nor plane waves nor driven neighbours make.

    Parameters
    ----------
    discretisation : Discretisation
        The meshed station.
    candidates : sequence of Candidates
        One for each kind, shared by the kinds of a design.
    corrections : complex128 (N, R)
        Currents left out; the largest of them counts as much as a port.
    """
    d = discretisation
    groups: dict[int, list[int]] = {}
    for k, candidate in enumerate(candidates):
        groups.setdefault(id(candidate), []).append(k)
    missed: list[tuple[list[int], FloatArray, ComplexArray]] = []
    for kinds in groups.values():
        root = cholesky(current_weights(d.kinds[kinds[0]].mesh, d.wavenumber), lower=False)
        mine = [corrections[d.unknowns_of(int(a))] for a in np.flatnonzero(np.isin(d.kind_of, kinds))]
        missed.append((kinds, root, root @ np.concatenate(mine, axis=1)))
    largest = max(np.linalg.norm(part, axis=0).max() for _, _, part in missed)
    found: dict[int, Candidates] = {}
    for kinds, root, part in missed:
        old = candidates[kinds[0]]
        known = (root @ old.functions) * old.carried
        left, size, _ = np.linalg.svd(np.concatenate([known, part / largest], axis=1), full_matrices=False)
        useful = int(np.count_nonzero(size > 1e-12 * size[0]))
        made = Candidates(solve_triangular(root, left[:, :useful]), size[:useful] / size[0], min(useful, old.fewest))
        found |= dict.fromkeys(kinds, made)
    return [found[k] for k in range(len(candidates))]


class KindAnswers:
    """What antennas of each kind, loaded at their ports and alone over the ground, answer to excitations."""

    def __init__(self, discretisation: Discretisation, reference_ohm: float) -> None:
        self.discretisation = discretisation
        self.attached = attachments(discretisation, reference_ohm)
        self._factors: dict[int, tuple] = {}
        self._ports: dict[int, ComplexArray] = {}

    def factors(self, kind: int) -> tuple:
        """Return the LU factors of the kind's own loaded block."""
        k = self.discretisation.kinds[kind]
        # Kinds that are turned only share their block.
        key = id(k.self_block)
        if key not in self._factors:
            self._factors[key] = lu_factor(k.self_block + self.attached[k.antenna].structure(k.mesh.gap_vectors))
        return self._factors[key]

    def to(self, kind: int, excitation: ComplexArray | FloatArray) -> ComplexArray:
        """Return the currents (N, R) that excitations (N, R) drive."""
        factors, pivots = self.factors(kind)
        # LAPACK's wrapper counts the pivots up and down in place while it works: threads need copies of their own.
        return lu_solve((factors, pivots.copy()), np.asarray(excitation, dtype=complex))

    def product(self, kind: int, currents: ComplexArray) -> ComplexArray:
        """Return the kind's own loaded block times currents (N, R)."""
        k = self.discretisation.kinds[kind]
        vectors, ports = k.mesh.gap_vectors, self.attached[k.antenna]
        return np.asarray(k.self_block @ currents + vectors.T @ (ports.loading @ (vectors @ currents)))

    def to_ports(self, kind: int) -> ComplexArray:
        """Return the currents (N, P) of the kind's own port sources."""
        k = self.discretisation.kinds[kind]
        key = id(k.self_block)
        if key not in self._ports:
            self._ports[key] = self.to(kind, self.attached[k.antenna].excitations(k.mesh.gap_vectors))
        return self._ports[key]


def _distinct_blocks(discretisation: Discretisation, kinds: list[int], most: int = 6) -> list[int]:
    """Return a few kinds of one design whose own blocks differ, evenly taken from them all."""
    d = discretisation
    seen: dict[tuple, int] = {}
    for k in kinds:
        place = d.station.placed[int(d.antennas_of(k)[0])]
        level = place.tilt_east_deg == 0.0 and place.tilt_north_deg == 0.0
        seen.setdefault((round(d.kinds[k].height, 9), None if level else place.attitude), k)
    found = list(seen.values())
    return found if len(found) <= most else [found[i] for i in np.linspace(0, len(found) - 1, most).astype(int)]


def _candidates_of(
    d: Discretisation,
    kinds: list[int],
    answers: KindAnswers,
    settings: ReductionSettings,
    filler: PairFiller,
    distances: FloatArray,
    table: SkeletonTable,
) -> Candidates:
    mesh = d.kinds[kinds[0]].mesh
    root = cholesky(current_weights(mesh, d.wavenumber), lower=False)
    ends = np.concatenate([mesh.start, mesh.end])
    radius = 0.5 * float(np.max(np.linalg.norm(ends - ends.mean(axis=0), axis=1))) * 2.0
    theta, phi = sky_samples(radius, d.wavenumber, d.station.ground.open_below)
    frame = direction_frame(theta, phi)
    parts: list[ComplexArray] = []
    for k in _distinct_blocks(d, kinds):
        ports = root @ answers.to_ports(k)
        parts.append(ports / np.linalg.norm(ports, axis=0).max())
        waves = kind_vectors(d.kinds[k], filler.ground, frame, d.wavenumber)
        answered = root @ answers.to(k, waves.reshape(len(waves), -1))
        # The strongest plane wave counts as much as a port: patterns need it as well as port quantities need the port.
        parts.append(answered / np.linalg.norm(answered, axis=0).max())
    parts += _neighbour_answers(d, kinds, answers, settings, filler, distances, root, table)
    left, size, _ = np.linalg.svd(np.concatenate(parts, axis=1), full_matrices=False)
    # Rounding leaves nothing of use below this.
    useful = int(np.count_nonzero(size > 1e-12 * size[0]))
    functions = solve_triangular(root, left[:, :useful])
    return Candidates(functions, size[:useful] / size[0], min(useful, answers.to_ports(kinds[0]).shape[1]))


def _neighbour_answers(
    d: Discretisation,
    kinds: list[int],
    answers: KindAnswers,
    settings: ReductionSettings,
    filler: PairFiller,
    distances: FloatArray,
    root: FloatArray,
    table: SkeletonTable,
) -> list[ComplexArray]:
    """Return the currents that the nearest antennas, driven at their ports, induce in antennas of some kinds, in the norm."""
    mine = np.flatnonzero(np.isin(d.kind_of, kinds))
    pairs: list[tuple[float, int, int]] = []
    for a in mine:
        nearest = np.argsort(distances[a])[: settings.neighbour_pairs + 1]
        pairs += [(float(distances[a, b]), int(a), int(b)) for b in nearest if b != a]
    parts: list[ComplexArray] = []
    work = Workspace()
    for distance, i, j in sorted(pairs)[: settings.neighbour_pairs]:
        source, level = answers.to_ports(int(d.kind_of[j])), table.level_of(distance)
        if level < 0:
            excitation: ComplexArray = filler.block(j, i, distance) @ source
        else:
            weights, points = table.gathered(j, level, source), table.points(i, level)
            field = carried_field(filler.ground, points, table.points(j, level), weights, d.wavenumber, work)
            excitation = table.tested(i, level, field)
        induced = root @ answers.to(int(d.kind_of[i]), -excitation)
        own = root @ answers.to_ports(int(d.kind_of[i]))
        parts.append(induced / np.linalg.norm(own, axis=0).max())
    return parts
