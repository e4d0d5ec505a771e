"""Solutions: terminations afterwards, beams from weights, isolated patterns, subsets."""

import numpy as np
import pytest

from elbowroom.base.errors import ModelRangeError, SolveError
from elbowroom.geometry.directions import hemisphere_grid
from elbowroom.geometry.grounds import PerfectGround
from elbowroom.geometry.stations import Placed, Station
from elbowroom.job.solve import solve
from elbowroom.system.assembly import assemble
from elbowroom.system.solving import port_excitations
from helpers import FREQUENCY_HZ, cluster, crossed, dipole

SKY = hemisphere_grid(15.0)


@pytest.fixture(scope="module")
def solution():
    return solve(cluster(3), FREQUENCY_HZ)


def test_port_matrices__agree_with_one_another(solution):
    z, y = solution.impedance_matrix(), solution.admittance_matrix()
    np.testing.assert_allclose(z @ y, np.eye(6), atol=1e-9)
    s = solution.scattering_matrix(50.0)
    expected = (z - 50 * np.eye(6)) @ np.linalg.inv(z + 50 * np.eye(6))
    np.testing.assert_allclose(s, expected, atol=1e-10)
    assert np.linalg.norm(s, 2) <= 1.0 + 1e-9
    np.testing.assert_allclose(solution.scattering_matrix(100.0), solution.scattering_matrix(100.0 + 0j), atol=1e-12)


@pytest.mark.parametrize("termination", [100.0, 40.0 - 25.0j, [50.0, 1e5, 0.1, 30j, 70.0, 100.0]])
def test_embedded_patterns__retermination_equals_loads_in_the_solve(solution, termination):
    d = solution.discretisation
    load = np.broadcast_to(np.asarray(termination, dtype=complex), (6,))
    matrix, scales = assemble(d, 0.0)
    rows = scales[:, None] * port_excitations(d)[0]
    z = matrix.dense() + rows @ np.diag(load) @ rows.T
    currents = scales[:, None] * np.linalg.solve(z, rows)
    # h = -Z_T times the currents that reach each port.
    from elbowroom.radiation.patterns import station_patterns
    from elbowroom.system.plane_waves import direction_frame

    expected = -load[:, None, None] * station_patterns(d, currents, direction_frame(SKY.theta_rad, SKY.phi_rad))
    found = solution.embedded_patterns(SKY.theta_rad, SKY.phi_rad, termination=termination)
    np.testing.assert_allclose(found, expected, atol=1e-8 * np.abs(expected).max())


def test_embedded_patterns__open_is_the_limit_of_large_and_short_of_small(solution):
    def patterns(termination):
        return solution.embedded_patterns(SKY.theta_rad, SKY.phi_rad, termination=termination)

    opened = patterns("open")
    assert np.abs(patterns(1e9) - opened).max() < 1e-5 * np.abs(opened).max()
    shorted = patterns("short")
    # A shorted port's own response is its short-circuit current: -V/Z_T of a small resistance.
    assert np.abs(-patterns(1e-6) / 1e-6 - shorted).max() < 1e-6 * np.abs(shorted).max()
    mixed = patterns(["open", "short", 100.0, 100.0, "open", 20j])
    assert np.isfinite(mixed).all()


def test_beam__is_the_weighted_sum_of_patterns(solution):
    rng = np.random.default_rng(0)
    weights = rng.normal(size=(2, 6)) + 1j * rng.normal(size=(2, 6))
    patterns = solution.embedded_patterns(SKY.theta_rad, SKY.phi_rad, termination=75.0)
    beams = solution.beam(weights, SKY.theta_rad, SKY.phi_rad, termination=75.0)
    np.testing.assert_allclose(beams, np.einsum("bp,pdc->bdc", weights, patterns), atol=1e-10)
    one = solution.beam(weights[0], SKY.theta_rad, SKY.phi_rad, termination=75.0)
    np.testing.assert_allclose(one, beams[0], atol=1e-12)
    alone = solution.isolated_patterns(SKY.theta_rad, SKY.phi_rad, termination=75.0)
    isolated = solution.isolated_beam(weights, SKY.theta_rad, SKY.phi_rad, termination=75.0)
    np.testing.assert_allclose(isolated, np.einsum("bp,pdc->bdc", weights, alone), atol=1e-10)
    assert np.abs(beams - isolated).max() > 1e-3


def test_isolated_patterns__are_those_of_each_antenna_solved_alone(solution):
    place = solution.station.placed[1]
    alone = solve(Station([place], PerfectGround()), FREQUENCY_HZ)
    expected = alone.embedded_patterns(SKY.theta_rad, SKY.phi_rad, termination=30 + 5j)
    found = solution.isolated_patterns(SKY.theta_rad, SKY.phi_rad, termination=30 + 5j, ports=[2, 3])
    np.testing.assert_allclose(found, expected, atol=1e-9)


