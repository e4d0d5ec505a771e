"""Log-periodic dipole antennas that look at the sky: axis upright, shortest element and terminals on top."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np

from elbowroom.base.constants import IMPEDANCE_OF_VACUUM
from elbowroom.base.errors import GeometryError
from elbowroom.geometry.antennas import Antenna, Load, Port
from elbowroom.geometry.networks import Branch, FeedPoint, Line, Network, Stub
from elbowroom.geometry.shapes.parts import (
    check_above_origin,
    check_between,
    check_choice,
    check_clear,
    check_not_given,
    check_positive,
    check_positive_if_given,
    quarter_turned,
)
from elbowroom.geometry.wires import Wire

MOST_ELEMENTS = 200
"""More elements than this are a slip of tau or of the shortest length."""


@dataclass(frozen=True)
class _Feeder:
    """What joins the elements: a line as network, or two conductors at a spacing."""

    impedance: float
    spacing: float | None
    radius: float | None
    velocity_factor: float
    stub: float | None
    resistance: float | None


def two_wire_impedance(spacing_m: float, radius_m: float) -> float:
    """Return the characteristic impedance of two equal parallel wires in vacuum, (eta / pi) arcosh(spacing / 2 radius) [ohm].

    Parameters
    ----------
    spacing_m, radius_m : float
        Distance of the axes and radius [m].

    Raises
    ------
    GeometryError
        If the wires touch or a number is not positive.

    Notes
    -----
    Any transmission-line handbook, for example D. M. Pozar, Microwave Engineering, 4th ed., 2012, table 2.1.
    """
    check_positive("two-wire line", spacing_m=spacing_m, radius_m=radius_m)
    if spacing_m <= 2.0 * radius_m:
        msg = f"two-wire line: wires of radius {radius_m:g} m at a spacing of {spacing_m:g} m touch"
        raise GeometryError(msg)
    return float(IMPEDANCE_OF_VACUUM / np.pi * np.arccosh(0.5 * spacing_m / radius_m))


def two_wire_spacing(impedance_ohm: float, radius_m: float) -> float:
    """Return the distance of axes [m] at which two wires of a radius [m] have a characteristic impedance [ohm].

    The inverse of :func:`two_wire_impedance`.

    Raises
    ------
    GeometryError
        If a number is not positive.
    """
    check_positive("two-wire line", impedance_ohm=impedance_ohm, radius_m=radius_m)
    return float(2.0 * radius_m * np.cosh(np.pi * impedance_ohm / IMPEDANCE_OF_VACUUM))


def log_periodic(
    name: str = "log-periodic",
    *,
    height_m: float,
    wire_radius_m: float,
    tau: float | None = None,
    sigma: float | None = None,
    longest_half_length_m: float | None = None,
    shortest_half_length_m: float | None = None,
    elements: int | None = None,
    half_lengths_m: Sequence[float] | None = None,
    positions_m: Sequence[float] | None = None,
    scale_radii: bool = False,
    feeder: Literal["network", "wires"] = "network",
    feeder_impedance_ohm: float | None = None,
    boom_spacing_m: float | None = None,
    boom_radius_m: float | None = None,
    velocity_factor: float = 1.0,
    stub_length_m: float | None = None,
    end_resistance_ohm: float | None = None,
    crossed: bool = True,
    offset_m: float | None = None,
    gap_m: float | None = None,
    conductivity_s_per_m: float | None = None,
) -> Antenna:
    """Return a log-periodic dipole antenna, by default two at right angles on one upright axis.

    Elements are level; the shortest is on top, where the terminals are, so that the antenna looks at the sky.  With
    half-lengths l_1 > l_2 > ... and spacings d_n between elements n and n + 1,

        l_(n+1) / l_n = d_(n+1) / d_n = tau,    d_n = 4 sigma l_n,    tan(alpha) = (1 - tau) / (4 sigma),

    alpha being half the angle that the tips span at the apex.  The directivity is highest near sigma = 0.243 tau - 0.051, and
    in the band the mean impedance is about Z0 / sqrt(1 + Z0 sqrt(tau) / (4 sigma Za)), with Z0 that of the feeder and
    Za = 120 (ln(l / a) - 2.25) ohm that of elements of radius a.  D. E. Isbell, "Log periodic dipole arrays", IRE Trans. AP-8,
    1960; R. L. Carrel, "The design of log-periodic dipole antennas", IRE Int. Conv. Rec. 9 part 1, 1961; C. A. Balanis, Antenna
    Theory, 3rd ed., section 11.4 (all from memory).

    Parameters
    ----------
    name : str, optional
        Name of the design.
    height_m : float
        Height of port ``x``, at the shortest element, above the antenna's origin [m]; 1.9, for example.
    wire_radius_m : float
        Radius of the elements [m]; 0.003, for example.
    tau, sigma : float
        Ratio of successive lengths, below 1, and relative spacing; 0.8 and 0.08, for example.
    longest_half_length_m : float
        Half the length of the lowest element [m]; 1.0 for 80 MHz.
    shortest_half_length_m : float or None
        Elements follow until one is as short as this [m]; or give their number.
    elements : int or None
        Number of elements of one polarisation, 2 or more; 8 reach up to 300 MHz from there.
    half_lengths_m, positions_m : sequence of float, optional
        Instead of the five above: half-lengths from the top down, and distances below the top element, 0 first [m].
    scale_radii : bool, optional
        Whether radii shrink with the lengths; ``wire_radius_m`` is then that of the longest element.
    feeder : "network" or "wires", optional
        ``"network"``: a transposed line as a circuit between the gaps of the elements.  ``"wires"``: two upright conductors,
        the booms; halves of the elements are joined to them alternately, and a short wire with the port bridges them on top.
    feeder_impedance_ohm : float or None
        Characteristic impedance of the feeder [ohm]; 100, for example.
    boom_spacing_m, boom_radius_m : float or None
        Distance of the axes of the two conductors, and their radius [m].  A network needs either the impedance or both of
        these; wires need the radius and one of the others.
    velocity_factor : float, optional
        Of a network; wires have 1.
    stub_length_m : float or None
        Length of a shorted stub beyond the longest element [m]; the feeder is left open there by default.
    end_resistance_ohm : float or None
        Instead of a stub: resistance across the feeder at the longest element [ohm].
    crossed : bool, optional
        Whether to add port ``y`` (default): the same antenna turned by 90 degrees and lowered by the offset.
    offset_m : float, optional
        Height of port ``x`` above port ``y`` [m]; by default half the smallest spacing of elements.
    gap_m : float, optional
        Width of all gaps [m]; by default each wire's diameter.
    conductivity_s_per_m : float, optional
        Conductivity of the wires; by default perfect.

    Raises
    ------
    GeometryError
        If a number makes no shape, naming its key, keys do not go together, or wires touch.

    Notes
    -----
    Booms nearer to one another than eight of their radii, which is a feeder of 248 ohm (sixteen, 332 ohm, where two
    polarisations share the axis), have charge that is uneven round them, which thin-wire models leave out: feeders of 50 to 200
    ohm are better modelled as a network.

    Both feeders give the same antenna as the spacing of the booms vanishes: at 332 ohm the reflections at their ports differ by
    0.03 for a spacing of a hundredth of a wavelength, and by half of that at half the spacing (`tests`).
    """
    check_positive(name, height_m=height_m, wire_radius_m=wire_radius_m)
    check_positive_if_given(name, gap_m=gap_m, offset_m=offset_m)
    if not crossed:
        check_not_given(name, "without crossed = true", offset_m=offset_m)
    check_choice(name, ("network", "wires"), feeder=feeder)
    half_lengths, positions = _elements(
        name, tau, sigma, longest_half_length_m, shortest_half_length_m, elements, half_lengths_m, positions_m
    )
    line = _feeder(
        name, feeder, feeder_impedance_ohm, boom_spacing_m, boom_radius_m, velocity_factor, stub_length_m, end_resistance_ohm
    )
    radii = wire_radius_m * (half_lengths / half_lengths.max() if scale_radii else np.ones(half_lengths.size))
    heights = height_m - positions
    offset = 0.5 * float(np.diff(positions).min()) if offset_m is None else offset_m
    if feeder == "network":
        wires = [
            Wire((-half, 0.0, z), (half, 0.0, z), a, conductivity_s_per_m)
            for half, z, a in zip(half_lengths, heights, radii, strict=True)
        ]
    else:
        wires = _boom_wires(half_lengths, heights, radii, line, conductivity_s_per_m)
    count = len(wires)
    polarisations = ("x", "y") if crossed else ("x",)
    if crossed:
        wires = [*wires, *quarter_turned(wires, offset)]
    check_above_origin(name, wires, "raise height_m, or shorten the antenna, its stub or offset_m")
    check_clear(name, wires, "change offset_m, widen sigma, positions_m or boom_spacing_m, or take a thinner wire_radius_m")

    ports, feeds, loads, network = [], [], [], Network()
    for index, port in enumerate(polarisations):
        first = index * count
        # Bridges lie across the elements, whose polarisation is the port's.
        ports.append(Port(port, first, gap=gap_m, nominal_azimuth_deg=90.0 * index))
        if feeder == "network":
            nodes = [port, *(f"{port}{i + 1}" for i in range(1, count))]
            feeds += [FeedPoint(node, first + i, gap=gap_m) for i, node in enumerate(nodes) if i]
            network = _joined(network, nodes, np.diff(positions), line)
        elif line.resistance is not None:
            loads.append(Load(first + count - 1, 0.5, resistance_ohm=line.resistance, gap=gap_m))
    return Antenna(name, wires, ports, loads, feeds, network)


def _elements(
    name: str,
    tau: float | None,
    sigma: float | None,
    longest: float | None,
    shortest: float | None,
    elements: int | None,
    half_lengths: Sequence[float] | None,
    positions: Sequence[float] | None,
) -> tuple[np.ndarray, np.ndarray]:
    """Return half-lengths from the top down and distances below the top element [m]."""
    ratios = {"tau": tau, "sigma": sigma, "longest_half_length_m": longest}
    rest = {"shortest_half_length_m": shortest, "elements": elements}
    if half_lengths is not None or positions is not None:
        given = [key for key, value in {**ratios, **rest}.items() if value is not None]
        if given or half_lengths is None or positions is None:
            msg = f"antenna {name!r}: half_lengths_m and positions_m go together, " + (
                f"and without {', '.join(given)}" if given else "both are needed"
            )
            raise GeometryError(msg)
        return _table(name, half_lengths, positions)
    missing = [key for key, value in ratios.items() if value is None]
    if missing:
        msg = f"antenna {name!r}: {', '.join(missing)} missing; or half_lengths_m and positions_m expected instead"
        raise GeometryError(msg)
    assert tau is not None
    assert sigma is not None
    assert longest is not None
    if (shortest is None) == (elements is None):
        msg = f"antenna {name!r}: expected either shortest_half_length_m or elements"
        raise GeometryError(msg)
    check_between(name, 0.5, 0.995, tau=tau)
    check_between(name, 0.01, 1.0, sigma=sigma)
    check_positive(name, longest_half_length_m=longest)
    check_positive_if_given(name, shortest_half_length_m=shortest)
    if shortest is not None:
        if shortest >= longest:
            msg = f"antenna {name!r}: shortest_half_length_m {shortest:g} must lie below longest_half_length_m {longest:g}"
            raise GeometryError(msg)
        elements = 1 + int(np.ceil(np.log(shortest / longest) / np.log(tau) - 1e-9))
    if isinstance(elements, bool) or not isinstance(elements, (int, np.integer)) or not 2 <= elements <= MOST_ELEMENTS:
        key = "elements" if shortest is None else "elements down to shortest_half_length_m:"
        msg = f"antenna {name!r}: {key} {elements!r}: expected a whole number from 2 to {MOST_ELEMENTS}"
        raise GeometryError(msg)
    lengths = longest * tau ** np.arange(elements - 1, -1, -1.0)
    return lengths, np.concatenate([[0.0], np.cumsum(4.0 * sigma * lengths[1:])])


def _table(name: str, half_lengths: Sequence[float], positions: Sequence[float]) -> tuple[np.ndarray, np.ndarray]:
    lengths, places = np.asarray(half_lengths, dtype=float), np.asarray(positions, dtype=float)
    if lengths.ndim != 1 or lengths.shape != places.shape or lengths.size < 2:
        msg = (
            f"antenna {name!r}: half_lengths_m and positions_m: expected two lists of equal length, two or more numbers each, "
            f"found {lengths.size} and {places.size}"
        )
        raise GeometryError(msg)
    if not (np.isfinite(lengths).all() and lengths.min() > 0.0):
        msg = f"antenna {name!r}: half_lengths_m must be positive and finite"
        raise GeometryError(msg)
    if not (np.isfinite(places).all() and places[0] == 0.0 and np.diff(places).min() > 0.0):
        msg = f"antenna {name!r}: positions_m are distances below the top element: 0 first, then increasing"
        raise GeometryError(msg)
    return lengths, places


def _feeder(
    name: str,
    kind: str,
    impedance: float | None,
    spacing: float | None,
    radius: float | None,
    velocity_factor: float,
    stub: float | None,
    resistance: float | None,
) -> _Feeder:
    check_positive(name, velocity_factor=velocity_factor)
    check_positive_if_given(
        name, feeder_impedance_ohm=impedance, boom_spacing_m=spacing, boom_radius_m=radius, stub_length_m=stub,
        end_resistance_ohm=resistance,
    )  # fmt: skip
    if velocity_factor > 1.0:
        msg = f"antenna {name!r}: velocity_factor {velocity_factor:g} must be at most 1"
        raise GeometryError(msg)
    if stub is not None and resistance is not None:
        msg = f"antenna {name!r}: expected either stub_length_m or end_resistance_ohm, not both"
        raise GeometryError(msg)
    if kind == "wires" and velocity_factor != 1.0:
        msg = f"antenna {name!r}: velocity_factor {velocity_factor:g}: bare wires have 1; leave it out, or take a network"
        raise GeometryError(msg)
    if kind == "wires" and (radius is None or (impedance is None) == (spacing is None)):
        msg = f"antenna {name!r}: feeder 'wires' needs boom_radius_m and one of boom_spacing_m and feeder_impedance_ohm"
        raise GeometryError(msg)
    if kind == "network" and ((impedance is None) == (spacing is None) or (spacing is None) != (radius is None)):
        msg = f"antenna {name!r}: feeder 'network' needs either feeder_impedance_ohm, or boom_spacing_m and boom_radius_m"
        raise GeometryError(msg)
    if radius is not None:
        if spacing is None:
            assert impedance is not None
            spacing = two_wire_spacing(impedance, radius)
        if spacing <= 2.0 * radius:
            msg = f"antenna {name!r}: boom_spacing_m {spacing:g} lets booms of boom_radius_m {radius:g} touch"
            raise GeometryError(msg)
        impedance = two_wire_impedance(spacing, radius)
    assert impedance is not None
    return _Feeder(impedance, spacing, radius, velocity_factor, stub, resistance)


def _boom_wires(
    half_lengths: np.ndarray, heights: np.ndarray, radii: np.ndarray, line: _Feeder, conductivity: float | None
) -> list[Wire]:
    """Return bridge with the port, two booms, the halves of the elements and, where there is one, the far bridge."""
    assert line.spacing is not None
    assert line.radius is not None
    side, a = 0.5 * line.spacing, line.radius
    bottom = float(heights[-1]) - (line.stub or 0.0)
    wires = [
        # From the boom of the top element's half along -x to that of its half along +x: the polarity of a plain dipole.
        Wire((0.0, side, heights[0]), (0.0, -side, heights[0]), a, conductivity),
        Wire((0.0, -side, heights[0]), (0.0, -side, bottom), a, conductivity),
        Wire((0.0, side, heights[0]), (0.0, side, bottom), a, conductivity),
    ]
    for i, (half, z, radius) in enumerate(zip(half_lengths, heights, radii, strict=True)):
        boom = -side if i % 2 == 0 else side
        wires += [
            Wire((0.0, boom, z), (half, boom, z), radius, conductivity),
            Wire((0.0, -boom, z), (-half, -boom, z), radius, conductivity),
        ]
    if line.stub is not None or line.resistance is not None:
        wires.append(Wire((0.0, -side, bottom), (0.0, side, bottom), a, conductivity))
    return wires


def _joined(network: Network, nodes: list[str], lengths: np.ndarray, line: _Feeder) -> Network:
    """Return a network with one more transposed feeder from node to node."""
    lines = [
        Line(start, end, line.impedance, float(length), line.velocity_factor, crossed=True)
        for start, end, length in zip(nodes[:-1], nodes[1:], lengths, strict=True)
    ]
    stubs = [] if line.stub is None else [Stub(nodes[-1], line.impedance, line.stub, line.velocity_factor)]
    branches = [] if line.resistance is None else [Branch(nodes[-1], resistance_ohm=line.resistance)]
    return Network((*network.lines, *lines), (*network.stubs, *stubs), (*network.branches, *branches))
