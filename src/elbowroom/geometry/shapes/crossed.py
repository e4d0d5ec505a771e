"""Crossed dipoles, straight or drooping."""

from __future__ import annotations

import numpy as np

from elbowroom.base.errors import GeometryError
from elbowroom.geometry.antennas import Antenna, Port
from elbowroom.geometry.shapes.parts import (
    CLEARANCE_RADII,
    check_between,
    check_clear,
    check_positive,
    check_positive_if_given,
)
from elbowroom.geometry.wires import Wire


def crossed_dipoles(
    name: str = "crossed-dipoles",
    *,
    arm_length_m: float,
    height_m: float,
    wire_radius_m: float,
    droop_deg: float = 0.0,
    feed_length_m: float | None = None,
    gap_m: float | None = None,
    separation_m: float | None = None,
    mast_radius_m: float | None = None,
    conductivity_s_per_m: float | None = None,
) -> Antenna:
    """Return two dipoles at right angles, one above the other, whose arms may droop.

    Each dipole is a level feed wire with the port's gap in its middle and two straight arms that leave its ends, falling
    by the droop angle.  Port ``x`` lies along the antenna's own x axis and port ``y`` along its y axis, below it.  Arms of a
    little less than a quarter of a wavelength are resonant; droop widens the beam towards the horizon and lowers the
    resistance (common practice, no source).

    Parameters
    ----------
    name : str, optional
        Name of the design.
    arm_length_m : float
        Length of one arm, from the end of the feed wire to the tip [m]; 0.45 for 150 MHz.
    height_m : float
        Height of port ``x``, the upper dipole's, above the antenna's origin [m]; 0.9, for example.
    wire_radius_m : float
        Wire radius [m]; 0.004, for example.
    droop_deg : float, optional
        Angle by which arms fall below the horizontal [deg]; 0 is a straight dipole.
    feed_length_m : float, optional
        Length of the level feed wire [m]; by default twelve radii.
    gap_m : float, optional
        Width of the gap [m]; by default the wire's diameter.
    separation_m : float, optional
        Height difference of the two dipoles [m]; by default eight radii.
    mast_radius_m : float, optional
        If given, a vertical conductor of this radius [m] stands on the origin and ends below the lower dipole, at eight radii
        of the thicker of the two.
    conductivity_s_per_m : float, optional
        Conductivity of the wires; by default perfect.

    Raises
    ------
    GeometryError
        If an arm would reach below the origin, a number makes no shape, naming its key, or wires touch.
    """
    radius = wire_radius_m
    check_positive(name, arm_length_m=arm_length_m, height_m=height_m, wire_radius_m=radius)
    check_positive_if_given(
        name, feed_length_m=feed_length_m, gap_m=gap_m, separation_m=separation_m, mast_radius_m=mast_radius_m
    )
    check_between(name, -80.0, 80.0, droop_deg=droop_deg)
    feed = 12.0 * radius if feed_length_m is None else feed_length_m
    separation = CLEARANCE_RADII * radius if separation_m is None else separation_m
    if separation <= 2.0 * radius:
        msg = f"antenna {name!r}: separation_m {separation:g} lets the dipoles touch; more than {2.0 * radius:g} is needed"
        raise GeometryError(msg)
    wires: list[Wire] = []
    ports: list[Port] = []
    reach = arm_length_m * np.cos(np.deg2rad(droop_deg))
    fall = arm_length_m * np.sin(np.deg2rad(droop_deg))
    for index, (port, axis) in enumerate((("x", (1.0, 0.0)), ("y", (0.0, 1.0)))):
        height = height_m - index * separation
        if height - fall <= radius:
            msg = (
                f"antenna {name!r}: the arms of port {port!r} reach down to {height - fall:g} m; "
                "raise height_m or lessen the droop"
            )
            raise GeometryError(msg)
        u = np.array([axis[0], axis[1], 0.0])
        up = np.array([0.0, 0.0, 1.0])
        positive, negative = 0.5 * feed * u + height * up, -0.5 * feed * u + height * up
        ports.append(Port(port, wire=len(wires), gap=gap_m))
        for start, end in (
            (negative, positive),
            (positive, positive + reach * u - fall * up),
            (negative, negative - reach * u - fall * up),
        ):
            wires.append(Wire(tuple(start), tuple(end), radius, conductivity_s_per_m))
    if mast_radius_m is not None:
        top = height_m - separation - CLEARANCE_RADII * max(radius, mast_radius_m)
        if top <= 2.0 * mast_radius_m:
            msg = f"antenna {name!r}: height_m {height_m:g} leaves no room for a mast of mast_radius_m {mast_radius_m:g}"
            raise GeometryError(msg)
        wires.append(Wire((0.0, 0.0, 0.0), (0.0, 0.0, top), mast_radius_m, conductivity_s_per_m))
    check_clear(name, wires, "lessen the droop, or take a thinner mast")
    return Antenna(name, wires, ports)
