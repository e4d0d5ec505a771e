"""Parametric antenna shapes: a few numbers in, an :class:`~elbowroom.geometry.antennas.Antenna` of wires out.

One module a family.  In all of them lengths are in metres, ``height_m`` is the height of the port (of port ``x``, where there
are two) above the antenna's origin, port ``x`` is polarised along the antenna's own x axis, and port ``y``, where there is one,
belongs to the same antenna turned by 90 degrees and lowered a little, so that wires do not meet.
"""

from __future__ import annotations

from collections.abc import Callable

from elbowroom.geometry.antennas import Antenna
from elbowroom.geometry.shapes.crossed import crossed_dipoles
from elbowroom.geometry.shapes.dipoles import bow_tie, dipole, folded_dipole
from elbowroom.geometry.shapes.log_periodic import log_periodic
from elbowroom.geometry.shapes.loops import polygonal_loop
from elbowroom.geometry.shapes.monopoles import monopole

SHAPES: dict[str, Callable[..., Antenna]] = {
    "crossed-dipoles": crossed_dipoles,
    "dipole": dipole,
    "folded-dipole": folded_dipole,
    "bow-tie": bow_tie,
    "polygonal-loop": polygonal_loop,
    "monopole": monopole,
    "log-periodic": log_periodic,
}
"""Shapes by the name that antenna files use; the keyword arguments of each function are its keys."""

__all__ = ["SHAPES", "bow_tie", "crossed_dipoles", "dipole", "folded_dipole", "log_periodic", "monopole", "polygonal_loop"]
