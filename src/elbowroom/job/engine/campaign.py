"""Jobs, one or many, as a list of units: which are there, which are to be solved, and what that takes.

Units of stations that are turned or shifted copies have one key; those that share a store too are solved once.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path

from elbowroom.base.errors import GeometryError, JobFileError, ResourceError
from elbowroom.base.inputs import real_path
from elbowroom.base.machine import available_cores, limit_of_memory_bytes
from elbowroom.job.channels import SegmentWork, solve_segment
from elbowroom.job.engine.items import StationWork, WorkItem, solve_units
from elbowroom.job.engine.split import SMALL_SECONDS, Split, choose_split
from elbowroom.job.pipeline import JobRun
from elbowroom.job.plan import Prediction, lacking, too_large, total
from elbowroom.job.sharing import worked_elsewhere
from elbowroom.job.solve import stored_statistics
from elbowroom.system.solving import SolveStatistics

NOMINAL_RATE = 1e11
"""Rate at which the thread count of a job's units is decided [real operations/s]; a measured one would decide differently from
one run to the next."""

READ_UNITS, READ_BYTES = 64, 256_000_000
"""Stored units are read to the last byte while they are no more, and no larger together, than this; beyond, their names,
lengths and headers are checked, and whoever uses them checks the rest."""


@dataclass
class CampaignUnit:
    """One station at one frequency.

    Attributes
    ----------
    run : JobRun
        The job it belongs to.
    frequency_hz : float
        [Hz]
    key : str
        Key in the store.
    stored : bool
        Whether the store has it.
    twin : CampaignUnit or None
        An earlier unit of the same key and store: what is solved for it serves this one.
    prediction : Prediction or None
        What solving it takes with all cores; None if it is stored or has a twin.
    statistics : SolveStatistics or None
        What its solve cost, once that is known: it was solved now, or read from the store.
    state : str
        ``"solved"`` if it was solved now.
    """

    run: JobRun
    frequency_hz: float
    key: str
    stored: bool
    twin: CampaignUnit | None = None
    prediction: Prediction | None = None
    statistics: SolveStatistics | None = None
    state: str = "from store"

    @property
    def path(self) -> Path:
        """The unit's file, present or not."""
        return self.run.store.path_of(self.key)


