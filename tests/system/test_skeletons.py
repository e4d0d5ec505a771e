"""Skeletons against all the quadrature points they stand for, and blocks through them against blocks of all unknowns."""

import numpy as np
import pytest

from elbowroom.base.constants import wavenumber_of
from elbowroom.geometry.grounds import FreeSpace, PerfectGround
from elbowroom.geometry.mesh import build_mesh, mesh_settings
from elbowroom.geometry.shapes import log_periodic, monopole
from elbowroom.geometry.stations import Placed, Station, orientation_matrix
from elbowroom.kernels.points import free_kernel
from elbowroom.kernels.quadrature import sample_mesh
from elbowroom.system.assembly import PairFiller, antenna_distances
from elbowroom.system.discretisation import FarSettings, discretise
from elbowroom.system.interactions import SkeletonInteractions, SkeletonTable
from elbowroom.system.skeletons import proxy_points, skeleton_of
from helpers import FREQUENCY_HZ, crossed, dipole

DISTANCES_M = (0.3, 1.0)
RNG = np.random.default_rng(4)


def log_periodic_of(elements=4):
    return log_periodic(
        height_m=1.4, wire_radius_m=0.002, tau=0.82, sigma=0.07, longest_half_length_m=0.6, elements=elements,
        feeder_impedance_ohm=200.0,
    )  # fmt: skip


DESIGNS = {"crossed": crossed(), "log-periodic": log_periodic_of(), "monopole": monopole(length_m=0.5, wire_radius_m=0.003)}


def clearance(antenna, points):
    """Distance of points to the nearest wire."""
    found = []
    for w in antenna.wires:
        start, along = np.asarray(w.start), np.subtract(w.end, w.start)
        t = np.clip((points - start) @ along / (along @ along), 0.0, 1.0)
        found.append(np.linalg.norm(points - start - t[:, None] * along, axis=1))
    return np.min(found, axis=0)


def around(antenna, distance, count=100):
    """Points whose nearest wire is a distance away, seen from the middle in all directions."""
    middle = np.mean([0.5 * np.add(w.start, w.end) for w in antenna.wires], axis=0)
    rays = RNG.normal(size=(count, 3))
    rays /= np.linalg.norm(rays, axis=1)[:, None]
    low, high = np.zeros(count), np.full(count, 5.0 + distance)
    for _ in range(50):
        mean = 0.5 * (low + high)
        inside = clearance(antenna, middle + mean[:, None] * rays) < distance
        low, high = np.where(inside, mean, low), np.where(inside, high, mean)
    return middle + high[:, None] * rays


@pytest.mark.parametrize("distance", DISTANCES_M)
@pytest.mark.parametrize("name", DESIGNS)
def test_proxy_points__keep_their_distance_and_surround_the_antenna(name, distance):
    antenna = DESIGNS[name]
    points = proxy_points(antenna, distance, 2.0)
    clear = clearance(antenna, points)
    # Rings between two rows of another wire's may stand 3 % nearer.
    assert clear.min() > 0.97 * distance
    assert clear.min() < 1.03 * distance
    middle = np.mean([0.5 * (np.asarray(w.start) + w.end) for w in antenna.wires], axis=0)
    for axis in np.vstack([np.eye(3), -np.eye(3)]):
        assert (points @ axis).max() > middle @ axis + distance


def fields(points, currents, charge, observers, wavenumber):
    """Vector potential (3) and potential of every unknown at observers, without their constants: (4, M, N)."""
    kernel = free_kernel(observers.T, points.T, wavenumber)
    return np.stack([kernel @ part for part in (*currents, charge)])