def test_pointing_weights__choose_ports_and_round_delays(solution):
    weights = solution.pointing_weights(0.5, 1.0, port="x", antennas=["A001", "A003"])
    assert np.flatnonzero(weights).tolist() == [0, 4]
    stepped = solution.pointing_weights(0.5, 1.0, delay_step_s=1e-9)
    turns = np.angle(stepped) / (2 * np.pi * FREQUENCY_HZ * 1e-9)
    np.testing.assert_allclose(turns, np.round(turns), atol=1e-6)
    with pytest.raises(ModelRangeError, match="port 'q'"):
        solution.pointing_weights(0.0, 0.0, port="q")
    with pytest.raises(ModelRangeError, match="A009"):
        solution.pointing_weights(0.0, 0.0, antennas=["A009"])
    with pytest.raises(ModelRangeError, match="delay_step_s"):
        solution.pointing_weights(0.0, 0.0, delay_step_s=0.0)


@pytest.mark.parametrize("precision", ["double", "single"])
def test_solve__precisions_agree(solution, precision):
    other = solve(cluster(3), FREQUENCY_HZ, precision=precision)
    bound = 1e-9 if precision == "double" else 1e-4
    z, reference = other.impedance_matrix(), solution.impedance_matrix()
    assert np.linalg.norm(z - reference) < bound * np.linalg.norm(reference)
    assert other.statistics.relative_residual < (1e-9 if precision == "double" else 1e-4)


def test_solve__states_its_mesh_error():
    coarse = solve(cluster(1), FREQUENCY_HZ)
    fine = solve(cluster(1), FREQUENCY_HZ, mesh="refined")
    y, reference = coarse.admittance_matrix(), fine.admittance_matrix()
    actual = np.linalg.norm(y - reference) / np.linalg.norm(reference)
    assert coarse.statistics.mesh_error == pytest.approx(actual, rel=1e-6)
    assert fine.statistics.mesh_error < 0.3 * coarse.statistics.mesh_error


def test_patterns__bad_directions_and_weights_are_refused(solution):
    with pytest.raises(ModelRangeError, match="degrees"):
        solution.embedded_patterns([45.0], [0.0])
    with pytest.raises(ModelRangeError, match="phi_rad"):
        solution.embedded_patterns([0.1], [np.nan])
    with pytest.raises(ModelRangeError, match="weights"):
        solution.beam(np.ones(5), [0.1], [0.0])
    with pytest.raises(ModelRangeError, match="finite"):
        solution.beam(np.full(6, np.nan), [0.1], [0.0])
    with pytest.raises(ModelRangeError, match="ports"):
        solution.embedded_patterns([0.1], [0.0], ports=[6])
    for bad in ("closed", [100.0] * 5, -3.0, np.inf, [None] * 6):
        with pytest.raises(ModelRangeError, match="termination"):
            solution.embedded_patterns([0.1], [0.0], termination=bad)
    with pytest.raises(SolveError, match="precision"):
        solve(cluster(1), FREQUENCY_HZ, precision="half")
    with pytest.raises(ModelRangeError, match="solver"):
        solve(cluster(1), FREQUENCY_HZ, solver="magic")
    with pytest.raises(ModelRangeError, match="frequency"):
        solve(cluster(1), 0.0)


def test_patterns__a_turned_antenna_turns_its_pattern():
    design = dipole(height=1.0, direction=(1.0, 0.0, 0.0))
    straight = solve(Station([Placed(design)], PerfectGround()), FREQUENCY_HZ)
    turned = solve(Station([Placed(design, rotation_deg=30.0)], PerfectGround()), FREQUENCY_HZ)
    a = straight.embedded_patterns(SKY.theta_rad, SKY.phi_rad)
    b = turned.embedded_patterns(SKY.theta_rad, SKY.phi_rad + np.deg2rad(30.0))
    np.testing.assert_allclose(b, a, atol=1e-9)
    assert np.abs(turned.embedded_patterns(SKY.theta_rad, SKY.phi_rad) - a).max() > 0.05


def test_patterns__lean_the_way_the_top_leans():
    # A vertical dipole leaning east has, towards the east horizon side, a field with a horizontal part.
    design = dipole(half_length=0.3, height=2.0)
    leaning = solve(Station([Placed(design, tilt_east_deg=10.0)]), FREQUENCY_HZ)
    top = leaning.station.placed[0].to_station(np.array(design.wires[0].end))
    assert top[0] > 0.1
    assert abs(top[1]) < 1e-12
    response = leaning.embedded_patterns([0.0], [0.0])[0, 0]
    assert abs(response[0]) > 0.01
    assert abs(response[1]) < 1e-9


def test_patterns__below_a_ground_there_is_nothing(solution):
    found = solution.embedded_patterns([2.0], [0.3])
    np.testing.assert_array_equal(found, 0.0)


def test_solve__crossed_ports_of_one_antenna_do_not_couple():
    alone = solve(Station([Placed(crossed())], PerfectGround()), FREQUENCY_HZ).impedance_matrix()
    assert abs(alone[0, 1]) < 1e-6 * abs(alone[0, 0])
