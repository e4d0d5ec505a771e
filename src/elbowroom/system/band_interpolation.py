r"""Impedance matrices between the frequencies at which they were assembled.

Between antennas i and j the product :math:`f Z_{ij}(f) \exp(jkd_{ij})`, with d the distance of their places, has no phase left
but that of paths across the antennas themselves, and no pole: on a mesh and in functions that are held, it is a polynomial in
frequency for all purposes, unless the ground resonates or guides waves (`elbowroom.system.band_ground`).  The same holds for an
antenna's own block without loss, loads and networks, which are put back as they are at each frequency.  Nodes are the extrema of
a Chebyshev polynomial, ends included; own blocks, in which potentials of current and charge nearly cancel, have up to twice as
many intervals.

References
----------
.. [1] J.-P. Berrut, L. N. Trefethen, "Barycentric Lagrange interpolation", SIAM Review 46 (2004) 501-517.
.. [2] L. N. Trefethen, Approximation Theory and Approximation Practice, SIAM, 2013, chapter 8 (error bounds).
"""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace

import numpy as np

from elbowroom.base.arrays import AnyComplexArray, ComplexArray, FloatArray
from elbowroom.base.constants import SPEED_OF_LIGHT
from elbowroom.base.errors import ModelRangeError
from elbowroom.base.threads import loop_threads
from elbowroom.geometry.antennas import Antenna
from elbowroom.geometry.mesh import Mesh
from elbowroom.geometry.stations import Station
from elbowroom.kernels.basis import overlap_matrix
from elbowroom.system.assembly import single_threaded_blas
from elbowroom.system.discretisation import Discretisation, Kind, attachments
from elbowroom.system.factorisation import TiledSymmetric
from elbowroom.system.networks import attach_ports
from elbowroom.system.self_block import internal_impedance
from elbowroom.system.spaces import CurrentSpace


def band_nodes(low_hz: float, high_hz: float, intervals: int) -> FloatArray:
    """Return the extrema of the Chebyshev polynomial of a degree on a band, rising, (intervals + 1,) [Hz]."""
    nodes = 0.5 * (low_hz + high_hz) - 0.5 * (high_hz - low_hz) * np.cos(np.pi * np.arange(intervals + 1) / intervals)
    nodes[0], nodes[-1] = low_hz, high_hz
    return nodes


def node_weights(nodes: FloatArray, frequency_hz: float) -> FloatArray:
    """Return what each node counts in the polynomial through all, at a frequency; for nodes of :func:`band_nodes`.

    Raises
    ------
    ModelRangeError
        If the frequency lies outside the nodes.
    """
    span = nodes[-1] - nodes[0]
    if not nodes[0] - 1e-9 * span <= frequency_hz <= nodes[-1] + 1e-9 * span:
        msg = f"{frequency_hz:.12g} Hz lies outside the segment, {nodes[0]:.12g} to {nodes[-1]:.12g} Hz"
        raise ModelRangeError(msg)
    offset = frequency_hz - nodes
    here = np.abs(offset) < 1e-12 * span
    if here.any():
        return here.astype(float)
    weights = (-1.0) ** np.arange(len(nodes))
    weights[[0, -1]] *= 0.5
    weights = weights / offset
    return np.asarray(weights / weights.sum())


def intervals_for(span_hz: float, reach_m: float, tolerance: float) -> int:
    r"""Return the even number of intervals at which interpolation over a band is good to a relative tolerance.

    A phase :math:`\exp(-jk s)` with path s up to the reach deviates by no more than
    :math:`2 (\theta/2)^{n+1}/(n+1)!` from the polynomial of degree n through Chebyshev nodes, where
    :math:`\theta` is half the turn of its phase over the band.
    """
    half = np.pi * span_hz * reach_m / SPEED_OF_LIGHT
    bound, n = 2.0, 0
    while n < 2 or bound > tolerance or n % 2:
        n += 1
        bound = 2.0
        for factor in range(1, n + 2):
            bound *= 0.5 * half / factor
    return n


