"""Infinite planar array of sinusoidal dipoles: Floquet's closed form and the finite sums that tend to it.

Conventions of `references`: exp(+j omega t), filaments along z, reactions in ohm.

References
----------
.. [1] C. M. Linton, "The Green's function for the two-dimensional Helmholtz equation in periodic domains",
   J. Eng. Math. 33, 1998 (the accelerated row sum).
"""

from __future__ import annotations

from math import pi

import numpy as np
from scipy import special

from elbowroom.base.constants import IMPEDANCE_OF_VACUUM
from references import coaxial_tube_impedance, mutual_impedance, refer_impedance, ring_averaged_impedance


def row_sum(transverse, spacing, phase_gradient, *, method="auto"):
    """Return the sum over m != 0 of H0^(2)(kappa |m| d) exp(-j q m d), kappa^2 = ``transverse``, any sign.

    ``"poisson"`` is the mode sum with its logarithm taken out (Linton's accelerated form [1], conjugated for
    exp(+j omega t)); ``"direct"`` is the sum of K0, for evanescent rows; ``"auto"`` picks the faster.
    """
    if method == "auto":
        method = "direct" if transverse * spacing**2 < -1.0 else "poisson"
    m = np.arange(1, 4001)
    if method == "direct":
        decay = np.sqrt(-transverse) * spacing
        return 4j / pi * np.sum(special.k0(decay * m) * np.cos(phase_gradient * spacing * m))
    step = 2.0 * pi / spacing
    pairs = _inverse_normal(transverse, phase_gradient + step * m) + _inverse_normal(transverse, phase_gradient - step * m)
    # Asymptotic pair, j (2/g + (2 q^2 + kappa^2)/g^3), g = step m: the first part cancels a logarithm, the
    # second is summed by zeta(3); what is left falls as m^-5.
    second = 1j * (2.0 * phase_gradient**2 + transverse) / step**3
    rest = np.sum(pairs - 2j / (step * m) - second / m**3) + second * special.zeta(3.0)
    modes = 2.0 / spacing * (_inverse_normal(transverse, phase_gradient) + rest)
    kappa = np.sqrt(complex(transverse)) if transverse > 0.0 else -1j * np.sqrt(-transverse)
    return modes - 1.0 + 2j / pi * (np.euler_gamma + np.log(kappa * spacing / (4.0 * pi)))


def _inverse_normal(transverse, along):
    """Return 1/k_n, k_n^2 = kappa^2 - along^2, for waves that leave or decay as exp(-j k_n y)."""
    square = transverse - np.asarray(along) ** 2
    return np.where(square < 0.0, 1j, 1.0) / np.sqrt(np.abs(square))


