"""Theory of parallel dipoles that the field solver is held against; lengths in wavelengths, nothing taken from the program.

- `parasitic_pair`: a half-wave dipole beside another one that is not fed, both without thickness
- `three_term_array`: rows of dipoles with three functions of current each, the theory that tables of such arrays were made with
"""

from __future__ import annotations

from math import pi

import numpy as np
from numpy.polynomial.legendre import leggauss

import references as ref
from elbowroom.base.constants import IMPEDANCE_OF_VACUUM

K = 2.0 * pi


def parasitic_pair(distance, parasite_reactance):
    """Return impedance [ohm], directivity over the parasite and behind, and field behind over field in front.

    The two half-wave dipoles carry sinusoids, I2 = -I1 Z12 / Z22, so that

        Z = Z11 - Z12^2 / Z22,    field(s) = 1 - Z12 / Z22 exp(j s k d),  s = 1 towards the parasite and -1 away from it.

    G. H. Brown, "Directional antennas", Proc. IRE 25, 1937; J. D. Kraus, Antennas, chapter on arrays of dipoles (from memory), on
    P. S. Carter's impedances of 1932.

    Parameters
    ----------
    distance : float
        Of the two [wavelengths].
    parasite_reactance : float
        The imaginary part of Z22, tuned as one likes [ohm].
    """
    own, mutual = ref.thin_dipole_impedance(0.25, K), ref.mutual_impedance(0.25, 0.25, distance, 0.0, K)
    ratio = -mutual / complex(own.real, parasite_reactance)
    impedance = own + ratio * mutual
    towards, away = (1.0 + ratio * np.exp(1j * s * K * distance) for s in (1.0, -1.0))
    scale = ref.sinusoid_directivity(0.25, K) * own.real / impedance.real
    return impedance, scale * abs(towards) ** 2, scale * abs(away) ** 2, away / towards


def _panels(cuts, count):
    """Return Gauss points and weights between successive cuts."""
    x, w = leggauss(count)
    low, half = np.asarray(cuts)[:-1, None], 0.5 * np.diff(cuts)[:, None]
    return (low + half * (x + 1.0)).ravel(), (half * w).ravel()


def _shapes(half_length, z, terms):
    """Return the first functions of the current (terms, D), zero at the ends, and their slopes."""
    h, a, side = half_length, np.abs(z), np.sign(z)
    values = [np.sin(K * (h - a)), np.cos(K * z) - np.cos(K * h), np.cos(0.5 * K * z) - np.cos(0.5 * K * h)]
    slopes = [-side * K * np.cos(K * (h - a)), -K * np.sin(K * z), -0.5 * K * np.sin(0.5 * K * z)]
    return np.array(values[:terms]), np.array(slopes[:terms])


def _block(half, half2, distance, terms):
    """Return the reactions (terms, terms) [ohm] of two parallel filaments side by side."""
    points, weights = _panels(half * np.array([0.0, 0.25, 0.5, 0.75, 0.9, 0.97, 1.0]), 8)
    values, slopes = _shapes(half, points, terms)
    away = distance * np.concatenate([[0.0], 2.0 ** np.arange(-1.0, 10.0)])
    total = np.zeros((terms, terms), dtype=complex)
    for i, z in enumerate(points):
        # Panels of the second filament shrink towards the point nearest to this one.
        cuts = np.unique(np.round(np.concatenate([z + away, z - away, [-half2, 0.0, half2]]), 14))
        there, w = _panels(cuts[np.abs(cuts) <= half2 * (1.0 + 1e-12)], 8)
        r = np.hypot(there - z, distance)
        kernel = w * np.exp(-1j * K * r) / r
        values2, slopes2 = _shapes(half2, there, terms)
        # By symmetry the lower half of the first filament gives the same again.
        total += 2.0 * weights[i] * (np.outer(values[:, i], values2 @ kernel) - np.outer(slopes[:, i], slopes2 @ kernel) / K**2)
    return 1j * K * IMPEDANCE_OF_VACUUM / (4.0 * pi) * total


def three_term_array(lengths, places, radius, *, fed=1, terms=3):
    """Return input impedance [ohm] and directivities along and against the row of parallel dipoles, one fed at a point.

    Every current is a sum of sin k(h - |z|), cos kz - cos kh and cos(kz/2) - cos(kh/2) on a filament, whose field is taken at
    the distance of its radius: the functions of R. W. P. King, R. B. Mack and S. S. Sandler, Arrays of Cylindrical Dipoles, 1968,
    chapter 6 (from memory), here with coefficients by Galerkin's method.
    """
    half = 0.5 * np.asarray(lengths, dtype=float)
    n = half.size
    matrix = np.zeros((n, terms, n, terms), dtype=complex)
    known = {}
    for i in range(n):
        for j in range(i, n):
            key = (half[i], half[j], round(abs(places[i] - places[j]), 9) or radius)
            if key not in known:
                known[key] = _block(*key, terms)
            matrix[i, :, j], matrix[j, :, i] = known[key], known[key].T
    at_feed = _shapes(half[fed], np.zeros(1), terms)[0][:, 0]
    drive = np.zeros((n, terms))
    drive[fed] = at_feed
    currents = np.linalg.solve(matrix.reshape(n * terms, -1), drive.ravel()).reshape(n, terms)
    admittance = at_feed @ currents[fed]
    moments = []
    for h, current in zip(half, currents, strict=True):
        z, w = _panels([-h, 0.0, h], 16)
        moments.append(current @ _shapes(h, z, terms)[0] @ w)
    fields = [np.sum(moments * np.exp(1j * s * K * np.asarray(places))) for s in (1.0, -1.0)]
    front, back = (IMPEDANCE_OF_VACUUM * K**2 / (4.0 * pi) * abs(f) ** 2 / admittance.real for f in fields)
    return 1.0 / admittance, front, back