def reach_of(station: Station) -> float:
    """Return the extra path [m] over the distance of their places that waves between antennas are planned with.

    From one end of an antenna to another and past the image, which is the largest over free space and images; over layers, down
    through them and back once in addition.  Left out are waves that run in the ground or along its layers, slower than in air
    over all of the distance, and echoes of echoes: `elbowroom.system.band_ground` sees whether they count.
    """
    reach = 0.0
    seen: set[tuple] = set()
    for placed in station:
        key = (id(placed.antenna), placed.tilt_east_deg, placed.tilt_north_deg, placed.position[2])
        if key in seen:
            continue
        seen.add(key)
        ends = np.array([[w.start, w.end] for w in placed.antenna.wires]).reshape(-1, 3) @ placed.orientation.T
        sideways = float(np.linalg.norm(ends[:, :2], axis=1).max())
        upright = float(np.ptp(ends[:, 2]))
        if not station.ground.open_below:
            upright = 2.0 * float(ends[:, 2].max() + placed.position[2])
        reach = max(reach, float(np.hypot(2.0 * sideways, upright)))
    return reach + station.ground.echo_path_m


class _Losses:
    """Wire loss and loads of one design on one mesh, quick at any frequency: few materials, one number each to be worked out.

    The sums are those of :func:`elbowroom.system.self_block.loss_and_loads`.

    Parameters
    ----------
    antenna : Antenna
        The design.
    mesh : Mesh
        Its elements.
    """

    def __init__(self, antenna: Antenna, mesh: Mesh) -> None:
        self.antenna = antenna
        self.loads: ComplexArray | FloatArray = mesh.load_vectors
        self.materials: dict[tuple[float, float, float], ComplexArray | FloatArray] = {}
        overlap = overlap_matrix(mesh.order)
        for e in range(mesh.n_elements):
            wire = antenna.wires[mesh.wire[e]]
            if wire.conductivity is None:
                continue
            key = (wire.radius, wire.conductivity, wire.relative_permeability)
            matrix = self.materials.setdefault(key, np.zeros((mesh.n_unknowns, mesh.n_unknowns)))
            own = np.flatnonzero(mesh.expansion[e].any(axis=0))
            functions = mesh.expansion[e][:, own]
            matrix[np.ix_(own, own)] += 0.5 * mesh.length[e] * (functions.T @ overlap @ functions)
        self.size = mesh.n_unknowns

    def inside(self, basis: ComplexArray) -> _Losses:
        """Return the same between some functions (N, n)."""
        other = _Losses.__new__(_Losses)
        other.antenna, other.size = self.antenna, basis.shape[1]
        other.loads = self.loads @ basis
        other.materials = {key: basis.T @ matrix @ basis for key, matrix in self.materials.items()}
        return other

    def at(self, frequency_hz: float) -> ComplexArray:
        """Return the matrix at a frequency [Hz], (N, N) [ohm]."""
        total = np.zeros((self.size, self.size), dtype=complex)
        for material, matrix in self.materials.items():
            total += internal_impedance(*material, frequency_hz) * matrix
        for load, vector in zip(self.antenna.loads, self.loads, strict=True):
            total += load.impedance(2.0 * np.pi * frequency_hz) * np.outer(vector, vector)
        return total


