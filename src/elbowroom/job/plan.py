"""What a job will take: memory, disk and time, told before any work, and refused where the machine has less.

Memory is counted from what the direct solver keeps at its peak.  Time is arithmetic over a rate: the counts of operations
are those of the method, the overheads beside them were measured once, and the rate is measured on the spot.
"""

from __future__ import annotations

import shutil
import time
from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from functools import lru_cache
from pathlib import Path

import numpy as np

from elbowroom.base.constants import wavelength_of, wavenumber_of
from elbowroom.base.errors import ModelRangeError, ResourceError
from elbowroom.base.machine import available_memory_bytes
from elbowroom.base.sizes import readable_bytes
from elbowroom.geometry.mesh import MeshSettings, mesh_settings
from elbowroom.geometry.stations import Station
from elbowroom.job.checks import StationMeshes

PROCESS_BYTES = 300_000_000
"""The interpreter with its libraries and compiled kernels [byte]; 190 MB measured, with room for threads' work space."""

TILE_ORDER = 768
"""Order of the tiles of the matrix, which decides how much is kept beside the half matrix."""

STORE_OVERHEAD_BYTES = 15_500
"""Header, attributes and tables of one file of the store, the job's text apart [byte]; 15.2 kB measured."""

ASSEMBLY_OPERATIONS = 9200.0
"""Operations per entry of the matrix pair, n^2, at the rate of single-precision products: 15 s for n = 16384 at
165 GFLOP/s, measured."""

FACTOR_EFFICIENCY = 0.74
"""Rate of the factorisation over that of large products: 48 s for n = 16384 at 165 GFLOP/s, measured."""

DOUBLE_COST = 2.3
"""Time of double-precision products over that of single ones; measured."""

EXCITATION_OPERATIONS = {"mixed": 42.0, "double": 16.0, "single": 7.0}
"""Operations per n^2 P of solving for the ports, in single-precision operations: 4.4, 1.6 and 0.74 s for n = 8192 and
P = 256 at 165 GFLOP/s, measured.  Mixed takes two solves and one product with the matrix in double."""

DESIGN_OPERATIONS = 1.6e7
"""Operations per pair of elements of one antenna for its own block, there and on the finer mesh that states the error, in one
thread, at the rate of single-precision products with all; measured with dipoles (22 elements) and log-periodic antennas (188)."""

REDUCED_DESIGN_SECONDS = 0.8
"""Meshes, functions and skeletons of a design of 64 unknowns [s]; measured."""

REDUCED_PAIR_OPERATIONS = 9.0e6
"""Operations a pair of antennas of 64 unknowns costs, interactions and error estimate together; measured."""

SOIL_PAIR_COST, SOIL_ASSEMBLY_COST = 1.7, 2.5
"""Time of pairs in the reduced solver and of assembly in the direct one over soil, over that on a perfect plane; measured."""

SEGMENT_FUNCTIONS, SEGMENT_MATRICES = 1.15, 8.0
"""Functions of a segment over those of one frequency, and matrices of it that are held at once where it has `USUAL_INTERVALS`;
measured, at 350 MHz."""

USUAL_INTERVALS = 6
"""Intervals between frequencies at which a segment is assembled, unless the ground asks for more."""

SEGMENT_SHARE, BETWEEN_SHARE = 0.5, 0.2
"""Time of a channel whose matrix is interpolated, its part in the segment's own included, and of one that is made from others,
over that of solving it alone; measured, rounded up."""

_CALIBRATION_ORDER = 1024


@dataclass(frozen=True)
class Prediction:
    """What a solve, or several one after another, will take.

    Attributes
    ----------
    memory_bytes : int
        Peak memory [byte].
    disk_bytes : int
        Added to the store [byte].
    seconds : float
        Wall time [s], with an error of tens of per cent.
    n_unknowns : int
        Unknowns of the largest solve.
    serial_seconds : float
        Part of the time that no number of threads shortens [s].
    """

    memory_bytes: int
    disk_bytes: int
    seconds: float
    n_unknowns: int = 0
    serial_seconds: float = 0.0


