"""Parametric antenna shapes: a few numbers in, an :class:`Antenna` of wires out."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from elbowroom.base.errors import GeometryError
from elbowroom.geometry.antennas import Antenna, Port
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
    by the droop angle.  Port ``x`` lies along the antenna's own x axis and port ``y`` along its y axis, below it.

    Parameters
    ----------
    name : str, optional
        Name of the design.
    arm_length_m : float
        Length of one arm, from the end of the feed wire to the tip [m].
    height_m : float
        Height of the upper dipole's feed above the antenna's origin [m].
    wire_radius_m : float
        Wire radius [m].
    droop_deg : float, optional
        Angle by which arms fall below the horizontal [deg]; 0 is a straight dipole.
    feed_length_m : float, optional
        Length of the level feed wire [m]; by default twelve radii.
    gap_m : float, optional
        Width of the gap [m]; by default the wire's diameter.
    separation_m : float, optional
        Height difference of the two dipoles [m]; by default eight radii.
    mast_radius_m : float, optional
        If given, a vertical conductor of this radius [m] stands on the origin and ends two of its diameters below the
        lower dipole.
    conductivity_s_per_m : float, optional
        Conductivity of the wires; by default perfect.

    Raises
    ------
    GeometryError
        If an arm would reach below the origin or a number makes no shape.
    """
    radius = wire_radius_m
    feed = 12.0 * radius if feed_length_m is None else feed_length_m
    separation = 8.0 * radius if separation_m is None else separation_m
    if not -80.0 <= droop_deg <= 80.0:
        msg = f"antenna {name!r}: droop_deg {droop_deg:g} must lie between -80 and 80"
        raise GeometryError(msg)
    if arm_length_m <= 0.0 or feed <= 0.0 or height_m <= 0.0:
        msg = f"antenna {name!r}: arm_length_m, feed_length_m and height_m must be positive"
        raise GeometryError(msg)
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
        top = height_m - separation - radius - 4.0 * mast_radius_m
        wires.append(Wire((0.0, 0.0, 0.0), (0.0, 0.0, top), mast_radius_m, conductivity_s_per_m))
    return Antenna(name, wires, ports)


SHAPES: dict[str, Callable[..., Antenna]] = {"crossed-dipoles": crossed_dipoles}
"""Shapes by the name that antenna files use; the keyword arguments of each function are its keys."""