@pytest.mark.parametrize("tolerance", [1e-3, 1e-5, 1e-7])
@pytest.mark.parametrize("distance", DISTANCES_M)
@pytest.mark.parametrize("name", ["crossed", "log-periodic"])
def test_skeleton__fields_are_those_of_all_points_beyond_its_distance(name, distance, tolerance):
    antenna = DESIGNS[name]
    k = wavenumber_of(350e6)
    mesh = build_mesh(antenna, 2.0 * np.pi / k, mesh_settings("default"), np.zeros((len(antenna.wires), 2), bool))
    skeleton = skeleton_of(antenna, mesh, k, distance, tolerance)
    exact = sample_mesh(mesh, np.full(mesh.n_elements, 16))
    assert skeleton.n_points < exact.points.shape[0]
    # The tolerance is that of the kernel in the mean over the surface at just the distance; single points there may be tens of
    # times worse, none is from twice the distance on.
    for factor, worst in ((1.0, 100.0), (2.0, 10.0), (10.0, 10.0)):
        observers = around(antenna, factor * distance)
        found = fields(skeleton.points, skeleton.currents, skeleton.charge, observers, k)
        expected = fields(exact.points, exact.current_weights, exact.charge_weights, observers, k)
        for part in (slice(0, 3), slice(3, 4)):
            off, size = np.abs(found[part] - expected[part]), np.abs(expected[part])
            assert np.sqrt(np.mean(off**2)) < 10.0 * tolerance * np.sqrt(np.mean(size**2))
            assert off.max() < worst * tolerance * size.max()
    # Much nearer it is no good, which the same bound shows.
    near = around(antenna, 0.05 * distance)
    found = fields(skeleton.points, skeleton.currents, skeleton.charge, near, k)
    expected = fields(exact.points, exact.current_weights, exact.charge_weights, near, k)
    assert np.linalg.norm(found - expected) > 10.0 * tolerance * np.linalg.norm(expected)


def test_skeleton__grows_with_accuracy_and_towards_the_wires():
    antenna = crossed()
    k = wavenumber_of(FREQUENCY_HZ)
    mesh = build_mesh(antenna, 2.0 * np.pi / k, mesh_settings("default"), np.zeros((len(antenna.wires), 2), bool))
    counts = [skeleton_of(antenna, mesh, k, 0.5, t).n_points for t in (1e-2, 1e-4, 1e-6)]
    assert counts[0] < counts[1] < counts[2]
    assert skeleton_of(antenna, mesh, k, 0.2, 1e-4).n_points > counts[1] > skeleton_of(antenna, mesh, k, 2.0, 1e-4).n_points


@pytest.mark.parametrize("mirrored", [False, True])
def test_skeleton__goes_along_with_a_turned_or_mirrored_antenna(mirrored):
    # Points turned and currents turned with them give the turned field: what one skeleton does for all attitudes of a design.
    antenna, k, distance, tolerance = crossed(), wavenumber_of(FREQUENCY_HZ), 0.3, 1e-5
    mesh = build_mesh(antenna, 2.0 * np.pi / k, mesh_settings("default"), np.zeros((len(antenna.wires), 2), bool))
    skeleton = skeleton_of(antenna, mesh, k, distance, tolerance)
    exact = sample_mesh(mesh, np.full(mesh.n_elements, 16))
    turn = np.diag([1.0, 1.0, -1.0]) if mirrored else orientation_matrix(37.0, 20.0, -10.0)
    observers = np.array([[1.2, 0.4, 0.1], [-1.4, 0.5, -0.9], [0.0, 1.6, 2.0], [0.3, -1.5, -2.0]])
    assert clearance(antenna, observers @ turn).min() > distance
    found = fields(skeleton.points @ turn.T, np.einsum("ij,jqn->iqn", turn, skeleton.currents), skeleton.charge, observers, k)
    expected = fields(
        exact.points @ turn.T, np.einsum("ij,jqn->iqn", turn, exact.current_weights), exact.charge_weights, observers, k
    )
    assert np.abs(found - expected).max() < 10.0 * tolerance * np.abs(expected).max()
    unturned = fields(skeleton.points, skeleton.currents, skeleton.charge, observers, k)
    assert np.abs(unturned - expected).max() > 0.01 * np.abs(expected).max()


# --- blocks


ATTITUDES = {"level": (0.0,), "turned": (65.0,), "tilted": (-20.0, 6.0, -4.0)}


def discretised(ground, shift, attitude, *, second=None, far=None):
    raised = 0.3 if isinstance(ground, FreeSpace) else 0.0
    first = crossed()
    placed = [Placed(first, (0.2, -0.1, 0.0), 10.0), Placed(second or first, (0.2 + shift[0], shift[1] - 0.1, raised), *attitude)]
    return discretise(Station(placed, ground), FREQUENCY_HZ, far=far)


