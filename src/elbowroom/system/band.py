"""A segment of a band in which a station's matrix is interpolated: assembled at a few frequencies, solved at any.

The mesh and the functions of each antenna are held over the segment.  The functions are those of all nodes together, made
orthogonal and cut until a few antennas, and then the whole station, meet the tolerance.  At some frequencies between the nodes,
where interpolation is worst, the residual of the full system is worked out as after any reduced solve: the error found there
holds what the functions and what the interpolation left out.  A ground that resonates is looked at first
(`elbowroom.system.band_ground`): it may ask for more nodes, and for a check where it does.  At every other frequency the
sensitivity of the currents to small errors of the matrix is measured by a random one; where a resonance makes it larger than at
the checked frequencies the stated error grows with it, and where that, or a scattering matrix that gives more power than it gets,
breaks the tolerance, the residual is worked out there too, and if need be the frequency is assembled for itself.

Features too narrow to be met by any channel are sought in `elbowroom.system.band_features`.
"""

from __future__ import annotations

import time
from collections.abc import Sequence
from contextlib import nullcontext
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from scipy.linalg import cholesky, solve_triangular

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.errors import ModelRangeError
from elbowroom.geometry.mesh import MeshSettings
from elbowroom.geometry.stations import Station
from elbowroom.system.assembly import Progress, single_threaded_blas
from elbowroom.system.band_features import (
    SINGLE_FIT,
    STANDS_OUT,
    Feature,
    narrow_poles,
    probe_answers,
    probe_sources,
    scanned,
)
from elbowroom.system.band_ground import GroundScan, segment_intervals
from elbowroom.system.band_interpolation import MatrixSamples, OwnBlocks, band_nodes, own_blocks
from elbowroom.system.discretisation import Discretisation, FarSettings, discretise
from elbowroom.system.factorisation import Factors
from elbowroom.system.interactions import SkeletonInteractions
from elbowroom.system.port_algebra import is_passive
from elbowroom.system.reduction import Candidates, ReductionSettings, current_weights
from elbowroom.system.reduction_error import ReductionError, reduction_error
from elbowroom.system.self_block import NearSettings
from elbowroom.system.solving import (
    REFERENCE_OHM,
    PortCurrents,
    SolveStatistics,
    kind_excitations,
    mesh_error,
    solve_isolated,
)
from elbowroom.system.solving_reduced import ReducedStation, assemble_reduced, port_currents
from elbowroom.system.spaces import CurrentSpace

PROBES = 12
"""Ports whose currents are disturbed to measure how sensitive they are."""

MOST_SCANNED = 8
"""Own blocks, of designs and heights, that are looked at for narrow resonances."""

FEWEST_PROBED = 12
"""Solved frequencies from which the array is looked at for narrow resonances."""

RESONANT = 5.0
"""Ratio of sensitivities from which a frequency counts as resonant."""

CHECKED_WIDTH, MOST_RESONANCES = 0.02, 2
"""Half-width, in the segment's width, of resonances at which functions are checked, and how many of them."""

MOST_ROUNDS = 3
"""Times that a segment is begun again with more functions when a checked frequency exceeds the tolerance."""

SMALL_ORDER = 1000
"""Functions of a station below which one thread of BLAS solves its channels: with 720 of them two threads took a fifth longer on
an idle machine of two cores, and several times longer on a busy one, where they wait for each other in every small product."""


@dataclass(frozen=True)
class SegmentCounts:
    """What a segment has cost so far.

    Attributes
    ----------
    assemblies : int
        Matrices assembled, checked frequencies solved for themselves included.
    factorisations : int
        Matrices of the whole station factored.
    checks : int
        Residuals of the full system worked out.
    """

    assemblies: int = 0
    factorisations: int = 0
    checks: int = 0


