"""The local functions of the current on an element, and their charge, in Legendre polynomials.

Local function 0 is (1 - u)/2, function 1 is (1 + u)/2, and function n >= 2 is the integrated Legendre polynomial
(P_n(u) - P_{n-2}(u)) / sqrt(2 (2n - 1)), which vanishes at both ends and whose derivatives are orthonormal: raising the
order adds functions and changes none.
"""

from __future__ import annotations

from functools import cache

import numpy as np

from elbowroom.base.arrays import FloatArray


@cache
def current_coefficients(order: int) -> FloatArray:
    """Return (order+1, order+1): Legendre coefficients of each local function."""
    table = np.zeros((order + 1, order + 1))
    table[0, :2] = 0.5, -0.5
    table[1, :2] = 0.5, 0.5
    for n in range(2, order + 1):
        scale = 1.0 / np.sqrt(2.0 * (2 * n - 1))
        table[n, n], table[n, n - 2] = scale, -scale
    return table


@cache
def slope_coefficients(order: int) -> FloatArray:
    """Return (order+1, order+1): Legendre coefficients of d/du of each local function, u in [-1, 1]."""
    table = np.zeros((order + 1, order + 1))
    table[0, 0], table[1, 0] = -0.5, 0.5
    for n in range(2, order + 1):
        # P_n' - P_{n-2}' = (2n - 1) P_{n-1}
        table[n, n - 1] = np.sqrt(0.5 * (2 * n - 1))
    return table


@cache
def overlap_matrix(order: int) -> FloatArray:
    """Return (order+1, order+1): integrals over u in [-1, 1] of products of two local functions."""
    table = current_coefficients(order)
    return table @ np.diag(2.0 / (2.0 * np.arange(order + 1) + 1.0)) @ table.T


def local_values(order: int, u: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return the local functions and their u-derivatives at points u.

    Parameters
    ----------
    order : int
        Degree p.
    u : float64 (Q,)
        Points in [-1, 1].

    Returns
    -------
    values, slopes : float64 (Q, p+1)
    """
    legendre = np.polynomial.legendre.legvander(np.asarray(u, dtype=float), order)
    return legendre @ current_coefficients(order).T, legendre @ slope_coefficients(order).T
