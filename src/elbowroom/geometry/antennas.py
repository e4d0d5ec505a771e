"""An antenna: wires, the gap ports that feed it and the lumped loads inside it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

from elbowroom.base.errors import GeometryError
from elbowroom.geometry.wires import Wire


@dataclass(frozen=True)
class Port:
    """A feed gap in a wire, across which a uniform field is impressed.

    Parameters
    ----------
    name : str
        Name of the port, unique in its antenna.
    wire : int
        Index of the wire that carries the gap.
    position : float, optional
        Middle of the gap as a fraction of the wire's length.  At 0 or 1 the wire must end on the ground: the gap
        is then the half that lies above it, so that a monopole has exactly half the impedance of its dipole.
    gap : float, optional
        Width of the gap [m]; by default the diameter of the wire.
    nominal_azimuth_deg : float, optional
        Direction of the port's co-polarisation at zenith, from east towards north [deg]; by default the
        azimuth of the wire that carries the gap.
    """

    name: str
    wire: int
    position: float = 0.5
    gap: float | None = None
    nominal_azimuth_deg: float | None = None


@dataclass(frozen=True)
class Load:
    """A lumped impedance inside the antenna: part of its structure, not a termination.

    The impedance is resistance + j omega inductance + 1/(j omega capacitance), in series.

    Parameters
    ----------
    wire : int
        Index of the wire.
    position : float
        Place as a fraction of the wire's length.
    resistance_ohm, inductance_h : float
        Series resistance [ohm] and inductance [H].
    capacitance_f : float, optional
        Series capacitance [F]; ``None`` means none in series (a short).
    gap : float, optional
        Width over which the load is spread [m]; by default the diameter of the wire.
    """

    wire: int
    position: float
    resistance_ohm: float = 0.0
    inductance_h: float = 0.0
    capacitance_f: float | None = None
    gap: float | None = None

    def impedance(self, angular_frequency: float) -> complex:
        """Return the impedance [ohm] at an angular frequency [rad/s]."""
        value = complex(self.resistance_ohm, angular_frequency * self.inductance_h)
        if self.capacitance_f is not None:
            value += 1.0 / (1j * angular_frequency * self.capacitance_f)
        return value


@dataclass(frozen=True)
class Gap:
    """Resolved place of a port or load on its wire: distances from the wire's start [m]."""

    wire: int
    low: float
    high: float

    @property
    def width(self) -> float:
        """Width [m]."""
        return self.high - self.low


@dataclass(frozen=True)
class Antenna:
    """One assembly of wires with one or more ports, in a frame of its own.

    Parameters
    ----------
    name : str
        Name of the design.
    wires : sequence of Wire
        The structure; wires whose ends meet, or that end on another wire, are joined there.
    ports : sequence of Port
        The ports, in the order in which they are numbered.
    loads : sequence of Load, optional
        Lumped loads inside the structure.

    Raises
    ------
    GeometryError
        If there is no wire or port, a name is used twice, or a port or load does not fit on its wire.
    """

    name: str
    wires: tuple[Wire, ...]
    ports: tuple[Port, ...]
    loads: tuple[Load, ...] = ()
    port_gaps: tuple[Gap, ...] = field(init=False, repr=False)
    load_gaps: tuple[Gap, ...] = field(init=False, repr=False)

    def __init__(self, name: str, wires: Sequence[Wire], ports: Sequence[Port], loads: Sequence[Load] = ()) -> None:
        object.__setattr__(self, "name", name)
        object.__setattr__(self, "wires", tuple(wires))
        object.__setattr__(self, "ports", tuple(ports))
        object.__setattr__(self, "loads", tuple(loads))
        if not self.wires:
            msg = f"antenna {name!r} has no wires"
            raise GeometryError(msg)
        if not self.ports:
            msg = f"antenna {name!r} has no ports: at least one gap is needed"
            raise GeometryError(msg)
        names = [port.name for port in self.ports]
        for port_name in names:
            if names.count(port_name) > 1:
                msg = f"antenna {name!r}: port name {port_name!r} is used {names.count(port_name)} times"
                raise GeometryError(msg)
        object.__setattr__(self, "port_gaps", tuple(self._place(p, f"port {p.name!r}", may_touch_end=True) for p in self.ports))
        object.__setattr__(
            self, "load_gaps", tuple(self._place(q, f"load {i}", may_touch_end=False) for i, q in enumerate(self.loads))
        )

    def _place(self, item: Port | Load, label: str, *, may_touch_end: bool) -> Gap:
        if not 0 <= item.wire < len(self.wires):
            msg = f"antenna {self.name!r}, {label}: wire {item.wire} does not exist (0 to {len(self.wires) - 1})"
            raise GeometryError(msg)
        wire = self.wires[item.wire]
        width = 2.0 * wire.radius if item.gap is None else float(item.gap)
        if not 0.0 < width < wire.length:
            msg = (
                f"antenna {self.name!r}, {label}: gap of {width:g} m must be positive and shorter than its "
                f"wire ({wire.length:g} m)"
            )
            raise GeometryError(msg)
        if not 0.0 <= item.position <= 1.0:
            msg = f"antenna {self.name!r}, {label}: position {item.position:g} is not a fraction between 0 and 1"
            raise GeometryError(msg)
        middle = item.position * wire.length
        low, high = middle - 0.5 * width, middle + 0.5 * width
        if may_touch_end and item.position in (0.0, 1.0):
            low, high = max(low, 0.0), min(high, wire.length)
        if low < -1e-12 * wire.length or high > wire.length * (1.0 + 1e-12):
            msg = f"antenna {self.name!r}, {label}: the gap of {width:g} m sticks out of the end of its wire"
            raise GeometryError(msg)
        return Gap(item.wire, max(low, 0.0), min(high, wire.length))

    def port_index(self, name: str) -> int:
        """Return the index of the port of that name; raise GeometryError when there is none."""
        for index, port in enumerate(self.ports):
            if port.name == name:
                return index
        msg = f"antenna {self.name!r} has no port {name!r}; it has {', '.join(p.name for p in self.ports)}"
        raise GeometryError(msg)
