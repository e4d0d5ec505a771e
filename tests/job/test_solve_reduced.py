"""Reduced solutions in the store, and which solver a station gets."""

from dataclasses import asdict

import numpy as np
import pytest

from elbowroom.base.errors import ModelRangeError
from elbowroom.geometry.directions import hemisphere_grid
from elbowroom.geometry.grounds import PerfectGround
from elbowroom.geometry.mesh import mesh_settings
from elbowroom.geometry.stations import Placed, Station, turned
from elbowroom.job import solve as solve_module
from elbowroom.job.solve import SOLUTION_SCHEMA, chosen_solver, solve
from elbowroom.store import Hdf5Store, MemoryStore
from elbowroom.system.discretisation import discretise
from helpers import FREQUENCY_HZ, cluster, crossed, dipole

SKY = hemisphere_grid(15.0)
DEFAULT = mesh_settings("default")


@pytest.fixture
def reductions(monkeypatch):
    calls = []
    original = solve_module.solve_reduced

    def counted(*args, **kwargs):
        calls.append(1)
        return original(*args, **kwargs)

    monkeypatch.setattr(solve_module, "solve_reduced", counted)
    return calls


def mixed_station():
    design, other = crossed(), dipole(height=1.1, direction=(1.0, 0.4, 0.0))
    placed = [Placed(design), Placed(other, (1.6, 0.2, 0.0), 20.0), Placed(design, (-0.5, 1.9, 0.0), 75.0)]
    return Station(placed, PerfectGround())


@pytest.mark.parametrize("kind", ["memory", "hdf5"])
def test_reduced_solution__comes_back_from_the_store_bit_for_bit(kind, tmp_path, reductions):
    store = MemoryStore(SOLUTION_SCHEMA) if kind == "memory" else Hdf5Store(tmp_path / "s", SOLUTION_SCHEMA)
    first, second = (solve(mixed_station(), FREQUENCY_HZ, solver="reduced", tolerance=1e-3, store=store) for _ in range(2))
    assert len(reductions) == 1
    np.testing.assert_array_equal(second.coupled.currents, first.coupled.currents)
    np.testing.assert_array_equal(second.coupled.loaded_admittance, first.coupled.loaded_admittance)
    np.testing.assert_array_equal(second.space.offsets, first.space.offsets)
    assert len(second.space.bases) == len(first.space.bases) == 3
    for mine, theirs in zip(second.space.bases, first.space.bases, strict=True):
        np.testing.assert_array_equal(mine, theirs)
    # What a reduced solution has no number for is NaN, and equal here.
    np.testing.assert_equal(asdict(second.statistics), asdict(first.statistics))
    assert second.statistics.pattern_error > 0.0
    weights = first.pointing_weights(0.2, 0.3)
    for beam in ("beam", "isolated_beam"):
        np.testing.assert_array_equal(
            getattr(second, beam)(weights, SKY.theta_rad, SKY.phi_rad), getattr(first, beam)(weights, SKY.theta_rad, SKY.phi_rad)
        )
    np.testing.assert_array_equal(
        second.embedded_patterns(SKY.theta_rad, SKY.phi_rad), first.embedded_patterns(SKY.theta_rad, SKY.phi_rad)
    )


def test_reduced_solution__of_a_turned_and_shifted_copy_is_the_stored_one(reductions):
    store = MemoryStore(SOLUTION_SCHEMA)
    station = mixed_station()
    here = solve(station, FREQUENCY_HZ, solver="reduced", tolerance=1e-4, store=store)
    copy = Station([turned(p, 37.0, 12.0, -7.0) for p in station], PerfectGround())
    reused = solve(copy, FREQUENCY_HZ, solver="reduced", tolerance=1e-4, store=store)
    assert len(reductions) == 1
    fresh = solve(copy, FREQUENCY_HZ, solver="direct", precision="double")
    expected = fresh.embedded_patterns(SKY.theta_rad, SKY.phi_rad)
    found = reused.embedded_patterns(SKY.theta_rad, SKY.phi_rad)
    peak = np.sqrt((np.abs(expected) ** 2).sum(axis=-1)).max(axis=1)
    # Places agree to a micrometre, 3e-6 rad of phase at this frequency.
    assert np.max(np.sqrt((np.abs(found - expected) ** 2).sum(axis=-1)).max(axis=1) / peak) < here.statistics.pattern_error + 1e-5
    unturned = here.embedded_patterns(SKY.theta_rad, SKY.phi_rad)
    assert np.abs(found - unturned).max() > 0.01 * np.abs(unturned).max()


def test_reduced_solution__another_tolerance_is_another_solution(reductions):
    store = MemoryStore(SOLUTION_SCHEMA)
    for tolerance in (1e-2, 1e-3, 1e-2, 1e-3):
        solve(cluster(2), FREQUENCY_HZ, solver="reduced", tolerance=tolerance, store=store)
    assert len(reductions) == 2
    direct = solve(cluster(2), FREQUENCY_HZ, solver="direct", store=store)
    assert direct.statistics.strategy == "direct"
    assert not direct.space.reduced


def test_auto__takes_the_reduced_solver_for_many_unknowns_of_several_antennas(monkeypatch, reductions):
    station = cluster(3)
    unknowns = discretise(station, FREQUENCY_HZ, self_blocks=False).n_unknowns
    assert unknowns < solve_module.AUTO_DIRECT_UNKNOWNS
    assert chosen_solver(station, FREQUENCY_HZ, DEFAULT, "auto") == "direct"
    assert solve(station, FREQUENCY_HZ).statistics.strategy == "direct"
    monkeypatch.setattr(solve_module, "AUTO_DIRECT_UNKNOWNS", unknowns)
    assert chosen_solver(station, FREQUENCY_HZ, DEFAULT, "auto") == "direct"
    monkeypatch.setattr(solve_module, "AUTO_DIRECT_UNKNOWNS", unknowns - 1)
    assert chosen_solver(station, FREQUENCY_HZ, DEFAULT, "auto") == "reduced"
    assert solve(station, FREQUENCY_HZ, tolerance=1e-2).statistics.strategy == "reduced"
    assert len(reductions) == 1
    # One antenna has no other to be reduced towards; and what was asked for goes before size.
    monkeypatch.setattr(solve_module, "AUTO_DIRECT_UNKNOWNS", 1)
    assert chosen_solver(cluster(1), FREQUENCY_HZ, DEFAULT, "auto") == "direct"
    assert chosen_solver(station, FREQUENCY_HZ, DEFAULT, "direct") == "direct"


def test_solve__unknown_solver_and_bad_tolerance_are_refused():
    with pytest.raises(ModelRangeError, match=r"solver 'fast': expected auto, direct, reduced"):
        solve(cluster(1), FREQUENCY_HZ, solver="fast")
    for tolerance in (0.0, -1.0, 1.0, np.nan, np.inf):
        with pytest.raises(ModelRangeError, match=r"tolerance .*: expected 1e-6 to 0.1"):
            solve(cluster(1), FREQUENCY_HZ, solver="reduced", tolerance=tolerance)
