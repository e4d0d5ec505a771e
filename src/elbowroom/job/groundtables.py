"""Tables of real ground, kept in the store: made once for a ground, a frequency and an extent, whichever stations ask."""

from __future__ import annotations

from dataclasses import asdict

from elbowroom.base.arrays import ArraySpec
from elbowroom.geometry.stations import Station
from elbowroom.kernels.grounds import GroundKernels, ground_kernels
from elbowroom.store.hdf5 import Hdf5Store
from elbowroom.store.keys import content_key
from elbowroom.store.records import Record, Schema
from elbowroom.system.discretisation import extent_of

TABLE_VERSION = 1
"""Raised whenever tables are made differently beyond rounding."""

GROUND_SCHEMA = Schema(
    "ground-table",
    1,
    (
        ArraySpec(
            "coefficients", ("distance_node", "height_node", "part"), "f", "1",
            "Bicubic splines; real and imaginary parts of P, N, K and V times R exp(+jkR)",
        ),
        ArraySpec(
            "numbers", ("number",), "f", "1",
            "Wavenumber [rad/m], scale [m] and step of distances, scale [m], start and step of heights, largest distance, lowest "
            "and highest sum of heights [m], tolerance, largest error found",
        ),
    ),
    "SI units. Time factor exp(+j omega t). What a real ground adds to the kernel exp(-jkR)/R between points above it, against "
    "horizontal distance and sum of heights. Results of a model, not a measurement.",
)  # fmt: skip


def table_key(station: Station, frequency_hz: float) -> str:
    """Return the store's key of the table of a station's ground at a frequency [Hz]: stations of one extent share it."""
    return content_key(
        {
            "table_version": TABLE_VERSION,
            "ground": station.ground.at(frequency_hz),
            "frequency_hz": float(frequency_hz),
            "extent": extent_of(station),
        }
    )


def kept_ground(station: Station, frequency_hz: float, store: object) -> GroundKernels:
    """Return the fields of a station's ground, its tables from the store or made now and stored.

    Parameters
    ----------
    station : Station
        The station.
    frequency_hz : float
        [Hz]
    store : Store or None
        Where; nothing is kept without one on a disk.

    Returns
    -------
    GroundKernels

    Raises
    ------
    ModelRangeError, SolveError
        If the ground is not known at that frequency, or no table meets its tolerance.
    StoreError
        If the store cannot be read or written.
    """
    ground = ground_kernels(station.ground, frequency_hz, extent_of(station))
    if not station.ground.lossy or not isinstance(store, Hdf5Store):
        return ground
    tables, key = store.beside(GROUND_SCHEMA), table_key(station, frequency_hz)
    record = tables.get(key)
    if record is not None:
        ground.use_tables(record.arrays)
    elif (made := ground.tables()) is not None:
        described = {"kind": type(station.ground).__name__, **asdict(station.ground.at(frequency_hz))}
        tables.put(key, Record(made, {"frequency_hz": float(frequency_hz), "title": "tables of the ground", "ground": described}))
    return ground
