"""Tiny stations for tests."""

import numpy as np

from elbowroom.geometry.antennas import Antenna, Port
from elbowroom.geometry.grounds import FreeSpace, PerfectGround
from elbowroom.geometry.shapes import crossed_dipoles
from elbowroom.geometry.stations import Placed, Station
from elbowroom.geometry.wires import Wire

FREQUENCY_HZ = 150e6


def dipole(half_length=0.47, radius=0.002, height=0.0, direction=(0.0, 0.0, 1.0), **port):
    u = np.asarray(direction) / np.linalg.norm(direction)
    centre = np.array([0.0, 0.0, height])
    return Antenna("dipole", [Wire(centre - half_length * u, centre + half_length * u, radius)], [Port("p", 0, **port)])


def crossed(**changes):
    sizes = {
        "arm_length_m": 0.6, "height_m": 0.9, "wire_radius_m": 0.003, "droop_deg": 40.0, "feed_length_m": 0.1,
        "separation_m": 0.04,
    }  # fmt: skip
    return crossed_dipoles(**(sizes | changes))


def cluster(count=3, ground=True, antenna=None, **changes):
    places = [(0.0, 0.0, 0.0), (1.5, 0.3, 0.0), (-0.6, 1.7, 0.0), (3.0, 3.5, 0.0), (-2.0, -1.0, 0.0)][:count]
    design = antenna or crossed(**changes)
    return Station([Placed(design, p) for p in places], PerfectGround() if ground else FreeSpace())