class Campaign:
    """The units of some jobs.

    Parameters
    ----------
    runs : sequence of JobRun
        The jobs, at the frequencies chosen.

    Attributes
    ----------
    units : list of CampaignUnit
        Job by job, in rising frequency.
    """

    def __init__(self, runs: Sequence[JobRun]) -> None:
        self.runs = tuple(runs)
        paths = [real_path(run.job.path) for run in self.runs]
        twice = {str(p) for p in paths if paths.count(p) > 1}
        if twice:
            msg = f"{', '.join(sorted(twice))} is given more than once"
            raise JobFileError(msg)
        self.units: list[CampaignUnit] = []
        # By store and key: what makes two units one.
        self._same: dict[tuple[Path, str], list[CampaignUnit]] = {}
        for run in self.runs:
            folder = real_path(run.job.store_folder)
            for frequency in run.frequencies_hz:
                key = run.key(frequency)
                same = self._same.setdefault((folder, key), [])
                same.append(CampaignUnit(run, frequency, key, key in run.store, twin=same[0] if same else None))
                self.units.append(same[-1])

    @property
    def to_solve(self) -> list[CampaignUnit]:
        """Units that are neither stored nor solved with another."""
        return [u for u in self.units if not u.stored and u.twin is None]

    def predict(self, *, sampled: bool = False) -> None:
        """Work out what each unit to be solved takes.

        Parameters
        ----------
        sampled : bool, optional
            Whether to make the functions of reduced units at a few frequencies, which takes seconds for each station; stations of
            the same antennas are taken to need as many for each.
        """
        wanting = {id(u.run) for u in self.to_solve} if sampled else set()
        samples: list[JobRun] = []
        for run in (r for r in self.runs if id(r) in wanting):
            alike = next((other for other in samples if run.functions_as(other)), None)
            if alike is None:
                run.sample_functions()
                samples.append(run)
        for unit in self.to_solve:
            unit.prediction = unit.run.predicted(unit.frequency_hz)

    def total(self) -> Prediction:
        """Return what all units to be solved take one after another with all cores."""
        return total([u.prediction for u in self.to_solve if u.prediction is not None])

    def check(self, *, available_bytes: int | None = None) -> None:
        """Refuse what cannot work, before anything is started; `predict` comes first.

        Parameters
        ----------
        available_bytes : int, optional
            Memory of whoever solves [byte]; that of this machine by default.

        Raises
        ------
        GeometryError
            If a model has errors; all are listed.
        StoreError
            If a store cannot be written.
        ResourceError
            If a unit needs more memory, or a disk gets more, than there is.
        """
        for run in self.runs:
            errors = tuple(p.text for p in run.problems() if p.severity == "error")
            if errors:
                msg = f"{run.job.path}: the station cannot be modelled"
                raise GeometryError(msg, problems=errors)
        if not self.to_solve:
            return
        for run in {u.run.job.store_folder: u.run for u in self.to_solve}.values():
            run.store.check_writable()
        found = self._lacking(available_bytes)
        if found and any(u.run.solver_at(u.frequency_hz) == "reduced" for u in self.to_solve):
            self.predict(sampled=True)
            found = self._lacking(available_bytes)
        if found:
            msg = too_large(found)
            raise ResourceError(msg)

    def _lacking(self, available_bytes: int | None) -> list[str]:
        """Return which memory or disk does not suffice, with figures."""
        disk: Counter[Path] = Counter()
        for unit in self.to_solve:
            disk[unit.run.job.store_folder] += unit.prediction.disk_bytes if unit.prediction else 0
        return lacking(self.total(), disk, available_bytes)

    def read_stored(self) -> None:
        """Read stored units to the last byte, if they are few; what is damaged is set aside, told, and to be solved again."""
        stored = [u for u in self.units if u.stored and u.twin is None]
        if len(stored) > READ_UNITS or sum(u.path.stat().st_size for u in stored) > READ_BYTES:
            return
        for unit in stored:
            record = unit.run.store.get(unit.key)
            for same in self._same[real_path(unit.run.job.store_folder), unit.key]:
                same.stored = record is not None
                same.statistics = None if record is None else stored_statistics(record)

    def split(self, workers: int | None = None, threads: int | None = None) -> Split:
        """Return how many workers solve these jobs, with how many threads each.

        Parameters
        ----------
        workers, threads : int, optional
            What the user wants; what is not given is chosen to fit.
        """
        cores = available_cores()
        if threads is not None:
            return Split(workers or max(1, cores // threads), threads)
        if workers is not None:
            return Split(workers, max(1, cores // workers))
        groups = [group for run in self.runs for group in _groups(run)]
        if not groups:
            return Split(1, cores)
        largest = max((group.nominal() for group in groups if group.run_ends), key=lambda p: p.seconds)
        return choose_split(len(groups), largest, cores=cores, memory_bytes=limit_of_memory_bytes())

    def here(self, split: Split) -> bool:
        """Return whether what is left is so little, or one item only, that this process does it sooner than any worker."""
        return len(self.items(split.threads)) <= 1 or (split.workers == 1 and self.total().seconds <= SMALL_SECONDS)

    def items(self, threads: int, *, longest_first: bool = True) -> list[WorkItem]:
        """Return the work that is to be done.

        Parameters
        ----------
        threads : int
            For each item.
        longest_first : bool, optional
            So that no long one is left alone at the end; otherwise in the order of the units.
        """
        made = self._segment_items(threads)
        for unit in self.to_solve:
            run, job = unit.run, unit.run.job
            if run.segment_of(unit.frequency_hz) is not None:
                continue
            about = {"title": job.title, "job_file": job.text}
            work = StationWork(
                run.station,
                (run.solver_at(unit.frequency_hz),),
                job.mesh,
                job.precision,
                job.tolerance,
                run.single_storage,
                about,
                run.store.schema,
            )
            assert unit.prediction is not None  # predict() comes first
            made.append(
                WorkItem(
                    0, self.label_of(unit), (unit.frequency_hz,), (unit.key,), job.store_folder.absolute(), solve_units, work,
                    unit.prediction, threads,
                )
            )  # fmt: skip
        if longest_first:
            made.sort(key=lambda item: -item.prediction.seconds)
        return [replace(item, number=i) for i, item in enumerate(made)]

    def _segment_items(self, threads: int) -> list[WorkItem]:
        """Return one item for the channels of each segment: they share its matrices."""
        groups: dict[tuple[int, float], list[CampaignUnit]] = {}
        for unit in self.to_solve:
            plan = unit.run.segment_of(unit.frequency_hz)
            if plan is not None:
                groups.setdefault((id(unit.run), plan.low_hz), []).append(unit)
        made = []
        for units in groups.values():
            run, job = units[0].run, units[0].run.job
            plan = run.segment_of(units[0].frequency_hz)
            assert plan is not None
            work = SegmentWork(run.station, plan, run.channel_settings, {"title": job.title, "job_file": job.text})
            label = self.label_of(units[0])
            if len(units) > 1:
                label = f"{label} to {units[-1].frequency_hz / 1e6:.10g} MHz"
            made.append(
                WorkItem(
                    0, label, tuple(u.frequency_hz for u in units), tuple(u.key for u in units), job.store_folder.absolute(),
                    solve_segment, work, total([u.prediction for u in units if u.prediction is not None]), threads,
                )
            )  # fmt: skip
        return made

    def label_of(self, unit: CampaignUnit) -> str:
        """Return what a unit is called: its frequency, and its job where there are several."""
        label = f"{unit.frequency_hz / 1e6:.10g} MHz"
        return label if len(self.runs) == 1 else f"{unit.run.job.path.parent.name}/{unit.run.job.path.name}, {label}"

    def units_of(self, item: WorkItem, index: int) -> list[CampaignUnit]:
        """Return all units that a frequency of an item serves, by its index."""
        return self._same[real_path(item.store_folder), item.keys[index]]

    def elsewhere(self, item: WorkItem) -> bool:
        """Return whether another run works on what is missing of an item."""
        return worked_elsewhere(self.units_of(item, 0)[0].run.store, item.keys)


@dataclass(frozen=True)
class _Group:
    """Frequencies of a job that are solved together, stored or not."""

    run: JobRun
    frequencies_hz: tuple[float, ...]
    run_ends: bool
    """Whether it is the last of its job: the largest, as meshes get finer with frequency."""

    def nominal(self) -> Prediction:
        """Return what it takes at the nominal rate, every frequency counted like the highest."""
        count = len(self.frequencies_hz)
        each = self.run.predicted(self.frequencies_hz[-1], operations_per_second=NOMINAL_RATE)
        return replace(each, seconds=count * each.seconds, serial_seconds=count * each.serial_seconds)


def _groups(run: JobRun) -> list[_Group]:
    """Return how the frequencies of a job fall into items if nothing is stored."""
    found: dict[float, list[float]] = {}
    for frequency in run.frequencies_hz:
        plan = run.segment_of(frequency)
        found.setdefault(frequency if plan is None else plan.low_hz, []).append(frequency)
    groups = [tuple(group) for group in found.values()]
    return [_Group(run, group, index == len(groups) - 1) for index, group in enumerate(groups)]


def predicted_seconds(campaign: Campaign, split: Split) -> float:
    """Return the predicted time of what is to be solved with so many workers and threads [s], the longest first."""
    free = [0.0] * split.workers
    for item in campaign.items(split.threads):
        free[0] += item.seconds
        free.sort()
    return max(free)
