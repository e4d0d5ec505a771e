"""A station moved, turned or mirrored is the same station; terminations set afterwards are those set before; copies are reused.

Isotropy and homogeneity of space, and Kirchhoff's laws, are exact: tolerances are those of quadrature and of solving.
"""

import numpy as np
import pytest

import independent
from elbowroom.geometry.antennas import Antenna, Load
from elbowroom.geometry.directions import Directions
from elbowroom.geometry.grounds import PerfectGround
from elbowroom.geometry.stations import Placed, Station, orientation_matrix, turned
from elbowroom.job.solve import SOLUTION_SCHEMA, solve
from elbowroom.store import MemoryStore
from helpers import FREQUENCY_HZ
from sample_stations import (
    GROUNDS,
    SKY,
    lossy_design,
    turned_station,
    worst,
)

pytestmark = pytest.mark.validation

INVARIANCE = "isotropy and homogeneity of space"
CIRCUITS = "Kirchhoff's laws"
EVERY_GROUND = pytest.mark.parametrize("ground", GROUNDS.values(), ids=GROUNDS.keys())


# --- invariance


MIRROR_EAST = np.diag([-1.0, 1.0, 1.0])
MIRROR_UP = np.diag([1.0, 1.0, -1.0])
SLANTED_TURN = orientation_matrix(33.0, 50.0, -20.0)
MOVES = {
    "shift on the ground": (np.eye(3), (7.3, -4.1, 0.0), True),
    "turn about the vertical": (orientation_matrix(37.0), (0.0, 0.0, 0.0), True),
    "mirror image, east and west": (MIRROR_EAST, (0.0, 0.0, 0.0), True),
    "turned mirror image, shifted": (orientation_matrix(-71.0) @ MIRROR_EAST, (2.0, 5.0, 0.0), True),
    "shift in space": (np.eye(3), (3.0, -2.0, 5.5), False),
    "turn in space": (SLANTED_TURN, (0.0, 0.0, 0.0), False),
    "mirror image, up and down": (MIRROR_UP, (0.0, 0.0, 3.0), False),
}


@pytest.mark.parametrize("ground_name", GROUNDS)
def test_moved_stations__have_the_same_matrices_and_moved_patterns(record, ground_name):
    ground = GROUNDS[ground_name]
    station = Station([*turned_station(ground).placed[:2], Placed(lossy_design(), (0.3, 1.9, 0.0), 10.0, name="B")], ground)
    here = solve(station, FREQUENCY_HZ, precision="double")
    theta, phi = SKY
    unit = np.array([independent.polarisations(*pair)[0] for pair in SKY.T])
    vectors = independent.as_vectors(here.embedded_patterns(theta, phi), theta, phi)
    k = here.discretisation.wavenumber
    for name, (matrix, shift, over_ground) in MOVES.items():
        if isinstance(ground, PerfectGround) and not over_ground:
            continue
        there = solve(independent.carried(station, matrix, shift), FREQUENCY_HZ, precision="double")
        carried = unit @ matrix.T
        theta2, phi2 = np.arccos(np.clip(carried[:, 2], -1.0, 1.0)), np.arctan2(carried[:, 1], carried[:, 0])
        found = independent.as_vectors(there.embedded_patterns(theta2, phi2), theta2, phi2)
        turned = vectors @ matrix.T
        expected = turned * np.exp(1j * k * carried @ shift)[None, :, None]
        # Rounding of coordinates may change the panels of a near pair, whose rule is good to 1e-8.
        z, s = here.impedance_matrix(), here.scattering_matrix()
        label = f"{name}, {ground_name}"
        record(
            f"change of Z, {label}", worst(there.impedance_matrix(), z), 0.0, absolute=1e-8,
            wrong=worst(z * np.where(np.eye(len(z)), 1.0, 1.0 + 1e-5), z), source=INVARIANCE,
        )  # fmt: skip
        record(
            f"change of S, {label}", worst(there.scattering_matrix(), s), 0.0, absolute=1e-8,
            wrong=worst(s[::-1, ::-1], s), source=INVARIANCE,
        )  # fmt: skip
        # Wrong: patterns left as they were, unturned or without the phase of the shift.
        wrong = worst(vectors, expected)
        record(f"change of patterns, {label}", worst(found, expected), 0.0, absolute=1e-8, wrong=wrong, source=INVARIANCE)


# --- terminations afterwards


def loaded_in_place(design, load):
    """Return crossed dipoles with a load where port y was."""
    port = design.ports[1]
    return Antenna(design.name, design.wires, design.ports[:1], [Load(port.wire, port.position, gap=port.gap, **load)])