def predict(
    n_unknowns: int,
    n_ports: int,
    n_antennas: int,
    precision: str = "mixed",
    *,
    operations_per_second: float | None = None,
    single_storage: bool = False,
    text_bytes: int = 0,
) -> Prediction:
    """Return what one solve by the direct solver takes.

    Parameters
    ----------
    n_unknowns, n_ports, n_antennas : int
        Size of the station.
    precision : str, optional
        ``"mixed"``, ``"double"`` or ``"single"``.
    operations_per_second : float, optional
        Rate of single-precision complex matrix products [real operations/s]; by default measured once per process.
    single_storage : bool, optional
        Whether currents are stored in single precision.
    text_bytes : int, optional
        Length of the text stored beside them.

    Returns
    -------
    Prediction

    Raises
    ------
    ModelRangeError
        If a size is not positive or the precision unknown.
    """
    if precision not in EXCITATION_OPERATIONS:
        msg = f"precision {precision!r}: expected {', '.join(EXCITATION_OPERATIONS)}"
        raise ModelRangeError(msg)
    if min(n_unknowns, n_ports, n_antennas) < 1:
        msg = f"a station of {n_antennas} antennas, {n_ports} ports and {n_unknowns} unknowns: positive numbers expected"
        raise ModelRangeError(msg)
    rate = calibrated_rate() if operations_per_second is None else operations_per_second
    n, p = float(n_unknowns), float(n_ports)
    double = DOUBLE_COST if precision == "double" else 1.0
    seconds = (
        ASSEMBLY_OPERATIONS * n**2 / rate
        + 4.0 / 3.0 * n**3 * double / (FACTOR_EFFICIENCY * rate)
        + EXCITATION_OPERATIONS[precision] * n**2 * p / rate
    )
    tile = min(n, TILE_ORDER)
    half = 0.5 * n * (n + tile)
    # The matrix stays in double to measure the residual, with the factors beside it; single turns it into its factors.
    factor_bytes = 16.0 if precision == "double" else 8.0
    matrix = 16.0 * half if precision == "single" else (16.0 + factor_bytes) * half
    factorising = n * tile * factor_bytes
    # Sources (real) and solutions; product, difference and correction of a refinement.
    exciting = n * p * (8.0 + 16.0 + 16.0 + 16.0 + factor_bytes)
    memory = PROCESS_BYTES + matrix + max(factorising, exciting)
    disk = stored_bytes(n, n, p, n_antennas, np.ceil(p / n_antennas), single=single_storage) + text_bytes
    return Prediction(int(memory), int(disk), float(seconds), n_unknowns)


def stored_bytes(
    n_unknowns: float,
    n_coordinates: float,
    n_ports: float,
    n_antennas: float,
    ports_of_antenna: float,
    function_numbers: float = 0.0,
    *,
    single: bool = False,
) -> float:
    """Return the length of a file of the store without the job's text [byte], counted from what is in it.

    Parameters
    ----------
    n_unknowns, n_ports, n_antennas : float
        Size of the station.
    n_coordinates : float
        Functions of all antennas; the unknowns themselves where there are none.
    ports_of_antenna : float
        Most ports of one antenna.
    function_numbers : float, optional
        Numbers in the functions of all kinds.
    single : bool, optional
        Whether currents are stored in single precision.
    """
    currents = n_coordinates * n_ports + n_unknowns * ports_of_antenna + function_numbers
    matrices = n_ports * n_ports + n_ports * ports_of_antenna
    # places, offsets and kinds of antennas; names of antennas and ports
    beside = 72.0 * n_antennas + 12.0 * (n_antennas + n_ports)
    return STORE_OVERHEAD_BYTES + (8.0 if single else 16.0) * currents + 16.0 * matrices + beside


def predict_station(
    station: Station,
    frequencies_hz: Sequence[float],
    mesh: str | MeshSettings = "default",
    precision: str = "mixed",
    *,
    operations_per_second: float | None = None,
    meshes: StationMeshes | None = None,
    single_storage: bool = False,
    text_bytes: int = 0,
) -> list[Prediction]:
    """Return what each frequency of a station takes, see `predict` and `total`; its meshes may be given."""
    meshes, settings = meshes or StationMeshes(station), mesh_settings(mesh)
    rate = calibrated_rate() if operations_per_second is None else operations_per_second
    predictions = []
    for frequency in frequencies_hz:
        made = [(m, count) for _, m, count in meshes.at(wavelength_of(frequency), settings)]
        unknowns = sum(m.n_unknowns * count for m, count in made)
        whole = predict(
            unknowns, len(station.port_names), len(station), precision,
            operations_per_second=rate, single_storage=single_storage, text_bytes=text_bytes,
        )  # fmt: skip
        serial = sum(DESIGN_OPERATIONS * m.n_elements**2 / rate for m, _ in made)
        more = (SOIL_ASSEMBLY_COST - 1.0) * ASSEMBLY_OPERATIONS * unknowns**2 / rate if station.ground.lossy else 0.0
        predictions.append(replace(whole, seconds=whole.seconds + more + serial, serial_seconds=serial))
    return predictions


