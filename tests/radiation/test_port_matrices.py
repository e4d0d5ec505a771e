"""Port matrices of some ports and active impedances, against impedance formulas written out."""

import numpy as np
import pytest

from elbowroom.base.errors import ModelRangeError
from elbowroom.job.solve import solve
from elbowroom.system.terminations import ActiveImpedance
from helpers import FREQUENCY_HZ, cluster

LOADS = [50.0, 75 + 20j, 0.5, 30j, 200 - 80j, 1e4]


@pytest.fixture(scope="module")
def solution():
    return solve(cluster(3), FREQUENCY_HZ)


def schur(z, kept, loads):
    rest = [p for p in range(len(z)) if p not in kept]
    inner = z[np.ix_(rest, rest)] + np.diag(np.asarray(loads, dtype=complex)[rest])
    return z[np.ix_(kept, kept)] - z[np.ix_(kept, rest)] @ np.linalg.solve(inner, z[np.ix_(rest, kept)])


@pytest.mark.parametrize("kept", [[0], [4, 1], [5, 0, 2, 3, 1]])
def test_port_matrix__is_the_schur_complement(solution, kept):
    expected = schur(solution.impedance_matrix(), kept, LOADS)
    found = solution.port_matrix("Z", kept, termination=LOADS)
    np.testing.assert_allclose(found, expected, rtol=0, atol=1e-9 * np.abs(expected).max())
    np.testing.assert_allclose(solution.port_matrix("Y", kept, termination=LOADS) @ expected, np.eye(len(kept)), atol=1e-9)
    one = np.eye(len(kept))
    scattering = (expected - 50 * one) @ np.linalg.inv(expected + 50 * one)
    np.testing.assert_allclose(solution.port_matrix("S", kept, termination=LOADS, reference_ohm=50.0), scattering, atol=1e-10)
    # wrong loads must not pass
    assert np.abs(found - schur(solution.impedance_matrix(), kept, LOADS[::-1])).max() > 1e-3 * np.abs(expected).max()


def test_port_matrix__open_and_short_are_blocks_of_z_and_y(solution):
    z, y = solution.impedance_matrix(), solution.admittance_matrix()
    kept = [1, 2]
    block = np.ix_(kept, kept)
    np.testing.assert_allclose(solution.port_matrix("Z", kept, termination="open"), z[block], atol=1e-9 * np.abs(z).max())
    np.testing.assert_allclose(solution.port_matrix("Y", kept, termination="short"), y[block], atol=1e-9 * np.abs(y).max())
    np.testing.assert_allclose(solution.port_matrix("Z"), z, atol=1e-9 * np.abs(z).max())
    np.testing.assert_allclose(solution.port_matrix("S"), solution.scattering_matrix(), atol=1e-12)


def test_scattering_matrix__with_complex_references_is_that_of_power_waves(solution):
    # Kurokawa, "Power waves and the scattering matrix" (1965): S = F (Z - Zr*) (Z + Zr)^-1 F^-1
    z, reference = solution.impedance_matrix(), np.array([50 + 10j, 75, 20 - 30j, 100, 60j + 5, 1.0])
    root = np.diag(0.5 / np.sqrt(reference.real))
    expected = root @ (z - np.diag(reference.conj())) @ np.linalg.inv(z + np.diag(reference)) @ np.linalg.inv(root)
    np.testing.assert_allclose(solution.scattering_matrix(reference), expected, atol=1e-9)


def test_port_matrix__bad_requests_are_refused(solution):
    for options, match in (
        ({"kind": "G"}, "expected 'S', 'Z' or 'Y'"),
        ({"ports": [0, 0]}, "each once"),
        ({"ports": []}, "one port at least"),
        ({"ports": [6]}, "indices from 0 to 5"),
        ({"termination": [1.0]}, "one value or 6"),
        ({"reference_ohm": -5.0}, "positive real part"),
        ({"reference_ohm": np.nan}, "positive real part"),
    ):
        with pytest.raises(ModelRangeError, match=match):
            solution.port_matrix(**options)


def test_active_impedance__solves_the_circuit_of_sources_behind_terminations(solution):
    z, loads = solution.impedance_matrix(), np.array([50.0, 75 + 20j, 40, 30 - 5j, 200 - 80j, 100])
    rng = np.random.default_rng(2)
    weights = rng.normal(size=(2, 6)) + 1j * rng.normal(size=(2, 6))
    weights[0, 3] = 0.0
    current = np.linalg.solve(z + np.diag(loads), (2 * weights * np.sqrt(loads.real)).T)
    voltage = z @ current
    expected = (voltage / current).T
    found = solution.active_impedance(weights, termination=loads)
    driven = weights != 0
    np.testing.assert_allclose(found[driven], expected[driven], rtol=1e-9)
    assert np.isnan(found[0, 3])
    np.testing.assert_allclose(solution.active_impedance(weights[1], termination=loads), expected[1], rtol=1e-9)
    # the trade's formula: sum of S_pq w_q / w_p with S referred to the terminations
    scattering = solution.scattering_matrix(loads)
    reflection = (weights @ scattering.T)[driven] / weights[driven]
    np.testing.assert_allclose(solution.active_reflection(weights, termination=loads)[driven], reflection, atol=1e-9)
    # the power that goes in, sum of |w|^2 (1 - |reflection|^2), is never more than what the sources offer
    power = np.abs(weights[driven]) ** 2 * (1 - np.abs(reflection) ** 2)
    assert 0.0 < power.sum() <= (np.abs(weights) ** 2).sum()
    other = solution.active_reflection(weights, termination=loads, reference_ohm=50.0)
    np.testing.assert_allclose(other[driven], ((expected - 50) / (expected + 50))[driven], atol=1e-9)


def test_active_impedance__of_forced_currents_and_voltages(solution):
    weights = solution.pointing_weights(0.4, 1.0, port="x")
    driven = weights != 0
    z, y = solution.impedance_matrix(), solution.admittance_matrix()
    found = solution.active_impedance(weights, termination="open")
    np.testing.assert_allclose(found[driven], (z @ weights)[driven] / weights[driven], rtol=1e-9)
    found = solution.active_impedance(weights, termination="short")
    np.testing.assert_allclose(found[driven], weights[driven] / (y @ weights)[driven], rtol=1e-9)


def test_active_impedance__of_one_driven_port_is_its_own_with_the_others_terminated(solution):
    weights = np.array([0, 0, 1.0, 0, 0, 0])
    loads = [100.0, "open", 60 + 5j, "short", 20j, ActiveImpedance(-20 + 3j)]
    found = solution.active_impedance(weights, termination=loads)[2]
    assert found == pytest.approx(solution.port_matrix("Z", [2], termination=loads)[0, 0], rel=1e-10)


def test_active_impedance__bad_requests_are_refused(solution):
    one = np.array([1.0, 1.0, 0, 0, 0, 0])
    for loads, match in (
        ([100.0, "open"] + [100.0] * 4, "mix current sources"),
        ([100.0, 20j] + [100.0] * 4, "port 1 is driven"),
        ([100.0, ActiveImpedance(-5.0)] + [100.0] * 4, "port 1 is driven"),
    ):
        with pytest.raises(ModelRangeError, match=match):
            solution.active_impedance(one, termination=loads)
    with pytest.raises(ModelRangeError, match="reference_ohm"):
        solution.active_reflection(one, termination="open")
    assert np.isfinite(solution.active_reflection(one, termination="open", reference_ohm=50.0)[:2]).all()
    with pytest.raises(ModelRangeError, match="positive real part"):
        solution.active_reflection(one, reference_ohm=0.0)
