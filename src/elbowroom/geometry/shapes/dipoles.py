"""Straight, folded and bow-tie dipoles, level and alone or in crossed pairs."""

from __future__ import annotations

import numpy as np

from elbowroom.base.errors import GeometryError
from elbowroom.geometry.antennas import Antenna, Port
from elbowroom.geometry.shapes.parts import (
    CLEARANCE_RADII,
    check_above_origin,
    check_between,
    check_clear,
    check_not_given,
    check_positive,
    check_positive_if_given,
    quarter_turned,
)
from elbowroom.geometry.wires import Wire


def dipole(
    name: str = "dipole",
    *,
    half_length_m: float,
    height_m: float,
    wire_radius_m: float,
    upright: bool = False,
    gap_m: float | None = None,
    conductivity_s_per_m: float | None = None,
) -> Antenna:
    """Return one straight dipole: level along the antenna's own x axis, or upright.

    A thin dipole is resonant when it is a few per cent shorter than half a wavelength: 0.47 to 0.49 wavelengths for
    half-lengths of 50 to 5000 radii (any antenna handbook; from memory).

    Parameters
    ----------
    name : str, optional
        Name of the design.
    half_length_m : float
        Half the length, tip to middle of the gap [m]; 0.475 for 150 MHz.
    height_m : float
        Height of the port above the antenna's origin [m]; 1.5, for example.
    wire_radius_m : float
        Wire radius [m]; 0.004, for example.
    upright : bool, optional
        Whether the dipole stands instead of lying level.
    gap_m : float, optional
        Width of the gap [m]; by default the wire's diameter.
    conductivity_s_per_m : float, optional
        Conductivity of the wire; by default perfect.

    Raises
    ------
    GeometryError
        If a number makes no shape, naming its key, or the wire reaches down to the origin.
    """
    check_positive(name, half_length_m=half_length_m, height_m=height_m, wire_radius_m=wire_radius_m)
    check_positive_if_given(name, gap_m=gap_m)
    reach = np.array([0.0, 0.0, half_length_m]) if upright else np.array([half_length_m, 0.0, 0.0])
    middle = np.array([0.0, 0.0, height_m])
    wires = [Wire(tuple(middle - reach), tuple(middle + reach), wire_radius_m, conductivity_s_per_m)]
    check_above_origin(name, wires, "raise height_m or shorten half_length_m")
    return Antenna(name, wires, [Port("x", 0, gap=gap_m)])


def folded_dipole(
    name: str = "folded-dipole",
    *,
    half_length_m: float,
    height_m: float,
    spacing_m: float,
    wire_radius_m: float,
    second_radius_m: float | None = None,
    crossed: bool = False,
    separation_m: float | None = None,
    gap_m: float | None = None,
    conductivity_s_per_m: float | None = None,
) -> Antenna:
    """Return a level folded dipole, or two of them at right angles.

    A second conductor runs above the one with the port and is joined to it at both ends by wires of the thinner radius.
    At half a wavelength the impedance is that of a plain dipole times (1 + c)^2, where

        c = arcosh((v^2 - u^2 + 1) / (2 v)) / arcosh((v^2 + u^2 - 1) / (2 u v)),

    u the second radius over the first and v the spacing over the first radius; c = 1, and the step is four, for equal radii
    (S. Uda and Y. Mushiake, Yagi-Uda Antenna, 1954; C. A. Balanis, Antenna Theory, 3rd ed., section 9.5; from memory).

    Parameters
    ----------
    name : str, optional
        Name of the design.
    half_length_m : float
        Half the length between the end wires [m]; 0.46 for 150 MHz.
    height_m : float
        Height of the port, ``x`` where there are two, above the antenna's origin [m]; 1.5, for example.
    spacing_m : float
        Distance of the two conductors' axes [m]; 0.06, for example.
    wire_radius_m : float
        Radius of the conductor with the port [m]; 0.003, for example.
    second_radius_m : float, optional
        Radius of the other conductor [m]; by default the same.
    crossed : bool, optional
        Whether to add port ``y``: the same dipole turned by 90 degrees and lowered.
    separation_m : float, optional
        Height of port ``x`` above port ``y`` [m]; by default half the spacing, so that the two are interleaved.
    gap_m : float, optional
        Width of the gap [m]; by default the wire's diameter.
    conductivity_s_per_m : float, optional
        Conductivity of the wires; by default perfect.

    Raises
    ------
    GeometryError
        If a number makes no shape, naming its key, or conductors touch.
    """
    second = wire_radius_m if second_radius_m is None else second_radius_m
    check_positive(
        name, half_length_m=half_length_m, height_m=height_m, spacing_m=spacing_m, wire_radius_m=wire_radius_m,
        second_radius_m=second,
    )  # fmt: skip
    check_positive_if_given(name, separation_m=separation_m, gap_m=gap_m)
    if not crossed:
        check_not_given(name, "without crossed = true", separation_m=separation_m)
    if spacing_m <= wire_radius_m + second:
        msg = (
            f"antenna {name!r}: spacing_m {spacing_m:g} lets the two conductors touch; more than {wire_radius_m + second:g} "
            "is needed"
        )
        raise GeometryError(msg)
    h, top, s = half_length_m, height_m + spacing_m, conductivity_s_per_m
    end = min(wire_radius_m, second)
    wires = [
        Wire((-h, 0.0, height_m), (h, 0.0, height_m), wire_radius_m, s),
        Wire((-h, 0.0, top), (h, 0.0, top), second, s),
        Wire((-h, 0.0, height_m), (-h, 0.0, top), end, s),
        Wire((h, 0.0, height_m), (h, 0.0, top), end, s),
    ]
    return _alone_or_crossed(name, wires, crossed, 0.5 * spacing_m if separation_m is None else separation_m, gap_m)


