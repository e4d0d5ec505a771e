"""A station in numbers: which antennas are alike, their meshes and self blocks, and where their unknowns stand."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from threading import Lock

import numpy as np
from scipy.spatial.distance import pdist

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.constants import wavelength_of, wavenumber_of
from elbowroom.base.errors import GeometryError, ModelRangeError
from elbowroom.geometry.antennas import Antenna
from elbowroom.geometry.mesh import Mesh, MeshSettings, build_mesh, mesh_settings
from elbowroom.geometry.stations import Placed, Station
from elbowroom.kernels.grounds import Extent, GroundKernels, ground_kernels
from elbowroom.kernels.quadrature import points_per_element, sample_mesh
from elbowroom.system.ground_blocks import RingSamples, ground_block, ring_samples
from elbowroom.system.networks import PortAttachment, attach_ports
from elbowroom.system.self_block import NearSettings, free_self_block, image_self_block, loss_and_loads

GROUND_CONTACT_M = 1e-6
"""Wire ends nearer to a conducting ground than this are joined to it [m]."""


@dataclass(frozen=True)
class FarSettings:
    """Accuracy of reactions between antennas.

    Parameters
    ----------
    tolerance : float
        Relative accuracy of the Gauss rules between antennas.
    close_elements : float
        Antenna pairs nearer than this times their longest element are integrated element by element, with
        currents spread over the circumference; more distant ones are filaments sampled at Gauss points.
    """

    tolerance: float = 1e-6
    close_elements: float = 0.15

    def levels(self) -> tuple[float, ...]:
        """Return the distances, in longest elements, from which each set of Gauss rules serves."""
        return (self.close_elements, 3.0 * self.close_elements, 10.0 * self.close_elements, 40.0 * self.close_elements)


@dataclass(frozen=True)
class Samples:
    """Quadrature points of one kind of antenna in the station frame, relative to its place in the plane.

    Attributes
    ----------
    points : float64 (3, Q)
        Axis points [m]; x and y are relative to the antenna's position, z is the height above the ground.
    currents : float64 (3, Q, N)
        Weights of the x, y and z currents [m].
    charge : float64 (Q, N)
        Weights of the charge [1].
    radius : float64 (Q,)
        Wire radius at each point [m].
    tangent : float64 (Q, 3)
        Unit vector along the wire at each point.
    """

    points: FloatArray
    currents: FloatArray
    charge: FloatArray
    radius: FloatArray
    tangent: FloatArray


@dataclass(eq=False)
class Kind:
    """Antennas of one design, attitude and height: they differ by a horizontal shift only.

    Attributes
    ----------
    antenna : Antenna
        The design.
    mesh : Mesh
        Elements in the antenna's own frame.
    orientation : float64 (3, 3)
        From the antenna's frame to the station's.
    height : float
        Height of the antenna's origin [m].
    self_block : complex128 (N, N)
        Impedance matrix of the antenna alone over the ground, loss and loads included [ohm].
    """

    antenna: Antenna
    mesh: Mesh
    orientation: FloatArray
    height: float
    self_block: ComplexArray
    _samples: dict[tuple[float, float, float], Samples] = field(default_factory=dict, repr=False)
    _lock: Lock = field(default_factory=Lock, repr=False)

    def samples(self, distance: float, wavenumber: float, tolerance: float) -> Samples:
        """Return the quadrature points that serve sources at a distance [m] or farther, made once."""
        key = (distance, wavenumber, tolerance)
        with self._lock:
            if key not in self._samples:
                counts = points_per_element(self.mesh, distance, wavenumber, tolerance)
                local = sample_mesh(self.mesh, counts)
                points = local.points @ self.orientation.T + [0.0, 0.0, self.height]
                element = np.repeat(np.arange(self.mesh.n_elements), counts)
                self._samples[key] = Samples(
                    points=np.ascontiguousarray(points.T),
                    currents=np.ascontiguousarray(np.einsum("ij,jqn->iqn", self.orientation, local.current_weights)),
                    charge=local.charge_weights,
                    radius=self.mesh.radius[element],
                    tangent=self.mesh.tangent[element] @ self.orientation.T,
                )
            return self._samples[key]

    def placed_elements(self, position: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return start and end (E, 3) [m] of the elements of an antenna at a position."""
        offset = np.array([position[0], position[1], self.height])
        return self.mesh.start @ self.orientation.T + offset, self.mesh.end @ self.orientation.T + offset


