"""Near reactions against slow quadrature, and where their two methods meet."""

import numpy as np
import pytest
from scipy.integrate import dblquad

from elbowroom.kernels.quadrature import gauss_table
from elbowroom.kernels.reactions_numba import angled_moments, coaxial_moments, ring_kernel

NODES, WEIGHTS = gauss_table()


def slow_ring(offset, a, b, k, count=4000):
    angle = (np.arange(count) + 0.5) * np.pi / count
    r = np.sqrt(offset**2 + (a - b) ** 2 + 4 * a * b * np.sin(angle / 2) ** 2)
    return np.mean(np.exp(-1j * k * r) / r)


@pytest.mark.parametrize("offset", [0.003, 0.02, 0.4, 3.0])
@pytest.mark.parametrize(("a", "b"), [(0.01, 0.01), (0.01, 0.004)])
def test_ring_kernel__is_the_mean_over_the_ring(offset, a, b):
    value = ring_kernel(offset**2, (a - b) ** 2, 4 * a * b, 6.0, 8)
    expected = slow_ring(offset, a, b, 6.0)
    assert abs(value - expected) < 1e-10 * abs(expected)
    assert abs(ring_kernel(offset**2, (a - b) ** 2, 4.1 * a * b, 6.0, 8) - expected) > 1e-10 * abs(expected)


def coaxial(span, span2, a, b, k, order=2):
    out = np.empty((order + 1, order + 1), dtype=complex)
    coaxial_moments(*span, *span2, a, b, k, order, order, NODES, WEIGHTS, 8, out)
    return out


def test_coaxial_moments__separate_elements_match_double_quadrature():
    k, a, b = 5.0, 0.01, 0.006
    out = coaxial((0.0, 0.3), (0.4, 0.5), a, b, k)

    def part(function):
        return dblquad(
            lambda z2, z: (2 * z / 0.3 - 1) * (2 * (z2 - 0.4) / 0.1 - 1) * function(slow_ring(z - z2, a, b, k, 64)),
            0.0, 0.3, 0.4, 0.5, epsabs=1e-12, epsrel=1e-10,
        )[0]  # fmt: skip

    assert abs(out[1, 1] - (part(np.real) + 1j * part(np.imag))) < 1e-10


def test_coaxial_moments__splitting_an_element_changes_nothing():
    k, a = 6.0, 0.002
    whole = coaxial((0.0, 0.2), (0.0, 0.2), a, a, k)[0, 0]
    halves = [(0.0, 0.07), (0.07, 0.2)]
    parts = sum(coaxial(p, q, a, a, k)[0, 0] for p in halves for q in halves)
    assert abs(whole - parts) < 1e-11 * abs(whole)


def test_coaxial_moments__reversing_both_elements_flips_odd_moments():
    forward = coaxial((0.0, 0.2), (0.3, 0.5), 0.003, 0.003, 4.0)
    backward = coaxial((0.2, 0.0), (0.5, 0.3), 0.003, 0.003, 4.0)
    signs = (-1.0) ** np.add.outer(np.arange(3), np.arange(3))
    # Lengths keep their sign in no moment: the measure is positive.
    np.testing.assert_allclose(backward, signs * forward, rtol=1e-11)


def angled(start, end, start2, end2, a, b, k, order=2, touching=8):
    out = np.empty((order + 1, order + 1), dtype=complex)
    points = [np.array(p, dtype=float) for p in (start, end, start2, end2)]
    angled_moments(*points, a, b, k, 1e-9, touching, NODES, WEIGHTS, out)
    return out


def test_angled_moments__tend_to_the_coaxial_ones_as_the_angle_closes():
    k, a = 6.0, 0.002
    straight = coaxial((0.0, 0.2), (0.2, 0.35), a, a, k)
    errors = []
    for angle in (0.3, 0.03, 0.003):
        tip = [0.15 * np.sin(angle), 0.0, 0.2 + 0.15 * np.cos(angle)]
        out = angled([0, 0, 0], [0, 0, 0.2], [0, 0, 0.2], tip, a, a, k)
        errors.append(abs(out[0, 0] / straight[0, 0] - 1))
    assert errors[0] > errors[1] > errors[2]
    assert errors[2] < 1e-4


def test_angled_moments__touching_quadrature_settles():
    args = ([0, 0, 0], [0, 0, 0.2], [0, 0, 0.2], [0.1, 0.0, 0.3], 0.003, 0.003, 6.0)
    fine = angled(*args, touching=12)
    for points, bound in ((4, 3e-4), (6, 1e-4), (8, 5e-5)):
        assert abs(angled(*args, touching=points) / fine - 1)[0, 0] < bound


def test_angled_moments__move_and_turn_with_the_wires():
    rng = np.random.default_rng(5)
    turn, _ = np.linalg.qr(rng.normal(size=(3, 3)))
    points = np.array([[0, 0, 0], [0.2, 0, 0], [0.05, 0.02, 0.01], [0.1, 0.3, 0.2]], dtype=float)
    moved = points @ turn.T + [3.0, -2.0, 5.0]
    np.testing.assert_allclose(angled(*points, 0.002, 0.004, 6.0), angled(*moved, 0.002, 0.004, 6.0), rtol=1e-9, atol=1e-13)
