"""Currents between solved frequencies: polynomials, quotients, and the errors stated for them."""

import numpy as np
import pytest

from elbowroom.base.errors import ModelRangeError
from elbowroom.system.band_currents import CurrentSamples, barycentric_poles, fitted_quotient, lagrange_weights

SPEED = 299_792_458.0


def detours(f, positions, paths, seed=0):
    """Currents (A, P) that reached antennas directly and by way of detours of some metres."""
    separation = np.linalg.norm(positions[:, None] - positions[None, :], axis=2)
    k = 2.0 * np.pi * f / SPEED
    rng = np.random.default_rng(seed)
    total = np.eye(len(positions)) + np.exp(-1j * k * separation)
    for path in paths:
        total = total + 0.1 * rng.normal(size=separation.shape) * np.exp(-1j * k * (separation + path))
    return total


@pytest.fixture
def places():
    rng = np.random.default_rng(1)
    return np.concatenate([rng.uniform(-15.0, 15.0, (12, 2)), np.zeros((12, 1))], axis=1)


def sampled(places, nodes, of):
    offsets = np.arange(len(places) + 1)
    samples = CurrentSamples(places, offsets, offsets, np.arange(len(places)))
    for f in np.random.default_rng(5).permutation(nodes):
        samples.add(float(f), of(float(f)))
    return samples


def made(samples, of, f):
    weighting = samples.weighting(f)
    return weighting, samples.combined(f, weighting, [of(float(samples.nodes[i])) for i in weighting.nodes])


def worst(a, b):
    return float(np.max(np.linalg.norm(a - b, axis=0) / np.linalg.norm(b, axis=0)))


def test_lagrange__weights_reproduce_polynomials_on_any_nodes():
    nodes = np.array([1.0, 2.0, 2.5, 4.0, 7.0])
    assert lagrange_weights(nodes, 3.3) @ nodes**4 == pytest.approx(3.3**4)
    assert list(lagrange_weights(nodes, 2.5)) == [0.0, 0.0, 1.0, 0.0, 0.0]


def test_quotient__finds_the_poles_of_a_rational_function():
    nodes = np.linspace(100e6, 130e6, 31)
    poles = np.array([112.3e6 + 4e4j, 119.9e6 + 2e3j])
    values = np.stack(
        [sum(a / (nodes - p) for a, p in zip(row, poles, strict=True)) + 1e-7 for row in ((1.0, 2.0), (0.3, -1.0))], axis=1
    )
    quotient = fitted_quotient(nodes, values, 1e-11)
    found = barycentric_poles(nodes[quotient.support], quotient.weights)
    for pole in poles:
        assert np.abs(found - pole).min() < 1.0


@pytest.mark.parametrize("f", [100.5e6, 107.31e6, 115.0e6, 124.499e6])
def test_currents__between_solved_frequencies_meet_what_is_stated(places, f):
    def of(x):
        return detours(x, places, (5.0, 20.0, 40.0))

    samples = sampled(places, np.arange(100e6, 125.1e6, 1e6), of)
    weighting, found = made(samples, of, f)
    error = worst(found, of(f))
    assert error <= weighting.error
    assert weighting.error < 3e-3
    # The statement is of use: it is not orders of magnitude above what it states, rounding apart.
    assert weighting.error < 300.0 * max(error, 1e-6)


def test_currents__stated_errors_hold_at_steps_too_wide_for_the_tolerance(places):
    def of(x):
        return detours(x, places, (30.0, 60.0))

    errors = []
    for step in (4e6, 2e6, 1e6):
        samples = sampled(places, np.arange(100e6, 140.1e6, step), of)
        for f in (103.3e6, 121.7e6, 139.2e6):
            weighting, found = made(samples, of, f)
            assert worst(found, of(f)) <= weighting.error
        errors.append(weighting.error)
    assert errors[0] > 10.0 * errors[2]


def test_currents__a_resonance_is_met_by_a_quotient(places):
    pole = 112.345e6 + 1.5e5j
    shape = np.random.default_rng(2).normal(size=(12, 12))

    def of(x):
        return detours(x, places, (5.0,)) + 2e5 * shape * np.exp(-2j * np.pi * x / SPEED * np.linalg.norm(
            places[:, None] - places[None, :], axis=2)) / (x - pole)  # fmt: skip

    samples = sampled(places, np.arange(100e6, 125.1e6, 0.5e6), of)
    weighting, found = made(samples, of, 112.2e6)
    assert weighting.how == "quotient"
    assert worst(found, of(112.2e6)) <= weighting.error < 1e-3
    assert np.abs(samples.poles() - pole).min() < 1e3


def test_currents__at_a_solved_frequency_are_those_solved(places):
    def of(x):
        return detours(x, places, (5.0, 20.0))

    samples = sampled(places, np.arange(100e6, 110.1e6, 1e6), of)
    _, found = made(samples, of, 104e6)
    np.testing.assert_allclose(found, of(104e6), rtol=0.0, atol=1e-12)


def test_currents__port_matrices_are_symmetric(places):
    def of(x):
        matrix = detours(x, places, (5.0,))
        return matrix + matrix.T

    samples = sampled(places, np.arange(100e6, 110.1e6, 1e6), of)
    weighting = samples.weighting(104.4e6)
    found = samples.combined_ports(104.4e6, weighting, [of(float(samples.nodes[i])) for i in weighting.nodes])
    np.testing.assert_array_equal(found, found.T)
    assert worst(found, of(104.4e6)) < weighting.error


def test_currents__what_cannot_be_is_refused(places):
    def of(x):
        return detours(x, places, ())

    samples = sampled(places, [100e6, 101e6, 102e6], of)
    with pytest.raises(ModelRangeError, match="5 at least"):
        samples.weighting(100.5e6)
    with pytest.raises(ModelRangeError, match="already"):
        samples.add(101e6, of(101e6))
    with pytest.raises(ModelRangeError, match=r"expected \(12, 12\) coordinates and ports, got \(13, 12\)"):
        samples.add(103e6, np.zeros((13, 12), dtype=complex))
    for f in (103e6, 104e6):
        samples.add(f, of(f))
    with pytest.raises(ModelRangeError, match="outside"):
        samples.weighting(104.1e6)
