"""The fast point kernels against their slow twins."""

import numpy as np
import pytest

from elbowroom.kernels import points_numba
from elbowroom.kernels.points import free_kernel, image_kernels, plane_wave_phases, turn_polynomials
from elbowroom.kernels.points_numba import accumulate_phases, fill_free, fill_image, fill_phases

ACCURACY = 1e-9


def scattered(rng, count, spread, lift=0.0):
    points = spread * rng.normal(size=(3, count))
    points[2] = np.abs(points[2]) + lift
    return points


@pytest.mark.parametrize(("spread", "wavenumber"), [(1e-6, 1.0), (1e-2, 7.3), (1.0, 3.0), (40.0, 7.3), (1000.0, 7.3)])
def test_fill_free__equals_twin(spread, wavenumber):
    rng = np.random.default_rng(1)
    a, b = scattered(rng, 7, spread), scattered(rng, 13, spread, 2.0 * spread)
    real, imag = np.empty((7, 13)), np.empty((7, 13))
    fill_free(*a, *b, wavenumber, real, imag)
    expected = free_kernel(a, b, wavenumber)
    error = np.abs(real + 1j * imag - expected) / np.abs(expected)
    assert error.max() < ACCURACY
    # A phase wrong by a millionth of a turn would be seen.
    assert (np.abs((real + 1j * imag) * np.exp(2e-6j * np.pi) - expected) / np.abs(expected)).min() > ACCURACY


def test_fill_image__equals_twin():
    rng = np.random.default_rng(2)
    a, b = scattered(rng, 9, 5.0, 0.1), scattered(rng, 10, 5.0, 0.1)
    out = np.empty((4, 9, 10))
    fill_image(*a, *b, 5.0, *out)
    total, difference = image_kernels(a, b, 5.0)
    scale = np.abs(free_kernel(a, b, 5.0))
    assert (np.abs(out[0] + 1j * out[1] - total) / scale).max() < 2 * ACCURACY
    assert (np.abs(out[2] + 1j * out[3] - difference) / scale).max() < 2 * ACCURACY
    assert (np.abs(out[0] + 1j * out[1] - difference) / scale).max() > 1e-3


def test_fill_phases__equals_twin():
    rng = np.random.default_rng(3)
    unit = rng.normal(size=(11, 3))
    unit /= np.linalg.norm(unit, axis=1)[:, None]
    positions = 30.0 * rng.normal(size=(5, 3))
    real, imag = np.empty((5, 11)), np.empty((5, 11))
    fill_phases(unit, positions, 7.0, real, imag)
    expected = plane_wave_phases(unit, positions, 7.0)
    assert np.abs(real + 1j * imag - expected).max() < ACCURACY
    assert np.abs(real - 1j * imag - expected).max() > 0.1


def test_accumulate_phases__is_the_phased_sum():
    rng = np.random.default_rng(4)
    unit = rng.normal(size=(6, 3))
    unit /= np.linalg.norm(unit, axis=1)[:, None]
    positions = 10.0 * rng.normal(size=(8, 3))
    values = rng.normal(size=(8, 6, 2)) + 1j * rng.normal(size=(8, 6, 2))
    expected = np.einsum("ad,adc->dc", plane_wave_phases(unit, positions, 3.0), values)
    assert np.abs(accumulate_phases(unit, positions, 3.0, values) - expected).max() < 8 * ACCURACY * np.abs(values).max()


def test_turn_polynomials__are_the_numbers_compiled_in():
    sine, cosine = turn_polynomials(5)
    used = [getattr(points_numba, f"S{i}") for i in range(6)], [getattr(points_numba, f"C{i}") for i in range(6)]
    np.testing.assert_allclose(used[0], sine, rtol=1e-9)
    np.testing.assert_allclose(used[1], cosine, rtol=1e-9)


def test_phase_polynomials__are_the_numbers_compiled_in():
    sine, cosine = turn_polynomials(6)
    np.testing.assert_allclose(points_numba.PHASE_S, sine, rtol=1e-8)
    np.testing.assert_allclose(points_numba.PHASE_C, cosine, rtol=1e-8)


def test_phases__are_good_to_a_hundredth_of_what_kernels_are():
    rng = np.random.default_rng(5)
    unit = rng.normal(size=(400, 3))
    unit /= np.linalg.norm(unit, axis=1)[:, None]
    positions = rng.uniform(-1.0, 1.0, size=(7, 3))
    real, imag = np.empty((7, 400)), np.empty((7, 400))
    fill_phases(unit, positions, 3.0, real, imag)
    assert np.abs(real + 1j * imag - plane_wave_phases(unit, positions, 3.0)).max() < 1e-11
