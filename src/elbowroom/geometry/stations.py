"""A station: antennas, each moved and turned, and the ground they stand on."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from elbowroom.base.arrays import FloatArray, check_array
from elbowroom.base.errors import GeometryError
from elbowroom.geometry.antennas import Antenna
from elbowroom.geometry.grounds import GROUND_TYPES, FreeSpace, Ground


def orientation_matrix(rotation_deg: float, tilt_east_deg: float = 0.0, tilt_north_deg: float = 0.0) -> FloatArray:
    """Return the matrix (3, 3) that turns an antenna's own frame into the station frame.

    The antenna is first turned about +z, from east towards north; then its top leans towards the east
    and towards the north by the two tilts.

    Parameters
    ----------
    rotation_deg, tilt_east_deg, tilt_north_deg : float
        Angles [deg].
    """
    c, s = np.cos(np.deg2rad(rotation_deg)), np.sin(np.deg2rad(rotation_deg))
    turn = np.array([[c, -s, 0.0], [s, c, 0.0], [0.0, 0.0, 1.0]])
    if tilt_east_deg == 0.0 and tilt_north_deg == 0.0:
        return turn
    ce, se = np.cos(np.deg2rad(tilt_east_deg)), np.sin(np.deg2rad(tilt_east_deg))
    cn, sn = np.cos(np.deg2rad(tilt_north_deg)), np.sin(np.deg2rad(tilt_north_deg))
    lean_east = np.array([[ce, 0.0, se], [0.0, 1.0, 0.0], [-se, 0.0, ce]])
    lean_north = np.array([[1.0, 0.0, 0.0], [0.0, cn, sn], [0.0, -sn, cn]])
    return lean_north @ lean_east @ turn


@dataclass(frozen=True)
class Placed:
    """An antenna in its place.

    Parameters
    ----------
    antenna : Antenna
        The design.
    position : sequence of 3 floats
        Where the origin of the antenna's own frame stands: east, north, up [m].
    rotation_deg : float, optional
        Turn about +z, from east towards north [deg].
    tilt_east_deg, tilt_north_deg : float, optional
        Lean of the antenna's top towards east and north [deg], after the turn.
    name : str, optional
        Name of this antenna in its station.
    """

    antenna: Antenna
    position: tuple[float, float, float] = (0.0, 0.0, 0.0)
    rotation_deg: float = 0.0
    tilt_east_deg: float = 0.0
    tilt_north_deg: float = 0.0
    name: str = ""

    def __post_init__(self) -> None:
        point = check_array(f"position of antenna {self.name!r} [m]", self.position, (3,), error=GeometryError)
        object.__setattr__(self, "position", tuple(float(v) for v in point))
        for key in ("rotation_deg", "tilt_east_deg", "tilt_north_deg"):
            value = check_array(f"{key} of antenna {self.name!r}", getattr(self, key), (), error=GeometryError)
            object.__setattr__(self, key, float(value))

    @property
    def orientation(self) -> FloatArray:
        """Matrix (3, 3) from the antenna's own frame to the station frame."""
        return orientation_matrix(self.rotation_deg, self.tilt_east_deg, self.tilt_north_deg)

    @property
    def attitude(self) -> tuple[float, float, float]:
        """Rotation and tilts [deg] as a key: antennas of equal attitude are parallel."""
        return (self.rotation_deg % 360.0, self.tilt_east_deg, self.tilt_north_deg)

    def to_station(self, points: FloatArray) -> FloatArray:
        """Return points (..., 3) [m] of the antenna's own frame in the station frame."""
        return points @ self.orientation.T + np.asarray(self.position)


def turned(placed: Placed, turn_deg: float, shift_east_m: float = 0.0, shift_north_m: float = 0.0) -> Placed:
    """Return an antenna carried along when its station is turned about the vertical, then shifted.

    Parameters
    ----------
    placed : Placed
        The antenna as it stands.
    turn_deg : float
        Turn of the station about its reference point, from east towards north [deg].
    shift_east_m, shift_north_m : float, optional
        Shift after the turn [m].

    Returns
    -------
    Placed
        The orientation is exactly that of the turned antenna; one without tilts gets none.
    """
    if turn_deg == 0.0 and shift_east_m == 0.0 and shift_north_m == 0.0:
        return placed
    turn = orientation_matrix(turn_deg)
    east, north, up = (float(v) for v in turn @ np.asarray(placed.position))
    rotation, lean_east, lean_north = placed.rotation_deg + turn_deg, placed.tilt_east_deg, placed.tilt_north_deg
    if turn_deg != 0.0 and (lean_east != 0.0 or lean_north != 0.0):
        # The axis, turned, gives the new tilts; what remains of the orientation is a turn about it.
        whole = turn @ placed.orientation
        lean_east = float(np.degrees(np.arctan2(whole[0, 2], np.hypot(whole[1, 2], whole[2, 2]))))
        lean_north = float(np.degrees(np.arctan2(whole[1, 2], whole[2, 2])))
        rest = orientation_matrix(0.0, lean_east, lean_north).T @ whole
        rotation = float(np.degrees(np.arctan2(rest[1, 0], rest[0, 0])))
    return Placed(placed.antenna, (east + shift_east_m, north + shift_north_m, up), rotation, lean_east, lean_north, placed.name)