@pytest.mark.parametrize("ground", [FreeSpace(), PerfectGround()], ids=["free space", "perfect ground"])
@pytest.mark.parametrize("attitude", ATTITUDES.values(), ids=ATTITUDES.keys())
@pytest.mark.parametrize(("shift", "level"), [((1.4, 0.2), 0), ((3.0, -1.0), 1), ((14.0, 9.0), 1)])
def test_blocks__equal_those_of_all_quadrature_points(ground, attitude, shift, level):
    tolerance = 1e-5
    d = discretised(ground, shift, attitude, far=FarSettings(tolerance=1e-9))
    distance = antenna_distances(d)[0, 1]
    table = SkeletonTable(d, DISTANCES_M, tolerance)
    assert table.level_of(distance) == level
    interactions = SkeletonInteractions(d, (None,) * len(d.kinds), table)
    exact = PairFiller(d).block(0, 1, distance)
    (found,) = interactions.blocks(0, np.array([1]), level)
    assert np.abs(found - exact).max() < 10.0 * tolerance * np.abs(exact).max()
    # Both orders of the pair give one matrix and its transpose.
    (back,) = interactions.blocks(1, np.array([0]), level)
    np.testing.assert_allclose(back.T, found, atol=1e-12 * np.abs(exact).max())
    # Wrong would be the attitude of the other antenna, or the nearer level's skeletons of a poorer table.
    poor = SkeletonInteractions(d, (None,) * len(d.kinds), SkeletonTable(d, DISTANCES_M, 1e-2)).blocks(0, np.array([1]), level)[0]
    assert np.abs(poor - exact).max() > np.abs(found - exact).max()


@pytest.mark.parametrize("ground", [FreeSpace(), PerfectGround()], ids=["free space", "perfect ground"])
def test_blocks__of_functions_are_projected_blocks_of_unknowns(ground):
    d = discretised(ground, (1.7, 0.3), (65.0,), second=dipole(height=1.0, direction=(1.0, 0.2, 0.1)))
    table = SkeletonTable(d, DISTANCES_M, 1e-6)
    bases = [RNG.normal(size=(k.mesh.n_unknowns, n)) + 1j * RNG.normal(size=(k.mesh.n_unknowns, n))
             for k, n in zip(d.kinds, (3, 2), strict=True)]  # fmt: skip
    (unknowns,) = SkeletonInteractions(d, (None,) * 2, table).blocks(0, np.array([1]), 0)
    reduced = SkeletonInteractions(d, bases, table)
    reduced.prepare()
    (block,) = reduced.blocks(0, np.array([1]), 0)
    expected = bases[1].T @ unknowns @ bases[0]
    assert block.shape == (2, 3)
    np.testing.assert_allclose(block, expected, atol=1e-11 * np.abs(expected).max())


def test_blocks__of_several_antennas_are_those_of_each():
    design = crossed()
    places = [(0.0, 0.0, 0.0), (3.0, 0.0, 0.0), (-1.0, 4.0, 0.0), (2.0, -5.0, 0.0)]
    d = discretise(Station([Placed(design, p, 15.0 * i) for i, p in enumerate(places)], PerfectGround()), FREQUENCY_HZ)
    interactions = SkeletonInteractions(d, (None,) * len(d.kinds), SkeletonTable(d, DISTANCES_M, 1e-4))
    together = interactions.blocks(0, np.array([1, 2, 3]), 1)
    for j, block in zip((1, 2, 3), together, strict=True):
        np.testing.assert_allclose(block, interactions.blocks(0, np.array([j]), 1)[0], atol=1e-12 * np.abs(block).max())


def test_table__levels_and_one_skeleton_for_a_design():
    design = crossed()
    placed = [Placed(design, (2.0 * i, 0.0, 0.0), rotation_deg=30.0 * i) for i in range(3)]
    d = discretise(Station(placed, PerfectGround()), FREQUENCY_HZ)
    table = SkeletonTable(d, (1.0, 0.3), 1e-4)
    assert [table.level_of(x) for x in (0.0, 0.2999, 0.3, 0.9, 1.0, 50.0)] == [-1, -1, 0, 0, 1, 1]
    assert len(d.kinds) == 3
    assert table.of(0, 1) is table.of(2, 1)
    assert table.of(0, 0).distance == 0.3
    assert table.of(0, 0).n_points > table.of(0, 1).n_points
