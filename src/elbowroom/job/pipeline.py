"""From a job file to solutions: checks, plan, store and one frequency after another."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from elbowroom.base.errors import JobFileError
from elbowroom.geometry.stations import Station
from elbowroom.job.band import FEWEST_CHANNELS, SegmentPlan, plan_segments, solved_channels
from elbowroom.job.channels import ChannelSettings, StoredSegment, channel_key
from elbowroom.job.checks import Problem, StationMeshes, check_station
from elbowroom.job.groundchecks import HORIZON_NOTE, LOW_BEAM_DEG
from elbowroom.job.jobfile import Job
from elbowroom.job.jobtables import OnePort
from elbowroom.job.plan import (
    SEGMENT_FUNCTIONS,
    Prediction,
    in_segment,
    predict_reduced,
    predict_station,
    predicted_functions,
)
from elbowroom.job.sampling import FunctionCounts
from elbowroom.job.solve import SOLUTION_SCHEMA, StationKeys, chosen_solver, solve, strategy_of
from elbowroom.store import Hdf5Store
from elbowroom.store.records import DamageReport
from elbowroom.system.band_ground import segment_intervals
from elbowroom.system.terminations import PortTermination

if TYPE_CHECKING:
    from elbowroom.radiation.solution import Solution

DIFFERENT_DIRECTIONS_DEG = 10.0
"""Spread of port directions in a beam from which a warning is given; ports of one polarisation differ by far less."""

UnitProgress = Callable[[float, str, float], None]
"""Told the frequency [Hz], the stage and the fraction of it that is done."""


@dataclass(frozen=True)
class Unit:
    """One station at one frequency.

    Attributes
    ----------
    frequency_hz : float
        [Hz]
    key : str
        Key in the store.
    stored : bool
        Whether the store has it already.
    prediction : Prediction
        What solving it takes.
    """

    frequency_hz: float
    key: str
    stored: bool
    prediction: Prediction


class JobRun:
    """A job with its station and store, ready to be inspected or solved.

    Parameters
    ----------
    job : Job
        The job.
    frequencies_hz : sequence of float, optional
        Only these of the job's frequencies [Hz].
    report : callable, optional
        Told about damaged files in the store.

    Raises
    ------
    JobFileError
        If a frequency is not one of the job's.
    """

    def __init__(
        self,
        job: Job,
        *,
        frequencies_hz: Sequence[float] | None = None,
        report: Callable[[DamageReport], None] | None = None,
    ) -> None:
        self.job = job
        self.station: Station = job.station()
        if frequencies_hz:
            unknown = [f for f in frequencies_hz if not any(abs(f - known) < 0.5 for known in job.frequencies_hz)]
            if unknown:
                known = ", ".join(f"{f:.10g}" for f in job.frequencies_hz[:8])
                msg = f"{unknown[0]:.10g} Hz is not a frequency of this job; it has {known}"
                raise JobFileError(msg, file=job.path)
            self.frequencies_hz = tuple(k for k in job.frequencies_hz if any(abs(f - k) < 0.5 for f in frequencies_hz))
        else:
            self.frequencies_hz = job.frequencies_hz
        self._solvers: dict[float, str] = {}
        self._functions: FunctionCounts | None = None
        self._segments: list[SegmentPlan] | None = None
        self._intervals: dict[SegmentPlan, int] = {}
        self._stored_segment: StoredSegment | None = None
        self._keys, self._meshes = StationKeys(self.station), StationMeshes(self.station)
        options: dict[str, Any] = {} if report is None else {"report": report}
        self.store = Hdf5Store(job.store_folder, SOLUTION_SCHEMA, **options)

    @property
    def port_terminations(self) -> list[PortTermination]:
        """What every port sees at every frequency [ohm], in the order of the ports."""
        return self.job.port_terminations(self.station)

    def termination_at(self, frequency_hz: float) -> list[OnePort]:
        """Return what every port sees at a frequency [Hz]: ohms, ``"open"`` or ``"short"``, in the order of the ports."""
        return self.job.termination_values(self.station, frequency_hz)

    def problems(self) -> list[Problem]:
        """Return what is wrong or doubtful in the model and its terminations; nothing is solved."""
        found = check_station(self.station, self.frequencies_hz, self.job.mesh)
        doubts = [*self.job.terminations.doubts(), *self._beam_doubts(), *self._segment_doubts(), *self._step_doubts()]
        return [*found, *(Problem("warning", text) for text in doubts)]

    def _beam_doubts(self) -> list[str]:
        """Return which beams add up ports that point in different directions, or point where soil leaves no far field."""
        doubts = []
        for beam in self.job.beams:
            if self.station.ground.lossy and beam.zenith_angle_deg > LOW_BEAM_DEG:
                doubts.append(f"beam {beam.name!r} points to a zenith angle of {beam.zenith_angle_deg:g} deg. {HORIZON_NOTE}")
            ports = beam.amplitudes(self.station) > 0.0
            angles = self.station.port_nominal_phi_rad[ports]
            if not angles.size:
                continue
            mean = np.angle(np.exp(1j * angles).sum())
            spread = float(np.degrees(np.abs(np.angle(np.exp(1j * (angles - mean)))).max()))
            if spread > DIFFERENT_DIRECTIONS_DEG:
                doubts.append(
                    f"beam {beam.name!r} adds up ports {beam.port!r} whose directions lie up to {spread:.0f} deg from their "
                    "mean; their polarisations differ and the beam may not form"
                )
        return doubts

    def _segment_doubts(self) -> list[str]:
        """Return whether a soil's table keeps many channels from sharing matrices."""
        kinks = self.station.ground.kinks_hz
        channels = self.job.frequencies_hz
        inside = sum(channels[0] < f < channels[-1] for f in kinks)
        if not inside or self.job.segments != "auto" or self.job.solver == "direct" or len(channels) < FEWEST_CHANNELS:
            return []
        alone = sum(self.segment_of(f) is None and self.solver_at(f) == "reduced" for f in channels)
        if alone < FEWEST_CHANNELS:
            return []
        return [
            f"{alone} of {len(channels)} channels are assembled one by one, in which the table of the soil may have a part: "
            f"channels share matrices between two of its entries, of which {inside} lie in the band, where there are "
            f"{FEWEST_CHANNELS} or more"
        ]

    def _step_doubts(self) -> list[str]:
        """Return why a step of solving leads to no channel that is made from others."""
        step = self.job.solve_step_hz
        if step is None or any(plan.between for plan in self.segments):
            return []
        channels = self.job.frequencies_hz
        text = f"band.solve_step_hz = {step:.10g} has no effect, every channel is solved: "
        solved = solved_channels(channels, step)
        if not any(self.solver_at(f) == "reduced" for f in solved):
            why = "the reduced method interpolates, and a station of this size is solved directly"
            return [f'{text}{why}; method = "reduced" asks for it']
        if len(solved) == len(channels):
            return [text + f"the {len(channels)} channels are no closer than it"]
        return [
            text + f"it leaves {len(solved)} of {len(channels)} channels to be solved, and no segment of the band has the "
            f"{FEWEST_CHANNELS} solved ones that channels in between are made from; a smaller step gives more"
        ]

    def plan(self) -> list[Unit]:
        """Return the units of the job, which the store has, and what the others take."""
        predictions = [self.predicted(f) for f in self.frequencies_hz]
        units = []
        for frequency, prediction in zip(self.frequencies_hz, predictions, strict=True):
            key = self.key(frequency)
            units.append(Unit(frequency, key, key in self.store, prediction))
        return units

    def key(self, frequency_hz: float) -> str:
        """Return the store's key of the unit at a frequency [Hz]."""
        from elbowroom.geometry.mesh import mesh_settings
        from elbowroom.system.discretisation import FarSettings
        from elbowroom.system.self_block import NearSettings

        plan = self.segment_of(frequency_hz)
        if plan is not None:
            return channel_key(self._keys, plan, self.channel_settings, frequency_hz, solved=frequency_hz in plan.solved)
        strategy = strategy_of(
            self.solver_at(frequency_hz), self.job.precision, self.job.tolerance, single_storage=self.single_storage
        )
        return self._keys.key(frequency_hz, mesh_settings(self.job.mesh), NearSettings(), FarSettings(), strategy)

    def needed_keys(self) -> frozenset[str]:
        """Return the keys of all units that serve this job: of its frequencies, and of solved ones that others are made from."""
        found = {self.key(f) for f in self.frequencies_hz}
        for plan in self.segments:
            if plan.between:
                every = (*plan.solved, *plan.between)
                found |= {channel_key(self._keys, plan, self.channel_settings, f, solved=True) for f in every}
        return frozenset(found)

    @property
    def channel_settings(self) -> ChannelSettings:
        """How channels of segments are solved and kept."""
        return ChannelSettings(self.job.mesh, self.job.tolerance, self.job.solve_step_hz, self.single_storage)

    @property
    def segments(self) -> list[SegmentPlan]:
        """Segments of the job's whole band, whichever of its frequencies were chosen."""
        if self._segments is None:
            job = self.job
            self._segments = []
            if job.segments == "auto" and job.solver != "direct" and len(job.frequencies_hz) >= FEWEST_CHANNELS:
                reduced = [f for f in job.frequencies_hz if self.solver_at(f) == "reduced"]
                if len(reduced) >= FEWEST_CHANNELS:
                    self._segments = plan_segments(self.station, reduced, job.tolerance, solve_step_hz=job.solve_step_hz)
        return self._segments

    def segment_of(self, frequency_hz: float) -> SegmentPlan | None:
        """Return the segment that a frequency [Hz] is solved in, or None where it is assembled for itself."""
        return next((plan for plan in self.segments if plan.low_hz <= frequency_hz <= plan.high_hz), None)

    def _channel(self, plan: SegmentPlan) -> StoredSegment:
        """Return the segment's channels; only one segment is held at a time."""
        if self._stored_segment is None or self._stored_segment.plan is not plan:
            about = {"title": self.job.title, "job_file": self.job.text}
            self._stored_segment = StoredSegment(
                self.station, plan, self.channel_settings, self.store, keys=self._keys, attributes=about
            )
        return self._stored_segment

    @property
    def single_storage(self) -> bool:
        """Whether currents are stored in single precision."""
        return self.job.store_precision == "single"

    def solver_at(self, frequency_hz: float) -> str:
        """Return the solver of a frequency [Hz]: ``"direct"`` or ``"reduced"``."""
        from elbowroom.geometry.mesh import mesh_settings

        if frequency_hz not in self._solvers:
            self._solvers[frequency_hz] = chosen_solver(
                self.station, frequency_hz, mesh_settings(self.job.mesh), self.job.solver, self._meshes
            )
        return self._solvers[frequency_hz]

    def predicted(self, frequency_hz: float, *, operations_per_second: float | None = None) -> Prediction:
        """Return what the unit at a frequency [Hz] takes, at the rate of this machine or at another one."""
        job = self.job
        common: dict[str, Any] = {
            "operations_per_second": operations_per_second, "meshes": self._meshes, "single_storage": self.single_storage,
            "text_bytes": len(job.text.encode()),
        }  # fmt: skip
        if self.solver_at(frequency_hz) == "direct":
            return predict_station(self.station, [frequency_hz], job.mesh, job.precision, **common)[0]
        functions = None if self._functions is None else self._functions.at(frequency_hz)
        plan = self.segment_of(frequency_hz)
        if plan is not None:
            known = predicted_functions(self.station, frequency_hz, job.tolerance) if functions is None else functions
            shared = predict_reduced(
                self.station, frequency_hz, job.mesh, job.tolerance, functions=SEGMENT_FUNCTIONS * known, **common
            )
            if plan not in self._intervals:
                self._intervals[plan] = segment_intervals(self.station, plan.low_hz, plan.high_hz, job.tolerance)[0]
            return in_segment(
                shared, SEGMENT_FUNCTIONS * known, job.tolerance, solved=frequency_hz in plan.solved,
                intervals=self._intervals[plan],
            )  # fmt: skip
        return predict_reduced(self.station, frequency_hz, job.mesh, job.tolerance, functions=functions, **common)

    def sample_functions(self) -> None:
        """Make the first steps of the reduced solver at a few frequencies, so that memory and disk are predicted within 10 %.

        Seconds for each of up to three frequencies; nothing where all units are solved for all unknowns.
        """
        reduced = [f for f in self.frequencies_hz if self.solver_at(f) == "reduced"]
        if reduced and self._functions is None:
            self._functions = FunctionCounts(self.station, reduced, self.job.mesh, self.job.tolerance)

    def functions_as(self, other: JobRun) -> bool:
        """Take the functions of each antenna from another job of the same antennas, band and solver; say whether it is one."""
        ours, theirs = self.job, other.job
        same = (
            self.station.designs == other.station.designs
            and self.station.ground == other.station.ground
            and self.frequencies_hz == other.frequencies_hz
            and (ours.solver, ours.mesh, ours.tolerance) == (theirs.solver, theirs.mesh, theirs.tolerance)
        )
        if same and other._functions is not None:
            self._functions = other._functions.scaled(len(self.station) / len(other.station))
        return same

    def path_of(self, frequency_hz: float) -> Path:
        """Return the store's file of the unit at a frequency [Hz]."""
        return self.store.path_of(self.key(frequency_hz))

    def stored_solution(self, frequency_hz: float) -> Solution:
        """Return the solution at a frequency [Hz] from the store; solve nothing.

        Raises
        ------
        StoreError
            If the store does not hold it whole.
        """
        plan = self.segment_of(frequency_hz)
        if plan is not None:
            return self._channel(plan).solution(frequency_hz, only_stored=True)
        found = solve(
            self.station, frequency_hz, solver=self.solver_at(frequency_hz), mesh=self.job.mesh, precision=self.job.precision,
            tolerance=self.job.tolerance, store=self.store, only_stored=True, single_storage=self.single_storage,
        )  # fmt: skip
        return found

    def solution(self, frequency_hz: float, progress: UnitProgress | None = None) -> Solution:
        """Return the solution at a frequency [Hz], from the store or solved now and stored."""

        def tell(stage: str, fraction: float) -> None:
            if progress is not None:
                progress(frequency_hz, stage, fraction)

        plan = self.segment_of(frequency_hz)
        if plan is not None:
            return self._channel(plan).solution(frequency_hz, tell)
        return solve(
            self.station,
            frequency_hz,
            solver=self.solver_at(frequency_hz),
            mesh=self.job.mesh,
            precision=self.job.precision,
            tolerance=self.job.tolerance,
            store=self.store,
            attributes={"title": self.job.title, "job_file": self.job.text},
            progress=tell,
            single_storage=self.single_storage,
        )
