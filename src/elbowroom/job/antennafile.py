"""Antenna files: TOML in, an :class:`Antenna` out.

Either one of the parametric shapes::

    name = "drooping dipoles"         # optional; the file's name by default
    shape = "crossed-dipoles"         # keys below: the arguments of elbowroom.geometry.shapes.crossed_dipoles
    arm_length_m = 0.66
    height_m = 0.50
    wire_radius_m = 0.006

(there are ``dipole``, ``crossed-dipoles``, ``folded-dipole``, ``bow-tie``, ``polygonal-loop``, ``monopole`` and ``log-periodic``;
`elbowroom.geometry.shapes` tells their keys), or wires, ports, loads and the network between them one by one:

================================= ==========================================================================
key                               meaning
================================= ==========================================================================
``name``                          name of the design; the file's name by default
``[[wire]] name``                 optional, so that ports and loads can say ``wire = "arm"``
``[[wire]] start_m, end_m``       ends of the axis in the antenna's own frame [east, north, up] [m]
``[[wire]] radius_m``             wire radius [m]
``[[wire]] conductivity_s_per_m`` conductivity [S/m]; a perfect conductor without it
``[[wire]] relative_permeability`` for the loss of steel wires; 1 by default
``[[port]] name``                 name, unique in the antenna
``[[port]] wire``                 the wire with the gap: its name, or its number counted from 0
``[[port]] position``             middle of the gap as a fraction of the wire's length; 0.5 by default
``[[port]] gap_m``                width of the gap [m]; the wire's diameter by default
``[[port]] node``                 instead of ``wire``: the node of the network that the port looks into
``[[port]] nominal_azimuth_deg``  co-polarisation at zenith, from east towards north [deg]; by default along the wire,
                                  or that of the electrically nearest gap for a port at a node that is no gap
``[[load]] wire, position``       as for a port; ``position`` is required
``[[load]] resistance_ohm``       series resistance [ohm]; 0 by default
``[[load]] inductance_h``         series inductance [H]; 0 by default
``[[load]] capacitance_f``        series capacitance [F]; none by default
``[[load]] gap_m``                width over which the load is spread [m]; the wire's diameter by default
``[[feed]] name``                 name of a gap that no port looks into directly: a node for what follows
``[[feed]] wire, position``       as for a port
``[[feed]] gap_m``                as for a port
``[[line]] start, end``           nodes that a section of transmission line joins
``[[line]] impedance_ohm``        characteristic impedance [ohm]
``[[line]] length_m``             length [m]
``[[line]] velocity_factor``      phase velocity over that of light; 1 by default
``[[line]] crossed``              true if the two conductors change places on the way; false by default
``[[line]] loss_db_per_m``        loss [dB/m]; 0 by default
``[[line]] loss_reference_hz``    where that loss holds [Hz], which then grows with the square root of frequency; without
                                  it the loss is the same at all frequencies
``[[stub]] node``                 node at which a line begins that ends in a short or open circuit
``[[stub]] shorted``              true (default) or, for an open end, false
``[[stub]] impedance_ohm``, ...   ``length_m``, ``velocity_factor``, ``loss_db_per_m``, ``loss_reference_hz``: as for a line
``[[branch]] start``              node across which resistance, inductance and capacitance lie, in series
``[[branch]] end``                if given, they lead from the one node to the other instead
``[[branch]] resistance_ohm``     [ohm]; 0 by default
``[[branch]] inductance_h``       [H]; 0 by default
``[[branch]] capacitance_f``      [F]; none by default
``[[transformer]] start, end``    nodes that an ideal transformer joins
``[[transformer]] ratio``         voltage at ``start`` over that at ``end``; negative if one winding is reversed
================================= ==========================================================================

Wires whose ends meet, or that end on another wire, are joined there.  A node is a pair of terminals: the gap of a feed or of a
port with a wire, by its name, or a free place, by any name that two or more lines, stubs, branches, transformers or ports share.
"""

from __future__ import annotations

import inspect
from collections import Counter
from collections.abc import Sequence
from pathlib import Path
from typing import Annotated, Any, get_type_hints

from pydantic import Field, create_model

from elbowroom.base.errors import GeometryError
from elbowroom.geometry.antennas import Antenna, Load, Port
from elbowroom.geometry.networks import Branch, FeedPoint, Line, Network, Stub, Transformer
from elbowroom.geometry.shapes import SHAPES
from elbowroom.geometry.wires import Wire
from elbowroom.job.tomlfile import Table, fail, key_path, near_miss, read_toml, shown, validate_table