@dataclass(frozen=True)
class Discretisation:
    """A station at one frequency, ready to be assembled.

    Attributes
    ----------
    station : Station
        What was asked for.
    frequency_hz : float
        Frequency [Hz].
    mesh : MeshSettings
        Mesh settings used.
    kinds : list of Kind
        Distinct kinds of antenna.
    kind_of : int (A,)
        Kind of each antenna.
    unknown_offsets, port_offsets : int (A+1,)
        Where each antenna's unknowns and ports begin.
    ground : GroundKernels
        The fields of the ground, one object for all who ask.
    """

    station: Station
    frequency_hz: float
    mesh: MeshSettings
    near: NearSettings
    far: FarSettings
    kinds: list[Kind]
    kind_of: np.ndarray
    unknown_offsets: np.ndarray
    port_offsets: np.ndarray
    ground: GroundKernels

    @property
    def wavenumber(self) -> float:
        """Free-space wavenumber [rad/m]."""
        return wavenumber_of(self.frequency_hz)

    @property
    def n_unknowns(self) -> int:
        """Number of unknowns of the station."""
        return int(self.unknown_offsets[-1])

    @property
    def n_ports(self) -> int:
        """Number of ports of the station."""
        return int(self.port_offsets[-1])

    def unknowns_of(self, antenna: int) -> slice:
        """Return the rows of one antenna's unknowns."""
        return slice(int(self.unknown_offsets[antenna]), int(self.unknown_offsets[antenna + 1]))

    def ports_of(self, antenna: int) -> slice:
        """Return the rows of one antenna's ports."""
        return slice(int(self.port_offsets[antenna]), int(self.port_offsets[antenna + 1]))

    def part(self, antennas: np.ndarray) -> Discretisation:
        """Return some of the antennas as a station of their own, of the same kinds."""
        placed = [self.station.placed[int(a)] for a in antennas]
        unknowns, ports = np.diff(self.unknown_offsets)[antennas], np.diff(self.port_offsets)[antennas]
        return replace(
            self,
            station=Station(placed, self.station.ground),
            kind_of=self.kind_of[antennas],
            unknown_offsets=np.concatenate([[0], np.cumsum(unknowns)]),
            port_offsets=np.concatenate([[0], np.cumsum(ports)]),
        )

    def antennas_of(self, kind: int) -> np.ndarray:
        """Return the indices of the antennas of one kind."""
        return np.flatnonzero(self.kind_of == kind)


def attachments(discretisation: Discretisation, reference_ohm: float) -> dict[Antenna, PortAttachment]:
    """Return how the ports of each design hang on its gaps under a reference resistance [ohm]."""
    made: dict[Antenna, PortAttachment] = {}
    for kind in discretisation.kinds:
        if kind.antenna not in made:
            made[kind.antenna] = attach_ports(kind.antenna, discretisation.frequency_hz, reference_ohm)
    return made


def grounded_ends(placed: Placed, conducting: bool) -> np.ndarray:
    """Return which wire ends (W, 2) of a placed antenna lie on the ground.

    Raises
    ------
    GeometryError
        If a wire reaches below z = 0, or lies in the ground's surface.
    """
    ends = np.array([[w.start, w.end] for w in placed.antenna.wires])
    height = placed.to_station(ends)[..., 2]
    lowest = float(height.min())
    if lowest < -GROUND_CONTACT_M:
        wire = int(np.unravel_index(np.argmin(height), height.shape)[0])
        msg = (
            f"antenna {placed.name!r} ({placed.antenna.name!r}): wire {wire} reaches {-lowest:g} m below the ground "
            "(z = 0); raise the antenna with up_m or change its wires"
        )
        raise GeometryError(msg)
    touching = height <= GROUND_CONTACT_M
    if touching.any() and not conducting:
        msg = (
            f"antenna {placed.name!r} ({placed.antenna.name!r}): wire {int(np.argwhere(touching)[0, 0])} ends on the ground; "
            "wires that end on or enter soil are not modelled; raise the antenna with up_m, or take the perfect ground"
        )
        raise GeometryError(msg)
    radius = np.array([w.radius for w in placed.antenna.wires])
    flat = touching.all(axis=1)
    if flat.any():
        msg = f"antenna {placed.name!r}: wire {int(np.argmax(flat))} lies in the ground's surface and can carry no field"
        raise GeometryError(msg)
    near = (height < radius[:, None]) & ~touching
    if near.any():
        wire = int(np.argwhere(near)[0, 0])
        msg = (
            f"antenna {placed.name!r}: an end of wire {wire} is {float(height[near][0]):g} m above the ground, less than its "
            f"radius ({radius[wire]:g} m); {'end it on z = 0 to join it to the ground, or ' if conducting else ''}raise it"
        )
        raise GeometryError(msg)
    return touching


