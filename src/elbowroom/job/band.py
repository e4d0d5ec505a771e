"""Many channels of one station: which frequencies share matrices, which are solved, and which come from those solved.

Channels are put into *segments*, in each of which the station's matrix is assembled at a few frequencies and interpolated to
every channel that is solved (`elbowroom.system.band`).  Where a step of solving is given, only channels about that far apart are
solved, and all others are interpolated between them (`elbowroom.system.band_currents`), each only where the estimate of what
that costs, with the errors of the solved ones, stays below the tolerance.  Where it does not, the middle of such channels is
solved too, and so on until all are within it or solved.  Before that, channels next to resonances narrower than the step of
solving (`elbowroom.system.band_features`) are solved, so that none is passed by.

A solution says in its statistics where it comes from.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.errors import ModelRangeError, SolveError
from elbowroom.geometry.mesh import MeshSettings
from elbowroom.geometry.stations import Station
from elbowroom.radiation.solution import Solution
from elbowroom.system.assembly import Progress
from elbowroom.system.band import (
    BandSegment,
    SegmentSettings,
    narrow_features,
    segment_discretisations,
)
from elbowroom.system.band_currents import CurrentSamples, Weighting
from elbowroom.system.band_features import Feature
from elbowroom.system.band_ground import INTERPOLATION_SHARE
from elbowroom.system.band_interpolation import OwnBlocks, intervals_for, reach_of
from elbowroom.system.discretisation import FarSettings, discretise
from elbowroom.system.port_algebra import is_passive
from elbowroom.system.reduction_error import sampled_antennas
from elbowroom.system.self_block import NearSettings
from elbowroom.system.solving import REFERENCE_OHM, PortCurrents, SolveStatistics
from elbowroom.system.spaces import CurrentSpace

MOST_INTERVALS = 6
"""Intervals between frequencies at which a segment is assembled; wider segments would need more functions."""

WIDEST_SHARE = 0.6
"""Width of a segment over its lower end, from which one set of functions serves badly."""

FEWEST_CHANNELS = 16
"""Solved channels of a segment below which solving them one by one is as quick; measured."""

SAME_CHANNEL = 1e-9
"""Relative distance of a channel from an entry of the ground's table below which it is at the entry."""

SEED_RATIO, LEAST_SEED_HZ, SEEDED_STEPS = 3.0, 100.0, 2.0
"""Ratio of the distances from a narrow resonance at which the station is solved, the least of them [Hz], and steps of solving
from a channel within which resonances are seen to."""


@dataclass(frozen=True)
class SegmentPlan:
    """A segment of a band and its channels.

    Attributes
    ----------
    low_hz, high_hz : float
        Its ends, which are channels that are solved [Hz].
    solved : tuple of float
        Channels that are solved, both ends among them [Hz].
    between : tuple of float
        Channels that come from those, where the estimate allows [Hz].
    """

    low_hz: float
    high_hz: float
    solved: tuple[float, ...]
    between: tuple[float, ...] = ()


def widest_segment(reach_m: float, low_hz: float, tolerance: float) -> float:
    """Return the width of a segment [Hz] that begins at a frequency [Hz], for a reach from `reach_of` [m]."""
    low, high = 0.0, WIDEST_SHARE * low_hz
    if intervals_for(high, reach_m, INTERPOLATION_SHARE * tolerance) <= MOST_INTERVALS:
        return high
    for _ in range(40):
        middle = 0.5 * (low + high)
        if intervals_for(middle, reach_m, INTERPOLATION_SHARE * tolerance) <= MOST_INTERVALS:
            low = middle
        else:
            high = middle
    return low


