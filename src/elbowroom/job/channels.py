"""Channels of a band in a store: what their units are called, and solving them segment by segment into it.

A unit of a segment is like any other, its key telling the segment, on whose mesh and in whose functions it was solved; units
that are made from others tell the step of solving as well.  What a unit is made of is an attribute, ``origin``.
"""

from __future__ import annotations

from collections import OrderedDict
from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from elbowroom.base.errors import StoreError
from elbowroom.geometry.mesh import mesh_settings
from elbowroom.geometry.stations import Station
from elbowroom.job.band import SegmentChannels, SegmentPlan
from elbowroom.job.sharing import working_on
from elbowroom.job.solve import StationKeys, from_record, record_fits, to_record
from elbowroom.store.keys import content_key
from elbowroom.store.records import Record, Store
from elbowroom.system.discretisation import FarSettings, discretise
from elbowroom.system.self_block import NearSettings

if TYPE_CHECKING:
    from elbowroom.job.engine.items import Tell, UnitFailure, UnitReport, WorkItem
    from elbowroom.radiation.solution import Solution

HELD_SOLUTIONS = 16
"""Solved channels that are held in memory while others are made from them."""

ChannelProgress = Callable[[str, float], None]


@dataclass(frozen=True)
class ChannelSettings:
    """How the channels of a segment are solved and kept.

    Attributes
    ----------
    mesh : str
        Mesh.
    tolerance : float
        Error of embedded patterns that is aimed at.
    solve_step_hz : float or None
        About how far apart channels are solved [Hz]; all are if there is none.
    single_storage : bool
        Whether currents are stored in single precision.
    """

    mesh: str
    tolerance: float
    solve_step_hz: float | None = None
    single_storage: bool = False


def channel_key(keys: StationKeys, plan: SegmentPlan, settings: ChannelSettings, frequency_hz: float, *, solved: bool) -> str:
    """Return the store's key of a channel of a segment.

    Functions of a segment depend on the ground all over it, so that a ground that varies with frequency is told where it bends
    and at the ends, in addition to what it is at the channel.

    Parameters
    ----------
    keys : StationKeys
        Of the station.
    plan : SegmentPlan
        The segment.
    settings : ChannelSettings
        How it is solved.
    frequency_hz : float
        The channel [Hz].
    solved : bool
        Whether it is solved whatever the others are, or made from them where that serves.
    """
    how = f"{settings.tolerance:.6g}, from {plan.low_hz:.12g} to {plan.high_hz:.12g} Hz"
    if not solved:
        how = f"{how}, solved every {settings.solve_step_hz:.12g} Hz"
    if settings.single_storage:
        how = f"{how}, stored in single precision"
    ground = keys.ground
    bends = (plan.low_hz, *(f for f in ground.kinks_hz if plan.low_hz < f < plan.high_hz), plan.high_hz)
    grounds = [ground.at(f) for f in bends]
    if any(other != grounds[0] for other in grounds[1:]):
        how = f"{how}, over {content_key(grounds)}"
    return keys.key(frequency_hz, mesh_settings(settings.mesh), NearSettings(), FarSettings(), ("segment", how))