OMEGA = 2.0 * np.pi * FREQUENCY_HZ
IN_PLACE = {
    "60 ohm": (60.0, {"resistance_ohm": 60.0}),
    "25 + 80j ohm": (25.0 + 80.0j, {"resistance_ohm": 25.0, "inductance_h": 80.0 / OMEGA}),
    "5 - 300j ohm": (5.0 - 300.0j, {"resistance_ohm": 5.0, "capacitance_f": 1.0 / (300.0 * OMEGA)}),
    "nearly open": (1e6, {"resistance_ohm": 1e6}),
    "nearly short": (1e-6, {"resistance_ohm": 1e-6}),
    "short": ("short", {}),
}


@EVERY_GROUND
def test_terminations__afterwards_are_lumped_loads_in_place(record, ground):
    station = turned_station(ground)
    solution = solve(station, FREQUENCY_HZ)
    x_ports, y_ports = np.arange(0, 6, 2), np.arange(1, 6, 2)
    # Every antenna sees another of these in the mixed case.
    cases = {name: [item] * 3 for name, item in IN_PLACE.items()}
    cases["mixed"] = [IN_PLACE[name] for name in ("short", "5 - 300j ohm", "nearly open")]
    for name, items in cases.items():
        placed = [
            Placed(loaded_in_place(p.antenna, load), p.position, p.rotation_deg, p.tilt_east_deg, p.tilt_north_deg)
            for p, (_, load) in zip(station, items, strict=True)
        ]
        loaded = solve(Station(placed, ground), FREQUENCY_HZ)
        seen = [v for impedance, _ in items for v in (70.0, impedance)]
        found = solution.embedded_patterns(*SKY, termination=seen, ports=x_ports)
        expected = loaded.embedded_patterns(*SKY, termination=70.0)
        # Residuals below 1e-9 on either side, of unknowns scaled to a unit diagonal, in a few terms of like size: 1e-8.
        # A load of 1e6 ohm outweighs the radiation resistance 1e4 times, which rounding at 1e-16 can bear.
        other = [
            v for impedance, _ in items for v in (70.0, impedance if isinstance(impedance, str) else impedance * 1.01 + 0.01)
        ]
        if name == "nearly open":
            other = [70.0, 1e4] * 3
        if name == "short":
            other = [70.0, 0.01] * 3
        wrong = solution.embedded_patterns(*SKY, termination=other, ports=x_ports)
        record(
            f"patterns terminated afterwards, {name}, {ground.name}", worst(found, expected), 0.0,
            absolute=1e-8, wrong=worst(wrong, expected), source=CIRCUITS,
        )  # fmt: skip
        # The impedance matrix seen from the x ports: the Schur complement of the loaded ones.
        z = solution.impedance_matrix()
        if "short" not in [impedance for impedance, _ in items]:
            own = z[np.ix_(y_ports, y_ports)] + np.diag([impedance for impedance, _ in items])
            reduced = z[np.ix_(x_ports, x_ports)] - z[np.ix_(x_ports, y_ports)] @ np.linalg.solve(
                own, z[np.ix_(y_ports, x_ports)]
            )
            assert worst(reduced, loaded.impedance_matrix()) < 1e-8


# --- copies of a station


@EVERY_GROUND
def test_copies__reuse_the_stored_solution_and_point_as_they_stand(record, ground):
    store = MemoryStore(SOLUTION_SCHEMA)
    station = turned_station(ground)
    here = solve(station, FREQUENCY_HZ, store=store)
    turn, shift = 137.0, np.array([12.0, -7.0, 0.0])
    copy = Station([turned(p, turn, *shift[:2]) for p in station], ground)
    there = solve(copy, FREQUENCY_HZ, store=store)
    # Wall times of the first solve come back with its record: nothing was solved again.
    assert there.statistics == here.statistics
    theta, phi = SKY
    pointing, angle = (0.5, -0.8), np.deg2rad(turn)
    for weighting in ("pointing", "random"):
        if weighting == "pointing":
            weights = here.pointing_weights(*pointing, port="x")
            weights2 = there.pointing_weights(pointing[0], pointing[1] + angle, port="x")
        else:
            rng = np.random.default_rng(5)
            weights = weights2 = rng.normal(size=6) + 1j * rng.normal(size=6)
        expected = here.beam(weights, theta, phi)
        found = there.beam(weights2, theta, phi + angle)
        unit = Directions(theta, phi + angle).unit_vectors()
        phase = np.exp(1j * here.discretisation.wavenumber * unit @ shift)
        if weighting == "pointing":
            # Weights refer phases to the station's origin, from which the copy is shifted.
            r0 = Directions([pointing[0]], [pointing[1] + angle]).unit_vectors()[0]
            phase = phase * np.exp(-1j * here.discretisation.wavenumber * r0 @ shift)
        # The stored currents are those of the copy; compiled phases of points and of places are good to 1e-9 each
        # (docstring of kernels/points_numba), on either side, in sums that partly cancel.
        record(
            f"{weighting} beam of a turned copy, {ground.name}", worst(found, phase[:, None] * expected), 0.0,
            absolute=1e-8, wrong=worst(there.beam(weights2, theta, phi), phase[:, None] * expected), source=INVARIANCE,
        )  # fmt: skip