def floquet_scan_impedance(
    half_length,
    radius,
    spacing_x,
    spacing_z,
    wavenumber,
    scan_kx=0.0,
    scan_kz=0.0,
    *,
    reference="maximum",
    self_kernel="filament",
    coupling="axis",
    n_modes=None,
):
    """Return the scan impedance per element of an infinite planar array of z-directed sinusoidal dipoles.

    Element (m, n) stands at x = m dx, z = n dz in free space and carries exp(-j(kx m dx + kz n dz)).  With
    exp(-jkR)/R = (1/2j) integral of H0^(2)(kappa rho) exp(-j beta z) d beta and Poisson's formula along z,

        Z = eta/(4 k dz) sum_n (k^2 - b_n^2) |S(b_n)|^2 (own_n + row_n),    b_n = kz + 2 pi n/dz,

    S the spectrum of the sinusoid, row_n the sum over the other columns (`row_sum`, a mode sum over m) and
    own_n the own column: H0^(2)(kappa_n a), or J0 H0^(2) for the exact kernel.

    Parameters
    ----------
    half_length, radius : float
        Of the dipoles [m].
    spacing_x, spacing_z : float
        Lattice [m]; spacing_z at least the length.
    wavenumber : float
        k [rad/m].
    scan_kx, scan_kz : float
        Phase gradients [rad/m].
    reference : {"maximum", "feed"}
        As in `mutual_impedance`.
    self_kernel : {"filament", "exact"}
        Own column (self and collinear neighbours): current on the axis observed at the radius, or the exact
        kernel.
    coupling : {"axis", "ring"}
        Other columns: axis to axis, or averaged over both rings (a factor J0(kappa_n a)^2).
    n_modes : int, optional
        Modes along z on each side; default 7 dz/a for the filament, 200,000 for the exact kernel.

    Returns
    -------
    complex
        Scan impedance [ohm]: the impedance of an element while all are driven with this phase.
    """
    k = wavenumber
    exact = self_kernel == "exact"
    count = n_modes or (200_000 if exact else int(7.0 * spacing_z / radius) + 20)
    beta = scan_kz + 2.0 * pi / spacing_z * np.arange(-count, count + 1)
    transverse = k**2 - beta**2
    # (k^2 - b^2) S^2 = 4 k^2 (cos b h - cos k h)^2/(k^2 - b^2)
    strength = 4.0 * k**2 * (np.cos(beta * half_length) - np.cos(k * half_length)) ** 2 / transverse
    kappa_a = np.sqrt(np.abs(transverse)) * radius
    own = np.empty(beta.shape, dtype=complex)
    travels = transverse > 0.0
    own[travels] = special.hankel2(0, kappa_a[travels])
    decays = kappa_a[~travels]
    if exact:
        own[travels] *= special.j0(kappa_a[travels])
        own[~travels] = 2j / pi * special.i0e(decays) * special.k0e(decays)
    else:
        own[~travels] = 2j / pi * special.k0(decays)
    # Rows that decay by exp(-40) over one spacing are nothing.
    for i in np.flatnonzero(transverse * spacing_x**2 > -1600.0):
        row = row_sum(transverse[i], spacing_x, scan_kx)
        if coupling == "ring":
            row *= (special.j0 if travels[i] else special.i0)(kappa_a[i]) ** 2
        own[i] += row
    total = IMPEDANCE_OF_VACUUM / (4.0 * k * spacing_z) * np.sum(strength * own)
    if exact:
        # Tail of I0 K0 ~ 1/(2 kappa a), the oscillation of the squared cosine averaged out.
        edge = 2.0 * pi / spacing_z * (count + 0.5)
        mean_square = 0.5 + np.cos(k * half_length) ** 2
        tail = -8j * k**2 * mean_square / (2.0 * pi * radius) * spacing_z / (2.0 * pi) / (2.0 * edge**2) * 2.0
        total += IMPEDANCE_OF_VACUUM / (4.0 * k * spacing_z) * tail
    return complex(refer_impedance(total, half_length, half_length, k, reference))


def windowed_array_sum(
    n,
    half_length,
    radius,
    spacing_x,
    spacing_z,
    wavenumber,
    scan_kx=0.0,
    scan_kz=0.0,
    *,
    reference="maximum",
    self_kernel="filament",
    coupling="axis",
    taper_power=4,
):
    """Return the tapered finite sum of mutual impedances that tends to `floquet_scan_impedance`.

    Elements -n..n in x and z, weighted by cos(pi m/(2(n+1)))^taper_power and the same along z.  The deviation
    is (taper_power pi^2/8)/(n+1)^2 times the second derivatives of the scan impedance by the phases, so it
    falls with the second power of size once the ripple from the edges, which a higher power softens, is below
    it.

    Parameters
    ----------
    n : int
        Elements on each side of the centre.
    half_length, radius, spacing_x, spacing_z, wavenumber, scan_kx, scan_kz, reference, self_kernel, coupling
        As in `floquet_scan_impedance`.
    taper_power : int
        Even power of the cosine.
    """
    k = wavenumber
    index = np.arange(n + 1)
    taper = np.cos(0.5 * pi * index / (n + 1)) ** taper_power
    both = np.where(index == 0, 1.0, 2.0)
    factor_x = both * taper * np.cos(scan_kx * spacing_x * index)
    factor_z = both * taper * np.cos(scan_kz * spacing_z * index)
    if self_kernel == "exact":
        heights = index * spacing_z
        column = np.array([coaxial_tube_impedance(half_length, half_length, z, radius, radius, k) for z in heights])
    else:
        column = mutual_impedance(half_length, half_length, radius, index * spacing_z, k)
    distance, offset = np.meshgrid(index[1:] * spacing_x, index * spacing_z, indexing="ij")
    if coupling == "ring":
        others = ring_averaged_impedance(half_length, half_length, distance, offset, radius, radius, k)
    else:
        others = mutual_impedance(half_length, half_length, distance, offset, k)
    total = factor_x[0] * np.sum(factor_z * column) + factor_x[1:] @ (others @ factor_z)
    return complex(refer_impedance(total, half_length, half_length, k, reference))