_Positive = Annotated[float, Field(gt=0.0)]
_NotNegative = Annotated[float, Field(ge=0.0)]
_Fraction = Annotated[float, Field(ge=0.0, le=1.0)]
_Point = Annotated[list[float], Field(min_length=3, max_length=3)]
_Name = Annotated[str, Field(min_length=1)]


class _Wire(Table):
    name: _Name | None = None
    start_m: _Point
    end_m: _Point
    radius_m: _Positive
    conductivity_s_per_m: _Positive | None = None
    relative_permeability: _Positive = 1.0


class _Feed(Table):
    name: _Name
    wire: Any
    position: _Fraction = 0.5
    gap_m: _Positive | None = None


class _Port(Table):
    name: _Name
    wire: Any = None
    node: _Name | None = None
    position: _Fraction = 0.5
    gap_m: _Positive | None = None
    nominal_azimuth_deg: float | None = None


class _Load(Table):
    wire: Any
    position: _Fraction
    resistance_ohm: _NotNegative = 0.0
    inductance_h: _NotNegative = 0.0
    capacitance_f: _Positive | None = None
    gap_m: _Positive | None = None


class _Section(Table):
    impedance_ohm: _Positive
    length_m: _Positive
    velocity_factor: Annotated[float, Field(gt=0.0, le=1.0)] = 1.0
    loss_db_per_m: _NotNegative = 0.0
    loss_reference_hz: _Positive | None = None


class _Line(_Section):
    start: _Name
    end: _Name
    crossed: bool = False


class _Stub(_Section):
    node: _Name
    shorted: bool = True


class _Branch(Table):
    start: _Name
    end: _Name | None = None
    resistance_ohm: _NotNegative = 0.0
    inductance_h: _NotNegative = 0.0
    capacitance_f: _Positive | None = None


class _Transformer(Table):
    start: _Name
    end: _Name
    ratio: float


_TABLES = ("wire", "port", "load", "feed", "line", "stub", "branch", "transformer")
_FREE_KEYS = ("name", *_TABLES)
_NETWORK: dict[str, tuple[type[Table], Any, tuple[str, ...]]] = {
    "line": (_Line, Line, ("start", "end")),
    "stub": (_Stub, Stub, ("node",)),
    "branch": (_Branch, Branch, ("start", "end")),
    "transformer": (_Transformer, Transformer, ("start", "end")),
}
"""For each table of the network: its declaration, what it becomes, and which of its keys name nodes."""


def read_antenna(path: str | Path) -> Antenna:
    """Read an antenna from a TOML file.

    Parameters
    ----------
    path : str or Path
        The file, UTF-8; see the module's table for its keys.

    Returns
    -------
    Antenna

    Raises
    ------
    JobFileError
        With every problem found, each with its key; entries of tables in double brackets are counted from 0.
    """
    file = Path(path)
    _, table = read_toml(file, "antenna file")
    problems: list[str] = []
    name = table.get("name", file.stem)
    if not isinstance(name, str) or not name.strip():
        problems.append(f"name = {shown(name)}: expected text in quotes")
        name = file.stem
    antenna = _from_shape(table, name, problems) if "shape" in table else _from_wires(table, name, problems)
    if antenna is None or problems:
        fail(file, "antenna file", problems)
    return antenna


def _from_shape(table: dict[str, Any], name: str, problems: list[str]) -> Antenna | None:
    shape = table["shape"]
    rest = {k: v for k, v in table.items() if k not in ("shape", "name")}
    for key in _TABLES:
        if rest.pop(key, None) is not None:
            problems.append(f"{key}: a shape brings its own; leave out either shape or the [[{key}]] tables")
    if not isinstance(shape, str) or shape not in SHAPES:
        hint = near_miss(shape, SHAPES, "known shapes") if isinstance(shape, str) else "expected text in quotes"
        problems.append(f"shape = {shown(shape)}: unknown shape; {hint}")
        return None
    function = SHAPES[shape]
    # TOML knows lists only, and problems are told in its words.
    hints = {
        key: list[float] | None if hint == Sequence[float] | None else hint for key, hint in get_type_hints(function).items()
    }
    fields: dict[str, Any] = {
        key: (hints[key], ... if p.default is inspect.Parameter.empty else p.default)
        for key, p in inspect.signature(function).parameters.items()
        if key != "name"
    }
    values = validate_table(create_model("_Shape", __base__=Table, **fields), rest, problems)
    if values is None:
        return None
    try:
        return function(name, **{key: getattr(values, key) for key in fields})
    except GeometryError as cause:
        problems.append(f"shape = {shown(shape)}: {cause}")
        return None


