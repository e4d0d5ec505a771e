"""Stations that the reduced solver must take: alone, close together, mixed, with networks, over every ground."""

import numpy as np
import pytest

from elbowroom.geometry.grounds import FreeSpace, PerfectGround
from elbowroom.geometry.shapes import log_periodic, monopole
from elbowroom.geometry.soils import Soil
from elbowroom.geometry.stations import Placed, Station
from elbowroom.job.solve import solve
from elbowroom.system.discretisation import discretise
from elbowroom.system.reduction import ReductionSettings
from elbowroom.system.solving_reduced import solve_reduced
from helpers import FREQUENCY_HZ, cluster, crossed, dipole
from reduced_cases import norm_error, pattern_errors

TOLERANCE = 1e-4
LOG_PERIODIC = log_periodic(
    height_m=1.4, wire_radius_m=0.002, tau=0.82, sigma=0.07, longest_half_length_m=0.6, elements=3, feeder_impedance_ohm=200.0
)


def beside(design, step, **place):
    return [Placed(design), Placed(design, step, **place)]


LINE = dipole(height=1.0, direction=(1.0, 0.0, 0.0))
STATIONS = {
    "three crossed dipoles": lambda: cluster(3).placed,
    "one alone": lambda: [Placed(crossed(), (3.0, 1.0, 0.0), 20.0)],
    "nearly touching": lambda: beside(LINE, (0.0, 0.03, 0.0)),
    "tips a centimetre apart": lambda: beside(crossed(droop_deg=0.0), (1.27, 0.0, 0.0)),
    "end to end": lambda: beside(LINE, (0.98, 0.0, 0.0)),
    "crossing in the air": lambda: beside(LINE, (0.1, 0.2, 0.05), rotation_deg=90.0),
    "monopole and crossed dipole": lambda: [Placed(monopole(length_m=0.5, wire_radius_m=0.003)), Placed(crossed(), (1.1, 0.4, 0.0), 30.0)],
    "tilted": lambda: beside(crossed(), (1.5, 0.4, 0.0), rotation_deg=40.0, tilt_east_deg=6.0, tilt_north_deg=-4.0),
    "equal designs made anew": lambda: [Placed(crossed(), (1.5 * n, 0.3 * n, 0.0), 35.0 * n) for n in range(3)],
    "different heights": lambda: beside(crossed(), (1.3, 0.4, 0.4)),
    "log-periodic antennas": lambda: beside(LOG_PERIODIC, (1.35, 0.3, 0.0), rotation_deg=25.0),
    "log-periodic and dipole": lambda: [Placed(LOG_PERIODIC), Placed(LINE, (1.4, 0.2, 0.0))],
}  # fmt: skip


def solved_both(placed, ground, tolerance=TOLERANCE, **options):
    station = Station(placed, ground)
    direct = solve(station, FREQUENCY_HZ, solver="direct", precision="double", **options)
    return direct, solve(station, FREQUENCY_HZ, solver="reduced", tolerance=tolerance, **options)


@pytest.mark.parametrize("ground", [FreeSpace(), PerfectGround(), Soil(10.0, 0.01)], ids=["free space", "perfect ground", "soil"])
@pytest.mark.parametrize("name", STATIONS)
def test_reduced__equals_direct_within_its_tolerance_and_its_statement(name, ground):
    if not ground.conducting and "monopole" in name:
        pytest.skip("a foot stands on a conducting ground")
    direct, reduced = solved_both(STATIONS[name](), ground)
    s = reduced.statistics
    assert s.strategy == "reduced"
    assert s.n_functions == reduced.space.size < s.n_unknowns
    assert 0.0 < s.pattern_error <= TOLERANCE
    error = pattern_errors(direct, reduced).max()
    # Below 1e-6, -120 dB, rules of both solvers between antennas count.
    assert error <= max(s.pattern_error, 1e-6)
    assert norm_error(reduced.impedance_matrix(), direct.impedance_matrix()) < TOLERANCE
    assert norm_error(reduced.coupled.loaded_admittance, direct.coupled.loaded_admittance) <= max(s.port_matrix_error, 1e-6)


def test_reduced__coupling_is_there():
    # Antennas alone are a hundred tolerances off: the comparisons above would see coupling left out.
    station = Station(cluster(3).placed, PerfectGround())
    reduced = solve(station, FREQUENCY_HZ, solver="reduced", tolerance=TOLERANCE)
    theta, phi = np.array([0.2, 0.9, 1.3]), np.array([0.3, -1.0, 2.0])
    coupled = reduced.embedded_patterns(theta, phi)
    alone = reduced.isolated_patterns(theta, phi)
    assert np.abs(coupled - alone).max() > 100.0 * TOLERANCE * np.abs(coupled).max()


