"""Units whose currents are not kept once everything was made of them: what stays is their port matrices."""

from __future__ import annotations

import numpy as np

from elbowroom.base.arrays import ComplexArray
from elbowroom.geometry.mesh import mesh_settings
from elbowroom.job.pipeline import JobRun, UnitProgress
from elbowroom.job.solve import CONVENTIONS, SOLUTION_SCHEMA, stored_statistics
from elbowroom.radiation.solution import Solution
from elbowroom.store import Hdf5Store
from elbowroom.store.records import Record, Schema
from elbowroom.system.discretisation import discretise
from elbowroom.system.solving import PortCurrents

KEPT = ("loaded_admittance_s", "isolated_loaded_admittance_s", "position_m", "port_offset", "unknown_offset")

PORTS_SCHEMA = Schema("station-ports", 2, tuple(spec for spec in SOLUTION_SCHEMA.arrays if spec.name in KEPT), CONVENTIONS)
"""What stays of a solution, under the same key."""


def drop_currents(run: JobRun, frequency_hz: float) -> None:
    """Replace a stored unit by its port matrices, the loaded admittance and what was recorded with them.

    The matrices are written before the currents go, so that an interruption loses nothing.  Other jobs of the same store and key
    lose the currents too.

    Parameters
    ----------
    run : JobRun
        The job.
    frequency_hz : float
        [Hz]

    Raises
    ------
    StoreError
        If the store cannot be read or written.
    """
    key = run.key(frequency_hz)
    record = run.store.get(key)
    if record is None:
        return
    matrices = Hdf5Store(run.job.store_folder, PORTS_SCHEMA)
    matrices.put(key, Record({name: record.arrays[name] for name in KEPT}, record.attributes))
    run.store.remove(key)


def has_ports(run: JobRun, frequency_hz: float) -> bool:
    """Return whether the store has a unit, or what stayed of it."""
    key = run.key(frequency_hz)
    return key in run.store or key in Hdf5Store(run.job.store_folder, PORTS_SCHEMA)


def ports_solution(run: JobRun, frequency_hz: float, progress: UnitProgress | None = None) -> Solution:
    """Return a solution that answers for its ports: whole if the store has it, without currents if these were dropped.

    What is in neither form is solved now and stored.

    Parameters
    ----------
    run : JobRun
        The job.
    frequency_hz : float
        [Hz].
    progress : callable, optional
        Told about solves.

    Raises
    ------
    ElbowroomError
        If it cannot be solved or stored.
    """
    if run.key(frequency_hz) in run.store:
        return run.solution(frequency_hz, progress)
    record = Hdf5Store(run.job.store_folder, PORTS_SCHEMA).get(run.key(frequency_hz))
    if record is None:
        return run.solution(frequency_hz, progress)
    d = discretise(run.station, frequency_hz, mesh=mesh_settings(run.job.mesh), self_blocks=False)
    alone = []
    for antenna in range(len(d.station)):
        rows = d.ports_of(antenna)
        matrix = record.arrays["isolated_loaded_admittance_s"][rows]
        alone.append(PortCurrents(_no_currents(len(matrix)), matrix[:, : len(matrix)]))
    coupled = PortCurrents(_no_currents(d.n_ports), record.arrays["loaded_admittance_s"])
    return Solution(d, coupled, tuple(alone), float(record.attributes["reference_ohm"]), stored_statistics(record))


def _no_currents(n_ports: int) -> ComplexArray:
    """Return currents of no unknowns, which no pattern can be made of by mistake: their number does not fit."""
    return np.empty((0, n_ports), dtype=complex)
