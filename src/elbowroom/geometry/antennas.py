"""An antenna: wires, the ports that feed it, the lumped loads and the network inside it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from math import hypot, inf

from elbowroom.base.errors import GeometryError
from elbowroom.geometry.networks import FeedPoint, Network, resolve_nodes
from elbowroom.geometry.wires import Wire


@dataclass(frozen=True)
class Port:
    """A pair of terminals: a gap in a wire, across which a uniform field is impressed, or a node of the antenna's network.

    Parameters
    ----------
    name : str
        Name of the port, unique in its antenna.
    wire : int, optional
        Index of the wire that carries the gap; the gap is then a node of the port's name.
    position : float, optional
        Middle of the gap as a fraction of the wire's length.  At 0 or 1 the wire must end on the ground: the gap
        is then the half that lies above it, so that a monopole has exactly half the impedance of its dipole.
    gap : float, optional
        Width of the gap [m]; by default the diameter of the wire.
    nominal_azimuth_deg : float, optional
        Direction of the port's co-polarisation at zenith, from east towards north [deg]; by default the
        azimuth of the wire that carries the gap.
    node : str, optional
        Instead of a wire: the node of the network that the port looks into.
    """

    name: str
    wire: int | None = None
    position: float = 0.5
    gap: float | None = None
    nominal_azimuth_deg: float | None = None
    node: str | None = None

    def __post_init__(self) -> None:
        if (self.wire is None) == (self.node is None):
            msg = f"port {self.name!r}: expected either the wire that carries its gap or a node of the network"
            raise GeometryError(msg)


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

    def __post_init__(self) -> None:
        bounds = {"resistance_ohm": (0.0, 1e12), "inductance_h": (0.0, 1e3), "capacitance_f": (1e-21, 1e3)}
        for key, (low, high) in bounds.items():
            value = getattr(self, key)
            if value is not None and not low <= float(value) <= high:
                msg = f"load on wire {self.wire}: {key} {value!r}: expected {low:g} to {high:g}"
                raise GeometryError(msg)

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
    feeds : sequence of FeedPoint, optional
        Gaps that the network reaches and no port looks into.
    network : Network, optional
        Lines, stubs, branches and transformers between gaps and ports.

    Attributes
    ----------
    gaps : tuple of Gap
        Where the gaps are: those of ports, in order, then feed points.
    nodes : tuple of str
        Pairs of terminals: the gaps, in that order, then the free nodes of the network.
    port_nodes : tuple of str
        Node of each port.

    Raises
    ------
    GeometryError
        If there is no wire or port, a name is used twice, or a port or load does not fit on its wire.
    """

    name: str
    wires: tuple[Wire, ...]
    ports: tuple[Port, ...]
    loads: tuple[Load, ...] = ()
    feeds: tuple[FeedPoint, ...] = ()
    network: Network = Network()
    gaps: tuple[Gap, ...] = field(init=False, repr=False)
    load_gaps: tuple[Gap, ...] = field(init=False, repr=False)
    nodes: tuple[str, ...] = field(init=False, repr=False)
    port_nodes: tuple[str, ...] = field(init=False, repr=False)

    def __init__(
        self,
        name: str,
        wires: Sequence[Wire],
        ports: Sequence[Port],
        loads: Sequence[Load] = (),
        feeds: Sequence[FeedPoint] = (),
        network: Network | None = None,
    ) -> None:
        object.__setattr__(self, "name", name)
        object.__setattr__(self, "wires", tuple(wires))
        object.__setattr__(self, "ports", tuple(ports))
        object.__setattr__(self, "loads", tuple(loads))
        object.__setattr__(self, "feeds", tuple(feeds))
        object.__setattr__(self, "network", network or Network())
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
        gap_items: list[Port | FeedPoint] = [*(p for p in self.ports if p.wire is not None), *self.feeds]
        gap_names = [item.name for item in gap_items]
        for gap_name in gap_names:
            if gap_names.count(gap_name) > 1:
                msg = f"antenna {name!r}: {gap_names.count(gap_name)} gaps are called {gap_name!r}"
                raise GeometryError(msg)
        gaps = [self._place(item, label, may_touch_end=True) for item, label in zip(gap_items, self.gap_labels, strict=True)]
        object.__setattr__(self, "gaps", tuple(gaps))
        object.__setattr__(self, "port_nodes", tuple(p.name if p.node is None else p.node for p in self.ports))
        object.__setattr__(self, "nodes", resolve_nodes(name, gap_names, list(self.port_nodes), self.network))
        object.__setattr__(
            self, "load_gaps", tuple(self._place(q, f"load {i}", may_touch_end=False) for i, q in enumerate(self.loads))
        )

    @property
    def gap_labels(self) -> tuple[str, ...]:
        """What each gap is called in messages, in the order of ``gaps``."""
        return (*(f"port {p.name!r}" for p in self.ports if p.wire is not None), *(f"feed {q.name!r}" for q in self.feeds))

    def _place(self, item: Port | FeedPoint | Load, label: str, *, may_touch_end: bool) -> Gap:
        if item.wire is None or not 0 <= item.wire < len(self.wires):
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

    @property
    def port_gaps(self) -> tuple[Gap, ...]:
        """Gap of each port: its own, or the electrically nearest one where a network lies between."""
        return tuple(self.gaps[self.nearest_gap(p)] for p in self.ports)

    def nearest_gap(self, port: Port) -> int:
        """Return the index of the gap that a port looks into, or of the electrically nearest one behind its network.

        Lines are as long as a wave takes to pass them; branches and transformers take no time.  Gaps equally near, or a port
        that no path leads away from, give the first of the design's gaps.
        """
        node = port.name if port.node is None else port.node
        distance = self.network.distances(node)
        reached = [distance.get(gap, inf) for gap in self.nodes[: len(self.gaps)]]
        return reached.index(min(reached))

    def has_level_polarisation(self, port: int) -> bool:
        """Return whether a port, by index, has a direction of co-polarisation at the zenith, as upright wires have not."""
        wire = self.wires[self.port_gaps[port].wire]
        across = hypot(wire.end[0] - wire.start[0], wire.end[1] - wire.start[1])
        return self.ports[port].nominal_azimuth_deg is not None or across > 1e-6 * wire.length

    def port_index(self, name: str) -> int:
        """Return the index of the port of that name; raise GeometryError when there is none."""
        for index, port in enumerate(self.ports):
            if port.name == name:
                return index
        msg = f"antenna {self.name!r} has no port {name!r}; it has {', '.join(p.name for p in self.ports)}"
        raise GeometryError(msg)