def bow_tie(
    name: str = "bow-tie",
    *,
    half_length_m: float,
    flare_deg: float,
    height_m: float,
    wire_radius_m: float,
    closed: bool = True,
    feed_length_m: float | None = None,
    crossed: bool = False,
    separation_m: float | None = None,
    gap_m: float | None = None,
    conductivity_s_per_m: float | None = None,
) -> Antenna:
    """Return a level bow-tie outlined by wires, or two of them at right angles.

    From each end of a short wire with the port two wires leave at half the flare angle to either side; a third closes the
    triangle.  Its half-width is (half_length - feed_length / 2) tan(flare / 2).  Solid bow-ties without end have the impedance
    of two coplanar fins, (eta / 4) K(k') / K(k) with k = tan^2(flare / 4) and k' its complement: 188 ohm, eta / 2, at 90 deg,
    where the fins are their own complement (R. L. Carrel, "The characteristic impedance of two infinite cones of arbitrary
    cross section", IRE Trans. AP-6, 1958; from memory); an outline of wires comes near it where the wires are many wavelengths
    long only.

    Parameters
    ----------
    name : str, optional
        Name of the design.
    half_length_m : float
        From the middle to the closing wires [m]; 0.35 for 150 MHz.
    flare_deg : float
        Full angle between the two wires of a wing [deg]; 60, for example.
    height_m : float
        Height of the port, ``x`` where there are two, above the antenna's origin [m]; 0.9, for example.
    wire_radius_m : float
        Wire radius [m]; 0.003, for example.
    closed : bool, optional
        Whether wires close the two wings at their wide ends (default).
    feed_length_m : float, optional
        Length of the wire with the port [m]; by default twelve radii.
    crossed : bool, optional
        Whether to add port ``y``: the same bow-tie turned by 90 degrees and lowered.
    separation_m : float, optional
        Height of port ``x`` above port ``y`` [m]; by default eight radii.
    gap_m : float, optional
        Width of the gap [m]; by default the wire's diameter.
    conductivity_s_per_m : float, optional
        Conductivity of the wires; by default perfect.

    Raises
    ------
    GeometryError
        If a number makes no shape, naming its key, or wires touch.
    """
    check_positive(name, half_length_m=half_length_m, height_m=height_m, wire_radius_m=wire_radius_m)
    check_positive_if_given(name, feed_length_m=feed_length_m, separation_m=separation_m, gap_m=gap_m)
    if not crossed:
        check_not_given(name, "without crossed = true", separation_m=separation_m)
    check_between(name, 5.0, 150.0, flare_deg=flare_deg)
    feed = 12.0 * wire_radius_m if feed_length_m is None else feed_length_m
    if feed >= 2.0 * half_length_m:
        msg = f"antenna {name!r}: feed_length_m {feed:g} leaves nothing of half_length_m {half_length_m:g}"
        raise GeometryError(msg)
    near, far = 0.5 * feed, half_length_m
    width = (far - near) * np.tan(np.deg2rad(0.5 * flare_deg))
    ends = [((-near, 0.0), (near, 0.0))]
    for side in (1.0, -1.0):
        ends += [((side * near, 0.0), (side * far, width)), ((side * near, 0.0), (side * far, -width))]
        if closed:
            ends.append(((side * far, -width), (side * far, width)))
    wires = [Wire((*a, height_m), (*b, height_m), wire_radius_m, conductivity_s_per_m) for a, b in ends]
    separation = CLEARANCE_RADII * wire_radius_m if separation_m is None else separation_m
    return _alone_or_crossed(name, wires, crossed, separation, gap_m)


def _alone_or_crossed(name: str, wires: list[Wire], crossed: bool, separation: float, gap: float | None) -> Antenna:
    """Return the antenna whose first wire carries port x, with its quarter-turned twin as port y if wanted."""
    ports = [Port("x", 0, gap=gap)]
    if crossed:
        ports.append(Port("y", len(wires), gap=gap))
        wires = [*wires, *quarter_turned(wires, separation)]
    check_above_origin(name, wires, "raise height_m" + (" or lessen separation_m" if crossed else ""))
    check_clear(name, wires, "widen separation_m, or take thinner wires")
    return Antenna(name, wires, ports)