def solved_channels(frequencies_hz: Sequence[float], solve_step_hz: float | None) -> tuple[float, ...]:
    """Return which channels are solved: the nearest ones to multiples of a step from the first, and the last.

    Raises
    ------
    ModelRangeError
        If the step is not positive, or the frequencies do not rise.
    """
    channels = np.asarray(frequencies_hz, dtype=float)
    if np.any(np.diff(channels) <= 0.0):
        msg = "channels: expected rising frequencies"
        raise ModelRangeError(msg)
    if solve_step_hz is None:
        return tuple(map(float, channels))
    if not 0.0 < solve_step_hz < np.inf:
        msg = f"step of solving {solve_step_hz!r} Hz: expected a positive number"
        raise ModelRangeError(msg)
    count = int((channels[-1] - channels[0]) / solve_step_hz + 1e-9)
    wanted = channels[0] + solve_step_hz * np.arange(count + 1)
    at = np.clip(np.searchsorted(channels, wanted), 1, max(len(channels) - 1, 1))
    if len(channels) > 1:
        at = at - (wanted - channels[at - 1] < channels[at] - wanted)
    return tuple(map(float, np.unique([*channels[at * (len(channels) > 1)], channels[-1]])))


def plan_segments(
    station: Station,
    frequencies_hz: Sequence[float],
    tolerance: float,
    *,
    solve_step_hz: float | None = None,
) -> list[SegmentPlan]:
    """Return the segments of a band; channels that are in none are better solved one by one.

    No segment passes over an entry of the ground's table, which is linear between entries and bends there: segments end at the
    channels on either side of it, or both at the channel that it is.  A table with an entry to every few channels leaves none.

    Parameters
    ----------
    station : Station
        Antennas and ground.
    frequencies_hz : sequence of float
        Channels, rising [Hz].
    tolerance : float
        Error of embedded patterns that is aimed at.
    solve_step_hz : float, optional
        About how far apart channels are solved [Hz]; all are by default.  It is less over soil where segments are so narrow, for
        echoes of layers or entries of a table, that they would have too few.

    Raises
    ------
    ModelRangeError
        If the channels do not rise or the step is not positive.
    """
    channels = np.asarray(frequencies_hz, dtype=float)
    solved = np.asarray(solved_channels(frequencies_hz, solve_step_hz))
    if len(solved) < FEWEST_CHANNELS:
        return []
    reach = reach_of(station)
    plans = []
    for piece in _pieces(channels, solved, station.ground.kinks_hz, solve_step_hz):
        chosen = _segment_ends(piece, reach, tolerance)
        for first, last in zip(chosen[:-1], chosen[1:], strict=True):
            own = piece[first : last + 1]
            inside = channels[(channels >= own[0]) & (channels <= own[-1])]
            if len(own) < FEWEST_CHANNELS <= len(inside) and solve_step_hz is not None and station.ground.lossy:
                # Echoes and tables make segments narrow; without one, all channels between would be assembled one by one.
                finer = float(own[-1] - own[0]) / (FEWEST_CHANNELS - 1)
                own = np.asarray(solved_channels(inside, min(solve_step_hz, finer)))
            if len(own) < FEWEST_CHANNELS:
                continue
            between = np.setdiff1d(inside, own)
            plans.append(SegmentPlan(float(own[0]), float(own[-1]), tuple(map(float, own)), tuple(map(float, between))))
    return plans


def _pieces(channels: FloatArray, solved: FloatArray, kinks_hz: Sequence[float], solve_step_hz: float | None) -> list[FloatArray]:
    """Return the solved channels [Hz] of each part of a band over which the ground does not bend; all if it never does."""
    inner = [f for f in kinks_hz if channels[0] * (1.0 + SAME_CHANNEL) < f < channels[-1] * (1.0 - SAME_CHANNEL)]
    if not inner:
        return [solved]
    starts = [channels[0], *(channels[channels >= f * (1.0 - SAME_CHANNEL)][0] for f in inner)]
    ends = [*(channels[channels <= f * (1.0 + SAME_CHANNEL)][-1] for f in inner), channels[-1]]
    pieces = []
    for start, end in zip(starts, ends, strict=True):
        if end > start:
            pieces.append(np.asarray(solved_channels(channels[(channels >= start) & (channels <= end)], solve_step_hz)))
    return pieces