WIDTH_STEP_M = 5.0
"""Step of the width for which grounds are prepared [m]: stations of one scatter of places differ by less."""


def extent_of(station: Station) -> Extent:
    """Return where the wires of a station lie, their thickness included; its width in whole steps, which like stations share."""
    positions = station.positions
    reach = lowest = highest = thickest = 0.0
    seen: set[tuple] = set()
    for placed in station:
        key = (id(placed.antenna), placed.tilt_east_deg, placed.tilt_north_deg, placed.rotation_deg, placed.position[2])
        if key in seen:
            continue
        ends = np.array([[w.start, w.end] for w in placed.antenna.wires]).reshape(-1, 3) @ placed.orientation.T
        low, high = float(ends[:, 2].min()) + placed.position[2], float(ends[:, 2].max()) + placed.position[2]
        lowest, highest = (min(lowest, low), max(highest, high)) if seen else (low, high)
        seen.add(key)
        reach = max(reach, float(np.hypot(ends[:, 0], ends[:, 1]).max()))
        thickest = max(thickest, *(w.radius for w in placed.antenna.wires))
    apart = float(pdist(positions[:, :2]).max()) if len(positions) > 1 else 0.0
    widest = float(np.ceil((apart + 2.0 * (reach + thickest)) / WIDTH_STEP_M)) * WIDTH_STEP_M
    return Extent(widest, lowest - thickest, highest + thickest)


def _ground_samples(mesh: Mesh, attitude: FloatArray, height: float, frequency_hz: float, near: NearSettings) -> RingSamples:
    """Return the points by which an antenna of some attitude and height meets its own part of the ground's field."""
    start, end = mesh.start @ attitude.T + [0.0, 0.0, height], mesh.end @ attitude.T + [0.0, 0.0, height]
    lowest = float(min(start[:, 2].min(), end[:, 2].min()))
    return ring_samples(mesh, start, end, lowest, wavenumber_of(frequency_hz), near.tolerance)