def test_reduced__one_antenna_alone_is_the_isolated_one():
    station = Station([Placed(crossed(), (3.0, 1.0, 0.0), 20.0)], PerfectGround())
    reduced = solve(station, FREQUENCY_HZ, solver="reduced", tolerance=1e-5)
    theta, phi = np.array([0.2, 0.9, 1.3]), np.array([0.3, -1.0, 2.0])
    alone = reduced.isolated_patterns(theta, phi)
    np.testing.assert_allclose(reduced.embedded_patterns(theta, phi), alone, atol=1e-5 * np.abs(alone).max())


def test_reduced__what_was_missed_joins_the_functions():
    # Tips a centimetre apart: cutting less strictly alone ended at -20 dB, whatever the tolerance.
    station = Station(STATIONS["tips a centimetre apart"](), FreeSpace())
    d = discretise(station, FREQUENCY_HZ)
    _, space, statistics = solve_reduced(d, ReductionSettings(TOLERANCE))
    assert statistics.pattern_error <= TOLERANCE
    assert len(d.station.placed[0].antenna.ports) < space.bases[0].shape[1] < d.kinds[0].mesh.n_unknowns


@pytest.mark.parametrize("seen", ["open", "short", [100.0, "open", 40.0 - 20.0j, "short", 100.0, 100.0]])
def test_reduced__dead_and_terminated_ports(seen):
    # A dead port is terminated after the solve by open or short: the reduced currents must serve these too, although functions
    # were made under the reference resistance.  Resonances may raise errors by the ratio of currents to those under 100 ohm.
    direct, reduced = solved_both(cluster(3).placed, PerfectGround())
    assert pattern_errors(direct, reduced, termination=seen).max() < 10.0 * TOLERANCE
    theta, phi = np.array([0.2, 0.9, 1.3]), np.array([0.3, -1.0, 2.0])
    weights = np.array([1.0, 0.0, 1.0j, 0.0, 1.0, 0.0])
    beam = [s.beam(weights, theta, phi, termination=seen) for s in (direct, reduced)]
    assert np.abs(beam[1] - beam[0]).max() < 10.0 * TOLERANCE * np.abs(beam[0]).max()
    other = direct.beam(weights, theta, phi, termination=100.0)
    assert np.abs(other - beam[0]).max() > 100.0 * TOLERANCE * np.abs(beam[0]).max()


def test_reduced__port_matrices_are_symmetric_and_passive():
    reduced = solve(cluster(4), FREQUENCY_HZ, solver="reduced", tolerance=1e-3)
    s = reduced.scattering_matrix()
    np.testing.assert_array_equal(s, s.T)
    assert np.linalg.svd(s, compute_uv=False).max() <= 1.0 + 1e-3
    assert np.linalg.eigvalsh(reduced.impedance_matrix().real).min() > 0.0


def test_reduced__finer_tolerances_are_nearer():
    station = cluster(4)
    direct = solve(station, 350e6, solver="direct", precision="double")
    tolerances = (1e-2, 1e-3, 1e-4, 1e-5)
    solutions = [solve(station, 350e6, solver="reduced", tolerance=t) for t in tolerances]
    errors = [pattern_errors(direct, s).max() for s in solutions]
    assert errors == sorted(errors, reverse=True)
    assert errors[0] > 30.0 * errors[-1]
    for solution, error, tolerance in zip(solutions, errors, tolerances, strict=True):
        assert error <= max(solution.statistics.pattern_error, 1e-6)
        assert solution.statistics.pattern_error <= tolerance


def test_reduced__equal_designs_need_not_be_one_object():
    placed = beside(LOG_PERIODIC, (1.35, 0.3, 0.0), rotation_deg=25.0)
    twin = log_periodic(
        height_m=1.4, wire_radius_m=0.002, tau=0.82, sigma=0.07, longest_half_length_m=0.6, elements=3, feeder_impedance_ohm=200.0
    )
    assert twin is not LOG_PERIODIC
    twins = [placed[0], Placed(twin, (1.35, 0.3, 0.0), rotation_deg=25.0)]
    one, other = (
        solve(Station(p, PerfectGround()), FREQUENCY_HZ, solver="reduced", tolerance=1e-3).coupled.loaded_admittance
        for p in (placed, twins)
    )
    np.testing.assert_allclose(other, one, atol=1e-6 * np.abs(one).max())