@dataclass(frozen=True, eq=False)
class ChannelSolution:
    """A station solved at one frequency of a segment.

    Attributes
    ----------
    discretisation : Discretisation
        The station there, own blocks interpolated, on the segment's mesh.
    currents : PortCurrents
        In the coordinates of ``space``.
    space : CurrentSpace
        Functions.
    isolated : tuple of PortCurrents
        Of each kind of antenna alone.
    statistics : SolveStatistics
        With the stated error, and where the matrix came from.
    sensitivity : float
        Change of the currents over that of the matrix, both relative.
    """

    discretisation: Discretisation
    currents: PortCurrents
    space: CurrentSpace
    isolated: tuple[PortCurrents, ...]
    statistics: SolveStatistics
    sensitivity: float


class _Node(ReducedStation):
    """A frequency at which the matrix is assembled, or the residual worked out."""

    def __init__(
        self,
        discretisation: Discretisation,
        settings: ReductionSettings,
        reference_ohm: float,
        candidates: list[Candidates] | None = None,
    ) -> None:
        self._prepare(discretisation, settings, reference_ohm, None, False, candidates)

    def solved_with(self, candidates: list[Candidates], cut: float) -> None:
        """Solve the station in some functions, with as many as it takes."""
        self.candidates, self.cut, self.movable = candidates, cut, True
        self._solve_until_good()

    def matrix_in(self, space: CurrentSpace) -> None:
        """Assemble the matrix in given functions."""
        self.space = space
        self.interactions = SkeletonInteractions(self.discretisation, space.bases, self.table, single=self.single)
        self.interactions.prepare()
        self.matrix = assemble_reduced(
            self.discretisation, space, self.interactions, self.filler, self.distances, self.reference_ohm, dtype=self.dtype
        )

    def error_of(self, space: CurrentSpace, currents: ComplexArray, factors: Factors) -> ReductionError:
        """Return the error of currents of this frequency, wherever they come from."""
        interactions = SkeletonInteractions(self.discretisation, space.bases, self.table, single=self.single)
        return reduction_error(
            self.discretisation, space, interactions, self.filler, self.distances, self.answers, currents,
            kind_excitations(self.discretisation, self.reference_ohm), factors, self.skeleton_error,
        )  # fmt: skip


def united_candidates(discretisation: Discretisation, several: Sequence[list[Candidates]]) -> list[Candidates]:
    """Return the functions of several frequencies on one mesh as one set, orthogonal at the frequency of the station.

    Parameters
    ----------
    discretisation : Discretisation
        The station at a frequency among them.
    several : sequence of lists of Candidates
        For each frequency one for each kind, shared by the kinds of a design.
    """
    groups: dict[int, list[int]] = {}
    for k, candidate in enumerate(several[0]):
        groups.setdefault(id(candidate), []).append(k)
    found: dict[int, Candidates] = {}
    with single_threaded_blas():
        for kinds in groups.values():
            root = cholesky(current_weights(discretisation.kinds[kinds[0]].mesh, discretisation.wavenumber), lower=False)
            parts = [(root @ c[kinds[0]].functions) * c[kinds[0]].carried for c in several]
            left, size, _ = np.linalg.svd(np.concatenate(parts, axis=1), full_matrices=False)
            useful = int(np.count_nonzero(size > 1e-12 * size[0]))
            fewest = max(c[kinds[0]].fewest for c in several)
            united = Candidates(solve_triangular(root, left[:, :useful]), size[:useful] / size[0], min(useful, fewest))
            found |= dict.fromkeys(kinds, united)
    return [found[k] for k in range(len(several[0]))]


@dataclass(frozen=True)
class SegmentSettings:
    """How a segment is solved.

    Parameters
    ----------
    tolerance : float
        Error of every embedded pattern that is aimed at, relative to its own peak.
    checked : int
        Frequencies at which the residual of the full system is worked out.
    """

    tolerance: float = 1e-4
    checked: int = 3

    def __post_init__(self) -> None:
        ReductionSettings(self.tolerance)
        if self.checked < 1:
            msg = f"checked = {self.checked!r}: expected one frequency at least"
            raise ModelRangeError(msg)


