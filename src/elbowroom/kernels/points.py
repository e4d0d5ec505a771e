"""Slow twins of the compiled point kernels, and the polynomials they use."""

from __future__ import annotations

import numpy as np

from elbowroom.base.arrays import ComplexArray, FloatArray


def turn_polynomials(degree: int = 5) -> tuple[FloatArray, FloatArray]:
    """Return coefficients in v = u^2 of sin(pi u)/u and cos(pi u) on |u| <= 1/2.

    Interpolation at the Chebyshev points of v in [0, 1/4], which is within a small factor of the best approximation.
    """
    n = degree + 1
    v = (np.cos(np.pi * (np.arange(n) + 0.5) / n) + 1.0) / 8.0
    u = np.sqrt(v)
    fit = np.polynomial.Polynomial.fit
    sine = fit(v, np.sin(np.pi * u) / u, degree, domain=[0.0, 0.25]).convert()
    cosine = fit(v, np.cos(np.pi * u), degree, domain=[0.0, 0.25]).convert()
    return np.asarray(sine.coef, dtype=float), np.asarray(cosine.coef, dtype=float)


def free_kernel(points: FloatArray, points2: FloatArray, wavenumber: float) -> ComplexArray:
    """Return exp(-jkR)/R (Q, Q2) between points (3, Q) and (3, Q2)."""
    distance = np.linalg.norm(points[:, :, None] - points2[:, None, :], axis=0)
    return np.exp(-1j * wavenumber * distance) / distance


def image_kernels(points: FloatArray, points2: FloatArray, wavenumber: float) -> tuple[ComplexArray, ComplexArray]:
    """Return sum and difference (Q, Q2) of the direct kernel and that of the second set mirrored in z = 0."""
    direct = free_kernel(points, points2, wavenumber)
    mirrored = free_kernel(points, points2 * np.array([[1.0], [1.0], [-1.0]]), wavenumber)
    return direct + mirrored, direct - mirrored


def plane_wave_phases(unit: FloatArray, positions: FloatArray, wavenumber: float) -> ComplexArray:
    """Return exp(+jk u . r) (A, D) for unit vectors (D, 3) and positions (A, 3)."""
    return np.exp(1j * wavenumber * (positions @ unit.T))