def _from_wires(table: dict[str, Any], name: str, problems: list[str]) -> Antenna | None:
    known = (*_FREE_KEYS, "shape")
    shape_keys = {k for f in SHAPES.values() for k in inspect.signature(f).parameters}
    for key in table:
        if key in _FREE_KEYS:
            continue
        hint = "needs shape = ..., which is missing" if key in shape_keys else near_miss(key, known, "known keys")
        problems.append(f"{key_path(key)}: unknown key; {hint}")
    given: dict[str, list] = {}
    for key in _TABLES:
        entries = table.get(key, [])
        if not isinstance(entries, list):
            problems.append(f"{key}: expected [[{key}]] tables in double brackets, found {shown(entries)}")
            entries = []
        elif not entries and key in ("wire", "port"):
            problems.append(f"[[{key}]] is missing: at least one expected" + ("" if table else ", or a shape"))
        given[key] = entries

    wires: list[Wire | None] = []
    wire_names: list[str | None] = []
    for i, entry in enumerate(given["wire"]):
        wire_names.append(entry.get("name") if isinstance(entry, dict) else None)
        wires.append(_wire(entry, i, problems))
    for wire_name, count in Counter(n for n in wire_names if isinstance(n, str)).items():
        if count > 1:
            problems.append(f"wire: the name {wire_name!r} is used {count} times")

    ports: list[tuple[int, Port]] = []
    feeds: list[tuple[int, FeedPoint]] = []
    loads: list[tuple[int, Load]] = []
    for i, entry in enumerate(given["port"]):
        port = _port(entry, i, wire_names, problems)
        if port is not None:
            ports.append((i, port))
    for i, entry in enumerate(given["feed"]):
        f = validate_table(_Feed, entry, problems, ("feed", i))
        index = None if f is None else _wire_index(f.wire, wire_names, f"feed[{i}].wire", problems)
        if f is not None and index is not None:
            feeds.append((i, FeedPoint(f.name, index, f.position, f.gap_m)))
    for i, entry in enumerate(given["load"]):
        q = validate_table(_Load, entry, problems, ("load", i))
        index = None if q is None else _wire_index(q.wire, wire_names, f"load[{i}].wire", problems)
        if q is not None and index is not None:
            load = Load(index, q.position, q.resistance_ohm, q.inductance_h, q.capacitance_f, q.gap_m)
            loads.append((i, load))
    for port_name, count in Counter(p.name for _, p in ports).items():
        if count > 1:
            problems.append(f"port: the name {port_name!r} is used {count} times")
    # Each gap is tried alone on its wire first, so that all that do not fit are told, not only the first.
    for key, items in (("port", ports), ("feed", feeds), ("load", loads)):
        for i, item in items:
            wire = None if item.wire is None else wires[item.wire]
            if wire is not None:
                _try_gap(name, wire, key, i, item, problems)
    network = _network(given, problems)
    if problems:
        return None
    try:
        return Antenna(
            name,
            [w for w in wires if w is not None],
            [p for _, p in ports],
            [q for _, q in loads],
            [f for _, f in feeds],
            network,
        )
    except GeometryError as cause:
        problems.append(str(cause))
        return None


def _port(entry: object, i: int, wire_names: list[str | None], problems: list[str]) -> Port | None:
    p = validate_table(_Port, entry, problems, ("port", i))
    if p is None:
        return None
    if p.node is not None:
        if p.wire is not None:
            problems.append(f"port[{i}]: both wire and node given; expected the wire with its gap, or a node of the network")
            return None
        for key in sorted({"position", "gap_m"} & p.model_fields_set):
            problems.append(f"port[{i}].{key}: a port at a node has no gap of its own; leave it out, or give it to a [[feed]]")
        return Port(p.name, nominal_azimuth_deg=p.nominal_azimuth_deg, node=p.node)
    if p.wire is None:
        problems.append(f"port[{i}].wire: required key is missing; or node, for a port that looks into a network")
        return None
    index = _wire_index(p.wire, wire_names, f"port[{i}].wire", problems)
    return None if index is None else Port(p.name, index, p.position, p.gap_m, p.nominal_azimuth_deg)


