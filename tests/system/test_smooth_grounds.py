"""Grounds whose field is a smooth correction: one that is made to be the perfect plane is it in every path, a cross kernel obeys
reciprocity, and wires in soil are refused."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from elbowroom.base.errors import GeometryError
from elbowroom.geometry.grounds import PerfectGround
from elbowroom.geometry.soils import Soil, TabulatedSoil
from elbowroom.geometry.stations import Placed, Station
from elbowroom.kernels import grounds
from elbowroom.kernels.grounds import PerfectGroundKernels, PointKernels
from elbowroom.kernels.points import free_kernel
from elbowroom.kernels.soil.table import build_table
from elbowroom.radiation.patterns import station_patterns
from elbowroom.system.assembly import PairFiller, antenna_distances
from elbowroom.system.band import BandSegment, SegmentSettings
from elbowroom.system.discretisation import discretise, extent_of
from elbowroom.system.ground_blocks import RING_TOLERANCE, ground_block, ring_count, ring_samples
from elbowroom.system.interactions import SkeletonInteractions, SkeletonTable, carried_field
from elbowroom.system.plane_waves import direction_frame
from elbowroom.system.reduction import ReductionSettings
from elbowroom.system.solving import mesh_error, solve_direct, solve_isolated
from elbowroom.system.solving_reduced import ReducedStation, solve_reduced
from helpers import FREQUENCY_HZ, cluster, crossed, dipole

ANY_SOIL = Soil(10.0, 0.01)
PLACES = [(0.0, 0.0, 0.0), (1.5, 0.3, 0.2), (-0.6, 1.7, 0.0), (3.0, 3.5, 0.0), (-2.0, -1.0, 0.1)]


def parts(kernel):
    return np.stack([kernel.real, kernel.imag])


class MirrorAsCorrection(PerfectGroundKernels):
    """The perfect plane told as a correction: horizontal and charge -g2, vertical +g2; optionally with a cross kernel."""

    conducting_surface = False
    has_correction = True
    cross = None

    def __init__(self, ground, frequency_hz, extent):
        self.extent = extent

    def at(self, frequency_hz):
        return self

    def serving(self, extent):
        return self

    def self_images(self):
        return None

    def _crossed(self, points, points2, wavenumber):
        if self.cross is None:
            return None
        # The second mirrored: a function of the horizontal distance and the sum of the heights.
        return parts(self.cross * free_kernel(points, points2 * np.array([[1.0], [1.0], [-1.0]]), wavenumber))

    def correction(self, points, points2, wavenumber, work):
        mirrored = parts(free_kernel(points, points2 * np.array([[1.0], [1.0], [-1.0]]), wavenumber))
        return PointKernels(-mirrored, mirrored, -mirrored, self._crossed(points, points2, wavenumber))

    def fill(self, points, points2, wavenumber, work):
        direct = super().fill(points, points2, wavenumber, work)
        # Charges in an array of their own, as with real soil.
        return PointKernels(direct.horizontal, direct.vertical, direct.charge.copy(), self._crossed(points, points2, wavenumber))


class CrossedCorrection(MirrorAsCorrection):
    cross = 0.3 - 0.2j


@pytest.fixture
def fake(monkeypatch):
    def use(kind=MirrorAsCorrection):
        monkeypatch.setitem(grounds._KERNELS, Soil, kind)

    use()
    return use


def station(ground, places=PLACES, antenna=None, **attitude):
    design = antenna or crossed()
    return Station([Placed(design, p, rotation_deg=20.0 * i, **attitude) for i, p in enumerate(places)], ground)


def relative(found, expected):
    return np.abs(found - expected).max() / np.abs(expected).max()


@pytest.mark.parametrize("attitude", [{}, {"tilt_east_deg": 8.0, "tilt_north_deg": -5.0}], ids=["level", "tilted"])
def test_own_blocks__are_those_of_images(fake, attitude):
    fake_d, true_d = (discretise(station(g, **attitude), FREQUENCY_HZ) for g in (ANY_SOIL, PerfectGround()))
    free = discretise(Station([Placed(crossed(), (0.0, 0.0, 0.0))]), FREQUENCY_HZ).kinds[0].self_block
    for found, expected in zip(fake_d.kinds, true_d.kinds, strict=True):
        images = expected.self_block - free
        assert relative(found.self_block - free, images) < 2e-6
    assert [k.mesh.n_unknowns for k in fake_d.kinds] == [k.mesh.n_unknowns for k in true_d.kinds]


@pytest.mark.parametrize(
    ("height", "radius"), [(0.01, 0.002), (0.05, 0.002), (0.2, 0.002), (0.05, 0.01), (0.05, 0.015), (0.05, 0.02), (0.1, 0.02)]
)
@pytest.mark.parametrize("direction", [(1.0, 0.2, 0.0), (1.0, 0.0, 0.0), (0.0, 1.0, 0.0)], ids=["askew", "east", "north"])
def test_own_block__of_a_low_wire_is_that_of_its_image(fake, height, radius, direction):
    """Points round the wire, the first to its side, leave a term of order 2 n in the logarithm: C(2 n, n)/(2 n) (a/2h)^(2 n)."""
    low = dipole(height=height, direction=direction, radius=radius)
    found, expected = (discretise(Station([Placed(low, (0, 0, 0))], g), FREQUENCY_HZ) for g in (ANY_SOIL, PerfectGround()))
    free = discretise(Station([Placed(low, (0, 0, 0))]), FREQUENCY_HZ).kinds[0].self_block
    images = expected.kinds[0].self_block - free
    assert relative(found.kinds[0].self_block - free, images) < min(5e-6, 3.0 * (radius / (2.0 * height)) ** 3 + 1e-7)


@pytest.mark.parametrize("ratio", [0.01, 0.05, 0.06, 0.1, 0.18, 0.25, 0.33])
@pytest.mark.parametrize("aside_deg", [0.0, 10.0, 30.0, 90.0])
def test_ring_count__means_of_a_logarithm_over_points_are_those_over_circles(ratio, aside_deg):
    """The mean over circles about two parallel lines is that of their distance, 1: ln 1 (mean value of harmonic functions)."""
    count = ring_count(np.array([ratio]), np.array([1.0]))
    turns = 1j * np.exp(2j * np.pi * np.arange(count) / count)
    ways = np.exp(1j * np.radians(aside_deg)) + ratio * (turns[:, None] + turns.conj()[None, :])
    assert abs(np.mean(np.log(np.abs(ways)))) < 1.05 * RING_TOLERANCE
    assert count == 3 or 2.0 / (count - 2) * ratio ** (count - 2) > RING_TOLERANCE


def test_ring_samples__high_wires_have_three_points_and_only_low_ones_more():
    level = dipole(height=1.0, direction=(1.0, 0.0, 0.0))
    d = discretise(station(ANY_SOIL, PLACES[:1], antenna=level), FREQUENCY_HZ, self_blocks=False)
    mesh = d.kinds[0].mesh
    for up, count in ((0.0, 3), (-0.979, 3), (-0.983, 5), (-0.996, 7)):
        ends = (mesh.start + [0.0, 0.0, up], mesh.end + [0.0, 0.0, up])
        samples = ring_samples(mesh, *ends, 1.0 + up, d.wavenumber, 1e-8)
        assert samples.points.shape[2] == count
        across = samples.points - samples.points.mean(axis=2, keepdims=True)
        assert_allclose(np.linalg.norm(across, axis=0), 0.002, rtol=1e-9)
        assert_allclose(across[2, :, 0], 0.0, atol=1e-12)  # the first to the side


def test_pairs__sampled_and_close_are_those_of_images(fake):
    places = [(0.0, 0.0, 0.0), (0.9, 0.1, 0.15), (2.5, 1.0, 0.0)]
    fillers = [PairFiller(discretise(station(g, places), FREQUENCY_HZ)) for g in (ANY_SOIL, PerfectGround())]
    for i, j in ((0, 1), (0, 2), (1, 2)):
        assert relative(fillers[0].close_block(i, j), fillers[1].close_block(i, j)) < 1e-6
        for level in range(4):
            found, expected = (f.sampled_blocks(i, np.array([j]), level)[0] for f in fillers)
            assert relative(found, expected) < 1e-12


@pytest.mark.parametrize("precision", [False, True], ids=["double", "single"])
def test_skeletons__of_both_are_alike(fake, precision):
    blocks = []
    for g in (ANY_SOIL, PerfectGround()):
        d = discretise(station(g), FREQUENCY_HZ)
        table = SkeletonTable(d, (0.3,), 1e-6)
        interactions = SkeletonInteractions(d, [None] * len(d.kinds), table, single=precision)
        blocks.append(
            interactions.blocks(0, np.array([1, 3]), 0) + [interactions.run_of_blocks(0, range(1, 4), 0, np.zeros(3, bool))]
        )
    for found, expected in zip(*blocks, strict=True):
        assert relative(found, expected) < (1e-5 if precision else 1e-12)


def test_direct_solution__patterns_isolated_and_mesh_error_are_those_of_the_perfect_plane(fake):
    frame = direction_frame([0.2, 0.9, 1.5], [0.3, 2.0, 4.0])
    results = []
    for g in (ANY_SOIL, PerfectGround()):
        d = discretise(station(g), FREQUENCY_HZ)
        solved, _ = solve_direct(d)
        alone = solve_isolated(d)
        results.append(
            (solved.loaded_admittance, station_patterns(d, solved.currents, frame), alone[0].currents, mesh_error(d, alone))
        )
    for found, expected in zip(results[0][:3], results[1][:3], strict=True):
        assert relative(found, expected) < 1e-5
    assert_allclose(results[0][3], results[1][3], rtol=1e-2)


def test_reduced_solution__is_that_of_the_perfect_plane_and_moves(fake):
    rng = np.random.default_rng(8)
    grid = [(2.0 * i + rng.uniform(-0.2, 0.2), 2.0 * j + rng.uniform(-0.2, 0.2), 0.0) for i in range(3) for j in range(3)]
    frame = direction_frame([0.2, 0.9], [0.3, 2.0])
    results = []
    for g in (ANY_SOIL, PerfectGround()):
        d = discretise(Station([Placed(crossed(), p) for p in grid], g), FREQUENCY_HZ)
        solved = ReducedStation(d, ReductionSettings(1e-5), movable=True)
        moved = solved.moved({4: (2.1, 2.6)})
        fields = [station_patterns(s.discretisation, s.currents.currents, frame, space=s.space) for s in (solved, moved)]
        results.append((*fields, solved.statistics.pattern_error, moved.statistics.pattern_error))
    # both are within their stated errors of what is one and the same solution
    for found, expected in zip(results[0][:2], results[1][:2], strict=True):
        assert relative(found, expected) < sum(max(r[2:]) for r in results)
    assert max(results[0][2:]) < 3e-5


def crossed_terms(d, i, j):
    """Kernel of the cross terms alone between two antennas, by plain sums over their Gauss points, without the filler."""
    filler = PairFiller(d)
    first, second = filler.samples(d.kind_of[i], 2), filler.samples(d.kind_of[j], 2)
    shift = np.zeros((3, 1))
    shift[:2, 0] = (filler.positions[j] - filler.positions[i])[:2]
    flip = np.array([[1.0], [1.0], [-1.0]])
    cross = CrossedCorrection.cross * free_kernel(second.points + shift, first.points * flip, d.wavenumber)
    factor = -1j * d.wavenumber * 376.730313412 / (4.0 * np.pi)
    return factor * (second.currents[2].T @ cross @ first.charge + second.charge.T @ cross @ first.currents[2])


def test_cross_kernel__enters_every_path_as_its_formula_says(fake):
    places = [(0.0, 0.0, 0.0), (1.6, 0.2, 0.3)]
    plain = discretise(station(ANY_SOIL, places), FREQUENCY_HZ)
    fake(CrossedCorrection)
    d = discretise(station(ANY_SOIL, places), FREQUENCY_HZ)
    expected = crossed_terms(d, 0, 1)
    fillers = [PairFiller(x) for x in (d, plain)]
    sampled = [f.sampled_blocks(0, np.array([1]), 2)[0] for f in fillers]
    assert relative(sampled[0] - sampled[1], expected) < 1e-9
    close = [f.close_block(0, 1) for f in fillers]
    # spread round the wires instead of on their axes
    assert relative(close[0] - close[1], expected) < 1e-4
    table = [SkeletonTable(x, (0.3,), 1e-8) for x in (d, plain)]
    hearing = [SkeletonInteractions(x, [None] * 2, t) for x, t in zip((d, plain), table, strict=True)]
    through = [h.blocks(0, np.array([1]), 0)[0] for h in hearing]
    assert relative(through[0] - through[1], expected) < 1e-6
    # the same through fields of weights
    unit = np.eye(d.kinds[0].mesh.n_unknowns)
    tested = []
    for x, t in zip((d, plain), table, strict=True):
        weights = t.gathered(0, 0, unit)
        field = carried_field(x.ground, t.points(1, 0), t.points(0, 0), weights, d.wavenumber, grounds.Workspace())
        tested.append(t.tested(1, 0, field))
    assert relative(tested[0] - tested[1], expected) < 1e-6
    assert relative(tested[0], through[0]) < 1e-12


def test_cross_kernel__own_block_is_symmetric_and_that_of_close_pairs_too(fake):
    fake(CrossedCorrection)
    d = discretise(station(ANY_SOIL), FREQUENCY_HZ)
    own = d.kinds[0].self_block
    assert relative(own, own.T) < 1e-12
    filler, free = PairFiller(d), PairFiller(discretise(Station(d.station.placed), FREQUENCY_HZ))
    grounds_part = [filler.close_block(*pair) - free.close_block(*pair) for pair in ((0, 1), (1, 0))]
    assert relative(grounds_part[0], grounds_part[1].T) < 1e-10
    mesh = d.kinds[0].mesh
    start, end = d.kinds[0].placed_elements(np.zeros(3))
    samples = ring_samples(mesh, start, end, 0.5, d.wavenumber, 1e-8)
    finer = ring_samples(mesh, start, end, 0.2, d.wavenumber, 1e-11)
    assert (
        relative(ground_block(d.ground, samples, samples, d.wavenumber), ground_block(d.ground, finer, finer, d.wavenumber))
        < 1e-7
    )


def test_reduced_solution__with_a_cross_kernel_is_the_direct_one(fake):
    fake(CrossedCorrection)
    d = discretise(station(ANY_SOIL), FREQUENCY_HZ)
    direct, _ = solve_direct(d)
    reduced, _, statistics = solve_reduced(d, ReductionSettings(1e-4))
    assert relative(reduced.loaded_admittance, direct.loaded_admittance) < statistics.pattern_error
    assert statistics.pattern_error < 2e-4


def test_extent__holds_all_wires():
    s = station(ANY_SOIL)
    points = np.concatenate([p.to_station(np.array([w.end for w in p.antenna.wires])) for p in s])
    extent = extent_of(s)
    assert extent.widest_m >= np.linalg.norm(points[:, None, :2] - points[None, :, :2], axis=-1).max()
    assert extent.lowest_m <= points[:, 2].min() < points[:, 2].max() <= extent.highest_m
    assert extent_of(Station(s.placed[:1], ANY_SOIL)).lowest_m >= extent.lowest_m


@pytest.mark.parametrize(
    ("height", "told"),
    [(0.47, "end on or enter soil are not modelled"), (0.3, "below the ground"), (0.4710, "less than its radius")],
)
def test_wires_in_or_on_soil__are_refused(height, told):
    with pytest.raises(GeometryError, match=told):
        discretise(Station([Placed(dipole(height=height), (0, 0, 0))], ANY_SOIL), FREQUENCY_HZ, self_blocks=False)


def test_antennas__their_distances_do_not_depend_on_the_ground(fake):
    first, second = (antenna_distances(discretise(station(g), FREQUENCY_HZ)) for g in (ANY_SOIL, PerfectGround()))
    assert_allclose(first, second, rtol=0.0, atol=0.0)


def test_band_segment__over_soil_reflects_as_at_the_frequency_asked_for():
    """Matrices between their nodes are interpolated, the ground of a pattern is not."""
    ground = TabulatedSoil((50e6, 140e6, 350e6), (14.0, 10.0, 6.0), (0.01, 0.02, 0.03))
    segment = BandSegment(Station(cluster(3).placed, ground), 130e6, 155e6, SegmentSettings(1e-4))
    made = segment.solve(141.7e6)
    exact = discretise(segment.station, 141.7e6, mesh_hz=segment.high_hz)
    currents, _ = solve_direct(exact, precision="double")
    frame = direction_frame([0.2, 1.2], [0.3, 2.0])
    found = station_patterns(made.discretisation, made.currents.currents, frame, space=made.space)
    expected = station_patterns(exact, currents.currents, frame)
    assert relative(found, expected) < 1e-5
    assert made.discretisation.ground.response.wavenumber == exact.wavenumber


def test_tables__are_made_once_for_a_frequency_and_shared_by_all_who_ask(monkeypatch):
    made = []

    def counted(response, *where, **options):
        made.append((response, where))
        return build_table(response, *where, **options)

    monkeypatch.setattr("elbowroom.kernels.soil.table.build_table", counted)
    d = discretise(station(ANY_SOIL), FREQUENCY_HZ)
    solve_reduced(d, ReductionSettings(1e-4))
    alone = solve_isolated(d)
    mesh_error(d, alone)
    station_patterns(d, solve_direct(d)[0].currents, direction_frame([0.3], [0.1]))
    assert len(made) == 1
    extent = extent_of(d.station)
    assert made[0][1] == (extent.widest_m, 2.0 * extent.lowest_m, 2.0 * extent.highest_m)
    # patterns alone need none
    bare = discretise(station(ANY_SOIL), FREQUENCY_HZ, self_blocks=False)
    station_patterns(bare, np.ones((bare.n_unknowns, 1), dtype=complex), direction_frame([0.3], [0.1]))
    assert len(made) == 1


def test_reduced_solution__over_soil_moves_farther_out_than_its_tables_reach():
    grid = [(2.0 * i, 1.9 * j + 0.1 * i, 0.0) for i in range(2) for j in range(3)]
    d = discretise(Station([Placed(crossed(), p) for p in grid], ANY_SOIL), FREQUENCY_HZ)
    movable = ReducedStation(d, ReductionSettings(1e-4), movable=True)
    assert movable.moved({1: (0.1, 1.8)}).discretisation.ground is d.ground
    moved = movable.moved({5: (9.0, 8.0)})
    fresh = discretise(moved.discretisation.station, FREQUENCY_HZ)
    direct, _ = solve_direct(fresh)
    assert relative(moved.currents.loaded_admittance, direct.loaded_admittance) < moved.statistics.pattern_error < 1e-3
