"""Compiled loops between points: exp(-jkR)/R and plane-wave phases, at the rate of a few multiplications each.

Sine and cosine come from polynomials on half a turn after the whole turns are taken off, and the full angle by doubling:
sin and cos calls would keep the loops from being vectorised.  Real and imaginary parts go to separate arrays for the same
reason.  The relative error is below 1e-9.  Nothing here raises; ``points`` holds the slow twins and the checks.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from elbowroom.kernels.accelerate import FAST_JIT_OPTIONS

# sin(pi u)/u and cos(pi u) as polynomials in v = u^2 on [0, 1/4]: interpolation at Chebyshev points, degree 5 and 5,
# errors 2.7e-11 and 2.2e-10 (``points.turn_polynomials`` computes the numbers; a test holds them to it).
S0 = 3.141592653536136
S1 = -5.167712764593076
S2 = 2.55016331793949
S3 = -0.5992521865389764
S4 = 0.08205035022358383
S5 = -0.007028303873201242
C0 = 0.9999999997791551
C1 = -4.934802136928951
C2 = 4.058709154763143
C3 = -1.3352119493899812
C4 = 0.23493706859053826
C5 = -0.024395932087904245


@njit(**FAST_JIT_OPTIONS)
def _half_turn(turns):
    """Return sin and cos of half the angle that is left of ``turns`` after whole turns are taken off."""
    u = turns - np.floor(turns + 0.5)
    v = u * u
    v2 = v * v
    v4 = v2 * v2
    sine = u * ((S0 + v * S1) + v2 * (S2 + v * S3) + v4 * (S4 + v * S5))
    cosine = (C0 + v * C1) + v2 * (C2 + v * C3) + v4 * (C4 + v * C5)
    return sine, cosine


@njit(**FAST_JIT_OPTIONS)
def fill_free(x, y, z, x2, y2, z2, wavenumber, real, imag):
    """Fill (Q, Q2) with exp(-jkR)/R between all points of two sets."""
    turns_per_metre = wavenumber / (2.0 * math.pi)
    for i in range(x.size):
        xi, yi, zi = x[i], y[i], z[i]
        for j in range(x2.size):
            dx, dy, dz = xi - x2[j], yi - y2[j], zi - z2[j]
            r2 = dx * dx + dy * dy + dz * dz
            g = 1.0 / math.sqrt(r2)
            s, c = _half_turn(r2 * g * turns_per_metre)
            gs = 2.0 * g * s
            real[i, j] = g - gs * s
            imag[i, j] = -gs * c


@njit(**FAST_JIT_OPTIONS)
def fill_image(x, y, z, x2, y2, z2, wavenumber, sum_real, sum_imag, difference_real, difference_imag):
    """Fill (Q, Q2) with the sum and the difference of the direct kernel and that of the points mirrored in z = 0."""
    turns_per_metre = wavenumber / (2.0 * math.pi)
    for i in range(x.size):
        xi, yi, zi = x[i], y[i], z[i]
        for j in range(x2.size):
            dx, dy, dz, tz = xi - x2[j], yi - y2[j], zi - z2[j], zi + z2[j]
            flat = dx * dx + dy * dy
            r2 = flat + dz * dz
            g = 1.0 / math.sqrt(r2)
            s, c = _half_turn(r2 * g * turns_per_metre)
            gs = 2.0 * g * s
            re = g - gs * s
            im = -gs * c
            r2 = flat + tz * tz
            g = 1.0 / math.sqrt(r2)
            s, c = _half_turn(r2 * g * turns_per_metre)
            gs = 2.0 * g * s
            re2 = g - gs * s
            im2 = -gs * c
            sum_real[i, j] = re + re2
            sum_imag[i, j] = im + im2
            difference_real[i, j] = re - re2
            difference_imag[i, j] = im - im2


@njit(**FAST_JIT_OPTIONS)
def fill_phases(unit, positions, wavenumber, real, imag):
    """Fill (A, D) with exp(+jk u . r) for unit vectors (D, 3) and positions (A, 3)."""
    turns_per_metre = wavenumber / (2.0 * math.pi)
    for a in range(positions.shape[0]):
        x, y, z = positions[a, 0] * turns_per_metre, positions[a, 1] * turns_per_metre, positions[a, 2] * turns_per_metre
        for d in range(unit.shape[0]):
            s, c = _half_turn(x * unit[d, 0] + y * unit[d, 1] + z * unit[d, 2])
            real[a, d] = 1.0 - 2.0 * s * s
            imag[a, d] = 2.0 * s * c


@njit(**FAST_JIT_OPTIONS)
def add_phased(unit, positions, wavenumber, values, phase_real, phase_imag, total):
    """Add to ``total`` (D, 2) the sum over antennas of exp(+jk u . r_a) values[a].

    ``values`` (A, 2 D) and ``total`` (2 D,) are complex with the component fastest; the phase arrays (D,) are workspace.
    """
    turns_per_metre = wavenumber / (2.0 * math.pi)
    for a in range(positions.shape[0]):
        x, y, z = positions[a, 0] * turns_per_metre, positions[a, 1] * turns_per_metre, positions[a, 2] * turns_per_metre
        for d in range(unit.shape[0]):
            s, c = _half_turn(x * unit[d, 0] + y * unit[d, 1] + z * unit[d, 2])
            phase_real[d] = 1.0 - 2.0 * s * s
            phase_imag[d] = 2.0 * s * c
        for d in range(unit.shape[0]):
            phase = complex(phase_real[d], phase_imag[d])
            total[2 * d] += phase * values[a, 2 * d]
            total[2 * d + 1] += phase * values[a, 2 * d + 1]


def accumulate_phases(unit, positions, wavenumber, values):
    """Return (D, 2): the sum over antennas of exp(+jk u . r_a) values[a], values (A, D, 2) complex."""
    count = unit.shape[0]
    total = np.zeros(2 * count, dtype=np.complex128)
    flat = values.reshape(len(values), 2 * count)
    add_phased(unit, positions, wavenumber, flat, np.empty(count), np.empty(count), total)
    return total.reshape(count, 2)
