"""Clusters on which the reduced solver is held against the direct one, invented for that, and how the two are compared."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from elbowroom.geometry.arrangements import random_disc
from elbowroom.geometry.grounds import FreeSpace, PerfectGround
from elbowroom.geometry.shapes import crossed_dipoles, log_periodic
from elbowroom.geometry.stations import Placed, Station
from elbowroom.job.solve import solve
from elbowroom.radiation.solution import Solution
from elbowroom.system.discretisation import FarSettings
from elbowroom.system.reduction import ReductionSettings
from elbowroom.system.solving_reduced import solve_reduced

DIPOLES = crossed_dipoles(
    arm_length_m=0.6, height_m=0.9, wire_radius_m=0.003, droop_deg=40.0, feed_length_m=0.1, separation_m=0.04
)
LOG_PERIODICS = {
    elements: log_periodic(
        height_m=1.4, wire_radius_m=0.002, tau=0.82, sigma=0.07, longest_half_length_m=0.6, elements=elements,
        feeder_impedance_ohm=200.0,
    )
    for elements in (8, 9, 10)
}  # fmt: skip
DESIGNS = {"dipoles": DIPOLES, **{f"log-periodics 2x{n}": antenna for n, antenna in LOG_PERIODICS.items()}}

TRUTH = FarSettings(tolerance=1e-9)
"""Quadrature between antennas of the direct solves taken for the truth: the default rules promise 1e-6 of the kernel, which near
resonances could count where -80 dB is promised and -120 dB is reached."""


def sky_points(ground) -> tuple[np.ndarray, np.ndarray]:
    """Return 420 directions [rad] evenly over what the ground leaves of the sphere, by the golden angle, horizon included."""
    index = np.arange(420)
    lowest = -1.0 if isinstance(ground, FreeSpace) else 0.0
    cosine = 1.0 - (1.0 - lowest) * index / index[-1]
    return np.arccos(cosine), np.mod(index * math.pi * (3.0 - math.sqrt(5.0)), 2.0 * math.pi)


def cluster_of(name: str, count: int, closest_m: float, seed: int, *, turned: bool, ground=None) -> Station:
    """Return a cluster as dense as the benchmarks', antennas of one design."""
    layout = random_disc(count, 17.5 * math.sqrt(count / 256), closest_m, seed, turn="random" if turned else 0.0)
    placed = [
        Placed(DESIGNS[name], tuple(p), rotation_deg=float(t)) for p, t in zip(layout.positions, layout.rotation_deg, strict=True)
    ]
    return Station(placed, PerfectGround() if ground is None else ground)


@dataclass(frozen=True)
class Difference:
    """True and stated errors of a reduced solution: patterns over each one's peak, port matrices over their norm."""

    pattern: float
    impedance: float
    admittance: float
    stated_pattern: float
    stated_admittance: float
    functions: float
    seconds: float


def pattern_errors(truth, other, termination=100.0, found=None) -> np.ndarray:
    """Return the largest error of each embedded pattern, or of other patterns in their place, over the true pattern's own peak."""
    theta, phi = sky_points(truth.station.ground)
    expected = truth.embedded_patterns(theta, phi, termination=termination)
    patterns = other.embedded_patterns if found is None else found
    off = patterns(theta, phi, termination=termination) - expected
    peak = np.sqrt((np.abs(expected) ** 2).sum(axis=-1)).max(axis=1)
    return np.sqrt((np.abs(off) ** 2).sum(axis=-1)).max(axis=1) / peak


def norm_error(found, expected) -> float:
    """Return the error of a matrix over its norm."""
    return float(np.linalg.norm(found - expected) / np.linalg.norm(expected))


def difference(truth, reduced) -> Difference:
    """Return how far a reduced solution is from a direct one, and how far it says it is."""
    s = reduced.statistics
    return Difference(
        float(pattern_errors(truth, reduced).max()),
        norm_error(reduced.impedance_matrix(), truth.impedance_matrix()),
        norm_error(reduced.coupled.loaded_admittance, truth.coupled.loaded_admittance),
        s.pattern_error,
        s.port_matrix_error,
        s.n_functions / len(reduced.station),
        sum(s.seconds.values()),
    )


def true_solution(station: Station, frequency_hz: float) -> Solution:
    """Return the direct solution in double precision with fine quadrature between antennas."""
    return solve(station, frequency_hz, solver="direct", precision="double", far=TRUTH)


def reduced_beside(truth: Solution, settings: ReductionSettings) -> Solution:
    """Return the reduced solution on the same meshes and self blocks as a direct one, which spares making them again."""
    d = truth.discretisation
    ports, space, statistics = solve_reduced(d, settings, reference_ohm=truth.reference_ohm)
    return Solution(d, ports, truth.isolated, truth.reference_ohm, statistics, space)
