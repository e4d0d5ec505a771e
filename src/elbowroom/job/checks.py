"""Problems of a station that can be found without solving it, and what its mesh looks like.

An error means that the model cannot be solved, or not truthfully; a warning that it can, with less accuracy.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np

from elbowroom.base.arrays import FloatArray
from elbowroom.base.constants import wavelength_of
from elbowroom.base.errors import GeometryError, ModelRangeError
from elbowroom.geometry.antennas import Antenna
from elbowroom.geometry.layouts import SAME_PLACE_M
from elbowroom.geometry.mesh import Mesh, MeshSettings, build_mesh, mesh_settings
from elbowroom.geometry.stations import Placed, Station
from elbowroom.geometry.wires import segment_distances, wire_end_points
from elbowroom.job.groundchecks import ground_doubts

RADIUS_LIMIT_WAVELENGTHS = 0.02
"""Wire radius beyond which the solver refuses."""

RADIUS_ADVISED_WAVELENGTHS = 0.01
"""Wire radius beyond which the current is no longer even round the wire; common practice, no source."""

PROXIMITY_RADII = 8.0
"""Distance of axes below which neighbours make the charge round a wire uneven.

Two parallel wires of radius a at distance d have the capacitance pi eps / arcosh(d / 2a) per length (W. R. Smythe,
"Static and Dynamic Electricity", two parallel cylinders); charge spread evenly gives ln(d / a) instead, at d = 8 a
0.8 % more than arcosh."""

IMAGE_RADII = 10.0
"""Distance from the image of a level wire, in radii, below which its charge is told to be uneven: by the same formulas, even
charge is 0.4 % off there, 0.8 % at 8, and 2.7 % at 5."""

SHORT_WIRE_RADII = 10.0
"""Length below which a wire is hardly thin; common practice, no source."""

MOST_UNKNOWNS_OF_ANTENNA = 1500
"""Unknowns of one antenna above which its own block takes longer than all else; log-periodic antennas of 2 x 10 dipoles
have about 600."""


@dataclass(frozen=True)
class Problem:
    """One thing found wrong.

    Attributes
    ----------
    severity : "error" or "warning"
        Whether the station can be solved all the same.
    text : str
        What was found where, and what was expected.
    """

    severity: Literal["error", "warning"]
    text: str

    def __str__(self) -> str:
        """Return ``severity: text``."""
        return f"{self.severity}: {self.text}"


def check_station(station: Station, frequencies_hz: Sequence[float], mesh: str | MeshSettings = "default") -> list[Problem]:
    """Return everything that can be found wrong with a station without solving it.

    Parameters
    ----------
    station : Station
        Antennas and ground.
    frequencies_hz : sequence of float
        Frequencies it is to be solved at [Hz].
    mesh : str or MeshSettings, optional
        ``"default"``, ``"refined"`` or settings.

    Returns
    -------
    list of Problem
        Errors first; empty if nothing was found.  What many antennas alike share is told once, with their number.

    Raises
    ------
    GeometryError
        If the mesh setting is unknown.
    ModelRangeError
        If there are no frequencies.
    """
    settings = mesh_settings(mesh)
    if len(frequencies_hz) == 0:
        msg = "no frequencies to check a station at; at least one expected"
        raise ModelRangeError(msg)
    problems = [*_same_place(station), *_wires_between(station)]
    for design in station.designs:
        problems += _wires_within(design)
        problems += _thickness(design, frequencies_hz)
    ground_problems = list(_ground(station))
    problems += ground_problems
    if not any(p.severity == "error" for p in ground_problems):
        problems += _near_ground(station)
        problems += [Problem("warning", text) for text in ground_doubts(station, frequencies_hz)]
        problems += _elements(station, frequencies_hz, settings)
    return sorted(problems, key=lambda p: p.severity != "error")


def mesh_statistics(station: Station, frequency_hz: float, mesh: str | MeshSettings = "default") -> dict[str, Any]:
    """Return how a station is cut into elements at one frequency.

    Parameters
    ----------
    station : Station
        Antennas and ground.
    frequency_hz : float
        Frequency [Hz].
    mesh : str or MeshSettings, optional
        ``"default"``, ``"refined"`` or settings.

    Returns
    -------
    dict
        ``frequency_hz``, ``wavelength_m``, ``antennas``, ``ports``; ``unknowns`` and ``elements`` of the whole station;
        ``elements_per_antenna`` and ``unknowns_per_antenna``, by name of the design (the largest, where antennas on the
        ground differ); ``order`` of the current polynomials; ``shortest_element_m``, ``longest_element_m``,
        ``shortest_element_wavelengths``, ``longest_element_wavelengths``, and ``shortest_element_radii``,
        ``longest_element_radii``: smallest and largest ratio of an element's length to its wire's radius.

    Raises
    ------
    GeometryError
        If an antenna cannot be meshed where it stands.
    """
    settings, wavelength = mesh_settings(mesh), wavelength_of(frequency_hz)
    unknowns = elements = 0
    per_antenna: dict[str, int] = {}
    unknowns_per_antenna: dict[str, int] = {}
    lengths: list[FloatArray] = []
    ratios: list[FloatArray] = []
    for placed, made, count in StationMeshes(station).at(wavelength, settings):
        name = placed.antenna.name
        unknowns += made.n_unknowns * count
        elements += made.n_elements * count
        per_antenna[name] = max(made.n_elements, per_antenna.get(name, 0))
        unknowns_per_antenna[name] = max(made.n_unknowns, unknowns_per_antenna.get(name, 0))
        lengths.append(made.length)
        ratios.append(made.length / made.radius)
    length, ratio = np.concatenate(lengths), np.concatenate(ratios)
    shortest, longest = float(length.min()), float(length.max())
    return {
        "frequency_hz": float(frequency_hz),
        "wavelength_m": wavelength,
        "antennas": len(station),
        "ports": len(station.port_names),
        "unknowns": unknowns,
        "elements": elements,
        "elements_per_antenna": per_antenna,
        "unknowns_per_antenna": unknowns_per_antenna,
        "order": settings.order,
        "shortest_element_m": shortest,
        "longest_element_m": longest,
        "shortest_element_wavelengths": shortest / wavelength,
        "longest_element_wavelengths": longest / wavelength,
        "shortest_element_radii": float(ratio.min()),
        "longest_element_radii": float(ratio.max()),
    }


class StationMeshes:
    """The different meshes of a station, found once for any number of frequencies.

    Parameters
    ----------
    station : Station
        Antennas and ground.

    Attributes
    ----------
    kind_counts : tuple of int
        For each mesh, how many attitudes and heights its antennas have.
    """

    def __init__(self, station: Station) -> None:
        from elbowroom.system.discretisation import grounded_ends

        free, conducting = station.ground.open_below, station.ground.conducting
        groups: dict[tuple[int, bytes], tuple[Placed, np.ndarray, int]] = {}
        kinds: dict[tuple[int, bytes], set[tuple]] = {}
        designs = station.designs
        design_index = {id(d): i for i, d in enumerate(designs)}
        ends_of: dict[tuple, np.ndarray] = {}
        for placed in station:
            if id(placed.antenna) not in design_index:
                design_index[id(placed.antenna)] = designs.index(placed.antenna)
            design = design_index[id(placed.antenna)]
            stance = (design, placed.attitude, placed.position[2])
            if stance not in ends_of:
                ends_of[stance] = (
                    np.zeros((len(placed.antenna.wires), 2), dtype=bool) if free else grounded_ends(placed, conducting=conducting)
                )
            ends = ends_of[stance]
            key = (design, ends.tobytes())
            first, _, count = groups.get(key, (placed, ends, 0))
            groups[key] = (first, ends, count + 1)
            kinds.setdefault(key, set()).add(stance)
        self._groups = list(groups.values())
        self.kind_counts = tuple(len(kinds[key]) for key in groups)

    def at(self, wavelength: float, settings: MeshSettings) -> Iterator[tuple[Placed, Mesh, int]]:
        """Yield each different mesh at a wavelength [m] with the first antenna that has it and the number of those that do."""
        for placed, ends, count in self._groups:
            yield placed, build_mesh(placed.antenna, wavelength, settings, ends), count

    def unknowns(self, frequency_hz: float, settings: MeshSettings) -> int:
        """Return the number of unknowns of the whole station at a frequency [Hz].

        Raises
        ------
        GeometryError
            If an antenna cannot be meshed where it stands.
        """
        return sum(made.n_unknowns * count for _, made, count in self.at(wavelength_of(frequency_hz), settings))


def _near_ground(station: Station) -> Iterator[Problem]:
    """Wires so low over a ground that their image is as near as another wire that would be doubted."""
    from elbowroom.system.discretisation import GROUND_CONTACT_M

    if station.ground.open_below:
        return
    told: set[tuple[int, float]] = set()
    for placed in station:
        key = (id(placed.antenna), placed.position[2])
        if key in told:
            continue
        for index, wire in enumerate(placed.antenna.wires):
            height = placed.to_station(np.array([wire.start, wire.end]))[:, 2]
            lowest = float(height.min())
            # An end on the ground is joined to its image; what counts there is how steeply the wire leaves.
            if lowest <= GROUND_CONTACT_M or 2.0 * lowest >= IMAGE_RADII * wire.radius:
                continue
            told.add(key)
            ratio = max(lowest / wire.radius, 1.01)
            percent = 100.0 * (np.log(2.0 * ratio) / np.arccosh(ratio) - 1.0)
            yield Problem(
                "warning",
                f"antenna {placed.name!r} ({placed.antenna.name!r}), wire {index}: {lowest * 1e3:.3g} mm above the ground, "
                f"{2.0 * lowest / wire.radius:.2g} radii from its image; below {IMAGE_RADII:g} the current is no longer even "
                "around the wire, and over a perfect plane the model's voltage of a level wire for a given charge is "
                f"{percent:.2g} % too high",
            )


def _same_place(station: Station) -> Iterator[Problem]:
    from scipy.spatial import cKDTree

    positions = station.positions
    told: set[int] = set()
    for i, j in sorted(cKDTree(positions).query_pairs(SAME_PLACE_M)):
        if j in told:  # many in one place: each is told once, not with every other
            continue
        told.add(j)
        distance = float(np.linalg.norm(positions[i] - positions[j]))
        where = "in one place" if distance == 0.0 else f"{distance * 1e3:.2g} mm apart"
        yield Problem(
            "error",
            f"antennas {station.placed[i].name!r} and {station.placed[j].name!r} stand {where}, at "
            f"{_point(positions[j])}; expected at least {SAME_PLACE_M * 1e3:g} mm",
        )


def _wires_between(station: Station) -> Iterator[Problem]:
    """Wires of different antennas that cross, touch or nearly do; antennas in one place are told elsewhere."""
    from scipy.spatial import cKDTree

    n = len(station)
    starts, ends, radii = [], [], []
    for placed in station:
        points = placed.to_station(np.array([[w.start, w.end] for w in placed.antenna.wires]))
        starts.append(points[:, 0])
        ends.append(points[:, 1])
        radii.append(np.array([w.radius for w in placed.antenna.wires]))
    # Spheres that hold all wires of an antenna, widened so that the spheres of antennas that are near meet.
    low = np.array([np.minimum(s, e).min(axis=0) for s, e in zip(starts, ends, strict=True)])
    high = np.array([np.maximum(s, e).max(axis=0) for s, e in zip(starts, ends, strict=True)])
    centre = 0.5 * (low + high)
    reach = np.array([
        max(np.linalg.norm(s - c, axis=1).max(), np.linalg.norm(e - c, axis=1).max()) + PROXIMITY_RADII * r.max()
        for s, e, c, r in zip(starts, ends, centre, radii, strict=True)
    ])  # fmt: skip
    tree = cKDTree(centre)
    for i in range(n):
        near = np.array([j for j in tree.query_ball_point(centre[i], reach[i] + reach.max()) if j > i], dtype=int)
        near = near[np.linalg.norm(centre[near] - centre[i], axis=1) <= reach[i] + reach[near]]
        near = near[np.linalg.norm(station.positions[near] - station.positions[i], axis=1) >= SAME_PLACE_M]
        if near.size == 0:
            continue
        near.sort()
        start, end = np.concatenate([starts[j] for j in near]), np.concatenate([ends[j] for j in near])
        radius = np.concatenate([radii[j] for j in near])
        owner = np.repeat(np.arange(near.size), [len(radii[j]) for j in near])
        wire = np.concatenate([np.arange(len(radii[j])) for j in near])
        distance = segment_distances(starts[i][:, None], ends[i][:, None], start[None], end[None])
        total = radii[i][:, None] + radius[None]
        thicker = np.maximum(radii[i][:, None], radius[None])
        slack = 1.0 - 1e-9
        close = distance < np.maximum(total, PROXIMITY_RADII * thicker) * slack
        for o in np.unique(owner[close.any(axis=0)]):
            mine = np.argwhere(close & (owner == o)[None])
            # The pair that is nearest for its thickness stands for the two antennas, one line instead of dozens.
            a, b = min(mine, key=lambda ab: distance[ab[0], ab[1]] / total[ab[0], ab[1]])
            yield _near_problem(
                f"wire {a} of antenna {station.placed[i].name!r}",
                f"wire {wire[b]} of antenna {station.placed[near[o]].name!r}",
                float(distance[a, b]),
                float(total[a, b]),
                PROXIMITY_RADII * float(thicker[a, b]),
                "move the antennas apart",
            )


def _near_problem(first: str, second: str, distance: float, total: float, advised: float, advice: str) -> Problem:
    pair = f"{first} and {second}"
    if distance < total * (1.0 - 1e-9):
        what = "cross" if distance < 1e-3 * total else f"come within {distance * 1e3:.3g} mm"
        return Problem("error", f"{pair} {what}; the sum of their radii is {total * 1e3:.3g} mm; {advice}")
    return Problem(
        "warning",
        f"{pair} come within {distance * 1e3:.3g} mm; below {advised * 1e3:.3g} mm ({PROXIMITY_RADII:g} radii) the uneven "
        "charge round wires, which the model leaves out, is no longer negligible",
    )


def _wires_within(design: Antenna) -> Iterator[Problem]:
    """Wires of one antenna that meet other than in a joint the mesh would see."""
    wires = design.wires
    scale = max(w.length for w in wires)
    # the same tolerance as the mesh's
    tolerance = max(1e-3 * min(w.radius for w in wires), 1e-9 * scale)
    label = f"antenna {design.name!r}: "
    start, end = wire_end_points(wires)
    radius = np.array([w.radius for w in wires])
    distances = segment_distances(start[:, None], end[:, None], start[None], end[None])
    thickers = np.maximum(radius[:, None], radius[None])
    near = np.triu(distances < PROXIMITY_RADII * thickers * (1.0 - 1e-9), 1)
    for a, b in np.argwhere(near):
        s1, e1, s2, e2 = start[a], end[a], start[b], end[b]
        distance, total, thicker = float(distances[a, b]), float(radius[a] + radius[b]), float(thickers[a, b])
        # Ends of either that lie on the other are joints.
        on_second = [p for p in (s1, e1) if _distance_to(p, s2, e2) <= tolerance]
        on_first = [p for p in (s2, e2) if _distance_to(p, s1, e1) <= tolerance]
        joints = _distinct([*on_second, *on_first], tolerance)
        names = (f"{label}wire {a}", f"wire {b}")
        if len(joints) > 1:
            where = f"between {_point(joints[0])} and {_point(joints[1])}"
            yield Problem("error", f"{names[0]} and {names[1]} lie on one another {where}")
        elif joints:
            # Joined, but at so small an angle that the tubes overlap far beyond the joint.
            reach1 = min(_distance_to(p, s2, e2) for p in (s1, e1) if np.linalg.norm(p - joints[0]) > tolerance)
            reach2 = min(_distance_to(p, s1, e1) for p in (s2, e2) if np.linalg.norm(p - joints[0]) > tolerance)
            apart = min(reach1, reach2)
            if apart < total:
                yield Problem(
                    "error",
                    f"{names[0]} and {names[1]} are joined at {_point(joints[0])} but stay within {apart * 1e3:.3g} mm "
                    f"over the whole length of one; the sum of their radii is {total * 1e3:.3g} mm",
                )
        else:
            advice = (
                f"to join them, let an end of one lie on the other to within {tolerance * 1e3:.2g} mm "
                "(wires that cross are to be split there)"
            )
            yield _near_problem(*names, distance, total, PROXIMITY_RADII * thicker, advice)


def _distance_to(point: FloatArray, start: FloatArray, end: FloatArray) -> float:
    along = np.clip(np.dot(point - start, end - start) / np.dot(end - start, end - start), 0.0, 1.0)
    return float(np.linalg.norm(start + along * (end - start) - point))


def _distinct(points: list[FloatArray], tolerance: float) -> list[FloatArray]:
    found: list[FloatArray] = []
    for p in points:
        if all(np.linalg.norm(p - q) > 3.0 * tolerance for q in found):
            found.append(p)
    return found


def _thickness(design: Antenna, frequencies_hz: Sequence[float]) -> Iterator[Problem]:
    """Wires too thick for the wavelength or for their length; alike wires are told together."""
    highest = max(frequencies_hz)
    wavelength = wavelength_of(highest)
    thick: dict[float, list[int]] = {}
    for i, wire in enumerate(design.wires):
        thick.setdefault(wire.radius, []).append(i)
        if wire.length < SHORT_WIRE_RADII * wire.radius * (1.0 - 1e-9):
            yield Problem(
                "warning",
                f"antenna {design.name!r}, wire {i}: its length of {wire.length:.4g} m is {wire.length / wire.radius:.3g} of its "
                f"radii ({wire.radius:.4g} m); at least {SHORT_WIRE_RADII:g} expected of a thin wire",
            )
    for radius, who in thick.items():
        ratio = radius / wavelength
        if ratio <= RADIUS_ADVISED_WAVELENGTHS:
            continue
        error = ratio > RADIUS_LIMIT_WAVELENGTHS
        limit = RADIUS_LIMIT_WAVELENGTHS if error else RADIUS_ADVISED_WAVELENGTHS
        yield Problem(
            "error" if error else "warning",
            f"antenna {design.name!r}, {_listed('wire', who)}: radius {radius:.4g} m is {ratio:.3g} wavelengths at "
            f"{highest / 1e6:g} MHz; the thin-wire model {'holds' if error else 'is accurate'} up to {limit:g} "
            f"({limit * wavelength_of(highest):.3g} m)",
        )


def _ground(station: Station) -> Iterator[Problem]:
    """Wires below, in or almost on a ground; antennas alike are told once."""
    from elbowroom.system.discretisation import GROUND_CONTACT_M

    if station.ground.open_below:
        return
    conducting = station.ground.conducting
    found: dict[tuple[str, int, str], list[str]] = {}
    for placed in station:
        height = placed.to_station(np.array([[w.start, w.end] for w in placed.antenna.wires]))[..., 2]
        for i, wire in enumerate(placed.antenna.wires):
            low, high = float(height[i].min()), float(height[i].max())
            if low < -GROUND_CONTACT_M:
                text = f"reaches {-low:.3g} m below the ground (z = 0); raise the antenna with up_m or change its wires"
            elif high <= GROUND_CONTACT_M:
                text = "lies in the ground's surface and can carry no field; raise it"
            elif not conducting and low <= GROUND_CONTACT_M:
                text = "ends on the ground; wires that end on or enter soil are not modelled; raise the antenna with up_m"
            elif GROUND_CONTACT_M < low < wire.radius:
                text = (
                    f"comes within {low * 1e3:.3g} mm of the ground, less than its radius ({wire.radius * 1e3:.3g} mm); "
                    f"{'end it on z = 0 to join it to the ground, or ' if conducting else ''}raise it"
                )
            else:
                continue
            found.setdefault((placed.antenna.name, i, text), []).append(placed.name)
    for (design, wire_index, text), names in found.items():
        more = f" (and {len(names) - 1} more alike)" if len(names) > 1 else ""
        yield Problem("error", f"antenna {names[0]!r}{more}, wire {wire_index} of {design!r} {text}")


def _elements(station: Station, frequencies_hz: Sequence[float], settings: MeshSettings) -> Iterator[Problem]:
    """Elements shorter than the wire is thick, and meshes that are unreasonably fine."""
    sides = [settings.end_radii, settings.gap_radii, *([] if settings.joint_radii is None else [settings.joint_radii])]
    # what the settings ask for on purpose is no problem of the antenna
    least = min(1.0, *sides)
    told: set[str] = set()
    for frequency in sorted({min(frequencies_hz), max(frequencies_hz)}, reverse=True):
        try:
            made = list(StationMeshes(station).at(wavelength_of(frequency), settings))
        except GeometryError as cause:
            yield Problem("error", str(cause))
            return
        for placed, m, _ in made:
            name = placed.antenna.name
            ratio = m.length / m.radius
            e = int(np.argmin(ratio))
            if ratio[e] < least * (1.0 - 1e-9) and f"short {name}" not in told:
                told.add(f"short {name}")
                yield Problem(
                    "warning",
                    f"antenna {name!r}, wire {m.wire[e]}: an element is {m.length[e]:.3g} m long, {ratio[e]:.2g} of the wire's "
                    f"radius ({m.radius[e]:.3g} m); at least {least:g} expected: widen the gap, or move the cuts that ends, "
                    "gaps and joints make farther apart",
                )
            if m.n_unknowns > MOST_UNKNOWNS_OF_ANTENNA and f"many {name}" not in told:
                told.add(f"many {name}")
                yield Problem(
                    "warning",
                    f"antenna {name!r}: {m.n_elements} elements and {m.n_unknowns} unknowns at {frequency / 1e6:g} MHz, "
                    f"more than {MOST_UNKNOWNS_OF_ANTENNA}; time grows with their cube",
                )


def _point(point: FloatArray) -> str:
    return "(" + ", ".join(f"{v:.4g}" for v in point) + ") m"


def _listed(noun: str, numbers: list[int]) -> str:
    if len(numbers) == 1:
        return f"{noun} {numbers[0]}"
    shown = ", ".join(str(n) for n in numbers[:6]) + (", ..." if len(numbers) > 6 else "")
    return f"{noun}s {shown}"
