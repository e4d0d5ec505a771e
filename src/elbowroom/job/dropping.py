"""Units whose currents are not kept once everything was made of them: what stays is their port matrices."""

from __future__ import annotations

from elbowroom.job.pipeline import JobRun
from elbowroom.job.solve import CONVENTIONS, SOLUTION_SCHEMA
from elbowroom.store import Hdf5Store
from elbowroom.store.records import Record, Schema

KEPT = ("loaded_admittance_s", "isolated_loaded_admittance_s", "position_m", "port_offset")

PORTS_SCHEMA = Schema("station-ports", 1, tuple(spec for spec in SOLUTION_SCHEMA.arrays if spec.name in KEPT), CONVENTIONS)
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