def predicted_functions(station: Station, frequency_hz: float, tolerance: float) -> int:
    """Return about how many functions stand for a station's unknowns in the reduced solver.

    What a sphere around the antenna can radiate grows with its surface in square wavelengths; the numbers were fitted to crossed
    dipoles and log-periodic antennas from 50 to 350 MHz (8 to 33 functions), to about a third.
    """
    antennas = Counter(id(placed.antenna) for placed in station)
    designs = {id(placed.antenna): placed.antenna for placed in station}
    count = 0.0
    for key, design in designs.items():
        ends = np.array([[w.start, w.end] for w in design.wires]).reshape(-1, 3)
        radius = 0.5 * float(np.linalg.norm(np.ptp(ends, axis=0)))
        size = wavenumber_of(frequency_hz) * radius
        count += antennas[key] * (len(design.ports) + 6.0 + 0.55 * size**2 + 2.0 * np.log10(1e-3 / tolerance))
    return int(count)


def predict_reduced(
    station: Station,
    frequency_hz: float,
    mesh: str | MeshSettings = "default",
    tolerance: float = 1e-4,
    *,
    operations_per_second: float | None = None,
    meshes: StationMeshes | None = None,
    functions: float | None = None,
    single_storage: bool = False,
    text_bytes: int = 0,
) -> Prediction:
    """Return what one solve by the reduced solver takes.

    Disk and memory follow the number of functions, which is guessed to about a third unless it is given; see
    `elbowroom.job.sampling`.

    Parameters
    ----------
    station : Station
        The station.
    frequency_hz : float
        [Hz]
    mesh : str or MeshSettings, optional
        Mesh.
    tolerance : float, optional
        Of the reduced solver.
    operations_per_second : float, optional
        Rate of single-precision complex matrix products [real operations/s]; by default measured once per process.
    meshes : StationMeshes, optional
        Those of the station, if they are at hand.
    functions : float, optional
        Functions of all antennas together.
    single_storage : bool, optional
        Whether currents are stored in single precision.
    text_bytes : int, optional
        Length of the text stored beside them.
    """
    rate = calibrated_rate() if operations_per_second is None else operations_per_second
    meshes, settings = meshes or StationMeshes(station), mesh_settings(mesh)
    unknowns = meshes.unknowns(frequency_hz, settings)
    n = float(predicted_functions(station, frequency_hz, tolerance) if functions is None else functions)
    p, antennas = float(len(station.port_names)), len(station)
    own = unknowns / antennas
    serial = len(station.designs) * REDUCED_DESIGN_SECONDS * (own / 64.0) ** 1.5
    seconds = (
        serial
        + (SOIL_PAIR_COST if station.ground.lossy else 1.0) * REDUCED_PAIR_OPERATIONS * antennas**2 * own / 64.0 / rate
        + 4.0 / 3.0 * n**3 / (FACTOR_EFFICIENCY * rate)
        + EXCITATION_OPERATIONS["single"] * n**2 * p / rate
    )
    entry = 8.0 if tolerance >= 3e-5 else 16.0
    memory = PROCESS_BYTES + entry * 0.5 * n * (n + TILE_ORDER) + n * TILE_ORDER * entry + n * p * (16.0 + 16.0 + entry)
    memory += len(station.designs) * 64.0 * own**2 * 4.0 + antennas * own * 16.0 * 64.0 + 1.5e8
    made = meshes.at(wavelength_of(frequency_hz), settings)
    functions_stored = sum(m.n_unknowns * n / antennas * kinds for (_, m, _), kinds in zip(made, meshes.kind_counts, strict=True))
    disk = stored_bytes(unknowns, n, p, antennas, np.ceil(p / antennas), functions_stored, single=single_storage) + text_bytes
    return Prediction(int(memory), int(disk), float(seconds), unknowns, float(serial))


