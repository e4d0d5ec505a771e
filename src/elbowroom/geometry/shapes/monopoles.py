"""Monopoles, on the ground or on radials."""

from __future__ import annotations

import numpy as np

from elbowroom.base.errors import GeometryError
from elbowroom.geometry.antennas import Antenna, Port
from elbowroom.geometry.shapes.parts import (
    check_above_origin,
    check_between,
    check_clear,
    check_count,
    check_not_given,
    check_positive,
    check_positive_if_given,
)
from elbowroom.geometry.wires import Wire


def monopole(
    name: str = "monopole",
    *,
    length_m: float,
    wire_radius_m: float,
    height_m: float = 0.0,
    radials: int = 0,
    radial_length_m: float | None = None,
    radial_droop_deg: float = 0.0,
    radial_radius_m: float | None = None,
    gap_m: float | None = None,
    conductivity_s_per_m: float | None = None,
) -> Antenna:
    """Return a monopole whose foot stands on a conducting ground or on radial wires.

    Over a perfect plane a monopole has half the impedance and twice the directivity of the dipole made by its image: for a
    quarter of a wavelength about 36.5 + j21 ohm (C. A. Balanis, Antenna Theory, 3rd ed., section 4.7; from memory).  The port
    is the half of its gap that lies above the foot.

    Parameters
    ----------
    name : str, optional
        Name of the design.
    length_m : float
        Length above the foot [m]; 0.48 for 150 MHz.
    wire_radius_m : float
        Wire radius [m]; 0.004, for example.
    height_m : float, optional
        Height of the port, which is the foot, above the antenna's origin [m]; 0 without radials, 0.8, for example, with them.
    radials : int, optional
        Number of radials, evenly spaced from the x axis on; 0 (default) for a foot on a conducting ground, else at least 2.
    radial_length_m : float, optional
        Length of a radial [m]; by default that of the monopole.
    radial_droop_deg : float, optional
        Angle by which radials fall below the horizontal [deg].
    radial_radius_m : float, optional
        Radius of the radials [m]; by default that of the monopole.
    gap_m : float, optional
        Width of the gap of which the port is half [m]; by default the wire's diameter.
    conductivity_s_per_m : float, optional
        Conductivity of the wires; by default perfect.

    Raises
    ------
    GeometryError
        If a number makes no shape, naming its key, or radials touch or reach down to the origin.
    """
    check_positive(name, length_m=length_m, wire_radius_m=wire_radius_m)
    check_positive_if_given(name, radial_length_m=radial_length_m, radial_radius_m=radial_radius_m, gap_m=gap_m)
    check_count(name, 0, radials=radials)
    check_between(name, -80.0, 80.0, radial_droop_deg=radial_droop_deg)
    check_between(name, 0.0, 1e6, height_m=height_m)
    if radials == 1:
        msg = f"antenna {name!r}: radials 1: expected none, or at least 2"
        raise GeometryError(msg)
    if (radials == 0) != (height_m == 0.0):
        need = "without radials the foot stands on the ground: height_m = 0" if radials == 0 else "radials need height_m above 0"
        msg = f"antenna {name!r}: height_m {height_m:g} with {radials} radials; {need}"
        raise GeometryError(msg)
    if radials == 0:
        droop_given = radial_droop_deg or None
        check_not_given(
            name,
            "without radials",
            radial_length_m=radial_length_m,
            radial_radius_m=radial_radius_m,
            radial_droop_deg=droop_given,
        )
    foot = (0.0, 0.0, height_m)
    wires = [Wire(foot, (0.0, 0.0, height_m + length_m), wire_radius_m, conductivity_s_per_m)]
    length = length_m if radial_length_m is None else radial_length_m
    radius = wire_radius_m if radial_radius_m is None else radial_radius_m
    droop = np.deg2rad(radial_droop_deg)
    for azimuth in 2.0 * np.pi * np.arange(radials) / max(radials, 1):
        reach = length * np.cos(droop)
        tip = (reach * np.cos(azimuth), reach * np.sin(azimuth), height_m - length * np.sin(droop))
        wires.append(Wire(foot, tip, radius, conductivity_s_per_m))
    if radials:
        check_above_origin(name, wires, "raise height_m or lessen radial_droop_deg")
        if 2.0 * length * np.cos(droop) * np.sin(np.pi / radials) <= 2.0 * radius:
            msg = f"antenna {name!r}: {radials} radials touch over their whole length; fewer, longer or thinner ones expected"
            raise GeometryError(msg)
        check_clear(name, wires, "take fewer or thinner radials")
    return Antenna(name, wires, [Port("x", 0, position=0.0, gap=gap_m)])
