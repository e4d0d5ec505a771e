"""Tiled symmetric factors against dense linear algebra."""

import numpy as np
import pytest

from elbowroom.base.errors import SolveError
from elbowroom.system.factorisation import TiledSymmetric


def passive_matrix(rng, n):
    a = rng.normal(size=(n, n)) / np.sqrt(n)
    b = rng.normal(size=(n, n))
    return a @ a.T + 1j * 0.1 * (b + b.T)


def tiled(matrix, sizes, dtype=np.complex128):
    made = TiledSymmetric(sizes, dtype)
    edges = made.offsets
    for i, j in made.tiles:
        made.tiles[i, j] = np.asfortranarray(matrix[edges[i] : edges[i + 1], edges[j] : edges[j + 1]].astype(dtype))
    return made


@pytest.mark.parametrize("sizes", [(11,), (4, 5, 2), (1,) * 11])
@pytest.mark.parametrize(("dtype", "bound"), [(np.complex128, 1e-10), (np.complex64, 1e-3)])
def test_factorise__solves_like_dense(sizes, dtype, bound):
    rng = np.random.default_rng(7)
    matrix = passive_matrix(rng, 11)
    right = np.zeros((11, 4))
    right[0, 0] = right[5, 1] = right[5, 2] = right[10, 3] = 1.0
    expected = np.linalg.solve(matrix, right)
    x = tiled(matrix, sizes, dtype).factorise().solve(right)
    assert x.dtype == dtype
    assert np.linalg.norm(x - expected) < bound * np.linalg.norm(expected)
    assert np.linalg.norm(1.01 * x - expected) > bound * np.linalg.norm(expected)


def test_product_and_dense__agree():
    rng = np.random.default_rng(8)
    matrix = passive_matrix(rng, 9)
    held = tiled(matrix, (3, 4, 2))
    np.testing.assert_array_equal(held.dense(), matrix)
    vectors = rng.normal(size=(9, 2)) + 1j * rng.normal(size=(9, 2))
    np.testing.assert_allclose(held.product(vectors), matrix @ vectors, rtol=1e-13)
    assert held.nbytes == 16 * sum(t.size for t in held.tiles.values())


def test_factorise__singular_matrix_is_a_solve_error():
    with pytest.raises(SolveError, match="cannot be factored"):
        tiled(np.zeros((4, 4)), (2, 2)).factorise()


def test_factorise__not_finite_is_a_solve_error():
    with pytest.raises(SolveError, match="cannot be factored"):
        tiled(np.full((4, 4), np.nan), (2, 2)).factorise()


@pytest.mark.parametrize("dtype", [np.complex128, np.complex64])
def test_astype__shares_nothing_with_the_original(dtype):
    rng = np.random.default_rng(9)
    matrix = passive_matrix(rng, 8)
    held = tiled(matrix, (5, 3), dtype)
    before = held.dense()
    held.astype(dtype).factorise()
    np.testing.assert_array_equal(held.dense(), before)


def test_lowered__keeps_single_precision_only():
    rng = np.random.default_rng(10)
    held = tiled(passive_matrix(rng, 8), (5, 3))
    size = held.nbytes
    assert held.lowered().nbytes == size // 2
    assert held.dtype == np.complex64
