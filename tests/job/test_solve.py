"""Solving with a store: what is solved again and what is not."""

import numpy as np
import pytest

from elbowroom.base.errors import StoreError
from elbowroom.geometry.directions import hemisphere_grid
from elbowroom.geometry.grounds import PerfectGround
from elbowroom.geometry.stations import Placed, Station, turned
from elbowroom.job import solve as solve_module
from elbowroom.job.solve import SOLUTION_SCHEMA, solve
from elbowroom.store import Hdf5Store, MemoryStore
from helpers import FREQUENCY_HZ, cluster, crossed

SKY = hemisphere_grid(15.0)


@pytest.fixture
def solves(monkeypatch):
    calls = []
    original = solve_module.solve_direct

    def counted(*args, **kwargs):
        calls.append(1)
        return original(*args, **kwargs)

    monkeypatch.setattr(solve_module, "solve_direct", counted)
    return calls


@pytest.mark.parametrize("kind", ["memory", "hdf5"])
def test_solve__the_second_time_comes_from_the_store_bit_for_bit(kind, tmp_path, solves):
    store = MemoryStore(SOLUTION_SCHEMA) if kind == "memory" else Hdf5Store(tmp_path / "s", SOLUTION_SCHEMA)
    first = solve(cluster(2), FREQUENCY_HZ, store=store)
    second = solve(cluster(2), FREQUENCY_HZ, store=store)
    assert len(solves) == 1
    np.testing.assert_array_equal(first.coupled.currents, second.coupled.currents)
    np.testing.assert_array_equal(
        first.embedded_patterns(SKY.theta_rad, SKY.phi_rad), second.embedded_patterns(SKY.theta_rad, SKY.phi_rad)
    )
    weights = first.pointing_weights(0.2, 0.3)
    np.testing.assert_array_equal(
        first.isolated_beam(weights, SKY.theta_rad, SKY.phi_rad), second.isolated_beam(weights, SKY.theta_rad, SKY.phi_rad)
    )
    assert second.statistics == first.statistics


def test_solve__terminations_weights_and_names_solve_nothing(solves):
    store = MemoryStore(SOLUTION_SCHEMA)
    solution = solve(cluster(2), FREQUENCY_HZ, store=store)
    solution.beam(np.ones(4), [0.1], [0.0], termination="open")
    renamed = Station(
        [Placed(crossed(name="other"), p.position, name=f"B{i}") for i, p in enumerate(solution.station)], PerfectGround()
    )
    solve(renamed, FREQUENCY_HZ, store=store)
    assert len(solves) == 1


def test_solve__a_turned_and_shifted_station_reuses_its_solution(solves):
    store = MemoryStore(SOLUTION_SCHEMA)
    here = solve(cluster(3), FREQUENCY_HZ, store=store)
    angle = np.deg2rad(37.0)
    turn = np.array([[np.cos(angle), -np.sin(angle), 0], [np.sin(angle), np.cos(angle), 0], [0, 0, 1]])
    there = Station(
        [Placed(p.antenna, turn @ p.position + [12.0, -7.0, 0.0], rotation_deg=37.0) for p in here.station], PerfectGround()
    )
    reused = solve(there, FREQUENCY_HZ, store=store)
    assert len(solves) == 1
    fresh = solve(there, FREQUENCY_HZ)
    a = reused.embedded_patterns(SKY.theta_rad, SKY.phi_rad)
    b = fresh.embedded_patterns(SKY.theta_rad, SKY.phi_rad)
    # Places agree to a micrometre, 3e-6 rad of phase at this frequency.
    np.testing.assert_allclose(a, b, atol=2e-5 * np.abs(b).max())
    assert np.abs(a - here.embedded_patterns(SKY.theta_rad, SKY.phi_rad)).max() > 0.01 * np.abs(b).max()


def moved(station, **changes):
    first = station.placed[0]
    fields = {
        "antenna": first.antenna, "position": first.position, "rotation_deg": first.rotation_deg,
        "tilt_east_deg": first.tilt_east_deg,
    } | changes  # fmt: skip
    return Station([Placed(**fields), *station.placed[1:]], station.ground)


@pytest.mark.parametrize(
    "change",
    [
        {"rotation_deg": 1.0},
        {"tilt_east_deg": 0.5},
        {"position": (0.0, 0.001, 0.0)},
        {"position": (0.0, 0.0, 0.01)},
        {"antenna": crossed(droop_deg=40.1)},
        {"antenna": crossed(conductivity_s_per_m=3.5e7)},
    ],
)
def test_solve__any_change_of_the_structure_is_solved_again(change, solves):
    store = MemoryStore(SOLUTION_SCHEMA)
    solve(cluster(2), FREQUENCY_HZ, store=store)
    solve(moved(cluster(2), **change), FREQUENCY_HZ, store=store)
    assert len(solves) == 2


def test_solve__frequency_mesh_and_precision_are_part_of_the_key(solves):
    store = MemoryStore(SOLUTION_SCHEMA)
    for options in ({}, {"mesh": "refined"}, {"precision": "double"}):
        solve(cluster(1), FREQUENCY_HZ, store=store, **options)
    solve(cluster(1), FREQUENCY_HZ + 1.0, store=store)
    assert len(solves) == 4


def test_solve__an_unwritable_store_is_refused_before_the_work(tmp_path, solves):
    (tmp_path / "file").write_text("in the way")
    with pytest.raises(StoreError, match="file"):
        solve(cluster(1), FREQUENCY_HZ, store=Hdf5Store(tmp_path / "file" / "store", SOLUTION_SCHEMA))
    assert not solves


def test_key__tells_a_second_port_at_one_node(tmp_path):
    from elbowroom.geometry.antennas import Antenna, Port
    from elbowroom.geometry.wires import Wire

    wires = [Wire((0, 0, 0.5), (0, 0, 1.5), 0.002)]
    one, two = Antenna("a", wires, [Port("p", 0)]), Antenna("a", wires, [Port("p", 0), Port("r", node="p")])
    store = MemoryStore(SOLUTION_SCHEMA)
    assert solve(Station([Placed(one)]), 150e6, store=store).impedance_matrix().shape == (1, 1)
    assert solve(Station([Placed(two)]), 150e6, store=store).coupled.loaded_admittance.shape == (2, 2)


@pytest.mark.parametrize("solver", ["direct", "reduced"])
def test_stored_solution__of_a_copy_whose_turns_are_written_otherwise__is_used_or_made_again(solver):
    design = crossed()
    first = Station(
        [Placed(design, (0, 0, 0), rotation_deg=-10.0), Placed(design, (2, 0, 0), rotation_deg=350.0)], PerfectGround()
    )
    turn = 33.3
    second = Station([turned(p, turn) for p in first], PerfectGround())
    store = MemoryStore(SOLUTION_SCHEMA)
    a, b = solve(first, 150e6, store=store, solver=solver), solve(second, 150e6, store=store, solver=solver)
    np.testing.assert_allclose(a.impedance_matrix(), b.impedance_matrix(), atol=1e-6)
    theta, phi = np.full(5, 0.7), np.linspace(0.0, 6.0, 5)
    one = a.embedded_patterns(theta, phi)
    other = b.embedded_patterns(theta, phi + np.deg2rad(turn))
    np.testing.assert_allclose(np.abs(one), np.abs(other), atol=1e-6)
