"""One station at one or more frequencies: what is sent to a worker, and what comes back.

A worker needs nothing but the item, its store's folder and this package.  What is done with an item is a function of its
own (`WorkItem.work`), so that several frequencies of a station may be solved together.
"""

from __future__ import annotations

import time
import traceback
import warnings
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from elbowroom.base.errors import ElbowroomError, ResourceError
from elbowroom.base.machine import available_cores
from elbowroom.base.threads import threads
from elbowroom.geometry.stations import Station
from elbowroom.job.engine.split import seconds_with
from elbowroom.job.plan import Prediction
from elbowroom.store.records import Schema, StoreDamageWarning
from elbowroom.system.solving import SolveStatistics

Tell = Callable[[float, str, float], None]
"""Told the frequency [Hz], the stage and the fraction of it that is done."""


@dataclass(frozen=True)
class UnitReport:
    """A unit that is in the store now.

    Attributes
    ----------
    frequency_hz : float
        [Hz]
    key : str
        Key in the store.
    state : str
        ``"solved"``, or ``"from store"`` if it was there after all or another run solved it meanwhile.
    statistics : SolveStatistics
        What its solve cost and how well it came out.
    """

    frequency_hz: float
    key: str
    state: str
    statistics: SolveStatistics


@dataclass(frozen=True)
class UnitFailure:
    """A unit that could not be solved, and why.

    Attributes
    ----------
    frequency_hz : float
        [Hz]
    key : str
        Key in the store.
    cause : str
        For the user.
    exit_code : int
        Of the kind of error.
    details : str
        Trace back of errors that nobody foresaw; empty otherwise.
    """

    frequency_hz: float
    key: str
    cause: str
    exit_code: int
    details: str = ""


@dataclass(frozen=True)
class ItemResult:
    """What became of an item.

    Attributes
    ----------
    outcomes : tuple of UnitReport or UnitFailure
        One for each of its frequencies.
    seconds : float
        Wall time [s].
    peak_bytes : int
        Largest memory of the worker so far [byte]; 0 where the system does not say.
    notes : tuple of str
        Warnings.
    """

    outcomes: tuple[UnitReport | UnitFailure, ...]
    seconds: float
    peak_bytes: int = 0
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, eq=False)
class WorkItem:
    """One station, one or more frequencies, into one store.

    Attributes
    ----------
    number : int
        Tells items of a run apart.
    label : str
        For people.
    frequencies_hz : tuple of float
        [Hz]
    keys : tuple of str
        Their keys in the store.
    store_folder : Path
        The store, as all workers see it.
    work : callable
        A function of a module, called with the item and a `Tell` or None; returns an outcome for each frequency.
    payload : object
        What the function needs beside; it is pickled.
    prediction : Prediction
        What it takes, with all cores.
    threads : int
        Threads of BLAS and of compiled loops.
    """

    number: int
    label: str
    frequencies_hz: tuple[float, ...]
    keys: tuple[str, ...]
    store_folder: Path
    work: Callable[[WorkItem, Tell | None], list[UnitReport | UnitFailure]]
    payload: Any
    prediction: Prediction
    threads: int = 1

    @property
    def seconds(self) -> float:
        """Predicted time with its number of threads on a machine like this one [s]."""
        cores = available_cores()
        return seconds_with(self.prediction, min(self.threads, cores), cores)

    def failed(self, cause: str, exit_code: int, details: str = "") -> tuple[UnitFailure, ...]:
        """Return the failure of all of it."""
        return tuple(UnitFailure(f, k, cause, exit_code, details) for f, k in zip(self.frequencies_hz, self.keys, strict=True))


@dataclass(frozen=True)
class StationWork:
    """What `solve_units` needs beside frequencies and store.

    Attributes
    ----------
    station : Station
        The station.
    solvers : tuple of str
        ``"direct"`` or ``"reduced"`` for each frequency.
    mesh, precision, tolerance, single_storage
        As in `elbowroom.job.solve.solve`.
    attributes : dict
        Stored beside the results.
    schema : Schema
        Of the store.
    """

    station: Station
    solvers: tuple[str, ...]
    mesh: str
    precision: str
    tolerance: float
    single_storage: bool
    attributes: dict[str, Any]
    schema: Schema


def solve_units(item: WorkItem, tell: Tell | None = None) -> list[UnitReport | UnitFailure]:
    """Solve the frequencies of an item one after another and store them; one that fails does not stop the others.

    Parameters
    ----------
    item : WorkItem
        With a `StationWork` for payload.
    tell : callable, optional
        Told about stages.

    Returns
    -------
    list of UnitReport or UnitFailure
        In the order of the frequencies.
    """
    from elbowroom.job.solve import solve
    from elbowroom.store import Hdf5Store

    task: StationWork = item.payload
    store = Hdf5Store(item.store_folder, task.schema)
    outcomes: list[UnitReport | UnitFailure] = []
    for frequency, key, solver in zip(item.frequencies_hz, item.keys, task.solvers, strict=True):
        worked: list[str] = []

        def progress(stage: str, fraction: float, frequency: float = frequency, worked: list[str] = worked) -> None:
            if not stage.startswith("waiting"):
                worked.append(stage)
            if tell is not None:
                tell(frequency, stage, fraction)

        try:
            solution = solve(
                task.station, frequency, solver=solver, mesh=task.mesh, precision=task.precision, tolerance=task.tolerance,
                store=store, attributes=task.attributes, progress=progress, single_storage=task.single_storage,
            )  # fmt: skip
        except Exception as error:
            outcomes.append(UnitFailure(frequency, key, *described(error)))
        else:
            outcomes.append(UnitReport(frequency, key, "solved" if worked else "from store", solution.statistics))
    return outcomes


def described(error: Exception) -> tuple[str, int, str]:
    """Return what an error says to the user, its exit code, and its trace back if nobody foresaw it."""
    if isinstance(error, ElbowroomError):
        return str(error), error.exit_code, ""
    if isinstance(error, MemoryError):
        said = f" ({error})" if str(error) else ""
        return f"the memory was exhausted{said}; run fewer workers, or on a machine with more", ResourceError.exit_code, ""
    lines = "".join(traceback.format_exception(error))
    return f"a fault of the program: {type(error).__name__}: {error}", ElbowroomError.exit_code, lines


def run_item(item: WorkItem, tell: Tell | None = None) -> ItemResult:
    """Do an item with its number of threads in this process; whatever is wrong with it comes back as failures and notes."""
    clock = time.perf_counter()
    with threads(item.threads), warnings.catch_warnings(record=True) as caught:
        # Damaged files are told in any case; other warnings as whoever runs this has chosen.
        warnings.simplefilter("always", StoreDamageWarning)
        try:
            outcomes = tuple(item.work(item, tell))
        except Exception as error:
            outcomes = item.failed(*described(error))
    notes = tuple(dict.fromkeys(str(warning.message) for warning in caught))
    return ItemResult(outcomes, time.perf_counter() - clock, _peak_bytes(), notes)


def _peak_bytes() -> int:
    try:
        import resource
    except ImportError:  # not on this system
        return 0
    import sys

    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return int(peak) if sys.platform == "darwin" else 1024 * int(peak)
