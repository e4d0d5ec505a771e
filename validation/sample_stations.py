"""Small stations on which identities are checked, invented for that: crossed dipoles, lossy bent wires, a tight pair."""

import numpy as np

from elbowroom.geometry.antennas import Antenna, Load, Port
from elbowroom.geometry.directions import sphere_quadrature
from elbowroom.geometry.grounds import FreeSpace, PerfectGround
from elbowroom.geometry.stations import Placed, Station
from elbowroom.geometry.wires import Wire
from helpers import crossed, dipole

GROUNDS = {"free space": FreeSpace(), "perfect ground": PerfectGround()}
SKY = np.array([[0.0, 0.3], [0.4, 1.0], [0.9, 2.9], [1.2, -2.0], [1.5, 0.7]]).T
BELOW = np.array([[1.9, 0.5], [2.6, -1.1], [np.pi, 0.2]]).T


def turned_station(ground, *, tilts=True, **changes):
    """Return three drooping crossed dipoles, turned, shifted and leaning."""
    design = crossed(**changes)
    lean = (4.0, -3.0) if tilts else ()
    raised = 0.2 if isinstance(ground, FreeSpace) else 0.0
    places = [((0.0, 0.0, 0.0), 20.0), ((1.5, 0.3, raised), -50.0, *lean), ((-0.6, 1.7, 0.0), 75.0)]
    return Station([Placed(design, *place) for place in places], ground)


def lossy_design(conductivity=2e4, resistance=20.0):
    """Return a bent lossy wire with a port and two loads, and a second wire beside it with another port."""
    radius = 1e-3
    wires = [
        Wire((0.0, 0.0, 0.7), (0.5, 0.0, 0.9), radius, conductivity),
        Wire((0.5, 0.0, 0.9), (0.9, 0.1, 0.4), radius, conductivity),
        Wire((0.2, -0.3, 0.6), (0.3, 0.5, 0.65), radius),
    ]
    loads = [Load(0, 0.2, resistance, 2e-8), Load(2, 0.75, 2.0 * resistance, 0.0, 5e-12)]
    return Antenna("bent", wires, [Port("a", 0), Port("b", 2)], loads)


def thick_station(ground, **changes):
    return Station([Placed(crossed(wire_radius_m=6e-3, separation_m=0.07, **changes))], ground)


def lossy_station(ground, **changes):
    design = lossy_design(**changes)
    return Station([Placed(design), Placed(design, (1.2, 0.8, 0.1), 130.0)], ground)


def tight_pair(ground):
    design = dipole(height=1.0, direction=(1.0, 0.0, 0.0), radius=5e-4)
    return Station([Placed(design), Placed(design, (0.0, 0.03, 0.0))], ground)


def whole_sky(ground, degree=48):
    """Return a rule exact for squares of patterns of sources within degree/2 of kR, and of those of their images."""
    return sphere_quadrature(degree, hemisphere=isinstance(ground, PerfectGround))


def worst(found, expected):
    """Return the largest deviation relative to the largest expected value."""
    return float(np.abs(np.asarray(found) - expected).max() / np.abs(expected).max())
