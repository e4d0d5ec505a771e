"""Blocks between antennas: the Gauss-point rules against element-by-element integration, and the reuse of blocks."""

import numpy as np
import pytest

from elbowroom.geometry.arrangements import grid
from elbowroom.geometry.grounds import FreeSpace, PerfectGround
from elbowroom.geometry.stations import Placed, Station
from elbowroom.system import assembly
from elbowroom.system.assembly import PairFiller, antenna_distances, assemble, tile_groups
from elbowroom.system.discretisation import discretise
from helpers import FREQUENCY_HZ, cluster, crossed


@pytest.mark.parametrize("ground", [FreeSpace(), PerfectGround()])
@pytest.mark.parametrize("shift", [(1.6, 0.0), (2.5, 1.0), (9.0, -4.0)])
def test_sampled_blocks__equal_element_integration(ground, shift):
    # Hair-thin wires: the two methods differ by the circumference, of order (radius/distance)^2 < 1e-8 here.
    design = crossed(wire_radius_m=2e-5, separation_m=0.04)
    station = Station([Placed(design), Placed(design, (*shift, 0.0), rotation_deg=25.0, tilt_east_deg=4.0)], ground)
    d = discretise(station, FREQUENCY_HZ)
    filler = PairFiller(d)
    level = filler.level_of(antenna_distances(d)[0, 1])
    assert level >= 0
    (block,) = filler.sampled_blocks(0, np.array([1]), level)
    exact = filler.close_block(0, 1)
    # The rule's tolerance is relative to the size of the kernel, hence of the largest entries.
    assert np.abs(block - exact).max() < 10.0 * d.far.tolerance * np.abs(exact).max()
    assert np.abs(1.00001 * block - exact).max() > 10.0 * d.far.tolerance * np.abs(exact).max()


def test_antenna_distances__see_the_wires():
    station = cluster(3)
    d = discretise(station, FREQUENCY_HZ)
    distance = antenna_distances(d)
    assert np.allclose(distance, distance.T)
    assert 0.3 < distance[0, 1] < 1.53 - 0.9
    rows = []
    for kind, place in zip(d.kind_of[:2], station.positions[:2], strict=True):
        start, end = d.kinds[kind].placed_elements(place)
        t = np.linspace(0, 1, 200)[:, None, None]
        rows.append((start + t * (end - start)).reshape(-1, 3))
    brute = np.min(np.linalg.norm(rows[0][:, None] - rows[1][None], axis=2))
    assert distance[0, 1] == pytest.approx(brute, abs=5e-3)


def test_assemble__is_symmetric_and_independent_of_tiles_and_threads():
    d = discretise(cluster(4), FREQUENCY_HZ)
    one, scales = assemble(d, 100.0, workers=1)
    many, _ = assemble(d, 100.0, tile_order=70, workers=2)
    assert len(many.sizes) > len(one.sizes)
    np.testing.assert_allclose(many.dense(), one.dense(), rtol=1e-12, atol=1e-16)
    assert np.abs(one.dense() - one.dense().T).max() < 1e-12
    assert scales.shape == (d.n_unknowns,)


def test_assemble__equal_displacements_are_computed_once_and_change_nothing(monkeypatch):
    layout = grid(4, 3, 1.6)
    design = crossed()
    d = discretise(Station([Placed(design, tuple(p)) for p in layout.positions], PerfectGround()), FREQUENCY_HZ)
    calls = []
    original = PairFiller.sampled_blocks

    def counted(self, i, others, level):
        calls.append(len(others))
        return original(self, i, others, level)

    monkeypatch.setattr(PairFiller, "sampled_blocks", counted)
    shared, _ = assemble(d, 100.0)
    # 4 x 3 places have 66 pairs and (7 x 5 - 1)/2 = 17 displacements up to sign.
    assert sum(calls) == 17
    calls.clear()
    monkeypatch.setattr(assembly, "_equal_displacements", lambda _: None)
    plain, _ = assemble(d, 100.0)
    assert sum(calls) == 66
    difference = np.abs(shared.dense() - plain.dense()).max()
    assert difference < 1e-8 * np.abs(plain.dense()).max()


def test_tile_groups__cover_every_antenna_once():
    d = discretise(cluster(5), FREQUENCY_HZ)
    for order in (1, 100, 10_000):
        groups = tile_groups(d, order)
        assert [a for g in groups for a in g] == list(range(5))


def test_discretise__antennas_alike_share_one_self_block():
    design = crossed()
    station = Station([Placed(design, (2.0 * i, 0.0, 0.0), rotation_deg=90.0 * (i % 2)) for i in range(6)], PerfectGround())
    d = discretise(station, FREQUENCY_HZ)
    assert len(d.kinds) == 2
    assert d.kinds[0].mesh is d.kinds[1].mesh
    np.testing.assert_array_equal(d.kinds[0].self_block, d.kinds[1].self_block)