def discretise(
    station: Station,
    frequency_hz: float,
    *,
    mesh: str | MeshSettings = "default",
    near: NearSettings | None = None,
    far: FarSettings | None = None,
    self_blocks: bool = True,
    mesh_hz: float | None = None,
    ground: GroundKernels | None = None,
) -> Discretisation:
    """Mesh every kind of antenna of a station and compute its self block.

    Parameters
    ----------
    station : Station
        Antennas and ground.
    frequency_hz : float
        Frequency [Hz].
    mesh : str or MeshSettings, optional
        ``"default"``, ``"refined"`` or settings.
    near, far : optional
        Accuracy of reactions inside and between antennas.
    self_blocks : bool, optional
        Whether to compute the self blocks; without them patterns can be made but nothing can be solved.
    mesh_hz : float, optional
        Frequency for which elements are cut [Hz], where several frequencies share a mesh; by default that of the solve.

    Returns
    -------
    Discretisation

    Raises
    ------
    GeometryError
        If an antenna cannot be modelled where it stands.
    ModelRangeError
        If the frequency is not positive, or a wire is too thick for it.
    """
    if not (np.isfinite(frequency_hz) and frequency_hz > 0.0):
        msg = f"frequency {frequency_hz!r} Hz: expected a positive number"
        raise ModelRangeError(msg)
    settings, near, far = mesh_settings(mesh), near or NearSettings(), far or FarSettings()
    wavelength = wavelength_of(frequency_hz)
    cut_for = wavelength if mesh_hz is None else wavelength_of(mesh_hz)
    ground = ground or ground_kernels(station.ground, frequency_hz, extent_of(station))
    for design in station.designs:
        for index, wire in enumerate(design.wires):
            if wire.radius > 0.02 * wavelength:
                msg = (
                    f"antenna {design.name!r}, wire {index}: radius {wire.radius:g} m exceeds 0.02 wavelengths "
                    f"({0.02 * wavelength:g} m) at {frequency_hz / 1e6:g} MHz; the thin-wire model does not hold"
                )
                raise ModelRangeError(msg)

    kinds: list[Kind] = []
    kind_of = np.empty(len(station), dtype=int)
    index_of: dict[tuple, int] = {}
    meshes: dict[tuple, tuple[Mesh, ComplexArray]] = {}
    images: dict[tuple, ComplexArray] = {}
    designs = station.designs
    design_index = {id(d): i for i, d in enumerate(designs)}
    image_counts = ground.self_images()
    for a, placed in enumerate(station):
        if id(placed.antenna) not in design_index:
            design_index[id(placed.antenna)] = designs.index(placed.antenna)
        which = design_index[id(placed.antenna)]
        # Over free space height is just another shift; keeping it in the kind costs nothing but a little memory.
        height = placed.position[2]
        # Rounded as in the store's keys: antennas that are one to them are one kind.
        turns = tuple(np.round(placed.orientation / 1e-8).astype(np.int64).ravel())
        key = (which, turns, round(height / 1e-6))
        if key in index_of:
            kind_of[a] = index_of[key]
            continue
        if station.ground.open_below:
            ends = np.zeros((len(placed.antenna.wires), 2), dtype=bool)
        else:
            ends = grounded_ends(placed, conducting=ground.conducting_surface)
        mesh_key = (which, ends.tobytes())
        if mesh_key not in meshes:
            made = build_mesh(placed.antenna, cut_for, settings, ends)
            if self_blocks:
                own: ComplexArray = free_self_block(made, frequency_hz, near) + loss_and_loads(placed.antenna, made, frequency_hz)
            else:
                own = np.empty((0, 0), dtype=complex)
            meshes[mesh_key] = (made, own)
        made, block = meshes[mesh_key]
        if image_counts is not None and self_blocks:
            level = placed.tilt_east_deg == 0.0 and placed.tilt_north_deg == 0.0
            image_key = (mesh_key, height, None if level else placed.attitude)
            if image_key not in images:
                # Kinds that are turned only share one block, and whatever is made from it.
                images[image_key] = block + image_self_block(
                    made, frequency_hz, near, height, np.eye(3) if level else placed.orientation, image_counts
                )
            block = images[image_key]
        if ground.has_correction and self_blocks:
            # Nothing but the height and the tilt counts: the ground is the same all round.
            level = placed.tilt_east_deg == 0.0 and placed.tilt_north_deg == 0.0
            image_key = (mesh_key, height, None if level else placed.attitude)
            if image_key not in images:
                samples = _ground_samples(made, np.eye(3) if level else placed.orientation, height, frequency_hz, near)
                images[image_key] = block + ground_block(ground, samples, samples, wavenumber_of(frequency_hz))
            block = images[image_key]
        kind_of[a] = index_of[key] = len(kinds)
        # Of designs that are equal, one object stands for all: others tell designs apart by it.
        kinds.append(Kind(designs[which], made, placed.orientation, height, block))

    unknowns = np.array([kinds[k].mesh.n_unknowns for k in kind_of])
    ports = np.array([len(p.antenna.ports) for p in station])
    return Discretisation(
        station=station,
        frequency_hz=float(frequency_hz),
        mesh=settings,
        near=near,
        far=far,
        kinds=kinds,
        kind_of=kind_of,
        unknown_offsets=np.concatenate([[0], np.cumsum(unknowns)]),
        port_offsets=np.concatenate([[0], np.cumsum(ports)]),
        ground=ground,
    )