def segment_discretisations(
    station: Station,
    low_hz: float,
    high_hz: float,
    tolerance: float,
    options: dict[str, Any],
    *,
    progress: Progress | None = None,
) -> tuple[FloatArray, list[Discretisation], GroundScan | None]:
    """Return the frequencies [Hz] at which a segment is assembled, the station at these and some between, and its ground.

    Parameters
    ----------
    station : Station
        Antennas and ground.
    low_hz, high_hz : float
        Ends of the segment [Hz].
    tolerance : float
        Error of embedded patterns that is aimed at.
    options : dict
        For :func:`elbowroom.system.discretisation.discretise`.
    progress : callable, optional
        Told the stage and the fraction done.
    """
    intervals, own_intervals, scan = segment_intervals(station, low_hz, high_hz, tolerance)
    fine = band_nodes(low_hz, high_hz, own_intervals)
    made = []
    for done, f in enumerate(fine):
        made.append(discretise(station, float(f), **options))
        if progress is not None:
            progress("own blocks", (done + 1) / len(fine))
    return band_nodes(low_hz, high_hz, intervals), made, scan


def narrow_features(
    own: OwnBlocks, space: CurrentSpace, probed: dict[float, ComplexArray], widest_hz: float, reference_ohm: float
) -> list[Feature]:
    """Return the resonances of a segment whose half-width is at most so much [Hz], of designs alone and of the array.

    Those of a design are found wherever they lie and however narrow they are; in the array they come in groups close by, one of
    each antenna and polarisation.  Those that only the array has are found from the solved frequencies, in the precision of their
    factors, where these are not much farther apart than the array's resonances are wide as a whole.

    Parameters
    ----------
    own : OwnBlocks
        Own blocks of the segment.
    space : CurrentSpace
        Its functions.
    probed : dict of float to complex128 (K,)
        What random sources inside a few antennas drive there, at solved frequencies [Hz].
    widest_hz : float
        Largest half-width [Hz].
    reference_ohm : float
        Resistance across every port [ohm].
    """
    found: list[Feature] = []
    rng = np.random.default_rng(0)
    low_hz, high_hz = float(own.nodes[0]), float(own.nodes[-1])
    with single_threaded_blas():
        for k in own.distinct()[:MOST_SCANNED]:
            basis = space.bases[k]
            assert basis is not None
            block = own.loaded_in(k, basis, reference_ohm)
            sources = rng.normal(size=(basis.shape[1], 3))

            def answer(f: float, block=block, sources=sources) -> ComplexArray:  # type: ignore[no-untyped-def]
                return np.asarray(sources.T @ np.linalg.solve(block(f), sources), dtype=complex).ravel()

            name = own.name_of(k)
            found += [Feature(f, width, name) for f, width in scanned(answer, low_hz, high_hz, widest_hz)]
    if len(probed) >= FEWEST_PROBED:
        nodes = np.array(sorted(probed))
        values = np.array([probed[f] for f in nodes])
        for pole, height in narrow_poles(nodes, values, SINGLE_FIT, widest_hz):
            if height > STANDS_OUT:
                found.append(Feature(pole.real, abs(pole.imag), "array"))
    return sorted(found)