def _network(given: dict[str, list], problems: list[str]) -> Network:
    """Return the network of an antenna as far as its tables are in order; what is not becomes problems."""
    made: dict[str, list] = {key: [] for key in _NETWORK}
    for key, (model, element, node_keys) in _NETWORK.items():
        for i, entry in enumerate(given[key]):
            values = validate_table(model, entry, problems, (key, i))
            if values is None:
                continue
            nodes = [getattr(values, k) for k in node_keys]
            if len(nodes) == 2 and nodes[0] == nodes[1]:
                problems.append(f"{key}[{i}]: start and end are both {nodes[0]!r}; expected two nodes")
                continue
            try:
                made[key].append(element(**values.model_dump()))
            except GeometryError as cause:
                problems.append(f"{key}[{i}]: {cause}")
    _check_nodes(given, problems)
    return Network(tuple(made["line"]), tuple(made["stub"]), tuple(made["branch"]), tuple(made["transformer"]))


def _check_nodes(given: dict[str, list], problems: list[str]) -> None:
    """Tell of nodes that lead nowhere, of feeds to which nothing is connected and of gaps that share a name.

    It works on the tables as they were written, so that another fault of an entry does not hide these.
    """
    named = {"port": ("name",), "feed": ("name",), **{key: node_keys for key, (_, _, node_keys) in _NETWORK.items()}}
    entries = [(key, i, entry) for key in named for i, entry in enumerate(given[key])]
    for key, _, entry in entries:
        optional = ("end",) if key == "branch" else ()
        if not isinstance(entry, dict) or not all(
            isinstance(entry.get(k, "" if k in optional else None), str) for k in named[key]
        ):
            return  # without all names, what is connected is not known
    port_gaps = [e["name"] for e in given["port"] if "node" not in e]
    feed_gaps = [e["name"] for e in given["feed"]]
    gaps = [*port_gaps, *feed_gaps]
    for i, gap in enumerate(feed_gaps):
        if gap in port_gaps:
            problems.append(f"feed[{i}].name = {shown(gap)}: a port with a gap of its own has this name; expected another")
    for gap, count in Counter(feed_gaps).items():
        if count > 1:
            problems.append(f"feed: the name {gap!r} is used {count} times")
    mentions = [(f"port[{i}].node", e["node"]) for i, e in enumerate(given["port"]) if isinstance(e.get("node"), str)]
    for key, (_, _, node_keys) in _NETWORK.items():
        mentions += [(f"{key}[{i}].{k}", e[k]) for i, e in enumerate(given[key]) for k in node_keys if k in e]
    uses = Counter(node for _, node in mentions)
    for path, node in mentions:
        if node not in gaps and uses[node] == 1:
            others = dict.fromkeys([*gaps, *(n for n in uses if n != node)])
            problems.append(
                f"{path} = {shown(node)}: no feed or port has this name and nothing else is connected to it; "
                f"{near_miss(node, others, 'nodes')}"
            )
    for i, gap in enumerate(feed_gaps):
        if not uses[gap]:
            problems.append(
                f"feed[{i}]: nothing is connected to {gap!r}; expected a line, stub, branch, transformer or port there"
            )


def _wire(entry: object, i: int, problems: list[str]) -> Wire | None:
    w = validate_table(_Wire, entry, problems, ("wire", i))
    if w is None:
        return None
    try:
        return Wire(
            (w.start_m[0], w.start_m[1], w.start_m[2]),
            (w.end_m[0], w.end_m[1], w.end_m[2]),
            w.radius_m,
            w.conductivity_s_per_m,
            w.relative_permeability,
        )
    except GeometryError as cause:
        problems.append(f"wire[{i}]: {cause}")
        return None


def _wire_index(wire: object, names: list[str | None], path: str, problems: list[str]) -> int | None:
    if isinstance(wire, int) and not isinstance(wire, bool):
        if 0 <= wire < len(names):
            return wire
        problems.append(f"{path} = {wire}: no such wire; expected a number from 0 to {len(names) - 1}, or a wire's name")
    elif isinstance(wire, str):
        if wire in names:
            return names.index(wire)
        known = [n for n in names if isinstance(n, str)]
        problems.append(f"{path} = {shown(wire)}: no wire of that name; {near_miss(wire, known, 'named wires')}")
    else:
        problems.append(f"{path} = {shown(wire)}: expected a wire's number, counted from 0, or its name in quotes")
    return None


def _try_gap(name: str, wire: Wire, key: str, i: int, item: Port | FeedPoint | Load, problems: list[str]) -> None:
    try:
        if not isinstance(item, Load):
            Antenna(name, [wire], [Port(item.name, 0, item.position, item.gap)])
        else:
            Antenna(name, [wire], [Port("-", 0)], [Load(0, item.position, gap=item.gap)])
    except GeometryError as cause:
        reason = str(cause).split(": ", 1)[-1]
        problems.append(f"{key}[{i}]: {reason}")