def _segment_ends(solved: FloatArray, reach_m: float, tolerance: float) -> list[int]:
    """Return the solved channels, as indices, at which segments begin and end."""
    widths: dict[float, float] = {}

    def edges(share: float) -> list[int]:
        """Return those of segments of a part of the widest."""
        found = [0]
        while found[-1] < len(solved) - 1:
            start = float(solved[found[-1]])
            if start not in widths:
                widths[start] = widest_segment(reach_m, start, tolerance)
            last = int(np.searchsorted(solved, start + share * widths[start] * (1.0 + 1e-9), side="right")) - 1
            found.append(max(last, found[-1] + 1))
        return found

    chosen = edges(1.0)
    # As few segments, of more equal widths.
    for share in np.linspace(0.5, 1.0, 26):
        tried = edges(float(share))
        if len(tried) == len(chosen):
            return tried
    return chosen


@dataclass(frozen=True)
class BandCounts:
    """What a band has cost so far.

    Attributes
    ----------
    assemblies, factorisations, checks : int
        Matrices assembled and factored, residuals of the full system worked out.
    solved : int
        Channels solved through interpolated matrices, ends that two segments share counted in both.
    assembled : int
        Channels of segments that were assembled for themselves.
    interpolated : int
        Channels made from currents of others.
    """

    assemblies: int = 0
    factorisations: int = 0
    checks: int = 0
    solved: int = 0
    assembled: int = 0
    interpolated: int = 0


Fetch = Callable[[float], Solution | None]
Keep = Callable[[float, Solution], None]


