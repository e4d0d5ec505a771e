"""Circuits inside an antenna: lines, stubs, lumped branches and transformers between its gaps and its ports.

A *node* is a pair of terminals: the two sides of a gap, or a free place where lines meet.  Everything here connects nodes; what
the circuit does at a frequency is worked out in `elbowroom.system.networks`.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, fields
from heapq import heappop, heappush

import numpy as np

from elbowroom.base.constants import SPEED_OF_LIGHT
from elbowroom.base.errors import GeometryError


@dataclass(frozen=True)
class FeedPoint:
    """A gap in a wire that no port looks into directly: a node for a network.

    Parameters
    ----------
    name : str
        Name of the node, unique among the antenna's gaps.
    wire : int
        Index of the wire that carries the gap.
    position : float, optional
        Middle of the gap as a fraction of the wire's length.
    gap : float, optional
        Width of the gap [m]; by default the diameter of the wire.
    """

    name: str
    wire: int
    position: float = 0.5
    gap: float | None = None


@dataclass(frozen=True)
class Line:
    """A section of transmission line between two nodes.

    Parameters
    ----------
    start, end : str
        Nodes.
    impedance_ohm : float
        Characteristic impedance, real [ohm].
    length_m : float
        Length [m].
    velocity_factor : float, optional
        Phase velocity over that of light.
    crossed : bool, optional
        Whether the two conductors change places on the way.
    loss_db_per_m : float, optional
        Loss [dB/m].
    loss_reference_hz : float, optional
        If given, the loss holds there and grows with the square root of frequency; else it is the same everywhere.
    """

    start: str
    end: str
    impedance_ohm: float
    length_m: float
    velocity_factor: float = 1.0
    crossed: bool = False
    loss_db_per_m: float = 0.0
    loss_reference_hz: float | None = None

    def __post_init__(self) -> None:
        _check_line(self, f"line from {self.start!r} to {self.end!r}")

    def propagation(self, frequency_hz: float) -> complex:
        """Return exp(-gamma l) over the section, never larger than 1 in magnitude."""
        return _propagation(self, frequency_hz)


@dataclass(frozen=True)
class Stub:
    """A line that begins at a node and ends in a short or open circuit.

    Parameters
    ----------
    node : str
        Node.
    impedance_ohm, length_m, velocity_factor, loss_db_per_m, loss_reference_hz
        As for :class:`Line`.
    shorted : bool, optional
        Whether its far end is a short (default) or open.
    """

    node: str
    impedance_ohm: float
    length_m: float
    velocity_factor: float = 1.0
    shorted: bool = True
    loss_db_per_m: float = 0.0
    loss_reference_hz: float | None = None

    def __post_init__(self) -> None:
        _check_line(self, f"stub at {self.node!r}")

    def propagation(self, frequency_hz: float) -> complex:
        """Return exp(-gamma l) over the stub, one way."""
        return _propagation(self, frequency_hz)


@dataclass(frozen=True)
class Branch:
    """A series circuit of resistance, inductance and capacitance, across a node or from one node to another.

    Parameters
    ----------
    start : str
        Node.
    end : str, optional
        If given, the branch lies in series between the two nodes; else it lies across the first.
    resistance_ohm, inductance_h : float
        [ohm], [H].
    capacitance_f : float, optional
        [F]; none in series by default.
    """

    start: str
    end: str | None = None
    resistance_ohm: float = 0.0
    inductance_h: float = 0.0
    capacitance_f: float | None = None

    def __post_init__(self) -> None:
        for key in ("resistance_ohm", "inductance_h"):
            value = getattr(self, key)
            if not (np.isfinite(value) and value >= 0.0):
                msg = f"branch at {self.start!r}: {key} {value!r}: expected zero or more"
                raise GeometryError(msg)
        if self.capacitance_f is not None and not (np.isfinite(self.capacitance_f) and self.capacitance_f > 0.0):
            msg = f"branch at {self.start!r}: capacitance_f {self.capacitance_f!r}: expected a positive number"
            raise GeometryError(msg)

    def impedance(self, frequency_hz: float) -> complex:
        """Return the impedance [ohm]."""
        omega = 2.0 * np.pi * frequency_hz
        value = complex(self.resistance_ohm, omega * self.inductance_h)
        return value if self.capacitance_f is None else value + 1.0 / (1j * omega * self.capacitance_f)


@dataclass(frozen=True)
class Transformer:
    """An ideal transformer: V(start) = ratio * V(end), and power passes unchanged.

    Parameters
    ----------
    start, end : str
        Nodes.
    ratio : float
        Turns of the start's winding over those of the end's; negative if one is reversed.
    """

    start: str
    end: str
    ratio: float

    def __post_init__(self) -> None:
        if not (np.isfinite(self.ratio) and self.ratio != 0.0):
            msg = f"transformer from {self.start!r} to {self.end!r}: ratio {self.ratio!r}: expected a number other than zero"
            raise GeometryError(msg)


@dataclass(frozen=True)
class Network:
    """What connects the gaps of an antenna with one another and with its ports.

    Parameters
    ----------
    lines : tuple of Line
    stubs : tuple of Stub
    branches : tuple of Branch
    transformers : tuple of Transformer
    """

    lines: tuple[Line, ...] = ()
    stubs: tuple[Stub, ...] = ()
    branches: tuple[Branch, ...] = ()
    transformers: tuple[Transformer, ...] = ()

    def __post_init__(self) -> None:
        for field in fields(self):
            object.__setattr__(self, field.name, tuple(getattr(self, field.name)))

    def __bool__(self) -> bool:
        """Return whether there is anything in it."""
        return bool(self.lines or self.stubs or self.branches or self.transformers)

    def mentions(self) -> list[str]:
        """Return every node that an element of the network names, as often as it is named, in order."""
        found: list[str] = []
        pairs: list[Line | Transformer] = [*self.lines, *self.transformers]
        for pair in pairs:
            found += [pair.start, pair.end]
        found += [stub.node for stub in self.stubs]
        for branch in self.branches:
            found += [branch.start] if branch.end is None else [branch.start, branch.end]
        return found

    def distances(self, node: str) -> dict[str, float]:
        """Return how far the nodes that can be reached from one are from it, by the shortest path.

        Parameters
        ----------
        node : str
            Where paths begin.

        Returns
        -------
        dict of str to float
            Length of lines over their velocity factor, added up [m]; branches and transformers have none.
        """
        steps: dict[str, list[tuple[str, float]]] = {}
        joins = [(line.start, line.end, line.length_m / line.velocity_factor) for line in self.lines]
        joins += [(one.start, one.end, 0.0) for one in self.transformers]
        joins += [(branch.start, branch.end, 0.0) for branch in self.branches if branch.end is not None]
        for start, end, length in joins:
            steps.setdefault(start, []).append((end, length))
            steps.setdefault(end, []).append((start, length))
        settled: dict[str, float] = {}
        open_ends = [(0.0, node)]
        while open_ends:
            far, here = heappop(open_ends)
            if here in settled:
                continue
            settled[here] = far
            for there, length in steps.get(here, []):
                heappush(open_ends, (far + length, there))
        return settled


def resolve_nodes(antenna: str, gaps: list[str], ports_at: list[str], network: Network) -> tuple[str, ...]:
    """Return all nodes of an antenna: its gaps in order, then free nodes in the order in which they are named.

    Parameters
    ----------
    antenna : str
        Name of the design, for messages.
    gaps : list of str
        Nodes that are gaps.
    ports_at : list of str
        Node of each port.
    network : Network
        What connects them.

    Raises
    ------
    GeometryError
        If a gap has nothing across it, or a node that is no gap leads nowhere, as a misspelt name does.
    """
    pairs: list[Line | Transformer] = [*network.lines, *network.transformers]
    for pair in pairs:
        if pair.start == pair.end:
            msg = f"antenna {antenna!r}: a line or transformer begins and ends at node {pair.start!r}"
            raise GeometryError(msg)
    uses = Counter([*ports_at, *network.mentions()])
    for gap in gaps:
        if not uses[gap]:
            msg = f"antenna {antenna!r}: nothing is connected to gap {gap!r}; give it a port, a line, a stub or a branch"
            raise GeometryError(msg)
    free = [node for node in uses if node not in gaps]
    for node in free:
        if uses[node] < 2:
            known = ", ".join(repr(g) for g in gaps[:8]) + (", ..." if len(gaps) > 8 else "")
            msg = (
                f"antenna {antenna!r}: node {node!r} is named once only and is no gap, so it leads nowhere; "
                f"gaps are {known or 'none'}"
            )
            raise GeometryError(msg)
    return (*gaps, *free)


def _check_line(line: Line | Stub, label: str) -> None:
    for key in ("impedance_ohm", "length_m", "velocity_factor"):
        value = getattr(line, key)
        if not (np.isfinite(value) and value > 0.0):
            msg = f"{label}: {key} {value!r}: expected a positive number"
            raise GeometryError(msg)
    if line.velocity_factor > 1.0:
        msg = f"{label}: velocity_factor {line.velocity_factor:g}: expected at most 1"
        raise GeometryError(msg)
    if not (np.isfinite(line.loss_db_per_m) and line.loss_db_per_m >= 0.0):
        msg = f"{label}: loss_db_per_m {line.loss_db_per_m!r}: expected zero or more"
        raise GeometryError(msg)
    reference = line.loss_reference_hz
    if reference is not None and not (np.isfinite(reference) and reference > 0.0):
        msg = f"{label}: loss_reference_hz {reference!r}: expected a positive frequency"
        raise GeometryError(msg)


def _propagation(line: Line | Stub, frequency_hz: float) -> complex:
    loss = line.loss_db_per_m
    if line.loss_reference_hz is not None:
        loss *= np.sqrt(frequency_hz / line.loss_reference_hz)
    # Whole turns are taken off before the exponential, so that half-wave sections come out to the last digit.
    turns = frequency_hz * line.length_m / (line.velocity_factor * SPEED_OF_LIGHT)
    phase = -2.0 * np.pi * (turns - np.round(turns))
    return complex(10.0 ** (-loss * line.length_m / 20.0) * np.exp(1j * phase))
