"""Loops of straight sides."""

from __future__ import annotations

from typing import Literal

import numpy as np

from elbowroom.base.errors import GeometryError
from elbowroom.geometry.antennas import Antenna, Port
from elbowroom.geometry.shapes.parts import check_above_origin, check_choice, check_count, check_positive, check_positive_if_given
from elbowroom.geometry.wires import Wire


def polygonal_loop(
    name: str = "polygonal-loop",
    *,
    sides: int = 4,
    circumference_m: float | None = None,
    side_m: float | None = None,
    height_m: float,
    wire_radius_m: float,
    plane: Literal["level", "vertical"] = "level",
    gap_m: float | None = None,
    conductivity_s_per_m: float | None = None,
) -> Antenna:
    """Return a loop: a regular polygon with the port in the middle of a side that runs along the x axis.

    A side is the circumference over the number of sides, the distance from the centre to its middle half a side over
    tan(180 deg / sides).  A level loop has its centre above the origin and its port towards -y; a loop in the vertical x-z plane
    has its port at its lowest point.  A circumference of one wavelength is resonant, radiates broadside and is polarised
    along the side with the port; a small loop of area A has the radiation resistance (eta / 6 pi) k^4 A^2 (C. A. Balanis,
    Antenna Theory, 3rd ed., chapter 5; from memory).

    Parameters
    ----------
    name : str, optional
        Name of the design.
    sides : int, optional
        Number of sides, three or more.
    circumference_m, side_m : float, optional
        One of the two: length of all sides together or of one [m]; a circumference of 2.1 for 150 MHz.
    height_m : float
        Height of the port above the antenna's origin [m]; 1.5, for example.
    wire_radius_m : float
        Wire radius [m]; 0.004, for example.
    plane : "level" or "vertical", optional
        How the loop lies.
    gap_m : float, optional
        Width of the gap [m]; by default the wire's diameter.
    conductivity_s_per_m : float, optional
        Conductivity of the wires; by default perfect.

    Raises
    ------
    GeometryError
        If a number makes no shape, naming its key.
    """
    check_count(name, 3, sides=sides)
    check_choice(name, ("level", "vertical"), plane=plane)
    check_positive(name, height_m=height_m, wire_radius_m=wire_radius_m)
    check_positive_if_given(name, circumference_m=circumference_m, side_m=side_m, gap_m=gap_m)
    if (circumference_m is None) == (side_m is None):
        msg = f"antenna {name!r}: expected either circumference_m or side_m"
        raise GeometryError(msg)
    side = side_m if circumference_m is None else circumference_m / sides
    assert side is not None
    if side < 4.0 * wire_radius_m:
        msg = (
            f"antenna {name!r}: sides of {side:g} m are too short for wire_radius_m {wire_radius_m:g}; fewer sides, a larger "
            "circumference_m or side_m, or a thinner wire expected"
        )
        raise GeometryError(msg)
    # Corners from the start of the port's side onwards, counter-clockwise.
    angle = -0.5 * np.pi + (2.0 * np.arange(sides) - 1.0) * np.pi / sides
    corner = 0.5 * side / np.sin(np.pi / sides) * np.column_stack([np.cos(angle), np.sin(angle)])
    inward = 0.5 * side / np.tan(np.pi / sides)
    if plane == "level":
        points = np.column_stack([corner, np.full(sides, height_m)])
    else:
        points = np.column_stack([corner[:, 0], np.zeros(sides), corner[:, 1] + inward + height_m])
    # The port's side is level to the last digit, so that nothing of its direction is left to rounding.
    points[1, 1:] = points[0, 1:]
    wires = [
        Wire(tuple(a), tuple(b), wire_radius_m, conductivity_s_per_m) for a, b in zip(points, np.roll(points, -1, 0), strict=True)
    ]
    check_above_origin(name, wires, "raise height_m")
    return Antenna(name, wires, [Port("x", 0, gap=gap_m)])