class SegmentChannels:
    """Channels of one segment, solved when they are first needed.

    Parameters
    ----------
    station : Station
        Antennas and ground.
    plan : SegmentPlan
        The segment.
    tolerance : float
        Error of embedded patterns that is aimed at.
    mesh, near, far : optional
        As for :func:`elbowroom.job.solve.solve`.
    fetch : callable, optional
        Gives the solution at a frequency [Hz] where it is kept, or None.
    keep : callable, optional
        Told of every solution; by default they are kept here, currents in single precision.
    progress : callable, optional
        Told the stage and the fraction done.

    Attributes
    ----------
    features : list of Feature or None
        Narrow resonances, known once channels between solved ones were asked for.
    """

    def __init__(
        self,
        station: Station,
        plan: SegmentPlan,
        tolerance: float,
        *,
        mesh: str | MeshSettings = "default",
        near: NearSettings | None = None,
        far: FarSettings | None = None,
        fetch: Fetch | None = None,
        keep: Keep | None = None,
        progress: Progress | None = None,
    ) -> None:
        self.station, self.plan, self.tolerance = station, plan, tolerance
        self._options = {"mesh": mesh, "near": near, "far": far}
        self._memory: dict[float, Solution] = {}
        self._fetch, self._keep, self._progress = fetch or self._memory.get, keep or self._remember, progress
        self._segment: BandSegment | None = None
        self._samples_in: list[tuple[CurrentSpace, CurrentSamples]] = []
        self._node_errors: dict[float, tuple[float, float]] = {}
        self._counts = BandCounts()
        self._probes: dict[float, tuple[complex, ...]] = {}
        self._own: OwnBlocks | None = None
        self.features: list[Feature] | None = None
        self.solve_missing = True

    def _remember(self, frequency_hz: float, solution: Solution) -> None:
        currents = replace(solution.coupled, currents=solution.coupled.currents.astype(np.complex64))
        self._memory[frequency_hz] = replace(solution, coupled=currents)

    @property
    def counts(self) -> BandCounts:
        """What the segment has cost."""
        if self._segment is None:
            return self._counts
        c = self._segment.counts
        return replace(self._counts, assemblies=c.assemblies, factorisations=c.factorisations, checks=c.checks)

    @property
    def segment(self) -> BandSegment:
        """The segment's matrices, assembled when first needed."""
        if self._segment is None:
            plan = self.plan
            self._segment = BandSegment(
                self.station, plan.low_hz, plan.high_hz, SegmentSettings(self.tolerance), progress=self._progress,
                **self._options,  # type: ignore[arg-type]
            )  # fmt: skip
        return self._segment

    def solved(self, frequency_hz: float) -> Solution:
        """Return the solution at a frequency of the segment [Hz], kept or solved now.

        Raises
        ------
        SolveError
            If it is not kept and ``solve_missing`` is false.
        """
        found = self._fetch(frequency_hz)
        if found is not None:
            return found
        if not self.solve_missing:
            msg = f"{frequency_hz / 1e6:.10g} MHz is not solved yet; solve it first"
            raise SolveError(msg)
        solution = self.segment_solution(frequency_hz)
        own = solution.statistics.origin == "assembled"
        self._counts = replace(self._counts, solved=self._counts.solved + (not own), assembled=self._counts.assembled + own)
        self._keep(frequency_hz, solution)
        return solution

    def segment_solution(self, frequency_hz: float) -> Solution:
        """Return the solution at a frequency [Hz] from the segment's matrices, whatever is kept; nothing is kept of it."""
        made = self.segment.solve(frequency_hz)
        isolated = tuple(made.isolated[k] for k in made.discretisation.kind_of)
        return Solution(made.discretisation, made.currents, isolated, REFERENCE_OHM, made.statistics, made.space)

    def _is_sample(self, solution: Solution) -> bool:
        """Return whether a solution's coordinates are those of the segment's functions."""
        return solution.statistics.origin == "interpolated matrix"

    @property
    def _samples(self) -> CurrentSamples | None:
        """Solved channels from which others are made: of those kept, the most that are in the same functions.

        A segment that was built twice, on machines that round otherwise, may leave channels in functions unlike each other's.
        """
        return max((made for _, made in self._samples_in), key=lambda made: len(made.nodes), default=None)

    def _add(self, frequency_hz: float) -> None:
        """Take a solved channel among those from which others are made, if it is in functions of the segment."""
        solution = self.solved(frequency_hz)
        if not self._is_sample(solution):
            self._node_errors.setdefault(frequency_hz, (np.inf, np.inf))
            return
        self._probes[frequency_hz] = solution.statistics.probes
        d = solution.discretisation
        samples = next((made for space, made in self._samples_in if space.like(solution.space)), None)
        if samples is None:
            positions = self.station.positions
            distances = np.linalg.norm(positions[:, None] - positions[None, :], axis=2)
            ports = np.concatenate([np.arange(d.n_ports)[d.ports_of(int(a))] for a in sampled_antennas(distances)])
            samples = CurrentSamples(positions, solution.space.offsets, d.port_offsets, ports)
            self._samples_in.append((solution.space, samples))
        samples.add(frequency_hz, solution.coupled.currents)
        s = solution.statistics
        self._node_errors[frequency_hz] = (s.pattern_error, s.port_matrix_error)

    def _node_error(self, weighting: Weighting) -> tuple[float, float]:
        assert self._samples is not None
        errors = [self._node_errors[float(self._samples.nodes[i])] for i in weighting.nodes]
        return max(e for e, _ in errors), max(e for _, e in errors)

    def _weighting(self, frequency_hz: float) -> Weighting | None:
        """Return how a channel is made of others, or None where the estimate does not allow it."""
        samples = self._samples
        if samples is None or not len(samples.nodes) or not samples.nodes[0] <= frequency_hz <= samples.nodes[-1]:
            return None
        try:
            weighting = samples.weighting(frequency_hz, goal=0.1 * self.tolerance)
        except ModelRangeError:
            return None
        return weighting if weighting.error + self._node_error(weighting)[0] <= self.tolerance else None

    def complete(self, channels: Sequence[float] | None = None) -> list[float]:
        """Solve what is needed so that all channels between the solved ones can be made, and return what was added [Hz].

        Parameters
        ----------
        channels : sequence of float, optional
            Only these channels [Hz]; all of the segment by default.
        """
        wanted = np.asarray(self.plan.between if channels is None else channels, dtype=float)
        if not self._samples_in:
            for f in self.plan.solved:
                self._add(f)
            for f in self.plan.between:
                # Channels added by an earlier run are kept like those of the plan.
                if self._fetch(f) is not None:
                    self._add(f)
        added: list[float] = []
        done = set(self._node_errors)
        for f in self._seeds(wanted):
            if f not in done:
                self._add(f)
                added.append(f)
                done.add(f)
        open_ = [f for f in wanted if f not in done]
        while open_:
            failing = [f for f in open_ if self._weighting(f) is None]
            if not failing:
                break
            # Runs of neighbours that fail are halved by one solve each.
            place = {f: i for i, f in enumerate(wanted)}
            runs: list[list[float]] = []
            for f in failing:
                if runs and place[f] == place[runs[-1][-1]] + 1:
                    runs[-1].append(f)
                else:
                    runs.append([f])
            for run in runs:
                middle = run[len(run) // 2]
                self._add(middle)
                added.append(middle)
                done.add(middle)
            open_ = [f for f in failing if f not in done]
        return added

    def _known_features(self) -> list[Feature]:
        """Return the narrow resonances of the segment, from what is known of solved channels; no matrix is assembled for it."""
        if self.features is None:
            step = float(np.diff(self.plan.solved).max())
            if self._own is None:
                self._own = self._segment.own if self._segment is not None else self._own_blocks()
            space = self.solved(self.plan.solved[0]).space
            probed = {f: np.array(probes) for f, probes in self._probes.items() if probes}
            self.features = narrow_features(self._own, space, probed, 0.5 * step, REFERENCE_OHM)
        return self.features

    def _own_blocks(self) -> OwnBlocks:
        plan = self.plan
        _, made, _ = segment_discretisations(
            self.station, plan.low_hz, plan.high_hz, self.tolerance, {**self._options, "mesh_hz": plan.high_hz}
        )
        return OwnBlocks(made)

    def _seeds(self, wanted: np.ndarray) -> list[float]:
        """Return where the station is solved around narrow resonances that are near channels wanted [Hz].

        At distances from a resonance that grow by a factor, so that quotients and estimates meet it; on channels, where there
        are channels between solved ones, so that they are found again in a store.
        """
        if not self.solve_missing or not len(wanted):
            return []
        step = float(np.diff(self.plan.solved).max())
        grid = np.asarray(self.plan.between)
        taken = sorted(self._node_errors)
        seeds: list[float] = []
        for feature in self._known_features():
            if np.abs(wanted - feature.frequency_hz).min() > SEEDED_STEPS * step:
                continue
            distance = max(feature.half_width_hz, LEAST_SEED_HZ)
            ladder = [0.0]
            while distance < step:
                ladder += [-distance, distance]
                distance *= SEED_RATIO
            for offset in ladder:
                place = float(np.clip(feature.frequency_hz + offset, self.plan.low_hz, self.plan.high_hz))
                if len(grid):
                    place = float(grid[np.argmin(np.abs(grid - place))])
                room = 0.3 * max(abs(offset), feature.half_width_hz, LEAST_SEED_HZ)
                if all(abs(place - f) > min(room, 0.3 * abs(f - feature.frequency_hz) + room) for f in (*taken, *seeds)):
                    seeds.append(place)
        return sorted(seeds)

    def solution(self, frequency_hz: float) -> Solution:
        """Return the solution at a channel [Hz]: solved if the plan says so, else made from others where the estimate allows."""
        if frequency_hz in self.plan.solved:
            return self.solved(frequency_hz)
        if frequency_hz not in self._node_errors:
            self.complete([frequency_hz] if frequency_hz not in self.plan.between else None)
        if frequency_hz in self._node_errors or (weighting := self._weighting(frequency_hz)) is None:
            return self.solved(frequency_hz)
        found = self._combined(frequency_hz, weighting)
        if not is_passive(found.coupled.loaded_admittance, REFERENCE_OHM, self.tolerance):
            return self.solved(frequency_hz)
        self._counts = replace(self._counts, interpolated=self._counts.interpolated + 1)
        return found

    def _combined(self, frequency_hz: float, weighting: Weighting) -> Solution:
        samples, start = self._samples, time.perf_counter()
        assert samples is not None
        nodes = [self.solved(float(samples.nodes[i])) for i in weighting.nodes]
        currents = samples.combined(frequency_hz, weighting, [n.coupled.currents for n in nodes])
        admittance = samples.combined_ports(frequency_hz, weighting, [n.coupled.loaded_admittance for n in nodes])
        d = discretise(self.station, frequency_hz, self_blocks=False, mesh_hz=self.plan.high_hz, **self._options)  # type: ignore[arg-type]
        made: dict[int, PortCurrents] = {}
        for a, alone in enumerate(nodes[0].isolated):
            if id(alone) not in made:
                parts = [n.isolated[a] for n in nodes]
                made[id(alone)] = PortCurrents(
                    _summed(weighting, [p.currents for p in parts]), _summed(weighting, [p.loaded_admittance for p in parts])
                )
        pattern, ports = self._node_error(weighting)
        s = nodes[0].statistics
        statistics = SolveStatistics(
            s.strategy, s.precision, s.n_unknowns, s.n_ports, float("nan"), 
            mesh_error=max(n.statistics.mesh_error for n in nodes),
            seconds={"interpolate": time.perf_counter() - start}, n_functions=s.n_functions,
            pattern_error=pattern + weighting.error, port_matrix_error=ports + weighting.error, origin="interpolated currents",
        )  # fmt: skip
        isolated = tuple(made[id(alone)] for alone in nodes[0].isolated)
        return Solution(d, PortCurrents(currents, admittance), isolated, REFERENCE_OHM, statistics, nodes[0].space)


def _summed(weighting: Weighting, arrays: Sequence[ComplexArray]) -> ComplexArray:
    """Return the weighted sum of what one antenna alone does at the solved channels; it has no distance to cross."""
    return np.asarray(np.tensordot(weighting.weights, np.stack(arrays), axes=1))


def solve_band(
    station: Station,
    frequencies_hz: Sequence[float],
    *,
    tolerance: float = 1e-4,
    mesh: str | MeshSettings = "default",
    solve_step_hz: float | None = None,
    progress: Progress | None = None,
) -> Iterator[Solution]:
    """Give the solutions of a station at many channels, one after another, by the reduced solver.

    Parameters
    ----------
    station : Station
        Antennas and ground.
    frequencies_hz : sequence of float
        Channels, rising [Hz].
    tolerance : float, optional
        Error of embedded patterns relative to their peaks.
    mesh : str or MeshSettings, optional
        Mesh, held over a segment.
    solve_step_hz : float, optional
        About how far apart channels are solved [Hz], the others being interpolated; all are solved by default.
    progress : callable, optional
        Told the stage and the fraction done.

    Yields
    ------
    Solution
        With ``statistics.origin`` telling how it was made and ``statistics.pattern_error`` how well.

    Raises
    ------
    ModelRangeError, GeometryError, SolveError
        See the stages.
    """
    from elbowroom.job.solve import solve

    plans = plan_segments(station, frequencies_hz, tolerance, solve_step_hz=solve_step_hz)
    current: SegmentChannels | None = None
    for f in frequencies_hz:
        plan = next((p for p in plans if p.low_hz <= f <= p.high_hz), None)
        if plan is None:
            yield solve(station, f, solver="reduced", mesh=mesh, tolerance=tolerance, progress=progress)
            continue
        if current is None or current.plan is not plan:
            current = None
            keep = None if plan.between else _forget
            current = SegmentChannels(station, plan, tolerance, mesh=mesh, keep=keep, progress=progress)
        yield current.solution(float(f))


def _forget(frequency_hz: float, solution: Solution) -> None:
    """Keep nothing: no channel is going to be made from this one."""
