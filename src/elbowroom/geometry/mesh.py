"""From wires to elements and unknowns: breaking at joints and gaps, grading, continuity of current.

On every element the current is a polynomial, written in local functions 0 .. order: two rooftop halves (1 at the
element's start, 1 at its end) and integrated Legendre bubbles that vanish at both ends.  The unknowns of an antenna
are the bubbles of its elements and, at a node where M wire ends meet, M - 1 rooftops; an end on the ground keeps its
rooftop half, whose other half is the image's.

The current of a tube has a square-root edge at a free end and a logarithm in its charge at the edge of a gap, at which
uniform meshes of any order stall; elements therefore shrink geometrically towards both.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from elbowroom.base.arrays import FloatArray
from elbowroom.base.errors import GeometryError
from elbowroom.geometry.antennas import Antenna, Gap


@dataclass(frozen=True)
class MeshSettings:
    """How finely a wire is cut, and the degree of the current on each element.

    Parameters
    ----------
    order : int
        Degree of the current polynomial, 1 (rooftop) to 8.
    end_radii, gap_radii : float
        Length of the element at a free end and beside a gap, in wire radii.
    joint_radii : float or None
        The same at joints of two or more wires; ``None`` leaves joints ungraded.
    floor_wavelengths : float
        Elements at ends and gaps need not be shorter than this times the wavelength (or times four times
        the wire's length, if that is less): very thin wires gain nothing from it.
    growth : float
        Ratio of the lengths of neighbouring graded elements.
    longest_wavelengths : float
        Longest element, in wavelengths.
    """

    order: int = 3
    end_radii: float = 1.5
    gap_radii: float = 3.0
    joint_radii: float | None = None
    floor_wavelengths: float = 0.002
    growth: float = 8.0
    longest_wavelengths: float = 0.35

    def __post_init__(self) -> None:
        if not 1 <= int(self.order) <= 8 or int(self.order) != self.order:
            msg = f"mesh order {self.order!r}: expected a whole number from 1 to 8"
            raise GeometryError(msg)
        positive = ("end_radii", "gap_radii", "longest_wavelengths")
        for name in positive:
            value = getattr(self, name)
            if not 0.0 < value < np.inf:
                msg = f"mesh {name} {value!r}: expected a positive number"
                raise GeometryError(msg)
        if self.longest_wavelengths > 0.5:
            msg = f"mesh longest_wavelengths {self.longest_wavelengths!r}: expected at most 0.5"
            raise GeometryError(msg)
        if not 1.5 <= self.growth <= 20.0:
            msg = f"mesh growth {self.growth!r}: expected a ratio from 1.5 to 20"
            raise GeometryError(msg)
        if not 0.0 <= self.floor_wavelengths <= 0.1:
            msg = f"mesh floor_wavelengths {self.floor_wavelengths!r}: expected 0 to 0.1"
            raise GeometryError(msg)


MESHES = {
    "default": MeshSettings(),
    "refined": MeshSettings(
        order=5,
        end_radii=0.25,
        gap_radii=0.5,
        joint_radii=2.0,
        floor_wavelengths=1e-4,
        growth=8.0,
        longest_wavelengths=0.3,
    ),
}
"""Named settings.  Over dipoles of 0.3-1.25 wavelengths and radii of 1e-5 to 5e-3 wavelengths the input admittance is
within 1e-2 of the converged value with ``default`` and 1e-3 with ``refined`` (measured by ``validation/benchmarks``)."""


def mesh_settings(mesh: str | MeshSettings) -> MeshSettings:
    """Return the settings of that name, or the settings themselves; raise GeometryError for an unknown name."""
    if isinstance(mesh, MeshSettings):
        return mesh
    if mesh not in MESHES:
        msg = f"mesh {mesh!r} is not known: expected {' or '.join(map(repr, MESHES))}, or MeshSettings"
        raise GeometryError(msg)
    return MESHES[mesh]


def finer_mesh(settings: MeshSettings) -> MeshSettings:
    """Return a mesh whose error is several times smaller, so that the change of a result stands for its error.

    That is the ``refined`` setting, or one order higher with half the elements at ends and gaps where ``refined``, or an order
    as high, is used already.
    """
    refined = MESHES["refined"]
    if settings.order < refined.order:
        return refined
    return replace(
        settings, order=min(settings.order + 1, 8), end_radii=0.5 * settings.end_radii, gap_radii=0.5 * settings.gap_radii,
        floor_wavelengths=0.5 * settings.floor_wavelengths,
    )  # fmt: skip


def one_order_up(settings: MeshSettings) -> MeshSettings:
    """Return the same mesh with the next order: the nested pair that error estimates compare."""
    return replace(settings, order=settings.order + 1)


@dataclass(frozen=True)
class Mesh:
    """Elements and unknowns of one antenna in its own frame.

    Attributes
    ----------
    order : int
        Polynomial degree p of the current.
    start, end : float64 (E, 3)
        End points of the elements [m].
    radius : float64 (E,)
        Wire radius [m].
    wire : int (E,)
        Index of the wire that each element lies on.
    expansion : float64 (E, p+1, N)
        Coefficient of each local function in each unknown.
    gap_vectors : float64 (G, N)
        Mean over the gap of each unknown's current: row p dotted with the unknowns is the port current.
    load_vectors : float64 (L, N)
        The same for the lumped loads.
    grounded : bool (E, 2)
        Whether the element's start or end lies on the ground.
    """

    order: int
    start: FloatArray
    end: FloatArray
    radius: FloatArray
    wire: np.ndarray
    expansion: FloatArray
    gap_vectors: FloatArray
    load_vectors: FloatArray
    grounded: np.ndarray

    @property
    def n_unknowns(self) -> int:
        """Number of unknowns N."""
        return self.expansion.shape[2]

    @property
    def n_elements(self) -> int:
        """Number of elements E."""
        return self.start.shape[0]

    @property
    def length(self) -> FloatArray:
        """Element lengths (E,) [m]."""
        return np.linalg.norm(self.end - self.start, axis=1)

    @property
    def tangent(self) -> FloatArray:
        """Unit vectors along the elements (E, 3)."""
        return (self.end - self.start) / self.length[:, None]


def graded_lengths(length: float, first: float | None, last: float | None, growth: float, longest: float) -> FloatArray:
    """Return element lengths that fill a piece of wire, growing geometrically from graded ends.

    Parameters
    ----------
    length : float
        Length to fill [m].
    first, last : float or None
        Length of the element at the beginning and at the end [m]; ``None`` leaves that end ungraded.
    growth : float
        Ratio of neighbouring graded elements.
    longest : float
        Longest element allowed [m].

    Returns
    -------
    float64 (n,)
        Lengths [m]; they add up to ``length``.
    """
    left: list[float] = []
    right: list[float] = []
    next_left = np.inf if first is None else first
    next_right = np.inf if last is None else last
    rest = length
    while True:
        step = min(next_left, next_right)
        if step * (1.0 + 0.5 * growth) >= rest or step >= 0.7 * longest:
            break
        if next_left <= next_right:
            left.append(step)
            next_left *= growth
        else:
            right.append(step)
            next_right *= growth
        rest -= step
    count = max(1, int(np.ceil(rest / longest - 1e-9)))
    return np.array([*left, *([rest / count] * count), *reversed(right)])


def _breaks_of(antenna: Antenna, index: int, tolerance: float) -> FloatArray:
    """Return the sorted distances [m] along a wire at which it must be cut."""
    wire = antenna.wires[index]
    places = [0.0, wire.length]
    for gap in (*antenna.gaps, *antenna.load_gaps):
        if gap.wire == index:
            places += [gap.low, gap.high]
    for other_index, other in enumerate(antenna.wires):
        if other_index == index:
            continue
        for point in (other.start, other.end):
            along = float(np.dot(np.subtract(point, wire.start), wire.direction))
            if 0.0 < along < wire.length and np.linalg.norm(wire.point(along) - point) <= tolerance:
                places.append(along)
    unique: list[float] = []
    for place in sorted(places):
        if not unique or place - unique[-1] > tolerance:
            unique.append(place)
    unique[-1] = wire.length
    return np.array(unique)


def _gap_means(gaps: Sequence[Gap], antenna: Antenna, pieces: list, order: int) -> FloatArray:
    """Return (len(gaps), E, p+1): the mean of each local function over each gap."""
    means = np.zeros((len(gaps), len(pieces), order + 1))
    # Only the mean of a local function over its whole element is needed, because gaps are cut out as elements of
    # their own: 1/2 for the rooftop halves, -1/sqrt(6) for the first bubble, 0 for the others.
    local = np.zeros(order + 1)
    local[:2] = 0.5
    if order >= 2:
        local[2] = -1.0 / np.sqrt(6.0)
    for g, gap in enumerate(gaps):
        slack = 1e-9 * antenna.wires[gap.wire].length
        for e, (wire, low, high) in enumerate(pieces):
            if wire == gap.wire and low >= gap.low - slack and high <= gap.high + slack:
                means[g, e] = local * (high - low) / gap.width
    return means


def build_mesh(
    antenna: Antenna,
    wavelength: float,
    settings: MeshSettings,
    grounded_ends: np.ndarray | None = None,
) -> Mesh:
    """Cut an antenna into elements and number its unknowns.

    Parameters
    ----------
    antenna : Antenna
        The design, in its own frame.
    wavelength : float
        Free-space wavelength [m].
    settings : MeshSettings
        Order and grading.
    grounded_ends : bool (W, 2), optional
        Which wire ends (start, end) lie on a conducting ground where the antenna is placed.

    Returns
    -------
    Mesh
        Elements and unknowns.

    Raises
    ------
    GeometryError
        If a port sits at a wire end that does not touch the ground, a gap is too narrow to be cut out, two gaps overlap, or
        nothing carries current.
    """
    wires = antenna.wires
    grounded_wires = np.zeros((len(wires), 2), dtype=bool) if grounded_ends is None else grounded_ends
    scale = max(w.length for w in wires)
    tolerance = max(1e-3 * min(w.radius for w in wires), 1e-9 * scale)
    _check_gaps(antenna, grounded_wires, tolerance)

    # Pieces between cuts, and the nodes at their ends.
    points: list[np.ndarray] = []
    incident: list[int] = []

    def node_at(point: np.ndarray) -> int:
        for index, known in enumerate(points):
            if np.linalg.norm(known - point) <= tolerance:
                incident[index] += 1
                return index
        points.append(point)
        incident.append(1)
        return len(points) - 1

    raw: list[tuple[int, float, float, int, int]] = []
    node_grounded: set[int] = set()
    for w, wire in enumerate(wires):
        breaks = _breaks_of(antenna, w, tolerance)
        for low, high in zip(breaks[:-1], breaks[1:], strict=True):
            first, last = node_at(wire.point(low)), node_at(wire.point(high))
            if low == 0.0 and grounded_wires[w, 0]:
                node_grounded.add(first)
            if high == wire.length and grounded_wires[w, 1]:
                node_grounded.add(last)
            raw.append((w, low, high, first, last))

    gaps = (*antenna.gaps, *antenna.load_gaps)

    def smallest(w: int, low: float, high: float, node: int) -> float | None:
        wire = wires[w]
        floor = settings.floor_wavelengths * min(wavelength, 4.0 * wire.length)
        if incident[node] == 1 and node not in node_grounded:
            return max(settings.end_radii * wire.radius, floor)
        place = low if np.linalg.norm(wire.point(low) - points[node]) <= tolerance else high
        for gap in gaps:
            if gap.wire == w and min(abs(place - gap.low), abs(place - gap.high)) <= tolerance:
                return max(settings.gap_radii * wire.radius, floor)
        if node not in node_grounded and settings.joint_radii is not None:
            return max(settings.joint_radii * wire.radius, floor)
        return None

    pieces: list[tuple[int, float, float]] = []
    ends_at: dict[int, list[tuple[int, int]]] = {}
    interior: list[tuple[int, int]] = []
    for w, low, high, first, last in raw:
        in_gap = any(g.wire == w and low >= g.low - tolerance and high <= g.high + tolerance for g in gaps)
        lengths = graded_lengths(
            high - low,
            None if in_gap else smallest(w, low, high, first),
            None if in_gap else smallest(w, low, high, last),
            settings.growth,
            settings.longest_wavelengths * wavelength,
        )
        cuts = np.concatenate([[low], low + np.cumsum(lengths)])
        cuts[-1] = high
        base = len(pieces)
        pieces += [(w, a, b) for a, b in zip(cuts[:-1], cuts[1:], strict=True)]
        ends_at.setdefault(first, []).append((base, 0))
        ends_at.setdefault(last, []).append((len(pieces) - 1, 1))
        interior += [(e, e + 1) for e in range(base, len(pieces) - 1)]

    n_elements, order = len(pieces), settings.order
    columns: list[list[tuple[int, int, float]]] = [[(a, 1, 1.0), (b, 0, 1.0)] for a, b in interior]
    grounded = np.zeros((n_elements, 2), dtype=bool)
    for node, ends in ends_at.items():
        if node in node_grounded:
            for e, side in ends:
                grounded[e, side] = True
                columns.append([(e, side, 1.0)])
            continue
        # Current leaves the node along an element that starts there (+) and arrives along one that ends there (-).
        e0, side0 = ends[0]
        for e, side in ends[1:]:
            columns.append([(e0, side0, 1.0), (e, side, 1.0 if side != side0 else -1.0)])
    columns += [[(e, m, 1.0)] for e in range(n_elements) for m in range(2, order + 1)]
    if not columns:
        msg = f"antenna {antenna.name!r}: no element can carry current; raise the mesh order or shorten its elements"
        raise GeometryError(msg)
    # Unknowns sorted by the first element they live on keep the matrix of one antenna close to its diagonal.
    columns.sort(key=lambda column: min(entry[0] for entry in column))
    expansion = np.zeros((n_elements, order + 1, len(columns)))
    for n, column in enumerate(columns):
        for e, m, value in column:
            expansion[e, m, n] += value

    flat = expansion.reshape(n_elements * (order + 1), -1)
    gap_means = _gap_means(antenna.gaps, antenna, pieces, order)
    load_means = _gap_means(antenna.load_gaps, antenna, pieces, order)
    return Mesh(
        order=order,
        start=np.array([wires[w].point(a) for w, a, _ in pieces]),
        end=np.array([wires[w].point(b) for w, _, b in pieces]),
        radius=np.array([wires[w].radius for w, _, _ in pieces]),
        wire=np.array([w for w, _, _ in pieces]),
        expansion=expansion,
        gap_vectors=gap_means.reshape(len(antenna.gaps), -1) @ flat,
        load_vectors=load_means.reshape(len(antenna.loads), n_elements * (order + 1)) @ flat,
        grounded=grounded,
    )


def _check_gaps(antenna: Antenna, grounded_wires: np.ndarray, tolerance: float) -> None:
    labelled = [
        *zip(antenna.gap_labels, antenna.gaps, strict=True),
        *((f"load {i}", g) for i, g in enumerate(antenna.load_gaps)),
    ]
    for i, (label, gap) in enumerate(labelled):
        # Cuts nearer than the tolerance are one cut: the gap would vanish, and its port carry no current at all.
        if gap.width <= 2.0 * tolerance:
            msg = (
                f"antenna {antenna.name!r}: the gap of {label} is {gap.width:g} m wide, too narrow to be cut out of wire "
                f"{gap.wire}; at least {2.0 * tolerance:.3g} m is needed here"
            )
            raise GeometryError(msg)
        for other_label, other in labelled[:i]:
            if gap.wire == other.wire and min(gap.high, other.high) - max(gap.low, other.low) > 1e-9 * gap.width:
                msg = f"antenna {antenna.name!r}: the gaps of {other_label} and {label} overlap on wire {gap.wire}"
                raise GeometryError(msg)
    positions = [*(p.position for p in antenna.ports if p.wire is not None), *(q.position for q in antenna.feeds)]
    for position, label, gap in zip(positions, antenna.gap_labels, antenna.gaps, strict=True):
        wire = antenna.wires[gap.wire]
        at_end = 0 if position == 0.0 else 1 if position == 1.0 else None
        if at_end is not None and not grounded_wires[gap.wire, at_end]:
            ends = [p for i, w in enumerate(antenna.wires) if i != gap.wire for p in (w.start, w.end)]
            here = wire.start if at_end == 0 else wire.end
            if min((float(np.linalg.norm(np.subtract(here, p))) for p in ends), default=np.inf) > 1e-6 * wire.length:
                msg = (
                    f"antenna {antenna.name!r}: {label} sits at an end of wire {gap.wire} that touches "
                    "neither the ground nor another wire: no current can flow through it"
                )
                raise GeometryError(msg)
