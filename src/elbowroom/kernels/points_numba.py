"""Compiled loops between points: exp(-jkR)/R and plane-wave phases, at the rate of a few multiplications each.

Sine and cosine come from polynomials on half a turn after the whole turns are taken off, and the full angle by doubling:
sin and cos calls would keep the loops from being vectorised.  Real and imaginary parts go to separate arrays for the same
reason.  The relative error of kernels is below 1e-9, that of phases below 1e-11.  Nothing here raises; ``points`` holds the
slow twins and the checks.
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


# The same of degree 6, errors 7.8e-14 and 7.5e-13, for phases of plane waves: patterns then differ from what waves drive by no
# more than the solution does, and one phase serves many currents.
PHASE_S = (
    3.1415926535896377, -5.167712779988121, 2.5501640359103175, -0.599264433968651, 0.08214479478752049, -0.0073640055089031434,
    0.0004474917086385203,
)  # fmt: skip
PHASE_C = (
    0.9999999999992488, -4.934802200249862, 4.058712107537296, -1.3352623152560823, 0.23532543653373605, -0.025776316206473058,
    0.0018399891145570069,
)  # fmt: skip


@njit(**FAST_JIT_OPTIONS)
def _half_turn(turns):
    """Return sin and cos of half the angle that is left of ``turns`` after whole turns are taken off."""
    u = turns - np.floor(turns + 0.5)
    v = u * u
    v2 = v * v
    v4 = v2 * v2
    s, c = PHASE_S, PHASE_C
    sine = u * ((s[0] + v * s[1]) + v2 * (s[2] + v * s[3]) + v4 * ((s[4] + v * s[5]) + v2 * s[6]))
    cosine = (c[0] + v * c[1]) + v2 * (c[2] + v * c[3]) + v4 * ((c[4] + v * c[5]) + v2 * c[6])
    return sine, cosine


@njit(**FAST_JIT_OPTIONS)
def _rest_of_turn(turns):
    """Return what is left of ``turns`` after whole turns are taken off, in [-1/2, 1/2]."""
    return turns - np.rint(turns)


@njit(**FAST_JIT_OPTIONS)
def _wave(inverse, rest):
    """Return real and imaginary part of exp(-jkR)/R from 1/R and the rest of the turn."""
    v = rest * rest
    s = rest * (S0 + v * (S1 + v * (S2 + v * (S3 + v * (S4 + v * S5)))))
    c = C0 + v * (C1 + v * (C2 + v * (C3 + v * (C4 + v * C5))))
    twice = 2.0 * inverse * s
    return inverse - twice * s, -twice * c


# The loops below are pipelined by hand: while the distances of one row are worked out (square root and division, long to
# wait for), the polynomials of the row before are evaluated from what was left in the output arrays.  One sample after
# another, the processor waits for the whole chain; so arranged, it is as fast as its divider (measured: 1.7 times faster).


@njit(**FAST_JIT_OPTIONS)
def _free_first(x, y, z, x2, y2, z2, turns_per_metre, inverse, rest):
    for j in range(x2.size):
        dx, dy, dz = x - x2[j], y - y2[j], z - z2[j]
        r = math.sqrt(dx * dx + dy * dy + dz * dz)
        inverse[j] = 1.0 / r
        rest[j] = _rest_of_turn(r * turns_per_metre)


@njit(**FAST_JIT_OPTIONS)
def _free_both(x, y, z, x2, y2, z2, turns_per_metre, real, imag, next_inverse, next_rest):
    for j in range(x2.size):
        dx, dy, dz = x - x2[j], y - y2[j], z - z2[j]
        r = math.sqrt(dx * dx + dy * dy + dz * dz)
        re, im = _wave(real[j], imag[j])
        next_inverse[j] = 1.0 / r
        next_rest[j] = _rest_of_turn(r * turns_per_metre)
        real[j] = re
        imag[j] = im


@njit(**FAST_JIT_OPTIONS)
def _free_last(real, imag):
    for j in range(real.size):
        real[j], imag[j] = _wave(real[j], imag[j])


@njit(**FAST_JIT_OPTIONS)
def fill_free(x, y, z, x2, y2, z2, wavenumber, real, imag):
    """Fill (Q, Q2) with exp(-jkR)/R between all points of two sets; long second sets are fastest."""
    t = wavenumber / (2.0 * math.pi)
    n = x.size
    _free_first(x[0], y[0], z[0], x2, y2, z2, t, real[0], imag[0])
    for i in range(n - 1):
        _free_both(x[i + 1], y[i + 1], z[i + 1], x2, y2, z2, t, real[i], imag[i], real[i + 1], imag[i + 1])
    _free_last(real[n - 1], imag[n - 1])


@njit(**FAST_JIT_OPTIONS)
def _image_first(x, y, z, x2, y2, z2, turns_per_metre, inverse, rest, inverse2, rest2):
    for j in range(x2.size):
        dx, dy, dz, tz = x - x2[j], y - y2[j], z - z2[j], z + z2[j]
        flat = dx * dx + dy * dy
        r, r2 = math.sqrt(flat + dz * dz), math.sqrt(flat + tz * tz)
        inverse[j] = 1.0 / r
        rest[j] = _rest_of_turn(r * turns_per_metre)
        inverse2[j] = 1.0 / r2
        rest2[j] = _rest_of_turn(r2 * turns_per_metre)


@njit(**FAST_JIT_OPTIONS)
def _image_both(x, y, z, x2, y2, z2, turns_per_metre, a_real, a_imag, b_real, b_imag, next_a, next_a_rest, next_b, next_b_rest):
    for j in range(x2.size):
        dx, dy, dz, tz = x - x2[j], y - y2[j], z - z2[j], z + z2[j]
        flat = dx * dx + dy * dy
        r, r2 = math.sqrt(flat + dz * dz), math.sqrt(flat + tz * tz)
        re, im = _wave(a_real[j], a_imag[j])
        re2, im2 = _wave(b_real[j], b_imag[j])
        next_a[j] = 1.0 / r
        next_a_rest[j] = _rest_of_turn(r * turns_per_metre)
        next_b[j] = 1.0 / r2
        next_b_rest[j] = _rest_of_turn(r2 * turns_per_metre)
        a_real[j] = re + re2
        a_imag[j] = im + im2
        b_real[j] = re - re2
        b_imag[j] = im - im2


@njit(**FAST_JIT_OPTIONS)
def _image_last(a_real, a_imag, b_real, b_imag):
    for j in range(a_real.size):
        re, im = _wave(a_real[j], a_imag[j])
        re2, im2 = _wave(b_real[j], b_imag[j])
        a_real[j] = re + re2
        a_imag[j] = im + im2
        b_real[j] = re - re2
        b_imag[j] = im - im2


@njit(**FAST_JIT_OPTIONS)
def fill_image(x, y, z, x2, y2, z2, wavenumber, sum_real, sum_imag, difference_real, difference_imag):
    """Fill (Q, Q2) with the sum and the difference of the direct kernel and that of the points mirrored in z = 0."""
    t = wavenumber / (2.0 * math.pi)
    n = x.size
    _image_first(x[0], y[0], z[0], x2, y2, z2, t, sum_real[0], sum_imag[0], difference_real[0], difference_imag[0])
    for i in range(n - 1):
        _image_both(
            x[i + 1], y[i + 1], z[i + 1], x2, y2, z2, t,
            sum_real[i], sum_imag[i], difference_real[i], difference_imag[i],
            sum_real[i + 1], sum_imag[i + 1], difference_real[i + 1], difference_imag[i + 1],
        )  # fmt: skip
    _image_last(sum_real[n - 1], sum_imag[n - 1], difference_real[n - 1], difference_imag[n - 1])


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