class OwnBlocks:
    """Own blocks of every kind of antenna at any frequency of a segment.

    Parameters
    ----------
    discretisations : list of Discretisation
        At the frequencies of :func:`band_nodes`, on one mesh, with self blocks.
    """

    def __init__(self, discretisations: list[Discretisation]) -> None:
        self.nodes = np.array([d.frequency_hz for d in discretisations])
        first = discretisations[0]
        self._model = first
        self._shared: dict[int, list[int]] = {}
        for k, kind in enumerate(first.kinds):
            self._shared.setdefault(id(kind.self_block), []).append(k)
        self._losses: dict[int, _Losses] = {}
        # What is smooth: no loss, no loads, no 1/f of the charges.
        self._samples: dict[int, ComplexArray] = {}
        for kinds in self._shared.values():
            k = kinds[0]
            losses = self._losses_of(k)
            self._samples[k] = np.stack(
                [d.frequency_hz * (d.kinds[k].self_block - losses.at(d.frequency_hz)) for d in discretisations]
            )

    def _losses_of(self, kind: int) -> _Losses:
        """Return the losses of a kind; kinds of one mesh share them."""
        model = self._model.kinds[kind]
        if id(model.mesh) not in self._losses:
            self._losses[id(model.mesh)] = _Losses(model.antenna, model.mesh)
        return self._losses[id(model.mesh)]

    def at(self, frequency_hz: float) -> Discretisation:
        """Return the station at a frequency of the segment [Hz], on the mesh of the segment."""
        weights = node_weights(self.nodes, frequency_hz) / frequency_hz
        model = self._model
        blocks: dict[int, ComplexArray] = {}
        lossy: dict[int, ComplexArray] = {}
        for kinds in self._shared.values():
            losses = self._losses_of(kinds[0])
            if id(losses) not in lossy:
                lossy[id(losses)] = losses.at(frequency_hz)
            made = np.tensordot(weights, self._samples[kinds[0]], axes=1) + lossy[id(losses)]
            blocks |= dict.fromkeys(kinds, 0.5 * (made + made.T))
        kinds_now = [Kind(q.antenna, q.mesh, q.orientation, q.height, blocks[k]) for k, q in enumerate(model.kinds)]
        ground = model.ground.at(float(frequency_hz))
        return replace(model, frequency_hz=float(frequency_hz), kinds=kinds_now, ground=ground)

    def loaded_in(self, kind: int, basis: ComplexArray, reference_ohm: float) -> Callable[[float], ComplexArray]:
        """Return what gives the loaded own block of a kind in some functions (N, n), (n, n) [ohm], at a frequency [Hz].

        Quick enough to be asked hundreds of times.
        """
        model = self._model.kinds[kind]
        first = next(kinds[0] for kinds in self._shared.values() if kind in kinds)
        samples = basis.T @ self._samples[first] @ basis
        losses, gaps = self._losses_of(kind).inside(basis), model.mesh.gap_vectors @ basis

        def at(frequency_hz: float) -> ComplexArray:
            block = np.tensordot(node_weights(self.nodes, frequency_hz) / frequency_hz, samples, axes=1)
            block += losses.at(frequency_hz)
            block += gaps.T @ attach_ports(model.antenna, frequency_hz, reference_ohm).loading @ gaps
            return np.asarray(0.5 * (block + block.T))

        return at

    def name_of(self, kind: int) -> str:
        """Return the name of a kind's design."""
        return self._model.kinds[kind].antenna.name

    def distinct(self) -> list[int]:
        """Return one kind for each own block there is."""
        return [kinds[0] for kinds in self._shared.values()]