@dataclass(frozen=True)
class PortName:
    """Which port a row of a port matrix belongs to."""

    antenna: str
    port: str

    def __str__(self) -> str:
        """Return ``antenna/port``."""
        return f"{self.antenna}/{self.port}"


@dataclass(frozen=True)
class Station:
    """Antennas and their ground.

    Parameters
    ----------
    placed : sequence of Placed
        The antennas.  Those without a name are called ``A001``, ``A002``, ...
    ground : Ground
        What they stand on; the surface is z = 0.

    Raises
    ------
    GeometryError
        If the station is empty or a name is used twice.
    """

    placed: tuple[Placed, ...]
    ground: Ground = FreeSpace()

    def __init__(self, placed: Sequence[Placed], ground: Ground = FreeSpace()) -> None:  # noqa: B008 - frozen, no state
        if not placed:
            msg = "the station has no antennas"
            raise GeometryError(msg)
        if not isinstance(ground, GROUND_TYPES):
            msg = f"ground {ground!r}: expected {', '.join(known.__name__ for known in GROUND_TYPES)}"
            raise GeometryError(msg)
        named = tuple(
            p if p.name else Placed(p.antenna, p.position, p.rotation_deg, p.tilt_east_deg, p.tilt_north_deg, f"A{i + 1:03d}")
            for i, p in enumerate(placed)
        )
        seen: dict[str, int] = {}
        for index, antenna in enumerate(named):
            if antenna.name in seen:
                msg = f"antenna name {antenna.name!r} is used twice (antennas {seen[antenna.name] + 1} and {index + 1})"
                raise GeometryError(msg)
            seen[antenna.name] = index
        object.__setattr__(self, "placed", named)
        object.__setattr__(self, "ground", ground)

    def __len__(self) -> int:
        """Return the number of antennas."""
        return len(self.placed)

    def __iter__(self) -> Iterator[Placed]:
        """Iterate over the placed antennas."""
        return iter(self.placed)

    @property
    def positions(self) -> FloatArray:
        """East, north, up of every antenna, (A, 3) [m]."""
        return np.array([p.position for p in self.placed])

    @property
    def designs(self) -> tuple[Antenna, ...]:
        """The distinct designs, in order of first use."""
        found: list[Antenna] = []
        for p in self.placed:
            if not any(p.antenna is d or p.antenna == d for d in found):
                found.append(p.antenna)
        return tuple(found)

    @property
    def port_names(self) -> tuple[PortName, ...]:
        """Names of the ports, antenna by antenna, in the order of every port matrix."""
        return tuple(PortName(p.name, port.name) for p in self.placed for port in p.antenna.ports)

    @property
    def port_antennas(self) -> np.ndarray:
        """Index of the antenna that each port belongs to, (P,)."""
        return np.repeat(np.arange(len(self.placed)), [len(p.antenna.ports) for p in self.placed])

    @property
    def port_positions(self) -> FloatArray:
        """Position of the antenna of each port, (P, 3) [m]."""
        return self.positions[self.port_antennas]

    @property
    def port_nominal_phi_rad(self) -> FloatArray:
        """Direction of each port's co-polarisation at zenith, (P,), from east towards north [rad].

        The nominal azimuth of the design's port, or else that of the wire that carries its gap (the electrically nearest gap,
        if the port looks into a network), turned with the antenna; 0 for a vertical wire.
        """
        angles = []
        for placed in self.placed:
            for port, gap in zip(placed.antenna.ports, placed.antenna.port_gaps, strict=True):
                if port.nominal_azimuth_deg is None:
                    wire = placed.antenna.wires[gap.wire]
                    own = np.asarray(wire.end) - np.asarray(wire.start)
                else:
                    nominal = np.deg2rad(port.nominal_azimuth_deg)
                    own = np.array([np.cos(nominal), np.sin(nominal), 0.0])
                along = placed.orientation @ own
                level = float(np.hypot(along[0], along[1]))
                angles.append(np.arctan2(along[1], along[0]) if level > 1e-9 * float(np.linalg.norm(along)) else 0.0)
        return np.array(angles)