class BandSegment:
    """A station between two frequencies, to be solved at any in between.

    Parameters
    ----------
    station : Station
        Antennas and ground.
    low_hz, high_hz : float
        Ends of the segment [Hz].
    settings : SegmentSettings, optional
        Accuracy.
    mesh : str or MeshSettings, optional
        Mesh, cut for the upper end.
    near, far : optional
        Accuracy of reactions inside and between antennas.
    reference_ohm : float, optional
        Resistance across every port [ohm].
    progress : callable, optional
        Told the stage and the fraction done.

    Attributes
    ----------
    space : CurrentSpace
        Functions of the segment.
    checked : dict of float to (float, float)
        Stated pattern error and sensitivity at the frequencies at which the residual was worked out [Hz].
    probed : dict of float to complex128 (K,)
        What random sources inside a few antennas drive there, at the frequencies that were solved [Hz].
    counts : SegmentCounts
        What it has cost.
    seconds : dict
        Wall time of each stage [s].

    Raises
    ------
    ModelRangeError
        If the ends are not two rising positive frequencies.
    """

    space: CurrentSpace

    def __init__(
        self,
        station: Station,
        low_hz: float,
        high_hz: float,
        settings: SegmentSettings | None = None,
        *,
        mesh: str | MeshSettings = "default",
        near: NearSettings | None = None,
        far: FarSettings | None = None,
        reference_ohm: float = REFERENCE_OHM,
        progress: Progress | None = None,
    ) -> None:
        if not 0.0 < low_hz < high_hz < np.inf:
            msg = f"segment from {low_hz!r} to {high_hz!r} Hz: expected two rising positive frequencies"
            raise ModelRangeError(msg)
        self.station, self.settings = station, settings or SegmentSettings()
        self.reduction = ReductionSettings(self.settings.tolerance)
        self.reference_ohm, self.progress = reference_ohm, progress
        self._options = {"mesh": mesh, "near": near, "far": far, "mesh_hz": high_hz}
        self.counts = SegmentCounts()
        self.seconds: dict[str, float] = {}
        self._clock = time.perf_counter()
        self.checked: dict[float, tuple[float, float]] = {}
        self.probed: dict[float, ComplexArray] = {}
        self.nodes, made, self._ground = segment_discretisations(
            station, low_hz, high_hz, self.settings.tolerance, self._options, progress=progress
        )
        self.own = OwnBlocks(made)
        self._at_nodes = made[:: (len(made) - 1) // (len(self.nodes) - 1)]
        ends = (self._at_nodes[0], self._at_nodes[-1])
        self.mesh_error = max(mesh_error(d, solve_isolated(d)) for d in ends)
        self._lap("own blocks")
        self._build()

    @property
    def low_hz(self) -> float:
        """Lower end [Hz]."""
        return float(self.nodes[0])

    @property
    def high_hz(self) -> float:
        """Upper end [Hz]."""
        return float(self.nodes[-1])

    def _tell(self, stage: str, fraction: float) -> None:
        if self.progress is not None:
            self.progress(stage, fraction)

    def _lap(self, stage: str) -> None:
        now = time.perf_counter()
        self.seconds[stage] = self.seconds.get(stage, 0.0) + now - self._clock
        self._clock = now

    def _count(self, assemblies: int = 0, factorisations: int = 0, checks: int = 0) -> None:
        c = self.counts
        self.counts = SegmentCounts(c.assemblies + assemblies, c.factorisations + factorisations, c.checks + checks)

    def _discretised(self, frequency_hz: float) -> Discretisation:
        return discretise(self.station, float(frequency_hz), **self._options)  # type: ignore[arg-type]

    def _build(self) -> None:
        """Choose functions, assemble at all nodes and check; again with more functions where they do not serve."""
        nodes = []
        for done, d in enumerate(self._at_nodes):
            nodes.append(_Node(d, self.reduction, self.reference_ohm))
            self._tell("functions", (done + 1) / len(self._at_nodes))
        middle, top = nodes[len(nodes) // 2], nodes[-1]
        candidates = united_candidates(middle.discretisation, [n.candidates for n in nodes])
        self._lap("functions")
        cuts = []
        for node in (nodes[0], middle, top):
            node.candidates = candidates
            cuts.append(node._pilot_cut())
        cut = min(cuts)
        self._lap("pilot")
        self._checkers = {
            f: _Node(self._discretised(f), self.reduction, self.reference_ohm, []) for f in map(float, self.check_frequencies())
        }
        self._lap("checks")
        before = np.inf
        for round_ in range(MOST_ROUNDS):
            top.solved_with(candidates, cut)
            candidates, cut, self.space = top.candidates, top.cut, top.space
            self._count(assemblies=1, factorisations=1, checks=1)
            self._lap("first solve")
            self._sample(nodes)
            self._check_at_resonances()
            worst = self._check()
            complete = all(c.count(cut) == c.most for c in candidates)
            # At a narrow resonance more functions may not help: rounding and skeletons count there as much.
            if worst <= self.settings.tolerance or complete or round_ == MOST_ROUNDS - 1 or worst > 0.5 * before:
                break
            before = worst
            cut *= min(0.6, 0.5 * np.sqrt(self.settings.tolerance / worst))
        self._checkers = {}
        self._at_nodes = []

    def _sample(self, nodes: list[_Node]) -> None:
        """Assemble the matrix at all nodes in the functions of the segment; the last has it already."""
        top = nodes[-1]
        self.samples = MatrixSamples(top.discretisation, self.space, self.nodes, top.dtype)
        for q, node in reversed(list(enumerate(nodes))):
            if node is not top:
                node.matrix_in(self.space)
                self._count(assemblies=1)
            assert node.matrix is not None
            self.samples.add(q, node.matrix)
            node.matrix = None
            self._tell("assemble", (len(nodes) - q) / len(nodes))
        self._lap("assemble")

    def _check_at_resonances(self) -> None:
        """Have the residual worked out at the narrowest resonances of designs, which ask most of the functions."""
        widest = CHECKED_WIDTH * (self.high_hz - self.low_hz)
        narrowest = sorted(
            narrow_features(self.own, self.space, {}, widest, self.reference_ohm), key=lambda found: found.half_width_hz
        )[:MOST_RESONANCES]
        for found in narrowest:
            # Places shift a little with the functions; once looked at, a neighbourhood is not looked at again.
            if all(abs(found.frequency_hz - f) > widest for f in self._checkers):
                node = _Node(self._discretised(found.frequency_hz), self.reduction, self.reference_ohm, [])
                self._checkers[found.frequency_hz] = node

    def check_frequencies(self) -> np.ndarray:
        """Return frequencies between nodes at which interpolation is least certain, the topmost interval always among them.

        Where the ground resonates, the worst of its kernels' frequencies are added.
        """
        between = 0.5 * (self.nodes[:-1] + self.nodes[1:])
        chosen = np.unique(np.linspace(len(between) - 1, 0, min(self.settings.checked, len(between))).round().astype(int))
        checked = np.asarray(between[chosen])
        if self._ground is None:
            return checked
        counts = len(self.nodes) - 1, len(self.own.nodes) - 1
        return np.append(checked, self._ground.missed_by(checked, *counts, self.settings.tolerance))

    def _check(self) -> float:
        self.checked, self.probed = {}, {}
        self._port_error = worst = 0.0
        for f in self._checkers:
            error, sensitivity = self._residual_at(f)
            self.checked[f] = (error.pattern, sensitivity)
            self._port_error = max(error.port_matrix, self._port_error)
            worst = max(worst, error.pattern)
        self._lap("checks")
        return worst

    def _residual_at(self, frequency_hz: float) -> tuple[ReductionError, float]:
        """Return the error at a frequency from the residual of the full system, and the sensitivity there."""
        d = self.own.at(frequency_hz)
        currents, factors = self._port_currents(d)
        error = self._checkers[frequency_hz].error_of(self.space, currents.currents, factors)
        self._count(checks=1)
        return error, self._sensitivity(d, currents.currents, factors)

    def _port_currents(self, d: Discretisation) -> tuple[PortCurrents, Factors]:
        matrix = self.samples.at(d, self.reference_ohm)
        self._lap("interpolate")
        self._count(factorisations=1)
        made = port_currents(d, self.space, matrix, kind_excitations(d, self.reference_ohm))
        self._lap("solve")
        return made

    def _sensitivity(self, d: Discretisation, currents: ComplexArray, factors: Factors) -> float:
        """Return how much currents of some ports change, relatively, when every entry of own blocks changes by a random part.

        What random sources inside a few antennas drive there is kept beside it, in ``probed``.
        """
        ports = np.unique(np.linspace(0, d.n_ports - 1, min(PROBES, d.n_ports)).round().astype(int))
        own = own_blocks(d, self.space, self.reference_ohm)
        disturbed: dict[int, ComplexArray] = {}
        x = currents[:, ports]
        sources = probe_sources(self.space)
        right = np.empty((self.space.size, len(ports) + sources.shape[1]), dtype=complex)
        for a, k in enumerate(d.kind_of):
            if id(own[k]) not in disturbed:
                signs = np.triu(np.random.default_rng(len(own[k])).choice([-1.0, 1.0], size=own[k].shape))
                disturbed[id(own[k])] = own[k] * (signs + np.triu(signs, 1).T)
            right[self.space.of(a), : len(ports)] = disturbed[id(own[k])] @ x[self.space.of(a)]
        right[:, len(ports) :] = sources
        found = factors.solve(right)
        self.probed[d.frequency_hz] = probe_answers(self.space, found[:, len(ports) :])
        return float(np.max(np.linalg.norm(found[:, : len(ports)], axis=0) / np.linalg.norm(x, axis=0)))

    def solve(self, frequency_hz: float) -> ChannelSolution:
        """Return the station solved at a frequency of the segment [Hz], to the tolerance wherever that can be reached.

        Raises
        ------
        ModelRangeError
            If the frequency lies outside the segment.
        SolveError
            If the matrix is singular or not finite.
        """
        with single_threaded_blas() if self.space.size < SMALL_ORDER else nullcontext():
            return self._solve(frequency_hz)

    def _solve(self, frequency_hz: float) -> ChannelSolution:
        self._clock = time.perf_counter()
        before = dict(self.seconds)
        tolerance = self.settings.tolerance
        d = self.own.at(frequency_hz)
        currents, factors = self._port_currents(d)
        sensitivity = self._sensitivity(d, currents.currents, factors)
        error, port_error = self.stated_error(sensitivity), self._port_error * self._raised(sensitivity)
        if error > tolerance:
            node = _Node(self._discretised(frequency_hz), self.reduction, self.reference_ohm, [])
            found = node.error_of(self.space, currents.currents, factors)
            self._count(checks=1)
            # Kept out of ``checked``: what is stated at a frequency must not depend on which were solved before.
            error, port_error = found.pattern, found.port_matrix
        self._lap("channel checks")
        if error > tolerance or not is_passive(currents.loaded_admittance, self.reference_ohm, tolerance):
            return self._assembled(frequency_hz)
        isolated = tuple(solve_isolated(d, self.reference_ohm))
        self._lap("isolated antennas")
        seconds = {k: v - before.get(k, 0.0) for k, v in self.seconds.items() if v > before.get(k, 0.0)}
        statistics = SolveStatistics(
            "reduced", "single" if self.samples.dtype == np.complex64 else "double", d.n_unknowns, d.n_ports, float("nan"),
            mesh_error=self.mesh_error, seconds=seconds, n_functions=self.space.size, pattern_error=error,
            port_matrix_error=port_error, origin="interpolated matrix", probes=tuple(map(complex, self.probed[d.frequency_hz])),
        )  # fmt: skip
        return ChannelSolution(d, currents, self.space, isolated, statistics, sensitivity)

    def features(self, widest_hz: float) -> list[Feature]:
        """Return the narrow resonances known so far; see :func:`narrow_features`."""
        return narrow_features(self.own, self.space, self.probed, widest_hz, self.reference_ohm)

    def _raised(self, sensitivity: float) -> float:
        return max(1.0, sensitivity / min(known for _, known in self.checked.values()))

    def stated_error(self, sensitivity: float) -> float:
        """Return the error stated for a frequency of some sensitivity, from those that were checked.

        In proportion to the sensitivity, but never below what was found where nothing resonates.
        """
        least = min(known for _, known in self.checked.values())
        usual = max(known for _, known in self.checked.values() if known < RESONANT * least)
        return max(error * max(sensitivity, min(known, usual)) / known for error, known in self.checked.values())

    def _assembled(self, frequency_hz: float) -> ChannelSolution:
        """Return the station assembled at a frequency, on the segment's mesh."""
        solved = ReducedStation(self._discretised(frequency_hz), self.reduction, reference_ohm=self.reference_ohm)
        self._count(assemblies=1, factorisations=1, checks=1)
        isolated = tuple(solve_isolated(solved.discretisation, self.reference_ohm))
        statistics = replace(solved.statistics, mesh_error=self.mesh_error)
        self._lap("assembled channels")
        return ChannelSolution(solved.discretisation, solved.currents, solved.space, isolated, statistics, float("nan"))