def in_segment(
    alone: Prediction, functions: float, tolerance: float, *, solved: bool, intervals: int = USUAL_INTERVALS
) -> Prediction:
    """Return what a channel takes whose matrix is interpolated, or that is made from solved ones, given what it takes alone.

    Parameters
    ----------
    alone : Prediction
        With the functions of the segment.
    functions : float
        Functions of all antennas together.
    tolerance : float
        Of the reduced solver.
    solved : bool
        Whether the channel is solved.
    intervals : int, optional
        Intervals between frequencies at which the segment is assembled.
    """
    entry = 8.0 if tolerance >= 3e-5 else 16.0
    samples = (SEGMENT_MATRICES + max(intervals - USUAL_INTERVALS, 0)) * entry * 0.5 * functions * (functions + TILE_ORDER)
    share = SEGMENT_SHARE if solved else BETWEEN_SHARE
    return replace(alone, memory_bytes=int(alone.memory_bytes + samples), seconds=share * alone.seconds)


def total(predictions: Sequence[Prediction]) -> Prediction:
    """Return what solves one after another take: the largest memory, the sums of disk and time."""
    return Prediction(
        max((p.memory_bytes for p in predictions), default=0),
        sum(p.disk_bytes for p in predictions),
        sum(p.seconds for p in predictions),
        max((p.n_unknowns for p in predictions), default=0),
        sum(p.serial_seconds for p in predictions),
    )


@lru_cache(maxsize=1)
def calibrated_rate() -> float:
    """Return the rate of complex single-precision matrix products on this machine [real operations/s], measured once.

    The better of two products of order 1024, about a tenth of a second; a complex multiplication with its addition counts
    as eight operations.
    """
    rng = np.random.default_rng(0)
    n = _CALIBRATION_ORDER
    a = (rng.standard_normal((n, n)) + 1j * rng.standard_normal((n, n))).astype(np.complex64)
    a[:64] @ a  # wakes the library's threads
    best = np.inf
    for _ in range(2):
        clock = time.perf_counter()
        a @ a
        best = min(best, time.perf_counter() - clock)
    return 8.0 * n**3 / best


def refuse_if_too_large(prediction: Prediction, *, folder: str | Path | None = None, available_bytes: int | None = None) -> None:
    """Raise ResourceError, with figures, if a prediction exceeds what the machine has.

    Parameters
    ----------
    prediction : Prediction
        What the work takes.
    folder : str or Path, optional
        Where the store is or will be; without it the disk is not looked at.
    available_bytes : int, optional
        Memory to compare with [byte]; by default what is available now.

    Raises
    ------
    ResourceError
        If there is too little memory or disk.
    """
    found = lacking(prediction, {} if folder is None else {Path(folder): prediction.disk_bytes}, available_bytes)
    if found:
        msg = too_large(found)
        raise ResourceError(msg)


def lacking(prediction: Prediction, disk_bytes: Mapping[Path, int], available_bytes: int | None = None) -> list[str]:
    """Return which memory or disk does not suffice, with figures; nothing if all is well.

    Parameters
    ----------
    prediction : Prediction
        Its memory counts.
    disk_bytes : mapping of Path to int
        What is added to each folder, which need not exist yet [byte]; folders on one disk share what is free.
    available_bytes : int, optional
        Memory to compare with [byte]; by default what is available now.
    """
    available = available_memory_bytes() if available_bytes is None else available_bytes
    found = []
    if prediction.memory_bytes > available:
        found.append(
            f"{readable_bytes(prediction.memory_bytes)} of memory needed for {prediction.n_unknowns} unknowns, "
            f"{readable_bytes(available)} available"
        )
    disks: dict[int, tuple[Path, Path, int]] = {}
    for folder, count in disk_bytes.items():
        place = folder.absolute()
        while not place.exists() and place != place.parent:
            place = place.parent
        device = place.stat().st_dev
        shown, _, before = disks.get(device, (folder, place, 0))
        disks[device] = (shown, place, before + count)
    for shown, place, count in disks.values():
        free = shutil.disk_usage(place).free
        if count > free:
            found.append(f"{readable_bytes(count)} of disk needed in {shown}, {readable_bytes(free)} free")
    return found


def too_large(found: Sequence[str]) -> str:
    """Return the message of a refusal from what `lacking` found."""
    return (
        f"this job is too large here: {'; '.join(found)}; nothing was started. Take fewer antennas or frequencies, the "
        "default mesh or a lower top frequency, or a machine with more of it"
    )


def format_seconds(seconds: float) -> str:
    """Return a time for people: ``8 s``, ``12 min``, ``3.5 h``."""
    if seconds < 90.0:
        return f"{seconds:.0f} s" if seconds >= 1.0 else "less than 1 s"
    if seconds < 5400.0:
        return f"{seconds / 60.0:.0f} min"
    return f"{seconds / 3600.0:.1f} h"
