"""Stations that stand next to one another, each solved with the antennas of its neighbours that are near.

Two antennas many wavelengths apart hardly change one another's currents.  A group too large to be solved together is solved
station by station, the antennas of other stations within a radius taken along as part of the structure, terminated like all.
What that leaves out is measured: one station is solved with a smaller radius, too, and twice the change of its patterns is the
error stated for all.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from elbowroom.base.errors import ModelRangeError
from elbowroom.geometry.stations import Station
from elbowroom.job.plan import Prediction, predict_reduced, total
from elbowroom.job.solve import solve
from elbowroom.radiation.solution import Solution
from elbowroom.store.records import Store

PROBE_RADIUS_PART = 0.6
"""Radius of the probe as a part of the radius; what lies between the two couples more strongly than all that lies outside."""

SAFETY = 2.0
"""Stated error over the change that the probe shows: coupling falls slowly, and antennas beyond the radius are many."""

PROBE_DIRECTIONS = 400
"""Directions by chance over the sky in which the probe's patterns are held against those of the whole radius."""


@dataclass(frozen=True, eq=False)
class GroupMember:
    """One station of a group, solved with what stands near it.

    Attributes
    ----------
    solution : Solution
        The station with its neighbours' nearest antennas.
    ports : int (P,)
        The station's own ports among those of the solution, in its own order.
    neighbours : int
        Antennas of other stations that were taken along.
    coupling_error : float
        Stated error of embedded patterns that antennas beyond the radius cause, relative to each pattern's peak; zero if there
        are none.
    """

    solution: Solution
    ports: np.ndarray
    neighbours: int
    coupling_error: float


def with_neighbours(stations: Sequence[Station], index: int, radius_m: float) -> tuple[Station, np.ndarray]:
    """Return one station of a group with the antennas of others that stand within a radius of any of its own.

    Parameters
    ----------
    stations : sequence of Station
        The group, in one frame, on one ground.
    index : int
        Which of them.
    radius_m : float
        [m]

    Returns
    -------
    station : Station
        Own antennas first; names carry the number of the station, as ``2:A017``.
    ports : int (P,)
        Own ports.

    Raises
    ------
    ModelRangeError
        If the group is empty, its grounds differ, or the radius is not positive.
    """
    if not stations or any(s.ground != stations[0].ground for s in stations):
        msg = "a group needs at least one station, and all on one ground"
        raise ModelRangeError(msg)
    if not (np.isfinite(radius_m) and radius_m > 0.0):
        msg = f"radius_m {radius_m!r}: expected a positive number"
        raise ModelRangeError(msg)
    own = stations[index]
    placed = [replace(p, name=f"{index}:{p.name}") for p in own]
    for number, other in enumerate(stations):
        if number == index:
            continue
        gaps = np.linalg.norm(other.positions[:, None, :2] - own.positions[None, :, :2], axis=2).min(axis=1)
        placed += [replace(p, name=f"{number}:{p.name}") for p, gap in zip(other, gaps, strict=True) if gap <= radius_m]
    return Station(placed, own.ground), np.arange(len(own.port_names))


def plan_group(
    stations: Sequence[Station], frequency_hz: float, radius_m: float, *, mesh: str = "default", tolerance: float = 1e-3
) -> Prediction:
    """Return what solving a group takes: the largest memory, and the sums of time and disk.  Nothing is solved.

    Parameters are those of :func:`solve_group`.
    """
    enlarged = [with_neighbours(stations, i, radius_m)[0] for i in range(len(stations))]
    return total([predict_reduced(s, frequency_hz, mesh, tolerance) for s in enlarged])


def solve_group(
    stations: Sequence[Station],
    frequency_hz: float,
    radius_m: float,
    *,
    mesh: str = "default",
    tolerance: float = 1e-3,
    store: Store | None = None,
) -> list[GroupMember]:
    """Solve each station of a group with its neighbours' antennas within a radius, by the reduced solver.

    Parameters
    ----------
    stations : sequence of Station
        The group, in one frame, on one ground.
    frequency_hz : float
        [Hz]
    radius_m : float
        Distance from any own antenna within which antennas of other stations are taken along [m].
    mesh : str, optional
        Mesh.
    tolerance : float, optional
        Of the reduced solver; what the radius leaves out comes on top and is stated apart.
    store : Store, optional
        Where to look first and to keep results.

    Returns
    -------
    list of GroupMember

    Raises
    ------
    ModelRangeError
        If the group or the radius make no sense.
    """

    def solved(index: int, radius: float) -> tuple[Solution, np.ndarray, int]:
        station, ports = with_neighbours(stations, index, radius)
        made = solve(station, frequency_hz, solver="reduced", mesh=mesh, tolerance=tolerance, store=store)
        return made, ports, len(station) - len(stations[index])

    whole = [solved(i, radius_m) for i in range(len(stations))]
    everyone = sum(len(s) for s in stations)
    if all(taken + len(own) == everyone for (_, _, taken), own in zip(whole, stations, strict=True)):
        return [GroupMember(solution, ports, taken, 0.0) for solution, ports, taken in whole]
    # The station with the most neighbours shows most of what a radius leaves out.
    probed = int(np.argmax([taken for _, _, taken in whole]))
    less, ports, _ = solved(probed, PROBE_RADIUS_PART * radius_m)
    rng = np.random.default_rng(PROBE_DIRECTIONS)
    theta = np.arccos(rng.uniform(-1.0 if stations[0].ground.open_below else 0.0, 1.0, PROBE_DIRECTIONS))
    phi = rng.uniform(0.0, 2.0 * np.pi, PROBE_DIRECTIONS)
    here, there = (s.embedded_patterns(theta, phi, ports=ports) for s in (whole[probed][0], less))
    peaks = np.linalg.norm(here, axis=-1).max(axis=1)
    error = SAFETY * float(np.max(np.linalg.norm(here - there, axis=-1).max(axis=1) / peaks))
    return [GroupMember(solution, own, taken, error) for solution, own, taken in whole]
