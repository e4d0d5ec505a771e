"""Stations that the benchmarks solve, and how they time things."""

from __future__ import annotations

import math
import time
from collections.abc import Callable

import numpy as np

from elbowroom.geometry.antennas import Antenna
from elbowroom.geometry.arrangements import random_disc
from elbowroom.geometry.grounds import PerfectGround
from elbowroom.geometry.shapes import crossed_dipoles, log_periodic
from elbowroom.geometry.stations import Placed, Station

UNIT_ORDER = 5120
"""Order of the complex64 matrix product that is the unit of time U."""


def best_of(action: Callable[[], object], repeats: int = 3) -> float:
    """Return the shortest of some wall times of an action [s]."""
    best = math.inf
    for _ in range(repeats):
        start = time.perf_counter()
        action()
        best = min(best, time.perf_counter() - start)
    return best


def unit_seconds() -> float:
    """Return the unit of time: one complex64 matrix product of order 5120 on all cores [s]."""
    rng = np.random.default_rng(0)
    a = np.empty((UNIT_ORDER, UNIT_ORDER), dtype=np.complex64)
    a.real, a.imag = rng.normal(size=(2, UNIT_ORDER, UNIT_ORDER))
    out = np.empty_like(a)
    np.matmul(a[:256], a, out=out[:256])
    return best_of(lambda: np.matmul(a, a, out=out), 2)


def benchmark_antenna() -> Antenna:
    """Return the crossed drooping dipoles of the benchmarks."""
    return crossed_dipoles(
        arm_length_m=0.6, height_m=0.9, wire_radius_m=0.003, droop_deg=40.0, feed_length_m=0.1, separation_m=0.04
    )


def log_periodic_antenna() -> Antenna:
    """Return 2 x 10 dipoles on two feeders, 1.28 m at their widest, for stations whose closest pair is 1.4 m."""
    return log_periodic(
        height_m=1.4,
        wire_radius_m=0.002,
        tau=0.82,
        sigma=0.07,
        longest_half_length_m=0.62,
        elements=10,
        feeder_impedance_ohm=200.0,
    )


def benchmark_station(count: int = 256, antenna: Antenna | None = None, *, turned: bool = False, seed: int = 1) -> Station:
    """Return 256 antennas in a 35 m disc, or another number as densely, closest pair 1.4 m."""
    layout = random_disc(count, 17.5 * math.sqrt(count / 256), 1.4, seed, turn="random" if turned else 0.0)
    design = antenna or benchmark_antenna()
    placed = [
        Placed(design, tuple(p), rotation_deg=float(turn)) for p, turn in zip(layout.positions, layout.rotation_deg, strict=True)
    ]
    return Station(placed, PerfectGround())