class MatrixSamples:
    """Reduced matrices of a segment at its nodes, without own blocks, each block's phase of distance and 1/f taken out.

    Parameters
    ----------
    discretisation : Discretisation
        The station.
    space : CurrentSpace
        Functions of the segment.
    nodes : float64 (M,)
        Frequencies at which :meth:`add` is going to be called [Hz].
    dtype : type
        Precision.
    """

    def __init__(self, discretisation: Discretisation, space: CurrentSpace, nodes: FloatArray, dtype: type) -> None:
        self.station, self.space, self.nodes, self.dtype = discretisation.station, space, nodes, np.dtype(dtype)
        self._real = np.float32 if self.dtype == np.complex64 else np.float64
        positions = discretisation.station.positions
        self.separation = np.linalg.norm(positions[:, None] - positions[None, :], axis=2)
        self.sizes: tuple[int, ...] = ()
        self.samples: dict[tuple[int, int], AnyComplexArray] = {}

    @property
    def nbytes(self) -> int:
        """Bytes held."""
        return sum(s.nbytes for s in self.samples.values())

    def _antennas(self, sizes: tuple[int, ...]) -> list[slice]:
        edges = np.searchsorted(self.space.offsets, np.concatenate([[0], np.cumsum(sizes)]))
        return [slice(int(a), int(b)) for a, b in zip(edges[:-1], edges[1:], strict=True)]

    def _turn(self, tile: tuple[int, int], wavenumber: float, groups: list[slice]) -> AnyComplexArray:
        """Return exp(-jkd) of every entry of a tile, transposed to the order in which tiles are kept."""
        rows, columns = groups[tile[0]], groups[tile[1]]
        counts = np.diff(self.space.offsets)
        turn = np.exp(-1j * wavenumber * self.separation[columns, rows]).astype(self.dtype)
        return np.repeat(np.repeat(turn, counts[rows], axis=1), counts[columns], axis=0)

    def add(self, node: int, matrix: TiledSymmetric) -> None:
        """Take the matrix assembled at a node; the matrix is left as it was."""
        if not self.samples:
            self.sizes = matrix.sizes
            self.samples = {key: np.empty((len(self.nodes), tile.size), self.dtype) for key, tile in matrix.tiles.items()}
        frequency, groups = float(self.nodes[node]), self._antennas(self.sizes)
        wavenumber = 2.0 * np.pi * frequency / SPEED_OF_LIGHT

        def take(key: tuple[int, int]) -> None:
            turned = matrix.tiles[key].T * self._turn(key, -wavenumber, groups)
            turned *= self._real(frequency)
            if key[0] == key[1]:
                first = self.space.offsets[groups[key[0]].start]
                for a in range(groups[key[0]].start, groups[key[0]].stop):
                    own = slice(self.space.offsets[a] - first, self.space.offsets[a + 1] - first)
                    turned[own, own] = 0.0
            self.samples[key][node] = turned.ravel()

        with single_threaded_blas(), ThreadPoolExecutor(loop_threads()) as pool:
            list(pool.map(take, self.samples))

    def at(self, discretisation: Discretisation, reference_ohm: float) -> TiledSymmetric:
        """Return the matrix at the frequency of a station from :meth:`OwnBlocks.at`, every port loaded [ohm]."""
        d, space = discretisation, self.space
        weights = (node_weights(self.nodes, d.frequency_hz) / d.frequency_hz).astype(self._real)
        groups = self._antennas(self.sizes)
        # The tiles are about to be written: nothing need be set to zero first.
        matrix = TiledSymmetric([], self.dtype.type)
        matrix.sizes, matrix.offsets = self.sizes, np.concatenate([[0], np.cumsum(self.sizes)])
        own = own_blocks(d, space, reference_ohm)

        def fill(key: tuple[int, int]) -> None:
            flat = weights @ self.samples[key].view(self._real)
            tile = flat.view(self.dtype).reshape(self.sizes[key[1]], self.sizes[key[0]])
            tile *= self._turn(key, d.wavenumber, groups)
            if key[0] == key[1]:
                first = space.offsets[groups[key[0]].start]
                for a in range(groups[key[0]].start, groups[key[0]].stop):
                    here = slice(space.offsets[a] - first, space.offsets[a + 1] - first)
                    tile[here, here] = own[d.kind_of[a]].T
            matrix.tiles[key] = tile.T

        with single_threaded_blas(), ThreadPoolExecutor(loop_threads()) as pool:
            list(pool.map(fill, self.samples))
        return matrix


def own_blocks(discretisation: Discretisation, space: CurrentSpace, reference_ohm: float) -> list[ComplexArray]:
    """Return the loaded own block of each kind in its functions, (n, n) [ohm]; kinds that are turned only share it."""
    attached = attachments(discretisation, reference_ohm)
    made: dict[int, ComplexArray] = {}
    out: list[ComplexArray] = []
    for k, kind in enumerate(discretisation.kinds):
        basis, key = space.bases[k], id(kind.self_block)
        if key not in made:
            loaded = kind.self_block + attached[kind.antenna].structure(kind.mesh.gap_vectors)
            made[key] = loaded if basis is None else basis.T @ loaded @ basis
        out.append(made[key])
    return out