class StoredSegment:
    """Channels of one segment in a store, solved into it when they are not there.

    Parameters
    ----------
    station : Station
        Antennas and ground.
    plan : SegmentPlan
        The segment.
    settings : ChannelSettings
        How it is solved and kept.
    store : Store
        Where units are kept.
    keys : StationKeys, optional
        Of the station, if they are at hand.
    attributes : dict, optional
        Stored beside results, for the reader of the file.

    Attributes
    ----------
    solved_now : set of float
        Channels that were solved, and not fetched [Hz].
    """

    def __init__(
        self,
        station: Station,
        plan: SegmentPlan,
        settings: ChannelSettings,
        store: Store,
        *,
        keys: StationKeys | None = None,
        attributes: dict[str, Any] | None = None,
    ) -> None:
        self.station, self.plan, self.settings, self.store = station, plan, settings, store
        self._keys, self._attributes = keys or StationKeys(station), attributes or {}
        self._progress: ChannelProgress | None = None
        self._solved = frozenset(plan.solved)
        self.solved_now: set[float] = set()
        self._held: OrderedDict[float, Solution] = OrderedDict()
        self.channels = SegmentChannels(
            station, plan, settings.tolerance, mesh=settings.mesh, fetch=self._fetch, keep=self._keep, progress=self._tell
        )

    def _tell(self, stage: str, fraction: float) -> None:
        if self._progress is not None:
            self._progress(stage, fraction)

    def key(self, frequency_hz: float) -> str:
        """Return the key of a channel [Hz]."""
        return channel_key(self._keys, self.plan, self.settings, frequency_hz, solved=frequency_hz in self._solved)

    def _node_key(self, frequency_hz: float) -> str:
        return channel_key(self._keys, self.plan, self.settings, frequency_hz, solved=True)

    def _loaded(self, record: Record | None, frequency_hz: float) -> Solution | None:
        if record is None:
            return None
        d = discretise(self.station, frequency_hz, mesh=self.settings.mesh, mesh_hz=self.plan.high_hz, self_blocks=False)
        return from_record(record, d) if record_fits(record, d) else None

    def _hold(self, frequency_hz: float, solution: Solution) -> None:
        self._held[frequency_hz] = solution
        self._held.move_to_end(frequency_hz)
        while len(self._held) > HELD_SOLUTIONS:
            self._held.popitem(last=False)

    def _fetch(self, frequency_hz: float) -> Solution | None:
        if frequency_hz in self._held:
            self._held.move_to_end(frequency_hz)
            return self._held[frequency_hz]
        found = self._loaded(self.store.get(self._node_key(frequency_hz)), frequency_hz)
        if found is not None and self.plan.between:
            self._hold(frequency_hz, found)
        return found

    def _keep(self, frequency_hz: float, solution: Solution) -> None:
        self.store.put(self._node_key(frequency_hz), self._record(solution))
        self.solved_now.add(frequency_hz)
        if self.plan.between:
            self._hold(frequency_hz, solution)

    def _record(self, solution: Solution) -> Record:
        return to_record(solution, self._attributes, single_storage=self.settings.single_storage)

    def solution(self, frequency_hz: float, progress: ChannelProgress | None = None, *, only_stored: bool = False) -> Solution:
        """Return the solution at a channel [Hz], from the store or solved now and stored.

        Parameters
        ----------
        frequency_hz : float
            A channel of the segment [Hz].
        progress : callable, optional
            Told the stage and the fraction done.
        only_stored : bool, optional
            Whether to raise rather than solve what the store does not hold.

        Raises
        ------
        StoreError
            If the store cannot be used, or does not hold what it must.
        SolveError
            If the station cannot be solved there.
        """
        self._progress = progress
        key = self.key(frequency_hz)
        found = self._loaded(self.store.get(key), frequency_hz)
        if found is not None:
            return found
        if only_stored:
            msg = f"{frequency_hz / 1e6:g} MHz is not in the store, or its file is damaged; solve it first"
            raise StoreError(msg)
        self.store.check_writable()
        with working_on(self.store, key, progress) as arrived:
            found = self._loaded(arrived, frequency_hz)
            if found is None:
                self._tell("channel", 0.0)
                found = self.channels.solution(frequency_hz)
                if frequency_hz not in self._solved:
                    self.store.put(key, self._record(found))
            return found


@dataclass(frozen=True)
class SegmentWork:
    """What `solve_segment` needs beside frequencies and store.

    Attributes
    ----------
    station : Station
        The station.
    plan : SegmentPlan
        The segment.
    settings : ChannelSettings
        How it is solved and kept.
    attributes : dict
        Stored beside the results.
    """

    station: Station
    plan: SegmentPlan
    settings: ChannelSettings
    attributes: dict[str, Any]


def solve_segment(item: WorkItem, tell: Tell | None = None) -> list[UnitReport | UnitFailure]:
    """Solve the channels of an item, all of one segment, and store them; one that fails does not stop the others.

    Parameters
    ----------
    item : WorkItem
        With a `SegmentWork` for payload.
    tell : callable, optional
        Told about stages.

    Returns
    -------
    list of UnitReport or UnitFailure
        In the order of the frequencies.
    """
    from elbowroom.job.engine.items import UnitFailure, UnitReport, described
    from elbowroom.job.solve import SOLUTION_SCHEMA
    from elbowroom.store import Hdf5Store

    task: SegmentWork = item.payload
    segment = StoredSegment(
        task.station, task.plan, task.settings, Hdf5Store(item.store_folder, SOLUTION_SCHEMA), attributes=task.attributes
    )
    outcomes: list[UnitReport | UnitFailure] = []
    for frequency, key in zip(item.frequencies_hz, item.keys, strict=True):
        worked: list[str] = []

        def progress(stage: str, fraction: float, frequency: float = frequency, worked: list[str] = worked) -> None:
            if not stage.startswith("waiting"):
                worked.append(stage)
            if tell is not None:
                tell(frequency, stage, fraction)

        try:
            solution = segment.solution(frequency, progress)
        except Exception as error:
            outcomes.append(UnitFailure(frequency, key, *described(error)))
        else:
            # Channels that others are made from are solved with the first of those.
            state = "solved" if worked or frequency in segment.solved_now else "from store"
            outcomes.append(UnitReport(frequency, key, state, solution.statistics))
    return outcomes
